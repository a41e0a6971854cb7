"""Chains of spins 1/2: the XXZ chain and the Ising chain in a transverse field."""

from __future__ import annotations

from tnquench.model.chain import Chain, share_among_bonds
from tnquench.model.pauli import Operator, X, Y, Z, add, string


def spin_exchange(first: int, second: int, *, coupling: float, anisotropy: float) -> Operator:
    """Return J [SxSx + SySy + D SzSz] on two qubits, S = sigma/2."""
    quarter = 0.25 * coupling
    return add(
        {string((first, X), (second, X)): quarter},
        {string((first, Y), (second, Y)): quarter},
        {string((first, Z), (second, Z)): quarter * anisotropy},
    )


def xxz_chain(*, sites: int, anisotropy: float, coupling: float = 1.0) -> Chain:
    """Return the chain h_j = J [SxSx + SySy + D SzSz] with S = sigma/2 and charge q_i = S^z_i.

    sites : number L of sites, at least 2; anisotropy : D; coupling : J, the unit of energy.
    """
    return Chain(
        sites=sites,
        bond_terms=tuple(
            spin_exchange(j, j + 1, coupling=coupling, anisotropy=anisotropy) for j in range(sites - 1)
        ),
        charges={"charge_density": tuple({string((i, Z)): 0.5} for i in range(sites))},
    )


def ising_chain(*, sites: int, transverse_field: float, coupling: float = 1.0) -> Chain:
    """Return the chain H = -J sum sigma^x sigma^x - g sum sigma^z in Pauli matrices; no charge is conserved.

    sites : number L of sites, at least 2; transverse_field : g; coupling : J, the unit of energy.
    """
    fields = share_among_bonds([{string((i, Z)): -transverse_field} for i in range(sites)])
    return Chain(
        sites=sites,
        bond_terms=tuple(add({string((j, X), (j + 1, X)): -coupling}, fields[j]) for j in range(sites - 1)),
        densities={"transverse_magnetisation": tuple({string((i, Z)): 1.0} for i in range(sites))},
    )
