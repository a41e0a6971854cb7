"""Anisotropies at which the Bethe ansatz is tested, and the truth at D = 0."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from scipy.integrate import quad


def root_of_unity(nu: int, sign: int = 1) -> float:
    return 0.0 if nu == 2 else float(sign * np.cos(np.pi / nu))


def rational(numerator: int, denominator: int, sign: int = 1) -> float:
    """D = plus or minus cos(pi p/q)."""
    return float(sign * np.cos(np.pi * numerator / denominator))


def named(nu: int, sign: int) -> Any:
    return pytest.param(root_of_unity(nu, sign), id=f"{'-' if sign < 0 else ''}cos(pi/{nu})")


ALL = [named(2, 1)] + [named(nu, sign) for nu in range(3, 9) for sign in (1, -1)]
FRACTIONS = [
    pytest.param(rational(p, q, sign), id=f"{'-' if sign < 0 else ''}cos({p}pi/{q})")
    for p, q, sign in (
        (2, 5, 1),
        (3, 7, 1),
        (3, 8, -1),
        (2, 7, 1),
        (2, 9, -1),
        (5, 12, 1),
        (12, 29, 1),
        (29, 70, 1),
    )
]
SOME = [named(nu, sign) for nu, sign in ((2, 1), (3, 1), (3, -1), (4, 1), (5, -1), (6, 1))]


def free_fermions(*, beta: float, field: float) -> dict[str, float]:
    """Adaptive integrals over k of fermions J cos k - h, n - 1/2 = S^z."""

    def mean(function: Any) -> float:
        return float(quad(function, 0.0, np.pi, epsabs=1e-13, epsrel=1e-12, limit=400)[0] / np.pi)

    def level(k: float) -> float:
        return float(np.cos(k) - field)

    def occupied(k: float) -> float:
        return float(1.0 / (np.exp(beta * level(k)) + 1.0))

    free_energy = mean(lambda k: -np.logaddexp(0.5 * beta * level(k), -0.5 * beta * level(k)) / beta)
    energy = mean(lambda k: np.cos(k) * (occupied(k) - 0.5))
    magnetisation = mean(lambda k: occupied(k) - 0.5)
    return {
        "free_energy": free_energy,
        "energy": energy,
        "entropy": beta * (energy - field * magnetisation - free_energy),
        "magnetisation": magnetisation,
        "specific_heat": mean(lambda k: (beta * level(k)) ** 2 * occupied(k) * (1.0 - occupied(k))),
        "susceptibility": mean(lambda k: beta * occupied(k) * (1.0 - occupied(k))),
    }
