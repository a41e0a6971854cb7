"""Convolutions with the scattering kernels as matrices that act on node values.

The kernels are narrow in the unit variable near both ends of the grid, where nodes are far apart in rapidity.
So each is integrated against the nodes' interpolating polynomials on a much finer quadrature, once; the nodes
need resolve only the functions of the state.
"""

from __future__ import annotations

from collections.abc import Iterable
from functools import lru_cache

import numpy as np

from tnquench.bethe.grid import RapidityGrid, fine_line, interpolation_matrix, rapidity_grid, unit_of_rapidity
from tnquench.bethe.strings import KernelTerm, kernel_terms, phase_derivative, string_table
from tnquench.conventions import Reals


@lru_cache(maxsize=16)
def scattering_kernel(nu: int, nodes: int) -> Reals:
    """Return the kernel (string, node, string, node) at angle pi/nu, cached and read-only.

    kernel[a, i, b, :] @ f[b] is the integral of T_ab(lambda_i - mu) f_b(mu) over all mu.
    """
    table, grid = string_table(nu), rapidity_grid(nu, nodes)
    pairs = {(a, b): kernel_terms(table, a, b) for a in range(nu) for b in range(nu)}
    basic = _convolutions(nu, grid, {term for terms in pairs.values() for term in terms})
    kernel = np.zeros((nu, nodes, nu, nodes))
    for (row, column), terms in pairs.items():
        for term, count in terms.items():
            kernel[row, :, column, :] += count * basic[term]
    kernel.flags.writeable = False
    return kernel


def _convolutions(nu: int, grid: RapidityGrid, terms: Iterable[KernelTerm]) -> dict[KernelTerm, Reals]:
    """Return each basic kernel a_n^v integrated against the nodes' polynomials, shapes (node, node)."""
    fine, weights = fine_line(grid)
    basis = interpolation_matrix(grid, unit_of_rapidity(grid, fine)) * weights[:, None]
    distance = grid.rapidities[:, None] - fine[None, :]
    return {
        (length, parity): phase_derivative(distance, length=length, parity=parity, nu=nu) @ basis
        for length, parity in terms
    }
