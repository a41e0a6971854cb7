"""Filling functions of the thermal states along a profile, as smooth functions of its two parameters."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from tnquench.bethe.states import fermi, thermal_filling
from tnquench.conventions import Reals
from tnquench.hydro.mesh import RapidityMesh

#: (beta, beta_field) of a thermal state exp(-beta H + beta_field S^z).
State = tuple[float, float]

#: Chebyshev coefficients of a filling below this, absolutely, are dropped.
COEFFICIENT_TARGET = 1e-10

#: Numbers of Chebyshev points tried in each parameter.
POINT_COUNTS: tuple[int, ...] = (8, 16, 32, 64, 128)


@dataclass(frozen=True, eq=False)
class ThermalStates:
    """Fillings of exp(-beta H + beta_field S^z) for parameters in a rectangle, by Chebyshev expansion.

    beta_range, field_range : (least, greatest)
    coefficients            : (beta order, field order, string, point)
    """

    beta_range: tuple[float, float]
    field_range: tuple[float, float]
    coefficients: Reals

    def filling(self, beta: Reals, beta_field: Reals) -> Reals:
        """Return fillings (..., string, point) at parameters given for each string and point, same shape."""
        by_field = _unit(beta_field, self.field_range)
        by_beta = _unit(beta, self.beta_range)
        rows = [_clenshaw(row, by_field) for row in self.coefficients]
        return _clenshaw(rows, by_beta)


def thermal_on_mesh(mesh: RapidityMesh, state: State) -> Reals:
    """Return the filling (string, point) of a thermal state (beta, beta_field)."""
    log_eta = thermal_filling(mesh.model, beta=state[0], beta_field=state[1]).log_eta
    return np.asarray(fermi(log_eta @ mesh.spread))


def thermal_states(
    mesh: RapidityMesh, *, beta_range: tuple[float, float], field_range: tuple[float, float]
) -> ThermalStates:
    """Return the thermal states of a rectangle of parameters, to COEFFICIENT_TARGET in the filling."""
    middle = 0.5 * sum(beta_range), 0.5 * sum(field_range)
    orders = (
        _sufficient_points(mesh, beta_range, (middle[1], middle[1])),
        _sufficient_points(mesh, (middle[0], middle[0]), field_range),
    )
    return ThermalStates(beta_range, field_range, _expand(mesh, beta_range, field_range, orders))


def _sufficient_points(
    mesh: RapidityMesh, beta_range: tuple[float, float], field_range: tuple[float, float]
) -> int:
    """Return how many Chebyshev points a parameter needs, the other one held fixed."""
    along_beta = beta_range[0] != beta_range[1]
    if not along_beta and field_range[0] == field_range[1]:
        return 1
    for count in POINT_COUNTS:
        orders = (count, 1) if along_beta else (1, count)
        coefficients = _expand(mesh, beta_range, field_range, orders)
        sizes = np.abs(coefficients).max(axis=(2, 3)).ravel()
        needed = int(np.flatnonzero(sizes > COEFFICIENT_TARGET).max(initial=0)) + 1
        if needed < count - 1:
            return needed + 1
    return POINT_COUNTS[-1]


def _expand(
    mesh: RapidityMesh,
    beta_range: tuple[float, float],
    field_range: tuple[float, float],
    orders: tuple[int, int],
) -> Reals:
    """Return Chebyshev coefficients (beta order, field order, string, point) from as many thermal states."""
    betas, fields = _chebyshev_points(*beta_range, orders[0]), _chebyshev_points(*field_range, orders[1])
    values = np.array([[thermal_on_mesh(mesh, (beta, field)) for field in fields] for beta in betas])
    to_beta, to_field = (_chebyshev_transform(count) for count in orders)
    return np.asarray(np.einsum("ib,jf,bfsp->ijsp", to_beta, to_field, values, optimize=True))


def _chebyshev_points(least: float, greatest: float, count: int) -> Reals:
    angles = np.pi * (np.arange(count) + 0.5) / count
    return np.asarray(0.5 * (least + greatest) + 0.5 * (greatest - least) * np.cos(angles))


def _chebyshev_transform(count: int) -> Reals:
    """Return the (order, point) matrix from values at the Chebyshev roots to coefficients."""
    angles = np.pi * (np.arange(count) + 0.5) / count
    matrix = 2.0 / count * np.cos(np.arange(count)[:, None] * angles)
    matrix[0] *= 0.5
    return np.asarray(matrix)


def _unit(values: Reals, span: tuple[float, float]) -> Reals:
    """Return values mapped to -1..1; zero where the parameter does not vary."""
    half = 0.5 * (span[1] - span[0])
    return np.asarray((values - 0.5 * (span[0] + span[1])) / half if half else np.zeros_like(values))


def _clenshaw(coefficients: Sequence[Reals] | Reals, unit: Reals) -> Reals:
    """Return the Chebyshev sum of coefficients (order, ...) at `unit`, by Clenshaw's recurrence."""
    if len(coefficients) == 1:
        return np.broadcast_to(coefficients[0], unit.shape)
    twice = 2.0 * unit
    first, second = np.broadcast_to(coefficients[-1], unit.shape), np.zeros_like(unit)
    for coefficient in coefficients[-2:0:-1]:
        following = twice * first
        following -= second
        following += coefficient
        first, second = following, first
    return np.asarray(coefficients[0] + unit * first - second)
