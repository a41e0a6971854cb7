"""The charge grading of the operator space, derived from the terms of H and of the start.

Conjugation by global pi rotations multiplies every Pauli matrix by a sign, so the letters carry a Z2 x Z2
charge per qubit species, and the charge of a string is the XOR of its letters. A term of non-zero charge
breaks some of these symmetries: what survives is the quotient of all charges by the span of the terms'
charges.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from functools import reduce

import numpy as np

from tnquench.conventions import Integers
from tnquench.model.pauli import Operator, PauliString


@dataclass(frozen=True)
class Grading:
    """Charges of the local operators of one site.

    sectors : number of charges, a power of two; charges combine by XOR and 0 is neutral
    members : shape (sectors, multiplicity), the local operators (base-4 number of their letters) of each
    charge
    charge_of : shape (operators,), the charge of each local operator
    """

    sectors: int
    members: Integers
    charge_of: Integers

    @property
    def multiplicity(self) -> int:
        """Number of local operators that share a charge."""
        return int(self.members.shape[1])

    @property
    def qubits_per_site(self) -> int:
        """Number of qubits of one site."""
        return (len(self.charge_of).bit_length() - 1) // 2


def string_charge(term: PauliString, *, qubits_per_site: int = 1) -> int:
    """Return the XOR over all sites of the local operators of a Pauli string: its charge before any
    quotient."""
    return reduce(lambda total, factor: total ^ (factor[1] << 2 * (factor[0] % qubits_per_site)), term, 0)


def derive_grading(operators: Iterable[Operator], *, qubits_per_site: int = 1) -> Grading:
    """Return the finest grading under which every term of every operator is neutral.

    operators : terms of H and of the start's exponent. With none breaking a symmetry a spin chain has four
    sectors of one operator each; with a field along z two sectors of two.
    """
    broken: list[int] = []  # echelon basis of the span of the terms' charges, leading bits all different
    for operator in operators:
        for term in operator:
            rest = _reduce(string_charge(term, qubits_per_site=qubits_per_site), broken)
            if rest:
                broken = sorted([_reduce(vector, [rest]) for vector in broken] + [rest], reverse=True)
    leading = {vector.bit_length() - 1 for vector in broken}
    kept = [bit for bit in range(2 * qubits_per_site) if bit not in leading]
    charge_of = np.array(
        [
            sum(((_reduce(local, broken) >> bit) & 1) << position for position, bit in enumerate(kept))
            for local in range(4**qubits_per_site)
        ],
        dtype=np.int64,
    )
    sectors = 2 ** len(kept)
    members = np.array([np.flatnonzero(charge_of == charge) for charge in range(sectors)], dtype=np.int64)
    return Grading(sectors=sectors, members=members, charge_of=charge_of)


def _reduce(charge: int, basis: list[int]) -> int:
    """Return the representative of a charge modulo an echelon basis: zero in every leading bit of the
    basis."""
    for vector in basis:
        if charge >> (vector.bit_length() - 1) & 1:
            charge ^= vector
    return charge
