"""Does a candidate conserve what the chain conserves? A check on the candidate alone, without the reference.

Two forms of the continuity equation dq/dt + dJ/dx = 0: the total of the density over the candidate's places
against what its current carries through the ends, and the equation itself at every inner point. Each is
compared with its own discretisation error, taken as the change when every second point is left out (for rules
of second order this is three times the error of the finer one).
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from tnquench.conventions import CURRENTS, Reals
from tnquench.judge.deviations import rms
from tnquench.judge.points import Points

#: Fewer times or places than this cannot be thinned out.
LEAST = 5
#: A violation below this fraction of the density's size is rounding of the candidate's numbers.
ROUNDED = 1e-6


@dataclass(frozen=True)
class Check:
    """One form of the continuity equation: largest violation, what discretisation may account for, verdict.

    violation, tolerance : for the total at the worst time, in units of the total; for the equation root mean
    squares over the inner points, in units of density over time
    scale : size of what is balanced: how much of the density moved at all, or rms of dq/dt
    """

    violation: float
    tolerance: float
    scale: float

    @property
    def holds(self) -> bool:
        """Whether discretisation accounts for the violation."""
        return self.violation <= self.tolerance


@dataclass(frozen=True)
class Conservation:
    """What a candidate's numbers say about the conservation of one density; None where it cannot be checked.

    total : its sum against the fluxes through the ends; local : the continuity equation inside
    reason : why something was not checked, empty where all was
    """

    name: str
    total: Check | None
    local: Check | None
    reason: str = ""


@dataclass(frozen=True)
class _Grid:
    """Values (time, place) on a full grid of times after the start."""

    times: Reals
    positions: Reals
    values: Reals


def check_conservation(fields: Mapping[str, Points]) -> tuple[Conservation, ...]:
    """Return the check of each density that a candidate gives, from its own points and currents."""
    return tuple(
        _check(density, fields[density], fields.get(current))
        for density, current in CURRENTS.items()
        if density in fields and len(fields[density])
    )


def _check(name: str, density: Points, current: Points | None) -> Conservation:
    grid = _grid(density)
    if grid is None:
        return Conservation(name, None, None, "its points are no grid of at least 5 times and 5 places")
    flow = None if current is None else _grid(current)
    if flow is not None and not np.array_equal(flow.times, grid.times):
        flow = None
    total = _total(grid, flow)
    if flow is None:
        given = current is not None
        missing = "its current stands at other times or on no grid" if given else "its current is not given"
        return Conservation(name, total, None, missing)
    local = _local(grid, flow)
    reason = "" if local else "density and current stand at places that do not match"
    return Conservation(name, total, local, reason)


def _grid(points: Points) -> _Grid | None:
    """Return points as a grid of times after the start and places; None where they are none, or too few."""
    points = points.chosen(points.times > 0)
    times, row = np.unique(points.times, return_inverse=True)
    positions, column = np.unique(points.positions, return_inverse=True)
    few = times.size < LEAST or positions.size < LEAST
    if few or times.size * positions.size != len(points):
        return None
    values = np.empty((times.size, positions.size))
    values[row, column] = points.values
    return _Grid(times, positions, values)


def _total(grid: _Grid, flow: _Grid | None) -> Check | None:
    """Compare the change of the total with the fluxes through the ends.

    Without a current only a density that stands still at both ends can be judged: nothing flows there.
    """
    if flow is not None:
        grid = _within(grid, flow)
        if grid.positions.size < LEAST:
            return None
        through = _through_ends(grid, flow)
    elif _still(grid.values[:, [0, -1]]):
        through = np.zeros((2, grid.times.size))
    else:
        return None
    moved = _integral(np.abs(grid.values - grid.values[0]), grid.positions, 1)
    size = ROUNDED * float(np.max(np.abs(grid.values)) * np.ptp(grid.positions))
    totals = np.stack([_integral(grid.values, grid.positions, stride) for stride in (1, 2)])
    balance = totals - totals[:, :1] - through
    tolerance = np.abs(balance[0] - balance[1]).max() + size
    return Check(float(np.abs(balance[0]).max()), float(tolerance), float(moved.max()))


def _still(edges: Reals) -> bool:
    return bool(np.max(np.abs(edges - edges[0])) <= ROUNDED * max(float(np.max(np.abs(edges))), 1e-12))


def _within(grid: _Grid, flow: _Grid) -> _Grid:
    """Return the part of the density's grid that the current's places enclose."""
    inside = (grid.positions >= flow.positions[0]) & (grid.positions <= flow.positions[-1])
    return _Grid(grid.times, grid.positions[inside], grid.values[:, inside])


def _through_ends(grid: _Grid, flow: _Grid) -> Reals:
    """Return what came in through the ends since the first time, by all and by every second sample,
    (2, time)."""
    ends = grid.positions[[0, -1]]
    current = np.stack([np.interp(ends, flow.positions, row) for row in flow.values])
    net = current[:, 0] - current[:, 1]
    step = np.diff(grid.times)
    fine = np.concatenate([[0.0], np.cumsum(0.5 * step * (net[1:] + net[:-1]))])
    coarse_net = np.interp(grid.times, grid.times[::2], net[::2])
    coarse = np.concatenate([[0.0], np.cumsum(0.5 * step * (coarse_net[1:] + coarse_net[:-1]))])
    return np.stack([fine, coarse])


def _integral(values: Reals, positions: Reals, stride: int) -> Reals:
    """Return the trapezoidal sum over every `stride`th place, the last among them, (time,)."""
    chosen = np.unique(np.append(np.arange(0, positions.size, stride), positions.size - 1))
    return np.asarray(np.trapezoid(values[:, chosen], positions[chosen], axis=1))


def _local(grid: _Grid, flow: _Grid) -> Check | None:
    """Compare dq/dt with minus the divergence of the current at the inner points."""
    divergence = [_divergence(grid, flow, stride) for stride in (1, 2)]
    if divergence[0] is None or divergence[1] is None:
        return None
    change = [_slope(grid.values, grid.times, stride)[:, 2:-2] for stride in (1, 2)]
    fine, coarse = divergence[0][2:-2], divergence[1][2:-2]
    uncertain = np.abs(change[0] - change[1]) + np.abs(fine - coarse)
    return Check(
        violation=rms(change[0] + fine),
        tolerance=rms(uncertain) + ROUNDED * float(np.max(np.abs(grid.values))),
        scale=rms(change[0]),
    )


def _divergence(grid: _Grid, flow: _Grid, stride: int) -> Reals | None:
    """Return dJ/dx at the inner places of the density, (time, place - 4): from the same places, or from those
    half-way between them, where a lattice has its currents; None where the places are others."""
    x, at = grid.positions, flow.positions
    if at.shape == x.shape and np.allclose(at, x, atol=1e-9):
        return _slope(flow.values.T, x, stride).T
    halves = 0.5 * (x[1:] + x[:-1])
    index = np.clip(np.searchsorted(at, halves - 1e-9), 0, at.size - 1)
    if not np.allclose(at[index], halves, atol=1e-9):
        return None
    between = flow.values[:, index]
    reach = stride - 1  # halves j - 1 - reach and j + reach enclose place j
    places = np.arange(2, x.size - 2)
    left, right = places - 1 - reach, places + reach
    return np.asarray((between[:, right] - between[:, left]) / (halves[right] - halves[left]))


def _slope(values: Reals, at: Reals, stride: int) -> Reals:
    """Return the derivative along the first axis at all but the first and last two places, by the parabola
    through the points `stride` before and after."""
    centre = np.arange(2, at.size - 2)
    before, after = at[centre] - at[centre - stride], at[centre + stride] - at[centre]
    shape = (-1,) + (1,) * (values.ndim - 1)
    left, right = before.reshape(shape), after.reshape(shape)
    rising = (values[centre + stride] - values[centre]) / right
    falling = (values[centre] - values[centre - stride]) / left
    return np.asarray((left * rising + right * falling) / (left + right))
