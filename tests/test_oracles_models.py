"""The oracles of all models: operator identities, closed forms, and two derivations against each other."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest

from tests.oracles import exact_chain, free_models
from tests.oracles.exact_models import (
    ExactChain,
    Matrices,
    Matrix,
    annihilators,
    fermion,
    hubbard,
    ising,
    spins,
    total,
    xxz,
)
from tests.oracles.exact_quench import exact_quench

SIX, EIGHT = np.arange(6), np.arange(8)
STAGGERED = (-1.0) ** SIX
UNEVEN = np.array([0.3, -0.7, 0.1, 0.9, -0.2, 0.4])
UNEVEN_BONDS = 1.0 + np.array([0.2, -0.3, 0.1, 0.25, -0.15])
BETA_STEP = np.array([0.5, 0.5, 0.5, 1.25, 2.0, 2.0, 2.0])
FIELD_STEP = np.where(EIGHT < 4, 0.7, -0.4)

CHAINS: dict[str, ExactChain] = {
    "xxz": xxz(sites=6, anisotropy=0.5, coupling=1.3),
    "xxz, staggered field": xxz(sites=6, anisotropy=0.5, potential=-0.4 * STAGGERED),
    "xxz, second neighbours": xxz(sites=6, anisotropy=1.0, second=(0.3, 0.7)),
    "xxz, alternating": xxz(sites=6, anisotropy=0.5, factors=1.0 + 0.2 * (-1.0) ** SIX[:5]),
    "xxz, all extras": xxz(
        sites=6, anisotropy=-0.5, potential=UNEVEN, factors=UNEVEN_BONDS, second=(0.3, 0.7)
    ),
    "ising": ising(sites=6, transverse_field=0.7, coupling=1.2),
    "ising, all extras": ising(
        sites=6,
        transverse_field=0.7,
        longitudinal_field=0.3,
        potential=UNEVEN,
        factors=UNEVEN_BONDS,
        second=0.4,
    ),
    "fermion": fermion(sites=6, repulsion=1.5, hopping=0.8),
    "fermion, all extras": fermion(
        sites=6, repulsion=1.5, potential=UNEVEN, factors=UNEVEN_BONDS, second=0.6
    ),
    "hubbard": hubbard(sites=4, repulsion=4.0, hopping=0.9),
    "hubbard, all extras": hubbard(
        sites=4, repulsion=4.0, potential=UNEVEN[:4], magnetic_field=UNEVEN[2:], factors=UNEVEN_BONDS[:3]
    ),
}


def largest(matrix: Matrix) -> float:
    return float(abs(matrix).max())


@pytest.mark.parametrize("name", CHAINS)
def test_continuity_as_operator_identities(name: str) -> None:
    """i[H, h_j] = K_j - K_{j+1} and i[H, q_i] = J_{i-1} - J_i for every model and extra, to 1e-10."""
    chain = CHAINS[name]
    observables, hamiltonian = chain.observables(), chain.hamiltonian
    nothing = 0.0 * hamiltonian
    flows: list[tuple[Matrices, tuple[Matrix, ...]]] = [(chain.terms, observables["energy_current"])]
    for charge, current in (("charge_density", "charge_current"), ("magnetisation", "spin_current")):
        if charge in observables:
            flows.append((observables[charge], (nothing, *observables[current], nothing)))
    for densities, currents in flows:
        for place, density in enumerate(densities):
            change = 1j * (hamiltonian @ density - density @ hamiltonian)
            assert largest(change - currents[place] + currents[place + 1]) < 1e-10
    assert all(largest(current) > 0.05 for _, currents in flows for current in currents[1:-1])


@pytest.mark.parametrize("name", CHAINS)
def test_observables_are_hermitian_and_currents_have_no_constant(name: str) -> None:
    """Continuity leaves a constant open: it is fixed by a vanishing trace."""
    for member, matrices in CHAINS[name].observables().items():
        for matrix in matrices:
            assert largest(matrix - matrix.conj().T) < 1e-12, member
            if member.endswith("current"):
                assert abs(matrix.diagonal().sum()) < 1e-10, member


def test_conserved_charges_commute_with_every_hamiltonian() -> None:
    for chain in CHAINS.values():
        for members in chain.charges.values():
            charge = total(members)
            assert largest(chain.hamiltonian @ charge - charge @ chain.hamiltonian) < 1e-12


def test_fermions_anticommute_across_sites_and_species() -> None:
    """{c_m, c+_n} = delta_mn and {c_m, c_n} = 0 for the six modes of three sites with two species."""
    c = annihilators(6)
    for m, one in enumerate(c):
        for n, other in enumerate(c):
            assert largest(one @ other + other @ one) == 0.0
            mixed = (one @ other.T + other.T @ one).toarray()
            assert np.array_equal(mixed, np.eye(64) * (m == n))


def test_spin_current_in_closed_form() -> None:
    """J (Sx_j Sy_{j+1} - Sy_j Sx_{j+1}) on bond j of the xxz chain."""
    x, y = spins(6, "x"), spins(6, "y")
    for bond, current in enumerate(CHAINS["xxz"].observables()["charge_current"]):
        assert largest(current - 1.3 * (x[bond] @ y[bond + 1] - y[bond] @ x[bond + 1])) < 1e-12


@pytest.mark.parametrize(("name", "species", "hopping"), [("fermion", 1, 0.8), ("hubbard", 2, 0.9)])
def test_particle_current_in_closed_form(name: str, species: int, hopping: float) -> None:
    """-i t_h (c+_j c_{j+1} - h.c.) on bond j; in hubbard the sum over species, and half their difference."""
    chain = CHAINS[name]
    c = annihilators(species * chain.sites)
    for bond in range(chain.sites - 1):
        flows = []
        for kind in range(species):
            forward = c[species * bond + kind].T @ c[species * (bond + 1) + kind]
            flows.append(-1j * hopping * (forward - forward.T))
        assert largest(chain.observables()["charge_current"][bond] - total(flows)) < 1e-12
        if species == 2:
            assert largest(chain.observables()["spin_current"][bond] - 0.5 * (flows[0] - flows[1])) < 1e-12


def test_energy_current_needs_more_than_neighbouring_bonds() -> None:
    """With second neighbours the commutators of bonds up to three apart count: neighbours alone fail."""
    chain = CHAINS["xxz, second neighbours"]
    before, after = chain.terms[2], chain.terms[3]
    nearest = 1j * (before @ after - after @ before)
    assert largest(chain.observables()["energy_current"][3] - nearest) > 1e-2


@pytest.mark.parametrize("name", CHAINS)
def test_continuity_in_time(name: str) -> None:
    """Measured densities change by the measured currents: centred differences of order 4, to 1e-8."""
    chain, step = CHAINS[name], 4e-3
    times = (0.8 + step * np.array([-2.0, -1.0, 0.0, 1.0, 2.0])).tolist()
    beta = np.linspace(0.2, 1.0, chain.sites - 1)
    potentials = {charge: 0.5 * UNEVEN[: chain.sites] for charge in chain.charges}
    run = exact_quench(chain, beta=beta, potentials=potentials, times=times)
    slope = np.array([1.0, -8.0, 0.0, 8.0, -1.0]) / (12.0 * step)
    np.testing.assert_allclose(
        slope @ run["energy_density"], -np.diff(run["energy_current"][2]), rtol=0, atol=1e-8
    )
    assert np.abs(run["energy_current"]).max() > 1e-3
    for charge, current in (("charge_density", "charge_current"), ("magnetisation", "spin_current")):
        if charge in run:
            through = np.concatenate([[0.0], run[current][2], [0.0]])
            np.testing.assert_allclose(slope @ run[charge], -np.diff(through), rtol=0, atol=1e-8)
            assert np.abs(run[current]).max() > 1e-3


def test_on_site_terms_are_shared_as_the_conventions_say() -> None:
    """Half to each adjacent bond, wholly at the ends; second neighbours half to each of their two bonds."""
    z = spins(6, "z")
    bare, field = xxz(sites=6, anisotropy=0.5), xxz(sites=6, anisotropy=0.5, potential=UNEVEN)
    shares = [UNEVEN[0] * z[0] + 0.5 * UNEVEN[1] * z[1], 0.5 * (UNEVEN[1] * z[1] + UNEVEN[2] * z[2])]
    for bond, share in enumerate(shares):
        assert largest(field.terms[bond] - bare.terms[bond] - share) < 1e-14
    assert largest(field.terms[4] - bare.terms[4] - 0.5 * UNEVEN[4] * z[4] - UNEVEN[5] * z[5]) < 1e-14
    wide = xxz(sites=6, anisotropy=0.5, second=(0.4, 0.0))
    x, y = spins(6, "x"), spins(6, "y")
    for bond in range(5):
        pieces = [x[i] @ x[i + 2] + y[i] @ y[i + 2] for i in (bond - 1, bond) if 0 <= i <= 3]
        assert largest(wide.terms[bond] - bare.terms[bond] - 0.2 * total(pieces)) < 1e-14


def test_xxz_against_the_older_oracle() -> None:
    """Two dense solutions written apart agree on every observable, the entropy and ln Z."""
    settings: dict[str, Any] = {"beta": BETA_STEP, "times": [0.0, 1.3]}
    old = exact_chain.exact_evolution(
        sites=8, anisotropy=0.7, coupling=1.3, beta_field=FIELD_STEP, **settings
    )
    chain = xxz(sites=8, anisotropy=0.7, coupling=1.3)
    new = exact_quench(chain, potentials={"charge_density": FIELD_STEP}, entanglement=True, **settings)
    assert new.keys() == old.keys()
    for name, values in new.items():
        np.testing.assert_allclose(values, old[name], rtol=0, atol=1e-11, err_msg=name)


def test_fermions_are_the_xxz_chain() -> None:
    """J = 2 t_h, D = V/(2 t_h) to 1e-12, potentials and second neighbours included; the sign of t_h is a
    gauge."""
    potential, beta_mu = 0.5 * UNEVEN[EIGHT % 6], {"charge_density": FIELD_STEP}
    one = fermion(sites=8, repulsion=1.4, hopping=0.7, potential=potential)
    other = xxz(sites=8, anisotropy=1.0, coupling=1.4, potential=potential)
    runs = [
        exact_quench(chain, beta=BETA_STEP, potentials=beta_mu, times=[0.0, 1.0], entanglement=True)
        for chain in (one, other)
    ]
    for name, values in runs[0].items():
        np.testing.assert_allclose(values, runs[1][name], rtol=0, atol=1e-12, err_msg=name)


def test_two_hubbard_sites_in_closed_form() -> None:
    """The lowest level is -sqrt(U^2 + 16 t_h^2)/2 with (n - 1/2)(n - 1/2), at half filling; 16 levels."""
    levels = np.linalg.eigvalsh(hubbard(sites=2, repulsion=4.0, hopping=0.9).hamiltonian.toarray())
    assert levels[0] == pytest.approx(-0.5 * np.sqrt(16.0 + 16.0 * 0.81), abs=1e-12)
    assert levels.size == 16
    assert abs(levels.sum()) < 1e-12


def test_hubbard_without_hopping_in_closed_form() -> None:
    """Sites decouple: weights exp(b mu (n - 1) + b h Sz - beta_i U (n_up - 1/2)(n_dn - 1/2)).

    beta_i of a site is the mean of its bonds.
    """
    beta, interaction = np.array([0.2, 0.6, 1.0]), 3.0
    mu, field = np.array([0.1, 0.5, -0.3, 0.2]), np.array([0.4, -0.2, 0.3, 0.6])
    run = exact_quench(
        hubbard(sites=4, repulsion=interaction, hopping=0.0),
        beta=beta,
        potentials={"charge_density": mu, "magnetisation": field},
        times=[0.7],
    )
    on_site = np.array([0.2, 0.4, 0.8, 1.0]) * interaction / 4.0
    weights = np.array(
        [
            np.exp(-mu - on_site),
            np.exp(0.5 * field + on_site),
            np.exp(-0.5 * field + on_site),
            np.exp(mu - on_site),
        ]
    )
    chances = weights / weights.sum(axis=0)
    assert run["log_partition_function"] == pytest.approx(np.log(weights.sum(axis=0)).sum(), abs=1e-12)
    np.testing.assert_allclose(run["double_occupancy"][0], chances[3], rtol=0, atol=1e-12)
    np.testing.assert_allclose(run["charge_density"][0], chances[3] - chances[0], rtol=0, atol=1e-12)
    np.testing.assert_allclose(run["magnetisation"][0], 0.5 * (chances[1] - chances[2]), rtol=0, atol=1e-12)


@pytest.mark.literature
def test_critical_ising_ground_state() -> None:
    """Open chain at J = g: the lowest level is 1 - 1/sin(pi/(4 L + 2)).

    Source: T. W. Burkhardt, I. Guim, J. Phys. A 18, L33 (1985), from memory; Pauli matrices, J = 1.
    """
    for sites in (4, 7):
        levels = np.linalg.eigvalsh(ising(sites=sites, transverse_field=1.0).hamiltonian.toarray())
        assert levels[0] == pytest.approx(1.0 - 1.0 / np.sin(np.pi / (4 * sites + 2)), abs=1e-12)


def compare(free: dict[str, Any], exact: dict[str, Any]) -> None:
    assert set(free) | {"total_energy"} == set(exact)
    for name, values in free.items():
        np.testing.assert_allclose(values, exact[name], rtol=0, atol=1e-11, err_msg=name)


@pytest.mark.parametrize("ratio", [0.5, 1.0, 2.0])
def test_free_ising_against_exact_chain(ratio: float) -> None:
    settings: dict[str, Any] = {"beta": BETA_STEP, "times": [0.0, 0.7, 3.0]}
    free = free_models.ising_quench(sites=8, transverse_field=1.2 * ratio, coupling=1.2, **settings)
    compare(free, exact_quench(ising(sites=8, transverse_field=1.2 * ratio, coupling=1.2), **settings))
    assert np.abs(free["energy_current"]).max() > 1e-2


def test_free_fermions_against_exact_chain() -> None:
    """V = 0 with a chemical potential in the start and a potential in H."""
    potential = 0.5 * UNEVEN[EIGHT % 6]
    settings: dict[str, Any] = {"beta": BETA_STEP, "times": [0.0, 0.7, 3.0]}
    free = free_models.fermion_quench(
        sites=8, hopping=0.8, potential=potential, beta_mu=FIELD_STEP, **settings
    )
    chain = fermion(sites=8, repulsion=0.0, hopping=0.8, potential=potential)
    compare(free, exact_quench(chain, potentials={"charge_density": FIELD_STEP}, **settings))


def test_free_hubbard_against_exact_chain() -> None:
    """U = 0 with a chemical potential and a field in the start."""
    mu, field = np.array([0.4, 0.1, -0.5, -0.2]), np.array([0.3, 0.6, -0.1, -0.8])
    settings: dict[str, Any] = {"beta": BETA_STEP[2:5], "times": [0.0, 0.7, 3.0]}
    free = free_models.hubbard_quench(sites=4, hopping=0.8, beta_mu=mu, beta_field=field, **settings)
    chain = hubbard(sites=4, repulsion=0.0, hopping=0.8)
    compare(free, exact_quench(chain, potentials={"charge_density": mu, "magnetisation": field}, **settings))


@pytest.mark.literature
@pytest.mark.parametrize("ratio", [0.5, 1.0, 2.0])
def test_bulk_of_the_free_ising_chain(ratio: float) -> None:
    """Energy and <sigma^z> in the middle of 80 sites at beta J = 1 are those of the infinite chain.

    Source: P. Pfeuty, Ann. Phys. 57, 79 (1970): modes of energy e_k = 2 sqrt(J^2 + g^2 - 2 J g cos k), hence
    ln Z per site = int dk/2pi ln(2 cosh(beta e_k/2)); correlations fall within a few sites at this
    temperature, so 1e-10.
    """
    run = free_models.ising_quench(sites=80, transverse_field=ratio, beta=1.0, times=[0.0])
    k = 2.0 * np.pi * (np.arange(2000) + 0.5) / 2000
    modes = 2.0 * np.sqrt(1.0 + ratio**2 - 2.0 * ratio * np.cos(k))
    filling = 0.5 * np.tanh(0.5 * modes)
    assert run["energy_density"][0, 39] == pytest.approx(-np.mean(modes * filling), abs=1e-10)
    slope = 4.0 * (ratio - np.cos(k)) / modes  # d e_k / d g
    assert run["transverse_magnetisation"][0, 40] == pytest.approx(np.mean(slope * filling), abs=1e-10)
