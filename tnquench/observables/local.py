"""Expectation values of local operators from the reduced operator table of a few neighbouring sites.

For sigma = sum psi(p) P_p (P_p products of normalised Pauli matrices) an expectation value is
<O> = Tr(sigma O sigma) = sum_{p,p'} psi(p') Tr(P_p' O P_p) psi(p). A Pauli string only permutes the P_p with
a phase, and everything outside its window is contracted by orthonormality around the centre.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from itertools import product

import numpy as np

from tnquench.conventions import Integers, Reals
from tnquench.evolution.chain_state import ChainState, move_centre
from tnquench.model.grading import Grading
from tnquench.model.pauli import PHASE, Operator, support


@dataclass(frozen=True)
class LocalWindow:
    """All observables of one window of sites as one matrix on its flattened operator tables.

    first, width : the sites; names : (observable, place) of each row; matrix : (rows, sum of squared table
    sizes)
    """

    first: int
    width: int
    names: tuple[tuple[str, int], ...]
    matrix: Reals


class LocalObservables:
    """Measures a fixed set of local operators in one sweep through the chain."""

    def __init__(self, operators: Mapping[str, Sequence[Operator]], *, sites: int, grading: Grading) -> None:
        """operators : name -> one operator a place, each on at most three neighbouring sites."""
        self.shapes = {name: len(members) for name, members in operators.items()}
        self.width = min(3, sites)
        self.tables = [operator_tuples(grading, charge, self.width) for charge in range(grading.sectors)]
        gathered: dict[int, list[tuple[str, int, Operator]]] = {}
        for name, members in operators.items():
            for place, operator in enumerate(members):
                if operator:
                    first = min(support(operator)[0], sites - self.width)
                    gathered.setdefault(first, []).append((name, place, operator))
        self.windows = [self._window(first, rows) for first, rows in sorted(gathered.items())]

    def _window(self, first: int, rows: list[tuple[str, int, Operator]]) -> LocalWindow:
        """Tabulate the operators of one window."""
        matrix = np.array(
            [_flat_elements(operator, first, self.width, self.tables) for _, _, operator in rows]
        )
        return LocalWindow(first, self.width, tuple((name, place) for name, place, _ in rows), matrix)

    def measure(self, state: ChainState) -> tuple[dict[str, Reals], Reals]:
        """Return name -> expectation values (place,), and the entanglement entropy of each bond (nats, shape
        (bond,)).

        Moves the centre of the state through the chain to its other end; the state itself does not change.
        """
        values = {name: np.zeros(places) for name, places in self.shapes.items()}
        entropies = np.zeros(state.sites - 1)
        backwards = 2 * state.centre > state.sites - 1
        windows = {window.first + (self.width - 1 if backwards else 0): window for window in self.windows}
        order = range(state.sites - 1, -1, -1) if backwards else range(state.sites)
        move_centre(state, order[0])
        for site in order:
            move_centre(state, site)
            if site < state.sites - 1:
                entropies[site] = bond_entropy(state, site)
            if site in windows:
                window = windows[site]
                flat = np.concatenate(
                    [table.ravel() for table in reduced_tables(state, window.first, self.tables)]
                )
                for (name, place), value in zip(window.names, window.matrix @ flat, strict=True):
                    values[name][place] = value
        return values, entropies


def operator_tuples(grading: Grading, charge: int, width: int) -> Integers:
    """Return all products of `width` local operators of a total charge, shape (number, width)."""
    return np.array(
        [
            letters
            for letters in product(range(len(grading.charge_of)), repeat=width)
            if np.bitwise_xor.reduce(grading.charge_of[list(letters)]) == charge
        ],
        dtype=np.int64,
    )


def _flat_elements(operator: Operator, first: int, width: int, tables: Sequence[Integers]) -> Reals:
    """Return Re Tr(P_p' O P_p) for all p', p of each charge, flattened in the order of the tables."""
    parts = []
    for letters in tables:
        place = {tuple(row): index for index, row in enumerate(letters.tolist())}
        elements = np.zeros((len(letters), len(letters)))
        for term, coefficient in operator.items():
            string = [dict(term).get(first + offset, 0) for offset in range(width)]
            for index, row in enumerate(letters.tolist()):
                image = place.get(tuple(a ^ b for a, b in zip(string, row, strict=True)))
                if image is not None:
                    phase = np.prod([PHASE[a, b] for a, b in zip(string, row, strict=True)])
                    elements[image, index] += (coefficient * phase).real
        parts.append(elements.ravel())
    return np.concatenate(parts)


def reduced_tables(state: ChainState, first: int, tables: Sequence[Integers]) -> list[Reals]:
    """Return for each charge c the matrix sum_{l,r} psi(p', l, r) psi(p, l, r) over operator products p of
    charge c.

    The centre must lie inside the window of sites `first` .. `first + width - 1`; tables : from
    `operator_tuples`.
    """
    totals = [np.zeros((len(letters), len(letters))) for letters in tables]
    for charge, size in enumerate(state.bonds[first]):
        if not size:
            continue
        amplitudes = _window_amplitudes(state, first, tables[0].shape[1], charge)
        for total, letters in enumerate(tables):
            stacked = np.stack([amplitudes[tuple(row)].ravel() for row in letters.tolist()])
            totals[total] += stacked @ stacked.T
    return totals


def _window_amplitudes(
    state: ChainState, first: int, width: int, charge: int
) -> dict[tuple[int, ...], Reals]:
    """Return psi(p, l, r) for all products p of local operators, l of one charge and r of the charge p leads
    to."""
    grading = state.grading
    rows = state.sector_slices(first)[charge]
    partial: dict[tuple[int, ...], tuple[int, Reals | None]] = {(): (charge, None)}
    for site in range(first, first + width):
        tensor, into, onto = state.tensors[site], state.sector_slices(site), state.sector_slices(site + 1)
        grown: dict[tuple[int, ...], tuple[int, Reals | None]] = {}
        for letters, (middle, amplitude) in partial.items():
            for step, members in enumerate(grading.members):
                for copy, local in enumerate(members.tolist()):
                    block = tensor[copy, into[middle] if amplitude is not None else rows, onto[middle ^ step]]
                    grown[(*letters, local)] = (
                        middle ^ step,
                        block if amplitude is None else amplitude @ block,
                    )
        partial = grown
    return {letters: amplitude for letters, (_, amplitude) in partial.items() if amplitude is not None}


def bond_entropy(state: ChainState, site: int) -> float:
    """Return the von Neumann entropy (nats) of the unit vector sigma across the bond right of the centre
    `site`."""
    tensor = state.tensors[site]
    rows = tensor.shape[0] * tensor.shape[1]
    flat = [tensor[:, :, block].reshape(rows, -1) for block in state.sector_slices(site + 1)]
    weights = np.concatenate([np.linalg.eigvalsh(part.T @ part) for part in flat])
    weights = weights[weights > 0.0]
    return float(-(weights * np.log(weights)).sum())
