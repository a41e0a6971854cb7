"""What every prediction of a run has in common: its form, its rays, and where light turns."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from tnquench.conventions import Reals
from tnquench.errors import InputError

#: Rays x/t that agree to this many decimals are one ray.
RAY_DECIMALS = 12


@dataclass(frozen=True, eq=False)
class Prediction:
    """Euler-scale densities and currents of a run.

    fields        : observable -> (time, place), on the sites or bonds that OBSERVABLE_PLACES names
    grid_error    : same shapes; change under the last refinement of rapidities (and positions)
    strings_error : same shapes; at |D| < 1 what combining rational anisotropies costs, zero at those of small
                    tables; at |D| >= 1 the change under the last refinement of the number of strings
    light_cone    : velocities (negative, positive) of its edges
    method        : "joined halves (self-similar)" | "characteristics" | "uniform"
    references    : keys of the report's references
    """

    fields: dict[str, Reals]
    grid_error: dict[str, Reals]
    strings_error: dict[str, Reals]
    light_cone: tuple[float, float]
    method: str
    references: tuple[str, ...]


def rays_to(places: Reals, times: Reals, *, uniform: bool) -> Reals:
    """Return x/t (time, place); at t = 0 infinite, and not a number at the joint."""
    if uniform:
        rays = np.full((times.size, places.size), np.inf)
        rays[np.ix_(times == 0.0, places == 0.0)] = np.nan
        return rays
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.asarray((places / times[:, None]).round(RAY_DECIMALS))


def wall_of(sites: Reals) -> float:
    """Return where quasiparticles turn: free modes of an open chain vanish one site beyond its ends."""
    return float(sites[-1]) + 1.0


def refuse_reflection(edges: tuple[float, float], times: Reals, sites: Reals) -> None:
    """Raise InputError if light with the velocities `edges` from x = 0 reaches the ends within `times`."""
    arrival = wall_of(sites) / max(-edges[0], edges[1])
    if times.max(initial=0.0) > arrival:
        problem = (
            f"[evolution] until = {times.max():g}: light (velocities {edges[0]:.4g}, {edges[1]:.4g}) reaches "
            f"the ends at t = {arrival:.4g}; the solution for two joined halves is that of an infinite "
            "chain. Stop earlier, take more sites, or give the step a width"
        )
        subject = "prediction"
        raise InputError(subject, [problem])
