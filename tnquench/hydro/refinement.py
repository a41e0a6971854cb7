"""Refinement of what has not converged, with the error it measures."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from tnquench.conventions import Reals

#: Refinement of an item stops once all its errors are below this.
ERROR_TARGET = 1e-8

#: Error that refinement cannot see: the cut rapidity mesh, iterations, rounding.
ERROR_FLOOR = 1e-10


@dataclass(frozen=True, eq=False)
class Refined:
    """Values and their errors, both (item, ...): an error is the change in the last refinement, plus a floor."""

    values: Reals
    errors: Reals


def refine(solve: Callable[[int, Reals], Reals], items: Reals, *, levels: int) -> Refined:
    """Solve every item (item,) at levels 0 and 1, and at further ones while its error exceeds ERROR_TARGET.

    solve : maps a level and some items to values (item, ...)
    Convergence is faster than geometric, so the last change is that of the coarser level and bounds the error.
    """
    values = solve(0, items)
    errors = np.full(values.shape, np.inf)
    pending = np.arange(items.size)
    for level in range(1, levels):
        better = solve(level, items[pending])
        errors[pending] = np.abs(better - values[pending]) + ERROR_FLOOR
        values[pending] = better
        pending = pending[errors[pending].reshape(pending.size, -1).max(axis=1) > ERROR_TARGET]
        if not pending.size:
            break
    return Refined(values, errors)
