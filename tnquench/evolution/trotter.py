"""Suzuki-Trotter schemes as cited coefficients of alternating half layers."""

from __future__ import annotations

from dataclasses import dataclass
from math import sqrt

EVEN, ODD = 0, 1


@dataclass(frozen=True)
class TrotterScheme:
    """One time step as a palindrome of half layers: even bonds first, then odd, alternating.

    order : order in the time step; coefficients : fractions of the step, even bonds at even places
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


def half_layers(scheme: TrotterScheme, steps: int) -> list[tuple[int, float]]:
    """Return the half layers (parity of their bonds, fraction of a step) of `steps` steps, adjacent ones
    merged.

    The last layer of a step and the first of the next act on the same bonds, so n steps of a scheme with m
    layers need only n (m - 1) + 1 layers.
    """
    layers: list[tuple[int, float]] = []
    for _ in range(steps):
        for place, fraction in enumerate(scheme.coefficients):
            parity = place % 2
            if layers and layers[-1][0] == parity:
                layers[-1] = (parity, layers[-1][1] + fraction)
            else:
                layers.append((parity, fraction))
    return layers
