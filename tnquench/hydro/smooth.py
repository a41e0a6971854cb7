"""Smooth profiles on given places and times: which grids they need, and the flow on them."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import cached_property

import numpy as np

from tnquench.bethe.angles import rational_turn
from tnquench.bethe.model import xxz_model
from tnquench.bethe.states import effective_velocity, thermal_filling
from tnquench.bethe.strings import string_table
from tnquench.conventions import Reals
from tnquench.hydro.characteristics import Flow, flow_to, local_equilibrium, prepare_flow
from tnquench.hydro.counting import resample
from tnquench.hydro.crossings import extreme_velocities
from tnquench.hydro.mesh import OBSERVABLES, rapidity_mesh
from tnquench.hydro.thermal_states import thermal_states
from tnquench.hydro.unfolding import UnfoldedProfile


@dataclass(frozen=True)
class SmoothLevel:
    """One refinement: nodes a string, mesh spacing in crossing angles, fractions of the profile's scale.

    phase   : mesh spacing, in units of the distance in rapidity of characteristics that start one scale apart
              and meet at the last time: fillings vary on that distance
    spacing : distance of positions, in units of the scale
    """

    nodes: int
    mesh_spacing: float
    phase: float
    spacing: float


LEVELS: tuple[SmoothLevel, ...] = (
    SmoothLevel(nodes=28, mesh_spacing=0.11, phase=0.8, spacing=0.22),
    SmoothLevel(nodes=32, mesh_spacing=0.095, phase=0.65, spacing=0.16),
    SmoothLevel(nodes=40, mesh_spacing=0.08, phase=0.5, spacing=0.12),
    SmoothLevel(nodes=56, mesh_spacing=0.065, phase=0.35, spacing=0.08),
)

#: The same at anisotropies between which others are combined, which costs more than coarse grids do; a
#: quarter of the time.
COMBINED_LEVELS: tuple[SmoothLevel, ...] = (
    SmoothLevel(nodes=16, mesh_spacing=0.2, phase=1.5, spacing=0.45),
    SmoothLevel(nodes=20, mesh_spacing=0.16, phase=1.2, spacing=0.36),
    SmoothLevel(nodes=24, mesh_spacing=0.13, phase=1.0, spacing=0.28),
    *LEVELS[1:],
)

#: Distance at which the callers' profiles are sampled for their range and scale, in lattice spacings.
SAMPLE_SPACING = 0.05

#: Half ranges of beta J and of beta_field over which fillings change by most of what they can.
LARGEST_CHANGE = (4.0, 2.0)

#: Largest distance of positions, in lattice spacings.
WIDEST_SPACING = 2.0

#: Least length over which a profile is led to a constant, in lattice spacings.
SHORTEST_APPROACH = 4.0

#: Allowance over the initial profile's extreme velocity for states met later.
VELOCITY_MARGIN = 1.1

#: Nodes that give velocities well enough to choose grids.
SURVEY_NODES = 32


@dataclass(frozen=True, eq=False)
class SmoothStart:
    """A smooth initial profile between walls at plus and minus `wall`, and what grids it needs."""

    anisotropy: float
    coupling: float
    beta: Callable[[Reals], Reals]
    beta_field: Callable[[Reals], Reals]
    wall: float

    @cached_property
    def samples(self) -> Reals:
        """beta and beta_field on a fine grid of positions, (parameter, position)."""
        count = int(np.ceil(2.0 * self.wall / SAMPLE_SPACING)) + 1
        x = np.linspace(-self.wall, self.wall, count)
        return np.stack([np.broadcast_to(each(x), x.shape) for each in (self.beta, self.beta_field)])

    @property
    def ranges(self) -> tuple[tuple[float, float], tuple[float, float]]:
        """(least, greatest) of beta and of beta_field."""
        least, greatest = self.samples.min(axis=1).tolist(), self.samples.max(axis=1).tolist()
        return (least[0], greatest[0]), (least[1], greatest[1])

    @property
    def is_uniform(self) -> bool:
        """Whether both parameters are constant."""
        return all(least == greatest for least, greatest in self.ranges)

    @cached_property
    def scale(self) -> float:
        """Smallest length, half range over steepest slope, of the two parameters; a range counts no more
        than states depend on it: LARGEST_CHANGE."""
        spacing = 2.0 * self.wall / (self.samples.shape[1] - 1)
        steepest = np.abs(np.diff(self.samples, axis=1)).max(axis=1) / spacing
        varying = steepest > 0.0
        change = np.minimum(
            0.5 * np.ptp(self.samples, axis=1), np.divide(LARGEST_CHANGE, (self.coupling, 1.0))
        )
        return float(np.min(change[varying] / steepest[varying]))

    @property
    def finest_angle(self) -> float:
        """The unit of mesh spacings."""
        return string_table(rational_turn(self.anisotropy)).finest_angle

    @cached_property
    def velocity_survey(self) -> tuple[float, float]:
        """Greatest |v_eff| of the corners of the parameter ranges, and its greatest slope in rapidity."""
        model = xxz_model(anisotropy=self.anisotropy, coupling=self.coupling, nodes=SURVEY_NODES)
        fastest = steepest = 0.0
        for beta in self.ranges[0]:
            for field in self.ranges[1]:
                filling = thermal_filling(model, beta=beta, beta_field=field).filling
                velocity = effective_velocity(model, filling)
                fastest = max(fastest, float(np.abs(velocity).max()))
                slopes = np.abs(np.diff(velocity, axis=1)) / np.diff(model.rapidities)
                steepest = max(steepest, float(slopes.max()))
        return fastest, steepest


def initial_light_cone(start: SmoothStart) -> tuple[float, float]:
    """Return the extreme effective velocities (negative, positive) of the initial profile."""
    flow = _flow(start, LEVELS[0], until=0.0)  # good to 1e-10
    return extreme_velocities(flow.medium.mesh, flow.start.slopes)


def smooth_averages(start: SmoothStart, level: SmoothLevel, times: Reals, places: Reals) -> Reals:
    """Return averages (time, place, observable) of a smooth profile at ascending times."""
    flow = _flow(start, level, until=float(times[-1]))
    moment, result = flow.start, np.empty((times.size, places.size, len(OBSERVABLES)))
    for index, time in enumerate(times):
        if time == 0.0:
            here = local_equilibrium(flow.medium, places)
            result[index] = flow.medium.averages(here.origins, here.slopes)
        else:
            moment = flow_to(flow, float(time), earlier=moment)
            means = flow.medium.averages(moment.origins, moment.slopes)
            result[index] = resample(flow.positions, means, places)
    return result


def _flow(start: SmoothStart, level: SmoothLevel, *, until: float) -> Flow:
    fastest, steepest = start.velocity_survey
    core_spacing = np.inf
    if until > 0.0:
        meeting = start.scale / (steepest * until)
        core_spacing = level.phase * meeting / start.finest_angle
    mesh = rapidity_mesh(
        anisotropy=start.anisotropy,
        coupling=start.coupling,
        nodes=level.nodes,
        spacing=level.mesh_spacing,
        core_spacing=core_spacing,
    )
    states = thermal_states(mesh, *start.samples)
    light_travel = VELOCITY_MARGIN * fastest * until
    approach = max(SHORTEST_APPROACH, 2.0 * start.scale)
    profile = UnfoldedProfile(start.beta, start.beta_field, start.wall, start.wall + light_travel, approach)
    step = min(WIDEST_SPACING, level.spacing * start.scale)
    return prepare_flow(mesh, states, profile, spacing=step, light_travel=light_travel)
