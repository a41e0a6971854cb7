"""Interpolation of a prediction along rays x/t: that of Euler for two joined halves depends on x/t alone.

Between early samples such a profile widens by its own width, too fast for polynomials in time; the profile of
the last sample, shrunk in proportion to the time, gives all earlier ones. Whether a field is of that kind is
not asked but measured: the error claimed at a point is how far the shrunk profile misses the samples around.
"""

from __future__ import annotations

import numpy as np
from scipy.ndimage import maximum_filter

from tnquench.conventions import Reals
from tnquench.judge.interpolation import stencil

#: Points of the last sample in the stencil: profiles have kinks, which higher orders would spread.
ALONG = 4


def along_rays(
    field: Reals, *, times: Reals, positions: Reals, at_times: Reals, at_positions: Reals
) -> tuple[Reals, Reals]:
    """Return the values of a field at scattered points along rays through x = 0, t = 0, and their error.

    field : (time, place), sampled at times (time,) and positions (place,), both increasing
    at_times, at_positions : (point,); the error is infinite at t = 0 and where no later sample is known
    """
    later = np.flatnonzero(times > 0)
    known = (at_times > 0) & bool(later.size)
    values, error = np.zeros(at_times.size), np.full(at_times.size, np.inf)
    if not known.any():
        return values, error
    last, profile = float(times[-1]), field[-1]
    values[known] = _shrunk(profile, positions, at_positions[known] * last / at_times[known])
    clock, place = np.meshgrid(times[later], positions, indexing="ij")
    again = _shrunk(profile, positions, (place * last / clock).ravel()).reshape(clock.shape)
    missed = np.abs(again - field[later])
    around = maximum_filter(np.where(np.isfinite(missed), missed, np.inf), size=3, mode="nearest")
    row = np.clip(np.searchsorted(times[later], at_times[known]), 0, later.size - 1)
    column = np.clip(np.searchsorted(positions, at_positions[known]), 0, positions.size - 1)
    error[known] = np.maximum(around[row, column], around[np.maximum(row - 1, 0), np.maximum(column - 1, 0)])
    return values, error


def _shrunk(profile: Reals, positions: Reals, at: Reals) -> Reals:
    """Return the last profile at places, those beyond the chain taken to its end."""
    found = stencil(positions, np.clip(at, positions[0], positions[-1]), ALONG)
    return np.asarray(np.einsum("pa,pa->p", found.weights, profile[found.indices]))
