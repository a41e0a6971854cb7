"""Orthonormal rows of all charges at once, by LQ decompositions.

Few vectors go through numpy's Householder QR in one call. Of many LAPACK's is called directly, which spares
numpy's copies. Where the centre moves, vectors are nearly orthogonal whatever their lengths: they go through
the Cholesky factor of their Gram matrix, scaled to unit length (A. van der Sluis, Numer. Math. 14, 14 (1969),
from memory), which is made of matrix products. It leaves an orthogonality error of about the rounding unit
times the condition number of that matrix, so the latter is looked at first.
"""

from __future__ import annotations

import numpy as np
from scipy.linalg.lapack import dgeqrf, dorgqr, dpotrf, dtrtri

from tnquench.conventions import Reals
from tnquench.evolution.threads import for_each_charge, product

#: Vectors from which they are treated charge by charge, and vectors that LAPACK treats together: sets its
#: workspace.
DIRECT_FROM, TOGETHER = 24, 32

#: Largest diagonal entry of the inverse Gram matrix of unit vectors that are treated by Cholesky's method:
#: one over the square of a vector's part that is orthogonal to all others.
LARGEST_INVERSE = 30.0


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
    return _by_cholesky(vectors) or _by_lapack(vectors)


def orthonormal_beside(basis: Reals, vectors: Reals) -> Reals:
    """Return orthonormal rows of what vectors (charge, count, length) have outside orthonormal rows."""
    for _ in range(2):  # rounding leaves a trace of the basis the first time
        vectors = orthonormal(vectors - product(product(vectors, basis.swapaxes(1, 2)), basis))
    return vectors


def _by_cholesky(vectors: Reals) -> tuple[Reals, Reals] | None:
    """Return orthonormal rows and lower triangles; None where the vectors of a charge are too near to each
    other."""
    charges, count, length = vectors.shape
    if count > length:
        return None
    bases, factors, failed = np.empty(vectors.shape), np.empty((charges, count, count)), list[int]()

    def one(charge: int) -> None:
        gram = vectors[charge] @ vectors[charge].T
        lengths = np.sqrt(gram.diagonal())
        if not lengths.all():
            failed.append(charge)
            return
        factor, trouble = dpotrf((gram / np.outer(lengths, lengths)).T, lower=True, overwrite_a=True)
        inverse, trouble = (factor, trouble) if trouble else dtrtri(factor, lower=True)
        if trouble or np.square(inverse).sum(axis=0).max() > LARGEST_INVERSE:
            failed.append(charge)
            return
        np.multiply(lengths[:, None], factor, out=factors[charge])
        np.matmul(inverse / lengths, vectors[charge], out=bases[charge])

    for_each_charge(one, charges, flops=3.0 * charges * length * count**2)
    return None if failed else (bases, factors)


def _by_lapack(vectors: Reals) -> tuple[Reals, Reals]:
    """Return orthonormal rows and lower triangles by Householder's method."""
    charges, count, length = vectors.shape
    kept = min(count, length)
    bases, factors = np.empty((charges, kept, length)), np.empty((charges, count, kept))

    def one(charge: int) -> None:
        packed, reflectors, _, _ = dgeqrf(vectors[charge].T, lwork=TOGETHER * count, overwrite_a=True)
        factors[charge] = np.tril(packed[:kept].T)
        basis, _, _ = dorgqr(packed[:, :kept], reflectors, lwork=TOGETHER * kept, overwrite_a=True)
        bases[charge] = basis.T

    for_each_charge(one, charges, flops=4.0 * charges * length * count * kept)
    return bases, factors
