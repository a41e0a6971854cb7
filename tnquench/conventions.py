"""Conventions said once and imported everywhere.

hbar = k_B = lattice spacing = 1. Energies are in units of the coupling that the user sets, times in its
inverse. Sites i = 0..L-1 sit at x_i = i - (L-1)/2; bond j joins sites j and j+1 and sits at x_j = j + 1/2 -
(L-1)/2. Ends are open. Spin operators are S = sigma/2. Currents follow from the continuity equations
dq_i/dt = J_{i-1} - J_i (charge current J on bonds) and dh_j/dt = K_j - K_{j+1} (energy current K on sites,
K_j = i[h_{j-1}, h_j] where bond terms reach no farther than their bond, zero at both ends).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Reals = NDArray[np.float64]
Integers = NDArray[np.int64]

#: Where each observable lives: on the sites or on the bonds of the chain. A run holds those of its model.
OBSERVABLE_PLACES: dict[str, str] = {
    "energy_density": "bond",
    "energy_current": "site",
    "charge_density": "site",
    "charge_current": "bond",
    "magnetisation": "site",
    "spin_current": "bond",
    "double_occupancy": "site",
    "transverse_magnetisation": "site",
}

#: The current that carries each conserved density.
CURRENTS: dict[str, str] = {
    "energy_density": "energy_current",
    "charge_density": "charge_current",
    "magnetisation": "spin_current",
}

#: Order of the error sources along the `source` axis of every budget.
ERROR_SOURCES: tuple[str, ...] = (
    "truncation",
    "time_step",
    "preparation",
    "length",
    "arithmetic",
    "prediction_grid",
    "strings",
    "initial_gradient",
)

#: Norms of a deviation over the light-cone window that the stretch study follows.
STRETCH_NORMS: tuple[str, ...] = ("rms", "maximum")

#: What the exponent p of deviation ~ stretch^-p may mean: no verdict; p = 0 or less; between 0 and 1; 1;
#: between 1 and 2; 2; more; or several of these within the uncertainty.
STRETCH_FINDINGS: tuple[str, ...] = (
    "unresolved",
    "not_falling",
    "slower",
    "first_order",
    "between",
    "second_order",
    "faster",
    "undecided",
)

#: Sources that are physics rather than numerics: reported apart, never summed into the numerical error.
PHYSICAL_SOURCES: frozenset[str] = frozenset({"initial_gradient"})


def site_positions(sites: int) -> Reals:
    """Positions x_i = i - (L-1)/2 of the sites, shape (site,), in lattice spacings."""
    return np.arange(sites, dtype=np.float64) - 0.5 * (sites - 1)


def bond_positions(sites: int) -> Reals:
    """Positions x_j = j + 1/2 - (L-1)/2 of the bonds, shape (bond,), in lattice spacings."""
    return np.arange(sites - 1, dtype=np.float64) - 0.5 * (sites - 2)
