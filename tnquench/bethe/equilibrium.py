"""Equilibrium thermodynamics of the XXZ chain, every number with an error measured by refinement."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import asdict, dataclass

import numpy as np

from tnquench.bethe.correlations import covariance_matrix
from tnquench.bethe.free import free_thermodynamics
from tnquench.bethe.model import xxz_model
from tnquench.bethe.states import averages, thermal_filling
from tnquench.bethe.strings import supported_nu

#: Rapidity nodes of the successive refinements, and equidistant momenta of those at D = 0.
NODE_LADDER = (32, 48, 72, 108, 162, 243)
MOMENTUM_LADDER = tuple(2**power for power in range(6, 17))

#: Refinement stops when every error is below this fraction of the value's scale.
ERROR_TARGET = 1e-12

#: Rounding, as a fraction of the value's scale: the smallest error ever claimed (a few times the scatter
#: between fine grids).
ROUNDING = 5e-14

#: The error of the finest resolution is at least this part of its distance from the last but one.
LEAST_RATIO = 0.1

#: Keeps ratios of vanishing movements finite.
TINY = 1e-300

KEYS = ("free_energy", "energy", "entropy", "magnetisation", "specific_heat", "susceptibility")


@dataclass(frozen=True)
class Equilibrium:
    """Thermodynamic functions per site of exp[-beta (H - h S^z)], each with its numerical error.

    Energies in units of the coupling J's unit, energy is that of H (field term left out), entropy in nats,
    specific_heat at fixed field h, susceptibility d magnetisation / d h at fixed beta.
    """

    free_energy: float
    energy: float
    entropy: float
    magnetisation: float
    specific_heat: float
    susceptibility: float
    free_energy_error: float
    energy_error: float
    entropy_error: float
    magnetisation_error: float
    specific_heat_error: float
    susceptibility_error: float

    def as_dict(self) -> dict[str, float]:
        """Return all values and errors by name."""
        return asdict(self)


def equilibrium(*, anisotropy: float, beta: float, field: float = 0.0, coupling: float = 1.0) -> Equilibrium:
    """Return the thermodynamics of exp[-beta (H - h S^z)] at D = plus or minus cos(pi/nu), nu = 2..8.

    anisotropy, coupling : D and J > 0; beta : inverse temperature > 0; field : h, of either sign
    Raises UnsupportedAnisotropy (a ValueError) at other D, ValueError unless beta > 0 and all are finite,
    ConvergenceError if the Bethe ansatz cannot be solved.
    """
    if not (beta > 0.0 and coupling > 0.0 and np.isfinite([beta, field, coupling]).all()):
        given = f"beta = {beta}, field = {field}, coupling = {coupling}"
        message = f"{given}: all must be finite, beta and coupling positive"
        raise ValueError(message)
    nu, size = supported_nu(anisotropy), abs(field)

    def solve(resolution: int) -> dict[str, float]:
        if nu == 2:
            return free_thermodynamics(beta=beta, field=size, coupling=coupling, momenta=resolution)
        return string_thermodynamics(
            anisotropy=anisotropy, beta=beta, field=size, coupling=coupling, nodes=resolution
        )

    scales = {
        "free_energy": coupling + size + 1.0 / beta,
        "energy": coupling,
        "entropy": 1.0 + beta * (coupling + size),
        "magnetisation": 1.0,
    }
    values, errors = _refine(solve, MOMENTUM_LADDER if nu == 2 else NODE_LADDER, scales)
    values["magnetisation"] *= -1.0 if field < 0.0 else 1.0
    return Equilibrium(**values, **errors)


def string_thermodynamics(
    *, anisotropy: float, beta: float, field: float, coupling: float, nodes: int
) -> dict[str, float]:
    """Return the thermodynamic functions from strings on `nodes` rapidities each; keys as in `Equilibrium`.

    Derivatives are linear responses: c = beta^2 <(H - h S^z)^2>_c and chi = beta <S^z S^z>_c per site.
    """
    model = xxz_model(anisotropy=anisotropy, coupling=coupling, nodes=nodes)
    state = thermal_filling(model, beta=beta, beta_field=beta * field)
    means = averages(model, state.filling)
    charges = np.stack([model.energy + field * model.charge, -model.charge])
    covariance = covariance_matrix(model, state.filling, charges)
    return {
        "free_energy": state.free_energy,
        "energy": means.energy_density,
        "entropy": state.log_partition + beta * (means.energy_density - field * means.charge_density),
        "magnetisation": means.charge_density,
        "specific_heat": float(beta**2 * covariance[0, 0]),
        "susceptibility": float(beta * covariance[1, 1]),
    }


def _refine(
    solve: Callable[[int], dict[str, float]], ladder: tuple[int, ...], scales: dict[str, float]
) -> tuple[dict[str, float], dict[str, float]]:
    """Return values and errors, refining until the errors are small.

    Convergence is exponential, so the last movement is the error of the last resolution but one. The error of
    the last is smaller by the slowest observed ratio of movements; less than LEAST_RATIO of the movement is
    never claimed, nor less than rounding.
    """
    values, moved = solve(ladder[0]), dict.fromkeys(KEYS, np.inf)
    errors = dict.fromkeys(KEYS, np.inf)
    for resolution in ladder[1:]:
        coarse, values, before = values, solve(resolution), moved
        moved = {key: abs(values[key] - coarse[key]) for key in KEYS}
        sizes = {key: scales.get(key, abs(values[key])) for key in KEYS}
        ratio = max(moved[key] / max(before[key], ROUNDING * sizes[key], TINY) for key in KEYS)
        ratio = min(1.0, max(ratio, LEAST_RATIO))
        errors = {key: ratio * moved[key] + ROUNDING * sizes[key] for key in KEYS}
        if all(errors[key] <= ERROR_TARGET * sizes[key] for key in KEYS):
            break
    return values, {f"{key}_error": errors[key] for key in KEYS}
