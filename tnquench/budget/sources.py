"""The sources of numerical error of one observable, each an array of the observable's shape (time, place).

Two runs that differ by truncation alone differ by a noise that is irregular in space and time; a single
difference can vanish by chance where the error does not. Estimates are therefore local root mean squares over
a small neighbourhood, widened by a factor that makes them cover nearly all points, as the tests against exact
solutions check.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from scipy.ndimage import maximum_filter1d, uniform_filter

from tnquench.conventions import Reals

#: Neighbourhood of a local root mean square: samples in time, places in space.
NEIGHBOURHOOD = (3, 5)

#: A normal error stays within so many standard deviations at 99 % of the points.
WIDENING = 2.6

#: Range of the power of the discarded weight, a cautious one within, and by how much powers scatter. A cut
#: moves an observable that straddles it by at most 2 ||O|| sqrt(w), one that lies on one side of it by order
#: w. Where the truth is known the errors of main runs and of companions at ten times their weight stood in
#: the ratio of the lost weights to the power 0.34 to 1.6, small where the companion's error saturates: powers
#: beyond 0.75 claimed too little there (energy currents of 32 and 64 sites at D = 0, weights 1e-6 and 1e-8).
LEAST_POWER, LARGEST_POWER, TYPICAL_POWER, POWER_SCATTER = 0.5, 0.75, 0.75, 0.1

#: Range in which a local ratio of lost weights is believed, and the weight below which a loss is rounding,
#: being measured as a difference of norms.
LEAST_RATIO, LARGEST_RATIO = 3.0, 1e6
SMALLEST_WEIGHT = 1e-16

#: Differences below this, and weights nearer than this factor, say nothing about the power.
LEAST_CHANGE, LEAST_GROWTH = 1e-14, 1.6

#: Largest ratio over which an error is extrapolated without a measured power, and how many times a run alone
#: counts, which may be near the main run by chance.
UNMEASURED_RATIO, LONE_SAFETY = 10.0, 2.0

#: Part of an observable's error in the start that others may have later, all in units of the norms: starts of
#: Hubbard chains, loose on purpose, err in the energy, and 0.02 to 0.31 of it was found in charge, spin and
#: their currents at t = 0.5. Errors that much smaller than the largest are zero by a symmetry, and stay so.
CARRIED, SYMMETRIC = 0.3, 1e-6

#: Rounding unit of double precision.
ROUNDING = float(np.finfo(np.float64).eps)


def local_scale(difference: Reals) -> Reals:
    """Return the root mean square of a difference (time, place) over the neighbourhood of each point.

    The sample at t = 0 is left out of its neighbours' averages: no cut has been made there and it would
    dilute them.
    """
    squares = np.square(difference)
    scale = np.zeros_like(squares)
    if len(squares) > 1:
        scale[1:] = uniform_filter(squares[1:], size=NEIGHBOURHOOD, mode="nearest")
    scale[0] = uniform_filter(squares[0], size=NEIGHBOURHOOD[1], mode="nearest")
    return np.sqrt(np.maximum(scale, 0.0))


@dataclass(frozen=True)
class TruncatedRun:
    """One observable of a run and what its cuts lost: values (time, place), discarded weight (time, bond) so
    far."""

    values: Reals
    discarded_weight: Reals

    def local_weight(self) -> Reals:
        """Return the weight lost around each place, averaged over its neighbourhood, shape (time, place)."""
        lost = np.maximum(self.discarded_weight, SMALLEST_WEIGHT)
        if self.values.shape[1] > lost.shape[1]:  # sites: the mean of the bonds on both sides
            padded = np.pad(lost, ((0, 0), (1, 1)), mode="edge")
            lost = 0.5 * (padded[:, 1:] + padded[:, :-1])
        return np.asarray(uniform_filter(lost, size=(1, NEIGHBOURHOOD[1]), mode="nearest"))


def weight_power(*, main: TruncatedRun, loose: TruncatedRun, looser: TruncatedRun) -> float:
    """Return the power p of the discarded weight with which the error grows.

    If an error is c W^p of the weight W truly lost, successive differences, each nearly the error of its
    looser run, stand in the ratio of the looser two weights to the power p. What each sample finds scatters,
    and runs that lose much saturate, which feigns other powers: the mean over the samples and the typical
    power are averaged with the inverse of their variances.
    """
    wide, narrow = (
        np.sqrt(np.square(a.values - b.values).mean(axis=1)) for a, b in ((looser, loose), (loose, main))
    )
    tiny = np.finfo(np.float64).tiny
    growth = np.maximum(looser.discarded_weight.sum(axis=1), tiny) / np.maximum(
        loose.discarded_weight.sum(axis=1), tiny
    )
    told = (np.minimum(wide, narrow) > LEAST_CHANGE) & (growth > LEAST_GROWTH)
    if np.count_nonzero(told) < 2:
        return TYPICAL_POWER
    powers = np.log(wide[told] / narrow[told]) / np.log(growth[told])
    trust = POWER_SCATTER**2 / (POWER_SCATTER**2 + powers.var())
    found = trust * powers.mean() + (1.0 - trust) * TYPICAL_POWER
    return float(np.clip(found, LEAST_POWER, LARGEST_POWER))


def truncation(*, main: TruncatedRun, loose: TruncatedRun, looser: TruncatedRun | None) -> Reals:
    """Estimate the truncation error of the main run from two runs that cut more.

    Without the second one no power is measured: the least one is taken, over a tenfold weight at most,
    whatever the first run has lost.

    If the error is c W^p of the weight W lost around a point, O(loose) - O(main) = c W^p (1 - rho^-p), where
    rho is the local ratio of the lost weights, W that of the loose run; rho is far above the ratio of the
    weights asked for where the bond floor binds. What varies slowly, so that neighbours tell of each other,
    is c: from one sample to the next W itself may grow by orders of magnitude. The second run finds it anew,
    and the mean square of both counts: one alone may be near the main run by chance or saturation.
    """
    power, largest = LEAST_POWER, UNMEASURED_RATIO
    if looser is not None:
        power, largest = weight_power(main=main, loose=loose, looser=looser), LARGEST_RATIO
    lost = loose.local_weight()
    ratio = np.clip(lost / main.local_weight(), LEAST_RATIO, largest)
    scale = local_scale((loose.values - main.values) / (lost**power * (1.0 - ratio**-power)))
    if looser is None:
        scale = LONE_SAFETY * scale
    else:
        beyond = local_scale((looser.values - loose.values) / looser.local_weight() ** power)
        scale = np.sqrt(0.5 * (np.square(scale) + np.square(beyond)))
    return np.asarray(WIDENING * scale * (lost / ratio) ** power)


def time_step(*, fine: Reals, coarse: Reals, step_ratio: float, order: int) -> Reals:
    """Estimate the Trotter error of the main step from runs of equal weight at the main and a coarser step.

    For an error c dt^n, O(rho dt) - O(dt) = c dt^n (rho^n - 1). The runs' different truncation noise is
    contained in the difference, so this is an overestimate where truncation dominates.
    """
    return np.asarray(WIDENING * local_scale(coarse - fine) / (step_ratio**order - 1.0))


def length(*, long: Reals, short: Reals, noise: Reals) -> Reals:
    """Estimate the influence of the ends from a run of equal weight on a shorter chain with the same centre.

    long : (time, place); short : (time, fewer places); noise : truncation error of these two runs at each
    point of the long chain, below which a difference says nothing. A point of the long chain takes the
    difference found in the short chain at the same distance from the end (the innermost one for points
    further inside). Where the profile is flat up to the ends that is what the long chain's end does too;
    where it still varies there it is an order of magnitude. Differences oscillate in space and an end, once
    felt, stays felt: the largest of the neighbours and of all earlier times counts.
    """
    missing = (long.shape[1] - short.shape[1]) // 2
    inner = slice(missing, missing + short.shape[1])
    excess = np.maximum(np.abs(short - long[:, inner]) - np.sqrt(2.0) * noise[:, inner], 0.0)
    excess = np.maximum.accumulate(maximum_filter1d(excess, size=NEIGHBOURHOOD[1], axis=1), axis=0)
    depth = np.minimum(np.arange(long.shape[1]), np.arange(long.shape[1])[::-1])
    from_left = np.arange(long.shape[1]) == depth
    deepest = (short.shape[1] - 1) // 2
    reach = np.minimum(depth, deepest)
    return np.asarray(excess[:, np.where(from_left, reach, short.shape[1] - 1 - reach)])


def unknown(*, norm: float, shape: tuple[int, int]) -> Reals:
    """Return 2 ||O||, all that is known of a source that nothing measures: the ends' influence where no
    shorter chain was run, the step's error where no longer step was."""
    return np.full(shape, 2.0 * norm)


def preparation(
    name: str, *, start_error: Mapping[str, float], norms: Mapping[str, float], shape: tuple[int, int]
) -> Reals:
    """Return the largest error that the start leaves in the observable `name`, for every time.

    start_error, norms : error in the start and operator norm of every observable
    What one observable lacks in the start the dynamics hands on to others: later errors are at least a part
    CARRIED of the largest one, all in units of the norms.
    """
    shares = (error / norms[other] for other, error in start_error.items() if norms[other] > 0.0)
    largest = max(shares, default=0.0)
    own, carried = start_error[name], norms[name] * largest
    return np.full(shape, own if own <= SYMMETRIC * carried else max(own, CARRIED * carried))


def arithmetic(*, cuts: Reals, norm: float, shape: tuple[int, int]) -> Reals:
    """Return the rounding error as one rounding unit a cut, all of the same sign; cuts : made so far, shape
    (time,)."""
    return np.asarray(np.broadcast_to(ROUNDING * norm * (1.0 + cuts[:, None]), shape).copy())


def truncation_bound(*, angle: Reals, norm: float, shape: tuple[int, int]) -> Reals:
    """Return the rigorous bound 2 ||O|| sin(min(sum of arcsin sqrt(w), pi/2)) on the real-time truncation
    error.

    It holds relative to the evolution of the same prepared start by the same gates without cuts; the start's
    own error and the time step are not in it.

    angle : sum over all cuts up to each time, shape (time,). Each cut in exact canonical form turns the unit
    vector by arcsin sqrt(w) and angles between unit vectors obey the triangle inequality.
    """
    bound = 2.0 * norm * np.sin(np.minimum(angle, 0.5 * np.pi))
    return np.asarray(np.broadcast_to(bound[:, None], shape).copy())
