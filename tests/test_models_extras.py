"""Every extra term against exact diagonalisation: operators of whole chains, then whole quenches."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray

from tests.exact_cases import CASES, compare_whole_quench
from tnquench.model.catalogue import build_chain
from tnquench.model.extras import ExtraTerm
from tnquench.model.pauli import Operator, X, Y, Z

#: Cases of which comparing all operators is enough; a whole quench would show nothing more.
OPERATORS_ENOUGH = {
    "xxz, second neighbours as anisotropic",
    "hubbard, linear potential",
    "hubbard, alternating",
}
QUENCHED = [name for name, case in CASES.items() if case.extra is not None and name not in OPERATORS_ENOUGH]


def matrix_of(operator: Operator, qubits: int) -> NDArray[np.complex128]:
    """An operator's matrix, shape (2^qubits, 2^qubits): X flips a bit, Z weighs it, Y = i X Z does both."""
    states = np.arange(2**qubits)
    matrix = np.zeros((states.size, states.size), dtype=np.complex128)
    for term, coefficient in operator.items():
        image, amplitude = states, np.full(states.size, coefficient, dtype=np.complex128)
        for qubit, letter in term:
            weight = 2 ** (qubits - 1 - qubit)
            sign = 1.0 - 2.0 * (states // weight % 2)
            image = image if letter == Z else image ^ weight
            amplitude = amplitude * {X: 1.0, Y: 1j * sign, Z: sign}[letter]
        matrix[image, states] += amplitude
    return matrix


def in_order_of_the_oracle(model: str, matrix: NDArray[np.complex128]) -> NDArray[np.complex128]:
    """A matrix of the program on eight qubits in the oracle's basis, which differs for fermions.

    An occupied level is bit 0 in the program and bit 1 in the oracle. With two species the oracle has one
    string for both, the program one for each: a factor (-1)^(n_down,i n_up,j) for i < j.
    """
    if model not in ("fermion", "hubbard"):
        return matrix
    matrix = matrix[::-1, ::-1]
    if model == "hubbard":
        filled = np.arange(2**8)[:, None] // 2 ** np.arange(7, -1, -1) % 2  # of modes 0 ... 7
        down, up = filled[:, 1::2], filled[:, 0::2]
        pairs = np.sum([down[:, i] * up[:, j] for i in range(4) for j in range(i + 1, 4)], axis=0)
        signs = (-1.0) ** pairs
        matrix = signs[:, None] * matrix * signs[None, :]
    return matrix


@pytest.mark.parametrize("name", [name for name in CASES if name != "hubbard, five sites"])
def test_operators_are_those_of_the_definition(name: str) -> None:
    """The matrices of all observables, to 1e-12: signs, shares among bonds and currents of every extra."""
    case = CASES[name]
    matrices = case.exact().observables()
    observables = case.build()[0].observables()
    assert observables.keys() == matrices.keys()
    for observable, operators in observables.items():
        for operator, matrix in zip(operators, matrices[observable], strict=True):
            found = in_order_of_the_oracle(case.model, matrix_of(operator, 8))
            assert np.abs(found - matrix.toarray()).max() < 1e-12, observable


@pytest.mark.parametrize("name", QUENCHED)
def test_short_quench_agrees_with_exact_diagonalisation(name: str) -> None:
    """Every observable to 1e-7 at discarded weight 1e-14, t up to 2."""
    compare_whole_quench(CASES[name])


@pytest.mark.parametrize("kind", ["bond_disorder", "site_disorder"])
def test_seeds_reproduce_disorder_exactly(kind: str) -> None:
    """Equal seeds give equal numbers, bit by bit; another seed gives other ones on every bond."""

    def terms(seed: int) -> tuple[Operator, ...]:
        extra = ExtraTerm(kind, strength=0.5, seed=seed)
        parameters = {"coupling": 1.0, "anisotropy": 0.5}
        return build_chain("xxz", sites=8, parameters=parameters, extras=[extra])[0].bond_terms

    assert terms(7) == terms(7)
    assert all(one != other for one, other in zip(terms(7), terms(8), strict=True))
