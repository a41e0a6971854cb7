"""Two joined halves at |D| >= 1, at Euler scale: one stationary state on each ray x/t.

Strings keep the filling of the side they come from; so do the strings beyond the last one kept, whose
velocity tends to j/m, the ratio of spin current and magnetisation. The sign of the magnetisation, which
fillings do not know, travels with them. Sources: O. A. Castro-Alvaredo, B. Doyon and T. Yoshimura, Phys.
Rev. X 6, 041065 (2016); B. Bertini, M. Collura, J. De Nardis and M. Fagotti, Phys. Rev. Lett. 117, 207201
(2016); L. Piroli, J. De Nardis, M. Collura, B. Bertini and M. Fagotti, Phys. Rev. B 96, 115124 (2017), for
the sign.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from tnquench.bethe.gapped_chain import ChainFactors, factor_chain
from tnquench.bethe.gapped_model import GappedModel, GappedState, tail_operator
from tnquench.bethe.gapped_states import dressed_slopes, gapped_averages
from tnquench.conventions import Reals
from tnquench.errors import ConvergenceError
from tnquench.hydro.gapped_sides import Sides, extreme_velocities, side_weights, sides_of
from tnquench.hydro.mesh import OBSERVABLES

Booleans = NDArray[np.bool_]

#: Rays solved together around one reference state.
RAYS_TOGETHER = 32

#: Largest change of a dressed slope, relative to the largest one, at which a state counts as solved.
CHANGE_TARGET = 1e-12

#: Below the limit a residual that falls by less than the factor in so many iterations is noise: velocities of
#: wide strings are resolved less well where they have almost no states.
NOISE_LIMIT, STALLED, STALLED_AFTER = 3e-7, 0.7, 8

#: A state is refused above this residual.
RESIDUAL_LIMIT = 1e-6

#: Iterations around one reference; on a single ray steps shrink by the factor after each of so many rounds.
PATIENCE, DAMPING, DAMPED_ROUNDS = 25, 0.5, 6

#: A spin current this near to ray times magnetisation is on the sign's own ray.
SIGN_TOLERANCE = 1e-12


@dataclass(frozen=True, eq=False)
class Halves:
    """Left and right state and what their longest string hands on: (side, node) tails and (side,) signs."""

    sides: Sides
    states: tuple[GappedState, GappedState]

    @property
    def model(self) -> GappedModel:
        """The chain."""
        return self.sides.model

    def filling(self, weights: Reals) -> Reals:
        """Return fillings for side weights (..., string, node) of the left state."""
        left, right = self.states
        return np.asarray(right.filling + (left.filling - right.filling) * weights)

    def from_left(self, weights: Reals) -> Booleans:
        """Return whether the longest strings come from the left, (ray,)."""
        return np.asarray(weights[:, -1] @ self.model.weights > 0.5 * self.model.weights.sum())

    def tail(self, weights: Reals, slopes: Reals) -> Reals:
        """Return (1 - theta) q of string N + 1, (ray, function, node).

        weights : (ray, string, node); slopes : (ray, function, string, node) dressed functions q
        """
        factors = [state.holes[-1] * state.tail_factor for state in self.states]
        last = weights[:, None, -1]
        direct = (factors[1] + (factors[0] - factors[1]) * last) * slopes[:, :, -1]
        holes = (1.0 - self.filling(weights)[:, None, -1]) * slopes[:, :, -1]
        smoothed = [holes @ tail_operator(self.model, state.half_field).T for state in self.states]
        return np.asarray(direct + np.where(self.from_left(weights)[:, None, None], *smoothed))

    def averages(self, weights: Reals, slopes: Reals, rays: Reals) -> Reals:
        """Return averages (ray, observable) in the order OBSERVABLES."""
        model = self.model
        first = (1.0 - self.filling(weights)[:, 0])[:, None] * slopes[:, :, 0]
        flow, density = (first @ (model.weights * model.momentum_source / (2.0 * np.pi))).T
        factors = [s.holes[-1] * np.sinh(s.half_field) / s.tail_ratio for s in self.states]
        carried = (factors[1] + (factors[0] - factors[1]) * weights[:, -1])[:, None] * slopes[:, :, -1]
        current, size = (carried @ (model.weights / (4.0 * np.pi))).T
        lead = current - rays * size  # positive where long strings outrun the ray
        signs = [state.sign for state in self.states]
        sign = np.where(lead > 0.0, *signs)
        sign = np.where(np.abs(lead) < SIGN_TOLERANCE, 0.5 * (signs[0] + signs[1]), sign)
        energy = model.ground_energy + 0.5 * model.strength * density
        spins = [sign * each + 0.0 for each in (size, current)]  # no negative zeros
        return np.stack([energy, spins[0], 0.5 * model.strength * flow, spins[1]], axis=1)


@dataclass(frozen=True, eq=False)
class Reference:
    """A state around which others are dressed.

    filling : (string, node); tail : (node, node) its tail; factors : of its dressing; slopes : (2, string,
    node); from_left : whether its longest strings come from the left
    """

    filling: Reals
    tail: Reals
    factors: ChainFactors
    slopes: Reals
    from_left: bool


def halves_of(model: GappedModel, left: GappedState, right: GappedState) -> Halves:
    """Return two halves of a chain."""
    return Halves(sides_of(model), (left, right))


def light_cone_of_halves(halves: Halves) -> tuple[float, float]:
    """Return the velocities of the cone's edges: the left state's least, the right state's greatest."""
    slopes = [dressed_slopes(halves.model, state) for state in halves.states]
    return extreme_velocities(halves.sides, slopes[0])[0], extreme_velocities(halves.sides, slopes[1])[1]


def uniform_averages(model: GappedModel, state: GappedState) -> Reals:
    """Return averages (observable,) of one state, in the order OBSERVABLES."""
    means = gapped_averages(model, state)
    return np.array([getattr(means, name) for name in OBSERVABLES])


def join_gapped_halves(halves: Halves, *, rays: Reals) -> tuple[Reals, Reals]:
    """Solve theta(ray) = theta_left where v_eff > ray, theta_right elsewhere, on every ray x/t.

    rays : (ray,) velocities in any order, infinite ones allowed
    Returns averages (ray, observable) and what iteration left open, relative (ray,). Raises ConvergenceError
    with the largest residual.
    """
    first, last = light_cone_of_halves(halves)
    result, residuals = np.empty((rays.size, len(OBSERVABLES))), np.zeros(rays.size)
    for outside, state in zip((rays <= first, rays >= last), halves.states, strict=True):
        result[outside] = uniform_averages(halves.model, state)
    inside = np.flatnonzero((rays > first) & (rays < last))
    inside = inside[np.argsort(rays[inside])]
    slopes = dressed_slopes(halves.model, halves.states[0])
    for start in range(0, inside.size, RAYS_TOGETHER):
        chosen = inside[start : start + RAYS_TOGETHER]
        guesses = np.repeat(slopes[None], chosen.size, axis=0)
        weights, all_slopes, residuals[chosen] = states_on_rays(halves, rays=rays[chosen], slopes=guesses)
        result[chosen] = halves.averages(weights, all_slopes, rays[chosen])
        slopes = all_slopes[-1]
    return result, residuals


def states_on_rays(halves: Halves, *, rays: Reals, slopes: Reals) -> tuple[Reals, Reals, Reals]:
    """Return side weights (ray, string, node), slopes (ray, 2, string, node) and residuals (ray,).

    rays : inside the cone, in order; slopes : a guess for each. Rays that do not converge around one common
    reference are split in two groups with a reference each, down to single rays.
    Raises ConvergenceError with the largest residual.
    """
    weights, slopes, residual, settled = _iterate(halves, rays, slopes)
    stuck = np.flatnonzero(~settled)
    if rays.size > 1:
        for group in (stuck[: stuck.size // 2], stuck[stuck.size // 2 :]):
            if group.size:
                solved = states_on_rays(halves, rays=rays[group], slopes=slopes[group])
                weights[group], slopes[group], residual[group] = solved
    elif residual[0] > RESIDUAL_LIMIT:
        what = f"self-similar state at D = {halves.model.anisotropy:.6g} on ray {rays[0]:.6g}"
        raise ConvergenceError(what, residual=float(residual[0]))
    return weights, slopes, residual


def _iterate(halves: Halves, rays: Reals, slopes: Reals) -> tuple[Reals, Reals, Reals, Booleans]:
    """Iterate all rays around the state on the middle one; arguments and results as in `states_on_rays`.

    Also returns which rays are settled. Where the longest strings come from the other side than those of the
    reference, convergence is slow, and small changes are no proof of it.

    Where long strings move almost exactly with the ray, the iteration would jump between having all or none
    of them; a single ray is damped, and what is left is in its residual.
    """
    slopes, weights = slopes.copy(), np.empty((rays.size, halves.model.strings, halves.model.nodes))
    residual, settled = np.full(rays.size, np.inf), np.zeros(rays.size, dtype=np.bool_)
    pending = np.arange(rays.size)
    earlier = np.full((STALLED_AFTER, rays.size), np.inf)
    rounds = 1 if rays.size > 1 else DAMPED_ROUNDS
    for iteration in range(rounds * PATIENCE):
        if iteration % PATIENCE == 0:
            middle = rays.size // 2
            reference = _reference(halves, slopes[middle], rays[middle])
        weights[pending] = side_weights(halves.sides, slopes[pending], rays[pending])
        change = _redress(halves, reference, weights[pending], slopes[pending]) - slopes[pending]
        slopes[pending] += DAMPING ** (iteration // PATIENCE) * change
        largest = np.max(np.abs(slopes[pending]), axis=(1, 2, 3))
        residual[pending] = np.max(np.abs(change), axis=(1, 2, 3)) / largest
        stalled = residual > STALLED * earlier[iteration % STALLED_AFTER]
        earlier[iteration % STALLED_AFTER] = residual
        noise = stalled[pending] & (residual[pending] < NOISE_LIMIT)
        noise &= halves.from_left(weights[pending]) == reference.from_left
        settled[pending] = (residual[pending] < CHANGE_TARGET) | noise
        pending = pending[~settled[pending]]
        if not pending.size:
            break
    return weights, slopes, residual, settled


def _reference(halves: Halves, slopes: Reals, ray: float) -> Reference:
    """Return the state on one ray as its velocities `slopes` (2, string, node) would have it."""
    model = halves.model
    weights = side_weights(halves.sides, slopes[None], np.array([ray]))
    filling = halves.filling(weights)[0]
    from_left = bool(halves.from_left(weights)[0])
    state = halves.states[0 if from_left else 1]
    tail = np.diag(state.tail_factor) + tail_operator(model, state.half_field)
    factors = factor_chain(model.smoothing, 1.0 - filling, tail)
    sources = np.zeros((model.strings, model.nodes, 2))
    sources[0] = np.stack([model.energy_slope_source, model.momentum_source], axis=1)
    return Reference(filling, tail, factors, np.moveaxis(factors.solve(sources), 2, 0), from_left)


def _redress(halves: Halves, reference: Reference, weights: Reals, slopes: Reals) -> Reals:
    """Return one iterate of the dressed slopes, exact at its fixed point.

    The difference of the holes from the reference's acts on the last iterate, the reference's own exactly.
    """
    moved = (reference.filling - halves.filling(weights))[:, None] * slopes
    neighbours = np.zeros_like(moved)
    neighbours[:, :, 1:] += moved[:, :, :-1]
    neighbours[:, :, :-1] += moved[:, :, 1:]
    known = (1.0 - reference.filling[-1]) * slopes[:, :, -1]
    neighbours[:, :, -1] += halves.tail(weights, slopes) - known @ reference.tail.T
    sources = neighbours @ halves.model.smoothing.T
    columns = np.moveaxis(sources, (2, 3), (0, 1)).reshape(*sources.shape[2:], -1)
    change = reference.factors.solve(columns).reshape(*sources.shape[2:], *sources.shape[:2])
    return np.asarray(reference.slopes + np.moveaxis(change, (0, 1), (2, 3)))
