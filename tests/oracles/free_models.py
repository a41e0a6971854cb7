"""Ising, spinless-fermion and Hubbard chains without interaction, solved exactly as Gaussian states.

Fermions with a number (fermion at V = 0, each species of hubbard at U = 0): operators sum_ab O_ab c+_a c_b,
whose commutators are those of the sites-by-sites matrices; all follows from C_ab = <c+_a c_b>.

Ising (P. Pfeuty, Ann. Phys. 57, 79 (1970) for the spectrum): Majorana operators a_{2i} = (prod_{l<i}
sigma^z_l) sigma^x_i and a_{2i+1} = (prod_{l<i} sigma^z_l) sigma^y_i, {a_m, a_n} = 2 delta_mn, give
sigma^z_i = -i a_{2i} a_{2i+1} and sigma^x_i sigma^x_{i+1} = -i a_{2i+1} a_{2i+2}. A real antisymmetric A
stands for O(A) = (i/4) sum_mn A_mn a_m a_n, with i [O(A), O(B)] = -O([A, B]); under H = O(A) the operators
turn as a(t) = exp(A t) a. With G_mn = (i/2) <[a_m, a_n]>, <O(A)> = (1/4) sum_mn A_mn G_mn, and the state
exp(-O(A))/Z has G = i tanh(i A / 2). Conventions (sharing of on-site terms, currents, start) as in
exact_models, from which nothing is taken.
"""

from __future__ import annotations

from collections.abc import Sequence
from itertools import pairwise

import numpy as np
from numpy.typing import ArrayLike, NDArray

Reals = NDArray[np.float64]
Complexes = NDArray[np.complex128]


def at_each(values: ArrayLike, places: int) -> Reals:
    """A number or one value a place, as an array of shape (places,)."""
    return np.array(np.broadcast_to(np.asarray(values, dtype=np.float64), (places,)))


def shares_of_bonds(sites: int) -> Reals:
    """Share of bond j in the on-site term of site i, shape (bond, site): halves, and all of it at an end."""
    bonds = np.arange(sites - 1)
    shares = np.zeros((sites - 1, sites))
    shares[bonds, bonds] = shares[bonds, bonds + 1] = 0.5
    shares[0, 0] = shares[-1, -1] = 1.0
    return shares


def stacked(rows: Sequence[dict[str, Reals]]) -> dict[str, Reals]:
    """One dictionary of arrays with a leading axis of time."""
    return {name: np.array([row[name] for row in rows]) for name in rows[0]}


# --- Ising ---------------------------------------------------------------------------------------------


def ising_bond_matrices(*, sites: int, coupling: float, transverse_field: float) -> Reals:
    """The matrices A of all h_j, shape (bond, 2 sites, 2 sites)."""
    shares = shares_of_bonds(sites)
    matrices = np.zeros((sites - 1, 2 * sites, 2 * sites))
    for bond in range(sites - 1):
        matrices[bond, 2 * bond + 1, 2 * bond + 2] = 2.0 * coupling
        for site in (bond, bond + 1):
            matrices[bond, 2 * site, 2 * site + 1] = 2.0 * transverse_field * shares[bond, site]
    return matrices - matrices.transpose(0, 2, 1)


def energy_current_matrices(matrices: NDArray[np.generic]) -> list[NDArray[np.generic]]:
    """The commutators [A_{j-1}, A_j] of neighbouring bond terms, one an inner site."""
    return [one @ other - other @ one for one, other in pairwise(matrices)]


def ising_quench(
    *, sites: int, transverse_field: float, beta: ArrayLike, times: Sequence[float], coupling: float = 1.0
) -> dict[str, Reals]:
    """Evolve exp(-sum_j beta_j h_j)/Z of the transverse-field Ising chain exactly.

    beta : inverse temperature of each bond term, shape (bond,); times : in units of 1/J
    Returns energy_density (time, bond), energy_current and transverse_magnetisation <sigma^z> (time, site),
    log_partition_function (no axes).
    """
    bonds = ising_bond_matrices(sites=sites, coupling=coupling, transverse_field=transverse_field)
    exponent = np.tensordot(at_each(beta, sites - 1), bonds, axes=1)
    energies, modes = np.linalg.eigh(1j * exponent)
    start = (1j * (modes * np.tanh(0.5 * energies)) @ modes.conj().T).real
    frequencies, orbitals = np.linalg.eigh(1j * bonds.sum(axis=0))
    currents = energy_current_matrices(bonds)
    rows = []
    for time in times:
        turn = ((orbitals * np.exp(-1j * frequencies * time)) @ orbitals.conj().T).real
        now = turn @ start @ turn.T
        energy_current = np.zeros(sites)
        energy_current[1:-1] = [-0.25 * np.sum(current * now) for current in currents]
        rows.append(
            {
                "energy_density": 0.25 * np.einsum("jmn,mn->j", bonds, now),
                "energy_current": energy_current,
                "transverse_magnetisation": -np.diagonal(now, offset=1)[::2],
            }
        )
    positive = energies[energies.size // 2 :]
    log_partition_function = np.sum(np.logaddexp(0.5 * positive, -0.5 * positive))
    return stacked(rows) | {"log_partition_function": np.array(log_partition_function)}


# --- fermions with a number ----------------------------------------------------------------------------


def hopping_bond_matrices(*, sites: int, hopping: float, potential: ArrayLike = 0.0) -> Reals:
    """The matrices of h_j = -t_h (c+_j c_{j+1} + h.c.) + shares of potential_i n_i, (bond, site, site)."""
    values = shares_of_bonds(sites) * at_each(potential, sites)
    matrices = np.zeros((sites - 1, sites, sites))
    for bond in range(sites - 1):
        matrices[bond, bond, bond + 1] = matrices[bond, bond + 1, bond] = -hopping
        matrices[bond] += np.diag(values[bond])
    return matrices


def species_quench(
    bonds: Reals, *, beta: ArrayLike, beta_mu: ArrayLike, times: Sequence[float]
) -> tuple[dict[str, Reals], float]:
    """One species from exp(-sum_j beta_j h_j + sum_i (beta mu)_i n_i)/Z: fields and ln Z.

    bonds : matrices of the h_j. Returns energy_density, current (time, bond), energy_current, number (time,
    site).
    """
    sites = bonds.shape[1]
    exponent = np.tensordot(at_each(beta, sites - 1), bonds, axes=1) - np.diag(at_each(beta_mu, sites))
    energies, modes = np.linalg.eigh(exponent)
    start = (modes * np.exp(-np.logaddexp(0.0, energies))) @ modes.T
    levels, orbitals = np.linalg.eigh(bonds.sum(axis=0))
    commutators = energy_current_matrices(bonds)
    rows = []
    for time in times:
        turn = (orbitals * np.exp(-1j * levels * time)) @ orbitals.T
        covariance = (turn @ start @ turn.conj().T).T  # <c+_a c_b>
        energy_current = np.zeros(sites)
        energy_current[1:-1] = [-np.sum(matrix * covariance.imag) for matrix in commutators]
        hoppings = -np.array([bonds[bond, bond, bond + 1] for bond in range(sites - 1)])
        rows.append(
            {
                "energy_density": np.einsum("jab,ab->j", bonds, covariance.real),
                "energy_current": energy_current,
                "number": np.diagonal(covariance).real.copy(),
                "current": 2.0 * hoppings * np.diagonal(covariance, offset=1).imag,
            }
        )
    return stacked(rows), float(np.sum(np.logaddexp(0.0, -energies)))


def fermion_quench(
    *,
    sites: int,
    beta: ArrayLike,
    times: Sequence[float],
    beta_mu: ArrayLike = 0.0,
    potential: ArrayLike = 0.0,
    hopping: float = 1.0,
) -> dict[str, Reals]:
    """Spinless fermions at V = 0 from exp(-sum beta_j h_j + sum (beta mu)_i (n_i - 1/2))/Z.

    potential : V_i in H (and in the h_j of the start) of + sum V_i (n_i - 1/2). Returns the four observables
    of a chain with one charge and log_partition_function (no axes).
    """
    bonds = hopping_bond_matrices(sites=sites, hopping=hopping, potential=potential)
    fields, log_partition_function = species_quench(bonds, beta=beta, beta_mu=beta_mu, times=times)
    shift = 0.5 * shares_of_bonds(sites) @ at_each(potential, sites)  # of n - 1/2 against n, a bond
    constant = at_each(beta, sites - 1) @ shift - 0.5 * at_each(beta_mu, sites).sum()
    return {
        "energy_density": fields["energy_density"] - shift,
        "energy_current": fields["energy_current"],
        "charge_density": fields["number"] - 0.5,
        "charge_current": fields["current"],
        "log_partition_function": np.array(log_partition_function + constant),
    }


def hubbard_quench(
    *,
    sites: int,
    beta: ArrayLike,
    times: Sequence[float],
    beta_mu: ArrayLike = 0.0,
    beta_field: ArrayLike = 0.0,
    hopping: float = 1.0,
) -> dict[str, Reals]:
    """Hubbard at U = 0 from exp(-sum beta_j h_j + sum (beta mu)_i (n_i - 1) + sum (beta h)_i Sz_i)/Z.

    Two independent species with beta mu plus and minus half of beta h. Returns every observable of the model
    and log_partition_function (no axes).
    """
    bonds = hopping_bond_matrices(sites=sites, hopping=hopping)
    mu, half = at_each(beta_mu, sites), 0.5 * at_each(beta_field, sites)
    up, log_up = species_quench(bonds, beta=beta, beta_mu=mu + half, times=times)
    down, log_down = species_quench(bonds, beta=beta, beta_mu=mu - half, times=times)
    return {
        "energy_density": up["energy_density"] + down["energy_density"],
        "energy_current": up["energy_current"] + down["energy_current"],
        "charge_density": up["number"] + down["number"] - 1.0,
        "charge_current": up["current"] + down["current"],
        "magnetisation": 0.5 * (up["number"] - down["number"]),
        "spin_current": 0.5 * (up["current"] - down["current"]),
        "double_occupancy": up["number"] * down["number"],
        "log_partition_function": np.array(log_up + log_down - mu.sum()),
    }
