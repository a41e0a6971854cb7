"""Rays that correspond to each other at different anisotropies.

Profiles of joined halves change abruptly at the edges of the light cone, and where the magnetisation changes
sign; both move with D. Between such marks rays are mapped linearly, so that a combination of anisotropies
combines like with like.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from tnquench.conventions import Reals

#: The zone in which a wall of the magnetisation has spread is centred within this fraction of the light cone,
#: and its half width is at most the second fraction of its distance from the edges.
INNERMOST, WIDEST_ZONE = 0.9, 0.8

Marks = tuple[float, ...]


def carried(rays: Reals, *, here: Sequence[float], there: Sequence[float]) -> Reals:
    """Return where `rays` (any shape) lie elsewhere, if marks `here` lie `there`; both ascending, (mark,).

    Beyond the outermost marks distances are kept; infinite rays and those that are no numbers stay so.
    """
    first, last = here[0], here[-1]
    result = np.interp(rays, here, there)
    result = np.where(rays < first, there[0] + (rays - first), result)
    return np.asarray(np.where(rays > last, there[-1] + (rays - last), result))


def zone_marks(
    anisotropies: Reals, cones: Sequence[tuple[float, float]], centres: Sequence[float], coupling: float
) -> list[Marks]:
    """Return for each D edge of the light cone, edge of the zone, edge of the zone, edge of the light cone.

    anisotropies : (anisotropy,), |D| < 1; centres : where the wall would be at |D| >= 1
    A wall spreads about its centre with velocities up to J sin(g), exactly so between fully polarised halves;
    half widths are in proportion to that, and as large as fits into all light cones.
    """
    first, last = np.array(cones).T
    middle = np.clip(centres, INNERMOST * first, INNERMOST * last)
    speeds = coupling * np.sqrt(1.0 - anisotropies**2)
    room = np.minimum(middle - first, last - middle)
    widths = speeds * min(1.0, WIDEST_ZONE * float(np.min(room / speeds)))
    return [tuple(row) for row in np.stack([first, middle - widths, middle + widths, last], axis=1).tolist()]
