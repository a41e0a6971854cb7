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


def thermal_filling(model: BetheModel, *, beta: float, beta_field: float = 0.0) -> ThermalState:
    """Solve the thermodynamic Bethe ansatz for exp(-beta H + beta_field S^z).

    ln eta_a = beta e_a + beta_field n_a + sum_b T_ab (sigma_b ln(1 + 1/eta_b)), theta = 1/(1 + eta).
    Both signs of beta_field (the product beta h) are allowed: -h exchanges the last two strings, with
    theta_(nu-1)(-h) = 1 - theta_nu(h), and leaves the others alone.
    Raises ConvergenceError with the residual and the best state. Source: Takahashi and Suzuki (1972).
    """
    field = abs(beta_field)
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

    eta_n = (sinh((n+1) x)/sinh x)^2 - 1 for n <= nu - 2, eta_(nu-1) = e^(nu x) sinh((nu-1) x)/sinh x and
    eta_nu = e^(nu x) sinh x/sinh((nu-1) x), x = beta h / 2. Source: Takahashi and Suzuki (1972).
    """
    nu, x = model.strings, 0.5 * beta_field
    ratio = _log_sinh_ratio(np.arange(2.0, nu), x)
    last = float(_log_sinh_ratio(np.array([nu - 1.0]), x)[0])
    return np.concatenate([2.0 * ratio + np.log(-np.expm1(-2.0 * ratio)), [nu * x + last, nu * x - last]])


def _log_sinh_ratio(multiples: Reals, x: float) -> Reals:
    """Return ln[sinh(m x)/sinh(x)], shape (multiple,)."""
    if x < 1e-9:
        return np.log(multiples)
    return np.asarray((multiples - 1.0) * x + np.log(np.expm1(-2.0 * multiples * x) / np.expm1(-2.0 * x)))


def solve_log_eta(model: BetheModel, driving: Reals, start: Reals) -> tuple[Reals, float]:
    """Return ln eta = driving + T (sigma ln(1 + 1/eta)), (string, node), and its relative residual.

    Newton's method from `start` (string, node); the Jacobian is the dressing matrix 1 + T sigma theta.
    An even `driving` gives an even solution, which is sought on half of the nodes.
    """
    even = bool(np.array_equal(driving, driving[:, ::-1]))
    kept = (model.nodes + 1) // 2 if even else model.nodes
    kernel = model.kernel[:, :kept, :, :kept] * model.signs[:, None]
    if even:
        mirrored = model.nodes - kept
        kernel[..., :mirrored] += (model.kernel[:, :kept, :, ::-1] * model.signs[:, None])[..., :mirrored]
    kernel = kernel.reshape(model.strings * kept, -1)
    solution, residual = _newton(kernel, driving[:, :kept].ravel(), start[:, :kept].ravel())
    solution = solution.reshape(model.strings, kept)
    return np.concatenate([solution, solution[:, : model.nodes - kept][:, ::-1]], axis=1), residual


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


def dressing_matrix(model: BetheModel, filling: Reals) -> Reals:
    """Return 1 + T sigma theta, shape (string*node, string*node)."""
    size = model.strings * model.nodes
    matrix = (model.kernel * (model.signs[:, None] * filling)).reshape(size, size)
    matrix.flat[:: size + 1] += 1.0
    return np.asarray(matrix)


def dress(model: BetheModel, filling: Reals, bare: Reals) -> Reals:
    """Return the dressed functions of `bare`, shape (..., string, node), in the state `filling`.

    q_dressed = q - T (sigma theta q_dressed), `filling` (string, node) and `bare` smooth in rapidity; the
    leading axes of `bare` are solved together.
    """
    size = model.strings * model.nodes
    columns = np.asarray(bare, dtype=float).reshape(-1, size).T
    factors = lu_factor(dressing_matrix(model, filling), overwrite_a=True, check_finite=False)
    return np.asarray(lu_solve(factors, columns, check_finite=False).T.reshape(np.shape(bare)))


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
