"""Solution of the Hubbard chain's integral equations and its linear and quadratic responses."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from scipy.linalg import lu_factor, lu_solve

from tnquench.bethe.hubbard_equations import HubbardEquations
from tnquench.bethe.hubbard_line import Complexes
from tnquench.conventions import Reals
from tnquench.errors import ConvergenceError

#: Newton stops once the residual, relative to the largest unknown, is below the first number, or below the
#: second and rounding keeps it from falling ...
RESIDUAL_TARGET = 2e-16
ROUNDING_REACHED = 1e-13

#: ... and a state is refused if its residual stays above this.
RESIDUAL_LIMIT = 1e-10

NEWTON_STEPS = 60

#: Factors of an old Jacobian serve again while a step leaves less than this part of the residual.
GOOD_CONTRACTION = 1e-2


@dataclass(frozen=True)
class Fields:
    """Hopping 1: beta, and the products beta h/2 (couples to n_up - n_down) and beta mu (to n - 1)."""

    beta: float
    spin: float
    charge: float


@dataclass(frozen=True, eq=False)
class HubbardState:
    """Equilibrium exp[-beta H + fields.spin (N_up - N_down) + fields.charge (N - L)], hopping 1.

    unknowns : ln b and ln b_bar of both towers and ln zeta, see `HubbardEquations`, shape (size,)
    residual : of the equations, relative to the largest unknown
    """

    equations: HubbardEquations
    fields: Fields
    unknowns: Reals
    residual: float

    @cached_property
    def log_partition(self) -> float:
        """Return ln Z per site."""
        weights, ground = self.equations.weights[0], self.equations.ground_energy[0]
        return float(weights @ logarithms(self.equations, self.unknowns)) - self.fields.beta * ground

    @cached_property
    def fillings(self) -> tuple[Complexes, Reals]:
        """Return b/(1 + b) of the four functions, (4, half + 1), and zeta/(1 + zeta), (momentum,)."""
        towers, charges = split(self.equations, self.unknowns)
        return fermi(towers), fermi(charges.astype(complex)).real

    @cached_property
    def _factors(self) -> tuple[Reals, Reals]:
        factors, pivots = lu_factor(jacobian(self.equations, self.unknowns), check_finite=False)
        return factors, pivots

    def respond(self, drivings: Reals) -> Reals:
        """Return the change of the unknowns under a change of the driving terms, both (size, ...)."""
        return np.asarray(lu_solve(self._factors, drivings, check_finite=False))

    @cached_property
    def adjoint(self) -> Reals:
        """Return d ln Z/d(driving term), shape (size,)."""
        gradient = linearised(self.equations, self.unknowns, self.equations.weights[0])
        return np.asarray(lu_solve(self._factors, gradient, trans=1, check_finite=False))

    @cached_property
    def drivings(self) -> Reals:
        """Return the drivings' derivatives in beta, fields.spin, fields.charge, (size, 3)."""
        return np.stack([driving(self.equations, Fields(*unit)) for unit in np.eye(3)], axis=1)

    @cached_property
    def gradient(self) -> Reals:
        """Return <-H>, <n_up - n_down>, <n - 1>, (3,): derivatives of ln Z in beta and the fields."""
        explicit = np.array([-self.equations.ground_energy[0], 0.0, 0.0])
        return np.asarray(explicit + self.adjoint @ self.drivings)

    @cached_property
    def covariance(self) -> Reals:
        """Return the second derivatives of ln Z: connected correlations of `gradient` per site, (3, 3).

        Only the logarithms are nonlinear, so the second-order change of the unknowns needs no solution of its
        own: its weight in ln Z is the adjoint.
        """
        weights = self.equations.weights[0] + self.adjoint @ self.equations.matrix
        towers, momenta = self.equations.towers, self.equations.momenta.size
        line_weights = weights[:towers].reshape(4, -1)
        charge_weights = weights[towers : towers + momenta] + weights[towers + momenta :]
        response = self.respond(self.drivings).T
        line_filling, charge_filling = self.fillings
        lines = self.equations.line.to_complex(response[:, :towers].reshape(3, 4, -1))
        charges = response[:, towers:]
        curvature = line_filling * (1.0 - line_filling)
        result = np.empty((3, 3))
        for row in range(3):
            second = self.equations.line.to_real(curvature * lines[row] * lines)
            result[row] = np.sum(line_weights * second, axis=(1, 2))
            result[row] += (charges[row] * charges) @ (
                charge_weights * charge_filling * (1.0 - charge_filling)
            )
        return result

    @cached_property
    def repulsion_slope(self) -> float:
        """Return d ln Z/du per site at fixed beta and fields: -4 beta <(n_up - 1/2)(n_down - 1/2)>."""
        values = logarithms(self.equations, self.unknowns)
        driven = self.equations.matrix_slope @ values
        driven[self.equations.towers :] += self.fields.beta * self.equations.bare[1]
        explicit = self.equations.weights[1] @ values - self.fields.beta * self.equations.ground_energy[1]
        return float(explicit + self.adjoint @ driven)


def solve_state(
    equations: HubbardEquations, fields: Fields, start: HubbardState | None = None
) -> HubbardState:
    """Solve the integral equations by Newton's method, from infinite temperature or a coarser solution.

    start : a state of the same u and fields on another grid
    Raises ConvergenceError with the residual and the best state.
    """
    unknowns = infinite_temperature(equations, fields) if start is None else refined(equations, start)
    unknowns, residual = _newton(equations, driving(equations, fields), unknowns)
    state = HubbardState(equations, fields, unknowns, residual)
    if not residual <= RESIDUAL_LIMIT:
        what = f"Hubbard chain at U = {4.0 * equations.u:.6g}, beta = {fields.beta:g} (hopping 1)"
        raise ConvergenceError(what, residual=residual, best=state)
    return state


def _newton(equations: HubbardEquations, driven: Reals, unknowns: Reals) -> tuple[Reals, float]:
    """Return unknowns and relative residual by Newton steps.

    Factors of the Jacobian are kept as long as they shrink the residual well.
    """

    def mismatch(trial: Reals) -> tuple[Reals, float]:
        found = trial - driven - equations.matrix @ logarithms(equations, trial)
        return found, float(np.max(np.abs(found)) / (1.0 + np.max(np.abs(trial))))

    residual, size = mismatch(unknowns)
    factors = None
    for _ in range(NEWTON_STEPS):
        if size < RESIDUAL_TARGET or not np.isfinite(size):
            break
        factors = factors or lu_factor(jacobian(equations, unknowns), overwrite_a=True, check_finite=False)
        trial = unknowns - lu_solve(factors, residual, check_finite=False)
        changed, trial_size = mismatch(trial)
        if size < ROUNDING_REACHED and trial_size >= 0.5 * size:
            break
        if trial_size > GOOD_CONTRACTION * size:
            factors = None
        unknowns, residual, size = trial, changed, trial_size
    return unknowns, size


def driving(equations: HubbardEquations, fields: Fields) -> Reals:
    """Return the driving terms, shape (size,); linear in the fields."""
    ones = equations.line.ones
    lines = [fields.spin * ones, -fields.spin * ones, fields.charge * ones, -fields.charge * ones]
    return np.concatenate([*lines, fields.beta * equations.bare[0]])


def infinite_temperature(equations: HubbardEquations, fields: Fields) -> Reals:
    """Return the unknowns at beta = 0, fields kept: b = exp(2 field), zeta = cosh(charge)/cosh(spin)."""
    constants = 2.0 * driving(equations, Fields(0.0, fields.spin, fields.charge))
    ratio = np.logaddexp(fields.charge, -fields.charge) - np.logaddexp(fields.spin, -fields.spin)
    constants[equations.towers :] = ratio
    return constants


def refined(equations: HubbardEquations, coarse: HubbardState) -> Reals:
    """Return the unknowns of a coarse state on other nodes: by its series, and its equation of zeta."""
    line = coarse.equations.line
    series = line.coefficients @ coarse.unknowns[: coarse.equations.towers].reshape(4, -1).T
    towers = equations.line.to_real((line.evaluation(equations.line.positions) @ series).T).ravel()
    unknowns = np.concatenate([towers, np.zeros(equations.momenta.size)])
    charges = equations.matrix[equations.towers :] @ logarithms(equations, unknowns)
    unknowns[equations.towers :] = coarse.fields.beta * equations.bare[0] + charges
    return unknowns


def split(equations: HubbardEquations, unknowns: Reals) -> tuple[Complexes, Reals]:
    """Return the four functions on the line, complex (4, half + 1), and ln zeta, (momentum,)."""
    towers = unknowns[: equations.towers].reshape(4, -1)
    return equations.line.to_complex(towers), unknowns[equations.towers :]


def logarithms(equations: HubbardEquations, unknowns: Reals) -> Reals:
    """Return the logarithms of the equations, shape (size + momentum,)."""
    towers, charges = split(equations, unknowns)
    lines = equations.line.to_real(log_one_plus_exp(towers)).ravel()
    return np.concatenate([lines, np.logaddexp(0.0, -charges), np.logaddexp(0.0, charges)])


def jacobian(equations: HubbardEquations, unknowns: Reals) -> Reals:
    """Return d(unknowns - matrix @ logarithms)/d(unknowns), shape (size, size)."""
    result = -linearised(equations, unknowns, equations.matrix)
    result.flat[:: equations.size + 1] += 1.0
    return result


def linearised(equations: HubbardEquations, unknowns: Reals, rows: Reals) -> Reals:
    """Return rows @ d(logarithms)/d(unknowns), (..., size), for any `rows` (..., size + momentum)."""
    towers, charges = split(equations, unknowns)
    half, nodes, momenta = equations.line.half, equations.line.nodes, equations.momenta.size
    result = np.empty((*rows.shape[:-1], equations.size))
    for index, filling in enumerate(fermi(towers)):
        first, middle, end = index * nodes, index * nodes + half + 1, (index + 1) * nodes
        real, imaginary = rows[..., first:middle], rows[..., middle:end]
        result[..., first:middle] = real * filling.real
        result[..., first + 1 : middle] += imaginary * filling.imag[1:]
        result[..., middle:end] = imaginary * filling.real[1:] - real[..., 1:] * filling.imag[1:]
    full = fermi(charges.astype(complex)).real
    inverse, direct = rows[..., equations.towers : -momenta], rows[..., -momenta:]
    result[..., equations.towers :] = direct * full - inverse * (1.0 - full)
    return result


def fermi(values: Complexes) -> Complexes:
    """Return exp(z)/(1 + exp(z)), any shape, without overflow."""
    positive = values.real > 0.0
    decay = np.exp(np.where(positive, -values, values))
    return np.asarray(np.where(positive, 1.0, decay) / (1.0 + decay))


def log_one_plus_exp(values: Complexes) -> Complexes:
    """Return ln(1 + exp(z)), any shape, without overflow and continuous where |Im z| < pi or Re z < 0."""
    positive = values.real > 0.0
    decay = np.exp(np.where(positive, -values, values))
    return np.asarray(np.where(positive, values, 0.0) + np.log1p(decay))
