"""Effective velocities of the Hubbard chain's excitations in equilibrium, and the edge of its light cone.

v = (dressed energy)'/(dressed momentum)'. The derivatives of ln zeta(k), ln eta_1 and ln eta'_1 are beta
times the first; the second solves the derivative of the same equations with the bare kappa'(k) of the energy
replaced by that of the momentum, 2 pi times the density of the ground state at half filling (both are bare
functions dressed by that ground state). Sources: M. Takahashi (1999); E. Ilievski and J. De Nardis,
Phys. Rev. B 96, 081118 (2017) (from memory; checked against the ground state's velocities and the heat of a
cold chain).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from tnquench.bethe.hubbard import NODE_LADDER, check_parameters
from tnquench.bethe.hubbard_equations import HubbardEquations, hubbard_equations
from tnquench.bethe.hubbard_line import SHIFT_TERMS, Complexes, alternating_weights
from tnquench.bethe.hubbard_state import (
    Fields,
    HubbardState,
    fermi,
    linearised,
    log_one_plus_exp,
    logarithms,
    solve_state,
    split,
)
from tnquench.conventions import Reals

#: Least derivative of a string's dressed momentum, relative to the larger part of eta_1, that still gives a
#: velocity: that of pairs vanishes like exp(-beta gap) at half filling.
FLATTEST = 1e-8

#: Samples on each side of the largest through which its polynomial goes.
PEAK_REACH = 4

#: Refinement of the largest speed stops at a movement below this.
SPEED_TARGET = 1e-7


@dataclass(frozen=True)
class HubbardVelocities:
    """Velocities at hopping 1 of unbound charges, single spins and single pairs (strings of length one).

    momenta        : k between 0 and pi, (momentum,); velocities are odd in k
    charge         : v_eff(k), (momentum,)
    charge_density : 2 pi rho_total(k), (momentum,)
    charge_filling : 1/(1 + zeta), (momentum,)
    rapidities     : Lambda >= 0, (node,); velocities are odd in Lambda
    spin, pair     : v_eff(Lambda), (node,); NaN where the dressed momentum is too flat to tell
    spin_filling, pair_filling : 1/(1 + eta_1) and 1/(1 + eta'_1), (node,)
    """

    momenta: Reals
    charge: Reals
    charge_density: Reals
    charge_filling: Reals
    rapidities: Reals
    spin: Reals
    pair: Reals
    spin_filling: Reals
    pair_filling: Reals

    @property
    def fastest(self) -> float:
        """Largest speed of all: the edge of the light cone (longer strings are slower, see the tests)."""
        speeds = (self.charge, self.spin, self.pair)
        return max(_peak(np.nan_to_num(np.abs(speed))) for speed in speeds)


def effective_velocities(state: HubbardState) -> HubbardVelocities:
    """Return the effective velocities of a solved state with beta > 0."""
    equations, beta = state.equations, state.fields.beta
    charge_slope, line_slopes = solution_slopes(state)
    momentum_lines, density = split(equations, dressed_momentum(state))
    towers, charges = split(equations, state.unknowns)
    spin, pair = _ratio(first_strings(towers, line_slopes), beta * first_strings(towers, momentum_lines))
    fillings = np.exp(-log_one_plus_exp(towers).reshape(2, 2, -1).sum(axis=1).real)
    return HubbardVelocities(
        momenta=equations.momenta,
        charge=charge_slope / (beta * density),
        charge_density=density,
        charge_filling=fermi(-charges.astype(complex)).real,
        rapidities=equations.u * equations.line.positions,
        spin=spin,
        pair=pair,
        spin_filling=fillings[0],
        pair_filling=fillings[1],
    )


def dressed_momentum(state: HubbardState) -> Reals:
    """Return the derivatives of the dressed momentum, (size,): of ln b's kind, then 2 pi rho_total(k)."""
    equations = state.equations
    kernel = equations.momentum_kernel[0] * -equations.u
    on_line = np.vstack([kernel, np.zeros((equations.line.half, equations.momenta.size))])
    slope = (np.cos(equations.momenta) / equations.u)[:, None]
    matrix = equations.assemble(equations.tower_matrix, on_line, slope * equations.line_on_charge[0])
    dressing = -linearised(equations, state.unknowns, matrix)
    dressing.flat[:: equations.size + 1] += 1.0
    bare = np.concatenate([np.zeros(equations.towers), equations.filled_density[0]])
    return np.asarray(np.linalg.solve(dressing, bare))


def solution_slopes(state: HubbardState) -> tuple[Reals, Complexes]:
    """Return d ln zeta/dk, (momentum,), and the derivatives of the four functions at the nodes, (4, node)."""
    equations, line = state.equations, state.equations.line
    values = logarithms(equations, state.unknowns)[: equations.towers].reshape(2, 2, -1).sum(axis=1)
    kernel = line.shifts(equations.points, above=1.0, below=1.0, slope=True)
    spins, pairs = (kernel @ (line.coefficients @ values.T)).real.T
    charge = np.cos(equations.momenta) / equations.u * (pairs - spins)
    turning = 2.0 * line.scale / (line.scale**2 + line.positions**2)
    series = line.coefficients @ state.unknowns[: equations.towers].reshape(4, -1).T
    slopes = turning[:, None] * (line.evaluation(line.positions) @ (1j * line.powers[:, None] * series))
    return state.fields.beta * bare_slope(equations) + charge, np.asarray(slopes.T)


def bare_slope(equations: HubbardEquations) -> Reals:
    """Return d kappa/dk, shape (momentum,)."""
    shifts = 2.0 * equations.u * np.arange(1.0, SHIFT_TERMS + 1.0)
    distance = shifts - 1j * np.sin(equations.momenta)[:, None]
    sums = (distance / np.sqrt(1.0 + distance**2) - 1.0).imag @ alternating_weights(SHIFT_TERMS)
    return np.asarray(2.0 * np.sin(equations.momenta) - 4.0 * np.cos(equations.momenta) * sums)


def first_strings(towers: Complexes, changes: Complexes) -> Reals:
    """Return changes of eta_1 and eta'_1, (2, node), from those of ln b and ln b_bar, (4, node).

    eta_1 = b + b_bar + b b_bar: no cancellation where it is small. Each tower in its own unit at each node.
    """
    result = np.empty((2, towers.shape[1]))
    for index in range(2):
        plain, barred = towers[2 * index : 2 * index + 2]
        first, second = plain + log_one_plus_exp(barred), barred + log_one_plus_exp(plain)
        unit = np.maximum(first.real, second.real)
        parts = changes[2 * index] * np.exp(first - unit) + changes[2 * index + 1] * np.exp(second - unit)
        result[index] = parts.real
    return result


def _ratio(energy: Reals, momentum: Reals) -> Reals:
    """Return energy/momentum where the latter exceeds rounding well, else NaN, (2, node)."""
    flat = np.abs(momentum) < FLATTEST
    return np.where(flat, np.nan, energy / np.where(flat, 1.0, momentum))


def _peak(speeds: Reals) -> float:
    """Return the maximum of equidistant samples, NaN left out, on the polynomial through those around it."""
    known = np.nan_to_num(speeds)
    top = int(np.argmax(known))
    reach = min(PEAK_REACH, top, known.size - 1 - top)
    around = slice(top - reach, top + reach + 1)
    if reach == 0 or np.isnan(speeds[around]).any():
        return float(known[top])
    steps = np.arange(-reach, reach + 1.0)
    curve = np.polynomial.Polynomial.fit(steps, known[around], deg=2 * reach)
    turns = curve.deriv().roots()
    near = turns.real[(np.abs(turns.imag) < 1e-9) & (np.abs(turns.real) <= 1.0)]
    return float(max([known[top], *curve(near)]))


def hubbard_light_cone(
    *, repulsion: float, beta: float, mu: float = 0.0, field: float = 0.0, hopping: float = 1.0
) -> tuple[float, float]:
    """Return the largest speed of an excitation in exp[-beta (H - h S^z - mu (N - L))], and its error.

    Parameters as in `hubbard_equilibrium`, on the same grids; the map to U > 0 leaves speeds alone. The error
    is the last movement under refinement.
    Raises InputError and ConvergenceError as there.
    """
    check_parameters(repulsion=repulsion, beta=beta, mu=mu, field=field, hopping=hopping)
    if repulsion == 0.0:
        return 2.0 * hopping, 0.0
    if repulsion < 0.0:
        mu, field = 0.5 * field, 2.0 * mu
    products = Fields(beta * hopping, 0.5 * beta * abs(field), beta * abs(mu))
    state, speed, error = None, np.inf, np.inf
    for nodes in NODE_LADDER:
        state = solve_state(hubbard_equations(0.25 * abs(repulsion) / hopping, nodes=nodes), products, state)
        coarse, speed = speed, effective_velocities(state).fastest
        error = abs(speed - coarse)
        if error < SPEED_TARGET:
            break
    return hopping * speed, hopping * error
