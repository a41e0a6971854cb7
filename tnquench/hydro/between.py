"""Predictions at anisotropies without a small string table, from rational ones nearby.

Densities and currents of energy turn out to be smooth functions of D = cos(pi p/q), those of spin smooth
functions of D and 1/q^2: at rational points spin transport differs from its limit, as the Drude weight does,
and the limit 1/q -> 0 is what an irrational angle has (T. Prosen and E. Ilievski, Phys. Rev. Lett. 111,
057203 (2013), for the Drude weight; measured for joined halves in tests/test_hydro_between.py). Values at D
are therefore linear combinations of those at rational anisotropies, and their errors differences of two
orders.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from fractions import Fraction
from functools import lru_cache
from math import gcd

import numpy as np

from tnquench.bethe.angles import (
    anisotropy_of,
    is_rational,
    rational_turn,
    string_count,
)
from tnquench.bethe.interpolated import lagrange_basis
from tnquench.conventions import Reals
from tnquench.errors import InputError

#: Most strings and largest denominator of the angles at which the hydrodynamic equations are solved.
MOST_STRINGS = 10
LARGEST_DENOMINATOR = 13

#: Anisotropies are combined up to here, a little beyond the largest of a small string table.
LARGEST_ANISOTROPY = 0.97

#: How many anisotropies a value is combined from.
NEIGHBOURS = 7

#: The error is this many times the largest difference from a poorer order: orders may agree by chance.
SAFETY = 3.0

#: Powers (of D, of 1/q^2) that spin combinations reproduce: the best one first, then poorer ones.
SPIN_POWERS: tuple[tuple[tuple[int, int], ...], ...] = (
    ((0, 0), (1, 0), (2, 0), (0, 1), (1, 1)),
    ((0, 0), (1, 0), (2, 0), (0, 1)),
    ((0, 0), (1, 0), (0, 1)),
)


@dataclass(frozen=True, eq=False)
class Between:
    """How values at one anisotropy follow from those at others.

    anisotropies : where the equations are solved; the one asked for alone where it can be solved itself
    energy, spin : (order, anisotropy) weights, those of the best order first
    """

    anisotropies: tuple[float, ...]
    energy: Reals
    spin: Reals

    def combine(self, values: Sequence[Reals], *, spin: bool) -> tuple[Reals, Reals]:
        """Return a value of any shape and its error from one array an anisotropy.

        The error is SAFETY times the largest difference from a poorer order.
        """
        orders = np.tensordot(self.spin if spin else self.energy, np.array(values), axes=1)
        return orders[0], SAFETY * np.abs(orders - orders[0]).max(axis=0)

    def bound(self, errors: Sequence[Reals], *, spin: bool) -> Reals:
        """Return what errors of the values add up to, same shapes as in `combine`."""
        return np.asarray(np.tensordot(np.abs((self.spin if spin else self.energy)[0]), errors, axes=1))


def between(anisotropy: float) -> Between:
    """Return how the hydrodynamics at -1 < D < 1 follows from rational anisotropies.

    Raises InputError where |D| exceeds LARGEST_ANISOTROPY.
    """
    if not abs(anisotropy) <= LARGEST_ANISOTROPY:  # so that NaN is refused too
        problem = (
            f"[chain] anisotropy = {anisotropy!r}: this prediction reaches |D| = {LARGEST_ANISOTROPY:g}; "
            "nearer to 1 it would need too many strings (at |D| >= 1 only joined halves are predicted)"
        )
        subject = "prediction"
        raise InputError(subject, [problem])
    turn = rational_turn(anisotropy) if is_rational(anisotropy) else None
    if turn is not None and is_small(turn):
        return Between((anisotropy,), np.ones((1, 1)), np.ones((1, 1)))
    table = small_anisotropies()
    nodes = np.array(sorted(table, key=lambda value: abs(value - anisotropy))[:NEIGHBOURS])
    inverse = np.array([float(table[float(node)]) ** -2 for node in nodes])
    target = 0.0 if turn is None else float(turn.denominator) ** -2
    spin = [_spin_weights(nodes - anisotropy, inverse, target, powers) for powers in SPIN_POWERS]
    energy = np.zeros((3, NEIGHBOURS))
    for order in range(3):
        energy[order, : NEIGHBOURS - order] = lagrange_basis(nodes[: NEIGHBOURS - order], anisotropy)
    return Between(tuple(nodes.tolist()), energy, np.array(spin))


def _spin_weights(
    distances: Reals, inverse: Reals, target: float, powers: Sequence[tuple[int, int]]
) -> Reals:
    """Return the smallest weights (anisotropy,) that reproduce powers at distance 0 and 1/q^2 = target."""
    scaled, levels = distances / np.abs(distances).max(), inverse / inverse.max()
    conditions = np.array([scaled**a * levels**b for a, b in powers])
    wanted = np.array([float(a == 0) * (target / inverse.max()) ** b for a, b in powers])
    return np.asarray(np.linalg.lstsq(conditions, wanted, rcond=None)[0])


def is_small(turn: Fraction) -> bool:
    """Whether the hydrodynamic equations are solved at g = pi turn itself."""
    return turn.denominator <= LARGEST_DENOMINATOR and string_count(turn) <= MOST_STRINGS


@lru_cache(maxsize=1)
def small_anisotropies() -> dict[float, int]:
    """Return all anisotropies of small string tables, of either sign, with their denominators."""
    found: dict[float, int] = {}
    for bottom in range(2, LARGEST_DENOMINATOR + 1):
        for top in range(1, bottom // 2 + 1):
            if gcd(top, bottom) == 1 and is_small(turn := Fraction(top, bottom)):
                found |= {anisotropy_of(turn, negative=sign): bottom for sign in (False, True)}
    return found
