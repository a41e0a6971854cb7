"""Advice in words and its forecasts, and what a missing companion does to the claims."""

from __future__ import annotations

import re
from concurrent.futures import Future
from concurrent.futures.process import BrokenProcessPool
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from tests.budget_cases import (
    LOOSE_NOISE,
    NAMES,
    NORMS,
    SETTINGS,
    STEP_NOISE,
    companions,
    free_quench,
    judge,
    noise,
    positions_of,
    record,
    row,
)
from tests.command_line import config_file
from tnquench import open_run, side_by_side
from tnquench import run as run_module
from tnquench.budget.advice import advise, tighter_cost
from tnquench.budget.assess import RunSettings, assess
from tnquench.budget.companions import COARSE, LOOSE, SHORT, WITHOUT, companion_quenches
from tnquench.budget.verdict import ObservableBudget
from tnquench.conventions import ERROR_SOURCES, bond_positions
from tnquench.dataset.integrity import check_run
from tnquench.errors import StateError
from tnquench.model.chain import start_terms
from tnquench.model.spins import xxz_chain
from tnquench.observables.quench import QuantumRecord, Quench, simulate
from tnquench.quantum_of import SILENT, simulate_all
from tnquench.report.sources import advice_of
from tnquench.stopping import Stop

# The advice.


def visible_quench(weight: float) -> Quench:
    """An interacting chain of 12 sites whose error is truncation."""
    chain = xxz_chain(sites=12, anisotropy=0.5)
    beta = np.where(bond_positions(12) < 0.0, 0.5, 2.0)
    return replace(
        free_quench(12),
        chain=chain,
        start_terms=start_terms(chain, beta=beta.tolist(), potentials={}),
        discarded_weight=weight,
        steps=3,
        bond_floor=8,
        preparation_weight=1e-11,
        preparation_distance=1e-5,
    )


def advised(weight: float) -> tuple[QuantumRecord, dict[str, ObservableBudget], dict[str, Any]]:
    """A run, its budget and the advice; the ends do nothing: their run agrees with its partner."""
    quench = visible_quench(weight)
    runs = {name: simulate(each) for name, each in companion_quenches(quench, shorter=None).items()}
    short = {name: values[:, 2:-2] for name, values in runs[COARSE].fields.items()}
    main = simulate(quench)
    budgets = assess(
        main,
        runs | {SHORT: replace(runs[COARSE], fields=short)},
        {},
        positions=positions_of(12),
        settings=RunSettings(step_ratio=3.0, trotter_order=4, resolve_at=3.0),
    )
    return main, budgets, advise(main, runs, budgets, quench)


def test_forecast_of_error_and_cost_is_right_within_a_factor_three() -> None:
    """Beside a run at the advised weight: the error that its own companions measure, and its time."""
    main, _, advice = advised(1e-5)
    tighter, budgets, _ = advised(1e-6)
    assert advice["action"] == "weight"
    assert advice["windows"][-1]["dominant"] == "truncation"
    measured = float(np.sqrt(np.mean(budgets[advice["observable"]].numerical_norm[4:] ** 2)))
    assert advice["windows"][-1]["from"] == tighter.times[4]
    assert advice["error"] > 2.0 * measured, "the advice is worth following"
    assert measured / 3.0 < advice["error_then"] < min(3.0 * measured, 0.7 * advice["error"])
    taken = tighter.cpu_seconds / main.cpu_seconds
    assert taken / 3.0 < advice["cost_factor"] < 3.0 * taken
    assert f"from {advice['error']:.1e} to {advice['error_then']:.1e}" in advice["sentences"][1]
    assert "the time step" in advice["sentences"][1].partition(";")[2], "it says what does not limit the run"


def test_cost_follows_bonds_that_grow_with_the_weight() -> None:
    """Cube roots 4 and 6 at 1e-6 and 1e-8: 7 comes at 1e-9. All time goes into cubes of bonds."""

    def run(root: float, weight: float = 1e-8) -> QuantumRecord:
        bonds = np.full((6, 15), root**3)
        return replace(record(weight=weight), bond_dimension=bonds, cpu_seconds=1e-6 * 500.0 * root**9)

    quench = replace(free_quench(16), bond_floor=32, discarded_weight=1e-8)
    companions_then = {"weight_100": run(4.0, 1e-6)}
    inner = slice(5, 10)  # bonds near the ends are full
    ends = run(6.0).bond_dimension
    found = tighter_cost(run(6.0), companions_then, quench)
    full = np.minimum(4.0 ** np.minimum(np.arange(1, 16), np.arange(15, 0, -1)), 7.0**3)
    assert ends[0, inner].max() < full[inner].min()
    assert found == pytest.approx(float((full**3).mean() / 6.0**9), rel=1e-6)


def test_windows_are_thirds_and_name_their_source() -> None:
    """Six samples: truncation first, then a step error that only the second half of the run has."""

    def late_step(name: str, values: np.ndarray) -> np.ndarray:
        noisy = STEP_NOISE(name, values) - values
        return np.asarray(LOOSE_NOISE(name, values) + 400.0 * noisy * (np.arange(len(values)) >= 4)[:, None])

    runs = companions(loose=LOOSE_NOISE, coarse=late_step)
    quench = replace(free_quench(16), trotter_order=4)
    advice = advise(record(), runs, judge(runs), quench)
    assert [(window["from"], window["until"]) for window in advice["windows"]] == [(1, 2), (3, 3), (4, 5)]
    assert [window["dominant"] for window in advice["windows"]] == ["truncation", "time_step", "time_step"]
    said = advice["sentences"][0]
    assert re.search(r"from truncation up to t = 2 \(\d+ %\), then from the time step up to t = 5 \(", said)
    assert advice["action"] == "step"
    step = advice["windows"][-1]["shares"]["time_step"]
    kept = advice["error_then"] / advice["error"]
    assert kept == pytest.approx(1.0 - step * 15.0 / 16.0, abs=0.1)
    assert advice["sentences"][1].startswith("Half the time step costs about 2.0 times the time")
    assert "truncation" in advice["sentences"][1].partition(";")[2]


def test_no_advice_without_measured_errors() -> None:
    assert advise(record(), {}, judge({}), free_quench(16)) == {}


def test_cost_without_bonds_continues_the_measured_seconds() -> None:
    class Kept:
        fields: dict[str, Any] = {}  # noqa: RUF012
        discarded_weight = np.zeros((1, 1))
        weight_asked, time_step, seconds = 1e-6, 0.1, 0.25

    quench = replace(free_quench(16), discarded_weight=1e-8)
    assert tighter_cost(record(), {"weight_100": Kept()}, quench) == pytest.approx(2.0)
    assert tighter_cost(record(), {}, quench) == pytest.approx(np.sqrt(10.0))


def test_report_writes_the_numbers_of_the_advice_as_powers() -> None:
    class Dataset:
        provenance = {"advice": {"sentences": ["From 3.9e-04", "to 1.2e-05."]}}  # noqa: RUF012

    dataset: Any = Dataset()
    assert advice_of(dataset) == "From 3.9 × 10⁻⁴ to 1.2 × 10⁻⁵."  # noqa: RUF001
    Dataset.provenance = {}
    assert advice_of(dataset) == ""


# A missing companion.


def test_without_the_looser_run_truncation_claims_more() -> None:
    runs = companions(loose=LOOSE_NOISE, coarse=STEP_NOISE)
    some = {name: found for name, found in runs.items() if name != LOOSE}
    full, fewer = judge(runs), judge(some)
    for name in NAMES:
        more, before = row(fewer[name], "truncation"), row(full[name], "truncation")
        assert np.all(more[1:] >= before[1:]), name
        assert np.all(fewer[name].numerical[1:] >= full[name].numerical[1:] * (1.0 - 1e-9)), name
        assert np.isfinite(fewer[name].numerical).all()


def test_without_any_run_that_cuts_more_the_bound_is_claimed() -> None:
    runs = {SHORT: companions()[SHORT]}
    for name, budget in judge(runs).items():
        np.testing.assert_array_equal(row(budget, "truncation"), budget.bound)
        np.testing.assert_allclose(row(budget, "time_step"), 2.0 * NORMS[name])


@pytest.mark.parametrize(("missing", "source"), [(COARSE, "time_step"), (SHORT, "length")])
def test_without_its_run_step_or_length_is_unknown(missing: str, source: str) -> None:
    runs = companions()
    del runs[missing]
    for name, budget in judge(runs).items():
        np.testing.assert_allclose(row(budget, source), 2.0 * NORMS[name], rtol=1e-14)


def test_a_former_main_run_is_not_trusted_where_its_floor_hides_the_cuts() -> None:
    """It agrees with the new main run, as where the bond floor binds in both; the next looser run decides."""
    runs = companions() | {"weight_100": record(noise(2, 1e-4), weight=1e-6)}
    blind = judge(runs)["energy_density"]
    settings = replace(SETTINGS, unloosened=frozenset({LOOSE}))
    aware = judge(runs, settings=settings)["energy_density"]
    assert np.all(row(blind, "truncation")[1:] < 0.7 * row(aware, "truncation")[1:])
    assert np.all(row(aware, "truncation")[1:] > 1e-6)


FAILURES = [StateError("not finite"), MemoryError()]


@pytest.mark.parametrize("error", FAILURES, ids=lambda error: type(error).__name__)
def test_a_run_goes_on_without_a_companion_that_fails(
    error: Exception, monkeypatch: pytest.MonkeyPatch
) -> None:
    main = replace(free_quench(6), samples=1)
    runs = companion_quenches(main, shorter=None)

    def failing(quench: Quench, **options: Any) -> QuantumRecord:
        if quench is runs[COARSE]:
            raise error
        return simulate(quench, **options)

    monkeypatch.setattr(side_by_side, "simulate", failing)
    side = simulate_all(main, runs, threads=1, watch=SILENT)
    assert list(side.companions) == [LOOSE]
    assert list(side.companion_quenches) == [LOOSE]
    (event,) = side.failures
    assert event["kind"] == "companion_failed"
    assert str(event["detail"]).startswith(f"{COARSE}: ")
    assert WITHOUT[COARSE] in str(event["detail"])
    assert 0.0 < side.state_distance < 1.0


def test_a_process_that_is_ended_gets_a_second_try_of_its_own() -> None:
    """Its neighbours in the pool fail with it through no fault of theirs."""
    pending: Future[QuantumRecord] = Future()
    pending.set_exception(BrokenProcessPool())
    quench = replace(free_quench(4), samples=1)
    task, stop = side_by_side.Task(COARSE, quench), Stop()
    found = side_by_side.fetched(task, side_by_side.Background(None, pending={COARSE: pending}), stop)
    np.testing.assert_array_equal(found.fields["energy_density"], simulate(quench).fields["energy_density"])
    assert found.last_state is None
    assert "ended from outside" in str(side_by_side.failure_event(COARSE, BrokenProcessPool())["detail"])


def test_failures_reach_the_dataset(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """The whole run with one companion lost: sound, with the event, and nothing resolved."""

    def failing(quench: Quench, **options: Any) -> QuantumRecord:
        if quench.chain.sites < 8:
            raise MemoryError
        return simulate(quench, **options)

    monkeypatch.setattr(side_by_side, "simulate", failing)
    monkeypatch.setattr(run_module, "write_report", lambda _folder: None)
    found = open_run(run_module.run(config_file(tmp_path), into=tmp_path / "results"))
    assert check_run(tmp_path / "results") == []
    kinds = [event["kind"] for event in found.provenance["events"]]
    assert "companion_failed" in kinds
    assert SHORT not in found.companions
    budget = found.budget["energy_density"]
    length = budget["error"].values[ERROR_SOURCES.index("length")]
    assert length.min() > 1.0
    assert not budget["euler_resolved"].values.any()
    assert found.provenance["advice"]["windows"][-1]["dominant"] == "length"
