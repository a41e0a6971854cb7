"""Where effective velocities cross a ray, and the quadrature weights of the side on which they exceed it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.special import sici

from tnquench.bethe.grid import interpolation_matrix, unit_of_rapidity
from tnquench.conventions import Integers, Reals
from tnquench.hydro.mesh import RapidityMesh

#: Extrema shallower than this, in units of the velocity, are rounding noise.
EXTREMUM_DEPTH = 1e-12

#: Distance of the points of the second parabola through an extremum, in mesh spacings.
POLISHING = 0.1

#: Steps of false position (Illinois variant); each gains about 40 % in digits, from about two at the start.
ROOT_STEPS = 8


@dataclass(frozen=True)
class Crossings:
    """All points where a velocity equals its ray, one row each.

    row : (crossing,) index ray*strings + string; position : (crossing,) on the mesh in units of its spacing;
    rising : (crossing,) +1 where the velocity grows through the ray with rapidity, else -1
    """

    row: Integers
    position: Reals
    rising: Reals


def velocities(mesh: RapidityMesh, slopes: Reals) -> Reals:
    """Return v_eff = e'_dressed / p'_dressed, (state, string, point), of slopes (state, 2, string, node)."""
    energy, momentum = np.moveaxis(slopes @ mesh.spread, 1, 0)
    return np.asarray(energy / momentum)


def find_crossings(mesh: RapidityMesh, slopes: Reals, rays: Reals) -> tuple[Crossings, Reals]:
    """Return all crossings v_eff = ray of each state, and the side (ray, string) of the leftmost rapidity.

    Extrema between mesh points are sampled too, so that no pair of crossings on both sides of one is missed.
    slopes : (ray, 2, string, node) dressed e', p' of the state on each ray; rays : (ray,) velocities x/t
    """
    sampled = velocities(mesh, slopes).reshape(-1, mesh.rapidities.size)
    positions = np.tile(np.arange(mesh.rapidities.size, dtype=float), (sampled.shape[0], 1))
    row, point, position, velocity = _extrema(mesh, slopes, sampled)
    positions[row, point], sampled[row, point] = position, velocity
    excess = sampled - np.repeat(rays, mesh.model.strings)[:, None]
    above = excess > 0.0
    row, point = np.nonzero(above[:, 1:] != above[:, :-1])
    bracket = positions[row, point], positions[row, point + 1]
    ends = excess[row, point], excess[row, point + 1]
    position = _root(mesh, slopes, rays, row, bracket, ends)
    rising = np.where(above[row, point], -1.0, 1.0)
    return Crossings(row, position, rising), above[:, 0].reshape(-1, mesh.model.strings).astype(float)


def side_weights(mesh: RapidityMesh, crossings: Crossings, leftmost: Reals) -> Reals:
    """Return weights c (ray, string, point) with sum c f = integral of f / spacing over the side v_eff > ray.

    Exact for functions f that their samples determine: the integral of sinc from a cut to infinity is
    1/2 + Si(pi (i - cut)) / pi at mesh point i. Source: F. Stenger, SIAM Review 23, 165 (1981), indefinite
    integration by sinc functions.
    """
    rays, strings = leftmost.shape
    points = np.arange(mesh.rapidities.size)
    weights = np.repeat(leftmost.reshape(-1, 1), points.size, axis=1)
    beyond = 0.5 + sici(np.pi * (points - crossings.position[:, None]))[0] / np.pi
    np.add.at(weights, crossings.row, crossings.rising[:, None] * beyond)
    return weights.reshape(rays, strings, -1)


def extreme_velocities(mesh: RapidityMesh, slopes: Reals) -> tuple[float, float]:
    """Return the least and greatest effective velocity of states with slopes (state, 2, string, node)."""
    sampled = velocities(mesh, slopes).reshape(-1, mesh.rapidities.size)
    everything = np.append(sampled.ravel(), _extrema(mesh, slopes, sampled)[3])
    return float(everything.min()), float(everything.max())


def _extrema(mesh: RapidityMesh, slopes: Reals, samples: Reals) -> tuple[Integers, Integers, Reals, Reals]:
    """Return row, nearest mesh point, position and velocity of the extrema of rows of samples (row, point).

    A parabola through mesh points, then one through points closer by POLISHING.
    """
    change = np.diff(samples, axis=1)
    left, right = change[:, :-1], change[:, 1:]
    row, point = np.nonzero((left * right < 0.0) & (np.minimum(np.abs(left), np.abs(right)) > EXTREMUM_DEPTH))
    left, right = left[row, point], right[row, point]
    position = point + 1 + 0.5 * (left + right) / (left - right)
    below, here, above = (_velocity_at(mesh, slopes, row, position + k * POLISHING) for k in (-1.0, 0.0, 1.0))
    curvature = above - 2.0 * here + below
    bent = np.abs(curvature) > EXTREMUM_DEPTH
    shift = np.where(bent, 0.5 * (below - above) / np.where(bent, curvature, 1.0), 0.0)
    position = position + POLISHING * np.clip(shift, -1.0, 1.0)
    return row, point + 1, position, _velocity_at(mesh, slopes, row, position)


def _velocity_at(mesh: RapidityMesh, slopes: Reals, row: Integers, position: Reals) -> Reals:
    """Return v_eff of the rows ray*strings + string at mesh positions, shape (row,)."""
    ray, string = np.divmod(row, mesh.model.strings)
    units = unit_of_rapidity(mesh.grid, mesh.layout.rapidities(position))
    matrix = interpolation_matrix(mesh.grid, units)
    energy, momentum = (np.einsum("rn,rn->r", slopes[ray, k, string], matrix) for k in (0, 1))
    return np.asarray(energy / momentum)


def _root(
    mesh: RapidityMesh,
    slopes: Reals,
    rays: Reals,
    row: Integers,
    bracket: tuple[Reals, Reals],
    ends: tuple[Reals, Reals],
) -> Reals:
    """Return the positions of v_eff = ray inside brackets of opposite signs `ends`, shape (row,)."""
    (low, high), (at_low, at_high) = bracket, ends
    level = rays[row // mesh.model.strings]
    for _ in range(ROOT_STEPS):
        middle = (low * at_high - high * at_low) / (at_high - at_low)
        value = _velocity_at(mesh, slopes, row, middle) - level
        same = (value > 0.0) == (at_high > 0.0)
        # false position keeps one end for ever; halving its value pulls the next point to its side
        low, at_low = np.where(same, low, high), np.where(same, 0.5 * at_low, at_high)
        high, at_high = middle, value
    return np.asarray(middle)
