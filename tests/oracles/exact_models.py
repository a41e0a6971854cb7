"""Short open chains of every model as matrices: bond terms, charges, currents. exact_quench.py evolves them.

Written from the definitions alone, hbar = 1, with c, c+ and S as matrices:
  xxz      H = J sum [SxSx + SySy + D SzSz], q_i = Sz_i
  ising    H = -J sum sigma^x sigma^x - g sum sigma^z, no charge
  fermion  H = -t_h sum (c+c + h.c.) + V sum (n - 1/2)(n - 1/2), q_i = n_i - 1/2
  hubbard  H = -t_h sum_s (c+c + h.c.) + U sum (n_up - 1/2)(n_dn - 1/2), q_i = n_i - 1 and Sz_i
An on-site term of H belongs half to each adjacent bond, wholly to the only bond at an end; a term on sites
i and i + 2 half to each of its two bonds. The start is rho_0 = exp(-sum_j beta_j h_j + sum_i b_i q_i) / Z.
Currents are the continuity equations solved from the right end: K_j = d/dt sum_{l >= j} h_l on sites and
J_i = d/dt sum_{l > i} q_l on bonds. All fermions of a chain stand in one order, mode 2 i + s for species s of
site i, so that both species anticommute. Every Hamiltonian here is a real matrix, which halves the work.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from functools import reduce
from typing import TypeAlias

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy import sparse

Reals = NDArray[np.float64]
Matrix: TypeAlias = sparse.csr_matrix
Matrices: TypeAlias = tuple[Matrix, ...]

CURRENT_OF = {"charge_density": "charge_current", "magnetisation": "spin_current"}

LADDER = np.array([[0.0, 1.0], [0.0, 0.0]])  # takes a state from 1 (occupied) to 0 (empty)
PARITY = np.diag([1.0, -1.0])
HALF_PAULI = {
    "x": np.array([[0.0, 0.5], [0.5, 0.0]]),
    "y": np.array([[0.0, -0.5j], [0.5j, 0.0]]),
    "z": np.diag([0.5, -0.5]),
}


@dataclass(frozen=True)
class ExactChain:
    """A chain in matrices: bond terms h_j, conserved densities q_i by name, other densities by name."""

    sites: int
    terms: Matrices
    charges: Mapping[str, Matrices] = field(default_factory=dict)
    densities: Mapping[str, Matrices] = field(default_factory=dict)

    @property
    def hamiltonian(self) -> Matrix:
        return total(self.terms)

    def observables(self) -> dict[str, Matrices]:
        """Every observable by its name, one matrix a site or bond."""
        found = {"energy_density": self.terms, "energy_current": energy_currents(self.terms)}
        for name, members in self.charges.items():
            found[name] = members
            found[CURRENT_OF[name]] = charge_currents(self.hamiltonian, members)
        return found | dict(self.densities)


def total(matrices: Sequence[Matrix]) -> Matrix:
    """Sum of matrices of one shape."""
    return reduce(lambda one, other: one + other, matrices)


def product_of(factors: Sequence[NDArray[np.generic]]) -> Matrix:
    """Tensor product of one small matrix a site (or mode), the first the most significant."""
    return sparse.csr_matrix(reduce(lambda one, other: sparse.kron(one, other, format="csr"), factors))


def spins(sites: int, axis: str) -> Matrices:
    """The spin operators S = sigma/2 along one axis, one a site; each of shape (2^sites, 2^sites)."""
    one = np.eye(2)
    return tuple(
        product_of([HALF_PAULI[axis] if site == place else one for site in range(sites)])
        for place in range(sites)
    )


def annihilators(modes: int) -> Matrices:
    """The operators c_m of fermion modes in one order: parity of all earlier modes, then the ladder."""
    one = np.eye(2)
    return tuple(product_of([PARITY] * mode + [LADDER] + [one] * (modes - mode - 1)) for mode in range(modes))


def commutator(first: Matrix, second: Matrix) -> Matrix:
    return first @ second - second @ first


def energy_currents(terms: Sequence[Matrix]) -> Matrices:
    """K_j = sum_{k < j <= l} i [h_k, h_l], one a site; nothing flows through the ends."""
    nothing = 0.0 * terms[0]
    inner = (1j * commutator(total(terms[:site]), total(terms[site:])) for site in range(1, len(terms)))
    return (nothing, *inner, nothing)


def charge_currents(hamiltonian: Matrix, charges: Sequence[Matrix]) -> Matrices:
    """J_i = i [H, sum_{l > i} q_l], one a bond."""
    return tuple(1j * commutator(hamiltonian, total(charges[bond + 1 :])) for bond in range(len(charges) - 1))


def bond_terms(
    pairs: Sequence[Matrix], *, onsite: Sequence[Matrix] = (), second: Sequence[Matrix] = ()
) -> Matrices:
    """The h_j of two-site terms (one a bond), on-site terms (one a site) and terms on sites i, i + 2."""
    terms, last = list(pairs), len(pairs)
    for site, term in enumerate(onsite):
        if site in (0, last):
            terms[max(site - 1, 0)] += term
        else:
            terms[site - 1] += 0.5 * term
            terms[site] += 0.5 * term
    for first, term in enumerate(second):
        terms[first] += 0.5 * term
        terms[first + 1] += 0.5 * term
    return tuple(terms)


def weighted(values: ArrayLike, matrices: Sequence[Matrix]) -> list[Matrix]:
    """Each matrix times its value; a number means the same everywhere."""
    spread = np.broadcast_to(np.asarray(values, dtype=np.float64), (len(matrices),))
    return [value * matrix for value, matrix in zip(spread, matrices, strict=True)]


def xxz(
    *,
    sites: int,
    anisotropy: float,
    coupling: float = 1.0,
    potential: ArrayLike = 0.0,
    factors: ArrayLike = 1.0,
    second: tuple[float, float] = (0.0, 0.0),
) -> ExactChain:
    """The xxz chain, with + sum_i potential_i Sz_i, bond j times factors_j, and J2, D2 on i, i + 2."""
    x, y, z = (spins(sites, axis) for axis in "xyz")

    def exchange(one: int, other: int, uniaxial: float) -> Matrix:
        return (x[one] @ x[other] + y[one] @ y[other]).real + uniaxial * z[one] @ z[other]

    pairs = [coupling * exchange(bond, bond + 1, anisotropy) for bond in range(sites - 1)]
    wide = [second[0] * exchange(site, site + 2, second[1]) for site in range(sites - 2)]
    terms = bond_terms(weighted(factors, pairs), onsite=weighted(potential, z), second=wide)
    return ExactChain(sites, terms, charges={"charge_density": z})


def ising(
    *,
    sites: int,
    transverse_field: float,
    coupling: float = 1.0,
    longitudinal_field: ArrayLike = 0.0,
    potential: ArrayLike = 0.0,
    factors: ArrayLike = 1.0,
    second: float = 0.0,
) -> ExactChain:
    """The Ising chain, with - h sum sigma^x, + sum_i potential_i sigma^z_i, bond j times factors_j, and
    - J2 sum sigma^x_i sigma^x_{i+2}."""
    x, z = ([2.0 * matrix for matrix in spins(sites, axis)] for axis in "xz")
    pairs = [-coupling * x[bond] @ x[bond + 1] for bond in range(sites - 1)]
    along = weighted(-np.asarray(longitudinal_field), x)
    across = weighted(np.asarray(potential) - transverse_field, z)
    terms = bond_terms(
        weighted(factors, pairs),
        onsite=[one + other for one, other in zip(along, across, strict=True)],
        second=[-second * x[site] @ x[site + 2] for site in range(sites - 2)],
    )
    return ExactChain(sites, terms, densities={"transverse_magnetisation": tuple(z)})


def hop(operators: Sequence[Matrix], one: int, other: int) -> Matrix:
    """c+_one c_other + its conjugate."""
    forward = operators[one].T @ operators[other]
    return forward + forward.T


def fermion(
    *,
    sites: int,
    repulsion: float,
    hopping: float = 1.0,
    potential: ArrayLike = 0.0,
    factors: ArrayLike = 1.0,
    second: float = 0.0,
) -> ExactChain:
    """Spinless fermions, with + sum_i potential_i (n_i - 1/2), bond j times factors_j, and
    V2 sum (n_i - 1/2)(n_{i+2} - 1/2)."""
    c = annihilators(sites)
    one = sparse.identity(2**sites, format="csr")
    charge = tuple(operator.T @ operator - 0.5 * one for operator in c)
    pairs = [
        -hopping * hop(c, bond, bond + 1) + repulsion * charge[bond] @ charge[bond + 1]
        for bond in range(sites - 1)
    ]
    wide = [second * charge[site] @ charge[site + 2] for site in range(sites - 2)]
    terms = bond_terms(weighted(factors, pairs), onsite=weighted(potential, charge), second=wide)
    return ExactChain(sites, terms, charges={"charge_density": charge})


def hubbard(
    *,
    sites: int,
    repulsion: float,
    hopping: float = 1.0,
    potential: ArrayLike = 0.0,
    magnetic_field: ArrayLike = 0.0,
    factors: ArrayLike = 1.0,
) -> ExactChain:
    """The Hubbard chain, with + sum_i potential_i (n_i - 1) - sum_i field_i Sz_i, hopping times factors."""
    c = annihilators(2 * sites)
    up, down = c[0::2], c[1::2]
    one = sparse.identity(4**sites, format="csr")
    n_up, n_down = ([operator.T @ operator for operator in species] for species in (up, down))
    filled = tuple(a + b - one for a, b in zip(n_up, n_down, strict=True))
    moment = tuple(0.5 * (a - b) for a, b in zip(n_up, n_down, strict=True))
    double = tuple(a @ b for a, b in zip(n_up, n_down, strict=True))
    onsite = [
        repulsion * (a - 0.5 * one) @ (b - 0.5 * one) + outer - inner
        for a, b, outer, inner in zip(
            n_up, n_down, weighted(potential, filled), weighted(magnetic_field, moment), strict=True
        )
    ]
    pairs = [-hopping * (hop(up, bond, bond + 1) + hop(down, bond, bond + 1)) for bond in range(sites - 1)]
    return ExactChain(
        sites,
        bond_terms(weighted(factors, pairs), onsite=onsite),
        charges={"charge_density": filled, "magnetisation": moment},
        densities={"double_occupancy": double},
    )
