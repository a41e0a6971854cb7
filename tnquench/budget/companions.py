"""Companion runs: the main run again at looser settings, together no more work than the main run.

With w the main weight, runs at (r w), (r w, at least twice the step) and (r w, that step, a shorter chain)
isolate each source of error: each differs from the one before it by one thing alone.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from math import isclose
from typing import Protocol

import numpy as np

from tnquench.conventions import Reals
from tnquench.observables.quench import Quench

#: Factor r by which the weight of all companions is larger than the main run's, and the one by which their
#: bond floors and ceilings are smaller. At ten times the weight runs are dear and may err as little as the
#: main run, at a hundred times errors saturate and hide that of the step.
WEIGHT_RATIO, BOND_RATIO = 30.0, 3

#: A refined run has so many times less weight than the run it refines, where its user does not choose.
REFINEMENT = 10.0

WEIGHT = "weight_"
LOOSE, COARSE, SHORT = f"{WEIGHT}{WEIGHT_RATIO:g}", "step_2", "length"


#: What becomes of the budget without a companion.
WITHOUT: dict[str, str] = {
    LOOSE: "truncation is estimated from the run with the longer step and the least power of the weight, the "
    "error of the step from the main run, which claims more",
    COARSE: "the error of the time step is unknown and claimed as twice the norm of each observable, and the "
    "influence of the ends is measured from the main run, which claims more",
    SHORT: "the influence of the ends is unknown and claimed as twice the norm of each observable",
}


class CompanionRun(Protocol):
    """What the budget takes of a companion run; a `QuantumRecord` has it all.

    fields : observable -> (time, place); discarded_weight (time, bond), nan where it is not known
    weight_asked, time_step : its settings, nan where they are not known
    """

    @property
    def fields(self) -> Mapping[str, Reals]: ...  # noqa: D102

    @property
    def discarded_weight(self) -> Reals: ...  # noqa: D102

    @property
    def weight_asked(self) -> float: ...  # noqa: D102

    @property
    def time_step(self) -> float: ...  # noqa: D102

    @property
    def seconds(self) -> float: ...  # noqa: D102


def ladder(companions: Mapping[str, CompanionRun]) -> list[str]:
    """Return the companions that differ from the main run by what their cuts lose alone, tightest first."""
    rungs = [name for name in companions if name.startswith(WEIGHT) and name != COARSE]
    return sorted(rungs, key=lambda name: float(name.removeprefix(WEIGHT)))


def rung_of(companions: Mapping[str, CompanionRun], name: str) -> str | None:
    """Return the companion that has the weight of `name` and the main run's step and length, None if it is
    missing.

    Where weights are not known it is the tightest one.
    """
    weight, rungs = companions[name].weight_asked, ladder(companions)
    if np.isnan(weight):
        return next(iter(rungs), None)
    return next((rung for rung in rungs if isclose(companions[rung].weight_asked, weight)), None)


def partner(companions: Mapping[str, CompanionRun], name: str) -> str | None:
    """Return the companion from which `name` differs by the step or the length alone, None if it is missing.

    For the longer step that is the run of the same weight, for the shorter chain the one of the same weight
    and step, be it the main run's step (as in older datasets) or the longer one.
    """
    rung = rung_of(companions, name)
    if name == COARSE or rung is None:
        return rung
    step, weight = companions[name].time_step, companions[name].weight_asked
    if np.isnan(step) or isclose(step, companions[rung].time_step):
        return rung
    coarse = companions.get(COARSE)
    if coarse is None or not (isclose(coarse.time_step, step) and isclose(coarse.weight_asked, weight)):
        return None
    return COARSE


def shorter_length(sites: int) -> int | None:
    """Return the length of the shorter companion, of the same parity, or None if the chain is too short to
    shorten."""
    removed = 2 * max(1, round(sites / 8))
    return sites - removed if sites - removed >= 4 else None


def companion_quenches(main: Quench, *, shorter: Quench | None) -> dict[str, Quench]:
    """Return the companions of a main run by name.

    shorter : the main run on a shorter chain, or None to leave the influence of the ends unestimated
    """
    loose, steps = loosened(main), coarser_steps(main.steps)
    runs = {LOOSE: loose, COARSE: replace(loose, steps=steps)}
    if shorter is not None:
        runs[SHORT] = replace(loosened(shorter), steps=steps)
    return runs


def loosened(quench: Quench) -> Quench:
    """Return a quench with r times its weight and a third of its bond floor and ceiling.

    Where floor or ceiling bind rather than the weight, runs that differ by the weight alone would be
    identical and show no error at all.
    """
    return replace(
        quench,
        discarded_weight=WEIGHT_RATIO * quench.discarded_weight,
        bond_floor=max(1, quench.bond_floor // BOND_RATIO),
        bond_ceiling=max(1, quench.bond_ceiling // BOND_RATIO),
    )


def coarser_steps(steps: int) -> int:
    """Return at most half as many steps, at least one; a main run has at least two in each interval."""
    return max(1, steps // 2)
