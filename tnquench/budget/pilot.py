"""Cheap pilot runs: what a run will cost, and which weight and time step reach a given accuracy.

Growth law used to extrapolate (measured on this engine, D = 0.5, beta 0.5 | 2, weights 1e-6 to 1e-10, t up to
10): the cube root of the bond dimension grows linearly with time and with the logarithm of the discarded
weight. Elsewhere it is a guide: a Hubbard chain (12 sites, U = 4, weight 1e-7) had 111 at t = 1, 60 were
foretold.
"""

from __future__ import annotations

import time
from collections.abc import Callable
from contextlib import suppress
from dataclasses import dataclass, replace
from math import log10

import numpy as np
import psutil
from scipy.optimize import nnls

from tnquench.budget import sources
from tnquench.budget.companions import coarser_steps, loosened
from tnquench.conventions import Reals
from tnquench.model.grading import derive_grading
from tnquench.observables.quench import Progress, QuantumRecord, Quench, simulate

#: Weights of the pilot runs, the looser first. A forecast's are never below ten times the weight of its run.
FORECAST_WEIGHTS = (1e-6, 1e-7)
ACCURACY_WEIGHTS = (1e-6, 1e-7)

#: Shares of the requested accuracy given to truncation and to the time step.
TRUNCATION_SHARE, STEP_SHARE = 0.5, 0.25

#: Range of weights and, in units of the sampling interval, of time steps that the program chooses from.
TIGHTEST_WEIGHT, LOOSEST_WEIGHT = 1e-15, 1e-5
SHORTEST_STEP, LONGEST_STEP = 0.01, 0.5

#: Smallest bonds of the pilots: low, so that the weight rather than the floor decides what they lose.
PILOT_BOND_FLOOR = 8

#: A pilot shows at least so many half layers, whatever they cost.
FEWEST_LAYERS = 8

#: Errors of observables below this are rounding.
NEGLIGIBLE_ERROR = 1e-13


@dataclass(frozen=True)
class Forecast:
    """Estimated cost of a run.

    times (time,), bond_dimension (time,) : largest bond dimension at each sample of the main run
    main_seconds, companion_seconds : processor time of the main run and of all its companions on one core
    memory_bytes : peak of the main run; state_bytes : its tensors at their largest
    pilot_seconds, pilot_time : what the pilot took and the time it reached
    """

    times: Reals
    bond_dimension: Reals
    main_seconds: float
    companion_seconds: float
    memory_bytes: float
    state_bytes: float
    pilot_seconds: float
    pilot_time: float


class _TimeIsUpError(Exception):
    """The pilot has used its time."""


@dataclass
class _Pilot:
    """What a pilot run showed after every half layer: time, dimension of each bond (bond,), and the cost."""

    times: list[float]
    bonds: list[Reals]
    layer_cubes: list[float]
    layer_seconds: list[float]
    preparation_seconds: float = 0.0


def forecast_quench(quench: Quench, *, companions: dict[str, Quench], seconds: float = 15.0) -> Forecast:
    """Estimate the cost of a quench and its companions from two short pilot runs of loose weight.

    seconds : most that each pilot may take after its preparation; where one stops early its bonds are
    extrapolated in time
    """
    began = time.perf_counter()
    weights = [
        max(weight, ratio * quench.discarded_weight)
        for weight, ratio in zip(FORECAST_WEIGHTS, (100, 10), strict=True)
    ]
    pilots = [
        _pilot_run(replace(quench, discarded_weight=w, bond_floor=PILOT_BOND_FLOOR), seconds) for w in weights
    ]
    overhead, per_cube = _cost_law(pilots)
    samples = quench.every * np.arange(quench.samples + 1, dtype=np.float64)

    def cost(run: Quench) -> tuple[float, Reals]:
        bonds = _extrapolate(pilots, weights, samples, run)
        layers = _half_layers(pilots, quench, steps=run.steps)
        cuts = layers * (run.chain.sites - 1) / 2
        cubes = layers / 2 * np.power(0.5 * (bonds[1:] + bonds[:-1]), 3).sum()
        return pilots[0].preparation_seconds + cuts * run.samples * overhead + per_cube * cubes, bonds

    main, bonds = cost(quench)
    largest = bonds.max(axis=1)
    state, workspace = _memory(quench, bonds)
    return Forecast(
        times=samples,
        bond_dimension=largest,
        main_seconds=main,
        companion_seconds=sum(cost(run)[0] for run in companions.values()),
        memory_bytes=_process_bytes() + state + workspace,
        state_bytes=state,
        pilot_seconds=time.perf_counter() - began,
        pilot_time=pilots[1].times[-1],
    )


#: Arrays of the size of a two-site tensor held at once beside the state. Measured: 4.0 at bond 648, 3.0 at
#: 1100 (`python -m tests.benchmarks.speed memory`). 2.3 are arrays alive at the same time: the tensor itself,
#: frames and images of a cut or, while measuring, environments; the rest is the allocator's.
WORKSPACE_PAIRS = 4.5


def _memory(quench: Quench, bonds: Reals) -> tuple[float, float]:
    """Return the most bytes that the state takes at bonds (time, bond), and what a cut needs beside it.

    A site holds one matrix for each local operator of a charge, two sites one for each charge of the bond
    between them and each pair of local operators. The start may have larger bonds than any later state: it is
    cut at a far lower weight.
    """
    grading = derive_grading(
        (*quench.chain.bond_terms, *quench.start_terms), qubits_per_site=quench.chain.qubits_per_site
    )
    copies, pairs = grading.multiplicity, grading.sectors * grading.multiplicity**2
    state = copies * max(_state_bytes(sample) for sample in bonds)
    return state, WORKSPACE_PAIRS * 8.0 * pairs * float(bonds.max()) ** 2


def _half_layers(pilots: list[_Pilot], quench: Quench, *, steps: int) -> float:
    """Return how many half layers a run with so many steps in each interval takes between two samples.

    They are counted in the pilots, whose steps are those of `quench`: terms that reach beyond neighbours need
    more of them. One closes each interval whatever the steps.
    """
    times = np.array(max((pilot.times for pilot in pilots), key=len))
    whole = np.floor(times[-1] / quench.every + 1e-9) * quench.every
    counted_to = whole if whole > 0.0 else times[-1]
    counted = np.count_nonzero((times > 0.0) & (times <= counted_to + 1e-9))
    return float((counted * quench.every / counted_to - 1.0) * steps / quench.steps + 1.0)


def _process_bytes() -> float:
    """Return the memory this process holds now: interpreter and libraries."""
    return float(psutil.Process().memory_info().rss)


def _state_bytes(bonds: Reals) -> float:
    """Return the bytes of a chain with these inner bond dimensions in the finest grading: one dense matrix a
    site."""
    ends = np.concatenate(([1.0], bonds, [1.0]))
    return float(8.0 * (ends[:-1] * ends[1:]).sum())


def _pilot_run(quench: Quench, seconds: float) -> _Pilot:
    """Run a quench for at most so many seconds after its preparation and keep its bonds and costs."""
    pilot = _Pilot([], [], [], [])
    began = time.perf_counter()

    def watch(progress: Progress) -> None:
        if not pilot.times:
            pilot.preparation_seconds = time.perf_counter() - began - progress.layer_seconds
        spent = time.perf_counter() - began - pilot.preparation_seconds
        sizes = progress.bond_dimensions.astype(np.float64)
        pilot.times.append(progress.time)
        pilot.bonds.append(sizes)
        pilot.layer_cubes.append(float((sizes**3).sum()) / 2.0)
        pilot.layer_seconds.append(progress.layer_seconds)
        if spent > seconds and len(pilot.times) > FEWEST_LAYERS:
            raise _TimeIsUpError

    with suppress(_TimeIsUpError):
        simulate(quench, report=watch)
    return pilot


def _cost_law(pilots: list[_Pilot]) -> tuple[float, float]:
    """Fit seconds of a half layer = cuts * overhead + per_cube * sum of half its bonds' cubes; return both
    constants."""
    cubes = np.concatenate([pilot.layer_cubes for pilot in pilots])
    seconds = np.concatenate([pilot.layer_seconds for pilot in pilots])
    cuts = np.full(len(cubes), len(pilots[0].bonds[0]) / 2.0)
    typical = seconds <= 10.0 * np.median(seconds)
    (overhead, per_cube), _ = nnls(np.column_stack([cuts, cubes])[typical], seconds[typical])
    return float(overhead), float(per_cube)


def _extrapolate(pilots: list[_Pilot], weights: list[float], samples: Reals, run: Quench) -> Reals:
    """Return the expected dimension of each bond at each sample, shape (time, bond), for the weight of
    `run`."""
    loose, tight = ([np.cbrt(_bonds_at(pilot, t)) for t in samples] for pilot in pilots)
    decades = log10(weights[1] / run.discarded_weight) / max(log10(weights[0] / weights[1]), 1e-9)
    cube_roots = np.array(
        [b + max(decades, -1.0) * np.maximum(b - a, 0.0) for a, b in zip(loose, tight, strict=True)]
    )
    bonds = cube_roots**3
    inner = np.arange(1, bonds.shape[1] + 1)
    depth = np.minimum(np.minimum(inner, inner[::-1]), 15)
    full = np.power(4.0**run.chain.qubits_per_site, depth)
    return np.asarray(np.minimum(np.minimum(np.maximum(bonds, run.bond_floor), run.bond_ceiling), full))


def _bonds_at(pilot: _Pilot, moment: float) -> Reals:
    """Return a pilot's bonds at a time; beyond its end the profile widens and its cube root grows linearly
    from its least value: the first cuts shrink bonds that the start has kept for its own, lower weight."""
    index = int(np.searchsorted(pilot.times, moment - 1e-9))
    if index < len(pilot.times):
        return pilot.bonds[index]
    stretch = moment / pilot.times[-1]
    last = pilot.bonds[-1]
    middle = 0.5 * (len(last) - 1)
    widened = np.interp(middle + (np.arange(len(last)) - middle) / stretch, np.arange(len(last)), last)
    least = np.cbrt(np.min(pilot.bonds, axis=0))
    return np.asarray((least + np.maximum(np.cbrt(widened) - least, 0.0) * stretch) ** 3)


def choose_settings(
    build: Callable[[float, float], Quench], *, accuracy: float, time_step: float, fixed_step: bool
) -> tuple[float, float]:
    """Choose discarded weight and time step for an accuracy on every observable, by pilot runs of loose
    weight.

    build : (weight, time step) -> quench; time_step : the pilots' step; fixed_step : keep it
    Returns (weight, time step): truncation is to stay under half the accuracy, the step's error under a
    quarter. The truncation error that the budget would claim is measured at two weights and continued as a
    power law.
    """
    pilots = [_weight_pilot(build(weight, time_step)) for weight in ACCURACY_WEIGHTS]
    claims = [max(pilot.claimed, NEGLIGIBLE_ERROR) for pilot in pilots]
    steepness = np.log(claims[0] / claims[1]) / np.log(ACCURACY_WEIGHTS[0] / ACCURACY_WEIGHTS[1])
    power = float(np.clip(steepness, sources.LEAST_POWER, 1.0))
    weight = ACCURACY_WEIGHTS[1] * (TRUNCATION_SHARE * accuracy / claims[1]) ** (1.0 / power)
    step = time_step if fixed_step else _step_for(pilots[1], STEP_SHARE * accuracy)
    return float(np.clip(weight, TIGHTEST_WEIGHT, LOOSEST_WEIGHT)), step


@dataclass(frozen=True)
class _WeightPilot:
    """A loose companion of a pilot run and the largest truncation error that the budget claims for the
    pilot."""

    loose_quench: Quench
    loose: QuantumRecord
    claimed: float


def _weight_pilot(quench: Quench) -> _WeightPilot:
    """Run a pilot with the companion that its truncation estimate needs."""
    loose_quench = loosened(quench)
    records = [simulate(run) for run in (quench, loose_quench)]
    claimed = 0.0
    for name in records[0].fields:
        main, loose = (
            sources.TruncatedRun(record.fields[name], record.discarded_weight) for record in records
        )
        claimed = max(claimed, float(sources.truncation(main=main, loose=loose).max()))
    return _WeightPilot(loose_quench, records[1], claimed)


def _step_for(pilot: _WeightPilot, allowed: float) -> float:
    """Return the time step whose Trotter error is as large as allowed, from a pilot and the same with longer
    steps."""
    quench = pilot.loose_quench
    steps = coarser_steps(quench.steps)
    coarse = simulate(replace(quench, steps=steps))
    error = max(
        float(
            sources.time_step(
                fine=pilot.loose.fields[name],
                coarse=coarse.fields[name],
                step_ratio=quench.steps / steps,
                order=quench.trotter_order,
            ).max()
        )
        for name in coarse.fields
    )
    wanted = quench.time_step * (allowed / max(error, NEGLIGIBLE_ERROR)) ** (1.0 / quench.trotter_order)
    return float(np.clip(wanted, SHORTEST_STEP * quench.every, LONGEST_STEP * quench.every))
