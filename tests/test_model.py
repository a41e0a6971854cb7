"""The operators of a chain against dense matrices; its grading against the symmetries left by its terms."""

from __future__ import annotations

import numpy as np
import pytest

from tests.oracles import exact_chain
from tnquench.conventions import bond_positions, site_positions
from tnquench.model import profiles
from tnquench.model.chain import share_among_bonds, start_terms
from tnquench.model.grading import derive_grading
from tnquench.model.pauli import X, Y, Z, add, commutator, dense, multiply, operator_norm, scale, string
from tnquench.model.spins import xxz_chain

SITES = 5


@pytest.mark.parametrize("anisotropy", [0.0, 0.5, -1.3])
def test_every_observable_is_the_operator_of_its_definition(anisotropy: float) -> None:
    chain = xxz_chain(sites=SITES, anisotropy=anisotropy, coupling=1.7)
    terms = exact_chain.local_hamiltonian(sites=SITES, anisotropy=anisotropy, coupling=1.7)
    expected = {
        "energy_density": terms,
        "energy_current": exact_chain.energy_currents(terms),
        "charge_density": exact_chain.magnetisations(sites=SITES),
        "charge_current": exact_chain.spin_currents(sites=SITES, coupling=1.7),
    }
    for name, operators in chain.observables().items():
        assert len(operators) == len(expected[name])
        for ours, theirs in zip(operators, expected[name], strict=True):
            np.testing.assert_allclose(dense(ours, first=0, qubits=SITES), theirs.toarray(), atol=1e-14)


def test_pauli_algebra_follows_the_matrices() -> None:
    first = {string((0, X), (1, Y)): 0.3, string((1, Z)): -1.1}
    second = {string((0, Z), (1, X)): 0.7j, string((0, Y)): 2.0}
    a, b = dense(first, first=0, qubits=2), dense(second, first=0, qubits=2)
    np.testing.assert_allclose(dense(multiply(first, second), first=0, qubits=2), a @ b, atol=1e-15)
    np.testing.assert_allclose(dense(commutator(first, second), first=0, qubits=2), a @ b - b @ a, atol=1e-15)
    assert add(first, scale(first, -1.0)) == {}


def test_operator_norm_of_a_bond_is_the_singlet_energy() -> None:
    """S.S of two spins 1/2 has eigenvalues 1/4 (triplet) and -3/4 (singlet)."""
    assert operator_norm(xxz_chain(sites=2, anisotropy=1.0).bond_terms[0]) == pytest.approx(0.75, abs=1e-14)


def test_site_terms_keep_their_sum_when_shared_among_bonds() -> None:
    chain = xxz_chain(sites=4, anisotropy=1.0)
    fields = tuple(
        scale(charge, weight)
        for charge, weight in zip(chain.charges["charge_density"], (1.0, -2.0, 3.0, 0.5), strict=True)
    )
    shared = share_among_bonds(fields)
    assert dict(add(*shared)) == pytest.approx(dict(add(*fields)))
    assert dict(shared[0]) == pytest.approx({string((0, Z)): 0.5, string((1, Z)): -0.5})


def test_start_exponent_lowers_the_energy_of_spins_along_the_field() -> None:
    chain = xxz_chain(sites=2, anisotropy=0.0)
    (term,) = start_terms(chain, beta=[2.0], potentials={"charge_density": [1.0, 0.0]})
    assert term[string((0, Z))] == pytest.approx(-0.5)
    assert term[string((0, X), (1, X))] == pytest.approx(0.5)


def test_grading_has_four_sectors_without_and_two_with_a_field() -> None:
    chain = xxz_chain(sites=6, anisotropy=0.5)
    plain = derive_grading(chain.bond_terms)
    assert (plain.sectors, plain.multiplicity) == (4, 1)
    along_z = derive_grading((*chain.bond_terms, *chain.charges["charge_density"]))
    assert (along_z.sectors, along_z.multiplicity) == (2, 2)
    assert along_z.charge_of[0] == along_z.charge_of[Z] == 0
    assert along_z.charge_of[X] == along_z.charge_of[Y] == 1


def test_grading_without_any_symmetry_has_one_sector() -> None:
    chain = xxz_chain(sites=3, anisotropy=0.5)
    fields = {string((0, X)): 1.0, string((1, Z)): 1.0}
    grading = derive_grading((*chain.bond_terms, fields))
    assert (grading.sectors, grading.multiplicity) == (1, 4)


def test_profiles() -> None:
    x = bond_positions(6)
    np.testing.assert_allclose(profiles.step(x, left=1.0, right=3.0), [1.0, 1.0, 2.0, 3.0, 3.0], atol=0.0)
    smooth = profiles.step(x, left=1.0, right=3.0, width=0.5)
    assert smooth[0] == pytest.approx(1.0 + (1.0 + np.tanh(-4.0)), rel=1e-12)
    assert profiles.bump(np.array([0.0, 2.0]), base=1.0, height=0.5, width=2.0) == pytest.approx(
        [1.5, 1.0 + 0.5 * np.exp(-0.5)]
    )
    assert profiles.wave(np.array([0.0, 3.0]), base=1.0, height=0.5, length=6.0) == pytest.approx([1.5, 0.5])
    assert profiles.uniform(site_positions(3), value=2.0) == pytest.approx([2.0, 2.0, 2.0])
