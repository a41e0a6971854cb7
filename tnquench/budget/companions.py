"""Companion runs: the main run again at looser settings, each cheaper than the main run.

With w the main weight, runs at (r w), (r^2 w), (r w, at least twice the step) and (r w, a shorter chain)
isolate each source of error by differences at otherwise equal settings.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from math import isclose
from typing import Protocol

import numpy as np

from tnquench.conventions import Reals
from tnquench.observables.quench import Quench

#: Factor r between the weights of neighbouring companions.
WEIGHT_RATIO = 10.0

WEIGHT = "weight_"
LOOSE, LOOSER, COARSE, SHORT = "weight_10", "weight_100", "step_2", "length"


#: What becomes of the budget without a companion.
WITHOUT: dict[str, str] = {
    LOOSE: "truncation is estimated from a looser run and the least power of the weight, step and ends from "
    "the main run, which claims more",
    LOOSER: "the power of the weight is not measured, and the least one claims more",
    COARSE: "the error of the time step is unknown and claimed as twice the norm of each observable",
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


def partner(companions: Mapping[str, CompanionRun], name: str) -> str | None:
    """Return the companion from which `name` differs by the step or the length alone, None if it is missing.

    It has the same weight; where weights are not known it is the one at ten times the main run's.
    """
    weight = companions[name].weight_asked
    if np.isnan(weight):
        return LOOSE if LOOSE in companions else None
    rungs = (rung for rung in ladder(companions) if isclose(companions[rung].weight_asked, weight))
    return next(rungs, None)


def shorter_length(sites: int) -> int | None:
    """Return the length of the shorter companion, of the same parity, or None if the chain is too short to
    shorten."""
    removed = 2 * max(1, round(sites / 8))
    return sites - removed if sites - removed >= 4 else None


def companion_quenches(main: Quench, *, shorter: Quench | None) -> dict[str, Quench]:
    """Return the companions of a main run by name.

    shorter : the main run on a shorter chain, or None to leave the influence of the ends unestimated
    """
    loose, looser = loosened(main, times=1), loosened(main, times=2)
    runs = {
        LOOSE: loose,
        LOOSER: looser,
        COARSE: replace(loose, steps=coarser_steps(main.steps)),
    }
    if shorter is not None:
        runs[SHORT] = loosened(shorter, times=1)
    return runs


def loosened(quench: Quench, *, times: int) -> Quench:
    """Return a quench with r^times its weight and, as often, half its bond floor and ceiling.

    Where floor or ceiling bind rather than the weight, runs that differ by the weight alone would be
    identical and show no error at all.
    """
    return replace(
        quench,
        discarded_weight=WEIGHT_RATIO**times * quench.discarded_weight,
        bond_floor=max(1, quench.bond_floor // 2**times),
        bond_ceiling=max(1, quench.bond_ceiling // 2**times),
    )


def coarser_steps(steps: int) -> int:
    """Return at most half as many steps, at least one; a main run has at least two in each interval."""
    return max(1, steps // 2)
