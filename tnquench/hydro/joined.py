"""Two joined halves at Euler scale: one stationary state on each ray x/t.

Sources: O. A. Castro-Alvaredo, B. Doyon and T. Yoshimura, Phys. Rev. X 6, 041065 (2016); B. Bertini,
M. Collura, J. De Nardis and M. Fagotti, Phys. Rev. Lett. 117, 207201 (2016).
"""

from __future__ import annotations

import numpy as np

from tnquench.conventions import Reals
from tnquench.errors import ConvergenceError
from tnquench.hydro.crossings import extreme_velocities, find_crossings, side_weights
from tnquench.hydro.mesh import (
    OBSERVABLES,
    RapidityMesh,
    Reference,
    averages,
    dressed_slopes,
    redress,
    reference_state,
    uniform_averages,
)

#: Rays solved together around one reference state.
RAYS_TOGETHER = 48

#: Largest change of a dressed derivative, relative to the largest one, at which a state counts as solved.
CHANGE_TARGET = 1e-12

ITERATIONS = 100

#: Rays this near to an edge, relatively, are on it: profiles there are square roots of the distance.
EDGE_ROUNDING = 64.0 * float(np.finfo(float).eps)


def light_cone_of_halves(mesh: RapidityMesh, left: Reals, right: Reals) -> tuple[float, float]:
    """Return the velocities of the cone's edges: the left state's least, the right state's greatest."""
    slopes = dressed_slopes(mesh, left), dressed_slopes(mesh, right)
    return extreme_velocities(mesh, slopes[0][None])[0], extreme_velocities(mesh, slopes[1][None])[1]


def join_halves(mesh: RapidityMesh, left: Reals, right: Reals, *, rays: Reals) -> Reals:
    """Solve theta(ray) = theta_left where v_eff > ray, theta_right elsewhere, on every ray x/t.

    All crossings v_eff = ray of each string are found in each iteration; a string may have none.
    left, right : fillings (string, point); rays : (ray,) velocities in any order, infinite ones allowed
    Returns averages (ray, observable). Raises ConvergenceError with the largest residual.
    """
    first, last = light_cone_of_halves(mesh, left, right)
    first, last = first + EDGE_ROUNDING * abs(first), last - EDGE_ROUNDING * abs(last)
    result = np.empty((rays.size, len(OBSERVABLES)))
    for outside, filling in ((rays <= first, left), (rays >= last, right)):
        result[outside] = uniform_averages(mesh, filling)
    inside = np.flatnonzero((rays > first) & (rays < last))
    inside = inside[np.argsort(rays[inside])]
    slopes = dressed_slopes(mesh, left)
    for start in range(0, inside.size, RAYS_TOGETHER):
        chosen = inside[start : start + RAYS_TOGETHER]
        weights = _sides(mesh, slopes[None], rays[chosen[chosen.size // 2]][None])[0]
        reference = reference_state(mesh, right + (left - right) * weights)
        fillings, all_slopes = states_on_rays(mesh, reference, left=left, right=right, rays=rays[chosen])
        result[chosen] = averages(mesh, fillings, all_slopes)
        slopes = all_slopes[-1]
    return result


def _sides(mesh: RapidityMesh, slopes: Reals, rays: Reals) -> Reals:
    return side_weights(mesh, *find_crossings(mesh, slopes, rays))


def states_on_rays(
    mesh: RapidityMesh, reference: Reference, *, left: Reals, right: Reals, rays: Reals
) -> tuple[Reals, Reals]:
    """Return fillings (ray, string, point) and dressed slopes (ray, 2, string, node) on rays inside the cone.

    reference : a state near those on the rays, around which they are dressed
    """
    slopes = np.repeat(reference.slopes[None], rays.size, axis=0)
    residual = np.inf
    for _ in range(ITERATIONS):
        filling = right + (left - right) * _sides(mesh, slopes, rays)
        improved = redress(mesh, reference, change=filling - reference.filling, slopes=slopes)
        residual = float(np.max(np.abs(improved - slopes)) / np.max(np.abs(improved)))
        slopes = improved
        if residual < CHANGE_TARGET:
            return filling, slopes
    what = f"self-similar state at D = {mesh.model.anisotropy:.6g} on rays {rays[0]:.4g} to {rays[-1]:.4g}"
    raise ConvergenceError(what, residual=residual)
