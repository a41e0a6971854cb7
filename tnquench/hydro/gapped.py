"""Two joined halves at |D| >= 1, with errors from refining rapidities and strings."""

from __future__ import annotations

import numpy as np

from tnquench.bethe.gapped_model import GappedModel, gapped_model, gapped_state
from tnquench.bethe.gapped_thermal import gapped_eta
from tnquench.conventions import Reals
from tnquench.hydro.gapped_joined import (
    Halves,
    halves_of,
    join_gapped_halves,
    light_cone_of_halves,
    uniform_averages,
)
from tnquench.hydro.mesh import OBSERVABLES
from tnquench.hydro.step import Solved, Step, sign_ray

#: Strings and rapidities of the first level, before and after 1/eta; both grow by these factors.
FEWEST_STRINGS, STRINGS_BY_ETA, MOST_STRINGS = 4, 10.5, 16
FEWEST_NODES, NODES_BY_ETA, MOST_NODES = 32, 62.0, 112
STRING_GROWTH, NODE_GROWTH = 1.5, 1.35

#: Rounds of refinement, each first of rapidities, then of strings; rays whose errors are below the target
#: are left out of the next. Strings are many and wide where eta is below the last number.
ROUNDS = 3
TARGET, WIDE_TARGET, WIDE_BELOW = 1e-8, 2e-6, 0.3

#: The claim is this many times the last change; each observable bears a part of its ray's largest change.
SAFETY, SHARED_CHANGE = 2.0, 0.3

#: Error that refinement cannot see, and how much of the iteration's residual counts.
FLOOR, RESIDUAL_SHARE = 1e-11, 10.0

REFERENCES = ("castro_alvaredo_2016", "bertini_2016", "piroli_2017", "takahashi_1999")


def light_cone_gapped(step: Step, anisotropy: float) -> tuple[float, float]:
    """Return the velocities of the edges, the left half's least and the right half's greatest."""
    return light_cone_of_halves(_halves(step, _model(step, anisotropy, 1, 1)))


def sign_ray_gapped(step: Step, anisotropy: float) -> float:
    """Return the velocity of the longest strings, see `step.sign_ray`."""
    model = _model(step, anisotropy, 0, 0)
    return sign_ray(lambda rays: _on_rays(step.without_wall, model, rays)[0])


def solve_gapped(step: Step, anisotropy: float, rays: Reals) -> Solved:
    """Return averages on rays (ray,), those of the middle state where a ray is no number.

    Fields may have opposite signs: the sign of the magnetisation then jumps on the ray that moves with the
    longest strings. Refines rapidities, then strings, in each round. Raises ValueError at |D| < 1,
    ConvergenceError.
    """
    values, _ = _on_rays(step, _model(step, anisotropy, 0, 0), rays)
    grid, strings = np.full(values.shape, np.inf), np.full(values.shape, np.inf)
    pending = np.arange(rays.size)
    target = WIDE_TARGET if gapped_eta(anisotropy) < WIDE_BELOW else TARGET
    for level in range(ROUNDS):
        finer, _ = _on_rays(step, _model(step, anisotropy, level, level + 1), rays[pending])
        longer, residual = _on_rays(step, _model(step, anisotropy, level + 1, level + 1), rays[pending])
        open_part = FLOOR + RESIDUAL_SHARE * residual[:, None]
        grid[pending] = _claim(finer - values[pending]) + open_part
        strings[pending] = _claim(longer - finer)
        values[pending] = longer
        largest = np.maximum(grid, strings).max(axis=1)
        pending = pending[largest[pending] > target]
        if not pending.size:
            break
    return Solved(values, grid, strings)


def _model(step: Step, anisotropy: float, string_level: int, node_level: int) -> GappedModel:
    """Return the model of a level of refinement."""
    scale = 1.0 / max(gapped_eta(anisotropy), 1e-3)
    strings = min(MOST_STRINGS, max(FEWEST_STRINGS, STRINGS_BY_ETA * scale)) * STRING_GROWTH**string_level
    nodes = min(MOST_NODES, max(FEWEST_NODES, NODES_BY_ETA * scale)) * NODE_GROWTH**node_level
    return gapped_model(
        anisotropy=anisotropy, coupling=step.coupling, strings=round(strings), nodes=2 * round(0.5 * nodes)
    )


def _halves(step: Step, model: GappedModel) -> Halves:
    """Return both thermal halves."""
    states = [gapped_state(model, beta=b, beta_field=f) for b, f in (step.left, step.right)]
    return halves_of(model, states[0], states[1])


def _on_rays(step: Step, model: GappedModel, rays: Reals) -> tuple[Reals, Reals]:
    """Return averages (ray, observable) and residuals (ray,); the middle's where a ray is no number."""
    result, residuals = np.empty((rays.size, len(OBSERVABLES))), np.zeros(rays.size)
    at_joint = np.isnan(rays)
    if at_joint.any():
        middle = gapped_state(model, beta=step.middle[0], beta_field=step.middle[1])
        result[at_joint] = uniform_averages(model, middle)
    if not at_joint.all():
        joined = join_gapped_halves(_halves(step, model), rays=rays[~at_joint])
        result[~at_joint], residuals[~at_joint] = joined
    return result, residuals


def _claim(change: Reals) -> Reals:
    """Return errors (ray, observable) from the last changes."""
    size = np.abs(change)
    return np.asarray(SAFETY * np.maximum(size, SHARED_CHANGE * size.max(axis=1, keepdims=True)))
