"""The page: one self-contained HTML file beside the dataset, and its figures as files."""

from __future__ import annotations

import base64
import os
from pathlib import Path
from typing import Any

from jinja2 import Environment, PackageLoader, StrictUndefined
from markupsafe import Markup

from tnquench.dataset.reader import Run, open_run
from tnquench.errors import InputError
from tnquench.report.canvas import Panel, render
from tnquench.report.figures import Chapter, chapters, comparisons
from tnquench.report.models import words_of
from tnquench.report.provenance import event_remarks, event_rows, notices, provenance_rows
from tnquench.report.question import absence, question, settings_of, subject
from tnquench.report.references import (
    CUT_KEYS,
    EULER_KEYS,
    QUANTUM_KEYS,
    STRETCH_KEYS,
    TROTTER_KEYS,
    citations,
)
from tnquench.report.stretch import stretch_sentence
from tnquench.report.tables import summary
from tnquench.report.units import units_of
from tnquench.report.verdict import headline, remarks
from tnquench.report.wording import unbroken

REPORT_NAME = "report.html"
FIGURE_FOLDER = "figures"

#: What the page is, by whether it has the chain's dynamics and a prediction.
KINDS = {
    (True, True): "Hydrodynamics of a quantum chain, judged against its exact dynamics",
    (True, False): "Exact dynamics of a quantum chain, with its error",
    (False, True): "Hydrodynamic prediction for a quantum chain",
    (False, False): "An empty dataset",
}


def write_report(folder: Path | str) -> Path:
    """Write the report of the dataset in `folder` and return its path, FOLDER/report.html.

    folder : holds run.h5 (or is that file); figures go to FOLDER/figures, each as SVG and PNG
    Raises InputError if the dataset cannot be read or the folder cannot be written.
    """
    run = open_run(folder)
    target = run.path.parent / REPORT_NAME
    figures = run.path.parent / FIGURE_FOLDER
    try:
        figures.mkdir(exist_ok=True)
        page = render_page(run, figures)
        unfinished = target.with_name(f".{REPORT_NAME}.{os.getpid()}")
        unfinished.write_text(page, encoding="utf-8")
        unfinished.replace(target)
    except OSError as error:
        problem = f"the report cannot be written: {error.strerror or error}"
        raise InputError(str(run.path.parent), [problem], consequence="") from error
    return target


def render_page(run: Run, figures: Path) -> str:
    """Return the page as HTML text and store every figure in folder `figures`."""
    drawn, zero = comparisons(run)
    settings = settings_of(run)
    environment = Environment(
        loader=PackageLoader("tnquench", "report"),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    return environment.get_template("page.html").render(
        title=run.provenance.get("title") or "Untitled",
        question=[(heading, unbroken(text)) for heading, text in question(run, settings)],
        kind=KINDS[(bool(len(run.quantum)), bool(run.hydrodynamics))],
        verdict=unbroken(headline(drawn, about=subject(settings), absence=absence(run))),
        study=unbroken(stretch_sentence(run, drawn, about=subject(settings))),
        notices=[unbroken(notice) for notice in notices(run)],
        remarks=[*remarks(zero), *event_remarks(run)],
        summary=summary(drawn),
        estimated=bool(run.companions),
        compared=any(field.deviation is not None for field in drawn),
        windowed=any(field.light_cone is not None for field in drawn),
        chapters=[_chapter(chapter, figures) for chapter in chapters(run, drawn)],
        events=event_rows(run),
        time_unit=units_of(settings).symbol("1/energy"),
        config=str(run.provenance.get("config_toml", "")),
        provenance=provenance_rows(run, units_of(settings)),
        references=_references(run, settings),
        style=Markup(environment.get_template("page.css").render()),
    )


def _chapter(chapter: Chapter, figures: Path) -> dict[str, Any]:
    return {
        "anchor": chapter.anchor,
        "heading": chapter.heading,
        "note": chapter.note,
        "table": chapter.table,
        "plates": [
            {
                "heading": plate.heading,
                "caption": plate.caption,
                "columns": plate.columns,
                "pictures": [_picture(panel, figures) for panel in plate.panels],
            }
            for plate in chapter.plates
        ],
    }


def _picture(panel: Panel, figures: Path) -> dict[str, str]:
    encoded = base64.b64encode(render(panel, figures)).decode("ascii")
    return {"source": f"data:image/svg+xml;base64,{encoded}", "description": panel.description}


def _references(run: Run, settings: dict[str, Any]) -> list[str]:
    words = words_of(settings)
    keys: list[str] = []
    evolution = settings.get("evolution", {})
    if len(run.quantum):
        keys += [*words.references, *QUANTUM_KEYS]
        keys += TROTTER_KEYS.get(evolution.get("trotter_order", 4), ())
        keys += CUT_KEYS.get(evolution.get("cut", "subspace"), ())
    keys += STRETCH_KEYS if len(run.stretch) else ()
    for theory in run.hydrodynamics.values():
        keys += [*EULER_KEYS, *words.solution]
        named = theory.attrs.get("references", [])
        keys += named if isinstance(named, list) else [str(named)]
    return citations(keys)
