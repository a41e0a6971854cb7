"""Quenches of the short chains of exact_models.py, by diagonalising dense matrices of up to 1024 states.

The start is rho_0 = exp(-sum_j beta_j h_j + sum_i b_i q_i)/Z, the evolution exp(-i H t), hbar = 1. States are
sorted into sectors between which neither H nor ln rho_0 has an element.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.sparse.csgraph import connected_components

from tests.oracles.exact_models import ExactChain, Matrix, total, weighted

Reals = NDArray[np.float64]
Integers = NDArray[np.intp]
Complexes = NDArray[np.complex128]


def sectors(*matrices: Matrix) -> list[Integers]:
    """The sets of basis states between which none of the matrices has an element: found, not declared."""
    linked = total([abs(matrix) for matrix in matrices])
    linked.eliminate_zeros()
    count, label = connected_components(linked, directed=False)
    return [np.flatnonzero(label == sector) for sector in range(count)]


def square_root_start(exponent: Matrix, members: Sequence[Integers]) -> tuple[list[Reals], float]:
    """The Hermitian square root of exp(-exponent)/Z (its square has trace 1) in each sector, and ln Z."""
    solved = [np.linalg.eigh(real_block(exponent, states)) for states in members]
    lowest = min(levels[0] for levels, _ in solved)
    weights = [np.exp(lowest - levels) for levels, _ in solved]
    norm = sum(float(each.sum()) for each in weights)
    roots = [
        (vectors * np.sqrt(each / norm)) @ vectors.T
        for (_, vectors), each in zip(solved, weights, strict=True)
    ]
    return roots, float(np.log(norm) - lowest)


def real_block(operator: Matrix, states: Integers) -> Reals:
    """The rows and columns of some basis states, dense. Raises ValueError if they are not real."""
    dense = operator[states][:, states].toarray()
    if np.abs(dense.imag).max() > 0.0:
        message = "expected a real matrix"
        raise ValueError(message)
    return np.ascontiguousarray(dense.real)


def exponent_of_start(chain: ExactChain, beta: ArrayLike, potentials: Mapping[str, ArrayLike]) -> Matrix:
    """- ln rho_0 up to a constant: sum_j beta_j h_j - sum_i b_i q_i."""
    exponent = total(weighted(beta, chain.terms))
    for name, values in potentials.items():
        exponent = exponent - total(weighted(values, chain.charges[name]))
    return exponent


def entanglement_of_operator(operator: Complexes, *, sites: int) -> Reals:
    """Von Neumann entropy (nats) across each bond, shape (bond,), of an operator of unit norm as a vector."""
    states = round(operator.shape[0] ** (1.0 / sites))
    entropies = []
    for cut in range(1, sites):
        left, right = states**cut, states ** (sites - cut)
        folded = operator.reshape(left, right, left, right).transpose(0, 2, 1, 3).reshape(left**2, right**2)
        folded = folded if left <= right else folded.T
        weights = np.linalg.eigvalsh(folded @ folded.conj().T)
        kept = weights[weights > 0.0]
        entropies.append(-np.sum(kept * np.log(kept)))
    return np.array(entropies)


def expectation(rho: Complexes, operator: Matrix) -> float:
    """Tr(rho O) of a Hermitian operator."""
    return float(operator.multiply(rho.T).sum().real)


def exact_quench(
    chain: ExactChain,
    *,
    beta: ArrayLike,
    times: Sequence[float],
    potentials: Mapping[str, ArrayLike] | None = None,
    start: ExactChain | None = None,
    entanglement: bool = False,
) -> dict[str, Reals]:
    """Evolve rho_0 exactly under `chain` and measure every observable.

    beta : inverse temperature of each bond term, shape (bond,); a number means the same everywhere
    potentials : charge's name -> b_i, the product of inverse temperature and field, shape (site,)
    start : the chain whose bond terms and charges make up rho_0, if not `chain` itself
    Returns every observable, shape (time, place), total_energy (time,), log_partition_function (no axes) and,
    if asked for, operator_entanglement (time, bond) of sqrt(rho) as a vector.
    """
    hamiltonian = chain.hamiltonian
    exponent = exponent_of_start(start or chain, beta, potentials or {})
    members = sectors(hamiltonian, exponent)
    roots, log_partition_function = square_root_start(exponent, members)
    solved = [np.linalg.eigh(real_block(hamiltonian, states)) for states in members]
    operators = chain.observables()
    rows: dict[str, list[list[float]]] = {name: [] for name in operators}
    entropies = []
    for time in times:
        sigma = np.zeros(hamiltonian.shape, dtype=np.complex128)
        rho = np.zeros_like(sigma)
        for states, root, (levels, vectors) in zip(members, roots, solved, strict=True):
            turn = (vectors * np.exp(-1j * levels * time)) @ vectors.T
            sigma[np.ix_(states, states)] = turn @ root @ turn.conj().T
            rho[np.ix_(states, states)] = turn @ (root @ root) @ turn.conj().T
        for name, matrices in operators.items():
            rows[name].append([expectation(rho, matrix) for matrix in matrices])
        if entanglement:
            entropies.append(entanglement_of_operator(sigma, sites=chain.sites))
    found = {name: np.array(values) for name, values in rows.items()}
    found["total_energy"] = found["energy_density"].sum(axis=1)
    found["log_partition_function"] = np.array(log_partition_function)
    return found | ({"operator_entanglement": np.array(entropies)} if entanglement else {})
