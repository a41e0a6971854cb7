"""Charges shared among threads: the same numbers to the last bit, whatever their number."""

from __future__ import annotations

import numpy as np
import pytest

from tnquench.conventions import bond_positions
from tnquench.evolution import threads as sharing
from tnquench.evolution.cutting import CutRule
from tnquench.evolution.preparation import prepare
from tnquench.evolution.real_time import Moment, evolve
from tnquench.evolution.threads import for_each_charge, threads
from tnquench.evolution.trotter import SCHEMES
from tnquench.model.chain import Chain, start_terms
from tnquench.model.fermions import hubbard_chain
from tnquench.model.grading import derive_grading
from tnquench.model.profiles import step
from tnquench.model.spins import ising_chain, xxz_chain

SITES = 10

CHAINS = {
    "four charges": xxz_chain(sites=SITES, anisotropy=0.5),
    "two charges": ising_chain(sites=SITES, transverse_field=0.5),
    "eight charges": hubbard_chain(sites=6, repulsion=4.0),
}


def evolved(chain: Chain) -> Moment:
    """The last moment of a short evolution whose cuts use every way there is."""
    sites = len(chain.bond_terms) + 1
    terms = start_terms(chain, beta=step(bond_positions(sites), left=0.3, right=0.8).tolist())
    qubits = 2 if "double_occupancy" in chain.densities else 1
    grading = derive_grading((*chain.bond_terms, *terms), qubits_per_site=qubits)
    rule = CutRule(1e-7, bond_floor=1)
    state = prepare(terms, sites=sites, grading=grading, distance_target=1e-3, rule=rule).state
    *_, last = evolve(
        state, chain.bond_terms, every=0.3, samples=2, time_step=0.1, scheme=SCHEMES[2], rule=rule
    )
    return last


@pytest.mark.parametrize("name", CHAINS)
def test_every_number_of_threads_gives_the_same_state(name: str, monkeypatch: pytest.MonkeyPatch) -> None:
    alone = evolved(CHAINS[name])
    monkeypatch.setattr(sharing, "WORTHWHILE", 0.0)
    for count in (1, 2, 3):
        with threads(count):
            together = evolved(CHAINS[name])
        for ours, theirs in zip(together.state.tensors, alone.state.tensors, strict=True):
            np.testing.assert_array_equal(ours, theirs, err_msg=f"{count} threads")
        np.testing.assert_array_equal(together.cuts.discarded_weight, alone.cuts.discarded_weight)


def test_the_number_at_work_may_change_and_large_bonds_alone_are_shared() -> None:
    done: list[int] = []
    with threads(3) as crew:
        for crew.at_work in (3, 1, 2):
            for flops in (0.0, 1e12):
                for_each_charge(done.append, 4, flops=flops)
    assert sorted(done) == sorted([0, 1, 2, 3] * 6)


def test_what_a_thread_raises_reaches_the_caller() -> None:
    def failing(charge: int) -> None:
        if charge == 2:
            message = "of charge 2"
            raise np.linalg.LinAlgError(message)

    with threads(2), pytest.raises(np.linalg.LinAlgError, match="of charge 2"):
        for_each_charge(failing, 4, flops=1e12)
    for_each_charge(lambda _: None, 4, flops=1e12)  # outside of the block nothing is left of the threads
