"""Bethe ansatz of the XXZ chain against free fermions, exact moments, short chains and literature.

Conventions: H = J sum [SxSx + SySy + D SzSz], state exp[-beta (H - h S^z)], everything per site, J = 1.
"""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.integrate import quad

from tests.bethe_cases import ALL, FRACTIONS, SOME, free_fermions, rational
from tests.oracles import exact_chain, high_temperature
from tnquench.bethe.correlations import covariance_matrix, drude_matrix
from tnquench.bethe.equilibrium import KEYS, equilibrium, string_thermodynamics
from tnquench.bethe.model import BetheModel, xxz_model
from tnquench.bethe.states import (
    averages,
    fermi,
    infinite_temperature_log_eta,
    solve_log_eta,
    thermal_filling,
)
from tnquench.conventions import Reals


@pytest.mark.literature
@pytest.mark.parametrize(("beta", "field"), [(1e-3, 0.0), (0.5, 0.3), (2.0, -0.7), (20.0, 0.0), (20.0, 0.4)])
def test_free_fermion_point(beta: float, field: float) -> None:
    """D = 0 by strings and by closed form, both to 1e-10.

    Sources: E. Lieb, T. Schultz, D. Mattis, Ann. Phys. 16, 407 (1961); S. Katsura, Phys. Rev. 127, 1508
    (1962).
    """
    exact = free_fermions(beta=beta, field=field)
    strings = string_thermodynamics(anisotropy=0.0, beta=beta, field=field, coupling=1.0, nodes=140)
    closed = equilibrium(anisotropy=0.0, beta=beta, field=field).as_dict()
    for key in KEYS:
        assert strings[key] == pytest.approx(exact[key], rel=1e-10, abs=1e-10), key
        assert closed[key] == pytest.approx(exact[key], rel=1e-11, abs=1e-11), key


@pytest.mark.literature
@pytest.mark.parametrize("field", [0.0, 0.9, -0.6])
@pytest.mark.parametrize("anisotropy", ALL)
def test_high_temperature_series(anisotropy: float, field: float) -> None:
    """Free energy through order beta^7 from traces over short chains; the orders left out are below 1e-12.

    The cumulants per site are exact: linked clusters, source in the oracle.
    """
    order, beta = 7, 0.05
    orders = np.arange(order + 1)
    terms = high_temperature.series(anisotropy=anisotropy, field=field, order=order) * beta**orders
    assert np.abs(terms[-2:]).max() < 3e-10, "orders fall by 1e3 each two, or the next one matters"
    found = equilibrium(anisotropy=anisotropy, beta=beta, field=field)
    assert -beta * found.free_energy == pytest.approx(terms.sum(), rel=0, abs=2e-12)
    mean = -beta * (found.energy - field * found.magnetisation)
    assert mean == pytest.approx(orders @ terms, rel=0, abs=1e-11)
    assert found.specific_heat == pytest.approx(orders * (orders - 1) @ terms, rel=0, abs=1e-10)


def chain_thermodynamics(*, sites: int, anisotropy: float, beta: float, field: float) -> Reals:
    """Values of KEYS for a whole open chain, from its levels sector by sector."""
    hamiltonian = sum(exact_chain.local_hamiltonian(sites=sites, anisotropy=anisotropy)).real.tocsr()
    charges = sum(exact_chain.magnetisations(sites=sites)).diagonal().real
    chosen = [np.flatnonzero(charges == value) for value in np.unique(charges)]
    energy = np.concatenate([np.linalg.eigvalsh(hamiltonian[rows][:, rows].toarray()) for rows in chosen])
    charge = np.concatenate([charges[rows] for rows in chosen])
    grand = energy - field * charge
    log_partition = float(np.log(np.exp(-beta * (grand - grand.min())).sum()) - beta * grand.min())
    weight = np.exp(-beta * grand - log_partition)
    mean_energy, mean_charge, mean_grand = weight @ energy, weight @ charge, weight @ grand
    return np.array(
        [
            -log_partition / beta,
            mean_energy,
            log_partition + beta * mean_grand,
            mean_charge,
            beta**2 * (weight @ (grand - mean_grand) ** 2),
            beta * (weight @ (charge - mean_charge) ** 2),
        ]
    )


@pytest.mark.parametrize("anisotropy", ALL)
def test_short_chains(anisotropy: float) -> None:
    """One site more in an open chain is worth one site of the infinite chain, at high temperature to 2e-9.

    Common practice, no source; the next difference is shown to be as small as the tolerance wants.
    """
    state = {"beta": 0.5, "field": 0.6}
    chains = [chain_thermodynamics(sites=sites, anisotropy=anisotropy, **state) for sites in (8, 9, 10)]
    assert np.abs(np.diff(chains, n=2, axis=0)).max() < 2e-8, "the chains are too short at this temperature"
    found = equilibrium(anisotropy=anisotropy, **state).as_dict()
    np.testing.assert_allclose([found[key] for key in KEYS], chains[2] - chains[1], rtol=0, atol=2e-9)


def boosted_filling(model: BetheModel, *, beta: float, beta_field: float, boost: float) -> Reals:
    """Filling of exp(-beta H + beta_field S^z + boost J_E); one string carries the energy current e v_bare.

    Source: X. Zotos, F. Naef, P. Prelovsek, Phys. Rev. B 55, 11029 (1997) for the conservation of J_E.
    """
    carried = model.energy * model.energy_derivative / model.momentum_derivative
    driving = beta * model.energy + beta_field * model.charge - boost * carried
    start = np.repeat(infinite_temperature_log_eta(model, beta_field)[:, None], model.nodes, axis=1)
    log_eta, residual = solve_log_eta(model, driving, start)
    assert residual < 1e-12
    return fermi(log_eta)


def boosted_ring(*, sites: int, anisotropy: float, beta: float, beta_field: float, boost: float) -> Reals:
    """Energy, magnetisation, energy and spin current per site of a ring, state as in `boosted_filling`."""
    x, y, z = (
        [exact_chain.on_chain(spin, first=site % sites, sites=sites) for site in range(sites + 1)]
        for spin in (exact_chain.SPIN_X, exact_chain.SPIN_Y, exact_chain.SPIN_Z)
    )
    terms = [x[j] @ x[j + 1] + y[j] @ y[j + 1] + anisotropy * z[j] @ z[j + 1] for j in range(sites)]
    energy_current = sum(1j * (terms[j - 1] @ terms[j] - terms[j] @ terms[j - 1]) for j in range(sites))
    spin_current = sum(x[j] @ y[j + 1] - y[j] @ x[j + 1] for j in range(sites))
    observables = [sum(terms), sum(z[:sites]), energy_current, spin_current]
    exponent = -beta * observables[0] + beta_field * observables[1] + boost * energy_current
    levels, vectors = np.linalg.eigh(exponent.toarray())
    rho = (vectors * np.exp(levels - levels.max())) @ vectors.conj().T
    rho /= np.trace(rho).real
    return np.array([exact_chain.expectation(rho, operator) / sites for operator in observables])


@pytest.mark.parametrize("anisotropy", [*SOME, *FRACTIONS])
def test_currents_of_boosted_states(anisotropy: float) -> None:
    """Densities and currents, signs included, of stationary states that carry currents: a ring of 8 sites.

    A ring differs from the infinite chain by terms that wind around it, here 20 times smaller with each site.
    """
    state = {"beta": 0.02, "beta_field": 0.4, "boost": 0.03}
    rings = [boosted_ring(sites=sites, anisotropy=anisotropy, **state) for sites in (7, 8)]
    model = xxz_model(anisotropy=anisotropy, nodes=48)
    found = averages(model, boosted_filling(model, **state))
    values = [found.energy_density, found.charge_density, found.energy_current, found.charge_current]
    assert np.abs(rings[1] - rings[0]).max() < 1e-8
    np.testing.assert_allclose(values, rings[1], rtol=0, atol=1e-9)
    assert abs(rings[1][2]) > 5e-4, "the state must carry an energy current"
    assert abs(rings[1][3]) > 2e-6, "... and a spin current"


@pytest.mark.literature
@pytest.mark.parametrize("anisotropy", [*ALL, *FRACTIONS])
def test_bare_magnon(anisotropy: float) -> None:
    """One magnon: e = J (cos k - D), exp(ik) = sinh(lambda - i g/2)/sinh(lambda + i g/2), p' = dk/dlambda.

    For D < 0 the momentum is counted from pi. Source: R. Orbach, Phys. Rev. 112, 309 (1958).
    """
    model = xxz_model(anisotropy=anisotropy, coupling=1.3, nodes=30)
    shift = 0.5j * np.arccos(abs(anisotropy))
    sign = -1.0 if anisotropy < 0.0 else 1.0

    def phase(rapidity: Reals) -> NDArray[np.complex128]:
        return np.asarray(np.sinh(rapidity - shift) / np.sinh(rapidity + shift))

    here, step = phase(model.rapidities), 1e-5
    change = np.angle(phase(model.rapidities + step) / phase(model.rapidities - step)) / (2.0 * step)
    np.testing.assert_allclose(model.energy[0], 1.3 * (sign * here.real - anisotropy), rtol=0, atol=1e-13)
    np.testing.assert_allclose(model.momentum_derivative[0], change, rtol=0, atol=1e-7)
    np.testing.assert_allclose(
        model.energy_derivative[0], -1.3 * sign * here.imag * model.momentum_derivative[0], rtol=0, atol=1e-12
    )


@pytest.mark.literature
@pytest.mark.parametrize(
    ("turns", "m"),
    [
        *((1, m) for m in range(2, 9)),
        (2, 5),
        (2, 7),
        (3, 7),
        (3, 8),
        (2, 9),
        (4, 9),
        (5, 12),
        (5, 13),
        (12, 29),
    ],
)
def test_spin_drude_weight_at_high_temperature(turns: int, m: int) -> None:
    """D_s / beta = sin^2(pi l/m)/sin^2(pi/m) [1 - (m / 2 pi) sin(2 pi / m)] / 8, D = cos(pi l/m), no field.

    Sources: T. Prosen, E. Ilievski, Phys. Rev. Lett. 111, 057203 (2013); E. Ilievski, J. De Nardis, Phys.
    Rev. Lett. 119, 020602 (2017). Here D_s = beta lim <J_s(t) J_s> / L, J = 1.
    """
    model = xxz_model(anisotropy=0.0 if m == 2 else rational(turns, m), nodes=64)
    state = thermal_filling(model, beta=0.0)
    found = drude_matrix(model, state.filling, -model.charge[None])[0, 0]
    ratio = np.sin(np.pi * turns / m) ** 2 / np.sin(np.pi / m) ** 2
    closed_form = ratio * (1.0 - m / (2.0 * np.pi) * np.sin(2.0 * np.pi / m)) / 8.0
    assert found == pytest.approx(closed_form, rel=0, abs=1e-10)


@pytest.mark.literature
@pytest.mark.parametrize("anisotropy", [*ALL, *FRACTIONS])
def test_energy_current_fluctuations_at_high_temperature(anisotropy: float) -> None:
    """<J_E^2> / L = (1 + 2 D^2) / 32 at infinite temperature: as a charge and as a Drude weight.

    Source: A. Kluemper, K. Sakai, J. Phys. A 35, 2173 (2002), for the thermal Drude weight at all
    temperatures; the number itself is a trace over four sites, done by hand.
    """
    model = xxz_model(anisotropy=anisotropy, nodes=64)
    filling = thermal_filling(model, beta=0.0).filling
    carried = model.energy * model.energy_derivative / model.momentum_derivative
    expected = (1.0 + 2.0 * anisotropy**2) / 32.0
    assert covariance_matrix(model, filling, carried[None])[0, 0] == pytest.approx(expected, rel=0, abs=1e-11)
    assert drude_matrix(model, filling, model.energy[None])[0, 0] == pytest.approx(expected, rel=0, abs=1e-11)


@pytest.mark.literature
@pytest.mark.parametrize("nu", [3, 4, 6])
def test_low_temperature(nu: int) -> None:
    """Ground-state energy, c = pi/(3 v) T, chi = g/[pi (pi - g) sin g] at zero field, v = (pi/2) sin g / g.

    Sources: C. N. Yang, C. P. Yang, Phys. Rev. 150, 327 (1966) for the energy, -3/8 at D = 1/2; I. Affleck,
    Phys. Rev. Lett. 56, 746 (1986) for c; M. Takahashi (1999) for chi. Tolerances: the leading corrections
    are powers of T, a few per cent of c and chi at beta = 40.
    """
    angle = np.pi / nu

    def integrand(x: float) -> float:
        return float(np.sinh((np.pi - angle) * x) / (np.sinh(np.pi * x) * np.cosh(angle * x)))

    exact = 0.25 * np.cos(angle) - np.sin(angle) * quad(integrand, 0.0, 60.0)[0]
    velocity = 0.5 * np.pi * np.sin(angle) / angle
    found = equilibrium(anisotropy=np.cos(angle), beta=40.0)
    assert found.free_energy == pytest.approx(exact - np.pi / (6.0 * velocity * 40.0**2), rel=0, abs=2e-6)
    assert found.specific_heat * 40.0 == pytest.approx(np.pi / (3.0 * velocity), rel=0.02)
    assert found.susceptibility == pytest.approx(angle / (np.pi * (np.pi - angle) * np.sin(angle)), rel=0.05)
    if nu == 3:
        assert exact == pytest.approx(-0.375, rel=0, abs=1e-9)
