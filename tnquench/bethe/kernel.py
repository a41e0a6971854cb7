"""Convolutions with the scattering kernels as matrices that act on node values.

The kernels are narrow in the unit variable near both ends of the grid, where nodes are far apart in rapidity,
and some are narrow everywhere when a continued fraction is deep. So each is integrated against the nodes'
interpolating polynomials on a much finer quadrature, once; the nodes need resolve only the functions of the
state.
"""

from __future__ import annotations

from collections.abc import Iterable
from fractions import Fraction
from functools import lru_cache

import numpy as np

from tnquench.bethe.grid import RapidityGrid, fine_line, interpolation_matrix, rapidity_grid, unit_of_rapidity
from tnquench.bethe.strings import Residue, kernel_terms, string_table
from tnquench.conventions import Reals


@lru_cache(maxsize=16)
def scattering_kernel(turn: Fraction, nodes: int) -> Reals:
    """Return the kernel (string, node, string, node) at angle pi turn, cached and read-only.

    kernel[a, i, b, :] @ f[b] is the integral of T_ab(lambda_i - mu) f_b(mu) over all mu.
    """
    table = string_table(turn)
    size, grid = table.lengths.size, rapidity_grid(table.state_angle, nodes)
    pairs = {(a, b): kernel_terms(table, a, b) for a in range(size) for b in range(a + 1)}
    residues = sorted({r for terms in pairs.values() for r in terms})
    basic = _convolutions(grid, residues, turn.denominator).reshape(len(residues), nodes**2)
    counts = np.zeros((size, size, len(residues)))
    for (row, column), terms in pairs.items():
        for r, count in terms.items():
            counts[row, column, residues.index(r)] = counts[column, row, residues.index(r)] = count
    kernel = (counts.reshape(size * size, -1) @ basic).reshape(size, size, nodes, nodes)
    kernel = np.ascontiguousarray(kernel.transpose(0, 2, 1, 3))
    kernel.flags.writeable = False
    return kernel


def _convolutions(grid: RapidityGrid, residues: Iterable[Residue], denominator: int) -> Reals:
    """Return each basic function integrated against the nodes' polynomials, (residue, node, node).

    Functions of similar width share a quadrature. The nodes are symmetric, so half of the rows are enough.
    """
    results, covered, size = [], 0.0, grid.units.size
    upper = grid.rapidities[: (size + 1) // 2, None]
    for r in sorted(residues):
        angle = np.pi * r / denominator
        if not 0.5 * angle < covered <= angle:
            covered = angle
            fine, weights = fine_line(grid, covered)
            basis = interpolation_matrix(grid, unit_of_rapidity(grid, fine)) * weights[:, None]
            square = 2.0 * np.sinh(upper - fine[None, :]) ** 2
        strength = np.sin(angle) / np.pi
        rows = (strength / (square + 2.0 * np.sin(0.5 * angle) ** 2)) @ basis
        results.append(np.concatenate([rows, rows[: size // 2][::-1, ::-1]]))
    return np.array(results).reshape(-1, size, size)
