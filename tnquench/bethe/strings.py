"""Strings of the XXZ chain at a rational angle g = pi p/q, |D| = cos g, and the kernels between them.

Sources: M. Takahashi and M. Suzuki, Prog. Theor. Phys. 48, 2187 (1972); M. Takahashi, Thermodynamics of
One-Dimensional Solvable Models (Cambridge University Press, 1999), chapter 9.
"""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass
from fractions import Fraction
from functools import cached_property, lru_cache

import numpy as np

from tnquench.bethe.angles import continued_fraction
from tnquench.conventions import Integers, Reals

#: A basic function a_n^v depends on n g modulo 2 pi alone: it is named by its residue r, -q < r < q, with
#: a = sin(w) / (cosh 2x - cos w) / pi, w = pi r/q. Residue 0 is the function that vanishes.
Residue = int


@dataclass(frozen=True)
class StringTable:
    """Strings at crossing angle g = pi p/q, turn = p/q.

    lengths, parities, signs : (string,) n, v and sigma
    units  : (string,) y_i of the level that a string belongs to; the last string has that of the level below
    """

    turn: Fraction
    lengths: Integers
    parities: Integers
    signs: Integers
    units: Integers

    @property
    def angle(self) -> float:
        """The crossing angle g with |D| = cos g."""
        return float(np.pi * self.turn)

    @property
    def residues(self) -> tuple[Residue, ...]:
        """The basic function of each string."""
        pairs = zip(self.lengths.tolist(), self.parities.tolist(), strict=True)
        return tuple(residue(self.turn, length=n, parity=v) for n, v in pairs)

    @cached_property
    def state_angle(self) -> float:
        """Twice the distance from the real axis of the nearest pole of a basic function of a string."""
        return float(np.pi * min(abs(r) for r in self.residues) / self.turn.denominator)

    @cached_property
    def kernel_angle(self) -> float:
        """Twice the distance from the real axis of the nearest pole of a kernel between strings, or pi."""
        size = self.lengths.size
        widths = {abs(r) for a in range(size) for b in range(size) for r in kernel_terms(self, a, b)}
        return float(np.pi * min(widths, default=self.turn.denominator) / self.turn.denominator)

    @property
    def finest_angle(self) -> float:
        """The smaller of the two: what a rapidity mesh must resolve."""
        return min(self.state_angle, self.kernel_angle)


@lru_cache(maxsize=64)
def string_table(turn: Fraction) -> StringTable:
    """Return the strings at g = pi turn, 0 < turn <= 1/2.

    With q/p = [nu_1, ..., nu_l], m_i = nu_1 + ... + nu_i, y_(-1) = 0, y_0 = 1, y_i = nu_i y_(i-1) + y_(i-2):
    string j = 1 ... m_l has n_j = y_(i-1) + (j - m_i) y_i and sigma_j = (-1)^i for m_i <= j < m_(i+1), and
    n = y_(l-1), sigma = (-1)^l at j = m_l. Parity v_j = (-1)^floor((n_j - 1) p/q), but v = -1 at j = m_1.
    """
    terms = continued_fraction(turn)
    before, unit, lengths, units, signs = 0, 1, [], [], []
    for level, term in enumerate(terms):
        steps = range(1 if level == 0 else 0, term)
        lengths += [before + step * unit for step in steps]
        units += [unit] * len(steps)
        signs += [(-1) ** level] * len(steps)
        before, unit = unit, term * unit + before
    lengths, units, signs = [*lengths, before], [*units, before], [*signs, (-1) ** len(terms)]
    parities = [(-1) ** ((n - 1) * turn.numerator // turn.denominator) for n in lengths]
    parities[terms[0] - 1] = -1
    columns = (np.array(column, dtype=np.int64) for column in (lengths, parities, signs, units))
    return StringTable(turn, *columns)


def residue(turn: Fraction, *, length: int, parity: int) -> Residue:
    """Return the residue of a_n^v = (v/pi) sin(n g) / (cosh 2x - v cos n g).

    Zero where n g is a multiple of pi: the function vanishes there (its limit would hide a delta function).
    """
    p, q = turn.numerator, turn.denominator
    angle = (length * p + (q if parity < 0 else 0)) % (2 * q)
    return 0 if angle % q == 0 else angle - 2 * q * (angle > q)


def phase_derivative(rapidity: Reals, *, angle: float) -> Reals:
    """Return sin(w) / (cosh 2 rapidity - cos w) / pi at w = angle != 0, |w| < pi; any shape.

    For |w| -> 0 it is a delta function of strength sign(w).
    """
    return np.asarray(np.sin(angle) / np.pi / _denominator(rapidity, angle))


def phase_curvature(rapidity: Reals, *, angle: float) -> Reals:
    """Return the derivative of `phase_derivative` with respect to the rapidity; any shape."""
    strength = -2.0 * np.sin(angle) / np.pi
    return np.asarray(strength * np.sinh(2.0 * rapidity) / _denominator(rapidity, angle) ** 2)


def _denominator(rapidity: Reals, angle: float) -> Reals:
    # cosh 2x - cos w = 2 sinh^2 x + (1 - cos w) keeps all digits near x = 0, 2 sin^2(w/2) those at small w
    rest = 1.0 - np.cos(angle) if abs(angle) > 1.0 else 2.0 * np.sin(0.5 * angle) ** 2
    return np.asarray(2.0 * np.sinh(rapidity) ** 2 + rest)


def kernel_terms(table: StringTable, row: int, column: int) -> dict[Residue, int]:
    """Return the scattering kernel T_jk of two strings as {residue > 0: multiplicity of either sign}.

    T_jk = (1 - delta) a_|n_j - n_k| + 2 a_(|n_j - n_k| + 2) + ... + 2 a_(n_j + n_k - 2) + a_(n_j + n_k),
    delta = 1 for equal lengths, all of parity v_j v_k (Takahashi and Suzuki 1972).
    """
    parity = int(table.parities[row] * table.parities[column])
    short, long = sorted((int(table.lengths[row]), int(table.lengths[column])))
    terms: Counter[Residue] = Counter()
    for step in range(short + 1):
        r = residue(table.turn, length=long - short + 2 * step, parity=parity)
        terms[abs(r)] += (1 if step in (0, short) else 2) * int(np.sign(r))
    return {r: count for r, count in terms.items() if r and count}
