"""Expectation values of Pauli strings in random states against dense matrices, <O> = Tr(sigma O sigma).

The dense side is built from the tensors and written-out Pauli matrices alone: nothing of `observables`, no
phase table, no environment.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import reduce
from itertools import pairwise, product

import numpy as np
import pytest
from numpy.typing import NDArray

from tnquench.conventions import Reals
from tnquench.evolution.chain_state import ChainState, move_centre
from tnquench.model.grading import Grading, derive_grading
from tnquench.model.pauli import Operator, PauliString, X, Y, Z, string
from tnquench.observables.local import LocalObservables

PAULI = np.array([[[1, 0], [0, 1]], [[0, 1], [1, 0]], [[0, -1j], [1j, 0]], [[1, 0], [0, -1]]])

#: Terms that break symmetries, by qubits of a site and name: what is left has so many sectors.
ONE_QUBIT: dict[str, tuple[tuple[Operator, ...], int]] = {
    "unbroken": (({string((0, X), (1, X)): 1.0, string((0, Y), (1, Y)): 1.0},), 4),
    "field along z": (({string((0, Z)): 1.0},), 2),
    "field along x": (({string((0, X)): 1.0},), 2),
    "two fields": (({string((0, Z)): 1.0}, {string((0, X)): 1.0}), 1),
}
TWO_QUBITS: dict[str, tuple[tuple[Operator, ...], int]] = {
    "unbroken": (({string((0, X), (2, X)): 1.0},), 16),
    "both species coupled": (({string((0, Z), (1, Z)): 1.0},), 8),
    "field on one species": (({string((0, Z), (1, Z)): 1.0}, {string((0, Z)): 1.0}), 4),
    "three broken": (({string((0, Z), (1, Z)): 1.0}, {string((0, Z)): 1.0}, {string((0, X)): 1.0}), 2),
    "all broken": (tuple({string((qubit, letter)): 1.0} for qubit in (0, 1) for letter in (X, Z)), 1),
}


def random_state(grading: Grading, *, sites: int, largest: int, seed: int, centre: int) -> ChainState:
    """A unit vector of random tensors, in canonical form about one end.

    largest : most indices of one charge on a bond
    """
    generator = np.random.default_rng(seed)
    end = np.eye(1, grading.sectors, dtype=np.int64)[0]
    inner = [np.full(grading.sectors, generator.integers(1, largest + 1)) for _ in range(sites - 1)]
    bonds = [end, *inner, end]
    tensors = [
        generator.normal(size=(grading.multiplicity, int(left.sum()), int(right.sum())))
        for left, right in pairwise(bonds)
    ]
    state = ChainState(grading, tensors, bonds, centre=sites - 1 - centre)
    move_centre(state, centre)
    state.tensors[centre] /= np.linalg.norm(state.tensors[centre])
    return state


def dense_sigma(state: ChainState) -> NDArray[np.complex128]:
    """sigma as a matrix on all qubits, the first the most significant one."""
    grading = state.grading
    qubits = grading.qubits_per_site
    local = [
        reduce(np.kron, [PAULI[number >> 2 * position & 3] / np.sqrt(2.0) for position in range(qubits)])
        for number in range(4**qubits)
    ]
    grown = np.ones((1, 1, 1), dtype=np.complex128)  # (bond, row, column)
    for site, tensor in enumerate(state.tensors):
        matrices = np.zeros((*tensor.shape[1:], 2**qubits, 2**qubits), dtype=np.complex128)
        for left, rows in enumerate(state.sector_slices(site)):
            for right, columns in enumerate(state.sector_slices(site + 1)):
                for copy, number in enumerate(grading.members[left ^ right]):
                    matrices[rows, columns] += tensor[copy, rows, columns, None, None] * local[number]
        joined = np.einsum("lab,lrcd->racbd", grown, matrices, optimize=True)
        grown = joined.reshape(len(joined), grown.shape[1] * 2**qubits, -1)
    return np.asarray(grown[0])


def all_expectations(sigma: NDArray[np.complex128]) -> Reals:
    """Tr(sigma A sigma) of all Pauli strings A, one axis of four letters a qubit."""
    qubits = int(np.log2(len(sigma)))
    rest = (sigma @ sigma).reshape((2,) * 2 * qubits)
    for done in range(qubits):  # traces the first qubit left against the four letters
        rest = np.tensordot(rest, PAULI, axes=([0, qubits - done], [2, 1]))
    assert np.abs(rest.imag).max() < 1e-12
    return np.asarray(rest.real)


def operator_entropies(sigma: NDArray[np.complex128], *, sites: int) -> Reals:
    """Entropies (nats) of the squared Schmidt coefficients of sigma as a vector, one a bond."""
    entropies = []
    for cut in range(1, sites):
        left = round(len(sigma) ** (cut / sites))
        right = len(sigma) // left
        halves = sigma.reshape(left, right, left, right).transpose(0, 2, 1, 3).reshape(left**2, right**2)
        weights = np.linalg.svd(halves, compute_uv=False) ** 2
        weights = weights[weights > 1e-30]
        entropies.append(-(weights * np.log(weights)).sum())
    return np.array(entropies)


@dataclass(frozen=True)
class Case:
    """A chain with a broken or unbroken grading and some strings to be measured in it."""

    grading: Grading
    sites: int
    strings: Sequence[tuple[int, ...]]  # one letter a qubit

    def check(self, *, largest: int, seed: int, centre: int) -> Reals:
        """Measure forth and back and compare both with the dense matrix; returns the dense values."""
        state = random_state(
            self.grading, sites=self.sites, largest=largest, seed=seed, centre=centre * (self.sites - 1)
        )
        sigma = dense_sigma(state)
        assert np.trace(sigma @ sigma).real == pytest.approx(1.0, abs=1e-12)
        exact = all_expectations(sigma)
        expected = np.array([exact[letters] for letters in self.strings])
        entropies = operator_entropies(sigma, sites=self.sites)
        meter = LocalObservables(
            {"strings": [{written(letters): 1.0} for letters in self.strings]},
            sites=self.sites,
            grading=self.grading,
        )
        for _ in ("forth", "back"):
            before = state.centre
            values, measured_entropies = meter.measure(state)
            assert state.centre == self.sites - 1 - before
            np.testing.assert_allclose(values["strings"], expected, rtol=0.0, atol=1e-12)
            np.testing.assert_allclose(measured_entropies, entropies, rtol=0.0, atol=1e-11)
        np.testing.assert_allclose(dense_sigma(state), sigma, rtol=0.0, atol=1e-12)
        return expected


def written(letters: Sequence[int]) -> PauliString:
    """The Pauli string of one letter a qubit."""
    return string(*enumerate(letters))


@pytest.mark.parametrize("centre", [0, 1])
@pytest.mark.parametrize("broken", ONE_QUBIT)
def test_every_string_of_one_qubit_a_site(broken: str, centre: int) -> None:
    """All 1024 strings on five sites, of every width and with gaps; the sweep starts at either end."""
    terms, sectors = ONE_QUBIT[broken]
    grading = derive_grading(terms)
    assert (grading.sectors, grading.multiplicity) == (sectors, 4 // sectors)
    case = Case(grading, 5, list(product(range(4), repeat=5)))
    expected = case.check(largest=3, seed=1, centre=centre)
    assert np.count_nonzero(np.abs(expected) > 1e-3) > 900 // sectors


@pytest.mark.parametrize("broken", TWO_QUBITS)
def test_every_string_of_two_qubits_a_site(broken: str) -> None:
    """All 4096 strings on three sites of two qubits, as the Hubbard chain has them."""
    terms, sectors = TWO_QUBITS[broken]
    grading = derive_grading(terms, qubits_per_site=2)
    assert (grading.sectors, grading.multiplicity) == (sectors, 16 // sectors)
    case = Case(grading, 3, list(product(range(4), repeat=6)))
    expected = case.check(largest=2, seed=5 + sectors, centre=1)
    assert np.count_nonzero(np.abs(expected) > 1e-3) > 2000 // sectors


@pytest.mark.parametrize("broken", ["unbroken", "both species coupled", "three broken"])
def test_random_strings_on_four_sites_of_two_qubits(broken: str) -> None:
    terms, _ = TWO_QUBITS[broken]
    grading = derive_grading(terms, qubits_per_site=2)
    letters = np.random.default_rng(3).integers(0, 4, size=(2500, 8))
    charges = np.bitwise_xor.reduce(
        grading.charge_of[letters[:, ::2] + 4 * letters[:, 1::2]], axis=1
    )  # the strings without a charge, and a few of the others
    chosen = [*letters[charges == 0], *letters[charges != 0][:50]]
    case = Case(grading, 4, [tuple(int(letter) for letter in row) for row in chosen])
    expected = case.check(largest=2, seed=8, centre=0)
    assert np.count_nonzero(np.abs(expected) > 1e-4) > 80


def test_operators_are_sums_of_strings_and_constants() -> None:
    """Coefficients, constants, places where nothing acts, and strings shared by several observables."""
    grading = derive_grading(())
    state = random_state(grading, sites=4, largest=3, seed=2, centre=0)
    exact = all_expectations(dense_sigma(state))
    flips, gap, constant = string((1, X), (2, X)), string((0, Z), (3, Z)), string()
    values, _ = LocalObservables(
        {
            "sum": [{flips: 0.3, gap: -2.0, constant: 0.25}, {}, {constant: 1.0}],
            "shared": [{flips: 1.0 + 0.0j}],
        },
        sites=4,
        grading=grading,
    ).measure(state)
    expected = 0.3 * exact[0, X, X, 0] - 2.0 * exact[Z, 0, 0, Z] + 0.25
    np.testing.assert_allclose(values["sum"], [expected, 0.0, 1.0], rtol=0.0, atol=1e-13)
    np.testing.assert_allclose(values["shared"], [exact[0, X, X, 0]], rtol=0.0, atol=1e-13)


def test_measuring_twice_starts_from_the_constants_again() -> None:
    grading = derive_grading(())
    state = random_state(grading, sites=3, largest=2, seed=4, centre=0)
    meter = LocalObservables(
        {"one": [{string(): 0.5, string((0, X), (1, X)): 1.0}]}, sites=3, grading=grading
    )
    assert meter.shapes == {"one": 1}
    first, second = meter.measure(state)[0]["one"], meter.measure(state)[0]["one"]
    np.testing.assert_allclose(first, second, rtol=0.0, atol=1e-13)


def test_operators_outside_the_chain_are_refused() -> None:
    with pytest.raises(ValueError, match=r"density, place 1: operator acts outside a chain of 3 sites"):
        LocalObservables(
            {"density": [{}, {string((2, X), (3, X)): 1.0}]}, sites=3, grading=derive_grading(())
        )
