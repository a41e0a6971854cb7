"""Linear equations in which each string sees its two neighbours only: block elimination.

y_n = r_n + S [g_(n-1) y_(n-1) + g_(n+1) y_(n+1)] with diagonal g; beyond the last string g_(N+1) y_(N+1) is a
linear function of g_N y_N, the tail.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.linalg import lu_factor, lu_solve

from tnquench.conventions import Integers, Reals


@dataclass(frozen=True, eq=False)
class ChainFactors:
    """Eliminated blocks, from the longest string down.

    loaded : (string, node, node) S g_n; factors : LU of each diagonal block
    """

    loaded: Reals
    factors: tuple[tuple[Reals, Integers], ...]

    def solve(self, right: Reals) -> Reals:
        """Return y (string, node, column) for right sides (string, node, column)."""
        result = np.array(right, dtype=np.float64)
        for n in range(len(self.factors) - 1, 0, -1):
            result[n] = lu_solve(self.factors[n], result[n], check_finite=False)
            result[n - 1] += self.loaded[n] @ result[n]
        result[0] = lu_solve(self.factors[0], result[0], check_finite=False)
        for n in range(1, len(self.factors)):
            feed = self.loaded[n - 1] @ result[n - 1]
            result[n] += lu_solve(self.factors[n], feed, check_finite=False)
        return result


def factor_chain(smoothing: Reals, holes: Reals, tail: Reals) -> ChainFactors:
    """Eliminate the chain with the convolution S = `smoothing` (node, node).

    holes : (string, node) g_n, the hole fraction 1 - theta_n
    tail  : (node, node) linear function that takes g_N y_N to g_(N+1) y_(N+1)
    """
    strings, nodes = holes.shape
    loaded = smoothing * holes[:, None, :]
    unit = np.eye(nodes)
    factors = [lu_factor(unit - smoothing @ (tail * holes[-1]), overwrite_a=True, check_finite=False)]
    for n in range(strings - 1, 0, -1):
        carried = lu_solve(factors[-1], loaded[n - 1], check_finite=False)
        factors.append(lu_factor(unit - loaded[n] @ carried, overwrite_a=True, check_finite=False))
    return ChainFactors(loaded, tuple(factors[::-1]))
