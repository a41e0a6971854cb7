"""The same evolution by this engine and by quimb's general-purpose one, started from the same state.

Both sides use the same real gates and the same relative discarded weight; no bond floor, so that both cut
alike. quimb gets the real vector of sigma with local dimension 4.
"""

from __future__ import annotations

import time
import warnings
from collections.abc import Iterator

import numpy as np
import quimb.tensor as qtn
from numpy.typing import NDArray

from tests.benchmarks.speed_cases import Line, Problem, two_fields, two_temperatures
from tests.oracles.exact_chain import SPIN_X, SPIN_Y, SPIN_Z
from tnquench.conventions import Reals
from tnquench.evolution.chain_state import ChainState
from tnquench.evolution.cutting import CutRule

Complexes = NDArray[np.complexfloating]

SITES, WEIGHT, TIME_STEP = 64, 1e-10, 0.1

#: Least ratios over the whole run and over its last unit of time, most by which energies may differ.
WHOLE, LAST, AGREEMENT = 25.0, 60.0, 1e-5


def full_tensors(state: ChainState) -> list[Reals]:
    """Site tensors (left, right, local operator) with the operators that the charges imply written out."""
    tensors = []
    for site, tensor in enumerate(state.tensors):
        full = np.zeros((*tensor.shape[1:], 4))
        for left, rows in enumerate(state.sector_slices(site)):
            for right, columns in enumerate(state.sector_slices(site + 1)):
                for copy, local in enumerate(state.grading.members[left ^ right].tolist()):
                    full[rows, columns, local] = tensor[copy, rows, columns]
        tensors.append(full)
    return [tensors[0][0], *tensors[1:-1], tensors[-1][:, 0]]


def _term_and_basis(anisotropy: float) -> tuple[Complexes, list[Complexes]]:
    """The bond energy as a matrix, and all products of two normalised Pauli matrices."""
    paulis = [np.eye(2), 2 * SPIN_X, 2 * SPIN_Y, 2 * SPIN_Z]
    flips = np.kron(SPIN_X, SPIN_X) + np.kron(SPIN_Y, SPIN_Y)
    term = flips + anisotropy * np.kron(SPIN_Z, SPIN_Z)
    return term, [np.kron(a, b) / 2.0 for a in paulis for b in paulis]


def generator(anisotropy: float) -> Reals:
    """sigma -> -i [h, sigma] of one bond on products of normalised Pauli matrices, shape (16, 16), real."""
    term, basis = _term_and_basis(anisotropy)
    return np.array([[np.trace(-1j * a @ (term @ b - b @ term)).real for b in basis] for a in basis])


def energy_operator(anisotropy: float) -> Reals:
    """The bond energy as the real symmetric part of left multiplication by h, shape (16, 16)."""
    term, basis = _term_and_basis(anisotropy)
    return np.array([[np.trace(a @ term @ b).real for b in basis] for a in basis])


def general_purpose(state: ChainState, *, anisotropy: float, weight: float, time_step: float) -> qtn.TEBD:
    """quimb's evolution of the same state."""
    sites = state.sites
    bonds = {(j, j + 1): -generator(anisotropy) for j in range(sites - 1)}
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        return qtn.TEBD(
            qtn.MatrixProductState(full_tensors(state), shape="lrp"),
            qtn.LocalHam1D(L=sites, H2=bonds),
            dt=time_step,
            imag=True,  # exp(-t H2) is then the real map exp(t G)
            progbar=False,
            split_opts={"cutoff": weight, "cutoff_mode": "rsum2"},
        )


def quimb_energy(other: qtn.TEBD, bond: int, anisotropy: float) -> float:
    """Energy of one bond of quimb's state."""
    where = (bond, bond + 1)
    return float(np.real(other.pt.local_expectation_canonical(energy_operator(anisotropy), where)))


def same_work(problem: Problem, anisotropy: float, until: int, *, targets: bool) -> Iterator[Line]:
    """Yield the ratios of one problem; targets : whether they are held against the targets."""
    state = problem.prepared(distance=1e-6, weight=1e-3 * WEIGHT)
    other = general_purpose(state, anisotropy=anisotropy, weight=WEIGHT, time_step=TIME_STEP)
    rule = CutRule(WEIGHT, bond_floor=1)
    moments = problem.evolution(state, rule, until=until, time_step=TIME_STEP, order=2)
    next(moments)
    ours, theirs = [], []
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        for unit in range(1, until + 1):
            began = time.process_time()
            moment = next(moments)
            ours.append(time.process_time() - began)
            began = time.process_time()
            other.update_to(float(unit), order=2)
            theirs.append(time.process_time() - began)
        bond = state.sites // 2 - 1
        apart = abs(quimb_energy(other, bond, anisotropy) - problem.energies(moment.state)[bond])
    bonds = f"bond dimension {moment.state.bond_dimensions.max()} | {other.pt.max_bond()}"
    whole, last = sum(theirs) / sum(ours), theirs[-1] / ours[-1]
    name = f"{problem.name}, {state.sites} sites, weight {WEIGHT:g}, to t = {until}, {bonds}"
    seconds = f"{sum(theirs):.0f} s / {sum(ours):.1f} s", f"{theirs[-1]:.1f} s / {ours[-1]:.2f} s"
    yield Line(f"{name}: whole run", f">= {WHOLE:g}" if targets else "", f"{whole:.1f} times ({seconds[0]})",
               whole >= WHOLE if targets else None)  # fmt: skip
    yield Line("last unit of time", f">= {LAST:g}" if targets else "", f"{last:.1f} times ({seconds[1]})",
               last >= LAST if targets else None)  # fmt: skip
    yield Line("energy of the middle bond", f"{AGREEMENT:g}", f"{apart:.1e} apart", apart <= AGREEMENT)


def quimb_lines(sites: int = SITES, until: int = 6) -> Iterator[Line]:
    """Yield the lines of the row `quimb`."""
    yield from same_work(two_temperatures(sites), 0.5, until, targets=True)
    yield from same_work(two_temperatures(sites, 2.0), 2.0, max(until // 2, 1), targets=False)
    yield from same_work(two_fields(sites), 0.5, until, targets=False)
