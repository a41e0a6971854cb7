"""Claimed errors against true ones: a few cases of the honesty study, and what the report says of it."""

from __future__ import annotations

import re
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from tests.benchmarks.honesty_free import extra_values, free_fields, start_values
from tests.benchmarks.honesty_prediction import PREDICTED, closed_form
from tests.benchmarks.honesty_runs import Library
from tests.benchmarks.honesty_scores import (
    COVERAGE,
    COVERAGE_OF_EACH,
    SHARPNESS,
    Score,
    quantum_scores,
    score,
    summary,
)
from tests.benchmarks.honesty_truth import truth_of
from tests.honesty_cases import CASES, HOLD_OUT, START_CASES, Case
from tests.oracles.free_fermions import free_evolution, joined_halves
from tests.oracles.free_models import fermion_quench, hubbard_quench, ising_quench
from tnquench.budget.honesty import MEASURED, sentence
from tnquench.conventions import Reals, bond_positions

DEVELOPERS = Path(__file__).parents[1] / "DEVELOPERS.md"

BY_NAME = {case.name: case for case in (*CASES, *START_CASES)}

#: Cases that are run here, shortened: short and long chains, three models, both orders, hold-outs among them.
RUN_HERE: dict[str, dict[str, Any]] = {
    "D = 0.5 bump": {"sites": 8, "until": 1.5},
    "D = 2 order 2": {"sites": 8, "until": 1.0},
    "xx step with fields": {"sites": 20, "until": 1.5},
    "ising critical bump": {"sites": 16, "until": 0.5},
    "start hubbard attractive": {"sites": 4},
}


def test_the_study_is_large_and_varied() -> None:
    """At least 40 cases with names of their own, half of them held out of every kind."""
    names = [case.name for case in CASES]
    assert len(set(names)) == len(names) >= 40
    assert 0.4 * len(names) < len(HOLD_OUT) < 0.6 * len(names)
    assert {case.kind for case in CASES} == {case.kind for case in CASES if case.name in HOLD_OUT}
    assert min(case.weight for case in CASES) <= 1e-10
    assert max(case.weight for case in CASES) >= 1e-6
    assert {case.order for case in CASES} == {2, 4}


def oracle_of(case: Case) -> dict[str, Reals]:
    """The same quench by the oracles, which share no code with the study."""
    beta, fields = start_values(case, case.sites)
    if case.model == "ising":
        field = case.parameters["transverse_field"]
        return ising_quench(sites=case.sites, transverse_field=field, beta=beta, times=case.times.tolist())
    if case.model == "xxz":
        tilt = fields.get("beta_field")
        return free_evolution(sites=case.sites, beta=beta, beta_field=tilt, times=case.times)
    if case.model == "hubbard":
        return hubbard_quench(
            sites=case.sites,
            beta=beta,
            beta_mu=fields["beta_mu"],
            beta_field=fields["beta_field"],
            times=case.times.tolist(),
        )
    return fermion_quench(
        sites=case.sites,
        beta=beta,
        beta_mu=fields.get("beta_mu", 0.0),
        potential=extra_values(case, case.sites),
        times=case.times.tolist(),
    )


@pytest.mark.parametrize(
    "name",
    ["xx separate, order 2", "xx step with fields", "ising ordered", "fermion in a trap", "fermion staggered",
     "hubbard without interaction"],
)  # fmt: skip
def test_truth_is_that_of_the_oracles(name: str) -> None:
    """To 1e-13; a circuit of many times shorter steps tends to it with the order of the scheme."""
    case = replace(BY_NAME[name], sites=16, until=1.0)
    exact = oracle_of(case)
    for observable, values in free_fields(case, case.sites).items():
        np.testing.assert_allclose(values, exact[observable], rtol=0, atol=1e-13, err_msg=observable)
    coarse, fine = (
        np.abs(free_fields(each, 16, trotter=True)["energy_density"] - exact["energy_density"]).max()
        for each in (replace(case, time_step=0.05), replace(case, time_step=0.025))
    )
    assert np.log2(coarse / fine) == pytest.approx(case.order, abs=0.1)


def test_interacting_circuits_tend_to_the_exact_evolution() -> None:
    """Error of the Trotter layers of a short chain: order 2, halved steps."""
    case = replace(BY_NAME["D = 2 order 2"], sites=6, until=1.0)
    errors = []
    for time_step in (0.1, 0.05):
        truth = truth_of(replace(case, time_step=time_step))
        errors.append(np.abs(truth["circuit"]["energy_current"] - truth["exact"]["energy_current"]).max())
    assert np.log2(errors[0] / errors[1]) == pytest.approx(2.0, abs=0.1)


def test_closed_form_of_joined_halves_is_that_of_the_oracle() -> None:
    case = next(each for each in PREDICTED if each.name == "xx halves with fields")
    x, time = bond_positions(12), 7.0
    exact = joined_halves(x / time, left=(0.2, 0.8), right=(1.0, -0.3))
    for name in ("energy_density", "energy_current", "charge_density", "charge_current"):
        np.testing.assert_allclose(closed_form(case, name, x, time), exact[name], rtol=0, atol=1e-12)


def test_scores_count_what_they_say() -> None:
    """Four points: one not covered, one that is rounding, one invisible beside the others."""
    true = np.array([[1e-3, 2e-3, 1e-14, 1e-7]])
    found = score(BY_NAME["D = 1"], "o", "total", true=true, claimed=np.array([[2e-3, 1e-3, 1e-3, 1e-3]]))
    assert (found.covered, found.points) == (3, 4)
    np.testing.assert_allclose(found.ratios, [2.0, 0.5])
    assert summary([found]).sharpness == pytest.approx(1.25)


@pytest.fixture(scope="module")
def scores(tmp_path_factory: pytest.TempPathFactory) -> list[Score]:
    library = Library(tmp_path_factory.mktemp("honesty"))
    cases = [replace(BY_NAME[name], **changes) for name, changes in RUN_HERE.items()]
    found = [each for case in cases for each in quantum_scores(library.get(case))]
    again = Library(library.folder)
    assert again.known.keys() == {case.name for case in cases}, "a second study finds what the first has kept"
    kept = [each for case in cases for each in quantum_scores(again.get(case))]
    assert [(each.covered, each.claimed) for each in kept] == [(each.covered, each.claimed) for each in found]
    return found


@pytest.mark.parametrize("source", ["total", "time_step", "cuts_and_start", "start", "infinite"])
def test_claims_cover_the_true_errors(scores: list[Score], source: str) -> None:
    found = summary(each for each in scores if each.source == source)
    assert found.coverage >= COVERAGE
    assert found.worst_coverage >= COVERAGE_OF_EACH, found.worst_case


def test_claims_are_sharp(scores: list[Score]) -> None:
    assert summary(each for each in scores if each.source == "total").sharpness <= SHARPNESS


def test_the_report_quotes_the_table() -> None:
    """The numbers of the sentence are those of the row in DEVELOPERS.md, and meet what was asked for."""
    text = DEVELOPERS.read_text()
    line = next(
        each for each in text.splitlines() if each.startswith("| all of the quantum side, same chain")
    )
    numbers = [float(each) for each in re.findall(r"\d+(?:\.\d+)?", line)]
    assert [MEASURED.cases, MEASURED.points, MEASURED.coverage, MEASURED.worst_coverage] == numbers[:4]
    assert f"| {MEASURED.sharpness:.1f}, " in line
    assert MEASURED.cases == len(CASES)
    assert MEASURED.coverage >= 100.0 * COVERAGE
    assert MEASURED.worst_coverage >= 100.0 * COVERAGE_OF_EACH
    assert MEASURED.sharpness <= SHARPNESS
    assert f"{MEASURED.coverage:.2f} %" in sentence()
    assert MEASURED.command in text
