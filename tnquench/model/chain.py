"""A chain as its bond terms in Pauli strings; every local observable follows from them.

Currents are never written by hand. The flow of the energy through site j is what reaches the bonds right of
it, K_j = sum_{l >= j} dh_l/dt = sum_{k < j <= l} i[h_k, h_l], and likewise J_i = i[H, sum_{l > i} q_l] for a
charge: the continuity equations of `conventions`, for terms of any reach.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from functools import cached_property

from tnquench.conventions import CURRENTS
from tnquench.model.pauli import Operator, add, commutator, scale, support


@dataclass(frozen=True)
class Chain:
    """An open chain and what is measured on it.

    sites      : number L of sites; qubits_per_site : qubits of each, site i holds those from i times that on
    bond_terms : h_j, j = 0..L-2, with sum_j h_j = H
    charges    : conserved densities q_i, i = 0..L-1, by the observable's name (a key of `CURRENTS`); each
                 bond term conserves them
    densities  : further local observables on sites, by name; nothing carries them
    """

    sites: int
    bond_terms: tuple[Operator, ...]
    charges: Mapping[str, tuple[Operator, ...]] = field(default_factory=dict)
    densities: Mapping[str, tuple[Operator, ...]] = field(default_factory=dict)
    qubits_per_site: int = 1

    @cached_property
    def reach(self) -> int:
        """Largest distance of two bonds whose terms share a site; a bond term may reach beyond its bond."""
        spans = [
            (bond, *(qubit // self.qubits_per_site for qubit in support(term)))
            for bond, term in enumerate(self.bond_terms)
            if term
        ]
        leftwards = max((bond - first for bond, first, _ in spans), default=0)
        rightwards = max((last - bond for bond, _, last in spans), default=1)
        return leftwards + rightwards

    def energy_current(self, site: int) -> Operator:
        """Return K_j on `site` j, the energy that flows from the bonds left of it to those right of it."""
        return add(
            *(
                scale(commutator(self.bond_terms[before], self.bond_terms[after]), 1j)
                for before in range(max(site - self.reach, 0), site)
                for after in range(site, min(before + self.reach + 1, self.sites - 1))
            )
        )

    def charge_current(self, name: str, bond: int) -> Operator:
        """Return J_i on `bond` i, the flow of the charge `name` from the sites up to i to those beyond."""
        near = range(max(bond - self.reach, 0), min(bond + self.reach + 1, self.sites - 1))
        beyond = self.charges[name][bond + 1 : bond + 2 + 2 * self.reach]
        return add(
            *(
                scale(commutator(self.bond_terms[place], charge), 1j)
                for place in near
                for charge in beyond[: place + self.reach - bond]
            )
        )

    def observables(self) -> dict[str, tuple[Operator, ...]]:
        """Return every local observable by its name in the dataset, one operator a site or bond."""
        found = {
            "energy_density": self.bond_terms,
            "energy_current": tuple(self.energy_current(site) for site in range(self.sites)),
        }
        for name, densities in self.charges.items():
            found[name] = densities
            found[CURRENTS[name]] = tuple(self.charge_current(name, bond) for bond in range(self.sites - 1))
        return found | dict(self.densities)


def share_among_bonds(site_terms: Sequence[Operator]) -> tuple[Operator, ...]:
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
    chain: Chain,
    *,
    beta: Sequence[float],
    potentials: Mapping[str, Sequence[float]] | None = None,
    energy: Sequence[Operator] | None = None,
) -> tuple[Operator, ...]:
    """Return k_j with sum_j k_j = K of the start rho_0 = exp(-K)/Z, one operator a bond.

    beta : inverse temperature of each bond (L - 1)
    potentials : for each charge, by name, the product of inverse temperature and field or chemical potential
    at each site (L), which lowers the energy: K = sum_j beta_j h_j - sum_i (beta h)_i q_i
    energy : the h_j of the start where they are not those of H
    """
    thermal = [
        scale(term, inverse_temperature)
        for term, inverse_temperature in zip(energy or chain.bond_terms, beta, strict=True)
    ]
    for name, values in (potentials or {}).items():
        fields = [scale(charge, -value) for charge, value in zip(chain.charges[name], values, strict=True)]
        thermal = [add(term, share) for term, share in zip(thermal, share_among_bonds(fields), strict=True)]
    return tuple(thermal)
