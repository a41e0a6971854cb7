"""Two joined halves at |D| = cos(pi p/q), with errors from refining rapidities."""

from __future__ import annotations

import numpy as np

from tnquench.conventions import Reals
from tnquench.hydro.joined import join_halves, light_cone_of_halves
from tnquench.hydro.mesh import OBSERVABLES, RapidityMesh, rapidity_mesh, uniform_averages
from tnquench.hydro.refinement import refine
from tnquench.hydro.step import Solved, Step, sign_ray
from tnquench.hydro.thermal_states import thermal_on_mesh

#: Smooth nodes a string and mesh spacing, in crossing angles, of successive refinements.
STEP_LEVELS: tuple[tuple[int, float], ...] = ((32, 0.11), (48, 0.085), (64, 0.07), (96, 0.055))

#: Change at which refinement stops, and error that it cannot see: the cut rapidity mesh and iterations.
STEP_TARGET, STEP_FLOOR = 5e-9, 1e-10

REFERENCES = ("castro_alvaredo_2016", "bertini_2016", "takahashi_1972", "takahashi_1999")


def light_cone_gapless(step: Step, anisotropy: float) -> tuple[float, float]:
    """Return the velocities of the edges, the left half's least and the right half's greatest."""
    mesh = _mesh(step, anisotropy, -2)
    return light_cone_of_halves(mesh, thermal_on_mesh(mesh, step.left), thermal_on_mesh(mesh, step.right))


def sign_ray_gapless(step: Step, anisotropy: float) -> float:
    """Return the velocity of the longest strings, see `step.sign_ray`."""
    mesh = _mesh(step, anisotropy, 0)
    return sign_ray(lambda rays: _on_rays(mesh, step.without_wall, rays))


def solve_gapless(step: Step, anisotropy: float, rays: Reals, *, target: float = STEP_TARGET) -> Solved:
    """Return averages on rays (ray,), those of the middle state where a ray is no number.

    target : change at which refinement stops
    Raises ConvergenceError, UnsupportedAnisotropy.
    """

    def solve(level: int, some: Reals) -> Reals:
        return _on_rays(_mesh(step, anisotropy, level), step, some)

    found = refine(solve, rays, levels=len(STEP_LEVELS), target=target, floor=STEP_FLOOR)
    return Solved(found.values, found.errors, np.zeros_like(found.errors))


def _mesh(step: Step, anisotropy: float, level: int) -> RapidityMesh:
    nodes, spacing = STEP_LEVELS[level]
    return rapidity_mesh(anisotropy=anisotropy, coupling=step.coupling, nodes=nodes, spacing=spacing)


def _on_rays(mesh: RapidityMesh, step: Step, rays: Reals) -> Reals:
    """Return averages (ray, observable); at rays that are not numbers those of the middle state."""
    result = np.empty((rays.size, len(OBSERVABLES)))
    at_joint = np.isnan(rays)
    result[at_joint] = uniform_averages(mesh, thermal_on_mesh(mesh, step.middle))
    halves = thermal_on_mesh(mesh, step.left), thermal_on_mesh(mesh, step.right)
    result[~at_joint] = join_halves(mesh, *halves, rays=rays[~at_joint])
    return result
