"""Interpolation of a sampled field between its samples, with an estimate of its error at every point.

Local polynomials through the nearest samples: of degree 7 for the value, of degree 5 beside it. Their
difference estimates the error of the lower one, so that the higher one, which is used, is claimed to be no
better. A difference vanishes by chance where the error does not; hence the claim at a point is the largest
difference found in the surrounding cells, scaled down only towards a sample, where interpolation is exact.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.ndimage import maximum_filter1d

from tnquench.conventions import Integers, Reals

#: Samples in the stencil of the value, and of the lower order beside it.
HIGH, LOW = 8, 6
#: The difference of the two orders is claimed this many times: at sharp features the higher is hardly better.
SAFETY = 1.5
#: A field is lost on every second sample if these miss the others by this part of all that it does nearby.
UNRESOLVED = 0.3
#: Where in a cell the orders are compared.
PARTS = (0.25, 0.5, 0.75)
#: A point this close to a sample, in spacings of the samples, is the sample.
MATCHES = 1e-9
#: Points handled at once, so that memory stays small.
BLOCK = 50_000


@dataclass(frozen=True)
class Interpolated:
    """A field at scattered points, each array (point,).

    values : interpolated; error : the samples' own error carried over; added : error of the interpolation
    exact  : the point is a sample in time and place, nothing was interpolated
    """

    values: Reals
    error: Reals
    added: Reals
    exact: np.ndarray


@dataclass(frozen=True)
class _Stencil:
    """Weights (point, sample of the stencil) of the samples from `first` (point,) on."""

    first: Integers
    weights: Reals

    @property
    def indices(self) -> Integers:
        """Indices of the samples, shape (point, sample of the stencil)."""
        return self.first[:, None] + np.arange(self.weights.shape[1])


def interpolate(
    field: Reals, error: Reals | None, *, times: Reals, positions: Reals, at_times: Reals, at_positions: Reals
) -> Interpolated:
    """Return a field (time, place) and its errors at scattered points.

    field, error : (time, place), sampled at times (time,) and positions (place,), both increasing; no error
    means none
    at_times, at_positions : (point,), inside the range of the samples
    """
    size = at_times.size
    values, carried = np.empty(size), np.zeros(size)
    for start in range(0, size, BLOCK):
        block = slice(start, start + BLOCK)
        early, near = stencil(times, at_times[block], HIGH), stencil(positions, at_positions[block], HIGH)
        values[block] = _applied(field, early, near)
        if error is not None:
            carried[block] = _carried(error, times, positions, at_times[block], at_positions[block])
    added = _between(field, times, at_times, positions, at_positions)
    added += _between(field.T, positions, at_positions, times, at_times)
    exact = _is_sample(times, at_times) & _is_sample(positions, at_positions)
    return Interpolated(values, carried, np.where(exact, 0.0, added), exact)


def stencil(nodes: Reals, at: Reals, size: int) -> _Stencil:
    """Return the weights of Lagrange's polynomial through the nearest `size` samples at each point.

    nodes : (node,), increasing; at : (point,); fewer nodes than `size` are all used
    """
    size = min(size, nodes.size)
    cell = np.clip(np.searchsorted(nodes, at, side="right") - 1, 0, max(nodes.size - 2, 0))
    first = np.clip(cell - (size // 2 - 1), 0, nodes.size - size)
    local = nodes[first[:, None] + np.arange(size)]
    weights = np.ones((at.size, size))
    for node in range(size):
        for other in (other for other in range(size) if other != node):
            weights[:, node] *= (at - local[:, other]) / (local[:, node] - local[:, other])
    nearest = np.argmin(np.abs(local - at[:, None]), axis=1)
    sample = _is_sample(nodes, at)
    weights[sample] = 0.0
    weights[sample, nearest[sample]] = 1.0
    return _Stencil(first, weights)


def _steepness(field: Reals, nodes: Reals, part: float) -> Reals:
    """Return the difference of the two orders in every cell, (cell, other), in units of the node polynomial.

    field : (node, other); part : where in the cell, as a fraction of it
    """
    at = nodes[:-1] + part * np.diff(nodes)
    high = stencil(nodes, at, HIGH)
    low = stencil(nodes, at, max(1, min(LOW, high.weights.shape[1] - 2)))
    difference = np.abs(
        np.einsum("ca,cao->co", high.weights, field[high.indices])
        - np.einsum("ca,cao->co", low.weights, field[low.indices])
    )
    return np.asarray(difference / _node_polynomial(nodes, at)[:, None])


def _unseen(field: Reals, nodes: Reals) -> Reals:
    """Return by how much every second sample misses the others, (cell, other), where that is UNRESOLVED of
    what the field does there at all; zero elsewhere. Two orders may agree on a field that alternates."""
    missed = np.zeros(field.shape)
    for kept, left in ((slice(0, None, 2), slice(1, None, 2)), (slice(1, None, 2), slice(0, None, 2))):
        if nodes[kept].size > 1:
            found = stencil(nodes[kept], nodes[left], LOW)
            near = field[kept][found.indices]
            gap = np.abs(field[left] - np.einsum("ca,cao->co", found.weights, near))
            around = np.concatenate([near, field[left][:, None]], axis=1)
            inside = (nodes[left] > nodes[kept][0]) & (nodes[left] < nodes[kept][-1])
            lost = inside[:, None] & (gap > UNRESOLVED * np.ptp(around, axis=1))
            missed[left] = np.where(lost, gap, 0.0)
    return np.asarray(np.maximum(missed[1:], missed[:-1]))


def _node_polynomial(nodes: Reals, at: Reals) -> Reals:
    """Return the product of the distances to all nodes of the lower order's stencil, (point,): to leading
    order its error is proportional to this."""
    return np.asarray(np.prod(np.abs(at[:, None] - nodes[stencil(nodes, at, LOW).indices]), axis=1))


def _is_sample(nodes: Reals, at: Reals) -> np.ndarray:
    spacing = float(np.min(np.diff(nodes), initial=np.inf)) if nodes.size > 1 else 1.0
    above = np.clip(np.searchsorted(nodes, at), 0, nodes.size - 1)
    gap = np.minimum(np.abs(nodes[above] - at), np.abs(nodes[np.maximum(above - 1, 0)] - at))
    return np.asarray(gap <= MATCHES * spacing)


def _carried(error: Reals, times: Reals, positions: Reals, at_times: Reals, at_positions: Reals) -> Reals:
    """Return the samples' error at the points: what the weights make of independent errors, and no less than
    the error of the samples beside, which errors that vary slowly would be."""
    early, near = stencil(times, at_times, HIGH), stencil(positions, at_positions, HIGH)
    squares = _applied(
        error**2, _Stencil(early.first, early.weights**2), _Stencil(near.first, near.weights**2)
    )
    beside = _applied(error, stencil(times, at_times, 2), stencil(positions, at_positions, 2))
    return np.asarray(np.maximum(np.sqrt(squares), beside))


def _applied(field: Reals, early: _Stencil, near: _Stencil) -> Reals:
    chosen = field[early.indices[:, :, None], near.indices[:, None, :]]
    return np.asarray(np.einsum("pa,pb,pab->p", early.weights, near.weights, chosen))


def _between(field: Reals, nodes: Reals, at: Reals, others: Reals, at_others: Reals) -> Reals:
    """Return the error of interpolating along the first axis of a field (node, other) at each point.

    SAFETY times the largest difference of the two orders in the cell of the point and its two neighbours and
    among the nearest three of the other axis, scaled as the lower order's error varies inside a cell.
    """
    if nodes.size < 2:
        return np.zeros(at.size)
    unseen = _unseen(field, nodes) / _node_polynomial(nodes, 0.5 * (nodes[1:] + nodes[:-1]))[:, None]
    steepness = np.max([unseen, *(_steepness(field, nodes, part) for part in PARTS)], axis=0)
    largest = maximum_filter1d(steepness, 3, axis=0, mode="nearest")
    largest = maximum_filter1d(largest, 3, axis=1, mode="nearest")
    cell = np.clip(np.searchsorted(nodes, at, side="right") - 1, 0, nodes.size - 2)
    other = np.clip(np.searchsorted(others, at_others), 1, max(others.size - 1, 1))
    right = np.minimum(other, others.size - 1)
    nearest = np.where(at_others - others[other - 1] < others[right] - at_others, other - 1, right)
    return np.asarray(
        np.where(_is_sample(nodes, at), 0.0, SAFETY * _node_polynomial(nodes, at) * largest[cell, nearest])
    )
