"""Two joined halves as a problem, and its solution on rays at one anisotropy."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np

from tnquench.conventions import Integers, Reals
from tnquench.hydro.mesh import OBSERVABLES

#: Inverse temperature and the product beta h of a state.
State = tuple[float, float]

#: Newton steps to the ray on which the magnetisation changes sign; each squares the distance, so that nothing
#: is left to do after a small one.
SIGN_STEPS, SMALL_STEP = 6, 1e-4

#: Least beta h, relative to that of the other half, with which the sign's ray is looked for.
LEAST_FIELD = 0.1


@dataclass(frozen=True)
class Step:
    """Two halves of a chain, each uniform and in equilibrium, joined at x = 0.

    coupling : J > 0; left, right, middle : (beta, beta_field) for x < 0, for x > 0, and at x = 0 when t = 0
    """

    coupling: float
    left: State
    right: State
    middle: State

    @property
    def is_uniform(self) -> bool:
        """Whether both halves are the same."""
        return self.left == self.right

    @property
    def is_wall(self) -> bool:
        """Whether the magnetisation changes sign or vanishes between the halves."""
        fields = self.left[1], self.right[1]
        return min(fields) <= 0.0 <= max(fields) and min(fields) != max(fields)

    @property
    def without_wall(self) -> Step:
        """The same with fields of one sign, neither of them much smaller than the other."""
        sizes = abs(self.left[1]), abs(self.right[1])
        left, right = (max(size, LEAST_FIELD * max(sizes)) for size in sizes)
        return replace(self, left=(self.left[0], left), right=(self.right[0], right))


@dataclass(frozen=True, eq=False)
class Solved:
    """Averages on rays and their errors from rapidities and from strings, each (ray, ..., observable)."""

    values: Reals
    grid: Reals
    strings: Reals

    def spread(self, index: Integers) -> Solved:
        """Return the same on rays chosen by `index`, of any shape."""
        return Solved(self.values[index], self.grid[index], self.strings[index])


def sign_ray(on_rays: Callable[[Reals], Reals]) -> float:
    """Return the ray z = j/m of halves without wall: there the longest strings move, and with them a wall.

    on_rays : averages (ray, observable) of rays (ray,). j/m is stationary in z on this ray (dj = z dm), so
    that iterating z = j/m converges quadratically.
    """
    density, current = (OBSERVABLES.index(name) for name in ("charge_density", "charge_current"))
    ray = 0.0
    for _ in range(SIGN_STEPS):
        means = on_rays(np.array([ray]))[0]
        before, ray = ray, float(means[current] / means[density])
        if abs(ray - before) < SMALL_STEP:
            break
    return ray
