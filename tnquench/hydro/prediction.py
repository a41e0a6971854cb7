"""The Euler prediction of a run: densities and currents on its places and times, each with its error."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from scipy.ndimage import maximum_filter1d

from tnquench.conventions import OBSERVABLE_PLACES, Reals
from tnquench.errors import InputError
from tnquench.hydro.joined import join_halves, light_cone_of_halves
from tnquench.hydro.mesh import OBSERVABLES, RapidityMesh, rapidity_mesh, uniform_averages
from tnquench.hydro.refinement import Refined, refine
from tnquench.hydro.smooth import LEVELS as SMOOTH_LEVELS
from tnquench.hydro.smooth import SmoothStart, initial_light_cone, smooth_averages
from tnquench.hydro.thermal_states import State, thermal_on_mesh

#: Smooth nodes a string and mesh spacing, in crossing angles, of successive refinements of joined halves.
STEP_LEVELS: tuple[tuple[int, float], ...] = ((32, 0.11), (48, 0.085), (64, 0.07), (96, 0.055))

#: Change at which refinement stops, and error that it cannot see: the cut rapidity mesh and iterations, for
#: smooth profiles also the expansion of thermal states.
STEP_TARGET, STEP_FLOOR = 1e-8, 1e-10
SMOOTH_TARGET, SMOOTH_FLOOR = 1e-6, 1e-8

#: Kinks, as at ends where a profile is not flat, converge too slowly for more levels to be worth their cost.
SMOOTH_GAIN = 1.5

#: Least scale of a smooth profile, in lattice spacings.
NARROWEST_SCALE = 0.3

#: Rays x/t that agree to this many decimals are one ray.
RAY_DECIMALS = 12

STEP_REFERENCES = ("castro_alvaredo_2016", "bertini_2016", "takahashi_1972", "takahashi_1999")
SMOOTH_REFERENCES = ("doyon_2018", *STEP_REFERENCES)


@dataclass(frozen=True, eq=False)
class Prediction:
    """Euler-scale densities and currents of a run.

    fields        : observable -> (time, place), on the sites or bonds that OBSERVABLE_PLACES names
    grid_error    : same shapes; change under the last refinement of rapidities (and positions)
    strings_error : same shapes; zero, because the strings at these anisotropies are finite in number
    light_cone    : velocities (negative, positive) of its edges
    method        : "joined halves (self-similar)" | "characteristics" | "uniform"
    references    : keys of the report's references
    """

    fields: dict[str, Reals]
    grid_error: dict[str, Reals]
    strings_error: dict[str, Reals]
    light_cone: tuple[float, float]
    method: str
    references: tuple[str, ...]


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
    Raises UnsupportedAnisotropy (a ValueError), ConvergenceError, and InputError where light reaches the
    ends, because the solution is that of an infinite chain.
    """

    def mesh_at(level: int) -> RapidityMesh:
        nodes, spacing = STEP_LEVELS[level]
        return rapidity_mesh(anisotropy=anisotropy, coupling=coupling, nodes=nodes, spacing=spacing)

    def solve(level: int, rays: Reals) -> Reals:
        mesh, result = mesh_at(level), np.empty((rays.size, len(OBSERVABLES)))
        at_joint = np.isnan(rays)
        result[at_joint] = uniform_averages(mesh, thermal_on_mesh(mesh, middle))
        halves = thermal_on_mesh(mesh, left), thermal_on_mesh(mesh, right)
        result[~at_joint] = join_halves(mesh, *halves, rays=rays[~at_joint])
        return result

    mesh = mesh_at(-2)
    edges = light_cone_of_halves(mesh, thermal_on_mesh(mesh, left), thermal_on_mesh(mesh, right))
    uniform = left == right
    if not uniform:
        _refuse_reflection(edges, times, sites)
    rays = _rays(np.concatenate([sites, bonds]), times, uniform=uniform)
    distinct, index = np.unique(rays, return_inverse=True)
    refined = refine(solve, distinct, levels=len(STEP_LEVELS), target=STEP_TARGET, floor=STEP_FLOOR)
    values, errors = (each[index.reshape(rays.shape)] for each in (refined.values, refined.errors))
    method = "uniform" if uniform else "joined halves (self-similar)"
    return _prediction(Refined(values, errors), sites.size, edges, method, STEP_REFERENCES)


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
    Raises UnsupportedAnisotropy (a ValueError), ConvergenceError, and InputError for a profile that changes
    within less than NARROWEST_SCALE.
    """
    start = SmoothStart(anisotropy, coupling, beta, beta_field, wall=_wall(sites))
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
    refined = refine(
        lambda level, some: smooth_averages(start, SMOOTH_LEVELS[level], some, places),
        times,
        levels=len(SMOOTH_LEVELS),
        target=SMOOTH_TARGET,
        floor=SMOOTH_FLOOR,
        least_gain=SMOOTH_GAIN,
    )
    return _prediction(refined, sites.size, initial_light_cone(start), "characteristics", SMOOTH_REFERENCES)


def _rays(places: Reals, times: Reals, *, uniform: bool) -> Reals:
    """Return x/t (time, place); at t = 0 infinite, and not a number at the joint."""
    if uniform:
        rays = np.full((times.size, places.size), np.inf)
        rays[np.ix_(times == 0.0, places == 0.0)] = np.nan
        return rays
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.asarray((places / times[:, None]).round(RAY_DECIMALS))


def _wall(sites: Reals) -> float:
    """Return where quasiparticles turn: free modes of an open chain vanish one site beyond its ends."""
    return float(sites[-1]) + 1.0


def _refuse_reflection(edges: tuple[float, float], times: Reals, sites: Reals) -> None:
    arrival = _wall(sites) / max(-edges[0], edges[1])
    if times.max(initial=0.0) > arrival:
        problem = (
            f"[evolution] until = {times.max():g}: light (velocities {edges[0]:.4g}, {edges[1]:.4g}) reaches "
            f"the ends at t = {arrival:.4g}; the solution for two joined halves is that of an infinite "
            "chain. Stop earlier, take more sites, or give the step a width"
        )
        subject = "prediction"
        raise InputError(subject, [problem])


def _prediction(
    refined: Refined, sites: int, light_cone: tuple[float, float], method: str, references: tuple[str, ...]
) -> Prediction:
    """Sort values (time, site or bond, observable) into the observables' places.

    A change under refinement may vanish by chance at a place: its error is the largest among its neighbours.
    """
    fields, errors = {}, {}
    for index, name in enumerate(OBSERVABLES):
        part = slice(None, sites) if OBSERVABLE_PLACES[name] == "site" else slice(sites, None)
        fields[name] = refined.values[:, part, index].copy()
        errors[name] = maximum_filter1d(refined.errors[:, part, index], size=3, axis=1)
    for each in (fields, errors):
        each["energy_current"][:, [0, -1]] = 0.0  # no bond beyond the end sites to carry energy
    exact = {name: np.zeros_like(values) for name, values in fields.items()}
    return Prediction(fields, errors, exact, light_cone, method, references)
