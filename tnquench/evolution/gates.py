"""Two-site gates as real matrices on the operator space, one small block a charge."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.linalg import expm

from tnquench.conventions import Reals
from tnquench.model.grading import Grading
from tnquench.model.pauli import PHASE, Operator


@dataclass(frozen=True)
class Gate:
    """A charge-conserving linear map of two sites' operators.

    blocks : for each pair (left charge, total charge) the matrix on the flattened (middle charge, copy of the
             left site's operator, copy of the right site's operator), or None where the map is the identity
    """

    blocks: dict[tuple[int, int], Reals | None]


def real_time_gate(term: Operator, *, time: float, first: int, grading: Grading) -> Gate:
    """Return sigma -> exp(-i h t) sigma exp(i h t) for the bond term h on sites `first`, `first + 1`."""
    left, right = _multiplications(term, first=first)
    return _graded((-1j * time * (left - right)), grading)


def imaginary_time_gate(term: Operator, *, beta: float, first: int, grading: Grading) -> Gate:
    """Return sigma -> exp(-beta k) sigma exp(-beta k) for the bond term k on sites `first`, `first + 1`."""
    left, right = _multiplications(term, first=first)
    return _graded(-beta * (left + right), grading)


def _multiplications(term: Operator, *, first: int) -> tuple[np.ndarray, np.ndarray]:
    """Return the matrices, shape (16, 16), of multiplying two sites' Pauli products by `term` from left and
    right."""
    left = np.zeros((16, 16), dtype=np.complex128)
    right = np.zeros((16, 16), dtype=np.complex128)
    for string, coefficient in term.items():
        letters = dict(string)
        a, b = letters.pop(first, 0), letters.pop(first + 1, 0)
        if letters:
            message = f"bond term acts outside sites {first}, {first + 1}"
            raise ValueError(message)
        for p in range(4):
            for q in range(4):
                left[4 * (a ^ p) + (b ^ q), 4 * p + q] += coefficient * PHASE[a, p] * PHASE[b, q]
                right[4 * (a ^ p) + (b ^ q), 4 * p + q] += coefficient * PHASE[p, a] * PHASE[q, b]
    return left, right


def _graded(generator: np.ndarray, grading: Grading) -> Gate:
    """Exponentiate a real generator (16, 16) and split it by charge.

    Raises ValueError if the generator is not real (the term was not Hermitian) or breaks the grading.
    """
    scale = max(1.0, float(np.abs(generator).max()))
    if np.abs(generator.imag).max() > 1e-14 * scale:
        message = "generator is not real in the Pauli basis: the term is not Hermitian"
        raise ValueError(message)
    matrix = np.asarray(expm(generator.real))
    blocks: dict[tuple[int, int], Reals | None] = {}
    covered = 0.0
    for total in range(grading.sectors):
        for left in range(grading.sectors):
            order = [
                4 * int(p) + int(q)
                for middle in range(grading.sectors)
                for p in grading.members[left ^ middle]
                for q in grading.members[middle ^ left ^ total]
            ]
            block = matrix[np.ix_(order, order)]
            blocks[left, total] = (
                None if np.array_equal(block, np.eye(len(order))) else np.ascontiguousarray(block)
            )
            covered += float((block**2).sum()) if left == 0 else 0.0
    if abs(covered - float((matrix**2).sum())) > 1e-12 * covered:
        message = "gate breaks the grading"
        raise ValueError(message)
    return Gate(blocks)


def apply_gate(gate: Gate, pair: Reals, *, left_slices: list[slice], right_slices: list[slice]) -> None:
    """Apply a gate to a two-site tensor in place.

    pair : shape (middle charge, multiplicity, multiplicity, left, right)
    left_slices, right_slices : index range of each charge on the outer bonds
    """
    flat = pair.reshape(-1, *pair.shape[3:])
    for (left, total), block in gate.blocks.items():
        rows, columns = left_slices[left], right_slices[left ^ total]
        size = (rows.stop - rows.start) * (columns.stop - columns.start)
        if block is not None and size:
            part = flat[:, rows, columns]
            flat[:, rows, columns] = (block @ part.reshape(len(block), size)).reshape(part.shape)
