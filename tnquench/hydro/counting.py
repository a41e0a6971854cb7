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

    positions : (position,) equidistant; values, densities, gradients : (position, string, point)
    """

    positions: Reals
    values: Reals
    densities: Reals
    gradients: Reals

    def at(self, x: Reals) -> tuple[Reals, Reals]:
        """Return P and its density at x (any, string, point): quintic inside, linear beyond the ends."""
        size, spacing = self.values[0].size, self.positions[1] - self.positions[0]
        scaled = (x - self.positions[0]) / spacing
        inside = np.clip(scaled, 0.0, self.positions.size - 1.0)
        cell = np.minimum(inside.astype(np.int64), self.positions.size - 2)
        s = inside - cell
        near = cell * size + np.arange(size).reshape(x.shape[1:])
        far = near + size
        start = self.values.take(near)
        jump = self.values.take(far) - start
        slope, next_slope = spacing * self.densities.take(near), spacing * self.densities.take(far)
        curve, next_curve = (
            0.5 * spacing**2 * self.gradients.take(near),
            spacing**2 * self.gradients.take(far),
        )
        # what a quintic adds to start + slope s + curve s^2, from its value, slope and curvature at s = 1
        short, steeper = jump - slope - curve, next_slope - slope - 2.0 * curve
        bent = 0.5 * next_curve - curve
        cubic = 10.0 * short - 4.0 * steeper + bent
        quartic = -15.0 * short + 7.0 * steeper - 2.0 * bent
        quintic = 6.0 * short - 3.0 * steeper + bent
        rise = s * (slope + s * (curve + s * (cubic + s * (quartic + s * quintic))))
        density = slope + s * (2.0 * curve + s * (3.0 * cubic + s * (4.0 * quartic + s * (5.0 * quintic))))
        return start + rise + (scaled - inside) * density, density / spacing


def state_count(positions: Reals, densities: Reals) -> StateCount:
    """Return the count of `densities` (position, string, point) at equidistant positions."""
    spline = make_interp_spline(positions, densities, k=SPLINE_DEGREE)
    values, gradients = spline.antiderivative()(positions), spline.derivative()(positions)
    return StateCount(positions, values, densities, gradients)
