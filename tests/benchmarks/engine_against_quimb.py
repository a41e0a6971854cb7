"""The same evolution by this engine and by quimb's general-purpose one, timed in one run, one core each.

Run: python -m tests.benchmarks.engine_against_quimb [until] [anisotropy]   (6 and 0.5 if not given)

xxz, 64 sites, beta 0.5 | 2 coupled, discarded weight 1e-10, order 2, dt = 0.1. Both sides start from the same
prepared state and use the same real gates and the same relative discarded weight; no bond floor, so that both
cut alike. quimb gets the real vector of sigma with local dimension 4.
Absolute times depend on the machine; the ratios are the result.
"""

from __future__ import annotations

import sys
import time
import warnings

import numpy as np
import quimb.tensor as qtn
from threadpoolctl import threadpool_limits

from tests.oracles.exact_chain import SPIN_X, SPIN_Y, SPIN_Z
from tnquench.conventions import Reals, bond_positions
from tnquench.evolution.chain_state import ChainState
from tnquench.evolution.cutting import CutRule
from tnquench.evolution.preparation import prepare
from tnquench.evolution.real_time import evolve
from tnquench.evolution.trotter import SCHEMES
from tnquench.model.chain import start_terms
from tnquench.model.grading import derive_grading
from tnquench.model.profiles import step
from tnquench.model.spins import xxz_chain
from tnquench.observables.local import LocalObservables

SITES, WEIGHT, TIME_STEP = 64, 1e-10, 0.1


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


def generator(anisotropy: float) -> Reals:
    """sigma -> -i [h, sigma] of one bond on products of normalised Pauli matrices, shape (16, 16), real."""
    paulis = [np.eye(2), 2 * SPIN_X, 2 * SPIN_Y, 2 * SPIN_Z]
    basis = [np.kron(a, b) / 2.0 for a in paulis for b in paulis]
    flips = np.kron(SPIN_X, SPIN_X) + np.kron(SPIN_Y, SPIN_Y)
    term = flips + anisotropy * np.kron(SPIN_Z, SPIN_Z)
    return np.array([[np.trace(-1j * a @ (term @ b - b @ term)).real for b in basis] for a in basis])


def energy_operator(anisotropy: float) -> Reals:
    """The bond energy as the real symmetric part of left multiplication by h, shape (16, 16)."""
    paulis = [np.eye(2), 2 * SPIN_X, 2 * SPIN_Y, 2 * SPIN_Z]
    basis = [np.kron(a, b) / 2.0 for a in paulis for b in paulis]
    flips = np.kron(SPIN_X, SPIN_X) + np.kron(SPIN_Y, SPIN_Y)
    term = flips + anisotropy * np.kron(SPIN_Z, SPIN_Z)
    return np.array([[np.trace(a @ term @ b).real for b in basis] for a in basis])


def main(until: int, anisotropy: float) -> None:
    """Print the time of each unit of physical time on both sides, and the ratios."""
    chain = xxz_chain(sites=SITES, anisotropy=anisotropy)
    terms = start_terms(chain, beta=step(bond_positions(SITES), left=0.5, right=2.0).tolist())
    grading = derive_grading((*chain.bond_terms, *terms))
    rule = CutRule(1e-3 * WEIGHT, bond_floor=1)
    state = prepare(terms, sites=SITES, grading=grading, distance_target=1e-6, rule=rule).state
    other = qtn.TEBD(
        qtn.MatrixProductState(full_tensors(state), shape="lrp"),
        qtn.LocalHam1D(L=SITES, H2={(j, j + 1): -generator(anisotropy) for j in range(SITES - 1)}),
        dt=TIME_STEP,
        imag=True,  # exp(-t H2) is then the real map exp(t G)
        progbar=False,
        split_opts={"cutoff": WEIGHT, "cutoff_mode": "rsum2"},
    )
    moments = evolve(
        state,
        chain.bond_terms,
        every=1.0,
        samples=until,
        time_step=TIME_STEP,
        scheme=SCHEMES[2],
        rule=CutRule(WEIGHT, bond_floor=1),
    )
    next(moments)
    ours, theirs = [], []
    for unit in range(1, until + 1):
        began = time.perf_counter()
        moment = next(moments)
        ours.append(time.perf_counter() - began)
        began = time.perf_counter()
        other.update_to(float(unit), order=2)
        theirs.append(time.perf_counter() - began)
        bonds = int(moment.state.bond_dimensions.max()), other.pt.max_bond()
        print(f"t = {unit}: bond {bonds[0]} | {bonds[1]}, {ours[-1]:.2f} s | {theirs[-1]:.2f} s", flush=True)
    meter = LocalObservables({"energy": chain.bond_terms}, sites=SITES, grading=grading)
    energy = meter.measure(state)[0]["energy"][SITES // 2 - 1]
    where = (SITES // 2 - 1, SITES // 2)
    reference = other.pt.local_expectation_canonical(energy_operator(anisotropy), where)
    print(f"energy of the middle bond: {energy:.8f} | {float(np.real(reference)):.8f}")
    print(f"whole run: ratio {sum(theirs) / sum(ours):.1f}; last unit: {theirs[-1] / ours[-1]:.1f}")


if __name__ == "__main__":
    warnings.simplefilter("ignore")
    with threadpool_limits(1):
        main(int(sys.argv[1]) if len(sys.argv) > 1 else 6, float(sys.argv[2]) if len(sys.argv) > 2 else 0.5)
