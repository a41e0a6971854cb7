"""Thermal states, dressing and averages of the thermodynamic Bethe ansatz.

A state is its filling functions theta (string, node). With sigma the string signs and T the scattering
kernel, q_dressed = q - T (sigma theta q_dressed), 2 pi rho_total = sigma p'_dressed, rho = theta rho_total.
Sources: Takahashi (1999); O. A. Castro-Alvaredo, B. Doyon and T. Yoshimura, Phys. Rev. X 6, 041065 (2016);
B. Bertini, M. Collura, J. De Nardis and M. Fagotti, Phys. Rev. Lett. 117, 207201 (2016).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.linalg import lu_factor, lu_solve

from tnquench.bethe.model import BetheModel
from tnquench.conventions import Reals
from tnquench.errors import ConvergenceError

#: Newton stops once the residual of ln(eta), relative to 1 + |ln(eta)|, is below the first number, or below
#: the second and rounding keeps it from falling ...
RESIDUAL_TARGET = 2e-16
ROUNDING_REACHED = 1e-13

#: ... and a state is refused if its residual stays above this.
RESIDUAL_LIMIT = 1e-10

NEWTON_STEPS = 60


@dataclass(frozen=True, eq=False)
class ThermalState:
    """Equilibrium exp(-beta H + beta_field S^z).

    filling, log_eta : (string, node) theta = 1/(1 + eta) and ln(eta)
    log_partition    : ln Z per site
    free_energy      : -log_partition / beta (NaN at beta = 0)
    residual         : of the equations of ln(eta), relative to 1 + |ln(eta)|
    """

    filling: Reals
    log_eta: Reals
    log_partition: float
    free_energy: float
    residual: float


@dataclass(frozen=True)
class Averages:
    """Mean densities per site and currents: energy is <h_j> of H without field, charge is S^z."""

    energy_density: float
    charge_density: float
    energy_current: float
    charge_current: float


def thermal_filling(
    model: BetheModel, *, beta: float, beta_field: float = 0.0, start: Reals | None = None
) -> ThermalState:
    """Solve the thermodynamic Bethe ansatz for exp(-beta H + beta_field S^z).

    ln eta_a = beta e_a + beta_field n_a + sum_b T_ab (sigma_b ln(1 + 1/eta_b)), theta = 1/(1 + eta).
    Both signs of beta_field (the product beta h) are allowed: -h exchanges the last two strings, with
    theta_(m-1)(-h) = 1 - theta_m(h), and leaves the others alone.
    start : (string, node) ln eta from which the iteration starts, for beta_field >= 0; infinite temperature
    Raises ConvergenceError with the residual and the best state. Source: Takahashi and Suzuki (1972).
    """
    field = abs(beta_field)
    if start is None:
        start = np.repeat(infinite_temperature_log_eta(model, field)[:, None], model.nodes, axis=1)
    log_eta, residual = solve_log_eta(model, beta * model.energy + field * model.charge, start)
    log_partition = _log_partition(model, log_eta, beta=beta, beta_field=field)
    if beta_field < 0.0:
        log_eta[[-2, -1]] = -log_eta[[-1, -2]]
    free_energy = -log_partition / beta if beta else float("nan")
    state = ThermalState(fermi(log_eta), log_eta, log_partition, free_energy, residual)
    if not residual <= RESIDUAL_LIMIT:
        what = f"thermal state at D = {model.anisotropy:.6g}, beta = {beta:g}, beta_field = {beta_field:g}"
        raise ConvergenceError(what, residual=residual, best=state)
    return state


def infinite_temperature_log_eta(model: BetheModel, beta_field: float) -> Reals:
    """Return the constants ln eta, shape (string,), at beta -> 0 with the product beta h >= 0 kept.

    With x = beta h / 2, y the unit of the level and n the length of a string, eta_j =
    (sinh((n + y) x)/sinh(y x))^2 - 1; for the last two strings, with lengths n and n', n + n' = q, eta =
    e^(q x) sinh(n x)/sinh(n' x) and the same with n and n' exchanged. Source: Takahashi and Suzuki (1972) at
    one level; at more levels from memory, checked to solve the equations of a constant state.
    """
    table, x = model.table, 0.5 * beta_field
    lengths, units = (column[:-2].astype(float) for column in (table.lengths, table.units))
    ratio = _log_sinh_ratio(lengths + units, units, x)
    before, last = (np.array([float(n)]) for n in table.lengths[-2:])
    tilt = float(_log_sinh_ratio(before, last, x)[0])
    rise = float(before[0] + last[0]) * x
    return np.concatenate([2.0 * ratio + np.log(-np.expm1(-2.0 * ratio)), [rise + tilt, rise - tilt]])


def _log_sinh_ratio(above: Reals, below: Reals, x: float) -> Reals:
    """Return ln[sinh(above x)/sinh(below x)], shape (multiple,)."""
    if x < 1e-9:
        return np.asarray(np.log(above / below))
    logs = np.log(np.expm1(-2.0 * above * x) / np.expm1(-2.0 * below * x))
    return np.asarray((above - below) * x + logs)


def solve_log_eta(model: BetheModel, driving: Reals, start: Reals) -> tuple[Reals, float]:
    """Return ln eta = driving + T (sigma ln(1 + 1/eta)), (string, node), and its relative residual.

    Newton's method from `start` (string, node); the Jacobian is the dressing matrix 1 + T sigma theta.
    An even `driving` gives an even solution, which is sought on half of the nodes.
    """
    kept = (model.nodes + 1) // 2 if _is_even(driving) else model.nodes
    kernel = _signed_kernel(model, kept)
    solution, residual = _newton(kernel, driving[:, :kept].ravel(), start[:, :kept].ravel())
    return _unfolded(solution.reshape(model.strings, kept), model.nodes), residual


def _is_even(functions: Reals) -> bool:
    return bool(np.array_equal(functions, functions[..., ::-1]))


def _signed_kernel(model: BetheModel, kept: int) -> Reals:
    """Return T sigma, (string*kept, string*kept), that acts on the first `kept` nodes of even functions."""
    kernel = model.kernel[:, :kept, :, :kept] * model.signs[:, None]
    mirrored = model.nodes - kept
    kernel[..., :mirrored] += (model.kernel[:, :kept, :, kept:] * model.signs[:, None])[..., ::-1]
    return np.asarray(kernel.reshape(model.strings * kept, -1))


def _unfolded(values: Reals, nodes: int) -> Reals:
    """Return even functions (..., node) from their first nodes."""
    return np.concatenate([values, values[..., : nodes - values.shape[-1]][..., ::-1]], axis=-1)


def _newton(signed_kernel: Reals, driving: Reals, log_eta: Reals) -> tuple[Reals, float]:
    """Take full Newton steps until the residual is rounding."""
    residual, size = _residual(signed_kernel, driving, log_eta)
    for _ in range(NEWTON_STEPS):
        if size < RESIDUAL_TARGET or not np.isfinite(size):
            break
        jacobian = signed_kernel * fermi(log_eta)
        jacobian.flat[:: jacobian.shape[0] + 1] += 1.0
        trial = log_eta - np.linalg.solve(jacobian, residual)
        residual, trial_size = _residual(signed_kernel, driving, trial)
        if size < ROUNDING_REACHED and trial_size >= size:
            break
        log_eta, size = trial, trial_size
    return log_eta, size


def _residual(signed_kernel: Reals, driving: Reals, log_eta: Reals) -> tuple[Reals, float]:
    residual = log_eta - driving - signed_kernel @ np.logaddexp(0.0, -log_eta)
    return np.asarray(residual), float(np.max(np.abs(residual) / (1.0 + np.abs(log_eta))))


def fermi(log_eta: Reals) -> Reals:
    """Return the filling theta = 1/(1 + eta), any shape, without overflow."""
    return np.asarray(np.exp(-np.logaddexp(0.0, log_eta)))


def _log_partition(model: BetheModel, log_eta: Reals, *, beta: float, beta_field: float) -> float:
    """Return ln Z per site, beta_field >= 0: ferromagnet plus sum_a sigma_a int a_a ln(1 + 1/eta_a)."""
    vacuum = -0.25 * beta * model.coupling * model.anisotropy + 0.5 * beta_field
    density = model.momentum_derivative / (2.0 * np.pi) * np.logaddexp(0.0, -log_eta)
    return vacuum + float(model.signs @ (density @ model.weights))


def dress(model: BetheModel, filling: Reals, bare: Reals) -> Reals:
    """Return the dressed functions of `bare`, shape (..., string, node), in the state `filling`.

    q_dressed = q - T (sigma theta q_dressed), `filling` (string, node) and `bare` smooth in rapidity; the
    leading axes of `bare` are solved together, on half of the nodes if everything is even.
    """
    bare = np.asarray(bare, dtype=float)
    kept = (model.nodes + 1) // 2 if _is_even(filling) and _is_even(bare) else model.nodes
    size = model.strings * kept
    matrix = _signed_kernel(model, kept) * filling[:, :kept].ravel()
    matrix.flat[:: size + 1] += 1.0
    columns = bare[..., :kept].reshape(-1, size).T
    factors = lu_factor(matrix, overwrite_a=True, check_finite=False)
    dressed = lu_solve(factors, columns, check_finite=False).T
    return _unfolded(dressed.reshape(*bare.shape[:-1], kept), model.nodes)


def effective_velocity(model: BetheModel, filling: Reals) -> Reals:
    """Return v_eff = e'_dressed / p'_dressed, shape (string, node), in units of J and lattice spacings."""
    energy, momentum = dress(model, filling, np.stack([model.energy_derivative, model.momentum_derivative]))
    return np.asarray(energy / momentum)


def averages(model: BetheModel, filling: Reals) -> Averages:
    """Return the mean densities and currents of the state `filling` (string, node), smooth in rapidity.

    Densities integrate q rho above the ferromagnet's value, currents q v_eff rho; q = e for the energy, -n
    for the charge S^z. Sources: Castro-Alvaredo, Doyon and Yoshimura (2016); Bertini et al. (2016).
    """
    dressed = dress(model, filling, np.stack([model.energy_derivative, model.momentum_derivative]))
    flow, density = model.signs[:, None] * filling * dressed / (2.0 * np.pi) * model.weights
    return Averages(
        energy_density=0.25 * model.coupling * model.anisotropy + float(np.sum(model.energy * density)),
        charge_density=0.5 - float(np.sum(model.charge * density)),
        energy_current=float(np.sum(model.energy * flow)),
        charge_current=-float(np.sum(model.charge * flow)),
    )
