"""The report holds every section, numbers that agree with the arrays, and loads nothing.

Expected numbers are recomputed here from the dataset with numpy alone.
"""

from __future__ import annotations

import base64
import re
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from tests.report_cases import (
    SITES,
    Page,
    mismatched_start,
    no_magnetisation,
    no_prediction,
    numbers_in,
    page_of,
    prediction_alone,
    window,
    written,
)
from tests.synthetic_run import NAMES
from tnquench.budget.honesty import MEASURED, sentence
from tnquench.conventions import OBSERVABLE_PLACES
from tnquench.dataset.reader import Run, open_run
from tnquench.errors import InputError
from tnquench.report import page as page_module
from tnquench.report import sources as report_sources
from tnquench.report.comparison import Comparison
from tnquench.report.figures import Chapter, chapters, comparisons, figure
from tnquench.report.page import write_report
from tnquench.report.references import EULER_KEYS, QUANTUM_KEYS, REFERENCES, TROTTER_KEYS, citations
from tnquench.report.verdict import headline

SECTIONS = (
    "question",
    "verdict",
    "summary",
    "maps",
    "cuts",
    "start",
    "budget",
    "growth",
    "conservation",
    "events",
    "settings",
    "references",
)


@pytest.fixture(scope="module")
def full(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, Page, Run]:
    folder = written(tmp_path_factory.mktemp("full"), mismatched_start)
    return folder, page_of(folder), open_run(folder)


def test_every_section_of_a_full_run_in_order(full: tuple[Path, Page, Run]) -> None:
    _, page, run = full
    assert headline(comparisons(run)[0]) in page.texts["verdict"]
    assert tuple(page.sections) == SECTIONS
    assert all(page.texts[name].strip() for name in SECTIONS)


def test_every_picture_is_inside_the_page_and_stored_beside_it(full: tuple[Path, Page, Run]) -> None:
    folder, page, _ = full
    files = {path.name for path in (folder / "figures").iterdir()}
    vectors = {name for name in files if name.endswith(".svg")}
    assert {name.replace(".svg", ".png") for name in vectors} == files - vectors
    assert len(page.pictures) == len(vectors)
    embedded = {base64.b64decode(source.partition(",")[2]) for source in page.pictures}
    assert embedded == {(folder / "figures" / name).read_bytes() for name in vectors}
    assert all((folder / "figures" / name).read_bytes()[:4] == b"\x89PNG" for name in files - vectors)
    for name in NAMES:
        assert {f"{name}_map_{side}.svg" for side in ("quantum", "prediction", "deviation")} <= vectors
        assert {f"{name}_budget.svg", f"{name}_cut_4.svg"} <= vectors


def test_nothing_is_loaded_and_nothing_runs(full: tuple[Path, Page, Run]) -> None:
    folder, page, _ = full
    assert not {tag for tag, _ in page.tags} & {"script", "link", "iframe", "object", "embed", "base"}
    for tag, attributes in page.tags:
        for name, value in attributes.items():
            assert not name.startswith("on")
            if name in ("src", "href", "srcset", "data", "action", "poster"):
                assert (value or "").startswith("data:"), f"{tag} loads {value}"
    markup = (folder / "report.html").read_text(encoding="utf-8")
    assert "@import" not in markup
    assert "url(" not in markup
    assert "http" not in re.sub(r"base64,[A-Za-z0-9+/=]+", "", markup)


def test_error_budget_cites_the_study_of_exactly_solved_cases(
    full: tuple[Path, Page, Run], tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """With the command that measures it, as text; a run without measured errors has nothing to cite."""
    _, page, _ = full
    assert sentence().removesuffix(".") in page.texts["budget"]
    assert MEASURED.command in page.texts["budget"]
    monkeypatch.setattr(report_sources, "MEASURED", replace(MEASURED, command="<b>study</b>"))
    monkeypatch.setattr(page_module, "chapters", without_pictures)
    assert "<b>study</b>" in page_of(written(tmp_path)).texts["budget"]
    assert "<b>study" not in (tmp_path / "report.html").read_text(encoding="utf-8")
    alone = page_of(written(tmp_path / "alone", companions=False))
    assert "exactly solved" not in " ".join(alone.texts.values())


def without_pictures(run: Run, fields: list[Comparison]) -> list[Chapter]:
    return [replace(chapter, plates=()) for chapter in chapters(run, fields)]


def test_every_picture_is_described(full: tuple[Path, Page, Run]) -> None:
    _, page, _ = full
    described = [attributes.get("alt") for tag, attributes in page.tags if tag == "img"]
    assert all(described)
    assert len(set(described)) == len(described)


@pytest.mark.parametrize("name", NAMES)
def test_summary_agrees_with_the_arrays(full: tuple[Path, Page, Run], name: str) -> None:
    _, page, run = full
    place = OBSERVABLE_PLACES[name]
    budget, inside = run.budget[name], window(run, place)
    deviation = np.where(inside, budget["euler_deviation"].values, 0.0)
    row = summary_row(page, name)
    at = np.unravel_index(np.argmax(np.abs(deviation)), deviation.shape)
    assert numbers_in(row[0])[0] == pytest.approx(deviation[at], rel=0.06)
    assert numbers_in(row[0])[-1] == run.coordinates["time"].values[at[0]]
    assert numbers_in(row[1])[0] == pytest.approx(budget["numerical"].values[at], rel=0.35)
    assert numbers_in(row[2])[0] == pytest.approx(budget["bound"].values[at], rel=0.35)
    assert numbers_in(row[3])[0] == pytest.approx(deviation[-1][np.argmax(np.abs(deviation[-1]))], rel=0.06)
    resolved = (budget["euler_resolved"].values == 1) & inside
    assert numbers_in(row[4])[0] == run.coordinates["time"].values[resolved.any(axis=1)][0]
    assert numbers_in(row[5])[0] == pytest.approx(100 * resolved.sum() / inside.sum(), abs=0.51)
    assert row[6] == "truncation"


def summary_row(page: Page, name: str) -> list[str]:
    """Cells of the summary in the row of one observable."""
    words = {"charge_density": "magnetisation", "charge_current": "spin current"}
    lines = [line.strip() for line in page.texts["summary"].splitlines() if line.strip()]
    start = lines.index(words.get(name, name.replace("_", " ")))
    return lines[start + 1 : start + 8]


def test_start_mismatch_is_told_apart(full: tuple[Path, Page, Run]) -> None:
    _, page, run = full
    size = np.abs(run.budget["energy_density"]["euler_deviation"].values[0]).max()
    said = page.texts["start"].partition("Largest: ")[2]
    assert numbers_in(said)[0] == pytest.approx(size, rel=0.06)
    assert "energy current" not in said


def test_settings_versions_events_and_citations_are_shown(full: tuple[Path, Page, Run]) -> None:
    _, page, run = full
    assert run.provenance["config_toml"].strip() in page.texts["settings"]
    assert run.provenance["digest"] in page.texts["settings"]
    assert "numpy 0.0.0" in page.texts["settings"]
    assert "12 s on the clock" in page.texts["settings"]
    assert "bond ceiling" in page.texts["events"]
    assert "bond ceiling" in page.texts["verdict"].lower()
    for key in (*QUANTUM_KEYS, *EULER_KEYS, *TROTTER_KEYS[4], "unfried_2023", "takahashi_1999"):
        assert REFERENCES[key] in page.texts["references"]


def test_question_repeats_the_config(full: tuple[Path, Page, Run]) -> None:
    _, page, _ = full
    said = page.texts["question"]
    for words in (
        "Synthetic numbers",
        f"{SITES} sites",
        "D = 0.5",
        "0.5 on the left, 2 on the right",
        "t = 10/J",
    ):
        assert words in said
    assert "discarded weight 10⁻⁸ a cut" in said


def test_without_prediction_the_quantum_side_stands_alone(tmp_path: Path) -> None:
    folder = written(tmp_path, no_prediction, no_magnetisation)
    page, run = page_of(folder), open_run(folder)
    assert "No prediction exists for this run" in page.texts["verdict"]
    worst = run.budget["energy_density"]["numerical"].values.max()
    assert numbers_in(page.texts["verdict"].partition("error of at most")[2])[0] == pytest.approx(
        worst, rel=0.06
    )
    assert "start" not in page.sections
    assert {"maps", "cuts", "budget"} <= set(page.sections)
    assert not list((folder / "figures").glob("*deviation*"))


def test_without_companions_only_the_bound_stands(tmp_path: Path) -> None:
    folder = written(tmp_path, no_magnetisation, companions=False)
    page, run = page_of(folder), open_run(folder)
    sentence = page.texts["verdict"]
    assert "the numerical error is not estimated" in sentence
    assert "resolved from" not in sentence
    bound = run.budget["energy_density"]["bound"].values[-1, SITES // 2 - 1]
    assert numbers_in(sentence.partition("stands (")[2])[0] == pytest.approx(bound, rel=0.06)
    assert "not estimated" in page.texts["summary"]
    assert "Dominant error source" not in page.texts["summary"]


def test_prediction_alone_gives_no_verdict(tmp_path: Path) -> None:
    page = page_of(written(tmp_path, prediction_alone, no_magnetisation))
    assert "the prediction alone" in page.texts["verdict"]
    assert {"maps", "cuts", "references"} <= set(page.sections)
    assert not {"budget", "growth", "start"} & set(page.sections)


def test_field_that_vanishes_by_symmetry_is_said_and_not_drawn(tmp_path: Path) -> None:
    folder = written(tmp_path, no_magnetisation)
    page = page_of(folder)
    assert "Zero by symmetry, hence not drawn: magnetisation and spin current." in page.texts["verdict"]
    assert not list((folder / "figures").glob("*charge*"))
    first = (folder / "report.html").read_bytes()
    assert write_report(folder).read_bytes() == first, "the same dataset gives another report"


def test_text_from_the_config_is_never_markup(tmp_path: Path) -> None:
    hostile = "<script>alert('$x_')</script> & \"quotes\""

    def hostile_texts(pieces: dict[str, Any]) -> None:
        provenance = pieces["provenance"]
        provenance["title"] = hostile
        provenance["config_toml"] = f"# {hostile}\n" + provenance["config_toml"]
        provenance["machine"] = hostile
        provenance["events"] = [{"time": 1.0, "kind": hostile, "detail": hostile}]
        pieces["attributes"]["hydrodynamics/euler"]["references"] = [hostile]

    folder = written(tmp_path, hostile_texts, no_magnetisation)
    page = page_of(folder)
    assert "script" not in {tag for tag, _ in page.tags}
    assert hostile in page.texts["question"]
    for section in ("events", "settings", "references"):
        assert hostile in page.texts[section]


def test_figures_stand_alone_for_a_notebook(full: tuple[Path, Page, Run]) -> None:
    run = full[2]
    maps = figure(run, "energy_density_maps")
    axes = [one for part in maps.subfigs for one in part.axes]
    assert [one.get_xlabel() for one in axes if one.get_xlabel()] == ["position x (lattice spacings)"] * 3
    with pytest.raises(KeyError, match="energy_density_cuts"):
        figure(run, "no such figure")


def test_missing_dataset_is_refused(tmp_path: Path) -> None:
    with pytest.raises(InputError):
        write_report(tmp_path)
    assert not list(tmp_path.iterdir())


def test_blocked_figure_folder_is_one_clear_line(tmp_path: Path) -> None:
    folder = written(tmp_path)
    (folder / "figures").write_text("a file where the folder should be")
    with pytest.raises(InputError, match="report cannot be written"):
        write_report(folder)
    assert not (folder / "report.html").exists()


def test_citations_come_once_and_unknown_keys_stand_as_they_are() -> None:
    keys = ["vidal_2004", "an unknown work", "vidal_2004"]
    assert citations(keys) == [REFERENCES["vidal_2004"], "an unknown work"]
