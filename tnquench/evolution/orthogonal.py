"""Orthonormal rows of all charges at once, by LQ decompositions.

Small matrices go through numpy in one call, larger ones one by one straight to LAPACK, which spares numpy's
copies of them.
"""

from __future__ import annotations

import numpy as np
from scipy.linalg.lapack import dgeqrf, dorgqr

from tnquench.conventions import Reals
from tnquench.evolution.threads import for_each_charge

#: Vectors from which LAPACK is called directly, and vectors that it treats together: sets its workspace.
DIRECT_FROM, TOGETHER = 24, 32


def orthonormal(vectors: Reals) -> Reals:
    """Return orthonormal rows (charge, min(count, length), length) whose leading ones span those of the
    vectors (charge, count, length), which may be overwritten.

    Vectors that depend on those before them are replaced by arbitrary orthogonal directions.
    """
    if vectors.shape[1] < DIRECT_FROM:
        return np.linalg.qr(vectors.swapaxes(1, 2))[0].swapaxes(1, 2)
    return _by_lapack(vectors)[0]


def orthonormal_and_factor(vectors: Reals) -> tuple[Reals, Reals]:
    """Return orthonormal rows q (charge, kept, length) and lower triangles l (charge, count, kept) with l q
    the vectors, which may be overwritten."""
    if vectors.shape[1] < DIRECT_FROM:
        basis, factor = np.linalg.qr(vectors.swapaxes(1, 2))
        return basis.swapaxes(1, 2), factor.swapaxes(1, 2)
    basis, packed = _by_lapack(vectors)
    return basis, np.tril(packed)


def _by_lapack(vectors: Reals) -> tuple[Reals, Reals]:
    """Return orthonormal rows, and the triangles with something else above their diagonals."""
    charges, count, length = vectors.shape
    kept = min(count, length)
    bases, packed_factors = np.empty((charges, kept, length)), np.empty((charges, count, kept))

    def one(charge: int) -> None:
        packed, reflectors, _, _ = dgeqrf(vectors[charge].T, lwork=TOGETHER * count, overwrite_a=True)
        packed_factors[charge] = packed[:kept].T
        basis, _, _ = dorgqr(packed[:, :kept], reflectors, lwork=TOGETHER * kept, overwrite_a=True)
        bases[charge] = basis.T

    for_each_charge(one, charges, flops=4.0 * charges * length * count * kept)
    return bases, packed_factors
