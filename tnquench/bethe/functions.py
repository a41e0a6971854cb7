"""Thermodynamic functions by name, each with the error that refinement measured."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass

import numpy as np

#: Refinement stops when every error is below this fraction of the value's scale.
ERROR_TARGET = 1e-12

#: Rounding, as a fraction of the value's scale: the smallest error ever claimed (a few times the scatter
#: between fine grids).
ROUNDING = 5e-14

#: The error of the finest resolution is at least this part of its distance from the last but one.
LEAST_RATIO = 0.1

#: Keeps ratios of vanishing movements finite.
TINY = 1e-300


@dataclass(frozen=True)
class ThermodynamicFunctions:
    """Values and errors per site, by name."""

    values: Mapping[str, float]
    errors: Mapping[str, float]

    def as_dict(self) -> dict[str, float]:
        """Return all values and then all errors, `<name>_error`, by name."""
        return {**self.values, **{f"{name}_error": error for name, error in self.errors.items()}}


def refined_functions(
    solve: Callable[[int], dict[str, float]],
    ladder: Sequence[int],
    size: Callable[[str, float], float],
    *,
    target: float = ERROR_TARGET,
    rounding: float = ROUNDING,
) -> ThermodynamicFunctions:
    """Return values at the first resolution of `ladder` whose errors are small, or at the last.

    solve : maps a resolution to values by name; size : maps a name and its value to what errors are compared
    to; target, rounding : as fractions of it
    Convergence is exponential, so the last movement is the error of the last resolution but one. The error of
    the last is smaller by the slowest observed ratio of movements; less than LEAST_RATIO of the movement is
    never claimed, nor less than rounding.
    """
    values = solve(ladder[0])
    moved = dict.fromkeys(values, np.inf)
    errors = dict.fromkeys(values, np.inf)
    for resolution in ladder[1:]:
        coarse, values, before = values, solve(resolution), moved
        moved = {key: abs(values[key] - coarse[key]) for key in values}
        sizes = {key: size(key, values[key]) for key in values}
        ratio = max(moved[key] / max(before[key], rounding * sizes[key], TINY) for key in values)
        ratio = min(1.0, max(ratio, LEAST_RATIO))
        errors = {key: ratio * moved[key] + rounding * sizes[key] for key in values}
        if all(errors[key] <= target * sizes[key] for key in values):
            break
    return ThermodynamicFunctions(values, errors)
