"""Equilibrium thermodynamics of the XXZ chain, every number with an error measured by refinement."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from tnquench.bethe.angles import anisotropy_of, is_rational, rational_turn, require_gapless
from tnquench.bethe.free import free_thermodynamics
from tnquench.bethe.functions import ERROR_TARGET, refined_functions
from tnquench.bethe.gapped import gapped_equilibrium
from tnquench.bethe.grid import RapidityGrid, interpolate, rapidity_grid
from tnquench.bethe.interpolated import interpolate_in_anisotropy
from tnquench.bethe.model import BetheModel, xxz_model
from tnquench.bethe.states import ThermalState, dress, thermal_filling
from tnquench.bethe.thermodynamics import KEYS, Equilibrium
from tnquench.conventions import Reals
from tnquench.errors import ConvergenceError

__all__ = ["KEYS", "Equilibrium", "equilibrium", "string_thermodynamics"]

#: Rapidity nodes of the successive refinements, and equidistant momenta of those at D = 0.
NODE_LADDER = (32, 48, 72, 108, 162, 243)
MOMENTUM_LADDER = tuple(2**power for power in range(6, 17))

#: Interpolation between anisotropies stops at this fraction.
INTERPOLATION_TARGET = 1e-8

#: ... and the values that it goes through are refined to this one.
NODE_TARGET = 1e-10

#: Relative change of a value with D that is allowed for where D is rounded to a rational anisotropy.
OFFSET_COST = 3.0


def equilibrium(*, anisotropy: float, beta: float, field: float = 0.0, coupling: float = 1.0) -> Equilibrium:
    """Return the thermodynamics of exp[-beta (H - h S^z)] at any anisotropy D.

    anisotropy, coupling : D and J > 0; beta : inverse temperature > 0; field : h, of either sign
    At D = plus or minus cos(pi p/q) of moderate string tables the strings are exact; elsewhere in |D| < 1 it
    is interpolated between such anisotropies, near |D| = 1 also from beyond it, and the errors contain what
    that costs. |D| >= 1 has equations of its own. Raises ValueError unless beta > 0 and all are finite,
    ConvergenceError if the Bethe ansatz cannot be solved.
    """
    if not (beta > 0.0 and coupling > 0.0 and np.isfinite([beta, field, coupling]).all()):
        given = f"beta = {beta}, field = {field}, coupling = {coupling}"
        message = f"{given}: all must be finite, beta and coupling positive"
        raise ValueError(message)
    if abs(anisotropy) >= 1.0:
        return gapped_equilibrium(anisotropy=anisotropy, beta=beta, field=field, coupling=coupling)
    require_gapless(anisotropy)
    values, errors = _gapless(anisotropy, beta=beta, field=abs(field), coupling=coupling)
    values["magnetisation"] *= -1.0 if field < 0.0 else 1.0
    return Equilibrium(**values, **{f"{key}_error": errors[key] for key in KEYS})


def _gapless(
    anisotropy: float, *, beta: float, field: float, coupling: float
) -> tuple[dict[str, float], dict[str, float]]:
    """Return values and errors by name at -1 < D < 1, field >= 0."""
    scales = {
        "free_energy": coupling + field + 1.0 / beta,
        "energy": coupling,
        "entropy": 1.0 + beta * (coupling + field),
        "magnetisation": 1.0,
    }

    def solve_free(momenta: int) -> dict[str, float]:
        return free_thermodynamics(beta=beta, field=field, coupling=coupling, momenta=momenta)

    def refined(
        solve: Callable[[int], dict[str, float]], ladder: tuple[int, ...], target: float
    ) -> tuple[dict[str, float], dict[str, float]]:
        found = refined_functions(
            solve, ladder, lambda key, value: scales.get(key, abs(value)), target=target
        )
        return dict(found.values), dict(found.errors)

    def solved(value: float, target: float = NODE_TARGET) -> tuple[dict[str, float], dict[str, float]]:
        if abs(value) >= 1.0:
            return _gapped(value, beta=beta, field=field, coupling=coupling)
        if value == 0.0:
            return refined(solve_free, MOMENTUM_LADDER, ERROR_TARGET)
        solve = _string_solver(anisotropy=value, beta=beta, field=field, coupling=coupling)
        return refined(solve, NODE_LADDER, target)

    if is_rational(anisotropy):
        exact = anisotropy_of(rational_turn(anisotropy), negative=anisotropy < 0.0)
        values, errors = solved(exact, ERROR_TARGET)
        offset = OFFSET_COST * abs(anisotropy - exact)
        return values, {key: errors[key] + offset * scales.get(key, abs(values[key])) for key in KEYS}
    targets = dict.fromkeys(KEYS, INTERPOLATION_TARGET) | {
        key: INTERPOLATION_TARGET * scale for key, scale in scales.items()
    }
    found = interpolate_in_anisotropy(solved, anisotropy, targets=targets)
    return found.values, found.errors


def _gapped(
    anisotropy: float, *, beta: float, field: float, coupling: float
) -> tuple[dict[str, float], dict[str, float]]:
    """Return values and errors by name at |D| >= 1; a large error is no failure of a single node."""
    try:
        found = gapped_equilibrium(
            anisotropy=anisotropy, beta=beta, field=field, coupling=coupling, accuracy=NODE_TARGET
        )
    except ConvergenceError as failure:
        if not isinstance(failure.best, Equilibrium):
            raise
        found = failure.best
    numbers = found.as_dict()
    return {key: numbers[key] for key in KEYS}, {key: numbers[f"{key}_error"] for key in KEYS}


def string_thermodynamics(
    *, anisotropy: float, beta: float, field: float, coupling: float, nodes: int
) -> dict[str, float]:
    """Return the thermodynamic functions from strings on `nodes` rapidities each; keys as in `Equilibrium`.

    Derivatives are linear responses: c = beta^2 <(H - h S^z)^2>_c and chi = beta <S^z S^z>_c per site.
    """
    model = xxz_model(anisotropy=anisotropy, coupling=coupling, nodes=nodes)
    state = thermal_filling(model, beta=beta, beta_field=beta * field)
    return _functions(model, state, beta=beta, field=field)


def _functions(model: BetheModel, state: ThermalState, *, beta: float, field: float) -> dict[str, float]:
    grand = model.energy + field * model.charge
    bare = np.stack([model.momentum_derivative, grand, -model.charge])
    momentum, *dressed = dress(model, state.filling, bare)
    density = model.signs[:, None] * state.filling * momentum / (2.0 * np.pi) * model.weights
    energy = 0.25 * model.coupling * model.anisotropy + float(np.sum(model.energy * density))
    magnetisation = 0.5 - float(np.sum(model.charge * density))
    fluctuations = [float(np.sum(density * (1.0 - state.filling) * each**2)) for each in dressed]
    return {
        "free_energy": state.free_energy,
        "energy": energy,
        "entropy": state.log_partition + beta * (energy - field * magnetisation),
        "magnetisation": magnetisation,
        "specific_heat": beta**2 * fluctuations[0],
        "susceptibility": beta * fluctuations[1],
    }


def _string_solver(
    *, anisotropy: float, beta: float, field: float, coupling: float
) -> Callable[[int], dict[str, float]]:
    """Return `string_thermodynamics` as a function of `nodes`, each solution started from the one before."""
    latest: list[tuple[RapidityGrid, Reals]] = []

    def solve(nodes: int) -> dict[str, float]:
        model = xxz_model(anisotropy=anisotropy, coupling=coupling, nodes=nodes)
        start = None
        if latest:
            grid, log_eta = latest.pop()
            start = interpolate(grid, log_eta, model.rapidities)
        state = thermal_filling(model, beta=beta, beta_field=beta * field, start=start)
        latest.append((rapidity_grid(model.table.state_angle, nodes), state.log_eta))
        return _functions(model, state, beta=beta, field=field)

    return solve
