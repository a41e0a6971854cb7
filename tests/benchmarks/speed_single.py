"""What a layer costs: at small bonds, as a share of the matrix-product peak, on two threads, part by part."""

from __future__ import annotations

from collections.abc import Iterator
from statistics import median

import numpy as np

from tests.benchmarks.speed_cases import Line, cores_gain, matmul_peak, two_temperatures
from tests.benchmarks.speed_flops import PARTS, watching
from tests.benchmarks.speed_layers import SITES, WEIGHT, Grown, best_of, described, grown, step_of
from tnquench.evolution.chain_state import ChainState
from tnquench.evolution.cutting import BOND_FLOOR
from tnquench.evolution.threads import threads

#: Small bonds: milliseconds a step of 64 sites, and the bond dimension they are under.
MILLISECONDS, SMALL_BOND, SMALL_SITES, SMALL_WEIGHT = 25.0, 40, 64, 1e-8

#: Least share of the peak at large bonds; least gain by the second thread.
PEAK_SHARE, THREAD_GAIN = 0.6, 1.7

#: Dimensions at which the evolution of `grown` is looked at; one evolution serves all rows.
BONDS = (300, 500, 1000)


def small_lines(sites: int = SMALL_SITES, steps: int = 40) -> Iterator[Line]:
    """Yield the lines of the row `small`."""
    problem = two_temperatures(sites)
    gates = step_of(problem, 0.1)
    for floor, name in ((1, "without bond floor"), (BOND_FLOOR, f"bond floor {BOND_FLOOR}, the default")):
        state = problem.prepared(distance=1e-6, weight=1e-3 * SMALL_WEIGHT)
        spent: list[float] = []
        for _ in range(steps):
            _, seconds, state = Grown(state, gates, SMALL_WEIGHT, 0.0).run(floor)
            if state.bond_dimensions.max() >= SMALL_BOND:
                break
            spent.append(1e3 * seconds)
        what = f"a step of {sites} sites, bonds under {SMALL_BOND}, {name}"
        measured = f"{median(spent):.1f} ms, median of {len(spent)}" if spent else "no such step"
        yield Line(what, f"< {MILLISECONDS:g} ms", measured, bool(spent) and median(spent) < MILLISECONDS)


def large_lines(
    bond: int = BONDS[-1], bonds: tuple[int, ...] = BONDS, sites: int = SITES, weight: float = WEIGHT
) -> Iterator[Line]:
    """Yield the lines of the row `large`; bond : of `bonds`, at which a growing chain is looked at."""
    sample = grown(bonds, sites, weight)[bond]
    peak = matmul_peak()
    with watching() as count:
        sample.run()
    _, seconds = best_of(sample.run, 3)
    peak = max(peak, matmul_peak())
    share = count.total / (seconds * peak)
    measured = (
        f"{share:.0%} ({1e-9 * count.total:.1f} Gflop in {seconds:.2f} s, peak {1e-9 * peak:.1f} Gflop/s)"
    )
    yield Line(f"share of the matrix-product peak, {described(sample)}", f">= {PEAK_SHARE:.0%}", measured,
               share >= PEAK_SHARE)  # fmt: skip


def thread_lines(
    dimensions: tuple[int, ...] = BONDS[1:],
    bonds: tuple[int, ...] = BONDS,
    sites: int = SITES,
    weight: float = WEIGHT,
) -> Iterator[Line]:
    """Yield the lines of the row `threads`; dimensions : of `bonds`, at which threads are compared."""
    for bond in dimensions:
        sample = grown(bonds, sites, weight)[bond]
        walls: dict[int, list[float]] = {1: [], 2: []}
        states: dict[int, ChainState] = {}
        possible: list[float] = []
        for _ in range(3):  # in turn, so that what else the machine does meets both
            for number, seconds in walls.items():
                with threads(number):
                    wall, _, states[number] = sample.run()
                seconds.append(wall)
            possible.append(cores_gain())
        gain = min(walls[1]) / min(walls[2])
        measured = f"{gain:.2f} times ({min(walls[1]):.2f} s / {min(walls[2]):.2f} s)"
        yield Line(f"two threads against one, {described(sample)}", f">= {THREAD_GAIN:g}", measured,
                   gain >= THREAD_GAIN)  # fmt: skip
        same = all(
            np.array_equal(one, two) for one, two in zip(states[1].tensors, states[2].tensors, strict=True)
        )
        yield Line("two independent matrix products at once", "", f"{max(possible):.2f} times")
        yield Line("results of one and two threads", "same bits", "same bits" if same else "differ", same)


def profile_lines(
    dimensions: tuple[int, ...] = (BONDS[0], BONDS[-1]),
    bonds: tuple[int, ...] = BONDS,
    sites: int = SITES,
    weight: float = WEIGHT,
) -> Iterator[Line]:
    """Yield the share of time of each part of a layer, and its rate where its operations are counted."""
    for bond in dimensions:
        sample = grown(bonds, sites, weight)[bond]
        peak = matmul_peak()
        with watching() as count:
            sample.run()
        peak = max(peak, matmul_peak())
        yield Line(f"{described(sample)}: both layers", "", f"{count.total_seconds:.2f} s")
        for part in PARTS:
            seconds, flops = count.seconds[part], count.flops[part]
            rate = f", {flops / (seconds * peak):4.0%} of the peak" if flops and seconds else ""
            yield Line(part, "", f"{seconds / count.total_seconds:6.1%}{rate}")
