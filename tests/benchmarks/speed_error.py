"""Time to reach a given true error: this engine and quimb, each with its best order, step and weight.

The error is the largest deviation of the energy density in the middle of the chain, at any whole time, from a
run of this engine whose cuts and steps err far less. Both sides start from the same state, so that its own
error is in neither. On a chain of 32 sites to t = 4, so that all runs together take minutes.
"""

from __future__ import annotations

import sys
import time
import warnings
from collections.abc import Callable, Iterator
from dataclasses import dataclass

import numpy as np

from tests.benchmarks.speed_cases import Line, Problem, two_temperatures
from tests.benchmarks.speed_quimb import general_purpose, quimb_energy
from tnquench.conventions import Reals
from tnquench.evolution.chain_state import ChainState
from tnquench.evolution.cutting import CutRule

SITES, UNTIL, TARGETS = 32, 4, (1e-4, 1e-5)

#: Bonds looked at on each side of the middle one.
REACH = 6

#: Order and steps that are tried, with weights from loose to tight until the error no longer falls.
SCHEDULES = ((4, 0.25), (2, 0.05), (4, 0.5), (2, 0.1), (2, 0.02))
WEIGHTS = (1e-6, 1e-7, 1e-8, 1e-9, 1e-10, 1e-11)

#: The weight of the reference, the least that the fast cuts resolve, and its step at order 4. A run of ten
#: times the weight with steps of 0.125 differs from it by 2e-6.
REFERENCE_WEIGHT, REFERENCE_STEP = 1e-12, 0.1

#: A run of which a tenfold smaller weight leaves this part of the error is at its step's error.
STALLED = 0.8

#: Time (whole) and bond -> energies, and the processor time that the evolution took.
Measured = tuple[Reals, float]


@dataclass(frozen=True)
class Trial:
    """One run: its settings, true error, and processor time."""

    order: int
    time_step: float
    weight: float
    error: float
    seconds: float

    @property
    def settings(self) -> str:
        return f"order {self.order}, dt = {self.time_step:.2g}, weight {self.weight:g}"


def middle(sites: int) -> range:
    """The bonds looked at."""
    centre = sites // 2 - 1
    return range(max(centre - REACH, 0), min(centre + REACH + 1, sites - 1))


def ours(
    problem: Problem, start: ChainState, until: int, weight: float, order: int, time_step: float
) -> Measured:
    """Energies (time, bond) and seconds of this engine."""
    state, rule = start.copy(), CutRule(weight, bond_floor=1)
    moments = problem.evolution(state, rule, until=until, time_step=time_step, order=order)
    next(moments)
    rows, seconds = [], 0.0
    for _ in range(until):
        began = time.process_time()
        moment = next(moments)
        seconds += time.process_time() - began
        rows.append(problem.energies(moment.state)[list(middle(start.sites))])
    return np.array(rows), seconds


def theirs(start: ChainState, until: int, weight: float, order: int, time_step: float) -> Measured:
    """The same of quimb."""
    other = general_purpose(start, anisotropy=0.5, weight=weight, time_step=time_step)
    rows, seconds = [], 0.0
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        for unit in range(1, until + 1):
            began = time.process_time()
            other.update_to(float(unit), order=order)
            seconds += time.process_time() - began
            rows.append([quimb_energy(other, bond, 0.5) for bond in middle(start.sites)])
    return np.array(rows), seconds


def scan(
    run: Callable[[float, int, float], Measured], reference: Reals, targets: tuple[float, ...]
) -> list[Trial]:
    """Try schedules and weights; a schedule is left once all targets are met, its error stays, or it takes
    longer than another that met them all."""
    trials: list[Trial] = []
    for order, time_step in SCHEDULES:
        before = np.inf
        for weight in WEIGHTS:
            energies, seconds = run(weight, order, time_step)
            error = float(np.abs(energies - reference).max())
            trials.append(Trial(order, time_step, weight, error, seconds))
            told = f"error: {trials[-1].settings}: {error:.1e} in {seconds:.1f} s"
            print(told, file=sys.stderr, flush=True)
            enough = min((trial.seconds for trial in trials if trial.error <= min(targets)), default=np.inf)
            if seconds >= enough or error > STALLED * before:
                break
            before = error
    return trials


def error_lines(
    sites: int = SITES, until: int = UNTIL, targets: tuple[float, ...] = TARGETS
) -> Iterator[Line]:
    """Yield the lines of the row `error`."""
    problem = two_temperatures(sites)
    start = problem.prepared(distance=1e-7, weight=1e-14)
    reference, _ = ours(problem, start, until, REFERENCE_WEIGHT, 4, REFERENCE_STEP)
    mine = scan(lambda *settings: ours(problem, start, until, *settings), reference, targets)
    others = scan(lambda *settings: theirs(start, until, *settings), reference, targets)
    for target in targets:
        best = [
            min((trial for trial in trials if trial.error <= target), key=lambda t: t.seconds, default=None)
            for trials in (mine, others)
        ]
        name = f"time to true error {target:g}, {sites} sites, t = {until}"
        if best[0] is None or best[1] is None:
            yield Line(name, "", "not reached by " + ("ours" if best[0] is None else "quimb"))
            continue
        ratio = best[1].seconds / best[0].seconds
        yield Line(name, "", f"{ratio:.1f} times ({best[1].seconds:.1f} s / {best[0].seconds:.2f} s)")
        yield Line("  ours", "", f"{best[0].settings}: error {best[0].error:.1e}")
        yield Line("  quimb", "", f"{best[1].settings}: error {best[1].error:.1e}")
