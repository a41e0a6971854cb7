"""Strings of the XXZ chain at anisotropy D = cos(pi/nu) and the kernels between them.

Sources: M. Takahashi and M. Suzuki, Prog. Theor. Phys. 48, 2187 (1972); M. Takahashi, Thermodynamics of
One-Dimensional Solvable Models (Cambridge University Press, 1999).
"""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass

import numpy as np

from tnquench.conventions import Integers, Reals

#: Largest nu for which thermal states are supported and tested.
LARGEST_NU = 8

#: An anisotropy counts as cos(pi/nu) when it agrees to this absolute distance.
ANISOTROPY_TOLERANCE = 1e-9

#: A basic kernel a_n^v, named by its length n and parity v.
KernelTerm = tuple[int, int]


class UnsupportedAnisotropy(ValueError):  # noqa: N818 - an answer to a question, caught by its asker
    """The anisotropy is not plus or minus cos(pi/nu); the message names the nearest supported values."""


@dataclass(frozen=True)
class StringTable:
    """Strings at crossing angle g = pi/nu, shapes (string,): lengths, parities v and signs sigma."""

    nu: int
    lengths: Integers
    parities: Integers
    signs: Integers

    @property
    def angle(self) -> float:
        """The crossing angle g with |D| = cos g."""
        return float(np.pi / self.nu)


def supported_anisotropies() -> tuple[float, ...]:
    """Return all supported anisotropies, plus or minus cos(pi/nu) with nu = 2..8, in ascending order."""
    positive = [float(np.cos(np.pi / nu)) for nu in range(3, LARGEST_NU + 1)]
    return tuple(sorted([-value for value in positive] + [0.0, *positive]))


def supported_nu(anisotropy: float) -> int:
    """Return nu with |anisotropy| = cos(pi/nu), 2 <= nu <= 8.

    Raises UnsupportedAnisotropy naming the nearest supported values.
    """
    nearest = sorted(supported_anisotropies(), key=lambda value: abs(value - anisotropy))[:2]
    if not abs(nearest[0] - anisotropy) <= ANISOTROPY_TOLERANCE:  # not <=, so that NaN is refused too
        values = " and ".join(f"{value:.12g}" for value in sorted(nearest))
        message = (
            f"anisotropy {anisotropy!r} is not supported; allowed are 0 and plus or minus cos(pi/nu), "
            f"nu = 3..{LARGEST_NU}; the nearest are {values}"
        )
        raise UnsupportedAnisotropy(message)
    return round(float(np.pi / np.arccos(abs(nearest[0]))))


def string_table(nu: int) -> StringTable:
    """Return the nu strings at angle pi/nu: lengths 1..nu-1 of parity + and sign +, then (1, -) of sign -."""
    last_differs = np.append(np.ones(nu - 1, dtype=np.int64), -1)
    return StringTable(nu, np.append(np.arange(1, nu), 1), last_differs, last_differs)


def phase_derivative(rapidity: Reals, *, length: int, parity: int, nu: int) -> Reals:
    """Return a_n^v(rapidity) = (v/pi) sin(n g) / (cosh 2 rapidity - v cos(n g)), g = pi/nu; any shape.

    It vanishes identically where n is a multiple of nu (the limit would hide a delta function there).
    """
    if length % nu == 0:
        return np.zeros_like(rapidity)
    strength = parity * np.sin(np.pi * length / nu) / np.pi
    return np.asarray(strength / _denominator(rapidity, length=length, parity=parity, nu=nu))


def phase_curvature(rapidity: Reals, *, length: int, parity: int, nu: int) -> Reals:
    """Return the derivative of a_n^v with respect to the rapidity; any shape."""
    if length % nu == 0:
        return np.zeros_like(rapidity)
    strength = -2.0 * parity * np.sin(np.pi * length / nu) / np.pi
    denominator = _denominator(rapidity, length=length, parity=parity, nu=nu)
    return np.asarray(strength * np.sinh(2.0 * rapidity) / denominator**2)


def _denominator(rapidity: Reals, *, length: int, parity: int, nu: int) -> Reals:
    # cosh 2x - c = 2 sinh^2 x + (1 - c) keeps all digits near x = 0
    return np.asarray(2.0 * np.sinh(rapidity) ** 2 + (1.0 - parity * np.cos(np.pi * length / nu)))


def kernel_terms(table: StringTable, row: int, column: int) -> dict[KernelTerm, int]:
    """Return the scattering kernel T_jk of two strings as {(length, parity): multiplicity}.

    T_jk = (1 - delta) a_|n_j - n_k| + 2 a_(|n_j - n_k| + 2) + ... + 2 a_(n_j + n_k - 2) + a_(n_j + n_k),
    delta = 1 for equal lengths, all of parity v_j v_k (Takahashi and Suzuki 1972). Terms that vanish are left
    out.
    """
    parity = int(table.parities[row] * table.parities[column])
    short, long = sorted((int(table.lengths[row]), int(table.lengths[column])))
    terms: Counter[KernelTerm] = Counter()
    for step in range(short + 1):
        terms[long - short + 2 * step, parity] = 1 if step in (0, short) else 2
    return {key: count for key, count in terms.items() if key[0] % table.nu}
