"""Contractions of a Pauli string with the sites left or right of the orthogonality centre.

sigma = sum psi(p) P_p with real psi and P_p products of normalised Pauli matrices, so a string A of letters
a has the expectation value Tr(sigma A sigma) = sum_p psi(a^p) psi(p) prod_sites phase(a, p), where letters
multiply by XOR. A left environment holds this sum over all sites left of a bond, bra index by ket index;
sites beyond the string contribute the identity by orthonormality. The phase of one site is real where the
letters commute and imaginary where they do not, so real and imaginary parts are two real arrays. Exchange of
bra and ket is complex conjugation. How matrix product states are contracted through environments:
U. Schollwoeck, Ann. Phys. 326, 96 (2011).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from tnquench.conventions import Integers, Reals
from tnquench.evolution.chain_state import ChainState
from tnquench.model.grading import Grading
from tnquench.model.pauli import PHASE
from tnquench.observables.strings import LEFT, RIGHT, Letters


class LetterTable:
    """How local operators multiply, and where their blocks stand in a padded site tensor.

    A site tensor is cut into blocks (left charge, right charge, copy), all of one size: see `site_blocks`.
    operators : number P of local operators of a site, 4 for each qubit
    charge_of, copy_of : charge of each local operator and its position among those of the same charge (P,)
    sign, commute : phase(a, p) is the sign where a and p commute, i times it where they do not (P, P)
    place : for each side that an environment comes from, the flat number of the block of an outer charge and
    a local operator (sectors, P); the outer index is the right one for an environment from the left
    """

    def __init__(self, grading: Grading) -> None:
        """Tabulate the products of all pairs of local operators."""
        self.grading = grading
        self.operators = len(grading.charge_of)
        self.charge_of = grading.charge_of
        self.copy_of = np.array(
            [int(np.flatnonzero(grading.members[charge] == p)[0]) for p, charge in enumerate(self.charge_of)]
        )
        # the letters of a site are the digits of its operators' numbers, and all have one rule
        phase = PHASE
        for _ in range(1, grading.qubits_per_site):
            phase = np.kron(phase, PHASE).astype(np.complex128)
        self.commute = phase.imag == 0.0
        self.sign: Reals = phase.real + phase.imag
        charges = np.arange(grading.sectors)[:, None]
        inner = charges ^ self.charge_of
        self.place = {
            LEFT: self.block_number(inner, charges, self.copy_of),
            RIGHT: self.block_number(charges, inner, self.copy_of),
        }

    def charge(self, letters: Letters) -> int:
        """Return the charge of some letters together."""
        return int(np.bitwise_xor.reduce(self.charge_of[np.array(letters, dtype=np.int64)]))

    def block_number(self, left: Integers, right: Integers, copy: Integers) -> Integers:
        """Return the flat number of the block of two charges and a copy."""
        return np.asarray((left * self.grading.sectors + right) * self.grading.multiplicity + copy)


def site_blocks(state: ChainState, site: int) -> Reals:
    """Return a site tensor as blocks (sectors, sectors, multiplicity, left, right), filled up with zeros.

    left, right : the largest number of indices that share a charge on the bond left and right of the site, so
    that all blocks have one size; the sectors of a grown bond differ by a few per cent only
    """
    tensor, sectors = state.tensors[site], state.grading.sectors
    rows, columns = state.sector_slices(site), state.sector_slices(site + 1)
    size = int(state.bonds[site].max()), int(state.bonds[site + 1].max())
    blocks = np.zeros((sectors, sectors, tensor.shape[0], *size))
    for left, row in enumerate(rows):
        for right, column in enumerate(columns):
            blocks[left, right, :, : row.stop - row.start, : column.stop - column.start] = tensor[
                :, row, column
            ]
    return blocks


@dataclass(frozen=True)
class Environment:
    """Everything on one side of a bond contracted with the letters there.

    charge : charge of the letters; a ket index of charge c meets bra indices of charge c XOR this
    parts : real and imaginary part for each charge of the ket index, shape (2, sectors, bra, ket)
    """

    charge: int
    parts: Reals


class Environments:
    """The environments that one sweep needs, each made once and kept while the centre is near."""

    def __init__(self, state: ChainState, table: LetterTable, *, depth: int) -> None:
        """state : the state in the sweep; depth : most letters that an environment holds."""
        self.state = state
        self.table = table
        self.depth = depth
        self.known: dict[tuple[int, int, Letters], Environment] = {}
        self.blocks: dict[int, Reals] = {}
        self.centre = state.centre

    def follow_centre(self) -> None:
        """Forget what the present position of the centre has made invalid or useless.

        An environment on a bond stays valid while the centre is on the other side of that bond. Those ahead
        will be used again; of those behind only the last site's, to grow by one letter.
        """
        forwards, self.centre = self.state.centre - self.centre, self.state.centre
        self.blocks.clear()

        def useful(site: int, side: int, letters: Letters) -> bool:
            if side * forwards > 0:
                return 0 <= (site - self.centre) * side <= self.depth
            return site == self.centre + side and len(letters) < self.depth

        if forwards:
            self.known = {key: value for key, value in self.known.items() if useful(*key)}

    def site(self, site: int) -> Reals:
        """Return `site_blocks` of a site."""
        if site not in self.blocks:
            self.blocks[site] = site_blocks(self.state, site)
        return self.blocks[site]

    def beside(self, site: int, side: int, letters: Letters) -> Environment:
        """Return the environment of `site` on one side (`LEFT` or `RIGHT`).

        letters : the letter of each site on that side, the farthest first, down to the neighbour of `site`
        """
        key = site, side, letters
        if key not in self.known:
            inner = self.beside(site + side, side, letters[:-1]) if len(letters) > 1 else None
            blocks = self.site(site + side).reshape(-1, *self.site(site + side).shape[3:])
            oriented = blocks if side == LEFT else np.ascontiguousarray(blocks.swapaxes(1, 2))
            self.known[key] = grown(oriented, self.table, side=side, letter=letters[-1], inner=inner)
        return self.known[key]


def grown(
    blocks: Reals, table: LetterTable, *, side: int, letter: int, inner: Environment | None
) -> Environment:
    """Return an environment with one more site in it.

    blocks : all blocks of that site, shape (block, inner index, outer index), numbered as by `LetterTable`
    letter : the string's letter on that site; inner : the environment without it, None for the identity
    """
    before = inner.charge if inner else 0
    charge = before ^ int(table.charge_of[letter])
    every = np.arange(table.grading.sectors)
    kept = every[every <= (every ^ charge)]  # the other charges follow by exchange of bra and ket
    ket = blocks[table.place[side][kept]]  # (kept, P, inner, outer)
    bra = blocks[table.place[side][kept ^ charge][:, np.arange(table.operators) ^ letter]]
    bra *= table.sign[letter][:, None, None]
    carried = ket[None] if inner is None else inner.parts[:, kept[:, None] ^ table.charge_of] @ ket

    def summed(operators: Integers, part: int) -> Reals:
        """Sum over the inner index and some local operators, bra by ket: (kept, outer, outer)."""
        flat = len(kept), len(operators) * ket.shape[2], ket.shape[3]
        rows, columns = bra[:, operators].reshape(flat), carried[part][:, operators].reshape(flat)
        return np.asarray(rows.swapaxes(1, 2) @ columns)

    real, imaginary = (np.flatnonzero(table.commute[letter] == each) for each in (True, False))
    parts = np.empty((2, len(every), ket.shape[3], ket.shape[3]))
    parts[0, kept], parts[1, kept] = summed(real, 0), summed(imaginary, 0)
    if inner is not None:
        parts[0, kept] -= summed(imaginary, 1)
        parts[1, kept] += summed(real, 1)
    if charge:
        parts[:, kept ^ charge] = parts[:, kept].swapaxes(2, 3)
        parts[1, kept ^ charge] *= -1.0
    return Environment(charge, parts)
