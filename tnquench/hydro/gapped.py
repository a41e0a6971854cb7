"""The Euler prediction of two joined halves at |D| >= 1, with errors from rapidities and from strings."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.ndimage import maximum_filter1d

from tnquench.bethe.gapped_model import GappedModel, gapped_model, gapped_state
from tnquench.bethe.gapped_thermal import gapped_eta
from tnquench.conventions import OBSERVABLE_PLACES, Reals
from tnquench.hydro.gapped_joined import (
    Halves,
    halves_of,
    join_gapped_halves,
    light_cone_of_halves,
    uniform_averages,
)
from tnquench.hydro.mesh import OBSERVABLES
from tnquench.hydro.predicted import Prediction, rays_to, refuse_reflection

#: Inverse temperature and the product beta h of a half.
State = tuple[float, float]

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


@dataclass(frozen=True)
class _Start:
    """The chain and the states (beta, beta h) left, right, and at x = 0 when t = 0."""

    anisotropy: float
    coupling: float
    left: State
    right: State
    middle: State

    def model(self, string_level: int, node_level: int) -> GappedModel:
        """Return the model of a level of refinement."""
        scale = 1.0 / max(gapped_eta(self.anisotropy), 1e-3)
        strings = min(MOST_STRINGS, max(FEWEST_STRINGS, STRINGS_BY_ETA * scale)) * STRING_GROWTH**string_level
        nodes = min(MOST_NODES, max(FEWEST_NODES, NODES_BY_ETA * scale)) * NODE_GROWTH**node_level
        return gapped_model(
            anisotropy=self.anisotropy, coupling=self.coupling,
            strings=round(strings), nodes=2 * round(0.5 * nodes),
        )  # fmt: skip

    def halves(self, model: GappedModel) -> Halves:
        """Return both thermal halves."""
        states = [gapped_state(model, beta=b, beta_field=f) for b, f in (self.left, self.right)]
        return halves_of(model, states[0], states[1])

    def on_rays(self, model: GappedModel, rays: Reals) -> tuple[Reals, Reals]:
        """Return averages (ray, observable) and residuals (ray,); the middle's where a ray is no number."""
        result, residuals = np.empty((rays.size, len(OBSERVABLES))), np.zeros(rays.size)
        at_joint = np.isnan(rays)
        if at_joint.any():
            middle = gapped_state(model, beta=self.middle[0], beta_field=self.middle[1])
            result[at_joint] = uniform_averages(model, middle)
        if not at_joint.all():
            joined = join_gapped_halves(self.halves(model), rays=rays[~at_joint])
            result[~at_joint], residuals[~at_joint] = joined
        return result, residuals


def predict_step_gapped(
    *,
    anisotropy: float,
    coupling: float,
    left: State,
    right: State,
    middle: State,
    times: Reals,
    sites: Reals,
    bonds: Reals,
) -> Prediction:
    """Predict two joined halves, each uniform and in equilibrium, at |D| >= 1.

    left, right, middle : (beta, beta_field) for x < 0, for x > 0, and at x = 0 when t = 0
    times : (time,) in 1/J, not negative; sites, bonds : (site,), (bond,) positions, symmetric about 0
    At t = 0 values are those of the local thermal state. Fields may have opposite signs: the sign of the
    magnetisation then jumps on the ray that moves with the longest strings. Light cone as in `predict_step`.
    Raises ValueError at |D| < 1, ConvergenceError, and InputError where light reaches the ends.
    """
    start = _Start(anisotropy, coupling, left, right, middle)
    edges = light_cone_of_halves(start.halves(start.model(1, 1)))
    uniform = left == right
    if not uniform:
        refuse_reflection(edges, times, sites)
    rays = rays_to(np.concatenate([sites, bonds]), times, uniform=uniform)
    distinct, index = np.unique(rays, return_inverse=True)
    values, grid, strings = (each[index.reshape(rays.shape)] for each in _refine(start, distinct))
    fields = _sorted(values, sites.size)
    errors = [
        {name: maximum_filter1d(each, size=3, axis=1) for name, each in _sorted(error, sites.size).items()}
        for error in (grid, strings)
    ]
    for parts in (fields, *errors):
        parts["energy_current"][:, [0, -1]] = 0.0  # no bond beyond the end sites to carry energy
    method = "uniform" if uniform else "joined halves (self-similar)"
    return Prediction(fields, errors[0], errors[1], edges, method, REFERENCES)


def _refine(start: _Start, rays: Reals) -> tuple[Reals, Reals, Reals]:
    """Return averages (ray, observable) and their errors from rapidities and from strings."""
    values, _ = start.on_rays(start.model(0, 0), rays)
    grid, strings = np.full(values.shape, np.inf), np.full(values.shape, np.inf)
    pending = np.arange(rays.size)
    target = WIDE_TARGET if gapped_eta(start.anisotropy) < WIDE_BELOW else TARGET
    for level in range(ROUNDS):
        finer, _ = start.on_rays(start.model(level, level + 1), rays[pending])
        longer, residual = start.on_rays(start.model(level + 1, level + 1), rays[pending])
        open_part = FLOOR + RESIDUAL_SHARE * residual[:, None]
        grid[pending] = _claim(finer - values[pending]) + open_part
        strings[pending] = _claim(longer - finer)
        values[pending] = longer
        largest = np.maximum(grid, strings).max(axis=1)
        pending = pending[largest[pending] > target]
        if not pending.size:
            break
    return values, grid, strings


def _claim(change: Reals) -> Reals:
    """Return errors (ray, observable) from the last changes."""
    size = np.abs(change)
    return np.asarray(SAFETY * np.maximum(size, SHARED_CHANGE * size.max(axis=1, keepdims=True)))


def _sorted(values: Reals, sites: int) -> dict[str, Reals]:
    """Sort values (time, site or bond, observable) into the observables' places."""
    parts = {"site": slice(None, sites), "bond": slice(sites, None)}
    return {name: values[:, parts[OBSERVABLE_PLACES[name]], k].copy() for k, name in enumerate(OBSERVABLES)}
