"""The Euler prediction of a run: densities and currents on its places and times, each with its error."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

import numpy as np
from scipy.ndimage import maximum_filter1d

from tnquench.conventions import OBSERVABLE_PLACES, Reals
from tnquench.errors import ConvergenceError, InputError
from tnquench.hydro.alignment import Marks, carried, zone_marks
from tnquench.hydro.between import Between, between, between_angles, between_gapless
from tnquench.hydro.gapless import REFERENCES as GAPLESS_REFERENCES
from tnquench.hydro.gapless import STEP_TARGET, light_cone_gapless, sign_ray_gapless, solve_gapless
from tnquench.hydro.gapped import REFERENCES as GAPPED_REFERENCES
from tnquench.hydro.gapped import light_cone_gapped, sign_ray_gapped, solve_gapped
from tnquench.hydro.mesh import OBSERVABLES
from tnquench.hydro.predicted import Prediction as Prediction
from tnquench.hydro.predicted import rays_to, refuse_reflection, wall_of
from tnquench.hydro.refinement import refine
from tnquench.hydro.smooth import COMBINED_LEVELS, SmoothStart, initial_light_cone, smooth_averages
from tnquench.hydro.smooth import LEVELS as SMOOTH_LEVELS
from tnquench.hydro.step import Solved, Step
from tnquench.hydro.thermal_states import State

#: Changes at which the refinement of smooth profiles stops, and error that it cannot see: the cut rapidity
#: mesh, iterations, and the expansion of thermal states.
SMOOTH_TARGET, SMOOTH_FLOOR = 1e-6, 1e-8

#: Targets of joined halves, of walls of the magnetisation and of smooth profiles at the anisotropies between
#: which others are combined.
COMBINED_TARGET, COMBINED_WALL_TARGET, COMBINED_SMOOTH_TARGET = 1e-6, 3e-5, 3e-6

#: Kinks, as at ends where a profile is not flat, converge too slowly for more levels to be worth their cost.
SMOOTH_GAIN = 1.5

#: Least scale of a smooth profile, in lattice spacings.
NARROWEST_SCALE = 0.3

#: Places over which the error of combining anisotropies, a difference of few polynomials, is the largest.
STRINGS_NEIGHBOURS = 9

#: How many times more is claimed for spin where one half alone has no field: the zone of its wall ends in a
#: kink there, and differences of orders were found 2.8 times too small.
KINK_SAFETY = 4.0

SMOOTH_REFERENCES = ("doyon_2018", *GAPLESS_REFERENCES)


@dataclass(frozen=True, eq=False)
class Combination:
    """Solutions at several anisotropies, (time, place, observable), and how they are combined.

    safety : how many times the cost of combining is claimed
    """

    way: Between
    solved: Sequence[Solved]
    safety: float = 1.0

    def field(self, part: slice, index: int, *, spin: bool) -> tuple[Reals, Reals, Reals]:
        """Return one observable on some of the places, its error from grids and from strings.

        A difference may vanish by chance at a place: an error is the largest among its neighbours.
        """
        chosen = (slice(None), part, index)
        value, cost = self.way.combine([each.values[chosen] for each in self.solved], spin=spin)
        grid, strings = (
            maximum_filter1d(self.way.bound([error[chosen] for error in errors], spin=spin), size=3, axis=1)
            for errors in ([each.grid for each in self.solved], [each.strings for each in self.solved])
        )
        cost = self.safety * maximum_filter1d(cost, size=STRINGS_NEIGHBOURS, axis=1)
        return value, grid, strings + cost


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
    """Predict two joined halves, each uniform and in equilibrium, at any D.

    left, right, middle : (beta, beta_field) for x < 0, for x > 0, and at x = 0 when t = 0
    times : (time,) in 1/J, not negative; sites, bonds : (site,), (bond,) positions, symmetric about 0
    At t = 0 values are those of the local thermal state. The light cone's left edge is the least velocity of
    the left state, its right edge the greatest of the right state: beyond them nothing changes.
    At |D| < 1 that is not cos(pi p/q) of a small string table the result is combined from anisotropies
    nearby, on rays that correspond to each other. Raises ConvergenceError, and InputError where light reaches
    the ends, because the solution is that of an infinite chain.
    """
    step, way = Step(coupling, left, right, middle), between(anisotropy)
    try:
        return _combined_step(step, anisotropy, way, times, sites, bonds)
    except ConvergenceError:
        # at |D| >= 1 strings of every length decide next to a half without field, and may not settle
        if abs(anisotropy) >= 1.0 or max(np.abs(way.anisotropies)) < 1.0:
            raise
    return _combined_step(step, anisotropy, between_angles(anisotropy), times, sites, bonds)


def _combined_step(
    step: Step, anisotropy: float, way: Between, times: Reals, sites: Reals, bonds: Reals
) -> Prediction:
    """Predict two joined halves at D by a combination, in which a wall of the magnetisation has its own."""
    cones = [_light_cone(step, value) for value in way.anisotropies]
    edges = _combined_edges(way, cones)
    if not step.is_uniform:
        refuse_reflection(edges, times, sites)
    rays = rays_to(np.concatenate([sites, bonds]), times, uniform=step.is_uniform)
    distinct, index = np.unique(rays, return_inverse=True)
    alone = len(way.anisotropies) == 1

    def combination(way: Between, here: Marks, there: Sequence[Marks], target: float) -> Combination:
        solved = []
        for value, marks in zip(way.anisotropies, there, strict=True):
            moved = distinct if alone else carried(distinct, here=here, there=marks)
            found = _solve(step, value, moved, target)
            solved.append(found.spread(index.reshape(rays.shape).astype(np.int64)))
        return Combination(way, solved)

    energy = spin = combination(way, edges, cones, STEP_TARGET if alone else COMBINED_TARGET)
    if step.is_wall and not alone:
        narrow = between_angles(anisotropy)
        left_field, right_field = step.left[1], step.right[1]
        here, *there = _wall_marks(step, anisotropy, way, cones, narrow)
        spin = combination(narrow, here, there, COMBINED_WALL_TARGET)
        spin = replace(spin, safety=KINK_SAFETY if 0.0 in {left_field, right_field} else 1.0)
    method = "uniform" if step.is_uniform else "joined halves (self-similar)"
    references = GAPPED_REFERENCES if abs(anisotropy) >= 1.0 else GAPLESS_REFERENCES
    return _prediction(energy, spin, sites.size, edges, method, references)


def _light_cone(step: Step, anisotropy: float) -> tuple[float, float]:
    return (light_cone_gapped if abs(anisotropy) >= 1.0 else light_cone_gapless)(step, anisotropy)


def _solve(step: Step, anisotropy: float, rays: Reals, target: float) -> Solved:
    if abs(anisotropy) >= 1.0:
        return solve_gapped(step, anisotropy, rays)
    return solve_gapless(step, anisotropy, rays, target=target)


def _wall_marks(
    step: Step, anisotropy: float, way: Between, cones: Sequence[tuple[float, float]], narrow: Between
) -> list[Marks]:
    """Return what moves with a wall of the magnetisation, at D itself and at the anisotropies of `narrow`.

    cones : at the anisotropies of `way`, from which those at D follow, as the middle of the zone does
    """
    centres = {value: _sign_ray(step, value) for value in {*way.anisotropies, *narrow.anisotropies}}
    known = dict(zip(way.anisotropies, cones, strict=True))
    others = [known.get(value) or _light_cone(step, value) for value in narrow.anisotropies]
    middle = way.combine([np.array(centres[value]) for value in way.anisotropies], spin=False)[0]
    return zone_marks(
        np.array([anisotropy, *narrow.anisotropies]),
        [_combined_edges(way, cones), *others],
        [float(middle), *(centres[value] for value in narrow.anisotropies)],
        step.coupling,
    )


def _sign_ray(step: Step, anisotropy: float) -> float:
    return (sign_ray_gapped if abs(anisotropy) >= 1.0 else sign_ray_gapless)(step, anisotropy)


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
    Raises ConvergenceError, and InputError where |D| > 0.97, and for a profile that
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
    way = between_gapless(anisotropy)
    combined = len(way.anisotropies) > 1
    levels = COMBINED_LEVELS if combined else SMOOTH_LEVELS

    def solved(value: float) -> Solved:
        here = replace(start, anisotropy=value)
        found = refine(
            lambda level, some: smooth_averages(here, levels[level], some, places),
            times,
            levels=len(levels),
            target=COMBINED_SMOOTH_TARGET if combined else SMOOTH_TARGET,
            floor=SMOOTH_FLOOR,
            least_gain=SMOOTH_GAIN,
        )
        return Solved(found.values, found.errors, np.zeros_like(found.errors))

    edges = _combined_edges(
        way, [initial_light_cone(replace(start, anisotropy=value)) for value in way.anisotropies]
    )
    both = Combination(way, [solved(value) for value in way.anisotropies])
    return _prediction(both, both, sites.size, edges, "characteristics", SMOOTH_REFERENCES)


def _combined_edges(way: Between, cones: Sequence[tuple[float, float]]) -> tuple[float, float]:
    first, last = way.combine([np.array(cone) for cone in cones], spin=False)[0].tolist()
    return first, last


def _prediction(
    energy: Combination,
    spin: Combination,
    sites: int,
    light_cone: tuple[float, float],
    method: str,
    references: tuple[str, ...],
) -> Prediction:
    """Combine anisotropies and sort values (time, site or bond, observable) into the observables' places."""
    fields, grid, strings = ({}, {}, {})
    for index, name in enumerate(OBSERVABLES):
        part = slice(None, sites) if OBSERVABLE_PLACES[name] == "site" else slice(sites, None)
        is_spin = name.startswith("charge")
        found = (spin if is_spin else energy).field(part, index, spin=is_spin)
        fields[name], grid[name], strings[name] = found
    for each in (fields, grid, strings):
        each["energy_current"][:, [0, -1]] = 0.0  # no bond beyond the end sites to carry energy
    return Prediction(fields, grid, strings, light_cone, method, references)
