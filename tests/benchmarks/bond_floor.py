"""What the bond floor changes: true errors and times of a free chain with and without it.

Run: python -m tests.benchmarks.bond_floor

xxz at D = 0, 64 sites, beta 0.5 | 2, weights 1e-8 and 1e-6, order 4, dt = 0.25, t = 5, against free fermions.
The left end is nearly uniform and keeps 4 or 5 singular values without a floor, at either weight.
"""

from __future__ import annotations

import numpy as np
from threadpoolctl import threadpool_limits

from tests.oracles.free_fermions import free_evolution
from tnquench.conventions import bond_positions
from tnquench.model.chain import start_terms
from tnquench.model.profiles import step
from tnquench.model.spins import xxz_chain
from tnquench.observables.quench import Quench, simulate

SITES = 64


def main() -> None:
    """Print the error at the left end, the largest error and the wall time for each floor and weight."""
    chain = xxz_chain(sites=SITES, anisotropy=0.0)
    beta = step(bond_positions(SITES), left=0.5, right=2.0)
    exact = free_evolution(sites=SITES, beta=beta, times=[5.0])["energy_density"][0]
    for floor in (1, 32):
        for weight in (1e-8, 1e-6):
            record = simulate(
                Quench(
                    chain=chain,
                    start_terms=start_terms(chain, beta=beta.tolist()),
                    every=1.0,
                    samples=5,
                    steps=4,
                    trotter_order=4,
                    discarded_weight=weight,
                    preparation_weight=1e-12,
                    preparation_distance=3e-6,
                    bond_floor=floor,
                )
            )
            error = np.abs(record.fields["energy_density"][-1] - exact)
            bonds = record.bond_dimension[-1, :8].astype(int).tolist()
            ends = f"left end {error[0]:.1e}, largest {error.max():.1e}"
            print(f"floor {floor}, weight {weight:.0e}: {ends}, {record.seconds:.1f} s, first bonds {bonds}")


if __name__ == "__main__":
    with threadpool_limits(1):
        main()
