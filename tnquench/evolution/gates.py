"""Two-site gates as real matrices on the operator space, one small block a charge.

A Pauli string multiplies products of Pauli matrices by XOR of their letters and a phase, so its commutator
and anticommutator are one entry a column: the generators are written block by block and never as a dense
matrix on all products (256 x 256 for two qubits a site, where the blocks are 32 x 32).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import cache, cached_property
from math import isqrt

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import expm

from tnquench.conventions import Integers, Reals
from tnquench.evolution.threads import for_each_charge
from tnquench.model.grading import Grading
from tnquench.model.pauli import PHASE, Operator, PauliString

#: A gate is memory traffic: about so many times slower than its floating-point operations.
SLOWER_THAN_FLOPS = 4.0

#: Entries of a two-site tensor from which gates are applied in portions, and of a portion.
IN_PORTIONS_FROM, PORTION = 400_000, 65_536


@dataclass(frozen=True)
class Gate:
    """A charge-conserving linear map of two sites' operators.

    charges : total charges of the two sites where the map is not the identity, (active,)
    blocks : for each of them the matrix on the sites' operators, flattened as (charge of the left site's
             operator, copy of the left, copy of the right), shape (active, size, size)
    copies : local operators of one charge
    """

    charges: Integers
    blocks: Reals
    copies: int

    @cached_property
    def mirrored(self) -> Gate:
        """The gate as it acts on the mirror image of a two-site tensor, whose sites have changed places."""
        active, size, _ = self.blocks.shape
        sectors = size // self.copies**2
        places = np.arange(size).reshape(sectors, self.copies, self.copies).swapaxes(1, 2)
        orders = [places[charge ^ np.arange(sectors)].ravel() for charge in self.charges.tolist()]
        order = np.array(orders, dtype=np.int64).reshape(active, size)
        which = np.arange(active)[:, None, None]
        blocks = self.blocks[which, order[:, :, None], order[:, None, :]]
        return Gate(self.charges, blocks, self.copies)


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


def composed(first: Gate, second: Gate, *, sectors: int) -> Gate:
    """Return the gate that applies `first`, then `second`."""
    size = first.blocks.shape[1]
    both = []
    for gate in (first, second):
        whole = np.broadcast_to(np.eye(size), (sectors, size, size)).copy()
        whole[gate.charges] = gate.blocks
        both.append(whole)
    return _gate(both[1] @ both[0])


def apply_gate(gate: Gate, pair: Reals) -> None:
    """Apply a gate to a two-site tensor in place.

    pair : contiguous, shape (middle charge, multiplicity, left, multiplicity, right), where an outer bond
    holds equally many indices of each charge or, at an end of the chain, a single neutral one
    """
    sectors, copies, left, _, right = pair.shape
    outer = [(1, 1) if size == 1 else (sectors, size // sectors) for size in (left, right)]
    active = _reachable(gate.charges, outer)
    if not active.any():
        return
    split = pair.reshape(sectors, copies, *outer[0], copies, *outer[1])
    if pair.size < IN_PORTIONS_FROM or 1 in (left, right):
        _mix_at_once(
            split,
            gate.blocks[active],
            [each[gate.charges[active]] for each in _places(sectors, outer[0][0], outer[1][0])],
        )
        return

    def one(charge: int) -> None:
        _mix_in_portions(split, gate, charge)

    for_each_charge(one, sectors, flops=2.0 * pair.size * gate.blocks.shape[1] * SLOWER_THAN_FLOPS)


def _mix_at_once(split: Reals, blocks: Reals, places: list[Integers]) -> None:
    """Apply the blocks of all total charges in place; places : middle, left and right charges of each."""
    middle, lefts, rights = places
    part = split[middle, :, lefts, :, :, rights, :]  # (active, operator, outer charges, copy, l, copy, r)
    copies, shape = split.shape[1], part.shape
    flat = part.transpose(0, 1, 3, 5, 2, 4, 6)
    mapped = blocks @ flat.reshape(len(part), blocks.shape[2], -1)
    split[middle, :, lefts, :, :, rights, :] = mapped.reshape(
        *shape[:2], copies, copies, shape[2], shape[4], shape[6]
    ).transpose(0, 1, 4, 2, 5, 3, 6)


def _mix_in_portions(split: Reals, gate: Gate, left: int) -> None:
    """Apply the gate in place at one charge of the left bond, in portions that stay in the processor's cache.

    The blocks are sorted by the charge of the left site's operator, which is `left` XOR the middle charge.
    """
    sectors, copies = split.shape[:2]
    size = gate.blocks.shape[1]
    sorted_by_middle = (left ^ np.arange(sectors))[:, None] * copies**2 + np.arange(copies**2)
    order = sorted_by_middle.ravel()
    rows = max(1, PORTION // (size * split.shape[6]))
    for charge, block in zip(gate.charges.tolist(), gate.blocks, strict=True):
        mixing = block[np.ix_(order, order)]
        whole = split[:, :, left, :, :, left ^ charge].transpose(0, 1, 3, 2, 4)  # (middle, copy, copy, l, r)
        for first in range(0, whole.shape[3], rows):
            part = whole[:, :, :, first : first + rows]
            part[...] = (mixing @ part.reshape(size, -1)).reshape(part.shape)


def _reachable(charges: Integers, outer: list[tuple[int, int]]) -> Integers:
    """Return which total charges a pair of sites can have: both ends of a chain leave the neutral one."""
    return charges == 0 if outer[0][0] == outer[1][0] == 1 else np.ones(len(charges), dtype=np.bool_)


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
    """Keep the matrices, one a charge, that are not the identity."""
    identity = np.eye(blocks.shape[1])
    charges = np.array(
        [c for c, block in enumerate(blocks) if not np.array_equal(block, identity)], dtype=np.int64
    )
    copies = isqrt(blocks.shape[1] // len(blocks))
    return Gate(charges, np.ascontiguousarray(blocks[charges]), copies)


@cache
def _phases(qubits: int) -> NDArray[np.complex128]:
    """Return the phases of products of local operators numbered letter + 4 * next letter + ..."""
    table = PHASE
    for _ in range(qubits - 1):
        table = np.kron(PHASE, table).astype(np.complex128)
    return table


@cache
def _places(sectors: int, left: int, right: int) -> tuple[Integers, Integers, Integers]:
    """Return middle, left and right charge of every block of a two-site tensor, each of shape (total charge
    of the two sites, charge of the left site's operator, pair of outer charges).

    left, right : numbers of charges on the outer bonds, all or the neutral one alone
    The outer charges differ by the total charge; the left site's operator carries left XOR middle.
    """
    totals, operators = np.arange(sectors)[:, None, None], np.arange(sectors)[None, :, None]
    if left == 1:
        lefts, rights = np.zeros_like(totals), totals if right > 1 else np.zeros_like(totals)
    elif right == 1:
        lefts, rights = totals, np.zeros_like(totals)
    else:
        lefts = np.arange(sectors)[None, None, :]
        rights = lefts ^ totals
    middle, lefts, rights = np.broadcast_arrays(lefts ^ operators, lefts, rights)
    return middle, lefts, rights


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
