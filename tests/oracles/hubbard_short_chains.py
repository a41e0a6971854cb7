"""Hubbard chain in equilibrium from all states of short open chains: exact to high order in beta.

An open chain of L sites is a sum over clusters of neighbouring sites, so what L sites have more than L - 1 is
the infinite chain's value per site up to the clusters that span more than L sites (linked cluster theorem,
e.g. J. Oitmaa, C. Hamer, W. Zheng, Series Expansion Methods, Cambridge 2006). Each of their at least L bonds
must be crossed at least twice, there and back, so the difference is exact to order (beta hopping)^(2 L - 1),
at any repulsion and filling.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from itertools import combinations

import numpy as np
from numpy.typing import NDArray

Reals = NDArray[np.float64]


@dataclass(frozen=True)
class Levels:
    """H, sum of (n_up - 1/2)(n_down - 1/2), N - L and S^z of all eigenstates of an open chain, (state,)."""

    energy: Reals
    doubles: Reals
    charge: Reals
    spin: Reals


def one_species(*, sites: int, particles: int, hopping: float) -> tuple[Reals, Reals]:
    """Hopping matrix (state, state) and occupations (state, site) of one species on an open chain.

    Particles on a line never pass each other, so no sign appears.
    """
    places = list(combinations(range(sites), particles))
    index = {place: number for number, place in enumerate(places)}
    matrix = np.zeros((len(places), len(places)))
    occupation = np.zeros((len(places), sites))
    for number, place in enumerate(places):
        occupation[number, list(place)] = 1.0
        for site in place:
            if site + 1 < sites and site + 1 not in place:
                moved = tuple(sorted({*place, site + 1} - {site}))
                matrix[number, index[moved]] = matrix[index[moved], number] = -hopping
    return matrix, occupation


@lru_cache(maxsize=32)
def levels(*, sites: int, repulsion: float, hopping: float = 1.0) -> Levels:
    """Diagonalise the chain for every number of up and down particles."""
    found: list[tuple[Reals, ...]] = []
    for up in range(sites + 1):
        hop_up, filled_up = one_species(sites=sites, particles=up, hopping=hopping)
        for down in range(sites + 1):
            hop_down, filled_down = one_species(sites=sites, particles=down, hopping=hopping)
            doubles = ((filled_up - 0.5) @ (filled_down - 0.5).T).ravel()
            matrix = np.kron(hop_up, np.eye(len(hop_down))) + np.kron(np.eye(len(hop_up)), hop_down)
            energy, states = np.linalg.eigh(matrix + repulsion * np.diag(doubles))
            ones = np.ones_like(energy)
            found.append((energy, doubles @ states**2, (up + down - sites) * ones, 0.5 * (up - down) * ones))
    return Levels(*(np.concatenate(column) for column in zip(*found, strict=True)))


def totals(chain: Levels, *, beta: float, mu: float, field: float) -> dict[str, float]:
    """Thermodynamic functions of the whole chain in exp[-beta (H - h S^z - mu (N - L))]."""
    shifted = chain.energy - mu * chain.charge - field * chain.spin
    lowest = float(np.min(shifted))
    weights = np.exp(-beta * (shifted - lowest))
    log_partition = float(np.log(np.sum(weights))) - beta * lowest
    weights /= np.sum(weights)

    def mean(values: Reals) -> float:
        return float(weights @ values)

    def variance(values: Reals) -> float:
        return mean((values - mean(values)) ** 2)

    return {
        "free_energy": -log_partition / beta,
        "energy": mean(chain.energy),
        "entropy": log_partition + beta * mean(shifted),
        "excess": mean(chain.charge),
        "magnetisation": mean(chain.spin),
        "specific_heat": beta**2 * variance(shifted),
        "susceptibility": beta * variance(chain.spin),
        "compressibility": beta * variance(chain.charge),
        "doubles": mean(chain.doubles),
    }


def infinite_chain(
    *, repulsion: float, beta: float, mu: float, field: float, hopping: float = 1.0, sites: int = 6
) -> dict[str, float]:
    """Values per site from `sites` and one fewer, exact to order (beta hopping)^(2 sites - 1)."""
    longer, shorter = (
        totals(levels(sites=length, repulsion=repulsion, hopping=hopping), beta=beta, mu=mu, field=field)
        for length in (sites, sites - 1)
    )
    values = {key: longer[key] - shorter[key] for key in longer}
    excess, doubles = values.pop("excess"), values.pop("doubles")
    return values | {"density": 1.0 + excess, "double_occupancy": doubles + 0.5 * excess + 0.25}
