"""Dressing, averages, covariances and Drude weights of states at |D| >= 1 given by their filling functions.

With g_n = (1 - theta_n) q_n^dressed the decoupled dressing is q_n^dressed = source + s * (g_(n-1) + g_(n+1)).
Averages need the ends of the chain of strings only: energies g_1, the magnetisation the limit of g_n, since
long strings carry it: m = 1/2 lim int g_n(p')/(2 pi), its current the same with e'. Sources: M. Takahashi
(1999); O. A. Castro-Alvaredo, B. Doyon and T. Yoshimura, Phys. Rev. X 6, 041065 (2016); B. Doyon and
H. Spohn, SciPost Phys. 3, 039 (2017); L. Piroli, J. De Nardis, M. Collura, B. Bertini and M. Fagotti, Phys.
Rev. B 96, 115124 (2017).
"""

from __future__ import annotations

import numpy as np

from tnquench.bethe.gapped_model import GappedModel, GappedState, dressing_factors, tail_operator
from tnquench.bethe.states import Averages
from tnquench.conventions import Reals


def dressed_slopes(model: GappedModel, state: GappedState) -> Reals:
    """Return the dressed e' = de/du and p' = dp/du, shape (2, string, node)."""
    sources = np.zeros((model.strings, model.nodes, 2))
    sources[0] = np.stack([model.energy_slope_source, model.momentum_source], axis=1)
    return np.moveaxis(dressing_factors(model, state).solve(sources), 2, 0)


def dressed_charges(model: GappedModel, state: GappedState) -> Reals:
    """Return the dressed energy e and number n of turned spins, shape (2, string, node)."""
    sources = np.zeros((model.strings, model.nodes, 2))
    sources[0, :, 0] = model.energy_source
    sources[-1, :, 1] = model.smoothing @ (np.sinh(state.half_field) / state.tail_ratio)
    return np.moveaxis(dressing_factors(model, state).solve(sources), 2, 0)


def gapped_velocity(model: GappedModel, state: GappedState) -> Reals:
    """Return v_eff = e'_dressed/p'_dressed, (string, node), in units of J and lattice spacings."""
    energy, momentum = dressed_slopes(model, state)
    return np.asarray(energy / momentum)


def gapped_averages(model: GappedModel, state: GappedState) -> Averages:
    """Return the mean densities and currents; energy is <h_j> without field, charge is S^z."""
    slopes = dressed_slopes(model, state)
    flow, density = (state.holes * slopes)[:, 0], (state.holes * slopes)[:, -1]
    first = model.weights * model.momentum_source / (2.0 * np.pi)
    last = model.weights * np.sinh(state.half_field) / state.tail_ratio / (4.0 * np.pi)
    return Averages(
        energy_density=model.ground_energy + 0.5 * model.strength * float(first @ flow[1]),
        energy_current=0.5 * model.strength * float(first @ flow[0]),
        charge_density=state.sign * float(last @ density[1]),
        charge_current=state.sign * float(last @ density[0]),
    )


def gapped_covariance(model: GappedModel, state: GappedState) -> Reals:
    """Return lim <Q_a Q_b>_connected/L, shape (2, 2), of energy and S^z.

    The response of the averages to d ln(eta) = dressed charge: sums over strings, which converge slowly at
    zero field, do not appear, and <S^z S^z> is finite there (at |D| = 1 to four digits with 40 strings; take
    chi from `gapped_thermal.log_partition` instead).
    """
    slope = dressed_slopes(model, state)[1]
    shift = state.holes * state.filling * dressed_charges(model, state)  # d(1 - theta)
    ratio, sinh, cosh = state.tail_ratio, np.sinh(state.half_field), np.cosh(state.half_field)
    fields = np.array([0.0, 0.5])[:, None]  # d a
    ratio_shift = (sinh * cosh * fields - 0.5 * shift[:, -1]) / ratio  # C_N^2 = sinh(a)^2 + theta_N
    change = _hole_response(model, state, slope, shift, ratio_shift)
    energy = -0.5 * model.strength * change[:, 0] @ (model.weights * model.momentum_source / (2.0 * np.pi))
    last = state.holes[-1] * slope[-1]
    carried = sinh * change[:, -1] + (cosh * fields - sinh * ratio_shift / ratio) * last
    magnetisation = (carried / ratio) @ model.weights / (4.0 * np.pi)
    cross = -state.sign * energy[1]
    return np.array([[energy[0], cross], [cross, magnetisation[1]]])


def _hole_response(
    model: GappedModel, state: GappedState, slope: Reals, shift: Reals, ratio_shift: Reals
) -> Reals:
    """Return the change of (1 - theta) p'_dressed, (charge, string, node), under `shift` of 1 - theta.

    ratio_shift : (charge, node) that of C_N; the tail's factor is 1 - theta_N/[C_N (cosh(a) + C_N)]
    """
    ratio, cosh = state.tail_ratio, np.cosh(state.half_field)
    product = ratio * (cosh + ratio)
    product_shift = (cosh + 2.0 * ratio) * ratio_shift
    product_shift[1] += 0.5 * ratio * np.sinh(state.half_field)
    factor_shift = shift[:, -1] / product + state.filling[-1] / product * (product_shift / product)
    moved = shift * slope
    tail = state.tail_factor * moved[:, -1] + moved[:, -1] @ tail_operator(model, state.half_field).T
    neighbours = np.zeros_like(moved)
    neighbours[:, 1:] += moved[:, :-1]
    neighbours[:, :-1] += moved[:, 1:]
    neighbours[:, -1] += tail + factor_shift * state.holes[-1] * slope[-1]
    sources = np.moveaxis(neighbours @ model.smoothing.T, 0, 2)
    return np.asarray(moved + state.holes * np.moveaxis(dressing_factors(model, state).solve(sources), 2, 0))


def gapped_drude(model: GappedModel, state: GappedState) -> Reals:
    """Return lim_t lim_L <J_a(t) J_b>_connected/L, shape (2, 2), of the currents of energy and S^z.

    Sum over strings of int rho (1 - theta) v^2 q_a q_b with dressed q; multiply by beta for the Drude weight.
    """
    energy, momentum = dressed_slopes(model, state)
    charges = dressed_charges(model, state) * np.array([1.0, -state.sign])[:, None, None]
    measure = state.holes * state.filling * energy**2 / momentum * model.weights / (2.0 * np.pi)
    return np.asarray(np.einsum("asn,bsn,sn->ab", charges, charges, measure))
