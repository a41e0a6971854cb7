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

#: Powers of the discarded weight by which an error falls: the least there can be, and a cautious one. A cut
#: moves an observable that straddles it by at most 2 ||O|| sqrt(w), one that lies on one side of it by order
#: w. Where the truth is known, errors fell from companions at thirty times the weight to the main run with
#: powers of 0.89 in the median, nineteen of twenty above 0.5 and nine of ten above 0.64.
LEAST_POWER, TYPICAL_POWER = 0.5, 0.75

#: Range in which a local ratio of lost weights is believed, and the weight below which a loss is rounding,
#: being measured as a difference of norms. Beyond the largest ratio, which only bond floors make, errors fall
#: more slowly than the weight: without it a fifth of the true error would be claimed at D = 0, 128 sites and
#: t = 1, from losses 4e5 apart (a companion at a hundred times the weight).
LEAST_RATIO, LARGEST_RATIO = 3.0, 1e4
SMALLEST_WEIGHT = 1e-16

#: Two runs of equal weight and unequal step differ by their cuts too, by 0.76 of what the cuts of one do in
#: the median: half of its mean square is taken off, as long as so much of the difference is left.
CUTS_DIFFER, LEAST_LEFT = 0.5, 0.7

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


def truncation(*, main: TruncatedRun, loose: TruncatedRun, power: float = TYPICAL_POWER) -> Reals:
    """Estimate the truncation error of the main run from one that cuts more.

    If the error is c W^p of the weight W lost around a point, O(loose) - O(main) = c W^p (1 - rho^-p), where
    rho is the local ratio of the lost weights, W that of the loose run; rho is far above the ratio of the
    weights asked for where the bond floor binds. What varies slowly, so that neighbours tell of each other,
    is c: from one sample to the next W itself may grow by orders of magnitude.
    """
    lost = loose.local_weight()
    ratio = np.clip(lost / main.local_weight(), LEAST_RATIO, LARGEST_RATIO)
    scale = local_scale((loose.values - main.values) / (lost**power * (1.0 - ratio**-power)))
    return np.asarray(WIDENING * scale * (lost / ratio) ** power)


def time_step(
    *, fine: Reals, coarse: Reals, step_ratio: float, order: int, noise: Reals | float = 0.0
) -> Reals:
    """Estimate the Trotter error of the main step from runs of equal weight at the main and a coarser step.

    For an error c dt^n, O(rho dt) - O(dt) = c dt^n (rho^n - 1).
    noise : what the cuts of the finer run do, (time, place). The difference contains what the cuts do in one
    run and not in the other, of which a part is taken off: an overestimate where truncation dominates.
    """
    whole = local_scale(coarse - fine)
    cuts = local_scale(np.broadcast_to(noise, whole.shape))
    left = np.sqrt(
        np.maximum(np.square(whole) - CUTS_DIFFER * np.square(cuts), np.square(LEAST_LEFT * whole))
    )
    return np.asarray(WIDENING * left / (step_ratio**order - 1.0))


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
