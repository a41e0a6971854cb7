"""The charges of a bond shared among threads of this process.

Every charge is one task, the same call of numpy or LAPACK however many threads there are, so that results do
not depend on their number. Linear algebra itself is to run on one thread (threadpoolctl).
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from concurrent.futures import ThreadPoolExecutor
from contextlib import contextmanager

import numpy as np

from tnquench.conventions import Reals

#: Floating-point operations of all charges below which handing them to threads costs more than it gains.
WORTHWHILE = 2e7


class _Crew:
    """The threads that are at work in this process, if there are more than one."""

    pool: ThreadPoolExecutor | None = None


@contextmanager
def threads(count: int) -> Iterator[None]:
    """Let the engine use so many threads of this process within the block; one is the calling thread alone.

    A chain cannot use more threads than its bonds have charges.
    """
    before = _Crew.pool
    if count <= 1:
        _Crew.pool = None
        try:
            yield
        finally:
            _Crew.pool = before
        return
    with ThreadPoolExecutor(count, thread_name_prefix="charges") as pool:
        _Crew.pool = pool
        try:
            yield
        finally:
            _Crew.pool = before


def for_each_charge(task: Callable[[int], None], charges: int, *, flops: float) -> None:
    """Carry out `task(charge)` for every charge; flops : what all of them take, about."""
    pool = _Crew.pool
    if pool is None or flops < WORTHWHILE:
        for charge in range(charges):
            task(charge)
    else:
        list(pool.map(task, range(charges)))  # the list raises what a task has raised


def product(first: Reals, second: Reals, out: Reals | None = None) -> Reals:
    """Return the matrix products of all charges, (charge, rows, inner) @ (charge, inner, columns)."""
    charges, rows, inner = first.shape
    flops = 2.0 * charges * rows * inner * second.shape[2]
    if _Crew.pool is None or flops < WORTHWHILE:
        return np.matmul(first, second, out=out)
    result = np.empty((charges, rows, second.shape[2])) if out is None else out

    def one(charge: int) -> None:
        part = slice(charge, charge + 1)
        np.matmul(first[part], second[part], out=result[part])

    for_each_charge(one, charges, flops=flops)
    return result


def eigensystems(matrices: Reals) -> tuple[Reals, Reals]:
    """Return ascending eigenvalues (charge, size) and eigenvectors (charge, size, size), in columns, of
    symmetric matrices."""
    charges, size, _ = matrices.shape
    flops = 9.0 * charges * size**3
    if _Crew.pool is None or flops < WORTHWHILE:
        values, vectors = np.linalg.eigh(matrices)
        return values, vectors
    values, vectors = np.empty((charges, size)), np.empty(matrices.shape)

    def one(charge: int) -> None:
        values[charge], vectors[charge] = np.linalg.eigh(matrices[charge])

    for_each_charge(one, charges, flops=flops)
    return values, vectors
