"""Thermodynamics at any -1 < D < 1 from rational anisotropies nearby, by interpolation in D.

At T > 0 the free energy is analytic in D at fixed temperature and field: its quantum transfer matrix is an
analytic function of D with a gapped leading eigenvalue (M. Suzuki, Phys. Rev. B 31, 2957 (1985); A.
Kluemper, Z. Phys. B 91, 507 (1993)). Strings are not: they change at every rational angle, so convergents of
an irrational angle agree with it only to the distance of their anisotropies. A polynomial through many of
them converges exponentially, also where all of them lie on one side of D, towards the isotropic points.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from fractions import Fraction

import numpy as np

from tnquench.bethe.angles import anisotropy_of, nearby_anisotropies
from tnquench.conventions import Reals

#: Most strings of the anisotropies between which D is interpolated, and of those near the isotropic points.
STRINGS = 7
STRINGS_AT_EDGES = 12

#: Where all nodes lie on one side of D the last changes claim too little: errors of cold chains near the
#: isotropic ferromagnet (D from -0.9999 to -0.99, beta = 20) were found up to 12 times larger.
EXTRAPOLATION_SAFETY = 30.0

#: Numbers of anisotropies that a polynomial goes through, at least and at most.
FEWEST, MOST = 5, 12

Functions = Mapping[str, float]


@dataclass(frozen=True)
class Interpolated:
    """Values by name, and their errors: the last changes of the polynomial, and what its nodes bring."""

    values: dict[str, float]
    errors: dict[str, float]


def interpolate_in_anisotropy(
    solve: Callable[[float], tuple[Functions, Functions]], anisotropy: float, *, targets: Functions
) -> Interpolated:
    """Return functions at D from `solve`, which maps a rational D to values and errors.

    Nodes are taken nearest first until every error is below its target, or MOST of them are used. The error
    is the larger of the last two changes of the polynomial (EXTRAPOLATION_SAFETY times that where all nodes
    lie on one side of D), plus sum |l_i| error_i with the Lagrange
    polynomials l_i at D.
    """
    nodes = interpolation_nodes(anisotropy)
    found: list[tuple[Functions, Functions]] = []
    history: list[dict[str, float]] = []
    best = Interpolated({}, {})
    for node in nodes:
        found.append(solve(node))
        basis = lagrange_basis(np.array(nodes[: len(found)]), anisotropy)
        values = {key: float(basis @ [each[0][key] for each in found]) for key in targets}
        history.append(values)
        if len(found) < FEWEST:
            continue
        beyond = not min(nodes[: len(found)]) < anisotropy < max(nodes[: len(found)])
        safety = EXTRAPOLATION_SAFETY if beyond else 1.0
        errors = {
            key: safety * max(abs(a[key] - b[key]) for a, b in zip(history[-3:], history[-2:], strict=False))
            + float(np.abs(basis) @ [each[1][key] for each in found])
            for key in targets
        }
        if not best.errors or _worst(errors, targets) < _worst(best.errors, targets):
            best = Interpolated(values, errors)
        if _worst(errors, targets) <= 1.0:
            break
    return best


def _worst(errors: Functions, targets: Functions) -> float:
    return max(errors[key] / targets[key] for key in targets)


def interpolation_nodes(anisotropy: float) -> list[float]:
    """Return MOST anisotropies, nearest to D first: those of few strings, and cos(pi/nu) towards |D| = 1."""
    simple = nearby_anisotropies(anisotropy, strings=STRINGS, count=MOST)
    sign = -1.0 if anisotropy < 0.0 else 1.0
    edge = [sign * anisotropy_of(Fraction(1, nu)) for nu in range(STRINGS + 1, STRINGS_AT_EDGES + 1)]
    return sorted({*simple, *edge}, key=lambda value: abs(value - anisotropy))[:MOST]


def lagrange_basis(nodes: Reals, target: float) -> Reals:
    """Return the Lagrange polynomials of `nodes` (node,) at `target`, which is none of them."""
    differences = nodes[:, None] - nodes[None, :]
    np.fill_diagonal(differences, 1.0)
    distances = np.broadcast_to(target - nodes, differences.shape).copy()
    np.fill_diagonal(distances, 1.0)
    return np.asarray(np.prod(distances / differences, axis=1))
