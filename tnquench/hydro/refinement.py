"""Refinement of what has not converged, with the error it measures."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from tnquench.conventions import Reals

#: Error that refinement cannot see: the cut rapidity mesh, iterations, rounding.
ERROR_FLOOR = 1e-10

#: Two levels may agree by chance in one observable: each bears this part of the largest change at its place.
SHARED_CHANGE = 0.3

#: An item whose error falls by less than this factor converges too slowly for another level to be worth it.
WORTHWHILE_GAIN = 3.0


@dataclass(frozen=True, eq=False)
class Refined:
    """Values and errors, both (item, ..., observable)."""

    values: Reals
    errors: Reals


def refine(solve: Callable[[int, Reals], Reals], items: Reals, *, levels: int, target: float) -> Refined:
    """Solve every item (item,) at levels 0 and 1, and at further ones while its error exceeds `target`.

    solve : maps a level and some items to values (item, ..., observable)
    The errors are the changes in the last refinement, each at least SHARED_CHANGE of the largest change of
    all observables there, plus ERROR_FLOOR: they are the errors of the coarser of two levels.
    """
    values = solve(0, items)
    errors = np.full(values.shape, np.inf)
    pending = np.arange(items.size)
    for level in range(1, levels):
        better, before = solve(level, items[pending]), _largest(errors[pending])
        change = np.abs(better - values[pending])
        shared = SHARED_CHANGE * change.max(axis=-1, keepdims=True)
        errors[pending] = np.maximum(change, shared) + ERROR_FLOOR
        values[pending] = better
        after = _largest(errors[pending])
        pending = pending[(after > target) & (after * WORTHWHILE_GAIN < before)]
        if not pending.size:
            break
    return Refined(values, errors)


def _largest(errors: Reals) -> Reals:
    return np.asarray(errors.reshape(errors.shape[0], -1).max(axis=1))
