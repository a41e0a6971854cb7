"""Thermal states of the XXZ chain at |D| >= 1, and the derivatives of their partition function.

Decoupled equations with eta_0 = 0: ln eta_n = d delta_(n,1) + s * [ln(1 + eta_(n-1)) + ln(1 + eta_(n+1))],
d = -pi beta J sinh(eta) s, ln Z = -beta e_0 + int s ln(1 + eta_1) with the ground-state energy e_0. D < 0: a
rotation of every second spin about z turns H(D) into -H(-D), so beta changes sign and nothing else.
Source: M. Takahashi, Thermodynamics of One-Dimensional Solvable Models (Cambridge University Press, 1999).
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np

from tnquench.bethe.gapped_equations import RESIDUAL_LIMIT, GappedEquations
from tnquench.bethe.gapped_grid import GappedGrid, gapped_grid
from tnquench.bethe.gapped_tail import correction_derivatives, log_x_slopes, tail_correction
from tnquench.bethe.states import fermi
from tnquench.conventions import Reals
from tnquench.errors import ConvergenceError

#: Distance of |D| from 1 that counts as none.
ISOTROPY_TOLERANCE = 1e-12

GROUND_STATE_NODES = 64


@dataclass(frozen=True, eq=False)
class GappedThermal:
    """Equilibrium exp(-beta H + beta_field S^z) at |D| >= 1, even in beta_field.

    anisotropy, coupling, beta, beta_field : as given
    grid      : rapidity nodes u > 0
    log_eta   : (string, node), strings of length 1, 2, ...; excess : the same above its value at beta = 0
    residual  : of the equations, relative to 1 + |ln(eta)|
    """

    anisotropy: float
    coupling: float
    beta: float
    beta_field: float
    grid: GappedGrid
    log_eta: Reals
    excess: Reals
    residual: float

    @property
    def strings(self) -> int:
        """Number of strings kept; the longer ones are in the closure."""
        return int(self.log_eta.shape[0])

    @property
    def half_field(self) -> float:
        """The asymptotic slope a = |beta h|/2."""
        return 0.5 * abs(self.beta_field)


@dataclass(frozen=True)
class LogPartition:
    """ln Z per site and its derivatives by beta and by b = |beta h|, each at the other one fixed."""

    value: float
    by_beta: float
    by_field: float
    by_beta_beta: float
    by_beta_field: float
    by_field_field: float


@lru_cache(maxsize=64)
def ground_state_energy(anisotropy: float, coupling: float) -> float:
    """Return the antiferromagnet's ground-state energy per site of H(|D|), |D| >= 1.

    J |D|/4 - pi J sinh(eta) int s a_1, which is J (1/4 - ln 2) at |D| = 1. Source: R. Orbach, Phys. Rev. 112,
    309 (1958); L. Hulthen (1938).
    """
    grid = gapped_grid(gapped_eta(anisotropy), GROUND_STATE_NODES)
    if grid.eta:
        half = np.sinh(0.5 * grid.eta) ** 2 + np.sin(grid.eta * grid.rapidities) ** 2
        strength = np.sinh(grid.eta) ** 2 / (2.0 * half)
    else:
        strength = 0.5 / (0.25 + grid.rapidities**2)
    return float(coupling * (0.25 * abs(anisotropy) - grid.weights @ (grid.source * strength)))


def gapped_eta(anisotropy: float) -> float:
    """Return arcosh |D|; |D| within ISOTROPY_TOLERANCE of 1 counts as 1.

    Raises ValueError at |D| < 1.
    """
    size = abs(anisotropy)
    if not size >= 1.0 - ISOTROPY_TOLERANCE:
        message = f"anisotropy {anisotropy!r} lies between -1 and 1; this solution needs |D| >= 1"
        raise ValueError(message)
    return float(np.arccosh(size)) if size > 1.0 + ISOTROPY_TOLERANCE else 0.0


def gapped_thermal(
    *,
    anisotropy: float,
    beta: float,
    beta_field: float = 0.0,
    coupling: float = 1.0,
    strings: int,
    nodes: int,
) -> GappedThermal:
    """Solve the decoupled equations with `strings` strings on `nodes` positive rapidities each.

    anisotropy : D, |D| >= 1; beta of either sign; beta_field : the product beta h, of either sign
    Raises ConvergenceError with the residual and the best state.
    """
    grid = gapped_grid(gapped_eta(anisotropy), nodes)
    equations = _equations(grid, _signed(anisotropy, beta) * coupling, 0.5 * abs(beta_field), strings)
    excess, residual = equations.solve()
    log_eta = equations.constants + excess
    state = GappedThermal(anisotropy, coupling, beta, beta_field, grid, log_eta, excess, residual)
    if not residual <= RESIDUAL_LIMIT:
        what = f"thermal state at D = {anisotropy:.6g}, beta = {beta:g}, beta_field = {beta_field:g}"
        raise ConvergenceError(what, residual=residual, best=state)
    return state


def _signed(anisotropy: float, beta: float) -> float:
    return -beta if anisotropy < 0.0 else beta


def log_partition(state: GappedThermal) -> LogPartition:
    """Return ln Z per site and its first and second derivatives, by implicit differentiation.

    Zero field is no special case: ln Z is analytic in b^2, and the closure carries it.
    """
    sign, coupling = _signed(state.anisotropy, 1.0), state.coupling
    equations = _equations(state.grid, sign * coupling * state.beta, state.half_field, state.strings)
    ground = sign * ground_state_energy(state.anisotropy, coupling)
    response = _Response(state.grid, equations, state.excess)
    first = response.first(sign * coupling)
    second = response.second(first)[0]
    measure = state.grid.weights * state.grid.source
    inner = measure * response.holes[0]
    bends = [
        float(inner @ second[:, column] + (inner * response.filled[0]) @ (first[0, :, p] * first[0, :, q]))
        for column, (p, q) in enumerate(PAIRS)
    ]
    slopes = inner @ first[0]
    value = -state.beta * ground + float(measure @ np.logaddexp(0.0, state.log_eta[0]))
    return LogPartition(value, float(slopes[0]) - ground, float(slopes[1]), *bends)


def _equations(grid: GappedGrid, strength: float, a: float, strings: int) -> GappedEquations:
    """Return the thermal equations on even functions; `strength` is the signed product beta J."""
    driving = -np.pi * strength * grid.energy_scale * grid.source
    correction = tail_correction(grid.poisson[0], strings, a)
    return GappedEquations(grid.smoothing[0], driving, correction, a=a, strings=strings)


class _Response:
    """Derivatives of ln eta by (beta, b), b = 2 a; those of its constants are taken apart.

    grown : (string, parameter), grown_twice : (string, pair) derivatives of the constants at beta = 0
    """

    def __init__(self, grid: GappedGrid, equations: GappedEquations, excess: Reals) -> None:
        self.drive_per_strength = -np.pi * grid.energy_scale * grid.source
        self.equations, self.tail, self.factors = equations, equations.tail(excess), equations.factors(excess)
        self.filled, self.holes = fermi(equations.constants + excess), fermi(-equations.constants - excess)
        self.filled_start, self.holes_start = fermi(equations.constants), fermi(-equations.constants)
        self.shift, self.shift_twice = correction_derivatives(grid.poisson[0], equations.strings, equations.a)
        self.log_x = 0.5 * equations.log_excess(excess)[-1]
        lengths = np.arange(0.0, equations.strings + 2.0)
        slope, bend = log_x_slopes(lengths, equations.a)
        none = np.zeros(equations.strings)
        self.grown = np.stack([none, 0.5 * (slope[:-2] + slope[2:])], axis=1)
        self.grown_twice = np.stack([none, none, 0.25 * (bend[:-2] + bend[2:])], axis=1)
        self.beyond_start = np.array([0.0, slope[-1]]), np.array([0.0, 0.0, 0.5 * bend[-1]])

    def first(self, strength_by_beta: float) -> Reals:
        """Return the first derivatives (string, node, parameter)."""
        forced = np.zeros((*self.holes.shape, 2))
        forced[0, :, 0] = strength_by_beta * self.drive_per_strength
        own = (self.filled_start - self.filled) * self.grown[:, 1:]
        last = self.holes[-1] * self.grown[-1, 1]
        beyond = self.tail.by_log * last + self.equations.correction @ last + self.tail.by_a
        forced[..., 1] = self._spread(own, beyond + self.shift @ self.log_x - self.beyond_start[0][1])
        return self.factors.solve(forced) + self.grown[:, None]

    def second(self, first: Reals) -> Reals:
        """Return the second derivatives (string, node, pair of PAIRS) from the first ones."""
        curved = np.empty((*self.holes.shape, len(PAIRS)))
        for column, (p, q) in enumerate(PAIRS):
            pair = self.filled * self.holes * first[..., p] * first[..., q]
            twice = self.grown_twice[:, column, None]
            start = self.filled_start * self.holes_start * (self.grown[:, p] * self.grown[:, q])[:, None]
            last = pair[-1] + self.holes[-1] * twice[-1]
            beyond = self._tail_curvature(last, first[-1], p, q) - self.beyond_start[1][column]
            own = pair - start + (self.filled_start - self.filled) * twice
            curved[..., column] = self._spread(own, beyond)
        return self.factors.solve(curved) + self.grown_twice[:, None]

    def _spread(self, own: Reals, beyond: Reals) -> Reals:
        """Return the convolution of s with the sum over both neighbours, (string, node)."""
        neighbours = np.concatenate([own[1:], beyond[None]])
        neighbours[1:] += own[:-1]
        return np.asarray(neighbours @ self.equations.smoothing.T)

    def _tail_curvature(self, last: Reals, first: Reals, p: int, q: int) -> Reals:
        """Return the second derivative of ln(1 + eta_(N+1)).

        last : that of ln(1 + eta_N), as far as it is known; first : first derivatives of ln eta_N
        """
        tail, rates = self.tail, (0.0, 0.5)  # d a / d(beta, b)
        step_p, step_q = (0.5 * self.holes[-1] * first[:, each] for each in (p, q))
        mixed = rates[q] * step_p + rates[p] * step_q
        quadratic = tail.by_log_log * step_p * step_q + tail.by_log_a * mixed + self.shift @ mixed
        quadratic += rates[p] * rates[q] * (tail.by_aa + self.shift_twice @ self.log_x)
        return np.asarray(tail.by_log * last + self.equations.correction @ last + 2.0 * quadratic)


#: Pairs of the parameters (beta, b) of second derivatives.
PAIRS = ((0, 0), (0, 1), (1, 1))
