"""Crossing angles g = pi p/q of rational anisotropies |D| = cos g, and the rational ones near any other.

The number of strings at p/q is the sum of the terms of the continued fraction of q/p, which is the depth of
p/q in the tree of all fractions (M. Stern, J. Reine Angew. Math. 55, 193 (1858); A. Brocot, Revue
Chronometrique 3, 186 (1861)): simple fractions have few strings.
"""

from __future__ import annotations

from fractions import Fraction
from functools import lru_cache
from itertools import pairwise

import numpy as np

#: An anisotropy counts as rational when its g/pi agrees with p/q to this absolute distance.
ANGLE_TOLERANCE = 1e-9

#: Most strings, and largest denominator q, of an angle that is solved as it is.
MOST_STRINGS = 16
LARGEST_DENOMINATOR = 240


class UnsupportedAnisotropy(ValueError):  # noqa: N818 - an answer to a question, caught by its asker
    """The anisotropy has no string table of moderate size; the message names what is nearest."""


def require_gapless(anisotropy: float) -> None:
    """Raise UnsupportedAnisotropy unless -1 < D < 1."""
    if not abs(anisotropy) < 1.0:  # so that NaN is refused too
        message = f"anisotropy {anisotropy!r} is outside the gapless region; allowed are -1 < D < 1"
        raise UnsupportedAnisotropy(message)


def continued_fraction(turn: Fraction) -> tuple[int, ...]:
    """Return the terms of q/p for turn = p/q in 0 < p/q <= 1/2, the last term at least 2."""
    terms, top, bottom = [], turn.denominator, turn.numerator
    while bottom:
        quotient, rest = divmod(top, bottom)
        terms.append(quotient)
        top, bottom = bottom, rest
    return tuple(terms)


def string_count(turn: Fraction) -> int:
    """Return the number of strings at g = pi turn."""
    return sum(continued_fraction(turn))


def anisotropy_of(turn: Fraction, *, negative: bool = False) -> float:
    """Return cos(pi turn), or minus that, exactly zero at 1/2."""
    if turn == Fraction(1, 2):
        return 0.0
    size = float(np.cos(np.pi * float(turn)))
    return -size if negative else size


def rational_turn(anisotropy: float) -> Fraction:
    """Return the simplest p/q with |arccos|D|/pi - p/q| at most ANGLE_TOLERANCE.

    Raises UnsupportedAnisotropy unless |D| < 1 and p/q has at most MOST_STRINGS strings and a denominator of
    at most LARGEST_DENOMINATOR; the message names the nearest such anisotropies.
    """
    require_gapless(anisotropy)
    exact = float(np.arccos(abs(anisotropy)) / np.pi)
    path = _descent(exact, strings=MOST_STRINGS, denominator=LARGEST_DENOMINATOR)
    for turn in path:
        if abs(float(turn) - exact) <= ANGLE_TOLERANCE:
            return turn
    sign = -1.0 if anisotropy < 0.0 else 1.0
    nearest = sorted(path, key=lambda turn: abs(float(turn) - exact))[:2]
    values = " and ".join(f"{sign * anisotropy_of(t):.12g} (cos {_named(t)})" for t in sorted(nearest))
    message = (
        f"anisotropy {anisotropy!r} is not cos(pi p/q) of a fraction with at most {MOST_STRINGS} strings and "
        f"a denominator of at most {LARGEST_DENOMINATOR}; the nearest are {values}"
    )
    raise UnsupportedAnisotropy(message)


def is_rational(anisotropy: float) -> bool:
    """Whether `rational_turn` has an answer for D, |D| < 1."""
    try:
        rational_turn(anisotropy)
    except UnsupportedAnisotropy:
        return False
    return True


def _named(turn: Fraction) -> str:
    factor = "" if turn.numerator == 1 else f"{turn.numerator} "
    return f"{factor}pi/{turn.denominator}"


def _descent(value: float, *, strings: int, denominator: int) -> list[Fraction]:
    """Return the fractions on the way down the tree to `value`, 0 < value <= 1/2, simplest first."""
    low, high, path = (0, 1), (1, 2), [Fraction(1, 2)]
    while True:
        turn = Fraction(low[0] + high[0], low[1] + high[1])
        if string_count(turn) > strings or turn.denominator > denominator:
            return path
        path.append(turn)
        if float(turn) == value:
            return path
        between = turn.numerator, turn.denominator
        low, high = (low, between) if value < float(turn) else (between, high)


def nearby_anisotropies(anisotropy: float, *, strings: int, count: int) -> list[float]:
    """Return `count` rational D of either sign with at most so many strings, those nearest to D first."""
    return sorted(_simple_anisotropies(strings), key=lambda value: abs(value - anisotropy))[:count]


@lru_cache(maxsize=8)
def _simple_anisotropies(strings: int) -> tuple[float, ...]:
    """Return every D = plus or minus cos(pi p/q) with at most so many strings, ascending."""
    turns = {Fraction(0, 1), Fraction(1, 2)}
    for _ in range(strings - 1):
        ordered = sorted(turns)
        between = [
            Fraction(a.numerator + b.numerator, a.denominator + b.denominator) for a, b in pairwise(ordered)
        ]
        turns.update(turn for turn in between if string_count(turn) <= strings)
    positive = [anisotropy_of(turn) for turn in turns if turn]
    return tuple(sorted({*positive, *(-value for value in positive if value)}))
