"""Thermodynamics at any -1 < D < 1 from anisotropies nearby, rational or beyond 1, by interpolation in D.

At T > 0 the free energy is analytic in D at fixed temperature and field: its quantum transfer matrix is an
analytic function of D with a gapped leading eigenvalue (M. Suzuki, Phys. Rev. B 31, 2957 (1985); A.
Kluemper, Z. Phys. B 91, 507 (1993)). Strings are not: they change at every rational angle, so convergents of
an irrational angle agree with it only to the distance of their anisotropies. A polynomial through many of
them converges exponentially, across the isotropic points too, so that |D| > 1 serves |D| just below 1.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from fractions import Fraction

import numpy as np

from tnquench.bethe.angles import anisotropy_of, nearby_anisotropies
from tnquench.conventions import Reals

#: Most strings of the anisotropies between which D is interpolated, and of those near the isotropic points.
STRINGS = 7
STRINGS_AT_EDGES = 12

#: Sizes of anisotropies beyond the isotropic points; at |D| = 1 itself strings converge slowly.
BEYOND_EDGES = (1.01, 1.02, 1.035, 1.05, 1.075, 1.1)

#: How many times the last changes is claimed: among dense nodes; where some lie beyond |D| = 1, as nodes are
#: sparser there (errors of cold ferromagnets, beta = 20, were up to 2.1 times as large); and where all
#: nodes lie on one side of D.
DENSE_SAFETY, EDGE_SAFETY, EXTRAPOLATION_SAFETY = 1.0, 5.0, 30.0

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
    """Return functions at D from `solve`, which maps a rational D, or |D| > 1, to values and errors.

    Nodes are taken nearest first until every error is below its target, or MOST of them are used. The error
    is a multiple of the larger one of the last two changes of the polynomial, plus sum |l_i| error_i with the
    Lagrange polynomials l_i at D.
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
        safety = _safety(nodes[: len(found)], anisotropy)
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


def _safety(nodes: Sequence[float], anisotropy: float) -> float:
    if not min(nodes) < anisotropy < max(nodes):
        return EXTRAPOLATION_SAFETY
    return EDGE_SAFETY if max(abs(node) for node in nodes) > 1.0 else DENSE_SAFETY


def _worst(errors: Functions, targets: Functions) -> float:
    return max(errors[key] / targets[key] for key in targets)


def interpolation_nodes(anisotropy: float) -> list[float]:
    """Return MOST anisotropies, nearest to D first: of few strings, and on both sides of |D| = 1."""
    simple = nearby_anisotropies(anisotropy, strings=STRINGS, count=MOST)
    sign = -1.0 if anisotropy < 0.0 else 1.0
    edge = [sign * anisotropy_of(Fraction(1, nu)) for nu in range(STRINGS + 1, STRINGS_AT_EDGES + 1)]
    beyond = [sign * value for value in BEYOND_EDGES]
    return sorted({*simple, *edge, *beyond}, key=lambda value: abs(value - anisotropy))[:MOST]


def lagrange_basis(nodes: Reals, target: float) -> Reals:
    """Return the Lagrange polynomials of `nodes` (node,) at `target`, which is none of them."""
    differences = nodes[:, None] - nodes[None, :]
    np.fill_diagonal(differences, 1.0)
    distances = np.broadcast_to(target - nodes, differences.shape).copy()
    np.fill_diagonal(distances, 1.0)
    return np.asarray(np.prod(distances / differences, axis=1))
