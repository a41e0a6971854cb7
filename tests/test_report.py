"""The report says what the dataset holds: every section, numbers that agree with the arrays, nothing loaded.

Expected numbers are recomputed here from the dataset with numpy alone; the window of the verdict is written
out from its definition: the light cone, one and a half spacings wider on either side.
"""

from __future__ import annotations

import base64
import re
from collections.abc import Callable
from html.parser import HTMLParser
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from tests.synthetic_run import synthetic_pieces
from tnquench.conventions import OBSERVABLE_PLACES, Reals
from tnquench.dataset.reader import Run, open_run
from tnquench.dataset.writer import write_run
from tnquench.errors import InputError
from tnquench.report.comparison import compare
from tnquench.report.figures import comparisons, figure
from tnquench.report.page import write_report
from tnquench.report.question import settings_of, subject
from tnquench.report.references import EULER_KEYS, QUANTUM_KEYS, REFERENCES, TROTTER_KEYS, citations
from tnquench.report.verdict import headline, power_law
from tnquench.report.wording import duration, measured, number, percent, plain

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
SITES, TIMES = 32, 21

Change = Callable[[dict[str, Any]], None]


class Page(HTMLParser):
    """What a reader meets: tags with their attributes, ids, and the text of each section."""

    def __init__(self, markup: str) -> None:
        super().__init__()
        self.tags: list[tuple[str, dict[str, str | None]]] = []
        self.sections: list[str] = []
        self.texts: dict[str, str] = {}
        self.feed(markup)

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append((tag, dict(attrs)))
        if tag in ("section", "header") and (name := dict(attrs).get("id")):
            self.sections.append(name)
            self.texts[name] = ""

    def handle_data(self, data: str) -> None:
        if self.sections:
            self.texts[self.sections[-1]] += data.replace("\N{NO-BREAK SPACE}", " ")

    @property
    def pictures(self) -> list[str]:
        return [attrs["src"] or "" for tag, attrs in self.tags if tag == "img"]


def written(folder: Path, *changes: Change, companions: bool = True) -> Path:
    """Write a synthetic dataset after some changes to its pieces."""
    pieces = synthetic_pieces(sites=SITES, times=TIMES, companions=companions)
    for change in changes:
        change(pieces)
    folder.mkdir(exist_ok=True)
    write_run(folder, **pieces)
    return folder


def page_of(folder: Path) -> Page:
    return Page(write_report(folder).read_text(encoding="utf-8"))


def mismatched_start(pieces: dict[str, Any]) -> None:
    extra = 0.01 * np.exp(-(pieces["coordinates"]["bond"] ** 2))
    pieces["groups"]["quantum"]["energy_density"][0] += extra
    pieces["groups"]["budget/energy_density"]["euler_deviation"][0] += extra


def no_magnetisation(pieces: dict[str, Any]) -> None:
    for name in ("charge_density", "charge_current"):
        for group in {"quantum", "hydrodynamics/euler"} & set(pieces["groups"]):
            pieces["groups"][group][name] = np.zeros_like(pieces["groups"][group][name])
    if "quantum" in pieces["groups"]:
        pieces["groups"]["quantum"]["total_charge"] = np.zeros(TIMES)


def nothing_resolved(pieces: dict[str, Any]) -> None:
    for name in OBSERVABLE_PLACES:
        budget = pieces["groups"][f"budget/{name}"]
        budget["numerical"] = budget["numerical"] + 0.5 * np.abs(budget["euler_deviation"])
        budget["euler_resolved"] = np.zeros_like(budget["euler_resolved"])


def no_prediction(pieces: dict[str, Any]) -> None:
    del pieces["groups"]["hydrodynamics/euler"]
    del pieces["attributes"]["hydrodynamics/euler"]
    for name in OBSERVABLE_PLACES:
        budget = pieces["groups"][f"budget/{name}"]
        pieces["groups"][f"budget/{name}"] = {
            key: rows for key, rows in budget.items() if not key.startswith("euler_")
        }


def prediction_alone(pieces: dict[str, Any]) -> None:
    pieces["groups"] = {"hydrodynamics/euler": pieces["groups"]["hydrodynamics/euler"]}
    pieces["attributes"] = {"hydrodynamics/euler": pieces["attributes"]["hydrodynamics/euler"]}


@pytest.fixture(scope="module")
def full(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, Page, Run]:
    folder = written(tmp_path_factory.mktemp("full"), mismatched_start)
    return folder, page_of(folder), open_run(folder)


def window(run: Run, place: str) -> np.ndarray:
    """Points of the verdict, (time, place)."""
    theory = run.hydrodynamics["euler"]
    t, x = run.coordinates["time"].values[:, None], run.coordinates[place].values[None, :]
    edges = theory.attrs["light_cone_left"] * t - 1.5, theory.attrs["light_cone_right"] * t + 1.5
    return np.asarray((x >= edges[0]) & (x <= edges[1]) & (t > 0))


def numbers_in(text: str) -> list[float]:
    """Read back every number of a text, powers of ten included."""
    raised = str.maketrans("⁻⁰¹²³⁴⁵⁶⁷⁸⁹", "-0123456789")
    text = text.replace("\N{MINUS SIGN}", "-").replace("\N{NO-BREAK SPACE}", " ")
    found = re.finditer(r"-?\d+(?:\.\d+)?(?: × 10([⁻⁰¹²³⁴⁵⁶⁷⁸⁹]+))?", text)  # noqa: RUF001
    return [
        float(match[0].split(" ")[0]) * 10.0 ** int((match[1] or "⁰").translate(raised)) for match in found
    ]


def test_every_section_of_a_full_run_in_order(full: tuple[Path, Page, Run]) -> None:
    _, page, _ = full
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
    for name in OBSERVABLE_PLACES:
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


def test_every_picture_is_described(full: tuple[Path, Page, Run]) -> None:
    _, page, _ = full
    described = [attributes.get("alt") for tag, attributes in page.tags if tag == "img"]
    assert all(described)
    assert len(set(described)) == len(described)


def test_verdict_agrees_with_the_arrays(full: tuple[Path, Page, Run]) -> None:
    _, page, run = full
    budget, x, t = (
        run.budget["energy_density"],
        run.coordinates["bond"].values,
        run.coordinates["time"].values,
    )
    joint = int(np.argmin(np.abs(x)))
    deviation: Reals = budget["euler_deviation"].values
    resolved = (budget["euler_resolved"].values == 1) & window(run, "bond")
    sentence = page.texts["verdict"]
    assert "Euler GHD misses the energy density" in sentence
    said = numbers_in(sentence.partition("; the deviation")[0])
    assert said[0] == pytest.approx(abs(deviation[-1, joint]), rel=0.02)  # two digits are shown
    assert said[1] == pytest.approx(float(budget["numerical"].values[-1, joint]), rel=0.35)  # one digit
    assert said[2] == t[-1]
    first = float(t[np.flatnonzero(resolved.any(axis=1))[0]])
    assert numbers_in(sentence.partition("resolved from t = ")[2])[0] == first
    outermost = float(np.abs(x[resolved[-1]]).max())
    assert numbers_in(sentence.partition("|x| ≤ ")[2])[0] == outermost
    share = resolved[-1].sum() / np.count_nonzero(np.abs(x) <= outermost)
    assert numbers_in(sentence.partition(": at ")[2])[0] == pytest.approx(100 * share, abs=0.51)
    late = t >= 0.3 * t[-1]
    slope = np.polyfit(np.log(t[late]), np.log(np.abs(deviation[late, joint])), 1)[0]
    assert "falls like" in sentence
    assert numbers_in(sentence.partition("p = ")[2])[0] == pytest.approx(-slope, abs=0.006)


@pytest.mark.parametrize("name", OBSERVABLE_PLACES)
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
    for key in (*QUANTUM_KEYS, *EULER_KEYS, *TROTTER_KEYS[4], "unfried_2023"):
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


def test_nothing_resolved_is_said_with_what_is_excluded(tmp_path: Path) -> None:
    folder = written(tmp_path, nothing_resolved, no_magnetisation)
    run, sentence = open_run(folder), page_of(folder).texts["verdict"]
    budget = run.budget["energy_density"]
    size = np.abs(budget["euler_deviation"].values) + budget["numerical"].values
    assert "No deviation is resolved" in sentence
    assert numbers_in(sentence.partition("larger than")[2])[0] == pytest.approx(
        size[window(run, "bond")].max(), rel=0.06
    )


def test_without_prediction_the_quantum_side_stands_alone(tmp_path: Path) -> None:
    folder = written(tmp_path, no_prediction, no_magnetisation)
    page, run = page_of(folder), open_run(folder)
    assert "No prediction was computed" in page.texts["verdict"]
    worst = run.budget["energy_density"]["numerical"].values.max()
    assert numbers_in(page.texts["verdict"].partition("error up to")[2])[0] == pytest.approx(worst, rel=0.06)
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


def test_other_couplings_are_not_called_units(tmp_path: Path) -> None:
    def stronger(pieces: dict[str, Any]) -> None:
        config = pieces["provenance"]["config_toml"]
        pieces["provenance"]["config_toml"] = config.replace("sites =", "coupling = 2.0\nsites =")

    run = open_run(written(tmp_path, stronger))
    sentence = headline(comparisons(run)[0])
    assert "t = 10;" in sentence
    assert "J" not in sentence
    assert compare(run, "energy_density").unit == ""


def test_smooth_start_is_judged_where_the_deviation_is_largest(tmp_path: Path) -> None:
    def bump(pieces: dict[str, Any]) -> None:
        config = pieces["provenance"]["config_toml"]
        smooth = 'shape = "bump"\nbase = 1.0\nheight = 0.5\nwidth = 4.0'
        pieces["provenance"]["config_toml"] = re.sub(r'shape = "step"\nleft = .*\nright = .*', smooth, config)
        x = pieces["coordinates"]["bond"]
        pieces["groups"]["budget/energy_density"]["euler_deviation"][-1] = 0.1 * np.exp(-((x - 3.0) ** 2))

    sentence = headline(comparisons(open_run(written(tmp_path, bump)))[0])
    assert "misses the energy density by 0.10 J" in sentence
    assert "at x = 3 and t = 10/J" in sentence
    assert "joint" not in sentence


def test_field_step_is_about_the_magnetisation(tmp_path: Path) -> None:
    def field_step(pieces: dict[str, Any]) -> None:
        config = pieces["provenance"]["config_toml"]
        field = '[start.beta]\nshape = "uniform"\nvalue = 1.0\n[start.beta_field]\nshape = "step"'
        pieces["provenance"]["config_toml"] = config.replace('[start.beta]\nshape = "step"', field)

    run = open_run(written(tmp_path, field_step))
    sentence = headline(comparisons(run)[0], about=subject(settings_of(run)))
    deviation = run.budget["charge_density"]["euler_deviation"].values
    place = SITES // 2 - 1 + int(np.argmax(np.abs(deviation[-1, SITES // 2 - 1 : SITES // 2 + 1])))
    assert "misses the magnetisation by" in sentence
    assert "next to the joint (x = " in sentence
    assert numbers_in(sentence)[0] == pytest.approx(abs(deviation[-1, place]), rel=0.02)


def test_deviation_resolved_elsewhere_only_is_said_so(tmp_path: Path) -> None:
    def blind_at_the_joint(pieces: dict[str, Any]) -> None:
        budget = pieces["groups"]["budget/energy_density"]
        budget["numerical"][:, SITES // 2 - 1] += 0.1
        budget["euler_resolved"][:, SITES // 2 - 1] = 0

    sentence = headline(comparisons(open_run(written(tmp_path, blind_at_the_joint)))[0])
    assert "at the joint at t = 10/J to within 3 times the numerical error" in sentence
    assert "elsewhere the deviation is resolved from t = 0.5/J on" in sentence
    assert "like" not in sentence


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


def test_power_law_finds_a_known_exponent() -> None:
    times = np.linspace(0.0, 12.0, 25)
    values = -3.0 * np.divide(1.0, times, out=np.zeros(25), where=times > 0) ** 0.75
    law = power_law(times, values, np.ones(25, dtype=np.bool_))
    assert law is not None
    assert law.exponent == pytest.approx(0.75, abs=1e-12)
    assert law.error < 1e-12
    assert (law.first, law.last) == (4.0, 12.0)
    assert power_law(times, values, times > 11.0) is None


def test_power_law_error_is_the_standard_error_of_the_slope() -> None:
    rng = np.random.default_rng(1)
    times = np.linspace(1.0, 20.0, 40)
    slopes, errors = [], []
    for _ in range(400):
        law = power_law(
            times, times**-1.0 * np.exp(0.1 * rng.standard_normal(40)), np.ones(40, dtype=np.bool_)
        )
        assert law is not None
        slopes.append(law.exponent)
        errors.append(law.error)
    assert np.std(slopes) == pytest.approx(
        np.mean(errors), rel=0.12
    )  # 400 samples: the deviation is known to 4 %


@pytest.mark.parametrize(
    ("value", "said"),
    [
        (0.0, "0"),
        (0.0059, "5.9 × 10⁻³"),  # noqa: RUF001
        (-3.04e-5, "\N{MINUS SIGN}3.0 × 10⁻⁵"),  # noqa: RUF001
        (0.0999, "0.10"),
        (0.00996, "0.010"),
        (12.34, "12"),
        (2.5e7, "2.5 × 10⁷"),  # noqa: RUF001
        (float("nan"), "not a number"),
    ],
)
def test_numbers_are_written_as_in_print(value: float, said: str) -> None:
    assert number(value) == said


def test_small_words() -> None:
    assert [plain(1e-8), plain(-7.5), plain(10.0)] == ["10⁻⁸", "\N{MINUS SIGN}7.5", "10"]
    assert measured(0.9812, 0.0234) == "0.98 ± 0.02"
    assert [percent(1.0), percent(0.999), percent(0.001), percent(0.0)] == ["100%", "99%", "under 1%", "0%"]
    assert [duration(4.2), duration(200.0), duration(18_600.0)] == ["4.2 s", "3 min 20 s", "5 h 10 min"]


def test_citations_come_once_and_unknown_keys_stand_as_they_are() -> None:
    keys = ["vidal_2004", "an unknown work", "vidal_2004"]
    assert citations(keys) == [REFERENCES["vidal_2004"], "an unknown work"]
