"""Filling functions of the thermal states along a profile, as smooth functions of its two parameters."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import product

import numpy as np

from tnquench.bethe.states import fermi, thermal_filling
from tnquench.conventions import Reals
from tnquench.errors import ConvergenceError
from tnquench.hydro.mesh import RapidityMesh

#: (beta, beta_field) of a thermal state exp(-beta H + beta_field S^z).
State = tuple[float, float]

#: Chebyshev coefficients of a filling below this, absolutely, are dropped.
COEFFICIENT_TARGET = 1e-9

#: A coordinate that varies less than this, relative to the parameters, does not vary.
ROUNDING = 1e-13

#: Largest error of a filling at the corners of the parameters.
FILLING_TARGET = 2e-8

#: Numbers of Chebyshev points tried in each parameter.
POINT_COUNTS: tuple[int, ...] = (8, 16, 32, 64, 128)


@dataclass(frozen=True)
class Parameters:
    """Coordinates of thermal states: beta, and beta_field less its regression offset + slope beta.

    Where both parameters follow the same shape in space the second coordinate is constant.
    beta_span, rest_span : middle and half range of the two coordinates; a half range may be zero
    """

    offset: float
    slope: float
    beta_span: tuple[float, float]
    rest_span: tuple[float, float]

    def units(self, beta: Reals, beta_field: Reals) -> tuple[Reals, Reals]:
        """Return both coordinates scaled to -1..1, zero where constant; any shape."""
        rest = beta_field - self.offset - self.slope * beta
        return _unit(beta, self.beta_span), _unit(rest, self.rest_span)

    def state(self, beta_unit: float, rest_unit: float) -> State:
        """Return (beta, beta_field) at scaled coordinates."""
        beta = self.beta_span[0] + beta_unit * self.beta_span[1]
        rest = self.rest_span[0] + rest_unit * self.rest_span[1]
        return beta, rest + self.offset + self.slope * beta


@dataclass(frozen=True, eq=False)
class ThermalStates:
    """Fillings of thermal states near given ones, by Chebyshev expansion in two coordinates.

    rows : one array (order in the second coordinate, string, point) for each order in the first
    """

    parameters: Parameters
    rows: tuple[Reals, ...]

    def filling(self, beta: Reals, beta_field: Reals) -> Reals:
        """Return fillings (..., string, point) at parameters given for each string and point, same shape."""
        first, second = self.parameters.units(beta, beta_field)
        return _clenshaw([_clenshaw(row, second) for row in self.rows], first)

    def middle(self) -> Reals:
        """Return the filling (string, point) at the middle of both coordinates."""
        shape = self.rows[0].shape[1:]
        beta, beta_field = self.parameters.state(0.0, 0.0)
        return self.filling(np.full(shape, beta), np.full(shape, beta_field))


def thermal_on_mesh(mesh: RapidityMesh, state: State) -> Reals:
    """Return the filling (string, point) of a thermal state (beta, beta_field)."""
    log_eta = thermal_filling(mesh.model, beta=state[0], beta_field=state[1]).log_eta
    return np.asarray(fermi(log_eta @ mesh.spread))


def thermal_states(mesh: RapidityMesh, beta: Reals, beta_field: Reals) -> ThermalStates:
    """Return the thermal states around samples (sample,) of a profile, to FILLING_TARGET.

    Raises ConvergenceError with the error left where the parameters cover too wide a range.
    """
    parameters = _parameters(beta, beta_field)
    orders = [
        _sufficient_order(mesh, parameters, axis=axis) if span[1] else 1
        for axis, span in enumerate((parameters.beta_span, parameters.rest_span))
    ]
    while True:
        states = _expanded(mesh, parameters, (orders[0], orders[1]))
        error = _corner_error(mesh, states)
        if error < FILLING_TARGET:
            return states
        if max(orders) >= POINT_COUNTS[-1]:
            what = "expansion of the profile's thermal states"
            raise ConvergenceError(what, residual=error, best=states)
        orders = [2 * order if order > 1 else 1 for order in orders]


def _expanded(mesh: RapidityMesh, parameters: Parameters, orders: tuple[int, int]) -> ThermalStates:
    coefficients = _expand(mesh, parameters, orders)
    kept = [max(1, _needed(row)) for row in np.abs(coefficients).max(axis=(2, 3))]
    return ThermalStates(
        parameters, tuple(row[:count] for row, count in zip(coefficients, kept, strict=True))
    )


def _corner_error(mesh: RapidityMesh, states: ThermalStates) -> float:
    """Return the largest error of a filling at the corners of the parameters, where it is largest."""
    error = 0.0
    for beta_unit, rest_unit in product((-1.0, 1.0), repeat=2):
        state = states.parameters.state(beta_unit, rest_unit)
        expanded = states.filling(*(np.full(mesh.shape, value) for value in state))
        error = max(error, float(np.max(np.abs(expanded - thermal_on_mesh(mesh, state)))))
    return error


def _parameters(beta: Reals, beta_field: Reals) -> Parameters:
    varying = np.ptp(beta) > 0.0
    slope = float(np.polyfit(beta, beta_field, 1)[0]) if varying and np.ptp(beta_field) > 0.0 else 0.0
    offset = float(np.mean(beta_field - slope * beta))
    rest = beta_field - offset - slope * beta
    beta_span, rest_span = ((0.5 * float(c.max() + c.min()), 0.5 * float(np.ptp(c))) for c in (beta, rest))
    if rest_span[1] < ROUNDING * (1.0 + np.abs(beta_field).max()):
        rest_span = (rest_span[0], 0.0)
    return Parameters(offset, slope, beta_span, rest_span)


def _needed(sizes: Reals) -> int:
    """Return how many of the coefficients (order,) must be kept."""
    return int(np.flatnonzero(sizes > COEFFICIENT_TARGET).max(initial=-1)) + 1


def _sufficient_order(mesh: RapidityMesh, parameters: Parameters, *, axis: int) -> int:
    """Return how many Chebyshev orders one coordinate needs, the other one at its middle."""
    for count in POINT_COUNTS:
        orders = (count, 1) if axis == 0 else (1, count)
        sizes = np.abs(_expand(mesh, parameters, orders)).max(axis=(2, 3)).ravel()
        needed = _needed(sizes)
        if needed < count - 1:
            return needed + 1
    return POINT_COUNTS[-1]


def _expand(mesh: RapidityMesh, parameters: Parameters, orders: tuple[int, int]) -> Reals:
    """Return Chebyshev coefficients (order, order, string, point) from as many thermal states."""
    first, second = (np.cos(_chebyshev_angles(count)) for count in orders)
    values = np.array([[thermal_on_mesh(mesh, parameters.state(a, b)) for b in second] for a in first])
    to_first, to_second = (_chebyshev_transform(count) for count in orders)
    return np.asarray(np.einsum("ia,jb,absp->ijsp", to_first, to_second, values, optimize=True))


def _chebyshev_angles(count: int) -> Reals:
    return np.asarray(np.pi * (np.arange(count) + 0.5) / count)


def _chebyshev_transform(count: int) -> Reals:
    """Return the (order, point) matrix from values at the Chebyshev roots to coefficients."""
    matrix = 2.0 / count * np.cos(np.arange(count)[:, None] * _chebyshev_angles(count))
    matrix[0] *= 0.5
    return np.asarray(matrix)


def _unit(values: Reals, span: tuple[float, float]) -> Reals:
    middle, half_range = span
    return np.asarray((values - middle) / half_range) if half_range else np.zeros_like(values)


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
