"""Operators as sums of Pauli strings, with their products and commutators.

A letter is 0 (identity), 1 (X), 2 (Y) or 3 (Z), so that the letter of a product of two Pauli matrices is the
bitwise XOR of their letters. A string is a sorted tuple of (qubit, letter) without identities; an operator
maps strings to coefficients.
"""

from __future__ import annotations

from collections.abc import Mapping
from functools import reduce

import numpy as np
from numpy.typing import NDArray

PauliString = tuple[tuple[int, int], ...]
Operator = Mapping[PauliString, complex]

X, Y, Z = 1, 2, 3

#: PHASE[a, b] is the factor in P_a P_b = PHASE[a, b] P_(a xor b).
PHASE: NDArray[np.complex128] = np.array(
    [[1, 1, 1, 1], [1, 1, 1j, -1j], [1, -1j, 1, 1j], [1, 1j, -1j, 1]], dtype=np.complex128
)

PAULI_MATRICES: NDArray[np.complex128] = np.array(
    [[[1, 0], [0, 1]], [[0, 1], [1, 0]], [[0, -1j], [1j, 0]], [[1, 0], [0, -1]]], dtype=np.complex128
)


def string(*factors: tuple[int, int]) -> PauliString:
    """Return the Pauli string of the given (qubit, letter) factors, in the order of the qubits."""
    return tuple(sorted(factor for factor in factors if factor[1]))


def multiply_strings(first: PauliString, second: PauliString) -> tuple[complex, PauliString]:
    """Return the phase and the string of the product `first` times `second`."""
    letters = dict(first)
    phase: complex = 1.0
    for qubit, letter in second:
        before = letters.get(qubit, 0)
        phase *= complex(PHASE[before, letter])
        letters[qubit] = before ^ letter
    return phase, string(*letters.items())


def add(*operators: Operator) -> dict[PauliString, complex]:
    """Return the sum of the operators; strings whose coefficients cancel are dropped."""
    total: dict[PauliString, complex] = {}
    for operator in operators:
        for term, coefficient in operator.items():
            total[term] = total.get(term, 0.0) + coefficient
    return {term: coefficient for term, coefficient in total.items() if coefficient != 0}


def scale(operator: Operator, factor: complex) -> dict[PauliString, complex]:
    """Return `factor` times the operator."""
    return {term: factor * coefficient for term, coefficient in operator.items() if factor * coefficient != 0}


def multiply(first: Operator, second: Operator) -> dict[PauliString, complex]:
    """Return the product of two operators."""
    total: dict[PauliString, complex] = {}
    for left, left_coefficient in first.items():
        for right, right_coefficient in second.items():
            phase, term = multiply_strings(left, right)
            total[term] = total.get(term, 0.0) + phase * left_coefficient * right_coefficient
    return {term: coefficient for term, coefficient in total.items() if coefficient != 0}


def commutator(first: Operator, second: Operator) -> dict[PauliString, complex]:
    """Return the commutator [first, second]."""
    return add(multiply(first, second), scale(multiply(second, first), -1.0))


def support(operator: Operator) -> tuple[int, int]:
    """Return the first and the last qubit on which the operator acts; (0, 0) for a multiple of the
    identity."""
    qubits = [qubit for term in operator for qubit, _ in term]
    return (min(qubits), max(qubits)) if qubits else (0, 0)


def dense(operator: Operator, *, first: int, qubits: int) -> NDArray[np.complex128]:
    """Return the matrix of the operator on qubits `first` .. `first + qubits - 1`, shape (2^qubits,
    2^qubits).

    The first qubit is the most significant one. Raises ValueError if the operator acts outside the window.
    """
    matrix = np.zeros((2**qubits, 2**qubits), dtype=np.complex128)
    for term, coefficient in operator.items():
        letters = [0] * qubits
        for qubit, letter in term:
            if not first <= qubit < first + qubits:
                message = f"operator acts on qubit {qubit}, outside {first}..{first + qubits - 1}"
                raise ValueError(message)
            letters[qubit - first] = letter
        matrix += coefficient * reduce(np.kron, [PAULI_MATRICES[letter] for letter in letters])
    return matrix


def operator_norm(operator: Operator) -> float:
    """Return the largest absolute eigenvalue of a Hermitian operator of a few qubits."""
    first, last = support(operator)
    return float(np.abs(np.linalg.eigvalsh(dense(operator, first=first, qubits=last - first + 1))).max())
