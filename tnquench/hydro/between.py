"""Predictions at anisotropies without a small string table, from others nearby.

Densities and currents of energy turn out to be smooth functions of D, from D = cos(pi p/q) through D = 1 and
D = -1 into the gapped regime; those of spin smooth functions of D and 1/q^2: at rational points spin
transport differs from its limit, as the Drude weight does, and the limit 1/q -> 0 is what an irrational angle
has (T. Prosen and E. Ilievski, Phys. Rev. Lett. 111, 057203 (2013), for the Drude weight; measured for joined
halves in tests/test_hydro_between.py). Values at D are therefore linear combinations of those at rational
anisotropies and at |D| >= 1, and their errors differences of two orders.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
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

#: Where |D| >= 1 is solved, for anisotropies nearby; 1/q^2 counts as zero there.
GAPPED_ANISOTROPIES = (1.0, 1.02, 1.05)

#: Further angles towards |D| = 1, where nothing on the other side may be used: from this |D| on.
EDGE_TURNS = tuple(Fraction(*turn) for turn in ((1, 11), (1, 12), (1, 13), (2, 15), (2, 17), (2, 19)))
EDGE_FROM = 0.93

#: Where |D| >= 1 has no solution, anisotropies are combined up to here.
LARGEST_ANISOTROPY = 0.97

#: How many anisotropies a value is combined from, and how many where |D| >= 1 is among them.
NEIGHBOURS, NEIGHBOURS_ACROSS = 7, 8

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
    """Return how joined halves at D follow from anisotropies at which they are solved.

    Raises InputError where D is not a finite number.
    """
    if not np.isfinite(anisotropy):
        subject = "prediction"
        raise InputError(subject, [f"[chain] anisotropy = {anisotropy!r}: it must be a finite number"])
    table: dict[float, float] = {**small_anisotropies()}
    table |= {sign * value: np.inf for value in GAPPED_ANISOTROPIES for sign in (-1.0, 1.0)}
    return _combination(anisotropy, table)


def between_gapless(anisotropy: float) -> Between:
    """Return the same from |D| < 1 alone, as needed where there is no solution at |D| >= 1.

    Raises InputError where |D| exceeds LARGEST_ANISOTROPY.
    """
    if not abs(anisotropy) <= LARGEST_ANISOTROPY:  # so that NaN is refused too
        problem = (
            f"[chain] anisotropy = {anisotropy!r}: smooth profiles are predicted up to |D| = "
            f"{LARGEST_ANISOTROPY:g}, for nearer to 1 it would need too many strings; two joined halves "
            "(width = 0) are predicted at every D"
        )
        subject = "prediction"
        raise InputError(subject, [problem])
    return _combination(anisotropy, {**small_anisotropies()})


def between_angles(anisotropy: float) -> Between:
    """Return the same from |D| < 1 alone, with spin in powers of the angle arccos(D) in place of D.

    For what has no continuation to |D| >= 1 because it grows like the angle; |D| < 1.
    """
    table: dict[float, float] = {**small_anisotropies()}
    if abs(anisotropy) > EDGE_FROM:
        for turn in EDGE_TURNS:
            table |= {anisotropy_of(turn, negative=sign): turn.denominator for sign in (False, True)}
    return _combination(anisotropy, table, by_angle=True)


def _combination(anisotropy: float, table: Mapping[float, float], *, by_angle: bool = False) -> Between:
    """Return the combination of those anisotropies of `table` (with denominators q) that are nearest to D."""
    turn = rational_turn(anisotropy) if abs(anisotropy) < 1.0 and is_rational(anisotropy) else None
    if abs(anisotropy) >= 1.0 or (turn is not None and is_small(turn)):
        return Between((anisotropy,), np.ones((1, 1)), np.ones((1, 1)))
    nearest = sorted(table, key=lambda value: abs(value - anisotropy))
    across = max(abs(value) for value in nearest[:NEIGHBOURS]) >= 1.0
    nodes = np.array(nearest[: NEIGHBOURS_ACROSS if across else NEIGHBOURS])
    inverse = np.array([float(table[float(node)]) ** -2.0 for node in nodes])
    target = 0.0 if turn is None else float(turn.denominator) ** -2
    distances = np.arccos(nodes) - np.arccos(anisotropy) if by_angle else nodes - anisotropy
    spin = [_spin_weights(distances, inverse, target, powers) for powers in SPIN_POWERS]
    if across:  # what spin depends on changes at |D| = 1: the claim contains what one side says alone
        own = np.abs(nodes) < 1.0
        alone = np.zeros(nodes.size)
        alone[own] = _spin_weights(distances[own], inverse[own], target, SPIN_POWERS[-1])
        spin.append(alone)
    energy = np.zeros((3, nodes.size))
    for order in range(3):
        kept = nodes.size - order
        energy[order, :kept] = lagrange_basis(nodes[:kept], anisotropy)
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
