"""The Euler prediction of a run: densities and currents on its places and times, each with its error."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np
from scipy.ndimage import maximum_filter1d

from tnquench.conventions import OBSERVABLE_PLACES, Reals
from tnquench.errors import InputError
from tnquench.hydro.between import Between, between
from tnquench.hydro.gapped import predict_step_gapped
from tnquench.hydro.joined import join_halves, light_cone_of_halves
from tnquench.hydro.mesh import OBSERVABLES, RapidityMesh, rapidity_mesh, uniform_averages
from tnquench.hydro.predicted import Prediction as Prediction
from tnquench.hydro.predicted import rays_to, refuse_reflection, wall_of
from tnquench.hydro.refinement import Refined, refine
from tnquench.hydro.smooth import COMBINED_LEVELS, SmoothStart, initial_light_cone, smooth_averages
from tnquench.hydro.smooth import LEVELS as SMOOTH_LEVELS
from tnquench.hydro.thermal_states import State, thermal_on_mesh

#: Smooth nodes a string and mesh spacing, in crossing angles, of successive refinements of joined halves.
STEP_LEVELS: tuple[tuple[int, float], ...] = ((32, 0.11), (48, 0.085), (64, 0.07), (96, 0.055))

#: Change at which refinement stops, and error that it cannot see: the cut rapidity mesh and iterations, for
#: smooth profiles also the expansion of thermal states.
STEP_TARGET, STEP_FLOOR = 5e-9, 1e-10
SMOOTH_TARGET, SMOOTH_FLOOR = 1e-6, 1e-8

#: Targets of joined halves and of smooth profiles at the anisotropies between which others are combined.
COMBINED_TARGET, COMBINED_SMOOTH_TARGET = 1e-6, 3e-6

#: Kinks, as at ends where a profile is not flat, converge too slowly for more levels to be worth their cost.
SMOOTH_GAIN = 1.5

#: Least scale of a smooth profile, in lattice spacings.
NARROWEST_SCALE = 0.3

#: Places over which the error of combining anisotropies, a difference of few polynomials, is the largest.
STRINGS_NEIGHBOURS = 9

STEP_REFERENCES = ("castro_alvaredo_2016", "bertini_2016", "takahashi_1972", "takahashi_1999")
SMOOTH_REFERENCES = ("doyon_2018", *STEP_REFERENCES)


def predict_step(
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
    """Predict two joined halves, each uniform and in equilibrium.

    left, right, middle : (beta, beta_field) for x < 0, for x > 0, and at x = 0 when t = 0
    times : (time,) in 1/J, not negative; sites, bonds : (site,), (bond,) positions, symmetric about 0
    At t = 0 values are those of the local thermal state. The light cone's left edge is the least velocity of
    the left state, its right edge the greatest of the right state: beyond them nothing changes.
    At |D| < 1 that is not cos(pi p/q) of a small string table the result is combined from such anisotropies
    nearby. Raises ConvergenceError, and InputError where |D| < 1 is too near to 1, and where light reaches
    the ends, because the solution is that of an infinite chain.
    """
    if abs(anisotropy) >= 1.0:
        return predict_step_gapped(
            anisotropy=anisotropy, coupling=coupling, left=left, right=right, middle=middle,
            times=times, sites=sites, bonds=bonds,
        )  # fmt: skip
    way = between(anisotropy)
    edges = _combined_edges(way, lambda value: _edges_of_halves(value, coupling, left, right))
    uniform = left == right
    if not uniform:
        refuse_reflection(edges, times, sites)
    rays = rays_to(np.concatenate([sites, bonds]), times, uniform=uniform)
    distinct, index = np.unique(rays, return_inverse=True)
    target = STEP_TARGET if len(way.anisotropies) == 1 else COMBINED_TARGET

    def refined(value: float) -> Refined:
        def solve(level: int, some: Reals) -> Reals:
            return _on_rays(_step_mesh(value, coupling, level), left, right, middle, some)

        found = refine(solve, distinct, levels=len(STEP_LEVELS), target=target, floor=STEP_FLOOR)
        return Refined(*(each[index.reshape(rays.shape)] for each in (found.values, found.errors)))

    method = "uniform" if uniform else "joined halves (self-similar)"
    return _prediction(way, refined, sites.size, edges, method, STEP_REFERENCES)


def _step_mesh(anisotropy: float, coupling: float, level: int) -> RapidityMesh:
    nodes, spacing = STEP_LEVELS[level]
    return rapidity_mesh(anisotropy=anisotropy, coupling=coupling, nodes=nodes, spacing=spacing)


def _edges_of_halves(anisotropy: float, coupling: float, left: State, right: State) -> tuple[float, float]:
    mesh = _step_mesh(anisotropy, coupling, -2)
    return light_cone_of_halves(mesh, thermal_on_mesh(mesh, left), thermal_on_mesh(mesh, right))


def _on_rays(mesh: RapidityMesh, left: State, right: State, middle: State, rays: Reals) -> Reals:
    """Return averages (ray, observable); at rays that are not numbers those of the state `middle`."""
    result = np.empty((rays.size, len(OBSERVABLES)))
    at_joint = np.isnan(rays)
    result[at_joint] = uniform_averages(mesh, thermal_on_mesh(mesh, middle))
    halves = thermal_on_mesh(mesh, left), thermal_on_mesh(mesh, right)
    result[~at_joint] = join_halves(mesh, *halves, rays=rays[~at_joint])
    return result


def predict_smooth(
    *,
    anisotropy: float,
    coupling: float,
    beta: Callable[[Reals], Reals],
    beta_field: Callable[[Reals], Reals],
    times: Reals,
    sites: Reals,
    bonds: Reals,
) -> Prediction:
    """Predict a smooth profile between two reflecting ends.

    beta, beta_field : functions of position (any shape) in the chain
    times : (time,) in 1/J, not negative, ascending; sites, bonds : (site,), (bond,) positions, symmetric
    The light cone holds the extreme velocities of the initial profile.
    Raises ConvergenceError, and InputError where |D| is not below 1 or too near to it, and for a profile that
    changes within less than NARROWEST_SCALE.
    """
    start = SmoothStart(anisotropy, coupling, beta, beta_field, wall=wall_of(sites))
    if start.is_uniform:
        state = start.ranges[0][0], start.ranges[1][0]
        return predict_step(
            anisotropy=anisotropy, coupling=coupling, left=state, right=state, middle=state,
            times=times, sites=sites, bonds=bonds,
        )  # fmt: skip
    if start.scale < NARROWEST_SCALE:
        problem = (
            f"[start] a profile changes within {start.scale:.2g} lattice spacings; the least for a smooth "
            f"one is {NARROWEST_SCALE}: widen it, or make it a sharp step (width = 0)"
        )
        subject = "prediction"
        raise InputError(subject, [problem])
    places = np.concatenate([sites, bonds])
    way = between(anisotropy)
    combined = len(way.anisotropies) > 1
    levels = COMBINED_LEVELS if combined else SMOOTH_LEVELS

    def refined(value: float) -> Refined:
        here = replace(start, anisotropy=value)
        return refine(
            lambda level, some: smooth_averages(here, levels[level], some, places),
            times,
            levels=len(levels),
            target=COMBINED_SMOOTH_TARGET if combined else SMOOTH_TARGET,
            floor=SMOOTH_FLOOR,
            least_gain=SMOOTH_GAIN,
        )

    edges = _combined_edges(way, lambda value: initial_light_cone(replace(start, anisotropy=value)))
    return _prediction(way, refined, sites.size, edges, "characteristics", SMOOTH_REFERENCES)


def _combined_edges(way: Between, edges: Callable[[float], tuple[float, float]]) -> tuple[float, float]:
    values = [np.array(edges(value)) for value in way.anisotropies]
    first, last = way.combine(values, spin=False)[0].tolist()
    return first, last


def _prediction(
    way: Between,
    refined: Callable[[float], Refined],
    sites: int,
    light_cone: tuple[float, float],
    method: str,
    references: tuple[str, ...],
) -> Prediction:
    """Combine anisotropies; sort values (time, site or bond, observable) into the observables' places.

    A difference may vanish by chance at a place: an error is the largest among its neighbours.
    """
    solved = [refined(value) for value in way.anisotropies]
    fields: dict[str, Reals] = {}
    grid: dict[str, Reals] = {}
    strings: dict[str, Reals] = {}
    for index, name in enumerate(OBSERVABLES):
        part = slice(None, sites) if OBSERVABLE_PLACES[name] == "site" else slice(sites, None)
        spin = name.startswith("charge")
        fields[name], cost = way.combine([each.values[:, part, index] for each in solved], spin=spin)
        bound = way.bound([each.errors[:, part, index] for each in solved], spin=spin)
        strings[name] = maximum_filter1d(cost, size=STRINGS_NEIGHBOURS, axis=1)
        grid[name] = maximum_filter1d(bound, size=3, axis=1)
    for each in (fields, grid, strings):
        each["energy_current"][:, [0, -1]] = 0.0  # no bond beyond the end sites to carry energy
    return Prediction(fields, grid, strings, light_cone, method, references)
