"""The rigorous bound, the totals and the events of real runs."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from tests.budget_cases import (
    SETTINGS,
    SITES,
    free_quench,
    positions_of,
    record,
)
from tests.config_cases import toml
from tests.oracles.free_fermions import free_evolution
from tnquench.assemble import build_quench
from tnquench.budget.assess import assess
from tnquench.config.load import read_config
from tnquench.config.schema import Config
from tnquench.conventions import Reals
from tnquench.evolution import layers
from tnquench.evolution.cutting import Cut, CutRule, cut
from tnquench.hydro.prediction import Prediction
from tnquench.observables.quench import Progress, QuantumRecord, Quench, simulate
from tnquench.outcome import Pieces, QuantumSide, run_pieces

# The rigorous bound on a run that truncates visibly.

SPIN = {
    "x": np.array([[0.0, 0.5], [0.5, 0.0]]),
    "y": np.array([[0.0, -0.5j], [0.5j, 0.0]]),
    "z": np.diag([0.5, -0.5]),
}


def dense_norms() -> dict[str, float]:
    """Largest eigenvalues of the observables at D = 0 and J = 1, written out on three sites."""

    def product(**sites: str) -> Any:
        factors = [SPIN[sites[key]] if key in sites else np.eye(2) for key in ("a", "b", "c")]
        return np.kron(np.kron(factors[0], factors[1]), factors[2])

    first = product(a="x", b="x") + product(a="y", b="y")
    second = product(b="x", c="x") + product(b="y", c="y")
    operators = {
        "energy_density": first,
        "energy_current": 1j * (first @ second - second @ first),
        "charge_density": product(a="z"),
        "charge_current": product(a="x", b="y") - product(a="y", b="x"),
    }
    return {name: float(np.abs(np.linalg.eigvalsh(matrix)).max()) for name, matrix in operators.items()}


def simulate_with_cuts(
    quench: Quench, monkeypatch: pytest.MonkeyPatch
) -> tuple[QuantumRecord, list[list[float]]]:
    """Run a quench; return also the weights that its real-time cuts lost in each sampling interval.

    The rounding of a weight measured as a difference of norms is part of what may be lost.
    """
    lost: list[list[float]] = [[]]

    def listening(blocks: Reals, rule: CutRule, *, guess: Reals, squared_norm: float) -> Cut:
        result = cut(blocks, rule, guess=guess, squared_norm=squared_norm)
        if rule.weight_target == quench.discarded_weight:  # the start is cut by a rule of its own
            assert 0.0 <= result.uncertainty < 1e-14
            lost[-1].append(result.discarded_weight + result.uncertainty)
        return result

    def next_interval(progress: Progress) -> None:
        if abs(progress.time / quench.every - len(lost)) < 1e-9:
            lost.append([])

    with monkeypatch.context() as patch:
        patch.setattr(layers, "cut", listening)
        return simulate(quench, report=next_interval), lost[:-1]


def test_rigorous_bound_holds_and_is_the_sum_of_all_angles(monkeypatch: pytest.MonkeyPatch) -> None:
    """The same steps almost without cuts are the truth, so that nothing but the cuts makes a difference."""
    quench = free_quench()
    cut_run, lost = simulate_with_cuts(quench, monkeypatch)
    uncut_run, traces = simulate_with_cuts(replace(quench, discarded_weight=1e-14), monkeypatch)
    angles, traced = (
        np.cumsum([0.0, *(np.arcsin(np.sqrt(weights)).sum() for weights in run)]) for run in (lost, traces)
    )
    assert len(lost) == quench.samples
    np.testing.assert_allclose(cut_run.cuts, np.cumsum([0, *(len(weights) for weights in lost)]))
    assert 0.1 < angles[-1] < 0.5 * np.pi
    budgets = assess(
        cut_run, {}, {}, positions=positions_of(quench.chain.sites), settings=replace(SETTINGS, reach=np.inf)
    )
    for name, norm in dense_norms().items():
        bound = 2.0 * norm * np.sin(np.minimum(angles, 0.5 * np.pi))
        np.testing.assert_allclose(budgets[name].bound, np.tile(bound[:, None], budgets[name].bound.shape[1]))
        true = np.abs(cut_run.fields[name] - uncut_run.fields[name])
        assert true[1:].max(axis=1).min() > 1e-6, name
        left_over = 2.0 * norm * np.sin(traced)  # what the reference may itself have lost
        assert np.all(true <= budgets[name].bound + left_over[:, None] + 1e-13), name
        if name.startswith("energy"):
            assert true.max() > 0.01 * bound[-1], "the bound is no vacuous number either"


# Totals and events of a whole run.


def config_of(*, sites: int, until: float, width: float = 0.0, field: bool = True, **budget: Any) -> Config:
    start: dict[str, Any] = {"beta": {"shape": "step", "left": 0.5, "right": 2.0, "width": width}}
    if field:
        start["beta_field"] = {"shape": "uniform", "value": 0.8}
    tables = {
        "chain": {"sites": sites, "anisotropy": 0.0},
        "start": start,
        "evolution": {"until": until, "every": 0.5, "discarded_weight": 1e-8},
        "budget": {"companions": "none", **budget},
    }
    return read_config(toml(tables), subject="a.toml")


def pieces_of(config: Config, main: QuantumRecord, prediction: Prediction | None) -> Pieces:
    quench = build_quench(config, weight=1e-8, time_step=0.25)
    side = QuantumSide(quench, main, {}, {})
    return run_pieces(config, Path("a.toml"), side, prediction, "no prediction was asked for")


def test_totals_are_those_of_energy_and_of_charge() -> None:
    """Against free fermions; the field holds the magnetisation far from the energy."""
    config = config_of(sites=8, until=1.0)
    main = simulate(build_quench(config, weight=1e-8, time_step=0.25))
    exact = free_evolution(
        sites=8,
        beta=np.array([0.5, 0.5, 0.5, 1.25, 2.0, 2.0, 2.0]),
        beta_field=np.full(8, 0.8),
        times=main.times,
    )
    group = pieces_of(config, main, None).groups["quantum"]
    charge = exact["charge_density"].sum(axis=1)
    assert charge[0] > 0.5 > 0.0 > exact["total_energy"][0]
    for energies, charges in (
        (main.totals["total_energy"], main.totals["total_charge"]),
        (group["total_energy"], group["total_charge"]),
    ):
        np.testing.assert_allclose(energies, exact["total_energy"], atol=1e-3)
        np.testing.assert_allclose(charges, charge, atol=1e-3)
    for total, density in (("total_energy", "energy_density"), ("total_charge", "charge_density")):
        np.testing.assert_allclose(main.totals[total], main.fields[density].sum(axis=1), rtol=1e-12)


@pytest.mark.parametrize(
    ("cone", "until", "meets"),
    [((-1.0, 1.0), 2.0, False), ((-1.0, 1.0), 9.0, True), ((-0.1, 6.0), 2.0, True), ((-6.0, 0.1), 2.0, True)],
)
def test_light_cone_at_the_ends_is_an_event(cone: tuple[float, float], until: float, meets: bool) -> None:
    """A smooth start on 16 sites: the ends are 7.5 spacings from the middle."""
    config = config_of(sites=SITES, until=until, width=0.5, field=False)
    main = record(samples=round(until / 0.5) + 1)
    prediction = Prediction(
        fields=main.fields,
        grid_error={name: np.zeros_like(values) for name, values in main.fields.items()},
        strings_error={name: np.zeros_like(values) for name, values in main.fields.items()},
        light_cone=cone,
        method="characteristics",
        references=(),
    )
    events = pieces_of(config, main, prediction).provenance["events"]
    assert [event["kind"] for event in events] == ["light_cone_at_end"] * meets
    events = pieces_of(config, main, None).provenance["events"]
    assert [event["kind"] for event in events] == ["no_prediction"]
