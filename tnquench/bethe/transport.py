"""Fluctuations, ballistic transport and light cones of equilibrium states, by the model's name.

Covariances lim <Q_a Q_b>_c/L and Drude weights lim_t lim_L <J_a(t) J_b>_c/L of the energy H and of the
charges; beta times a Drude weight is that of linear response. Source: B. Doyon and H. Spohn, SciPost Phys. 3,
039 (2017).
"""

from __future__ import annotations

from collections.abc import Callable, Sequence

import numpy as np

from tnquench.bethe.angles import is_rational
from tnquench.bethe.correlations import covariance_matrix, drude_matrix
from tnquench.bethe.free import ising_modes
from tnquench.bethe.functions import ThermodynamicFunctions, refined_functions
from tnquench.bethe.gapped_model import gapped_model, gapped_state
from tnquench.bethe.gapped_states import gapped_drude, gapped_velocity
from tnquench.bethe.gapped_thermal import gapped_thermal, log_partition
from tnquench.bethe.grid import interpolation_matrix, rapidity_grid
from tnquench.bethe.hubbard_equations import hubbard_equations
from tnquench.bethe.hubbard_state import Fields, solve_state
from tnquench.bethe.hubbard_towers import hubbard_drude
from tnquench.bethe.hubbard_velocities import hubbard_light_cone
from tnquench.bethe.interpolated import interpolate_in_anisotropy
from tnquench.bethe.model import BetheModel, xxz_model
from tnquench.bethe.states import dress, thermal_filling
from tnquench.conventions import Reals

#: Rapidity nodes of successive refinements at |D| < 1.
NODE_LADDER = (32, 48, 72, 108, 162)

#: (strings, nodes) of successive refinements at |D| >= 1.
GAPPED_LADDER = ((8, 48), (16, 64), (32, 96), (64, 128))

#: Convergence at |D| = 1 is algebraic, like strings^-2: more remains than the last movement tells.
GAPPED_SAFETY = 2.0

#: Nodes of successive refinements of the Hubbard chain.
HUBBARD_LADDER = (61, 91, 137, 205)

#: Momenta of free modes.
MOMENTUM_LADDER = (64, 128, 256, 512, 1024, 2048, 4096, 8192)

#: Points between -1 and 1 of the unit variable among which the fastest velocity is sought.
SPEED_POINTS = 2001

#: Error asked, as a fraction of each value or of LEAST_SIZE.
TARGET, LEAST_SIZE = 1e-10, 1e-3

#: Errors of the interpolation in D stop here.
INTERPOLATION_TARGET = 1e-8


def transport(model: str, *, beta: float, **settings: float) -> ThermodynamicFunctions:
    """Return light_cone (the largest speed), covariances and Drude weights per site of an equilibrium state.

    model, settings : as in `thermo`; names are <a>_variance, <a>_<b>_covariance, <a>_drude_weight and
    <a>_<b>_drude_weight, with a, b of energy, spin (S^z) and particle
    The Drude weights of spin (and spin with energy) exist at |D| < 1 only where D is cos(pi p/q) of moderate
    q: as functions of D they are nowhere continuous at zero field. They are left out elsewhere.
    Raises as `thermo`.
    """
    return _TRANSPORT[model](beta=beta, **settings)


def _named(names: Sequence[str], covariance: Reals, drude: Reals) -> dict[str, float]:
    """Return the entries of two symmetric matrices (charge, charge) by name."""
    found = {}
    for row, first in enumerate(names):
        found[f"{first}_variance"] = float(covariance[row, row])
        found[f"{first}_drude_weight"] = float(drude[row, row])
        for column in range(row):
            found[f"{names[column]}_{first}_covariance"] = float(covariance[row, column])
            found[f"{names[column]}_{first}_drude_weight"] = float(drude[row, column])
    return found


def _size(_: str, value: float) -> float:
    return abs(value) + LEAST_SIZE


def _xxz(
    *, beta: float, anisotropy: float, coupling: float = 1.0, field: float = 0.0
) -> ThermodynamicFunctions:
    def strings(value: float) -> Callable[[int], dict[str, float]]:
        return lambda nodes: _gapless(value, coupling, beta, field, nodes)

    if abs(anisotropy) >= 1.0:
        found = refined_functions(
            lambda level: _gapped(anisotropy, coupling, beta, field, *GAPPED_LADDER[level]),
            range(len(GAPPED_LADDER)), _size, target=TARGET,
        )  # fmt: skip
        errors = {name: GAPPED_SAFETY * error for name, error in found.errors.items()}
        return ThermodynamicFunctions(found.values, errors)
    if is_rational(anisotropy):
        return refined_functions(strings(anisotropy), NODE_LADDER, _size, target=TARGET)

    def at_rational(value: float) -> tuple[dict[str, float], dict[str, float]]:
        found = refined_functions(strings(value), NODE_LADDER, _size, target=TARGET)
        return dict(found.values), dict(found.errors)

    smooth = (
        "light_cone",
        "energy_variance",
        "energy_drude_weight",
        "spin_variance",
        "energy_spin_covariance",
    )
    scale = max(coupling, 1.0) ** 4
    between = interpolate_in_anisotropy(
        at_rational, anisotropy, targets=dict.fromkeys(smooth, INTERPOLATION_TARGET * scale)
    )
    return ThermodynamicFunctions(between.values, between.errors)


def _gapless(anisotropy: float, coupling: float, beta: float, field: float, nodes: int) -> dict[str, float]:
    model = xxz_model(anisotropy=anisotropy, coupling=coupling, nodes=nodes)
    state = thermal_filling(model, beta=beta, beta_field=beta * field)
    charges = np.stack([model.energy, -model.charge])
    found = _named(
        ("energy", "spin"),
        covariance_matrix(model, state.filling, charges),
        drude_matrix(model, state.filling, charges),
    )
    return {"light_cone": _largest_speed(model, state.filling), **found}


def _largest_speed(model: BetheModel, filling: Reals) -> float:
    """Return the largest |v_eff| of any string at any rapidity."""
    slopes = dress(model, filling, np.stack([model.energy_derivative, model.momentum_derivative]))
    grid = rapidity_grid(model.table.state_angle, model.nodes)
    # both vanish like 1/cosh^2 at infinite rapidity, where the fastest may sit
    windowed = slopes * np.cosh(grid.rapidities) ** 2
    energy, momentum = windowed @ interpolation_matrix(grid, np.linspace(-1.0, 1.0, SPEED_POINTS)).T
    return _peak(np.abs(energy / momentum))


def _peak(speeds: Reals) -> float:
    """Return the largest of equidistant values (string, point), by a parabola where it lies inside."""
    string, point = np.unravel_index(int(np.argmax(speeds)), speeds.shape)
    row = speeds[string]
    if not 0 < point < row.size - 1:
        return float(row[point])
    rise, bend = row[point + 1] - row[point - 1], 2.0 * row[point] - row[point + 1] - row[point - 1]
    return float(row[point] + (rise**2 / (8.0 * bend) if bend > 0.0 else 0.0))


def _gapped(
    anisotropy: float, coupling: float, beta: float, field: float, strings: int, nodes: int
) -> dict[str, float]:
    model = gapped_model(anisotropy=anisotropy, coupling=coupling, strings=strings, nodes=nodes)
    state = gapped_state(model, beta=beta, beta_field=beta * field)
    log_z = log_partition(
        gapped_thermal(
            anisotropy=anisotropy, beta=beta, beta_field=beta * abs(field), coupling=coupling,
            strings=strings, nodes=nodes // 2,
        )
    )  # fmt: skip
    mixed = -log_z.by_beta_field * np.sign(field)
    covariance = np.array([[log_z.by_beta_beta, mixed], [mixed, log_z.by_field_field]])
    found = _named(("energy", "spin"), covariance, gapped_drude(model, state))
    return {"light_cone": _peak(np.abs(gapped_velocity(model, state))), **found}


def _fermion(
    *, beta: float, repulsion: float, hopping: float = 1.0, mu: float = 0.0
) -> ThermodynamicFunctions:
    spins = _xxz(beta=beta, anisotropy=0.5 * repulsion / hopping, coupling=2.0 * hopping, field=mu)
    values, errors = (
        {name.replace("spin", "particle"): value for name, value in table.items()}
        for table in (spins.values, spins.errors)
    )
    return ThermodynamicFunctions(values, errors)


def _ising(*, beta: float, transverse_field: float, coupling: float = 1.0) -> ThermodynamicFunctions:
    def solve(momenta: int) -> dict[str, float]:
        energy, velocity = ising_modes(transverse_field=transverse_field, coupling=coupling, momenta=momenta)
        variance = 0.25 / np.cosh(0.5 * beta * energy) ** 2
        return {
            "light_cone": 2.0 * min(coupling, abs(transverse_field)),
            "energy_variance": float(np.mean(variance * energy**2)),
            "energy_drude_weight": float(np.mean(variance * (energy * velocity) ** 2)),
        }

    return refined_functions(solve, MOMENTUM_LADDER, _size, target=TARGET)


def _hubbard(
    *, beta: float, repulsion: float, hopping: float = 1.0, mu: float = 0.0, field: float = 0.0
) -> ThermodynamicFunctions:
    point = {"beta": beta, "repulsion": repulsion, "hopping": hopping, "mu": mu, "field": field}
    drude, drude_errors = hubbard_drude(**point)
    speed, speed_error = hubbard_light_cone(**point)
    attractive = repulsion < 0.0
    spin, charge = (beta * mu, 0.5 * beta * field) if attractive else (0.5 * beta * field, beta * mu)
    order = [0, 2, 1] if attractive else [0, 1, 2]
    units = np.array([-hopping, 0.5, 1.0])  # beta couples to -H
    names = ("energy", "spin", "particle")

    def solve(nodes: int) -> dict[str, float]:
        equations = hubbard_equations(0.25 * abs(repulsion) / hopping, nodes=nodes)
        state = solve_state(equations, Fields(beta * hopping, spin, charge))
        return _named(names, state.covariance[np.ix_(order, order)] * np.outer(units, units), drude)

    found = refined_functions(solve, HUBBARD_LADDER, _size, target=TARGET)
    claimed = _named(names, np.zeros((3, 3)), drude_errors)
    errors = {name: error + claimed[name] for name, error in found.errors.items()}
    return ThermodynamicFunctions(
        {"light_cone": speed, **found.values}, {"light_cone": speed_error, **errors}
    )


_TRANSPORT: dict[str, Callable[..., ThermodynamicFunctions]] = {
    "xxz": _xxz,
    "ising": _ising,
    "fermion": _fermion,
    "hubbard": _hubbard,
}
