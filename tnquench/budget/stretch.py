"""How a deviation falls when its profile is stretched: norms over one rescaled window, and the exponent p of
deviation ~ stretch^-p.

The profile is stretched by a factor in space and time alike, so that Euler hydrodynamics predicts the same
function of x/factor and t/factor each time. What it leaves out falls as a power of the factor: the first
order of the gradient expansion (diffusion: De Nardis, Bernard, Doyon, PRL 121, 160603, 2018) like 1/factor,
the second order (dispersion of free modes: Fagotti, PRB 96, 220302, 2017) like 1/factor^2.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np
from scipy.optimize import brentq

from tnquench.budget.verdict import interior, light_cone_window
from tnquench.conventions import STRETCH_NORMS, Reals

#: Uncertainties of exponents are so many standard errors wide on each side.
STANDARD_ERRORS = 2.0

#: Least uncertainty of an exponent: sums over lattice points stand for integrals over the window, whose ends
#: lie between points. Fields that do not vanish there move exponents by up to 0.01 (tests/test_stretch.py).
LATTICE_UNCERTAINTY = 0.02

#: Share by which the trend of the exponent is continued beyond what corrections of the next order ask for.
CAUTION = 1.5

#: Two factors cannot show whether one power describes them: no order is named from fewer than these.
FEWEST_FACTORS = 3

#: Relative errors smaller than this are taken for this: rounding.
SMALLEST_ERROR = 1e-9

#: Parts of the time that are fitted by themselves, and all of it.
PARTS, WHOLE = ("early", "middle", "late"), "whole"


@dataclass(frozen=True)
class StretchedField:
    """One observable of one run of the family, on its own points.

    times (time,) and positions (place,), not rescaled; deviation, numerical : (time, place), the latter the
    summed numerical error
    """

    factor: float
    times: Reals
    positions: Reals
    deviation: Reals
    numerical: Reals


@dataclass(frozen=True)
class RescaledWindow:
    """The light-cone window of the run at factor 1; the others take the same one in x/factor and t/factor.

    light_cone : leftmost and rightmost velocity; reach : how far from x = 0 the start varies; edge : largest
    distance from x = 0 that is judged
    """

    light_cone: tuple[float, float]
    reach: float
    edge: float

    def points(self, field: StretchedField) -> np.ndarray:
        """Return which points (time, place) of a run lie in the window.

        Each run takes all of its own points: for a profile that is smooth on the lattice their sum is the
        integral over the rescaled window, and nothing needs to be interpolated.
        """
        place = field.positions / field.factor
        cone = light_cone_window(
            times=field.times / field.factor, positions=place, light_cone=self.light_cone, reach=self.reach
        )
        # light_cone_window has cut off spacings of the rescaled lattice; the edge is that of factor 1
        return np.asarray(cone & ((np.abs(place) <= self.edge + 1e-9) & interior(field.positions))[None, :])

    def lengths(self, field: StretchedField) -> Reals:
        """Return the length of the window at each time of a run, (time,), in its lattice spacings."""
        clock = field.times / field.factor
        right = np.minimum(self.light_cone[1] * clock + self.reach, self.edge)
        left = np.maximum(self.light_cone[0] * clock - self.reach, -self.edge)
        return np.asarray(field.factor * np.maximum(right - left, 1.0))


@dataclass(frozen=True)
class Exponent:
    """The p of deviation ~ factor^-p.

    value : from weighted least squares in the logarithms over the factors `used`; nan where fewer than two
    are resolved
    uncertainty : half width that the p of infinite stretch should lie within in 95 of 100 cases: two standard
    errors, from numerical errors and scatter, and in quadrature the trend of the exponent and what the
    lattice may do to it
    numerical : the part of it that numerical errors alone leave
    change : exponent of the larger half of the factors minus that of the smaller; nan below three factors
    finding : which order it supports, one of STRETCH_FINDINGS
    """

    value: float
    uncertainty: float
    numerical: float
    change: float
    used: np.ndarray
    finding: str


@dataclass(frozen=True)
class StretchStudy:
    """One observable against one theory.

    deviation, numerical (norm, factor, time) : norms over the window at each time, and their numerical errors
    window_deviation, window_numerical (norm, factor, window) : over all times of a part of the time
    exponents : by norm and window
    """

    deviation: Reals
    numerical: Reals
    window_deviation: Reals
    window_numerical: Reals
    exponents: tuple[tuple[Exponent, ...], ...]


def time_windows(samples: int) -> dict[str, slice]:
    """Return the parts of the time by name, as slices of samples 0..samples-1; none holds the start.

    Fewer than three samples after the start make one part only.
    """
    whole = {WHOLE: slice(1, samples)}
    if samples - 1 < len(PARTS):
        return whole
    parts = np.array_split(np.arange(1, samples), len(PARTS))
    return {
        name: slice(int(part[0]), int(part[-1]) + 1) for name, part in zip(PARTS, parts, strict=True)
    } | whole


def study_observable(
    fields: Sequence[StretchedField],
    *,
    window: RescaledWindow,
    windows: Mapping[str, slice],
    resolve_at: float,
) -> StretchStudy:
    """Return norms and exponents of one observable.

    fields : runs of the family by increasing factor, with equally many samples at equal t/factor
    windows : parts of the time, from `time_windows`
    resolve_at : k, a factor enters the fit where the deviation exceeds k times its numerical error
    """
    samples = [slice(index, index + 1) for index in range(len(fields[0].times))]
    deviation, numerical = _all_norms(fields, window, samples)
    of_windows, errors = _all_norms(fields, window, list(windows.values()))
    factors = np.array([field.factor for field in fields])
    exponents = tuple(
        tuple(
            fit_exponent(factors, values, error, resolve_at=resolve_at)
            for values, error in zip(of_windows[norm].T, errors[norm].T, strict=True)
        )
        for norm in range(len(STRETCH_NORMS))
    )
    return StretchStudy(deviation, numerical, of_windows, errors, exponents)


def _all_norms(
    fields: Sequence[StretchedField], window: RescaledWindow, parts: Sequence[slice]
) -> tuple[Reals, Reals]:
    """Return every norm and its numerical error, each (norm, factor, part)."""
    table = np.array(
        [[_norms(_part(field, part), window) for part in parts] for field in fields]
    )  # (factor, part, norm, value or error)
    values, errors = np.moveaxis(table, 3, 0)
    return np.moveaxis(values, 2, 0), np.moveaxis(errors, 2, 0)


def _part(field: StretchedField, part: slice) -> StretchedField:
    """Return a part of the time of a field."""
    return replace(
        field, times=field.times[part], deviation=field.deviation[part], numerical=field.numerical[part]
    )


def _norms(field: StretchedField, window: RescaledWindow) -> list[tuple[float, float]]:
    """Return root mean square and maximum over the window, each with its numerical error.

    The sum of squares is divided by the length of the window, not by the number of points: that jumps where
    a point enters. By the triangle inequality errors within `numerical` move the root mean square by at most
    that of `numerical`; the true maximum lies between |deviation| - numerical at the place found and the
    largest |deviation| + numerical.
    """
    mask = window.points(field)
    if not mask.any():
        return [(0.0, 0.0), (0.0, 0.0)]
    mean, error = (
        float(np.sqrt(np.mean((np.square(values) * mask).sum(axis=1) / window.lengths(field))))
        for values in (field.deviation, field.numerical)
    )
    sizes, errors = np.abs(field.deviation[mask]), field.numerical[mask]
    place = int(sizes.argmax())
    above = float((sizes + errors).max() - sizes[place])
    return [(mean, error), (float(sizes[place]), max(float(errors[place]), above))]


def fit_exponent(factors: Reals, values: Reals, errors: Reals, *, resolve_at: float) -> Exponent:
    """Fit values ~ factors^-p, with an uncertainty that contains the numerical errors of the values.

    factors, values, errors : (factor,), by increasing factor; errors are standard errors of the values
    Factors with a value below `resolve_at` times its error are left out.
    """
    used = (values > resolve_at * errors) & (values > 0.0)
    if np.count_nonzero(used) < 2:
        nan = float("nan")
        return Exponent(nan, nan, nan, nan, used, "unresolved")
    x, y = np.log(factors[used]), np.log(values[used])
    error = np.maximum(errors[used] / values[used], SMALLEST_ERROR)
    spread = np.hypot(error, _scatter(x, y, error))
    slope = _slope_weights(x, spread)
    value = -float(slope @ y)
    change, trend = _trend(x, y, error)
    parts = (STANDARD_ERRORS * _propagated(slope, spread), trend, LATTICE_UNCERTAINTY)
    uncertainty = float(np.linalg.norm(parts))
    numerical = STANDARD_ERRORS * _propagated(slope, error)
    finding = supported_order(value, uncertainty)
    if len(x) < FEWEST_FACTORS and finding != "not_falling":
        finding = "undecided"
    return Exponent(value, uncertainty, numerical, change, used, finding)


def supported_order(value: float, uncertainty: float) -> str:
    """Return which of STRETCH_FINDINGS an exponent means."""
    low, high = value - uncertainty, value + uncertainty
    within = [order for order in (0, 1, 2) if low <= order <= high]
    if len(within) > 1:
        return "undecided"
    if within:
        return ("not_falling", "first_order", "second_order")[within[0]]
    if high < 0.0:
        return "not_falling"
    return "slower" if high < 1.0 else "between" if high < 2.0 else "faster"


def _slope_weights(x: Reals, error: Reals) -> Reals:
    """Return c such that c @ y is the slope of the line of least squares with these standard errors of y."""
    weight = 1.0 / np.square(error)
    centred = x - (weight @ x) / weight.sum()
    return np.asarray(weight * centred / (weight @ np.square(centred)))


def _propagated(coefficients: Reals, error: Reals) -> float:
    """Return the standard error of coefficients @ y."""
    return float(np.sqrt(np.square(coefficients) @ np.square(error)))


def _scatter(x: Reals, y: Reals, error: Reals) -> float:
    """Return the scatter common to all points that, beside their errors, explains their distance from a line:
    chi-square falls to its degrees of freedom (Paule, Mandel, J. Res. NBS 87, 377, 1982; from memory)."""
    freedom = len(x) - 2

    def excess(scatter: float) -> float:
        spread = np.hypot(error, scatter)
        weight = 1.0 / np.square(spread)
        rest = y - (weight @ y) / weight.sum()
        centred = x - (weight @ x) / weight.sum()
        rest = rest - (_slope_weights(x, spread) @ y) * centred
        return float(weight @ np.square(rest)) - freedom

    if freedom < 1 or excess(0.0) <= 0.0:
        return 0.0
    return float(brentq(excess, 0.0, 10.0 * float(np.ptp(y)) + 1.0))


def _trend(x: Reals, y: Reals, error: Reals) -> tuple[float, float]:
    """Return by how much the exponent changes from the smaller to the larger half of the factors, which share
    the middle one, and how far the exponent of infinite stretch may lie from that of the fit; nan and zero
    below three factors.

    With corrections like 1/factor the exponent of a fit differs from that of infinite stretch by c/f at its
    mean factor f (in the logarithm). With halves whose mean factors have the ratio r the fit as a whole then
    differs by sqrt(r)/(r - 1) times the change. A change that its error could hide counts as well.
    """
    if len(x) < FEWEST_FACTORS:
        return float("nan"), 0.0
    half = len(x) // 2
    lower, upper = np.zeros_like(x), np.zeros_like(x)
    lower[: half + 1] = _slope_weights(x[: half + 1], error[: half + 1])
    upper[half:] = _slope_weights(x[half:], error[half:])
    change, change_error = float((lower - upper) @ y), _propagated(lower - upper, error)
    ratio = float(np.exp(x[half:].mean() - x[: half + 1].mean()))
    share = CAUTION * np.sqrt(ratio) / (ratio - 1.0)
    return change, float(share * np.hypot(change, change_error))
