"""How well the energy scale of a bond foretells the error of a Trotter step, model by model.

Run: python -m tests.benchmarks.bond_energy

With H = A + B, even and odd bonds, one step exp(-i A dt/2) exp(-i B dt) exp(-i A dt/2) errs by
dt^3 ([A, [A, B]]/24 + [B, [A, B]]/12). Printed is the cube root of the norm of that operator a bond, over its
value for xxz at J = 1, D = 0.5, divided by the scale of `tnquench.config.energies`: 1 where a step of fixed
scale times dt errs as much as there, more where it errs more.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from tnquench.config.energies import bond_energy
from tnquench.model.catalogue import build_chain
from tnquench.model.extras import ExtraTerm
from tnquench.model.pauli import add, dense

CASES: list[tuple[str, int, dict[str, float], list[dict[str, Any]]]] = [
    *(("xxz", 7, {"coupling": 1.0, "anisotropy": d}, []) for d in (0.0, 0.5, 1.0, 2.0, 4.0)),
    *(("ising", 7, {"coupling": 1.0, "transverse_field": g}, []) for g in (0.5, 1.0, 2.0)),
    *(("fermion", 7, {"hopping": 1.0, "repulsion": v}, []) for v in (0.0, 2.0, 4.0)),
    *(("hubbard", 4, {"hopping": 1.0, "repulsion": u}, []) for u in (0.0, 4.0, 8.0, 16.0)),
    *(
        ("xxz", 7, {"coupling": 1.0, "anisotropy": 0.5}, [{"kind": kind, "strength": strength}])
        for kind in ("staggered_field", "uniform_field")
        for strength in (0.5, 1.0, 4.0)
    ),
]


def main() -> None:
    """Print the ratio of each case."""
    reference = step_error("xxz", 7, {"coupling": 1.0, "anisotropy": 0.5}, [])
    for model, sites, parameters, extras in CASES:
        scale = bond_energy({"model": model, "sites": sites, "extra": extras, **parameters})
        assert scale is not None
        ratio = step_error(model, sites, parameters, extras) / reference / scale
        print(f"{model:8} {parameters} {extras}: {ratio:.2f}")


def step_error(model: str, sites: int, parameters: dict[str, float], extras: list[dict[str, Any]]) -> float:
    """Return the cube root of the norm a bond of the leading error operator."""
    terms = [ExtraTerm(**extra) for extra in extras]
    chain, _ = build_chain(model, sites=sites, parameters=parameters, extras=terms)
    qubits = sites * chain.qubits_per_site
    even, odd = (dense(add(*chain.bond_terms[first::2]), first=0, qubits=qubits) for first in (0, 1))
    mixed = even @ odd - odd @ even
    error = (even @ mixed - mixed @ even) / 24.0 + (odd @ mixed - mixed @ odd) / 12.0
    return float((np.linalg.norm(error, 2) / (sites - 1)) ** (1.0 / 3.0))


if __name__ == "__main__":
    main()
