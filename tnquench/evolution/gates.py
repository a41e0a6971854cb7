"""Two-site gates as real matrices on the operator space, one small block a charge.

A Pauli string multiplies products of Pauli matrices by XOR of their letters and a phase, so its commutator
and anticommutator are one entry a column: the generators are written block by block and never as a dense
matrix on all products (256 x 256 for two qubits a site, where the blocks are 32 x 32).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import cache

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import expm

from tnquench.conventions import Integers, Reals
from tnquench.model.grading import Grading
from tnquench.model.pauli import PHASE, Operator, PauliString


@dataclass(frozen=True)
class Gate:
    """A charge-conserving linear map of two sites' operators.

    blocks : for each total charge of the two sites the matrix on their operators, flattened as (charge of the
             left site's operator, copy of the left, copy of the right), or None where the map is the identity
    """

    blocks: tuple[Reals | None, ...]


@dataclass(frozen=True)
class _Layout:
    """Where the operators of two sites stand in a gate's blocks.

    left, right : local operators of both sites in each block, shape (sectors, block size)
    place : position of a pair of local operators in its block, shape (operators, operators)
    """

    left: Integers
    right: Integers
    place: Integers


def real_time_gate(term: Operator, *, time: float, first: int, grading: Grading) -> Gate:
    """Return sigma -> exp(-i h t) sigma exp(i h t) for the bond term h on sites `first`, `first + 1`.

    Raises ValueError if the term acts elsewhere, is not Hermitian or breaks the grading.
    """
    # -i t (P Q - Q P) = 2 t Im(phase) with P Q = phase R, Q P = conj(phase) R
    return _exponential(2.0 * time * _generators(term, np.imag, first=first, grading=grading))


def imaginary_time_gate(term: Operator, *, beta: float, first: int, grading: Grading) -> Gate:
    """Return sigma -> exp(-beta k) sigma exp(-beta k) for the bond term k on sites `first`, `first + 1`.

    Raises ValueError if the term acts elsewhere, is not Hermitian or breaks the grading.
    """
    return _exponential(-2.0 * beta * _generators(term, np.real, first=first, grading=grading))


def swap_gate(grading: Grading) -> Gate:
    """Return the exchange of two neighbouring sites."""
    layout = _layout(grading)
    sectors, size = layout.left.shape
    blocks = np.zeros((sectors, size, size))
    charges, columns = np.ogrid[:sectors, :size]
    blocks[charges, layout.place[layout.right, layout.left], columns] = 1.0
    return _gate(blocks)


def composed(first: Gate, second: Gate) -> Gate:
    """Return the gate that applies `first`, then `second`."""
    return Gate(
        tuple(
            before if after is None else after if before is None else after @ before
            for before, after in zip(first.blocks, second.blocks, strict=True)
        )
    )


def apply_gate(gate: Gate, pair: Reals, *, left_slices: list[slice], right_slices: list[slice]) -> None:
    """Apply a gate to a two-site tensor in place.

    pair : shape (middle charge, multiplicity, multiplicity, left, right)
    left_slices, right_slices : index range of each charge on the outer bonds
    """
    flips = _flips(len(pair))
    split = pair.reshape(*(2,) * (len(flips[0]) - 1), -1, *pair.shape[3:])
    for left, rows in enumerate(left_slices):
        height = rows.stop - rows.start
        for right, columns in enumerate(right_slices):
            block, size = gate.blocks[left ^ right], height * (columns.stop - columns.start)
            if block is not None and size:
                part = split[(*flips[left], rows, columns)]
                part[...] = (block @ part.reshape(len(block), size)).reshape(part.shape)


def _generators(term: Operator, part: Callable[[complex], float], *, first: int, grading: Grading) -> Reals:
    """Return sum of coefficient times part(phase) over the strings of a term, by total charge.

    phase is that of the string times a product of Pauli matrices; shape (sectors, block size, block size)
    """
    layout = _layout(grading)
    sectors, size = layout.left.shape
    generators = np.zeros((sectors, size, size))
    charges, columns = np.ogrid[:sectors, :size]
    phases = _phases(grading.qubits_per_site)
    for string, coefficient in term.items():
        if abs(np.imag(coefficient)) > 1e-14 * max(1.0, abs(coefficient)):
            message = f"coefficient {coefficient} of {string} is not real: the term is not Hermitian"
            raise ValueError(message)
        a, b = _local_operators(string, first=first, qubits=grading.qubits_per_site)
        if grading.charge_of[a ^ b]:
            message = f"gate breaks the grading: {string} carries a charge"
            raise ValueError(message)
        phase = phases[a, layout.left] * phases[b, layout.right]
        generators[charges, layout.place[a ^ layout.left, b ^ layout.right], columns] += np.real(
            coefficient
        ) * part(phase)
    return generators


def _local_operators(string: PauliString, *, first: int, qubits: int) -> tuple[int, int]:
    """Return the numbers of a string's local operators on sites `first` and `first + 1`."""
    numbers = [0, 0]
    for qubit, letter in string:
        site = qubit // qubits - first
        if site not in (0, 1):
            message = f"bond term acts outside sites {first}, {first + 1}: {string}"
            raise ValueError(message)
        numbers[site] += letter << 2 * (qubit % qubits)
    return numbers[0], numbers[1]


def _exponential(generators: Reals) -> Gate:
    """Exponentiate one generator a charge."""
    return _gate(np.asarray(expm(generators)))


def _gate(blocks: Reals) -> Gate:
    """Keep one matrix a charge, None where it is the identity."""
    identity = np.eye(blocks.shape[1])
    return Gate(tuple(None if np.array_equal(block, identity) else block for block in blocks))


@cache
def _phases(qubits: int) -> NDArray[np.complex128]:
    """Return the phases of products of local operators numbered letter + 4 * next letter + ..."""
    table = PHASE
    for _ in range(qubits - 1):
        table = np.kron(PHASE, table).astype(np.complex128)
    return table


@cache
def _flips(sectors: int) -> list[tuple[slice, ...]]:
    """Return for each left charge the slices that turn the axis of middle charges, one axis a bit, and the
    copies after it, into those of the left site's operator, whose charge is middle XOR left."""
    bits = range(sectors.bit_length() - 2, -1, -1)
    return [
        (*(slice(None, None, -1 if left >> bit & 1 else 1) for bit in bits), slice(None))
        for left in range(sectors)
    ]


def _layout(grading: Grading) -> _Layout:
    """Return the flattened pairs of local operators of each total charge."""
    sectors, copies = grading.members.shape
    charges = np.arange(sectors)
    shape = (sectors, sectors, copies, copies)  # (total, charge of the left, copy of the left, of the right)
    left = np.broadcast_to(grading.members[None, :, :, None], shape).reshape(sectors, -1)
    right = np.broadcast_to(grading.members[charges[:, None] ^ charges][:, :, None, :], shape).reshape(
        sectors, -1
    )
    operators = len(grading.charge_of)
    place = np.empty((operators, operators), dtype=np.int64)
    place[left, right] = np.arange(left.shape[1])
    return _Layout(left, right, place)
