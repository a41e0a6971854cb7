"""Short open XXZ chains solved exactly, by diagonalising dense matrices of size 2^L (L up to about 10).

Written from the definitions alone: h_j = J [Sx_j Sx_{j+1} + Sy_j Sy_{j+1} + D Sz_j Sz_{j+1}], S = sigma/2,
start rho_0 = exp(-sum_j beta_j h_j + sum_i (beta h)_i Sz_i) / Z, evolution under H = sum_j h_j, hbar = 1.
Currents are i times commutators, never closed forms, except the spin current, which the tests check by
continuity. Site 0 is the most significant bit of a basis state; bit 0 is spin up.
"""

from __future__ import annotations

from collections.abc import Sequence
from itertools import pairwise

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy import sparse

Reals = NDArray[np.float64]
Complexes = NDArray[np.complex128]

SPIN_X = np.array([[0.0, 0.5], [0.5, 0.0]], dtype=np.complex128)
SPIN_Y = np.array([[0.0, -0.5j], [0.5j, 0.0]], dtype=np.complex128)
SPIN_Z = np.array([[0.5, 0.0], [0.0, -0.5]], dtype=np.complex128)


def on_chain(operator: Complexes, *, first: int, sites: int) -> sparse.csr_matrix:
    """Operator on the sites from `first` on, times the identity elsewhere; sparse (2^sites, 2^sites)."""
    covered = operator.shape[0].bit_length() - 1
    left = sparse.identity(2**first, format="csr")
    right = sparse.identity(2 ** (sites - first - covered), format="csr")
    return sparse.kron(sparse.kron(left, sparse.csr_matrix(operator)), right, format="csr")


def local_hamiltonian(*, sites: int, anisotropy: float, coupling: float = 1.0) -> list[sparse.csr_matrix]:
    """The bond terms h_j, j = 0..sites-2, in units of energy; their sum is H."""
    pair = np.kron(SPIN_X, SPIN_X) + np.kron(SPIN_Y, SPIN_Y) + anisotropy * np.kron(SPIN_Z, SPIN_Z)
    return [coupling * on_chain(pair, first=bond, sites=sites) for bond in range(sites - 1)]


def magnetisations(*, sites: int) -> list[sparse.csr_matrix]:
    """The charges Sz_i, one a site."""
    return [on_chain(SPIN_Z, first=site, sites=sites) for site in range(sites)]


def spin_currents(*, sites: int, coupling: float = 1.0) -> list[sparse.csr_matrix]:
    """The charge currents J (Sx_j Sy_{j+1} - Sy_j Sx_{j+1}), one a bond."""
    pair = np.kron(SPIN_X, SPIN_Y) - np.kron(SPIN_Y, SPIN_X)
    return [coupling * on_chain(pair, first=bond, sites=sites) for bond in range(sites - 1)]


def energy_currents(terms: Sequence[sparse.csr_matrix]) -> list[sparse.csr_matrix]:
    """The energy currents K_j = i [h_{j-1}, h_j] of the bond terms, one a site, zero at both ends."""
    zero = sparse.csr_matrix(terms[0].shape, dtype=np.complex128)
    inner = [1j * (before @ after - after @ before) for before, after in pairwise(terms)]
    return [zero, *inner, zero]


def square_root_start(
    terms: Sequence[sparse.csr_matrix], *, beta: Reals, beta_field: Reals
) -> tuple[Complexes, float]:
    """The Hermitian square root of rho_0 (its square has trace 1) and ln Z, by diagonalising -ln rho_0."""
    exponent = sum(
        (weight * term for weight, term in zip(beta, terms, strict=True)),
        sparse.csr_matrix(terms[0].shape, dtype=np.complex128),
    )
    for weight, charge in zip(beta_field, magnetisations(sites=beta_field.size), strict=True):
        exponent = exponent - weight * charge
    levels, vectors = np.linalg.eigh(exponent.toarray())
    boltzmann = np.exp(levels[0] - levels)
    log_partition_function = float(np.log(boltzmann.sum()) - levels[0])
    roots = np.sqrt(boltzmann / boltzmann.sum())
    return (vectors * roots) @ vectors.conj().T, log_partition_function


def entanglement_of_operator(operator: Complexes, *, sites: int) -> Reals:
    """Von Neumann entropy (nats) across each bond, shape (bond,), of an operator of unit norm as a vector.

    The ket and the bra index of a site stay on the same side of every bond.
    """
    entropies = np.zeros(sites - 1)
    for bond in range(sites - 1):
        left, right = 2 ** (bond + 1), 2 ** (sites - bond - 1)
        folded = operator.reshape(left, right, left, right).transpose(0, 2, 1, 3).reshape(left**2, right**2)
        if left > right:
            folded = folded.T
        weights = np.linalg.eigvalsh(folded @ folded.conj().T)
        kept = weights[weights > 0.0]
        entropies[bond] = -np.sum(kept * np.log(kept))
    return entropies


def expectation(rho: Complexes, operator: sparse.csr_matrix) -> float:
    """Tr(rho O) of a Hermitian operator."""
    return float(operator.multiply(rho.T).sum().real)


def exact_evolution(
    *,
    sites: int,
    anisotropy: float,
    beta: ArrayLike,
    times: ArrayLike,
    beta_field: ArrayLike | None = None,
    coupling: float = 1.0,
    entanglement: bool = True,
) -> dict[str, Reals]:
    """Evolve rho_0 exactly and measure every observable of the dataset.

    beta       : inverse temperature of each bond term, shape (bond,); a number means the same everywhere
    beta_field : product of inverse temperature and field of each site, shape (site,); None is zero
    times      : in units of 1/J, shape (time,)
    Returns energy_density (time, bond), energy_current (time, site), charge_density (time, site),
    charge_current (time, bond), total_energy (time,), operator_entanglement (time, bond; left out if not
    wanted) and log_partition_function (a number in an array without axes).
    """
    terms = local_hamiltonian(sites=sites, anisotropy=anisotropy, coupling=coupling)
    weights = np.broadcast_to(np.asarray(beta, dtype=np.float64), (sites - 1,))
    field = 0.0 if beta_field is None else beta_field
    fields = np.broadcast_to(np.asarray(field, dtype=np.float64), (sites,))
    root, log_partition_function = square_root_start(terms, beta=weights, beta_field=fields)
    levels, vectors = np.linalg.eigh(np.asarray(sum(terms).toarray()))
    in_levels = vectors.conj().T @ root @ vectors
    operators = {
        "energy_density": terms,
        "energy_current": energy_currents(terms),
        "charge_density": magnetisations(sites=sites),
        "charge_current": spin_currents(sites=sites, coupling=coupling),
    }
    rows: dict[str, list[list[float]]] = {name: [] for name in operators}
    entropies: list[Reals] = []
    instants = np.atleast_1d(np.asarray(times, dtype=np.float64))
    for instant in instants:
        turned = vectors * np.exp(-1j * levels * instant)
        sigma = turned @ in_levels @ turned.conj().T
        rho = sigma @ sigma
        for name, members in operators.items():
            rows[name].append([expectation(rho, member) for member in members])
        if entanglement:
            entropies.append(entanglement_of_operator(sigma, sites=sites))
    result = {name: np.array(values) for name, values in rows.items()}
    result["total_energy"] = result["energy_density"].sum(axis=1)
    result["log_partition_function"] = np.array(log_partition_function)
    if entanglement:
        result["operator_entanglement"] = np.array(entropies)
    return result
