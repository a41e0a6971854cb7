"""Forecast and choice of settings on pilots that obey the stated laws exactly."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from types import SimpleNamespace

import numpy as np
import pytest

from tests.budget_cases import (
    NAMES,
    SITES,
    free_quench,
    noise,
    record,
)
from tnquench.budget import pilot, sources
from tnquench.conventions import Reals, bond_positions
from tnquench.model.chain import start_terms
from tnquench.model.fermions import hubbard_chain
from tnquench.model.spins import xxz_chain
from tnquench.observables.quench import Progress, QuantumRecord, Quench

# The forecast: pilots replaced by runs that obey the stated laws exactly, on a clock of their own.

OVERHEAD, PER_CUBE, PREPARATION_SECONDS = 3e-4, 2e-9, 0.75
FORECAST_SITES, FORECAST_SAMPLES = 24, 6


class Laboratory:
    """Stands in for `simulate`: the cube root of a bond is 2 + time * decades below a weight of 1e-5.

    spread : whether the growth has the shape of a light cone of velocity 1 rather than the same everywhere
    a_step : half layers of a time step; one more closes each interval
    """

    def __init__(self, *, spread: bool = False, a_step: int = 10) -> None:
        self.clock = 100.0
        self.spread = spread
        self.a_step = a_step
        self.weights: list[float] = []

    def perf_counter(self) -> float:
        return self.clock

    def bonds(self, quench: Quench, moment: float) -> Reals:
        positions = bond_positions(quench.chain.sites)
        age = np.maximum(moment - np.abs(positions), 0.0) if self.spread else np.full(len(positions), moment)
        roots = 2.0 + age * -np.log10(quench.discarded_weight / 1e-5)
        depth = 0.5 * len(positions) + 0.5 - np.abs(positions)
        operators = 4.0**quench.chain.qubits_per_site
        return np.asarray(np.minimum(np.rint(roots**3), operators**depth))

    def simulate(self, quench: Quench, *, report: Callable[[Progress], None]) -> None:
        self.weights.append(quench.discarded_weight)
        self.clock += PREPARATION_SECONDS
        layers = self.a_step * quench.steps + 1
        for layer in range(quench.samples * layers + 1):
            moment = layer * quench.every / layers
            bonds = self.bonds(quench, moment)
            seconds = half_layer_seconds(bonds)
            self.clock += seconds
            report(Progress(moment, bonds.astype(np.int64), seconds))


def half_layer_seconds(bonds: Reals) -> float:
    """The same time for each cut (every other bond) and a cost that grows as the cube of the bond."""
    return float(OVERHEAD * len(bonds) / 2.0 + PER_CUBE * (bonds**3).sum() / 2.0)


def forecast_chain(*, sites: int = FORECAST_SITES, samples: int = FORECAST_SAMPLES) -> Quench:
    chain = xxz_chain(sites=sites, anisotropy=0.5)
    return replace(
        free_quench(),
        chain=chain,
        start_terms=start_terms(chain, beta=[1.0] * (sites - 1)),
        every=1.0,
        samples=samples,
        trotter_order=4,
        discarded_weight=1e-8,
    )


def installed(monkeypatch: pytest.MonkeyPatch, *, spread: bool = False, a_step: int = 10) -> Laboratory:
    laboratory = Laboratory(spread=spread, a_step=a_step)
    monkeypatch.setattr(pilot, "simulate", laboratory.simulate)
    monkeypatch.setattr(pilot, "time", SimpleNamespace(perf_counter=laboratory.perf_counter))
    return laboratory


def true_seconds(laboratory: Laboratory, quench: Quench, *, layers_per_interval: int) -> float:
    """Half layers of each interval at the mean of its first and last bonds."""
    total = PREPARATION_SECONDS
    for sample in range(quench.samples):
        ends = [laboratory.bonds(quench, (sample + part) * quench.every) for part in (0, 1)]
        total += layers_per_interval * half_layer_seconds(0.5 * (ends[0] + ends[1]))
    return total


@pytest.mark.parametrize("a_step", [10, 2, 24])
def test_forecast_finds_the_cube_law_and_the_growth_law(a_step: int, monkeypatch: pytest.MonkeyPatch) -> None:
    """Two pilots at 100 and 10 times the weight give bonds and seconds of the run and its companions.

    The half layers of a step are those of the pilots: farther couplings need more of them.
    """
    laboratory, quench = installed(monkeypatch, a_step=a_step), forecast_chain()
    count = 3 * a_step + 1
    looser = replace(quench, discarded_weight=1e-7)
    companions = {"once": looser, "twice": looser, "coarse": replace(looser, steps=1)}
    found = pilot.forecast_quench(quench, companions=companions, seconds=1e9)
    assert laboratory.weights == pytest.approx([1e-6, 1e-7])
    expected = [laboratory.bonds(quench, t).max() for t in range(FORECAST_SAMPLES + 1)]
    np.testing.assert_allclose(found.bond_dimension, expected, rtol=1e-9)
    np.testing.assert_allclose(found.times, np.arange(FORECAST_SAMPLES + 1.0))
    main = true_seconds(laboratory, quench, layers_per_interval=count)
    other = true_seconds(laboratory, looser, layers_per_interval=count)
    assert main > 3.0 * other > 3.0 * PREPARATION_SECONDS
    assert found.main_seconds == pytest.approx(main, rel=1e-6)
    coarse = true_seconds(laboratory, looser, layers_per_interval=a_step + 1)
    assert found.companion_seconds == pytest.approx(2.0 * other + coarse, rel=1e-6)
    assert found.pilot_time == FORECAST_SAMPLES
    assert found.pilot_seconds == pytest.approx(laboratory.clock - 100.0)


def test_pilots_stay_above_the_weight_of_a_loose_run(monkeypatch: pytest.MonkeyPatch) -> None:
    laboratory = installed(monkeypatch)
    pilot.forecast_quench(replace(forecast_chain(), discarded_weight=1e-6), companions={}, seconds=1e9)
    assert laboratory.weights == pytest.approx([1e-4, 1e-5])


def test_forecast_keeps_floor_and_ceiling(monkeypatch: pytest.MonkeyPatch) -> None:
    installed(monkeypatch)
    quench = replace(forecast_chain(), bond_floor=20, bond_ceiling=3000)
    found = pilot.forecast_quench(quench, companions={}, seconds=1e9)
    assert found.bond_dimension[0] == 20
    assert found.bond_dimension[-1] == 3000


def test_forecast_goes_on_where_the_pilot_ran_out_of_time(monkeypatch: pytest.MonkeyPatch) -> None:
    """Cube roots grow linearly with time and their profile widens as a light cone does."""
    laboratory = installed(monkeypatch, spread=True, a_step=0)  # one report a sample
    quench = forecast_chain(sites=40, samples=16)
    found = pilot.forecast_quench(quench, companions={}, seconds=0.0)
    assert found.pilot_time == 8.0, "a pilot takes nine samples at least"
    expected = [laboratory.bonds(quench, t).max() for t in range(17)]
    np.testing.assert_allclose(found.bond_dimension, expected, rtol=1e-9)
    last = np.concatenate([[1.0], laboratory.bonds(quench, 16.0), [1.0]])
    still = np.concatenate([[1.0], laboratory.bonds(quench, 8.0), [1.0]])
    doubles = found.state_bytes / 8.0
    copies = doubles / (last[1:] * last[:-1]).sum()
    assert np.abs(copies - np.array([1.0, 2.0, 4.0])).min() < 0.1
    assert doubles > 10.0 * (still[1:] * still[:-1]).sum()
    assert found.memory_bytes > found.state_bytes


@pytest.mark.parametrize(("doped", "copies", "pairs"), [(False, 2, 8 * 4), (True, 4, 4 * 16)])
def test_memory_of_two_qubits_a_site(
    doped: bool, copies: int, pairs: int, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Sixteen local operators fall into eight charges of two, with a chemical potential into four of four."""
    laboratory, sites = installed(monkeypatch), 12
    chain = hubbard_chain(sites=sites, repulsion=4.0)
    potentials = {"charge_density": [0.3] * sites} if doped else {}
    terms = start_terms(chain, beta=[1.0] * (sites - 1), potentials=potentials)
    quench = replace(forecast_chain(sites=sites), chain=chain, start_terms=terms)
    monkeypatch.setattr(pilot, "_process_bytes", lambda: 1e6)
    found = pilot.forecast_quench(quench, companions={}, seconds=1e9)
    inner = laboratory.bonds(quench, FORECAST_SAMPLES)
    sizes = np.concatenate([[1.0], inner, [1.0]])
    assert found.state_bytes == pytest.approx(8.0 * copies * (sizes[1:] * sizes[:-1]).sum(), rel=1e-9)
    workspace = found.memory_bytes - found.state_bytes - 1e6
    assert workspace == pytest.approx(pilot.WORKSPACE_PAIRS * 8.0 * pairs * inner.max() ** 2, rel=1e-9)
    assert sizes[1] == 16.0, "the outermost bond holds all operators of the end site"


# The choice of weight and step: errors of known law in both.


def lawful(quench: Quench) -> QuantumRecord:
    """A run whose errors are weight^0.55 and step^order, each with a pattern of its own."""
    cuts, step = quench.discarded_weight**0.55, 5e-4 * quench.time_step**quench.trotter_order

    def add(name: str, values: Reals) -> Reals:
        return np.asarray(values + cuts * noise(7, 1.0)(name, 0.0 * values) + step * np.cos(5.0 * values))

    return record(add, weight=quench.discarded_weight)


def claims(quench: Quench) -> tuple[float, float]:
    """Largest errors over all observables that the estimates would claim for truncation and step."""
    weights = [quench.discarded_weight, 30.0 * quench.discarded_weight]
    main, loose = (lawful(replace(quench, discarded_weight=weight)) for weight in weights)
    coarse = lawful(replace(quench, discarded_weight=weights[1], steps=quench.steps // 2))
    ratio = quench.steps / (quench.steps // 2)
    cutting, stepping = 0.0, 0.0
    for name in NAMES:
        runs = [sources.TruncatedRun(run.fields[name], run.discarded_weight) for run in (main, loose)]
        found = sources.truncation(main=runs[0], loose=runs[1])
        cutting = max(cutting, float(found.max()))
        found = sources.time_step(
            fine=loose.fields[name],
            coarse=coarse.fields[name],
            step_ratio=ratio,
            order=quench.trotter_order,
        )
        stepping = max(stepping, float(found.max()))
    return cutting, stepping


@pytest.mark.parametrize("order", [2, 4])
def test_chosen_settings_meet_their_shares_of_the_accuracy(
    order: int, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(pilot, "simulate", lawful)

    def build(weight: float, time_step: float) -> Quench:
        steps = round(1.0 / time_step)
        quench = replace(free_quench(SITES), every=1.0, trotter_order=order)
        return replace(quench, discarded_weight=weight, steps=steps)

    accuracy = 1e-5
    weight, step = pilot.choose_settings(build, accuracy=accuracy, time_step=0.125, fixed_step=False)
    assert 1e-15 < weight < 1e-7
    assert claims(build(weight, 0.125))[0] == pytest.approx(0.5 * accuracy, rel=0.01)
    scale = (step / 0.125) ** order
    assert 0.01 < step < 0.5
    assert step != pytest.approx(0.125, rel=0.05)
    assert scale * claims(build(1e-7, 0.125))[1] == pytest.approx(0.25 * accuracy, rel=0.01)
    kept = pilot.choose_settings(build, accuracy=accuracy, time_step=0.125, fixed_step=True)
    assert kept == pytest.approx((weight, 0.125))
