"""States counted from the left: cumulative integrals over position, and their values between grid points."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.interpolate import make_interp_spline

from tnquench.conventions import Reals

#: Degree of the splines over position.
SPLINE_DEGREE = 5


def cumulative_integral(positions: Reals) -> Reals:
    """Return the (position, position) matrix of the integral from the first position, by quintic spline."""
    spline = make_interp_spline(positions, np.eye(positions.size), k=SPLINE_DEGREE)
    return np.asarray(spline.antiderivative()(positions))


def resample(positions: Reals, values: Reals, places: Reals) -> Reals:
    """Return values (position, ...) at other places by quintic spline."""
    return np.asarray(make_interp_spline(positions, values, k=SPLINE_DEGREE)(places))


@dataclass(frozen=True, eq=False)
class StateCount:
    """P(x), the integral of a density from the left end, with its first two derivatives.

    positions : (position,) equidistant; values, densities, gradients : (position, string, node)
    """

    positions: Reals
    values: Reals
    densities: Reals
    gradients: Reals

    def at(self, x: Reals) -> tuple[Reals, Reals]:
        """Return P and its density at x (any, string, node): quintic inside, linear beyond the ends."""
        first, spacing = self.positions[0], self.positions[1] - self.positions[0]
        inside = np.clip(x, first, self.positions[-1])
        cell = np.minimum(((inside - first) / spacing).astype(np.int64), self.positions.size - 2)
        s = (inside - first) / spacing - cell
        near, far = ((cell + k, *np.indices(x.shape)[1:]) for k in (0, 1))
        jump = self.values[far] - self.values[near]
        slope, next_slope = spacing * self.densities[near], spacing * self.densities[far]
        curve, next_curve = spacing**2 * self.gradients[near], spacing**2 * self.gradients[far]
        cubic = 10.0 * jump - 6.0 * slope - 4.0 * next_slope - 1.5 * curve + 0.5 * next_curve
        quartic = -15.0 * jump + 8.0 * slope + 7.0 * next_slope + 1.5 * curve - next_curve
        quintic = 6.0 * jump - 3.0 * (slope + next_slope) - 0.5 * (curve - next_curve)
        rise = s * (slope + s * (0.5 * curve + s * (cubic + s * (quartic + s * quintic))))
        steepness = slope + s * (curve + s * (3.0 * cubic + s * (4.0 * quartic + s * 5.0 * quintic)))
        return self.values[near] + rise + (x - inside) * steepness / spacing, steepness / spacing


def state_count(positions: Reals, densities: Reals) -> StateCount:
    """Return the count of `densities` (position, string, node) at equidistant positions."""
    spline = make_interp_spline(positions, densities, k=SPLINE_DEGREE)
    values, gradients = spline.antiderivative()(positions), spline.derivative()(positions)
    return StateCount(positions, values, densities, gradients)
