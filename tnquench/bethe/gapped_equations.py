"""The decoupled equations of ln(eta) at |D| >= 1 with any driving term, and Newton's method for them.

ln eta_n = d delta_(n,1) + s * [ln(1 + eta_(n-1)) + ln(1 + eta_(n+1))] with eta_0 = 0 and ln eta_n -> 2 a n.
Source: M. Takahashi, Thermodynamics of One-Dimensional Solvable Models (Cambridge University Press, 1999).
"""

from __future__ import annotations

import numpy as np

from tnquench.bethe.gapped_chain import ChainFactors, factor_chain
from tnquench.bethe.gapped_tail import Tail, extend, infinite_temperature_log_eta
from tnquench.bethe.states import fermi
from tnquench.conventions import Reals

#: Newton stops once the residual of ln(eta), relative to 1 + |ln(eta)|, is below the first number, or below
#: the second and rounding keeps it from falling; a state is refused if its residual stays above the third.
RESIDUAL_TARGET = 2e-16
ROUNDING_REACHED = 1e-12
RESIDUAL_LIMIT = 1e-10

NEWTON_STEPS = 60


class GappedEquations:
    """The equations at fixed parameters, for z = ln(eta) above its constants at beta = 0.

    Constants may be large; apart from them they would leave their rounding errors in sums over many strings.
    smoothing  : (node, node) convolution with s; driving : (node,) d; a : |beta h|/2
    correction : (node, node) of the tail, see `gapped_tail.tail_correction`
    """

    def __init__(
        self, smoothing: Reals, driving: Reals, correction: Reals, *, a: float, strings: int
    ) -> None:
        self.smoothing, self.driving, self.correction = smoothing, driving, correction
        self.a, self.strings = a, strings
        self.constants = infinite_temperature_log_eta(strings, a)[:, None]

    def solve(self) -> tuple[Reals, float]:
        """Return z (string, node) and the relative residual, by full Newton steps from zero."""
        excess = np.zeros((self.strings, self.driving.size))
        residual = self.residual(excess)
        size = self._size(residual, excess)
        for _ in range(NEWTON_STEPS):
            if size < RESIDUAL_TARGET or not np.isfinite(size):
                break
            trial = excess - self.factors(excess).solve(residual[..., None])[..., 0]
            residual = self.residual(trial)
            trial_size = self._size(residual, trial)
            if size < ROUNDING_REACHED and trial_size >= size:
                break
            excess, size = trial, trial_size
        return excess, size

    def log_excess(self, excess: Reals) -> Reals:
        """Return ln(1 + eta) above its constants."""
        empty, full = (-np.logaddexp(0.0, sign * self.constants) for sign in (1.0, -1.0))
        return np.asarray(np.logaddexp(empty, full + excess))

    def tail(self, excess: Reals) -> Tail:
        """Return the tail beyond the last string."""
        return extend(0.5 * self.log_excess(excess)[-1], self.strings, self.a)

    def residual(self, excess: Reals) -> Reals:
        """Return the left minus the right side of the equations, (string, node)."""
        logs = self.log_excess(excess)
        beyond = 2.0 * self.tail(excess).value + self.correction @ logs[-1]
        neighbours = np.concatenate([logs[1:], beyond[None]])
        neighbours[1:] += logs[:-1]
        result = excess - neighbours @ self.smoothing.T
        result[0] -= self.driving
        return np.asarray(result)

    def factors(self, excess: Reals) -> ChainFactors:
        """Return the factorised derivative of `residual`."""
        holes = fermi(-self.constants - excess)
        return factor_chain(self.smoothing, holes, np.diag(self.tail(excess).by_log) + self.correction)

    def _size(self, residual: Reals, excess: Reals) -> float:
        return float(np.max(np.abs(residual) / (1.0 + np.abs(excess))))
