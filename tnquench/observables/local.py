"""Expectation values of local operators, string by string, in one sweep of the orthogonality centre.

A Pauli string is closed at the site in its middle: when the centre gets there, the string's letters left and
right of it are environments (`environments.py`), and all strings with the same letters share them. With M the
centre tensor times a left environment (of the ket) and N the centre tensor times a right one (of the bra),
the string's value is a sum of overlaps of blocks of M and N with the phases of its middle letter. All
overlaps of one site are a few matrix products, so a further string costs next to nothing once its
environments are there.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from tnquench.conventions import Integers, Reals
from tnquench.evolution.chain_state import ChainState, move_centre
from tnquench.model.grading import Grading
from tnquench.model.pauli import Operator
from tnquench.observables.environments import Environments, LetterTable
from tnquench.observables.strings import (
    LEFT,
    RIGHT,
    Letters,
    PlacedString,
    closing_sites,
    placed_string,
    sides,
)

#: Entries of a block from which right charges are treated one by one.
SMALL_BLOCK = 2500

#: Coefficient of a string in the operator of an observable at a place.
Uses = dict[tuple[str, int], float]


@dataclass(frozen=True)
class Closing:
    """The strings that are closed at one site.

    left, right : letters of the environments in use on each side, the farthest first; none for the identity
    index, weight : each string's expectation value as a weighted sum of entries of the flattened `overlaps`,
    shape (strings, entries)
    places : the (observable, place) to which the strings add; mixing : their coefficients (places, strings)
    """

    left: tuple[Letters, ...]
    right: tuple[Letters, ...]
    index: Integers
    weight: Reals
    places: tuple[tuple[str, int], ...]
    mixing: Reals


class LocalObservables:
    """Measures a fixed set of local operators in one sweep through the chain."""

    def __init__(self, operators: Mapping[str, Sequence[Operator]], *, sites: int, grading: Grading) -> None:
        """operators : name -> one Hermitian operator a place, each on a few neighbouring sites.

        Strings of a charge are left out: the symmetries of the state forbid them an expectation value.
        Raises ValueError if an operator acts outside the chain.
        """
        self.shapes = {name: len(members) for name, members in operators.items()}
        self.constants = {name: np.zeros(places) for name, places in self.shapes.items()}
        self.table = LetterTable(grading)
        uses: dict[PlacedString, Uses] = {}
        for name, place, term, coefficient in _terms(operators):
            if not term:
                self.constants[name][place] += coefficient  # the identity: sigma has unit norm
                continue
            string = placed_string(term, qubits_per_site=grading.qubits_per_site)
            if not 0 <= string[0] <= sites - len(string[1]):
                message = f"{name}, place {place}: operator acts outside a chain of {sites} sites"
                raise ValueError(message)
            if self.table.charge(string[1]) == 0:
                uses.setdefault(string, {})[name, place] = coefficient
        self.closings = {
            site: _closing(site, {string: uses[string] for string in strings}, self.table)
            for site, strings in closing_sites(uses).items()
        }
        self.depth = max((len(each) // 2 for _, each in uses), default=0)

    def measure(self, state: ChainState) -> tuple[dict[str, Reals], Reals]:
        """Return name -> expectation values (place,), and the entanglement entropy of each bond (nats, shape
        (bond,)).

        Moves the centre of the state through the chain to its other end; the state itself does not change.
        """
        values = {name: constants.copy() for name, constants in self.constants.items()}
        entropies = np.zeros(state.sites - 1)
        environments = Environments(state, self.table, depth=self.depth)
        backwards = 2 * state.centre > state.sites - 1
        for site in range(state.sites - 1, -1, -1) if backwards else range(state.sites):
            move_centre(state, site)
            environments.follow_centre()
            if site < state.sites - 1:
                entropies[site] = bond_entropy(state, site)
            closing = self.closings.get(site)
            if closing is not None:
                flat = overlaps(environments, site, closing).ravel()
                expectations = np.einsum("se,se->s", closing.weight, flat[closing.index])
                for (name, place), value in zip(closing.places, closing.mixing @ expectations, strict=True):
                    values[name][place] += value
        return values, entropies


def _terms(
    operators: Mapping[str, Sequence[Operator]],
) -> Iterator[tuple[str, int, tuple[tuple[int, int], ...], float]]:
    """Yield observable, place, Pauli string and coefficient of every term."""
    for name, members in operators.items():
        for place, operator in enumerate(members):
            for term, coefficient in operator.items():
                yield name, place, term, complex(coefficient).real


def _closing(site: int, uses: Mapping[PlacedString, Uses], table: LetterTable) -> Closing:
    """Tabulate the strings closed at `site`."""
    split = [sides(string, site) for string in uses]
    left, right = sorted({each for each, _, _ in split}), sorted({each for _, _, each in split})
    size = 2 * table.grading.multiplicity * len(left), 2 * table.grading.multiplicity * len(right)
    entries = [
        _entries(letter, left.index(before), right.index(after), table.charge(before), size, table)
        for before, letter, after in split
    ]
    places = sorted({place for members in uses.values() for place in members})
    return Closing(
        tuple(left),
        tuple(right),
        index=np.array([index for index, _ in entries]),
        weight=np.array([weight for _, weight in entries]),
        places=tuple(places),
        mixing=np.array([[members.get(place, 0.0) for members in uses.values()] for place in places]),
    )


def _entries(
    letter: int, left: int, right: int, charge: int, size: tuple[int, int], table: LetterTable
) -> tuple[Integers, Reals]:
    """Return where a string's overlaps stand in the flattened result of `overlaps`, and their weights.

    letter : the middle one; left, right : positions of its environments; charge : of the letters left of it
    size : numbers of rows and columns of the overlaps
    The real part of phase(b, p) (M + i M')(N + i N') is sign (M N - M' N') where the middle letter b and the
    ket's operator p commute, and -sign (M N' + M' N) where they do not.
    """
    copies = np.arange(table.grading.multiplicity)
    charges = np.arange(table.grading.sectors)
    bra_left, ket_right = charges[:, None, None], charges[None, :, None]
    ket = table.grading.members[bra_left ^ charge ^ ket_right, copies]
    commute, sign, bra_copy = table.commute[letter, ket], table.sign[letter, ket], table.copy_of[letter ^ ket]
    corner = (bra_left * len(charges) + ket_right) * size[0]
    index, weight = [], []
    for part in (0, 1):  # of M; N takes the same where the letters commute, the other one elsewhere
        row = corner + (2 * left + part) * len(copies) + copies
        column = (2 * right + np.where(commute, part, 1 - part)) * len(copies) + bra_copy
        index.append((row * size[1] + column).ravel())
        weight.append(np.where(commute, sign * (1 - 2 * part), -sign).ravel())
    return np.concatenate(index), np.concatenate(weight)


def overlaps(environments: Environments, site: int, closing: Closing) -> Reals:
    """Return the overlaps of the centre's blocks times left environments with those times right environments.

    Shape (bra's left charge, ket's right charge, rows, columns). A row is (left environment, real or
    imaginary part, copy of the ket's operator), a column (right environment, part, copy of the bra's
    operator). One left charge is done at a time, of large blocks one right charge too: it bounds the memory
    in use.
    """
    blocks = environments.site(site)
    sectors, _, copies, *size = blocks.shape
    left = [environments.beside(site, LEFT, letters) if letters else None for letters in closing.left]
    right = [environments.beside(site, RIGHT, letters) if letters else None for letters in closing.right]
    found = np.empty((sectors, sectors, 2 * len(left) * copies, 2 * len(right) * copies))
    together = sectors if size[0] * size[1] < SMALL_BLOCK else 1
    rows = np.zeros((together, len(left), 2, copies, *size))
    columns = np.zeros((together, len(right), 2, copies, *size))
    for bra_left in range(sectors):
        for first in range(0, sectors, together):
            ket_right = np.arange(first, first + together)
            for row, known in enumerate(left):
                if known is None:
                    rows[:, row, 0] = blocks[bra_left, ket_right]
                else:
                    kets = blocks[bra_left ^ known.charge, ket_right]
                    np.matmul(
                        known.parts[None, :, None, bra_left ^ known.charge], kets[:, None], out=rows[:, row]
                    )
            for column, known in enumerate(right):
                if known is None:
                    columns[:, column, 0] = blocks[bra_left, ket_right]
                else:
                    bras = blocks[bra_left, ket_right ^ known.charge]
                    parts = known.parts[:, ket_right].swapaxes(0, 1)
                    np.matmul(bras[:, None], parts[:, :, None], out=columns[:, column])
            flat = columns.reshape(together, found.shape[3], -1).swapaxes(1, 2)
            np.matmul(
                rows.reshape(together, found.shape[2], -1),
                flat,
                out=found[bra_left, first : first + together],
            )
    return found


def bond_entropy(state: ChainState, site: int) -> float:
    """Return the von Neumann entropy (nats) of the unit vector sigma across the bond right of the centre
    `site`."""
    tensor = state.tensors[site]
    rows = tensor.shape[0] * tensor.shape[1]
    flat = [tensor[:, :, block].reshape(rows, -1) for block in state.sector_slices(site + 1)]
    weights = np.concatenate([np.linalg.eigvalsh(part.T @ part) for part in flat])
    weights = weights[weights > 0.0]
    return float(-(weights * np.log(weights)).sum())
