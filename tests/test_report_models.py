"""The report of each model: its Hamiltonian, units and words, with and without prediction and extra terms.

Expected words are those of the conventions; the datasets are synthetic.
"""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

from tests.report_cases import Page, numbers_in, page_of, window, written
from tests.synthetic_run import MODELS
from tnquench.dataset.reader import Run, open_run
from tnquench.report.canvas import Plate
from tnquench.report.figures import Chapter, chapters, comparisons, figure, foreground
from tnquench.report.models import ModelWords, extra_lines, words_of
from tnquench.report.page import KINDS
from tnquench.report.question import question, settings_of, subject
from tnquench.report.units import Units, units_of
from tnquench.report.verdict import headline
from tnquench.terminal.summary import findings

REASON = "there is no hydrodynamic prediction for the Hubbard chain in this version"

Change = Callable[[dict[str, Any]], None]


def event(kind: str, detail: str) -> Change:
    return lambda pieces: pieces["provenance"]["events"].append({"kind": kind, "detail": detail})


def in_config(old: str, new: str) -> Change:
    def change(pieces: dict[str, Any]) -> None:
        config = pieces["provenance"]["config_toml"]
        assert old in config
        pieces["provenance"]["config_toml"] = config.replace(old, new)

    return change


@pytest.fixture(scope="module")
def alone(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, Page, Run]:
    """Seven observables of hubbard without a prediction."""
    folder = tmp_path_factory.mktemp("alone")
    written(folder, event("no_prediction", REASON), model="hubbard", prediction=False, sites=24, times=11)
    return folder, page_of(folder), open_run(folder)


def said_of(run: Run) -> str:
    return "\n".join(f"{heading}: {text}" for heading, text in question(run, settings_of(run)))


QUESTIONS = {
    "xxz": ("H = J Σ (SˣSˣ + SʸSʸ + D SᶻSᶻ), D = 0.5, J = 1", "to t = 10/J", "inverse temperature β (1/J)"),
    "ising": ("H = −J Σ σˣσˣ − g Σ σᶻ, g = 0.5, J = 1", "to t = 10/J", "⟨σᶻ⟩, is not conserved"),  # noqa: RUF001
    "fermion": (
        "H = −tₕ Σ (c⁺c + h.c.) + V Σ (n − ½)(n − ½), V = 1, tₕ = 1",  # noqa: RUF001
        "chemical potential βμ: 0.4 on the left",
        "The particle density, ⟨n⟩ − ½, is zero at half filling",  # noqa: RUF001
        "to t = 10/tₕ",
    ),
    "hubbard": (
        "H = −tₕ Σ (c⁺c + h.c.) + U Σ (n↑ − ½)(n↓ − ½), U = 4, tₕ = 1",  # noqa: RUF001
        "chemical potential βμ: 0.4 on the left",
        "field βh: 0.4 on the left",
        "⟨n⟩ − 1, is zero at half filling",  # noqa: RUF001
    ),
}


@pytest.mark.parametrize("model", QUESTIONS)
def test_question_states_the_hamiltonian_of_the_model(tmp_path: Path, model: str) -> None:
    said = said_of(open_run(written(tmp_path, model=model, sites=8, times=21)))
    for words in QUESTIONS[model]:
        assert words in said


NAMED = {
    "xxz": ["energy density", "energy current", "magnetisation", "spin current"],
    "ising": ["energy density", "energy current", "transverse magnetisation"],
    "fermion": ["energy density", "energy current", "particle density", "particle current"],
    "hubbard": [
        *("energy density", "energy current", "particle density", "particle current"),
        *("magnetisation", "spin current", "double occupancy"),
    ],
}


@pytest.mark.parametrize("model", NAMED)
def test_observables_are_called_as_the_model_calls_them(tmp_path: Path, model: str) -> None:
    run = open_run(written(tmp_path, model=model, sites=12, times=5))
    drawn, zero = comparisons(run)
    assert zero == []
    assert [field.said for field in drawn] == NAMED[model]
    unit = "tₕ" if model in ("fermion", "hubbard") else "J"
    assert [field.unit for field in drawn[:2]] == [unit, f"{unit}²"]
    assert {field.unit for field in drawn[2:]} <= {unit, ""}


def test_a_hopping_other_than_one_is_no_unit() -> None:
    settings = {"chain": {"model": "fermion", "hopping": 0.5}}
    assert units_of(settings) == Units(0.5, "tₕ")
    assert units_of(settings).symbol("energy") == ""
    assert units_of({"chain": {"model": "fermion", "coupling": 0.5}}).instant(2.0) == "t = 2/tₕ"
    assert units_of({}).instant(0.0) == "t = 0"


def test_a_model_without_words_of_its_own_is_still_told() -> None:
    words = words_of({"chain": {"model": "something new"}})
    assert words == ModelWords(kind="something new", hamiltonian="", symbols={})
    assert [words.name(name) for name in ("charge_density", "a_new_one")] == ["charge density", "a new one"]


# Without a prediction ---------------------------------------------------------------------------------------


def test_without_a_prediction_the_verdict_says_so_and_gives_the_error(alone: tuple[Path, Page, Run]) -> None:
    folder, page, run = alone
    sentence = page.texts["verdict"].strip().splitlines()[0]
    opening = (
        "There is no hydrodynamic prediction for the Hubbard chain in this version. Here are the quantum side"
    )
    assert sentence.startswith(opening)
    assert "mostly truncation" in sentence
    budget, x = run.budget["energy_density"], run.coordinates["bond"].values
    interior = abs(x).max() - abs(x) >= 4.0
    worst = budget["numerical"].values[1:, interior].max()
    assert numbers_in(sentence.partition("at most")[2])[0] == pytest.approx(worst, rel=0.06)
    assert page.texts["verdict"].count(REASON[1:]) == 1, "told once"
    assert KINDS[(True, False)] in page.texts["question"]
    assert findings(folder)[0] == headline(comparisons(run)[0], absence=REASON)


def test_a_reason_that_does_not_speak_of_predictions_is_introduced(alone: tuple[Path, Page, Run]) -> None:
    drawn = comparisons(alone[2])[0]
    assert headline(drawn, absence="light reaches the ends").startswith(
        "No prediction exists for this run: light reaches the ends. Here are"
    )
    assert headline(drawn).startswith("No prediction exists for this run. Here are")


def test_without_a_prediction_nothing_of_a_theory_is_drawn(alone: tuple[Path, Page, Run]) -> None:
    folder, page, run = alone
    assert not list((folder / "figures").glob("*deviation*"))
    assert not list((folder / "figures").glob("*prediction*"))
    assert "light cone" not in page.texts["summary"] + page.texts["budget"]
    headings = page.texts["summary"]
    assert "Largest numerical error" in headings
    assert "deviation" not in headings.lower()
    values = run.quantum["double_occupancy"].values
    row = headings.lower().partition("double occupancy")[2]
    assert numbers_in(row)[:2] == pytest.approx([values.min(), values.max()], rel=0.06)


def test_seven_observables_are_not_all_in_the_foreground(alone: tuple[Path, Page, Run]) -> None:
    _, page, run = alone
    found = {chapter.anchor: chapter for chapter in chapters(run, comparisons(run)[0])}
    assert list(found) == ["maps", "cuts", "budget", "growth", "conservation", "further"]
    first = ("energy_density", "energy_current", "charge_density", "charge_current")
    others = ("magnetisation", "spin_current", "double_occupancy")
    assert panels(found["maps"]) == [f"{name}_map_quantum" for name in first]
    assert panels(found["cuts"]) == [f"{name}_profiles" for name in first]
    assert panels(found["budget"]) == [f"{name}_budget" for name in first]
    kinds = ("map_quantum", "profiles", "budget")
    assert panels(found["further"]) == [f"{name}_{kind}" for kind in kinds for name in others]
    drifts = ["total_energy_drift", "total_charge_drift", "total_magnetisation_drift"]
    assert panels(found["conservation"]) == drifts
    assert page.sections.index("further") > page.sections.index("conservation")


def panels(chapter: Chapter) -> list[str]:
    plates: tuple[Plate, ...] = chapter.plates
    return [panel.name for plate in plates for panel in plate.panels]


# With one ---------------------------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def ising(tmp_path_factory: pytest.TempPathFactory) -> tuple[Page, Run]:
    """Two of three observables predicted, and an extra term."""
    folder = tmp_path_factory.mktemp("ising")
    extra = '[[chain.extra]]\nkind = "longitudinal_field"\nstrength = 0.3\nin_start = false\n[start.beta]'
    written(
        folder,
        in_config("[start.beta]", extra),
        event(
            "extra",
            "a field along x, absent from the start, breaks integrability; the prediction is theirs",
        ),
        model="ising",
        sites=24,
        times=11,
    )
    return page_of(folder), open_run(folder)


def test_what_is_not_predicted_has_an_error_and_no_deviation(ising: tuple[Page, Run]) -> None:
    page, run = ising
    row = page.texts["summary"].partition("transverse magnetisation")[2]
    assert "no prediction" in row
    numerical = run.budget["transverse_magnetisation"]["numerical"].values
    worst = (numerical * window(run, "site")).max()
    assert numbers_in(row)[0] == pytest.approx(worst, rel=0.35)  # one digit is shown
    energy = page.texts["summary"].partition("transverse magnetisation")[0]
    assert "no prediction" not in energy
    drawn = [panel for chapter in chapters(run, comparisons(run)[0]) for panel in panels(chapter)]
    assert "transverse_magnetisation_map_quantum" in drawn
    assert "transverse_magnetisation_map_deviation" not in drawn
    assert "energy_density_map_deviation" in drawn


def test_extra_terms_stand_beside_the_verdict_and_in_the_question(ising: tuple[Page, Run]) -> None:
    page, run = ising
    sentence = "A field along x, absent from the start, breaks integrability; the prediction is theirs."
    assert sentence in page.texts["verdict"]
    assert page.texts["verdict"].count("breaks integrability") == 1
    assert ("p", {"class": "notice"}) in page.tags
    assert "Extra terms: longitudinal field, strength 0.3, absent from the start" in said_of(run)
    assert "breaks integrability" in page.texts["events"]
    assert sentence in findings(run.path.parent)


def test_every_extra_term_is_told_with_its_settings() -> None:
    extras = [
        {"kind": "next_nearest", "strength": -0.2, "in_start": True},
        {"kind": "potential", "shape": "harmonic", "strength": 0.01, "in_start": False},
        {"kind": "potential", "shape": "table", "values": [0.0, 1.0]},
        {"kind": "site_disorder", "strength": 0.5, "seed": 7},
    ]
    assert extra_lines(extras) == [
        "coupling of next-nearest neighbours, strength −0.2",  # noqa: RUF001
        "potential (harmonic), strength 0.01, absent from the start",
        "potential (table), 2 values",
        "site disorder, strength 0.5, seed 7",
    ]
    assert extra_lines(None) == []


def test_ising_does_not_cite_the_strings_of_spin_chains(ising: tuple[Page, Run]) -> None:
    page, _ = ising
    assert "Takahashi" not in page.texts["references"]
    assert "Castro-Alvaredo" in page.texts["references"]


def test_bonds_at_the_ends_do_not_set_the_scale(tmp_path: Path) -> None:
    """They hold the whole terms of the end sites: their energy says nothing about the front."""

    def deep_ends(pieces: dict[str, Any]) -> None:
        pieces["groups"]["quantum"]["energy_density"][:, [0, -1]] -= 5.0

    run = open_run(written(tmp_path, deep_ends, model="ising", prediction=False, sites=24, times=11))
    inner = run.quantum["energy_density"].values[:, 4:-4]
    for name, axis in (("energy_density_maps", "c"), ("energy_density_cuts", "y")):
        axes = [one for part in figure(run, name).subfigs for one in part.axes]
        drawn = axes[0].collections[0].get_clim() if axis == "c" else axes[0].get_ylim()
        assert drawn[0] > inner.min() - 0.02
        assert drawn[1] < inner.max() + 0.02


# What a run is about ----------------------------------------------------------------------------------------

STEP, FLAT = {"shape": "step", "left": 0.5, "right": -0.5}, {"shape": "uniform", "value": 1.0}
SUBJECTS = [
    ("xxz", {"beta": FLAT, "beta_field": STEP}, "charge_density"),
    ("xxz", {"beta": STEP, "beta_field": STEP}, "energy_density"),
    ("fermion", {"beta": FLAT, "beta_mu": STEP}, "charge_density"),
    ("hubbard", {"beta": FLAT, "beta_mu": STEP}, "charge_density"),
    ("hubbard", {"beta": FLAT, "beta_field": STEP}, "magnetisation"),
    ("hubbard", {"beta": FLAT, "beta_mu": FLAT, "beta_field": STEP}, "magnetisation"),
    ("hubbard", {"beta": FLAT, "beta_mu": STEP, "beta_field": STEP}, "charge_density"),
    ("hubbard", {"beta": STEP, "beta_mu": STEP}, "energy_density"),
    ("ising", {"beta": FLAT}, "energy_density"),
]


@pytest.mark.parametrize(("model", "start", "about"), SUBJECTS)
def test_a_run_is_about_what_varies_in_its_start(model: str, start: dict[str, Any], about: str) -> None:
    assert subject({"chain": {"model": model}, "start": start}) == about


def test_the_subject_and_the_energy_come_first(alone: tuple[Path, Page, Run]) -> None:
    fields = comparisons(alone[2])[0]
    names = [field.name for field in foreground(fields, "magnetisation")]
    assert names == ["energy_density", "energy_current", "magnetisation", "spin_current"]
    assert len(fields) == len(MODELS["hubbard"][0]) == 7
    few = [field for field in fields if field.name != "double_occupancy"][:4]
    assert foreground(few, "magnetisation") == few
