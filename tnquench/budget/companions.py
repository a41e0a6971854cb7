"""Companion runs: the main run again at looser settings, each cheaper than the main run.

With w the main weight, runs at (r w), (r^2 w), (r w, at least twice the step) and (r w, a shorter chain)
isolate each source of error by differences at otherwise equal settings.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

from tnquench.observables.quench import Quench

#: Factor r between the weights of neighbouring companions.
WEIGHT_RATIO = 10.0

LOOSE, LOOSER, COARSE, SHORT = "weight_10", "weight_100", "step_2", "length"


@dataclass(frozen=True)
class CompanionSettings:
    """How a companion differs from the main run; the budget needs these ratios."""

    weight: float
    steps: int
    sites: int


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
