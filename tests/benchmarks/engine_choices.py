"""What some choices of the engine rest on, measured where bonds are near 300.

Run: python -m tests.benchmarks.engine_choices   (a minute of one core)

xxz, 64 sites, D = 0.5, beta 0.5 | 2 coupled, order 2, dt = 0.1, weight 1e-10, t = 6. Prints how near to each
other the vectors are that are made orthonormal, how often a second portion of random directions is needed,
what leaving leading directions as they are does to the bonds, and how the values of the middle bond divide
among the charges of S^z.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterator
from contextlib import contextmanager
from typing import Any
from unittest import mock

import numpy as np
from threadpoolctl import threadpool_limits

from tests.benchmarks.speed_cases import Problem, two_temperatures
from tnquench.conventions import Reals
from tnquench.evolution import chain_state, cutting
from tnquench.evolution.chain_state import ChainState, move_centre
from tnquench.evolution.cutting import CutRule
from tnquench.evolution.orthogonal import orthonormal, orthonormal_and_factor
from tnquench.terminal.table import aligned

UNTIL, WEIGHT = 6.0, 1e-10

#: Vectors of a charge from which a bond counts as large here.
LARGE = 24


def evolved(problem: Problem, start: ChainState) -> ChainState:
    """The state at the last time."""
    *_, last = problem.evolution(
        start.copy(), CutRule(WEIGHT, bond_floor=1), until=UNTIL, time_step=0.1, order=2
    )
    return last.state


def smallest_eigenvalue(vectors: Reals) -> float:
    """Of the Gram matrices of vectors scaled to unit length."""
    gram = vectors @ vectors.swapaxes(1, 2)
    lengths = np.sqrt(np.einsum("cii->ci", gram))
    return float(np.linalg.eigvalsh(gram / (lengths[:, :, None] * lengths[:, None, :])).min())


@contextmanager
def listening(heard: dict[str, list[float]], count: Counter[str]) -> Iterator[None]:
    """Note how near to each other large sets of vectors are, and count cuts and their second portions."""
    subspace, outside = cutting._by_subspace, cutting._outside

    def sample(vectors: Reals) -> Reals:
        if vectors.shape[1] > LARGE:
            heard["samples"].append(smallest_eigenvalue(vectors))
        return orthonormal(vectors)

    def moved(vectors: Reals) -> tuple[Reals, Reals]:
        if vectors.shape[1] > LARGE:
            heard["moves"].append(smallest_eigenvalue(vectors))
        return orthonormal_and_factor(vectors)

    def whole(blocks: Reals, guess: Reals, *others: Any) -> Any:
        count["cuts"] += guess.shape[1] > LARGE
        return subspace(blocks, guess, *others)

    def portion(blocks: Reals, basis: Reals, *others: Any) -> Reals:
        count["second portions"] += basis.shape[1] > LARGE * (1.0 + cutting.EXTRA_FRACTION)
        return outside(blocks, basis, *others)

    with (
        mock.patch.object(cutting, "orthonormal", sample),
        mock.patch.object(chain_state, "orthonormal_and_factor", moved),
        mock.patch.object(cutting, "_by_subspace", whole),
        mock.patch.object(cutting, "_outside", portion),
    ):
        yield


def spin_charges(state: ChainState) -> list[int]:
    """|q| of every value of the middle bond, q the charge of S^z that the operators left of it carry.

    The rotation's generator on operators, X -> Y -> -X, is antisymmetric; its eigenvalues between the
    singular directions are i q, up to what the cut has spoiled.
    """
    middle = state.sites // 2
    move_centre(state, middle)
    generator = np.zeros((1, 1))
    for site in range(middle):
        tensor = state.tensors[site][0]
        charges = np.zeros(tensor.shape, dtype=np.int64)
        for left, rows in enumerate(state.sector_slices(site)):
            for right, columns in enumerate(state.sector_slices(site + 1)):
                charges[rows, columns] = left ^ right
        parts = [np.where(charges == letter, tensor, 0.0) for letter in range(4)]
        carried = sum(part.T @ generator @ part for part in parts)
        generator = carried + parts[2].T @ parts[1] - parts[1].T @ parts[2]
    return [round(abs(value)) for value in np.linalg.eigvals(generator).imag]


def main() -> None:
    """Measure and print."""
    problem = two_temperatures(64)
    start = problem.prepared(distance=1e-6, weight=1e-3 * WEIGHT)
    heard: dict[str, list[float]] = {"samples": [], "moves": []}
    count: Counter[str] = Counter()
    with listening(heard, count):
        state = evolved(problem, start)
    bonds = state.bond_dimensions
    with mock.patch.object(cutting, "LEADING_FROM", 10**9):
        turned = evolved(problem, start).bond_dimensions
    charges = Counter(spin_charges(state))
    parity = 4 * (sum(charges.values()) / 4) ** 3
    spin = 2 * (charges[0] / 2) ** 3 + sum((many / 2) ** 3 for q, many in charges.items() if q)
    rows = [("what", "measured")]
    for name, values in heard.items():
        quantiles = np.quantile(values, [0.1, 0.5, 0.9])
        said = ", ".join(f"{value:.1e}" for value in quantiles)
        rows.append((f"smallest eigenvalue of scaled Gram matrices, {name} (10, 50, 90 %)", said))
    rows.append(("large cuts that need a second portion", f"{count['second portions']} of {count['cuts']}"))
    rows.append(
        ("largest bond and sum of all, leading directions as they are", f"{bonds.max()}, {bonds.sum()}")
    )
    rows.append(("the same, all turned to singular directions", f"{turned.max()}, {turned.sum()}"))
    rows.append(("values of the middle bond by |q|", str(dict(sorted(charges.items())))))
    rows.append(("operations by parity over those by |q| (cubes)", f"{parity / spin:.1f}"))
    print(aligned(rows))


if __name__ == "__main__":
    with threadpool_limits(1):
        main()
