"""QR decompositions of all charges at once.

Small matrices go through numpy in one call, larger ones one by one straight to LAPACK, which spares numpy's
copies of them.
"""

from __future__ import annotations

import numpy as np
from scipy.linalg.lapack import dgeqrf, dorgqr

from tnquench.conventions import Reals

#: Columns from which LAPACK is called directly, and columns that it treats together: sets its workspace.
DIRECT_FROM, TOGETHER = 24, 32


def orthonormal(matrices: Reals) -> Reals:
    """Return orthonormal bases (charge, rows, min(rows, columns)) whose leading columns span those of the
    matrices (charge, rows, columns).

    Columns that depend on those before them are completed by arbitrary orthogonal directions.
    """
    return _decomposed(matrices)[0]


def orthonormal_and_factor(matrices: Reals) -> tuple[Reals, Reals]:
    """Return orthonormal bases q (charge, rows, kept) and triangles r (charge, kept, columns) with q r the
    matrices."""
    return _decomposed(matrices)


def _decomposed(matrices: Reals) -> tuple[Reals, Reals]:
    """Return bases and triangles."""
    charges, rows, columns = matrices.shape
    if columns < DIRECT_FROM:
        basis, factor = np.linalg.qr(matrices)
        return basis, factor
    kept = min(rows, columns)
    bases, factors = np.empty((charges, kept, rows)), np.empty((charges, kept, columns))
    for charge, matrix in enumerate(matrices):
        packed, reflectors, _, _ = dgeqrf(matrix, lwork=TOGETHER * columns)
        factors[charge] = np.triu(packed[:kept])
        basis, _, _ = dorgqr(packed[:, :kept], reflectors, lwork=TOGETHER * kept, overwrite_a=True)
        bases[charge] = basis.T
    return bases.swapaxes(1, 2), factors
