"""XXZ chains at anisotropy zero, solved exactly as free fermions: any length, and the infinite chain.

Jordan and Wigner (1928): with Sz_i = n_i - 1/2 and S+_i = c+_i prod_{l<i} (1 - 2 n_l), the bond term is
h_j = (J/2) (c+_j c_{j+1} + c+_{j+1} c_j). Every operator needed is then sum_ab O_ab c+_a c_b, products of
exponentials of such operators are Gaussian, and [c+ A c, c+ B c] = c+ [A, B] c turns commutators of operators
into commutators of sites-by-sites matrices. Everything follows from the covariance C_ab = <c+_a c_b>.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

Reals = NDArray[np.float64]
Complexes = NDArray[np.complex128]


def hopping(amplitudes: Reals) -> Reals:
    """Matrix of sum_j amplitudes_j (c+_j c_{j+1} + h.c.), shape (site, site)."""
    return np.diag(amplitudes, k=1) + np.diag(amplitudes, k=-1)


def entropy_of_modes(occupations: Reals) -> float:
    """Entropy in nats of independent fermion modes with these occupations."""
    inside = np.clip(occupations, 1e-300, 1.0)
    outside = np.clip(1.0 - occupations, 1e-300, 1.0)
    return float(-np.sum(inside * np.log(inside) + outside * np.log(outside)))


def entanglement_of_square_root(filled: Complexes, paired: Complexes) -> Reals:
    """Entropy across each bond of sqrt(rho) as a vector, shape (bond,).

    filled : Fermi function of the exponent of rho, f, shape (site, site)
    paired : sqrt(f (1 - f)), same shape
    sqrt(rho) applied to prod_i (c+_i + d+_i)/sqrt 2 is a Slater determinant of physical (c) and auxiliary (d)
    fermions, whose one-particle projector is [[f, paired], [paired, 1 - f]].
    """
    sites = filled.shape[0]
    entropies = np.zeros(sites - 1)
    for bond in range(sites - 1):
        size = min(bond + 1, sites - bond - 1)  # a pure state: both sides have the same entropy
        side = slice(0, size) if bond + 1 == size else slice(sites - size, sites)
        block, cross = filled[side, side], paired[side, side]
        projector = np.block([[block, cross], [cross, np.eye(size) - block]])
        entropies[bond] = entropy_of_modes(np.linalg.eigvalsh(projector))
    return entropies


def measure(covariance: Complexes, *, coupling: float) -> dict[str, Reals]:
    """Densities and currents of one instant from C_ab = <c+_a c_b>, each of shape (bond,) or (site,)."""
    sites = covariance.shape[0]
    neighbours = np.diagonal(covariance, offset=1)
    second = np.diagonal(covariance, offset=2)  # [h_{j-1}, h_j] = (J/2)^2 (c+_{j-1} c_{j+1} - h.c.)
    energy_current = np.zeros(sites)
    energy_current[1:-1] = -0.5 * coupling**2 * second.imag
    return {
        "energy_density": coupling * neighbours.real,
        "energy_current": energy_current,
        "charge_density": np.diagonal(covariance).real - 0.5,
        "charge_current": -coupling * neighbours.imag,
    }


def free_evolution(
    *,
    sites: int,
    beta: ArrayLike,
    times: ArrayLike,
    beta_field: ArrayLike | None = None,
    coupling: float = 1.0,
    entanglement: bool = False,
) -> dict[str, Reals]:
    """Evolve rho_0 = exp(-sum beta_j h_j + sum (beta h)_i Sz_i) / Z at anisotropy zero.

    beta       : inverse temperature of each bond term, shape (bond,); a number means the same everywhere
    beta_field : product of inverse temperature and field of each site, shape (site,); None is zero
    times      : in units of 1/J, shape (time,)
    Returns the keys and shapes of `exact_chain.exact_evolution`.
    """
    weights = np.broadcast_to(np.asarray(beta, dtype=np.float64), (sites - 1,))
    field = 0.0 if beta_field is None else beta_field
    fields = np.broadcast_to(np.asarray(field, dtype=np.float64), (sites,))
    exponents, modes = np.linalg.eigh(hopping(0.5 * coupling * weights) - np.diag(fields))
    log_partition_function = np.sum(np.logaddexp(0.0, -exponents)) - 0.5 * np.sum(fields)
    occupied = np.exp(-np.logaddexp(0.0, exponents))
    filled = (modes * occupied) @ modes.T
    paired = (modes * np.exp(0.5 * (exponents - 2.0 * np.logaddexp(0.0, exponents)))) @ modes.T

    levels, orbitals = np.linalg.eigh(hopping(np.full(sites - 1, 0.5 * coupling)))
    rows: dict[str, list[Reals]] = {}
    entropies: list[Reals] = []
    for instant in np.atleast_1d(np.asarray(times, dtype=np.float64)):
        turn = (orbitals * np.exp(-1j * levels * instant)) @ orbitals.T
        now = turn @ filled @ turn.conj().T  # f in the site basis; <c+_a c_b> is its transpose
        for name, values in measure(now.T, coupling=coupling).items():
            rows.setdefault(name, []).append(values)
        if entanglement:
            entropies.append(entanglement_of_square_root(now, turn @ paired @ turn.conj().T))
    result = {name: np.array(values) for name, values in rows.items()}
    result["total_energy"] = result["energy_density"].sum(axis=1)
    result["log_partition_function"] = np.array(log_partition_function)
    if entanglement:
        result["operator_entanglement"] = np.array(entropies)
    return result


def infinite_chain(
    *, beta: float, field: float, coupling: float = 1.0, nodes: int = 4000
) -> dict[str, float]:
    """Equilibrium of exp[-beta (H - h Sz)] per site of the infinite chain at anisotropy zero.

    E. Lieb, T. Schultz, D. Mattis, Ann. Phys. 16, 407 (1961); S. Katsura, Phys. Rev. 127, 1508 (1962): modes
    of energy J cos k - h. The trapezoidal rule on the circle converges exponentially once nodes * T / J is
    large.
    Returns free_energy, energy (of H), entropy, magnetisation, specific_heat (at fixed h), susceptibility.
    """
    momenta = 2.0 * np.pi * (np.arange(nodes) + 0.5) / nodes
    energies = coupling * np.cos(momenta)
    excess = energies - field
    occupied = np.exp(-np.logaddexp(0.0, beta * excess))
    spread = np.exp(-np.logaddexp(0.0, beta * excess) - np.logaddexp(0.0, -beta * excess))
    free_energy = float(0.5 * field - np.mean(np.logaddexp(0.0, -beta * excess)) / beta)
    energy = float(np.mean(energies * occupied))
    magnetisation = float(np.mean(occupied)) - 0.5
    return {
        "free_energy": free_energy,
        "energy": energy,
        "entropy": beta * (energy - field * magnetisation - free_energy),
        "magnetisation": magnetisation,
        "specific_heat": float(beta**2 * np.mean(excess**2 * spread)),
        "susceptibility": float(beta * np.mean(spread)),
    }


def joined_halves(
    rays: ArrayLike, *, left: tuple[float, float], right: tuple[float, float], coupling: float = 1.0
) -> dict[str, Reals]:
    """Densities and currents at x/t = ray long after two infinite halves are joined, anisotropy zero.

    rays        : x/t in units of J, shape (ray,)
    left, right : (beta, beta h) of each half
    A mode of momentum k and velocity v = J sin k (energy J cos k; k runs backwards, which no integral minds)
    carries the occupation of the left half if v > x/t, else of the right. T. Antal, Z. Racz, A. Rakos,
    G. M. Schutz, Phys. Rev. E 59, 4912 (1999) for fields; Y. Ogata, Phys. Rev. E 66, 016135 (2002) for
    temperatures (references from memory; the formula is tested against a finite chain).
    Returns the four observables, each of shape (ray,).
    """
    nodes, weights = np.polynomial.legendre.leggauss(400)  # enough for beta J up to about 50

    def arc(first: float, last: float, state: tuple[float, float]) -> Reals:
        momenta = 0.5 * (first + last) + 0.5 * (last - first) * nodes
        velocity, energy = coupling * np.sin(momenta), coupling * np.cos(momenta)
        occupied = np.exp(-np.logaddexp(0.0, state[0] * energy - state[1]))
        moments = np.array([energy, velocity * energy, np.ones_like(energy), velocity])
        return moments @ (weights * occupied) * 0.5 * (last - first) / (2.0 * np.pi)

    columns = []
    for ray in np.atleast_1d(np.asarray(rays, dtype=np.float64)):
        edge = float(np.arcsin(np.clip(ray / coupling, -1.0, 1.0)))
        columns.append(arc(edge, np.pi - edge, left) + arc(np.pi - edge, 2.0 * np.pi + edge, right))
    energy, energy_current, charge, charge_current = np.array(columns).T
    return {
        "energy_density": energy,
        "energy_current": energy_current,
        "charge_density": charge - 0.5,
        "charge_current": charge_current,
    }
