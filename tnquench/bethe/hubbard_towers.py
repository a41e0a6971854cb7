"""The longer strings of the Hubbard chain, their susceptibility sums and Drude weights.

The first function of each tower is known from the closed equations, so only ln eta_n = s * ln[(1 +
eta_(n-1))(1 + eta_(n+1))], n >= 2, is left: a chain of blocks, solved by Newton's method and cut at a finite
height with its asymptotic form (Takahashi 1999). Every dressed function obeys the same chain, linearised.
With d_i the derivative of ln eta in the potential of charge i, C_ij = sum_a int dl/2pi |p'_a| theta (1 -
theta) d_i d_j is the covariance of the charges, and with v_a^2 inside the integral their Drude weight, int dx
<j_i(x, t) j_j(0, 0)> at t -> infinity. Sources: B. Doyon and H. Spohn, SciPost Phys. 3, 039 (2017); E.
Ilievski and J. De Nardis, Phys. Rev. B 96, 081118 (2017) (from memory; C is checked against the covariance of
the closed equations).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from tnquench.bethe.hubbard import LEAST_REPULSION, check_parameters
from tnquench.bethe.hubbard_equations import hubbard_equations
from tnquench.bethe.hubbard_line import Complexes, SpectralLine
from tnquench.bethe.hubbard_state import Fields, HubbardState, fermi, log_one_plus_exp, solve_state, split
from tnquench.bethe.hubbard_velocities import dressed_momentum, solution_slopes
from tnquench.conventions import Reals
from tnquench.errors import InputError

#: Far out, where a string's dressed momentum is flatter than this part of its largest slope, its velocity is
#: left out: both derivatives fall like 1/x^3 into the error of the series.
FLATTEST = 1e-7

#: Strings of each kind, and nodes, of the value returned and of the one that gives its error.
HEIGHTS = (24, 48)
NODES = (91, 137)

#: Newton steps of a tower, and the movement at which they stop.
NEWTON_STEPS = 40
MOVEMENT_TARGET = 1e-13


@dataclass(frozen=True)
class Tower:
    """Strings n = 1..height of one kind at the nodes x >= 0 of the line; all arrays (string, node).

    log_eta   : ln eta_n
    momentum  : derivative of the dressed momentum; energy : of the dressed energy, times beta
    responses : derivatives of ln eta_n in beta and the fields of spin and charge, (3, string, node)
    """

    log_eta: Reals
    momentum: Reals
    energy: Reals
    responses: Reals


@dataclass(frozen=True)
class StringSums:
    """Sums over unbound charges and strings for H, n_up - n_down and n - 1, (3, 3); hopping 1."""

    covariance: Reals
    drude: Reals


def hubbard_drude(
    *, repulsion: float, beta: float, mu: float = 0.0, field: float = 0.0, hopping: float = 1.0
) -> tuple[Reals, Reals]:
    """Return Drude weights lim_t int dx <j_a(x, t) j_b(0, 0)>_connected and their errors, both (3, 3).

    Charges: H, S^z and n - 1, in that order. Multiply by beta for the Drude weight of linear response.
    Parameters as in `hubbard_equilibrium`, but repulsion not 0. The error is the distance from half the
    strings plus that from fewer nodes. Raises InputError and ConvergenceError.
    """
    check_parameters(repulsion=repulsion, beta=beta, mu=mu, field=field, hopping=hopping)
    if repulsion == 0.0:
        subject, least = "Drude weights of the Hubbard chain", LEAST_REPULSION * hopping
        raise InputError(subject, [f"repulsion = 0: must be at least {least:g} in size"], consequence="")
    attractive = repulsion < 0.0
    spin, charge = (beta * mu, 0.5 * beta * field) if attractive else (0.5 * beta * field, beta * mu)
    products = Fields(beta * hopping, spin, charge)
    u = 0.25 * abs(repulsion) / hopping
    states = [solve_state(hubbard_equations(u, nodes=nodes), products) for nodes in NODES]
    few, many = (string_sums(states[1], height=height).drude for height in HEIGHTS)
    coarse = string_sums(states[0], height=HEIGHTS[1]).drude
    order = [0, 2, 1] if attractive else [0, 1, 2]
    units = np.array([-(hopping**2), 0.5 * hopping, hopping])  # beta couples to -H
    values, errors = (
        table[np.ix_(order, order)] * np.outer(units, units)
        for table in (many, np.abs(many - few) + np.abs(many - coarse))
    )
    return values, np.abs(errors)


def string_sums(state: HubbardState, *, height: int) -> StringSums:
    """Return covariance and Drude weights of a solved state with beta > 0, from `height` strings of each
    kind.

    Both converge like a power of the height. The covariance of a charge whose field vanishes is carried by
    infinitely long strings and comes out too small: take that of the state instead.
    """
    equations, beta = state.equations, state.fields.beta
    slopes, _ = solution_slopes(state)
    responses = state.respond(state.drivings)[equations.towers :].T
    density = dressed_momentum(state)[equations.towers :]
    charges = state.unknowns[equations.towers :]
    filling = fermi(charges.astype(complex)).real
    weight = density * filling * (1.0 - filling) / equations.momenta.size  # k and -k, dk/2pi
    speed = slopes / (beta * density)
    covariance, drude = _sums(weight, speed, responses)
    angle = 2.0 * np.pi / equations.line.nodes
    jacobian = 0.5 * (equations.line.scale**2 + equations.line.positions**2) / equations.line.scale
    measure = angle * jacobian / np.pi  # x and -x, dx/2pi
    measure[0] *= 0.5
    for kind in (0, 1):
        tower = solve_tower(state, kind=kind, height=height)
        filling = fermi(tower.log_eta.astype(complex)).real
        weight = np.abs(tower.momentum) * filling * (1.0 - filling) * measure
        speed = tower.energy / (beta * tower.momentum)
        speed[_flat(tower.momentum)] = 0.0
        change = _sums(weight.ravel(), speed.ravel(), tower.responses.reshape(3, -1))
        covariance, drude = covariance + change[0], drude + change[1]
    return StringSums(covariance, drude)


def _flat(momentum: Reals) -> NDArray[np.bool_]:
    """Return where the dressed momentum of a string, (string, node), is too flat for a velocity."""
    return np.asarray(np.abs(momentum) < FLATTEST * np.max(np.abs(momentum), axis=1, keepdims=True))


def _sums(weight: Reals, speed: Reals, responses: Reals) -> tuple[Reals, Reals]:
    """Return the weighted sums of products of responses (3, point), without and with the speeds squared."""
    return (responses * weight) @ responses.T, (responses * (weight * speed**2)) @ responses.T


def solve_tower(state: HubbardState, *, kind: int, height: int) -> Tower:
    """Return the strings of spins (kind 0) or pairs (kind 1) up to `height` >= 3."""
    equations, line = state.equations, state.equations.line
    field = abs(state.fields.spin if kind == 0 else state.fields.charge)
    rows = slice(2 * kind, 2 * kind + 2)
    towers = split(equations, state.unknowns)[0][rows]
    chain = _Chain(line, _first_log_eta(towers), field, height)
    changes = [*state.respond(state.drivings).T, dressed_momentum(state)]
    first = [_first_change(towers, split(equations, change)[0][rows]) for change in changes]
    tilt = np.zeros(4)
    tilt[1 + kind] = np.sign(state.fields.spin if kind == 0 else state.fields.charge)
    linear = chain.respond(np.stack(first), tilt)
    log_eta = chain.log_eta
    series = line.coefficients[:, : line.half + 1] @ log_eta.T
    turning = 2.0 * line.scale / (line.scale**2 + line.positions**2)
    slopes = (line.evaluation(line.positions) @ (1j * line.powers[:, None] * series)).real.T
    return Tower(log_eta, linear[3], slopes * turning, linear[:3])


def _first_log_eta(towers: Complexes) -> Reals:
    """Return ln eta_1 from ln b and ln b_bar, (2, node): eta_1 = b + b_bar + b b_bar, nothing cancels."""
    parts = np.stack([towers[0], towers[1], towers[0] + towers[1]])
    unit = np.max(parts.real, axis=0)
    return np.asarray(unit + np.log(np.sum(np.exp(parts - unit), axis=0).real))


def _first_change(towers: Complexes, changes: Complexes) -> Reals:
    """Return the change of ln eta_1, (node,), with `changes` of ln b and ln b_bar, (2, node)."""
    parts = towers + log_one_plus_exp(towers[::-1]) - _first_log_eta(towers)
    return np.asarray(np.sum(changes * np.exp(parts), axis=0).real)


class _Chain:
    """ln eta_n on n = 2..height between the known first string and the asymptotic form."""

    def __init__(self, line: SpectralLine, first: Reals, field: float, height: int) -> None:
        kernel = line.shifts(line.positions, above=1.0, below=1.0) @ line.coefficients[:, : line.half + 1]
        self.kernel, self.first, self.field = kernel.real, first, field
        lowest = np.logaddexp(0.0, first)
        longer = _constants(height, field) * np.ones(first.size)
        for _ in range(NEWTON_STEPS):
            logs = np.logaddexp(0.0, longer)
            above, _, _ = self._top(logs[-1])
            neighbours = np.vstack([lowest, logs[:-1]]) + np.vstack([logs[1:], above])
            step = self._solve((longer - neighbours @ self.kernel.T)[None], longer)[0]
            longer = longer - step
            if np.max(np.abs(step)) < MOVEMENT_TARGET * (1.0 + np.max(np.abs(longer))):
                break
        self.longer = longer

    @property
    def log_eta(self) -> Reals:
        """All strings, (height, node)."""
        return np.vstack([self.first, self.longer])

    def respond(self, first: Reals, tilt: Reals) -> Reals:
        """Return changes of ln eta_n, (change, height, node).

        first : change of ln eta_1, (change, node); tilt : of the tower's field, (change,)
        """
        driving = np.zeros((tilt.size, *self.longer.shape))
        driving[:, 0] = (first * fermi(self.first.astype(complex)).real) @ self.kernel.T
        _, _, by_field = self._top(np.logaddexp(0.0, self.longer[-1]))
        driving[:, -1] += tilt[:, None] * (self.kernel @ by_field)
        return np.concatenate([first[:, None], self._solve(driving, self.longer)], axis=1)

    def _top(self, last: Reals) -> tuple[Reals, Reals, Reals]:
        """Return ln(1 + eta_(N+1)) from ln(1 + eta_N), (node,), and its derivatives in that and the field a.

        sqrt(1 + eta_(N+1)) = X cosh a + sqrt(1 + X^2 sinh^2 a), X^2 = 1 + eta_N, with X exp(a) taken out.
        """
        decay = np.exp(-2.0 * self.field)
        rising, growing = 0.5 * (1.0 + decay), 0.5 * (1.0 - decay)
        root = np.sqrt(np.exp(-last - 2.0 * self.field) + growing**2)
        by_last = (rising + growing**2 / root) / (rising + root)
        return last + 2.0 * (self.field + np.log(rising + root)), by_last, 2.0 * growing / root

    def _solve(self, driving: Reals, longer: Reals) -> Reals:
        """Return x with x_n - s * (theta_(n-1) x_(n-1) + theta_(n+1) x_(n+1)) = driving, theta = eta/(1 +
        eta).

        driving : (change, string, node). Elimination of blocks from the lowest string upwards.
        """
        filling = fermi(longer.astype(complex)).real
        identity = np.eye(longer.shape[1])
        _, by_last, _ = self._top(np.logaddexp(0.0, longer[-1]))
        count, height = driving.shape[0], driving.shape[1]
        factors, carried = [], []
        upper, before = np.zeros_like(identity), np.zeros((longer.shape[1], count))
        for n in range(height):
            lower = self.kernel * filling[n - 1] if n else np.zeros_like(identity)
            block = identity - lower @ upper
            if n == height - 1:
                block = block - self.kernel * (by_last * filling[n])
            following = self.kernel * filling[n + 1] if n + 1 < height else np.zeros_like(identity)
            both = np.linalg.solve(block, np.hstack([following, driving[:, n].T + lower @ before]))
            upper, before = both[:, : identity.shape[0]], both[:, identity.shape[0] :]
            factors.append(upper)
            carried.append(before)
        result = np.empty_like(driving)
        result[:, -1] = carried[-1].T
        for n in range(height - 2, -1, -1):
            result[:, n] = (carried[n] + factors[n] @ result[:, n + 1].T).T
        return result


def _constants(height: int, field: float) -> Reals:
    """Return ln eta_n at infinite rapidity, n = 2..height, (string, 1).

    1 + eta_n = [sinh((n + 1) a)/sinh(a)]^2, a the field. Source: Takahashi (1972).
    """
    multiples = np.arange(3.0, height + 2.0)[:, None]
    if field < 1e-9:
        return np.asarray(np.log(multiples**2 - 1.0))
    ratio = np.expm1(-2.0 * multiples * field) / np.expm1(-2.0 * field)
    double = 2.0 * ((multiples - 1.0) * field + np.log(ratio))
    return np.asarray(double + np.log(-np.expm1(-double)))
