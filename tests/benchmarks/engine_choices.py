"""What some choices of the engine rest on, measured where bonds are near 300.

Run: python -m tests.benchmarks.engine_choices   (a minute of one core)

xxz, 64 sites, D = 0.5, beta 0.5 | 2 coupled, order 2, dt = 0.1, weight 1e-10, t = 6. Prints how near to each
other the vectors are that are made orthonormal, how often a second portion of random directions is needed,
what leaving leading directions as they are and the share of the weight outside the subspace do, how the
values of the middle bond divide among the charges of S^z, and what two threads gain in each operation.
"""

from __future__ import annotations

import time
from collections import Counter
from collections.abc import Callable, Iterator
from contextlib import contextmanager, nullcontext
from typing import Any
from unittest import mock

import numpy as np
from threadpoolctl import threadpool_limits

from tests.benchmarks.speed_cases import Problem, two_temperatures
from tnquench.conventions import Reals
from tnquench.evolution import chain_state, cutting
from tnquench.evolution.chain_state import ChainState, move_centre
from tnquench.evolution.cutting import CutRule
from tnquench.evolution.gates import apply_gate, real_time_gate
from tnquench.evolution.orthogonal import orthonormal, orthonormal_and_factor
from tnquench.evolution.threads import eigensystems, product, threads
from tnquench.model.grading import derive_grading
from tnquench.model.spins import xxz_chain
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


def chosen_otherwise(problem: Problem, start: ChainState, changed: dict[str, Any]) -> str:
    """Largest bond, sum of all and processor time of the whole evolution, with other constants of the cut."""
    with mock.patch.multiple(cutting, **changed) if changed else nullcontext():
        began = time.process_time()
        bonds = evolved(problem, start).bond_dimensions
    return f"{bonds.max()}, {bonds.sum()}, {time.process_time() - began:.2f} s"


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


def timed(task: Callable[[], object], clock: Callable[[], float], tries: int = 5) -> float:
    """The least time of a task in seconds."""
    found = []
    for _ in range(tries):
        began = clock()
        task()
        found.append(clock() - began)
    return min(found)


def operations(size: int) -> dict[str, Callable[[], object]]:
    """The operations of a cut that keeps `size` values of each of four charges."""
    random = np.random.default_rng(1)
    chain = xxz_chain(sites=4, anisotropy=0.5)
    gate = real_time_gate(chain.bond_terms[0], time=0.1, first=0, grading=derive_grading(chain.bond_terms))
    blocks = random.standard_normal((4, 4 * size, 4 * size))
    probes = random.standard_normal((4, size + size // 4, 4 * size))
    near = np.linalg.qr(random.standard_normal((4, 4 * size, size)))[0].swapaxes(1, 2).copy()
    every = probes @ probes.swapaxes(1, 2)
    symmetric = probes[:, : size // 2] @ probes[:, : size // 2].swapaxes(1, 2)
    pair = blocks.reshape(4, 1, 4 * size, 1, 4 * size).copy()
    return {
        "product": lambda: product(probes, blocks),
        "QR of a sample, Householder": lambda: orthonormal(probes.copy()),
        "QR where the centre moves, Cholesky": lambda: orthonormal_and_factor(near),
        "the same, Householder": lambda: orthonormal(near.copy()),
        "eigenproblem": lambda: eigensystems(symmetric),
        "the same of all directions": lambda: eigensystems(every),
        "gate": lambda: apply_gate(gate, pair),
    }


def thread_rows() -> Iterator[tuple[str, str]]:
    """The time of each operation on one thread, and what two gain."""
    for size in (134, 256):
        for name, task in operations(size).items():
            alone = timed(task, time.perf_counter)
            with threads(2):
                together = timed(task, time.perf_counter)
            said = f"{1e3 * alone:.1f} ms, {alone / together:.2f} times faster on two threads"
            yield f"{name}, {size} values a charge", said


def main() -> None:
    """Measure and print."""
    problem = two_temperatures(64)
    start = problem.prepared(distance=1e-6, weight=1e-3 * WEIGHT)
    heard: dict[str, list[float]] = {"samples": [], "moves": []}
    count: Counter[str] = Counter()
    with listening(heard, count):
        state = evolved(problem, start)
    choices: dict[str, dict[str, Any]] = {
        "as chosen": {},
        "all turned": {"LEADING_FROM": 10**9},
        "share 0.3": {"OUTSIDE_SHARE": 0.3},
    }
    runs = {name: chosen_otherwise(problem, start, changed) for name, changed in choices.items()}
    charges = Counter(spin_charges(state))
    parity = 4 * (sum(charges.values()) / 4) ** 3
    spin = 2 * (charges[0] / 2) ** 3 + sum((many / 2) ** 3 for q, many in charges.items() if q)
    rows = [("what", "measured")]
    for name, values in heard.items():
        quantiles = np.quantile(values, [0.1, 0.5, 0.9])
        said = ", ".join(f"{value:.1e}" for value in quantiles)
        rows.append((f"smallest eigenvalue of scaled Gram matrices, {name} (10, 50, 90 %)", said))
    rows.append(("large cuts that need a second portion", f"{count['second portions']} of {count['cuts']}"))
    rows += [(f"largest bond, sum of all, processor time: {name}", said) for name, said in runs.items()]
    rows.append(("values of the middle bond by |q|", str(dict(sorted(charges.items())))))
    rows.append(("operations by parity over those by |q| (cubes)", f"{parity / spin:.1f}"))
    print(aligned([*rows, *thread_rows()]))


if __name__ == "__main__":
    with threadpool_limits(1):
        main()
