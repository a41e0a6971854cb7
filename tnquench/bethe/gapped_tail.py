"""The strings beyond the last one kept, at |D| >= 1: an asymptotic closure of the decoupled equations.

With X_n^2 = 1 + eta_n, long strings obey X_n^2 - 1 = X_(n-1) X_(n+1) up to smoothing in rapidity, so X_n =
sinh(n a + b)/sinh(a), a = beta h/2, and X_(n+1) = X_n cosh(a) + sqrt(1 + X_n^2 sinh(a)^2). Small deviations
d ln(1 + eta_n) from X_n = sinh(nu a)/sinh(a), nu = n + 1, that decay towards long strings are, in Fourier
space with kappa = eta |k|,
    exp(-nu kappa) [sinh(kappa) cosh(a) + cosh(kappa) C_n],
    C_n = sinh(a) coth(nu a) = sqrt(sinh(a)^2 + X_n^-2).
They follow by varying T_n = A(x + i nu eta/2) B(x - i nu eta/2) - C(..) D(..), which solves Hirota's equation
T_n^+ T_n^- - T_(n+1) T_(n-1) = const (1 + eta_n = T_n^+ T_n^- up to that constant). Dressed functions times
1 - theta obey the same linear equations.
The structure of long strings: M. Takahashi (1999); A. Kluemper and P. A. Pearce, Physica A 183, 304 (1992)
(references from memory; the closure is derived here and its convergence is measured in the tests).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.linalg import lu_factor, lu_solve

from tnquench.conventions import Reals

#: coth(x) - 1/x = x sum_k c_k x^(2k), highest power first, good to rounding below 0.3.
LANGEVIN_SERIES = np.array(
    [-1382.0 / 638512875.0, 2.0 / 93555.0, -1.0 / 4725.0, 2.0 / 945.0, -1.0 / 45.0, 1.0 / 3.0]
)

#: Hyperbolic functions are at their limits beyond this.
LARGEST_ARGUMENT = 300.0


@dataclass(frozen=True, eq=False)
class Tail:
    """ln X_(N+1) above its value at beta = 0, from that of ln X_N, and the derivatives of ln X_(N+1).

    Without the smoothing of `tail_correction`. Shapes of ln X_N; suffixes: log by ln X_N, a by a.
    """

    value: Reals
    by_log: Reals
    by_a: Reals
    by_log_log: Reals
    by_log_a: Reals
    by_aa: Reals


def extend(excess: Reals, strings: int, a: float) -> Tail:
    """Continue X_(N+1) = X_N cosh(a) + sqrt(1 + X_N^2 sinh(a)^2), N = `strings`.

    excess : ln X_N above its value at beta = 0; differences keep their digits where ln X_N is large
    """
    start = float(infinite_temperature_log_x(np.array(float(strings)), a))
    small = np.exp(-2.0 * (start + excess))
    sinh, cosh = np.sinh(a), np.cosh(a)
    ratio = np.sqrt(sinh**2 + small)  # C_N
    ratio_start = np.hypot(sinh, np.exp(-start))
    change = np.exp(-2.0 * start) * np.expm1(-2.0 * excess) / (ratio + ratio_start)
    product = ratio * (cosh + ratio)  # below e^(2 a): third powers of C_N would overflow first
    by_field = small / ratio / ratio
    return Tail(
        value=excess + np.log1p(change / (cosh + ratio_start)),
        by_log=1.0 - small / product,
        by_a=sinh / ratio,
        by_log_log=small * (2.0 - small / product * ((cosh + 2.0 * ratio) / ratio)) / product,
        by_log_a=sinh / ratio * by_field,
        by_aa=cosh / ratio * by_field,
    )


def infinite_temperature_log_x(lengths: Reals, a: float) -> Reals:
    """Return ln X_n = ln[sinh((n + 1) a)/sinh(a)] of strings `lengths`, any shape, at beta -> 0, a >= 0."""
    if a < 1e-9:
        return np.log(lengths + 1.0)
    return np.asarray(lengths * a + np.log(np.expm1(-2.0 * (lengths + 1.0) * a) / np.expm1(-2.0 * a)))


def infinite_temperature_log_eta(strings: int, a: float) -> Reals:
    """Return ln(X_n^2 - 1), n = 1..strings, at beta -> 0."""
    log_x = infinite_temperature_log_x(np.arange(1.0, strings + 1.0), a)
    return np.asarray(2.0 * log_x + np.log(-np.expm1(-2.0 * log_x)))


def log_x_slopes(lengths: Reals, a: float) -> tuple[Reals, Reals]:
    """Return the first and second derivative by a of ln X_n at beta -> 0, shapes of `lengths`."""
    multiples = lengths + 1.0
    first = multiples * _langevin(multiples * a)[0] - _langevin(np.array(a))[0]
    second = multiples**2 * _langevin(multiples * a)[1] - _langevin(np.array(a))[1]
    return np.asarray(first), np.asarray(second)


def _langevin(x: Reals) -> tuple[Reals, Reals]:
    """Return coth(x) - 1/x and its derivative, any shape, x >= 0, without cancellation near zero."""
    small = x < 0.3
    y, square = np.where(small, 1.0, np.minimum(x, LARGEST_ARGUMENT)), np.where(small, x, 0.0) ** 2
    series = np.polyval(LANGEVIN_SERIES, square)
    slope = np.polyval(LANGEVIN_SERIES * np.arange(2 * LANGEVIN_SERIES.size - 1, 0, -2), square)
    far = np.where(x > LARGEST_ARGUMENT, x, y)
    return (
        np.where(small, x * series, 1.0 / np.tanh(y) - 1.0 / far),
        np.where(small, slope, 1.0 / far**2 - 1.0 / np.sinh(y) ** 2),
    )


def field_ratio(length: float, a: float) -> float:
    """Return C_n = sinh(a) coth((n + 1) a), a >= 0: how deviations without structure in rapidity decay."""
    log_x = float(infinite_temperature_log_x(np.array(length), a))
    return float(np.hypot(np.sinh(a), np.exp(-log_x)))


def tail_correction(poisson: Reals, strings: int, a: float) -> Reals:
    """Return what structure in rapidity adds to the decay of constants from string N to N + 1, (node, node).

    poisson : convolution with a_1 on the same nodes; a >= 0
    The sum of C_(N+1)/C_N and this takes deviations of ln X_N to those of ln X_(N+1).
    """
    last, beyond = (field_ratio(strings + more, a) for more in (0, 1))
    twice, unit = poisson @ poisson, np.eye(poisson.shape[0])
    lower, upper = ((unit - twice) * np.cosh(a) + (unit + twice) * ratio for ratio in (last, beyond))
    return np.asarray(np.linalg.solve(lower.T, (poisson @ upper).T).T - beyond / last * unit)


def correction_derivatives(poisson: Reals, strings: int, a: float) -> tuple[Reals, Reals]:
    """Return the first and second derivative of `tail_correction` by a, (node, node) each.

    From K = P U L^-1 - C_(N+1)/C_N with U, L = (1 - P^2) cosh(a) + (1 + P^2) C, C of N + 1 and N.
    """
    lengths = strings + np.arange(2.0)
    ratios, slopes, bends = _field_ratio_derivatives(lengths, a)
    twice, unit = poisson @ poisson, np.eye(poisson.shape[0])
    # of L and U, each: itself, first and second derivative
    lower, upper = (
        [
            (unit - twice) * hyperbolic + (unit + twice) * ratio
            for hyperbolic, ratio in zip((np.cosh(a), np.sinh(a), np.cosh(a)), parts, strict=True)
        ]
        for parts in zip(ratios, ratios * slopes, ratios * (bends + slopes**2), strict=True)
    )
    factors = lu_factor(lower[0].T)

    def over_lower(matrix: Reals) -> Reals:
        return np.asarray(lu_solve(factors, matrix.T).T)

    quotient = over_lower(upper[0])
    first = over_lower(upper[1] - quotient @ lower[1])
    second = over_lower(upper[2] - 2.0 * first @ lower[1] - quotient @ lower[2])
    step, ratio = slopes[1] - slopes[0], ratios[1] / ratios[0]
    return (
        np.asarray(poisson @ first - ratio * step * unit),
        np.asarray(poisson @ second - ratio * (bends[1] - bends[0] + step**2) * unit),
    )


def _field_ratio_derivatives(lengths: Reals, a: float) -> tuple[Reals, Reals, Reals]:
    """Return C_n = sinh(a) coth(nu a), nu = n + 1, and the first and second derivative of ln C_n, (length,).

    (ln C_n)' = coth(a) - 2 nu/sinh(2 nu a), where 1/sinh(y) = coth(y/2) - coth(y).
    """
    multiples = lengths + 1.0
    own, half, full = (_langevin(np.asarray(x)) for x in (a, multiples * a, 2.0 * multiples * a))
    ratios = np.array([field_ratio(float(length), a) for length in lengths])
    return (
        ratios,
        np.asarray(own[0] - 2.0 * multiples * (half[0] - full[0])),
        np.asarray(own[1] - 4.0 * multiples**2 * (0.5 * half[1] - full[1])),
    )
