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


class Crew:
    """The threads of this process that may work at the same time.

    at_work : how many do; may be changed at any time between two calls of the engine
    """

    def __init__(self, pool: ThreadPoolExecutor | None, most: int) -> None:
        self.pool, self.at_work = pool, most


_crews = [Crew(None, 1)]


@contextmanager
def threads(most: int) -> Iterator[Crew]:
    """Let the engine use so many threads of this process within the block; one is the calling thread alone.

    A chain cannot use more threads than its bonds have charges.
    """
    with ThreadPoolExecutor(max(1, most), thread_name_prefix="charges") as pool:  # begins none until asked
        _crews.append(Crew(pool, most))
        try:
            yield _crews[-1]
        finally:
            _crews.pop()


def shared(flops: float) -> bool:
    """Whether an operation on all charges, of so many floating-point operations, is worth sharing."""
    return _crews[-1].at_work > 1 and flops >= WORTHWHILE


def for_each_charge(task: Callable[[int], None], charges: int, *, flops: float) -> None:
    """Carry out `task(charge)` for every charge; flops : what all of them take, about."""
    crew = _crews[-1]
    if crew.pool is None or not shared(flops):
        for charge in range(charges):
            task(charge)
        return
    count = min(crew.at_work, charges)

    def share(first: int) -> None:
        for charge in range(first, charges, count):
            task(charge)

    list(crew.pool.map(share, range(count)))  # the list raises what a task has raised


def product(first: Reals, second: Reals, out: Reals | None = None) -> Reals:
    """Return the matrix products of all charges, (charge, rows, inner) @ (charge, inner, columns)."""
    charges, rows, inner = first.shape
    flops = 2.0 * charges * rows * inner * second.shape[2]
    if not shared(flops):
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
    if not shared(flops):
        values, vectors = np.linalg.eigh(matrices)
        return values, vectors
    values, vectors = np.empty((charges, size)), np.empty(matrices.shape)

    def one(charge: int) -> None:
        values[charge], vectors[charge] = np.linalg.eigh(matrices[charge])

    for_each_charge(one, charges, flops=flops)
    return values, vectors
