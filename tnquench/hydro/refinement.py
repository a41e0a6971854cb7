"""Refinement of what has not converged, with the error it measures."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from tnquench.conventions import Reals

#: The error is taken as this many times the last change: convergence is not everywhere exponential.
SAFETY = 2.0

#: Two levels may agree by chance in one observable: each bears this part of the largest change at its place.
SHARED_CHANGE = 0.3

#: Largest part of the last change by which a slowly converging sequence is extrapolated.
LARGEST_REMAINDER = 2.0


@dataclass(frozen=True, eq=False)
class Refined:
    """Values and their errors, both (item, ..., observable)."""

    values: Reals
    errors: Reals


def refine(
    solve: Callable[[int, Reals], Reals],
    items: Reals,
    *,
    levels: int,
    target: float,
    floor: float,
    least_gain: float = 0.0,
) -> Refined:
    """Solve every item (item,) at levels 0 and 1, and at further ones while its change exceeds `target`.

    solve : maps a level and some items to values (item, ..., observable)
    floor : error that refinement cannot see; least_gain : an item whose change falls by less than this factor
            is not refined further
    The errors are SAFETY times the changes in the last refinement, each at least SHARED_CHANGE of the
    largest change of all observables there, plus `floor`. Where the changes of an item fall by a factor
    g < 2 only, the rest of a geometric sequence is 1/(g - 1) times the last one, and so are the errors.
    """
    values = solve(0, items)
    errors = np.full(values.shape, np.inf)
    changes = np.full(items.size, np.inf)
    pending = np.arange(items.size)
    for level in range(1, levels):
        better, before = solve(level, items[pending]), changes[pending]
        change = np.abs(better - values[pending])
        shared = SHARED_CHANGE * change.max(axis=-1, keepdims=True)
        after = _largest(change)
        remainder = np.clip(after / np.maximum(before - after, 1e-300), 1.0, LARGEST_REMAINDER)
        remainder = np.where(before < np.inf, remainder, 1.0).reshape(-1, *(1,) * (change.ndim - 1))
        errors[pending] = SAFETY * remainder * np.maximum(change, shared) + floor
        changes[pending] = after
        values[pending] = better
        pending = pending[(after > target) & (least_gain * after < before)]
        if not pending.size:
            break
    return Refined(values, errors)


def _largest(errors: Reals) -> Reals:
    return np.asarray(errors.reshape(errors.shape[0], -1).max(axis=1))
