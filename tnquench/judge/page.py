"""The judgement as one self-contained HTML page, in the style of the report."""

from __future__ import annotations

import base64
import json
import os
from pathlib import Path
from tempfile import TemporaryDirectory
from typing import Any

from jinja2 import ChoiceLoader, Environment, PackageLoader, StrictUndefined
from markupsafe import Markup

from tnquench.errors import InputError
from tnquench.judge.document import as_dict
from tnquench.judge.figures import note, plate
from tnquench.judge.judgement import Judgement, ObservableJudgement
from tnquench.judge.sentence import (
    allowed_in_words,
    conservation_lines,
    listed,
    points_line,
    sentence,
    standing,
)
from tnquench.judge.tables import summary_rows, window_rows, worst_rows
from tnquench.report.canvas import render
from tnquench.report.wording import capitalised, unbroken

PAGE_NAME, NUMBERS_NAME, FIGURE_FOLDER = "judgement.html", "judgement.json", "figures"


def write_page(judgement: Judgement, file: Path | str) -> Path:
    """Write a judgement as one HTML page, pictures inside, and return its path.

    Raises InputError if the file cannot be written.
    """
    target = Path(file)
    try:
        with TemporaryDirectory() as pictures:
            _write(target, render_page(judgement, Path(pictures)))
    except OSError as error:
        raise _unwritable(target, error) from error
    return target


def write_judgement(judgement: Judgement, folder: Path | str) -> Path:
    """Write page, numbers and pictures to a folder: judgement.html, judgement.json, figures/.

    Returns the path of the page; raises InputError if the folder cannot be written.
    """
    target = Path(folder)
    try:
        (target / FIGURE_FOLDER).mkdir(parents=True, exist_ok=True)
        _write(target / PAGE_NAME, render_page(judgement, target / FIGURE_FOLDER))
        _write(target / NUMBERS_NAME, json.dumps(as_dict(judgement), indent=2, allow_nan=False) + "\n")
    except OSError as error:
        raise _unwritable(target, error) from error
    return target / PAGE_NAME


def render_page(judgement: Judgement, figures: Path) -> str:
    """Return the page as HTML text and store every picture in folder `figures`."""
    environment = Environment(
        loader=ChoiceLoader([PackageLoader("tnquench", "judge"), PackageLoader("tnquench", "report")]),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    style = ChoiceLoader([PackageLoader("tnquench", "report")]).load(environment, "page.css").render()
    return environment.get_template("page.html").render(
        title=f"{Path(judgement.candidate.name).name} against {judgement.title}",
        question=[
            ("Candidate", judgement.candidate.name),
            ("Reference", f"{judgement.title} ({judgement.against})"),
            ("Allowed", capitalised(allowed_in_words(judgement))),
        ],
        passed=judgement.passed,
        verdict=unbroken(sentence(judgement)),
        remarks=[f"{capitalised(remark)}." for remark in judgement.remarks],
        summary=summary_rows(judgement),
        points=[f"{capitalised(points_line(each))}." for each in judgement.observables],
        note=note(judgement),
        chapters=[_chapter(judgement, each, figures) for each in judgement.observables],
        conservation=[unbroken(line) for line in conservation_lines(judgement)],
        style=Markup(style),
    )


def _chapter(judgement: Judgement, observable: ObservableJudgement, figures: Path) -> dict[str, Any]:
    said = [standing(comparison, level) for level, comparison in observable.found.levels.items()]
    return {
        "heading": observable.said,
        "standings": f"{capitalised(listed(said))}." if said else "",
        "pictures": [
            {
                "source": "data:image/svg+xml;base64,"
                + base64.b64encode(render(panel, figures)).decode("ascii"),
                "description": panel.description,
            }
            for panel in plate(judgement, observable).panels
        ],
        "windows": window_rows(judgement, observable),
        "worst": worst_rows(observable) if observable.found.worst else [],
    }


def _write(target: Path, text: str) -> None:
    unfinished = target.with_name(f".{target.name}.{os.getpid()}")
    unfinished.write_text(text, encoding="utf-8")
    unfinished.replace(target)


def _unwritable(target: Path, error: OSError) -> InputError:
    problem = f"the judgement cannot be written: {error.strerror or error}"
    return InputError(str(target), [problem], consequence="")
