"""Rapidity nodes that cover the whole line with spectral accuracy.

A rapidity is written lambda = artanh(x), x = w sinh(s arsinh(1/w)), w = tan(angle/2), with Gauss-Legendre
nodes in -1 < s < 1. Thermal functions are analytic in exp(-2 |lambda|) at infinite rapidity (the eigenvalues
of the quantum transfer matrix are Laurent polynomials in exp(2 lambda) at any Trotter number), hence analytic
in s up to both ends: there is no cutoff, and no constant has to be subtracted. The sinh moves the poles at
lambda = i angle/2 away from the interval; for such maps see P. R. Johnston and D. Elliott, Int. J. Numer.
Methods Eng. 62, 564 (2005) (reference from memory; the convergence is measured in the tests).
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from itertools import pairwise

import numpy as np

from tnquench.conventions import Reals

#: Gauss-Legendre points on each panel of the fine quadrature.
PANEL_POINTS = 20

#: A panel spans at most this many nodes, so that its points resolve the nodes' polynomials ...
PANEL_NODES = 8

#: ... and at most this multiple of the distance from the real axis at which the kernel has its poles.
PANEL_ANGLE = 1.6

#: Beyond the outermost node panels double in width up to this, until exp(-2 distance) is below rounding.
WIDEST_PANEL = 2.0
TAIL_LENGTH = 18.0


@dataclass(frozen=True)
class RapidityGrid:
    """Gauss-Legendre nodes in the unit variable s, their rapidities and weights; shapes (node,).

    angle : twice the distance from the real axis of the poles that the nodes are made for
    """

    angle: float
    units: Reals
    unit_weights: Reals
    rapidities: Reals
    weights: Reals


@lru_cache(maxsize=64)
def rapidity_grid(angle: float, nodes: int) -> RapidityGrid:
    """Return the grid of `nodes` rapidities, ascending and symmetric, for poles at +-i angle/2."""
    units, unit_weights = np.polynomial.legendre.leggauss(nodes)
    width = np.tan(0.5 * angle)
    stretch = np.arcsinh(1.0 / width)
    tanh = width * np.sinh(stretch * np.abs(units))
    # 1 - tanh^2 = w^2 [sinh^2 A - sinh^2 A s] without cancellation near the ends
    complement = width**2 * np.sinh(stretch * (1.0 + units)) * np.sinh(stretch * (1.0 - units))
    rapidities = np.sign(units) * (np.log1p(tanh) - 0.5 * np.log(complement))
    slopes = width * stretch * np.cosh(stretch * units) / complement
    return RapidityGrid(angle, units, unit_weights, rapidities, unit_weights * slopes)


def unit_of_rapidity(grid: RapidityGrid, rapidities: Reals) -> Reals:
    """Return the unit variable s of given rapidities, any shape: s = arsinh(tanh(lambda)/w)/arsinh(1/w)."""
    width = np.tan(0.5 * grid.angle)
    return np.asarray(np.arcsinh(np.tanh(rapidities) / width) / np.arcsinh(1.0 / width))


def interpolation_matrix(grid: RapidityGrid, units: Reals) -> Reals:
    """Return the (target, node) matrix that carries node values to other values `units` (target,) of s.

    Barycentric interpolation through Gauss-Legendre nodes. Sources: J.-P. Berrut and L. N. Trefethen, SIAM
    Review 46, 501 (2004); weights of Legendre nodes: H. Wang and S. Xiang, Math. Comp. 81, 861 (2012).
    """
    node_weights = np.sqrt((1.0 - grid.units**2) * grid.unit_weights) * (-1.0) ** np.arange(grid.units.size)
    distance = units[:, None] - grid.units[None, :]
    on_node = np.abs(distance) < 1e-15
    distance[on_node] = 1.0
    matrix = node_weights / distance
    matrix /= matrix.sum(axis=1, keepdims=True)
    hit = on_node.any(axis=1)
    matrix[hit] = on_node[hit]
    return np.asarray(matrix)


def interpolate(grid: RapidityGrid, values: Reals, rapidities: Reals) -> Reals:
    """Return smooth functions, `values` (..., node), at other `rapidities` (target,): shape (..., target)."""
    matrix = interpolation_matrix(grid, unit_of_rapidity(grid, np.asarray(rapidities, dtype=float)))
    return np.asarray(values @ matrix.T)


def fine_line(grid: RapidityGrid, angle: float) -> tuple[Reals, Reals]:
    """Return rapidities and weights (fine,) that integrate a kernel times a polynomial of the nodes.

    angle : twice the distance of the kernel's poles from the real axis
    Gauss-Legendre panels: their edges are every few nodes, and wider and wider beyond the outermost ones.
    """
    widest = 0.5 * PANEL_ANGLE * angle
    inner = np.append(grid.rapidities[:-1:PANEL_NODES], grid.rapidities[-1])
    tail = _tail_edges(widest)
    pieces = [inner[0] - tail[::-1]]
    for low, high in pairwise(inner):
        count = int(np.ceil((high - low) / widest))
        pieces.append(np.linspace(low, high, count + 1)[:-1])
    edges = np.concatenate([*pieces, inner[-1] + np.append(0.0, tail)])
    points, weights = np.polynomial.legendre.leggauss(PANEL_POINTS)
    half = 0.5 * np.diff(edges)[:, None]
    return (edges[:-1, None] + half * (1.0 + points)).ravel(), (half * weights).ravel()


def _tail_edges(first: float) -> Reals:
    """Return distances of the panel edges from the outermost node, ascending."""
    widths = [first]
    while sum(widths) < TAIL_LENGTH:
        widths.append(min(2.0 * widths[-1], WIDEST_PANEL))
    return np.cumsum(widths)
