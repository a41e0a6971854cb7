"""Open chains of fermions on qubits: spinless fermions with neighbour repulsion, and the Hubbard chain.

P. Jordan and E. Wigner, Z. Phys. 47, 631 (1928): an occupied level is an up spin, n = (1 + Z)/2, and on an
open chain c+_j c_{j+1} + h.c. = (X_j X_{j+1} + Y_j Y_{j+1})/2 exactly. Each species of the Hubbard chain has
a string of its own; H and all observables hold an even number of fermions of each, so the sign between the
species never enters.
"""

from __future__ import annotations

from tnquench.model.chain import Chain, share_among_bonds
from tnquench.model.pauli import Operator, X, Y, Z, add, string


def fermion_chain(*, sites: int, repulsion: float, hopping: float = 1.0) -> Chain:
    """Return H = -t_h sum (c+c + h.c.) + V sum (n - 1/2)(n - 1/2) with charge q_i = n_i - 1/2.

    sites : number L of sites, at least 2; repulsion : V; hopping : t_h, the unit of energy.
    """
    return Chain(
        sites=sites,
        bond_terms=tuple(
            add(_hop(j, j + 1, hopping), {string((j, Z), (j + 1, Z)): 0.25 * repulsion})
            for j in range(sites - 1)
        ),
        charges={"charge_density": tuple({string((i, Z)): 0.5} for i in range(sites))},
    )


def hubbard_chain(*, sites: int, repulsion: float, hopping: float = 1.0) -> Chain:
    """Return H = -t_h sum_s (c+c + h.c.) + U sum (n_up - 1/2)(n_dn - 1/2), qubits 2i (up) and 2i + 1 (down).

    Charges: particles q_i = n_i - 1 and magnetisation S^z_i = (n_up - n_dn)/2; also measured: n_up n_dn.
    sites : number L of sites, at least 2; repulsion : U; hopping : t_h, the unit of energy.
    """
    on_site = share_among_bonds([{_both(i): 0.25 * repulsion} for i in range(sites)])
    return Chain(
        sites=sites,
        qubits_per_site=2,
        bond_terms=tuple(
            add(_hop(2 * j, 2 * j + 2, hopping), _hop(2 * j + 1, 2 * j + 3, hopping), on_site[j])
            for j in range(sites - 1)
        ),
        charges={
            "charge_density": tuple(_particles(i, up=0.5, down=0.5) for i in range(sites)),
            "magnetisation": tuple(_particles(i, up=0.25, down=-0.25) for i in range(sites)),
        },
        densities={"double_occupancy": tuple(_double_occupancy(i) for i in range(sites))},
    )


def _hop(first: int, second: int, hopping: float) -> Operator:
    """Return -t_h (c+c + h.c.) between two levels that are neighbours in their string."""
    return {
        string((first, X), (second, X)): -0.5 * hopping,
        string((first, Y), (second, Y)): -0.5 * hopping,
    }


def _both(site: int) -> tuple[tuple[int, int], ...]:
    return string((2 * site, Z), (2 * site + 1, Z))


def _particles(site: int, *, up: float, down: float) -> Operator:
    return {string((2 * site, Z)): up, string((2 * site + 1, Z)): down}


def _double_occupancy(site: int) -> Operator:
    """Return n_up n_dn = (1 + Z)(1 + Z)/4."""
    return add({string(): 0.25, _both(site): 0.25}, _particles(site, up=0.25, down=0.25))
