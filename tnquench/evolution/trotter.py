"""Suzuki-Trotter schemes as cited coefficients of alternating layers, for two and more groups of terms.

A palindrome a1 b1 a2 b2 ... of exponentials of two groups is the composition chi(alpha_1 h) chi*(alpha_2 h)
chi(alpha_3 h) ... of the first-order step chi(h) = exp(h G_1) ... exp(h G_m), here with m = 2, and its
adjoint chi*, with alpha_1 = a1, alpha_2 = b1 - alpha_1, alpha_3 = a2 - alpha_2, ... With the same alpha it
has the same order for any number m of groups: R. I. McLachlan, SIAM J. Sci. Comput. 16, 151 (1995).
"""

from __future__ import annotations

from dataclasses import dataclass
from math import sqrt


@dataclass(frozen=True)
class TrotterScheme:
    """One time step as a palindrome of layers of two groups of terms, the first group first, alternating.

    order : order in the time step; coefficients : fractions of the step, the first group at even places
    source : where the coefficients come from
    """

    order: int
    coefficients: tuple[float, ...]
    source: str


def _mclachlan() -> tuple[float, ...]:
    a1, a2 = (14.0 - sqrt(19.0)) / 108.0, (20.0 - 7.0 * sqrt(19.0)) / 108.0
    a3 = 0.5 - a1 - a2
    b1, b2 = 0.4, -0.1
    b3 = 1.0 - 2.0 * (b1 + b2)
    return (a1, b1, a2, b2, a3, b3, a3, b2, a2, b1, a1)


SCHEMES: dict[int, TrotterScheme] = {
    2: TrotterScheme(2, (0.5, 1.0, 0.5), "G. Strang, SIAM J. Numer. Anal. 5, 506 (1968)"),
    4: TrotterScheme(
        4,
        _mclachlan(),
        "R. I. McLachlan, SIAM J. Sci. Comput. 16, 151 (1995), five stages; "
        "coefficients from memory, order verified numerically",
    ),
}


def half_layers(scheme: TrotterScheme, steps: int, *, groups: int = 2) -> list[tuple[int, float]]:
    """Return the layers (group of terms, fraction of a step) of `steps` steps, adjacent ones merged.

    groups : how many groups of commuting terms make up the whole, at least two. The first and the last group
    take the scheme's coefficients; the groups between are passed to and fro with the composition's.
    The last layer of a step and the first of the next act with the same terms, so n steps of a scheme with m
    coefficients need n (m - 1) (groups - 1) + 1 layers.
    """
    between = range(1, groups - 1)
    step: list[tuple[int, float]] = []
    alpha = 0.0
    for place, coefficient in enumerate(scheme.coefficients[:-1]):
        forward = place % 2 == 0
        alpha = coefficient - alpha
        step.append((0 if forward else groups - 1, coefficient))
        step += [(group, alpha) for group in (between if forward else reversed(between))]
    step.append((0, scheme.coefficients[-1]))
    layers = step[:]
    for _ in range(steps - 1):
        layers[-1] = (0, layers[-1][1] + step[0][1])
        layers += step[1:]
    return layers
