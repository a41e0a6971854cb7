"""A spin chain as its bond terms in Pauli strings; every local observable follows from them.

Currents are never written by hand: the continuity equations of `conventions` give K_j = i[h_{j-1}, h_j] for
the energy and, since q_i + q_{i+1} commutes with h_i, J_i = -i[h_i, q_i] for the charge.
"""

from __future__ import annotations

from dataclasses import dataclass

from tnquench.model.pauli import Operator, X, Y, Z, add, commutator, scale, string


@dataclass(frozen=True)
class Chain:
    """Bond terms h_j, j = 0..L-2, with sum_j h_j = H, and the conserved charge's densities q_i, i =
    0..L-1."""

    sites: int
    bond_terms: tuple[Operator, ...]
    charges: tuple[Operator, ...]

    def energy_current(self, site: int) -> Operator:
        """Return K_j = i[h_{j-1}, h_j] on `site` j; zero on both ends."""
        if site in (0, self.sites - 1):
            return {}
        return scale(commutator(self.bond_terms[site - 1], self.bond_terms[site]), 1j)

    def charge_current(self, bond: int) -> Operator:
        """Return J_i = -i[h_i, q_i] on `bond` i, the flow of charge from site i to site i + 1."""
        return scale(commutator(self.bond_terms[bond], self.charges[bond]), -1j)

    def observables(self) -> dict[str, tuple[Operator, ...]]:
        """Return every local observable by its name in the dataset, one operator a site or bond."""
        return {
            "energy_density": self.bond_terms,
            "energy_current": tuple(self.energy_current(site) for site in range(self.sites)),
            "charge_density": self.charges,
            "charge_current": tuple(self.charge_current(bond) for bond in range(self.sites - 1)),
        }


def xxz_chain(*, sites: int, anisotropy: float, coupling: float = 1.0) -> Chain:
    """Return the chain h_j = J [SxSx + SySy + D SzSz] with S = sigma/2 and charge q_i = S^z_i.

    sites : number L of sites, at least 2; anisotropy : D; coupling : J, the unit of energy.
    """
    quarter = 0.25 * coupling
    bonds = tuple(
        add(
            {string((j, X), (j + 1, X)): quarter},
            {string((j, Y), (j + 1, Y)): quarter},
            scale({string((j, Z), (j + 1, Z)): quarter}, anisotropy),
        )
        for j in range(sites - 1)
    )
    return Chain(sites=sites, bond_terms=bonds, charges=tuple({string((i, Z)): 0.5} for i in range(sites)))


def share_among_bonds(site_terms: tuple[Operator, ...]) -> tuple[Operator, ...]:
    """Spread on-site terms over the bonds: half to each adjacent bond, wholly to the only bond at an end.

    site_terms : one operator a site (L of them); returns one operator a bond (L - 1), with the same sum.
    """
    last = len(site_terms) - 1
    return tuple(
        add(
            scale(site_terms[bond], 1.0 if bond == 0 else 0.5),
            scale(site_terms[bond + 1], 1.0 if bond + 1 == last else 0.5),
        )
        for bond in range(last)
    )


def start_terms(
    chain: Chain, *, beta: list[float], beta_charge: list[float] | None = None
) -> tuple[Operator, ...]:
    """Return k_j with sum_j k_j = K of the start rho_0 = exp(-K)/Z, one operator a bond.

    beta : inverse temperature of each bond (L - 1); beta_charge : product of inverse temperature and field
    (or chemical potential) at each site (L), which lowers the energy: K = sum_j beta_j h_j - sum_i (beta h)_i
    q_i.
    """
    thermal = [
        scale(term, inverse_temperature)
        for term, inverse_temperature in zip(chain.bond_terms, beta, strict=True)
    ]
    if beta_charge is None:
        return tuple(thermal)
    fields = tuple(scale(charge, -value) for charge, value in zip(chain.charges, beta_charge, strict=True))
    return tuple(add(term, field) for term, field in zip(thermal, share_among_bonds(fields), strict=True))
