"""Smooth profiles at Euler scale: filling functions carried along their characteristics, without time steps.

A filling keeps its value along dx/dt = v_eff, so theta(x, t) = theta_0(u), where the origin u(x, t) of the
characteristic conserves the number of states to its left: with P(x, t) the integral of p'_dressed from a flat
left end to x, P(u, 0) = P(x, t) - t e'_dressed(left end). In x this is a Volterra equation, solved by
iteration at each time on its own. Source: B. Doyon, H. Spohn and T. Yoshimura, Nucl. Phys. B 926, 570 (2018).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from tnquench.conventions import Reals
from tnquench.errors import ConvergenceError
from tnquench.hydro.counting import SPLINE_DEGREE, StateCount, cumulative_integral, state_count
from tnquench.hydro.crossings import velocities
from tnquench.hydro.mesh import RapidityMesh, Reference, averages, redress, reference_state
from tnquench.hydro.thermal_states import ThermalStates
from tnquench.hydro.unfolding import UnfoldedProfile

#: Positions whose fillings are held in memory together.
POSITIONS_TOGETHER = 32

#: Largest change of an origin u, in lattice spacings, at which a time counts as solved.
ORIGIN_TARGET = 1e-10

#: Largest change of a dressed derivative, relative to the largest one, at which a state counts as solved.
CHANGE_TARGET = 1e-12

ITERATIONS = 200


@dataclass(frozen=True, eq=False)
class Medium:
    """What fillings are made of: mesh, profile, its thermal states, and a state to dress them around."""

    mesh: RapidityMesh
    states: ThermalStates
    profile: UnfoldedProfile
    reference: Reference

    def dressed(self, origins: Reals, slopes: Reals) -> tuple[Reals, float]:
        """Return one iterate of the dressed slopes, and its change relative to their largest value.

        origins : (position, string, point) where each quasiparticle was at t = 0
        slopes  : (position, 2, string, node) e', p' over the window
        """
        improved = np.empty(slopes.shape)
        for rows in _batches(slopes.shape[0]):
            change = self._filling(origins[rows]) - self.reference.filling
            improved[rows] = redress(self.mesh, self.reference, change=change, slopes=slopes[rows])
        return improved, float(np.max(np.abs(improved - slopes)) / np.max(np.abs(improved)))

    def averages(self, origins: Reals, slopes: Reals) -> Reals:
        """Return averages (position, observable)."""
        parts = [averages(self.mesh, self._filling(origins[r]), slopes[r]) for r in _batches(slopes.shape[0])]
        return np.concatenate(parts)

    def _filling(self, origins: Reals) -> Reals:
        return self.states.filling(*self.profile.parameters(origins))


def _batches(count: int) -> list[slice]:
    return [slice(begin, begin + POSITIONS_TOGETHER) for begin in range(0, count, POSITIONS_TOGETHER)]


@dataclass(frozen=True, eq=False)
class Moment:
    """One time: origins (position, string, point) and dressed slopes (position, 2, string, node)."""

    time: float
    origins: Reals
    slopes: Reals


@dataclass(frozen=True, eq=False)
class Flow:
    """Everything about a profile that does not depend on time.

    positions : (position,) equidistant from a left end that stays flat until the last time, up to the right
                wall; `start` is their state at t = 0
    integral  : (position, position) cumulative integral
    count     : states from the left at t = 0, wherever a characteristic can come from, on the rapidity mesh
    """

    medium: Medium
    positions: Reals
    integral: Reals
    start: Moment
    count: StateCount


def prepare_flow(
    mesh: RapidityMesh,
    states: ThermalStates,
    profile: UnfoldedProfile,
    *,
    spacing: float,
    light_travel: float,
) -> Flow:
    """Return the flow on positions at most `spacing` apart, with its state at t = 0 solved.

    light_travel : how far light can travel until the last time
    """
    steps = int(np.ceil((2.0 * profile.edge + light_travel) / spacing))
    positions = np.linspace(-profile.edge - light_travel, profile.edge, steps + 1)
    kept = min(int(np.searchsorted(positions, profile.wall)) + SPLINE_DEGREE, positions.size)
    reference = reference_state(mesh, states.middle())
    medium = Medium(mesh, states, profile, reference)
    start = local_equilibrium(medium, positions)
    count = state_count(positions, start.slopes[:, 1] @ mesh.spread)
    inside = Moment(0.0, start.origins[:kept], start.slopes[:kept])
    return Flow(medium, positions[:kept], cumulative_integral(positions[:kept]), inside, count)


def local_equilibrium(medium: Medium, positions: Reals) -> Moment:
    """Return the state at t = 0 of any positions (position,)."""
    origins = np.tile(positions[:, None, None], (1, *medium.mesh.shape))
    slopes, change = np.repeat(medium.reference.slopes[None], positions.size, axis=0), np.inf
    for _ in range(ITERATIONS):
        slopes, change = medium.dressed(origins, slopes)
        if change < CHANGE_TARGET:
            return Moment(0.0, origins, slopes)
    what = f"initial profile at D = {medium.mesh.model.anisotropy:.6g}"
    raise ConvergenceError(what, residual=change)


def flow_to(flow: Flow, time: float, *, earlier: Moment) -> Moment:
    """Return the state of every position at `time`.

    earlier : the state at an earlier time, from which the iteration starts
    Raises ConvergenceError with the largest change of an origin, in lattice spacings.
    """
    slopes, positions = earlier.slopes, flow.positions[:, None, None]
    if earlier.time == 0.0:
        origins = positions - time * velocities(flow.medium.mesh, slopes)
    else:
        origins = positions + (earlier.origins - positions) * time / earlier.time
    entered = time * flow.start.slopes[0, 0]
    shift = np.inf
    for _ in range(ITERATIONS):
        slopes, change = flow.medium.dressed(origins, slopes)
        if shift < ORIGIN_TARGET and change < CHANGE_TARGET:
            return Moment(time, origins, slopes)
        counted = np.tensordot(flow.integral, slopes[:, 1], axes=1) - entered
        shift = _move(flow, origins, counted)
    what = f"characteristics at D = {flow.medium.mesh.model.anisotropy:.6g}, t = {time:g}"
    raise ConvergenceError(what, residual=shift)


def _move(flow: Flow, origins: Reals, counted: Reals) -> float:
    """Move origins, in place, by Newton's step to where P at t = 0 is `counted` (position, string, node).

    Returns the largest move, in lattice spacings.
    """
    largest = 0.0
    for rows in _batches(counted.shape[0]):
        before, density = flow.count.at(origins[rows])
        step = (counted[rows] @ flow.medium.mesh.spread - before) / density
        origins[rows] += step
        largest = max(largest, float(np.max(np.abs(step))))
    return largest
