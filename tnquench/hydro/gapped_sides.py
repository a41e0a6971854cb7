"""Where effective velocities at |D| >= 1 cross a ray, on a periodic rapidity: all crossings, or none.

Slopes are trigonometric polynomials in the angle phi of `bethe.gapped_grid`, known by their values at the
nodes: per unit of phi they stay finite where phi is at an end of its period.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from tnquench.bethe.gapped_model import GappedModel
from tnquench.conventions import Integers, Reals

#: Points on which velocities are sampled for each node.
OVERSAMPLING = 4

#: Steps of false position (Illinois variant).
ROOT_STEPS = 9

#: Where p' is below this part of its largest value there are no states to speak of.
EMPTY = 1e-6

#: Extrema shallower than this, in units of the velocity, are rounding noise.
EXTREMUM_DEPTH = 1e-13


@dataclass(frozen=True, eq=False)
class Sides:
    """Interpolation between the nodes of a model.

    angles   : (sample,) equidistant over the period; spread : (node, sample) interpolation to them
    analysis : (node, mode) to the Fourier coefficients of `value`, modes 0..nodes/2
    """

    model: GappedModel
    angles: Reals
    spread: Reals
    analysis: Reals

    def value(self, coefficients: Reals, angles: Reals) -> Reals:
        """Return slopes (..., row) at one angle a row, from coefficients (..., row, mode)."""
        waves = np.exp(2j * np.multiply.outer(angles, np.arange(coefficients.shape[-1])))
        return np.asarray(np.einsum("...rk,rk->...r", coefficients, waves).real)


def sides_of(model: GappedModel) -> Sides:
    """Return the interpolation for a model."""
    modes = np.arange(model.nodes // 2 + 1)
    analysis = 2.0 / model.nodes * np.exp(-2j * np.multiply.outer(model.angles, modes))
    analysis[:, [0, -1]] *= 0.5
    count = OVERSAMPLING * model.nodes
    angles = -0.5 * np.pi + np.pi * (np.arange(count) + 0.5) / count
    spread = (analysis @ np.exp(2j * np.multiply.outer(modes, angles))).real
    return Sides(model, angles, spread, analysis)


def side_weights(sides: Sides, slopes: Reals, rays: Reals) -> Reals:
    """Return c (ray, string, node), such that sum w c f is the integral of f over the side v_eff > ray.

    slopes : (ray, 2, string, node) dressed e', p' of the state on each ray; rays : (ray,)
    Exact for trigonometric polynomials f of the nodes: c integrates their cardinal functions.
    """
    model = sides.model
    rows = rays.size * model.strings
    per_angle = np.moveaxis(slopes * model.weights, 1, 0).reshape(2, rows, model.nodes)
    row, angle, rising, above = _crossings(sides, per_angle, np.repeat(rays, model.strings))
    weights = np.repeat(above[:, None], model.nodes, axis=1)
    np.subtract.at(weights, row, rising[:, None] * _cardinal_integrals(model, angle))
    return weights.reshape(rays.size, model.strings, model.nodes)


def _cardinal_integrals(model: GappedModel, angles: Reals) -> Reals:
    """Return integrals of the nodes' cardinal functions from 0 to `angles`, over weights: (angle, node)."""
    half = model.nodes // 2
    modes = np.arange(1, half + 1)
    size = np.where(modes == half, 0.5, 1.0) / modes
    here, nodes = (2.0 * np.multiply.outer(each, modes) for each in (angles, model.angles))
    waves = (np.sin(here) * size) @ np.cos(nodes).T - (np.cos(here) * size) @ np.sin(nodes).T
    return np.asarray((angles[:, None] + waves) / np.pi)


def _crossings(sides: Sides, slopes: Reals, rays: Reals) -> tuple[Integers, Reals, Reals, Reals]:
    """Return row, angle and direction of all crossings, and whether each row starts above its ray.

    slopes : (2, row, node) per unit of angle; rays : (row,)
    """
    sampled = _sampled_velocities(sides, slopes)
    coefficients = slopes @ sides.analysis
    angles = np.tile(sides.angles, (rays.size, 1))
    row, point, angle, velocity = _extrema(sides, coefficients, sampled)
    angles[row, point], sampled[row, point] = angle, velocity
    excess = sampled - rays[:, None]
    above = excess > 0.0
    following = np.roll(above, -1, axis=1)
    row, point = np.nonzero(above != following)
    after = (point + 1) % sides.angles.size
    low, high = angles[row, point], angles[row, after] + np.where(after == 0, np.pi, 0.0)
    angle = _roots(
        sides, coefficients[:, row], rays[row], (low, high), (excess[row, point], excess[row, after])
    )
    rising = np.where(above[row, point], -1.0, 1.0)
    return row.astype(np.int64), angle, rising, above[:, 0].astype(np.float64)


def _sampled_velocities(sides: Sides, slopes: Reals) -> Reals:
    """Return velocities (row, sample) of slopes (2, row, node) per unit of angle.

    At |D| = 1 without field p' vanishes at infinite rapidity, like e', and their ratio is rounding noise
    where there are no states: the sample before is repeated.
    """
    energy, momentum = slopes @ sides.spread
    empty = np.abs(momentum) < EMPTY * np.abs(momentum).max(axis=-1, keepdims=True)
    velocity = energy / np.where(empty, 1.0, momentum)
    last = np.maximum.accumulate(np.where(empty, 0, np.arange(empty.shape[-1])), axis=-1)
    return np.asarray(np.take_along_axis(velocity, last, axis=-1))


def _velocity(sides: Sides, coefficients: Reals, angles: Reals) -> Reals:
    energy, momentum = sides.value(coefficients, angles)
    return np.asarray(energy / momentum)


def _extrema(sides: Sides, coefficients: Reals, sampled: Reals) -> tuple[Integers, Integers, Reals, Reals]:
    """Return row, nearest sample, angle and velocity of the extrema of rows of samples, by parabolas."""
    step = np.pi / sides.angles.size
    left, right = sampled - np.roll(sampled, 1, axis=1), np.roll(sampled, -1, axis=1) - sampled
    turns = (left * right < 0.0) & (np.minimum(np.abs(left), np.abs(right)) > EXTREMUM_DEPTH)
    row, point = np.nonzero(turns)
    before, after = left[row, point], right[row, point]
    angle = sides.angles[point] + 0.5 * step * (before + after) / (before - after)
    return row, point, angle, _velocity(sides, coefficients[:, row], angle)


def extreme_velocities(sides: Sides, slopes: Reals) -> tuple[float, float]:
    """Return the least and greatest effective velocity of one state, slopes (2, string, node)."""
    per_angle = slopes * sides.model.weights
    sampled = _sampled_velocities(sides, per_angle)
    turned = _extrema(sides, per_angle @ sides.analysis, sampled)[3]
    everything = np.append(sampled.ravel(), turned)
    return float(everything.min()), float(everything.max())


def _roots(
    sides: Sides, coefficients: Reals, rays: Reals, bracket: tuple[Reals, Reals], ends: tuple[Reals, Reals]
) -> Reals:
    """Return the angles of v_eff = ray inside brackets with opposite signs `ends`, shape (row,)."""
    (low, high), (at_low, at_high) = bracket, ends
    middle = 0.5 * (low + high)
    for _ in range(ROOT_STEPS):
        middle = (low * at_high - high * at_low) / (at_high - at_low)
        value = _velocity(sides, coefficients, middle) - rays
        same = (value > 0.0) == (at_high > 0.0)
        # false position keeps one end for ever; halving its value pulls the next point to its side
        low, at_low = np.where(same, low, high), np.where(same, 0.5 * at_low, at_high)
        high, at_high = middle, value
    return np.asarray(middle)
