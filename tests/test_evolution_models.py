"""The engine with two qubits a site and with terms beyond neighbours, against dense complex matrices.

The dense side knows nothing of gates: it adds Kronecker products with letters of its own, exponentiates
exp(-K/2) and exp(-i H t) by diagonalisation, and is compared with the chain contracted to a matrix.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from math import log2
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray

from tnquench.conventions import Reals
from tnquench.evolution.chain_state import ChainState, distance
from tnquench.evolution.cutting import CutRule
from tnquench.evolution.preparation import Preparation, prepare
from tnquench.evolution.real_time import Moment, evolve
from tnquench.evolution.trotter import SCHEMES
from tnquench.model.grading import derive_grading
from tnquench.model.pauli import Operator

Complexes = NDArray[np.complex128]

LETTERS = "IXYZ"
MATRICES: dict[str, Complexes] = {
    "I": np.array([[1, 0], [0, 1]], dtype=np.complex128),
    "X": np.array([[0, 1], [1, 0]], dtype=np.complex128),
    "Y": np.array([[0, -1j], [1j, 0]], dtype=np.complex128),
    "Z": np.array([[1, 0], [0, -1]], dtype=np.complex128),
}

#: A term of a test: the letter on each qubit it touches, and its coefficient.
Words = Mapping[str, float]


def word(*factors: tuple[int, str]) -> str:
    """A term's name, for example "0X 3Z"."""
    return " ".join(f"{qubit}{letter}" for qubit, letter in factors)


def engine_operator(words: Words) -> Operator:
    return {
        tuple((int(factor[:-1]), LETTERS.index(factor[-1])) for factor in name.split()): value
        for name, value in words.items()
    }


def product_of(letters: str) -> Complexes:
    """Kronecker product of one matrix a qubit."""
    matrix = MATRICES[letters[0]]
    for letter in letters[1:]:
        matrix = np.asarray(np.kron(matrix, MATRICES[letter]), dtype=np.complex128)
    return matrix


def dense_operator(words: Words, qubits: int) -> Complexes:
    total = np.zeros((2**qubits, 2**qubits), dtype=np.complex128)
    for name, value in words.items():
        letters = ["I"] * qubits
        for factor in name.split():
            letters[int(factor[:-1])] = factor[-1]
        total += value * product_of("".join(letters))
    return total


def hermitian_function(matrix: Complexes, function: Callable[[Reals], NDArray[Any]]) -> Complexes:
    levels, vectors = np.linalg.eigh(matrix)
    return np.asarray((vectors * function(levels)) @ vectors.conj().T)


def contracted(state: ChainState) -> Complexes:
    """The chain as one matrix: sum of its coefficients times products of normalised Pauli matrices."""
    grading, qubits = state.grading, state.grading.qubits_per_site
    locals_ = [
        product_of("".join(LETTERS[number >> 2 * q & 3] for q in range(qubits))) / 2.0 ** (0.5 * qubits)
        for number in range(4**qubits)
    ]
    carried = np.ones((1, 1, 1), dtype=np.complex128)  # (rows, columns, bond)
    for site, tensor in enumerate(state.tensors):
        following = np.zeros((*np.multiply(carried.shape[:2], 2**qubits), tensor.shape[2]), dtype=complex)
        for left, rows in enumerate(state.sector_slices(site)):
            for right, columns in enumerate(state.sector_slices(site + 1)):
                for copy, number in enumerate(grading.members[left ^ right]):
                    part = carried[:, :, rows] @ tensor[copy, rows, columns]
                    grown = np.einsum("abr,cd->acbdr", part, locals_[number])
                    following[:, :, columns] += grown.reshape(*following.shape[:2], -1)
        carried = following
    return np.asarray(carried[:, :, 0])


# ---------------------------------------------------------------------------------------------------------
# chains: bond terms as words, so that the sum is the Hamiltonian
# ---------------------------------------------------------------------------------------------------------


def hubbard_bonds(sites: int, repulsion: float, *, axis: str = "") -> list[dict[str, float]]:
    """-t (c+c + h.c.) of both species is -(t/2)(XX + YY), U (n-1/2)(n-1/2) is (U/4) ZZ; random fields along
    an axis. An on-site term stands half on each of its bonds, wholly on the only one at an end."""
    random = np.random.default_rng(3)
    bonds = [
        {word((2 * bond + s, letter), (2 * bond + 2 + s, letter)): -0.5 for s in (0, 1) for letter in "XY"}
        for bond in range(sites - 1)
    ]
    for site in range(sites):
        onsite = {word((2 * site, "Z"), (2 * site + 1, "Z")): 0.25 * repulsion} if repulsion else {}
        if axis:
            onsite |= {word((2 * site + s, axis)): float(random.uniform(-1, 1)) for s in (0, 1)}
        adjacent = [bond for bond in (site - 1, site) if 0 <= bond < sites - 1]
        for bond in adjacent:
            for name, value in onsite.items():
                bonds[bond][name] = bonds[bond].get(name, 0.0) + value / len(adjacent)
    return bonds


def exchange_bonds(sites: int, beyond: float, *, axis: str = "") -> list[dict[str, float]]:
    """xxz at D = 0.5 and an exchange of strength `beyond` on (i, i + 2), half on bonds i and i + 1; random
    fields along an axis, each handed over with some other bond's term."""
    random = np.random.default_rng(1)
    shapes = {"X": 0.25, "Y": 0.25, "Z": 0.125}
    bonds = [{word((j, s), (j + 1, s)): value for s, value in shapes.items()} for j in range(sites - 1)]
    for first in range(sites - 2):
        for bond in (first, first + 1):
            bonds[bond] |= {word((first, s), (first + 2, s)): 0.5 * beyond * v for s, v in shapes.items()}
    if axis:
        for site in range(sites):
            bonds[(site + 3) % (sites - 1)] |= {word((site, axis)): float(random.uniform(-1, 1))}
    return bonds


def weighted(bonds: Sequence[Words], beta: Sequence[float]) -> list[dict[str, float]]:
    return [{name: b * v for name, v in words.items()} for words, b in zip(bonds, beta, strict=True)]


def dense_sum(bonds: Sequence[Words], qubits: int) -> Complexes:
    return np.asarray(sum(dense_operator(words, qubits) for words in bonds))


class Case:
    """One chain with a start whose temperature varies, in both languages."""

    def __init__(
        self, bonds: Sequence[Words], *, qubits_per_site: int = 1, hottest: float = 0.3, coldest: float = 1.1
    ) -> None:
        self.sites = len(bonds) + 1
        start = weighted(bonds, np.linspace(hottest, coldest, len(bonds)).tolist())
        self.terms = [engine_operator(words) for words in bonds]
        self.start_terms = [engine_operator(words) for words in start]
        self.grading = derive_grading([*self.terms, *self.start_terms], qubits_per_site=qubits_per_site)
        self.hamiltonian = dense_sum(bonds, self.sites * qubits_per_site)
        self.exponent = dense_sum(start, self.sites * qubits_per_site)

    def prepared(self, distance_target: float = 1e-6, *, bond_ceiling: int = 2**31) -> Preparation:
        return prepare(
            self.start_terms,
            sites=self.sites,
            grading=self.grading,
            distance_target=distance_target,
            rule=CutRule(1e-14, bond_ceiling=bond_ceiling),
        )

    def evolved(self, state: ChainState, *, order: int, steps: int, weight: float = 1e-24) -> Moment:
        """The state at t = 1, after so many steps."""
        moments = evolve(
            state.copy(),
            self.terms,
            every=1.0,
            samples=1,
            time_step=1.0 / steps,
            scheme=SCHEMES[order],
            rule=CutRule(weight, bond_floor=1),
        )
        return list(moments)[-1]

    def exactly_evolved(self, sigma: Complexes) -> Complexes:
        """sigma at t = 1."""
        turn = hermitian_function(self.hamiltonian, lambda levels: np.exp(-1j * levels))
        return np.asarray(turn @ sigma @ turn.conj().T)

    def square_root(self) -> Complexes:
        """sqrt(rho_0)."""
        root = hermitian_function(self.exponent, lambda levels: np.exp(-0.5 * (levels - levels[0])))
        return np.asarray(root / np.linalg.norm(root))


CASES: dict[str, Case] = {
    "hubbard": Case(hubbard_bonds(3, 4.0), qubits_per_site=2),
    "hubbard without repulsion": Case(hubbard_bonds(3, 0.0), qubits_per_site=2),
    "hubbard, fields along z": Case(hubbard_bonds(4, 4.0, axis="Z"), qubits_per_site=2),
    "hubbard, fields along x": Case(hubbard_bonds(3, 4.0, axis="X"), qubits_per_site=2),
    "exchange beyond neighbours, 3 sites": Case(exchange_bonds(3, 0.6)),
    "exchange beyond neighbours, 6 sites": Case(exchange_bonds(6, 0.6, axis="X")),
    "exchange beyond neighbours, 7 sites": Case(exchange_bonds(7, -0.4)),
    "exchange beyond neighbours, 8 sites": Case(exchange_bonds(8, 0.6)),
}


def test_cases_cover_the_gradings() -> None:
    """Sectors and operators that share a charge, of one and of two qubits."""
    found = {(case.grading.sectors, case.grading.multiplicity) for case in CASES.values()}
    assert found == {(8, 2), (16, 1), (4, 4), (2, 8), (4, 1), (2, 2)}


@pytest.mark.parametrize("name", CASES)
def test_start_agrees_with_dense_matrices(name: str) -> None:
    case = CASES[name]
    start = case.prepared()
    true = float(np.linalg.norm(contracted(start.state) - case.square_root()))
    assert start.reached
    assert true <= start.distance <= 30.0 * true
    partition = np.exp(-np.linalg.eigvalsh(case.exponent)).sum()
    assert start.log_partition_function == pytest.approx(float(np.log(partition)), abs=1e-5)


@pytest.mark.parametrize(
    ("name", "order", "steps"),
    [
        (name, order, steps)
        for name, case in CASES.items()
        for order, steps in ((2, 10), (4, 6))
        if (case.sites, order) not in ((7, 4), (8, 4))  # long chains take long
    ],
)
def test_evolution_agrees_with_dense_matrices(name: str, order: int, steps: int) -> None:
    """Halving the step divides the norm of the whole state's error by 2^order."""
    case = CASES[name]
    start = case.prepared(1e-3).state
    exact = case.exactly_evolved(contracted(start))
    errors = [
        float(np.linalg.norm(contracted(case.evolved(start, order=order, steps=n).state) - exact))
        for n in (steps, 2 * steps)
    ]
    assert log2(errors[0] / errors[1]) == pytest.approx(order, abs=0.15)
    assert errors[1] < (1e-3 if order == 2 else 1e-6)


@pytest.mark.parametrize("name", ["hubbard, fields along z", "exchange beyond neighbours, 7 sites"])
def test_truncated_evolution_stays_within_its_ledger(name: str) -> None:
    """The state cut all along is as far from the uncut one as the ledger's bound allows, and not much nearer
    than independent errors would bring it."""
    case = CASES[name]
    start = case.prepared(1e-3).state
    uncut, rough = (case.evolved(start, order=2, steps=8, weight=weight) for weight in (1e-26, 1e-6))
    chord = float(np.linalg.norm(contracted(rough.state) - contracted(uncut.state)))
    assert chord == pytest.approx(distance(rough.state, uncut.state), abs=1e-12)
    lost = float(rough.cuts.discarded_weight.sum())
    assert rough.cuts.cuts == uncut.cuts.cuts
    assert 0.2 * np.sqrt(lost) < chord <= 2.0 * np.sin(0.5 * rough.cuts.angle.sum())
    assert chord > 1e-3, "nothing was cut: the test says nothing"
    assert_canonical(rough.state)


def assert_canonical(state: ChainState) -> None:
    """Unit norm at the centre, isometries elsewhere; indices of different charge are orthogonal by charge."""
    for site, tensor in enumerate(state.tensors):
        axes, bond = ((0, 1), site + 1) if site < state.centre else ((0, 2), site)
        gram = np.tensordot(tensor, tensor, axes=(axes, axes))
        if site != state.centre:
            for block in state.sector_slices(bond):
                np.testing.assert_allclose(gram[block, block], np.eye(block.stop - block.start), atol=1e-12)
    assert float(np.linalg.norm(contracted(state))) == pytest.approx(1.0, abs=1e-12)


COLD = {
    "xxz": Case(exchange_bonds(8, 0.0), hottest=10.0, coldest=10.0),
    "exchange beyond neighbours": Case(exchange_bonds(5, 0.6), hottest=10.0, coldest=10.0),
    "hubbard": Case(hubbard_bonds(3, 8.0), qubits_per_site=2, hottest=10.0, coldest=10.0),
}


@pytest.mark.parametrize("name", COLD)
def test_start_at_beta_ten_is_reached(name: str) -> None:
    case = COLD[name]
    start = case.prepared(3e-6)
    true = float(np.linalg.norm(contracted(start.state) - case.square_root()))
    assert start.reached
    assert true <= start.distance <= 30.0 * true


def test_start_under_a_bond_ceiling_admits_that_it_is_not_reached() -> None:
    case = COLD["xxz"]
    start = case.prepared(3e-6, bond_ceiling=24)
    true = float(np.linalg.norm(contracted(start.state) - case.square_root()))
    assert not start.reached
    assert 3e-6 < true <= start.distance
