"""QR decompositions called straight from LAPACK: they dominate small bonds, where every wrapper costs."""

from __future__ import annotations

import numpy as np
from scipy.linalg.lapack import dgeqrf, dorgqr

from tnquench.conventions import Reals

#: Columns that LAPACK treats together; sets the size of its workspace.
BLOCK = 32


def orthonormal(matrix: Reals) -> Reals:
    """Return an orthonormal basis (rows, min(rows, columns)) whose leading columns span those of the matrix.

    Columns that depend on those before them are completed by arbitrary orthogonal directions.
    """
    return _decompose(matrix)[0]


def orthonormal_and_factor(matrix: Reals) -> tuple[Reals, Reals]:
    """Return the orthonormal basis q (rows, kept) and the triangle r (kept, columns) of matrix = q r."""
    basis, packed = _decompose(matrix)
    return basis, np.triu(packed[: basis.shape[1]])


def _decompose(matrix: Reals) -> tuple[Reals, Reals]:
    """Return the basis and LAPACK's packed reflectors, whose upper triangle is the factor."""
    rows, columns = matrix.shape
    kept = min(rows, columns)
    if kept == 0:
        return np.zeros((rows, 0)), np.zeros((0, columns))
    packed, reflectors, _, _ = dgeqrf(matrix, lwork=BLOCK * columns)
    basis, _, _ = dorgqr(packed[:, :kept], reflectors, lwork=BLOCK * kept)
    return basis, packed
