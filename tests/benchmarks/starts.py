"""What cold and Hubbard starts cost, and where a Hubbard run spends its time.

Run: OMP_NUM_THREADS=1 python -m tests.benchmarks.starts
"""

from __future__ import annotations

import cProfile
import pstats
import time
from math import sqrt

from tnquench.conventions import bond_positions
from tnquench.evolution.cutting import CutRule
from tnquench.evolution.preparation import prepare
from tnquench.model.chain import Chain, start_terms
from tnquench.model.fermions import hubbard_chain
from tnquench.model.grading import derive_grading
from tnquench.model.profiles import step, uniform
from tnquench.model.spins import xxz_chain
from tnquench.observables.quench import Quench, simulate

#: name, chain, beta left and right, weight of a real-time cut, start's distance over its root
CASES: tuple[tuple[str, Chain, float, float, float, float], ...] = (
    ("hubbard 20 sites, U = 4", hubbard_chain(sites=20, repulsion=4.0), 0.2, 1.0, 1e-6, 0.03),
    ("hubbard 20 sites, U = 4", hubbard_chain(sites=20, repulsion=4.0), 0.2, 1.0, 1e-6, 0.1),
    ("xxz 32 sites, D = 0.5", xxz_chain(sites=32, anisotropy=0.5), 10.0, 10.0, 1e-8, 0.03),
    ("xxz 32 sites, D = 1", xxz_chain(sites=32, anisotropy=1.0), 10.0, 10.0, 1e-8, 0.03),
)


def starts() -> None:
    """Print the cost of each start."""
    for name, chain, left, right, weight, share in CASES:
        bonds = bond_positions(chain.sites)
        beta = step(bonds, left=left, right=right) if left != right else uniform(bonds, value=left)
        terms = start_terms(chain, beta=beta.tolist())
        grading = derive_grading((*chain.bond_terms, *terms), qubits_per_site=chain.qubits_per_site)
        began = time.process_time()
        start = prepare(
            terms,
            sites=chain.sites,
            grading=grading,
            distance_target=share * sqrt(weight),
            rule=CutRule(1e-4 * weight),
        )
        bond, seconds = start.state.bond_dimensions.max(), time.process_time() - began
        print(
            f"{name}, beta {left:g} | {right:g}, {share * sqrt(weight):.0e} asked: {start.steps} steps, "
            f"bond {bond}, {seconds:.1f} s, distance {start.distance:.1e}, reached: {start.reached}"
        )


def shares() -> None:
    """Print how much of a Hubbard run is spent in gates, cuts and measuring."""
    chain = hubbard_chain(sites=12, repulsion=4.0)
    beta = step(bond_positions(chain.sites), left=0.2, right=1.0).tolist()
    quench = Quench(
        chain=chain,
        start_terms=start_terms(chain, beta=beta),
        every=0.5,
        samples=4,
        steps=8,
        trotter_order=4,
        discarded_weight=1e-7,
        preparation_weight=1e-11,
        preparation_distance=3e-5,
    )
    profile = cProfile.Profile()
    record = profile.runcall(simulate, quench)
    table = pstats.Stats(profile).stats  # type: ignore[attr-defined]
    spent = {key[2]: value[3] for key, value in table.items()}
    print(f"hubbard 12 sites to t = 2, bond {record.bond_dimension[-1].max():.0f}, seconds by function:")
    for name in ("simulate", "apply_layer", "apply_gate", "cut", "measure"):
        print(f"  {name:12s} {spent[name]:7.1f}  {100.0 * spent[name] / spent['simulate']:5.1f} %")


if __name__ == "__main__":
    shares()
    starts()
