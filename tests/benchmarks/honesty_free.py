"""Free chains of any length as Gaussian states of one-particle matrices: exact, and after Trotter layers.

A Hermitian matrix g stands for O(g) = sum_ab g_ab c+_a c_b (fermions with a number) or, in Majorana
operators, for (1/4) sum_mn g_mn a_m a_n with purely imaginary g (ising); in both, i [O(g), O(f)] =
O(i [g, f]) and exp(-i O(g) t) turns the matrix M of the state, <O(g)> = scale tr(g M), by exp(-i g t).
Nothing is taken from the evolution but the coefficients of the Trotter schemes; a test compares the exact
evolutions with the oracles.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import expit

from tests.honesty_cases import Case, value_of
from tnquench.conventions import Reals, bond_positions, site_positions
from tnquench.evolution.trotter import SCHEMES

Complexes = NDArray[np.complex128]
Fields = dict[str, Reals]

#: Kinds of extra terms that keep free fermions free.
ONE_BODY = ("staggered_field", "potential")


def steps_of(case: Case) -> int:
    """Time steps in each sampling interval, at least two, as the documentation of the settings says."""
    return max(2, int(np.ceil(case.every / case.time_step - 1e-9)))


def layers_of(case: Case) -> list[tuple[int, float]]:
    """The layers of one time step: parity of the bonds, length in time."""
    step = case.every / steps_of(case)
    parts = SCHEMES[case.order].coefficients
    return [(place % 2, step * part) for place, part in enumerate(parts)]


def start_values(case: Case, sites: int) -> tuple[Reals, dict[str, Reals]]:
    """beta on the bonds of a chain of `sites` sites, and the potentials of the start on its sites."""
    bonds, places = bond_positions(sites), site_positions(sites)
    beta = value_of(case.beta, bonds)
    if case.joint == "separate":
        beta[bonds == 0.0] = 0.0
    return beta, {name: value_of(profile, places) for name, profile in case.fields.items()}


def extra_values(case: Case, sites: int) -> Reals:
    """Coefficients of q_i (or of sigma^x_i) that the extra term adds to H, shape (site,)."""
    extra, x = case.extra, site_positions(sites)
    if not extra or extra["kind"] in ("next_nearest", "bond_alternation"):
        return np.zeros(sites)
    if extra["kind"] == "staggered_field":
        return np.asarray(-extra["strength"] * (-1.0) ** np.arange(sites))
    if extra["kind"] == "longitudinal_field":
        return np.full(sites, -extra["strength"])
    return np.asarray(extra["strength"] * (0.5 * x**2 if extra["shape"] == "harmonic" else x))


# --- free chains ---------------------------------------------------------------------------------------


@dataclass(frozen=True)
class Local:
    """Matrices of an observable, one a place, by their elements; `offset` (place,) is a constant beside."""

    place: NDArray[np.intp]
    row: NDArray[np.intp]
    column: NDArray[np.intp]
    value: Complexes
    offset: Reals

    def expectation(self, state: Complexes, scale: float) -> Reals:
        """scale tr(O M) + offset at each place."""
        products = (self.value * state[self.column, self.row]).real
        return scale * np.bincount(self.place, products, minlength=self.offset.size) + self.offset


def local(matrices: Sequence[tuple[int, int, Complexes]], offset: Reals) -> Local:
    """From (place, first row and column, small matrix)."""
    found = [
        (np.full(rows.size, place), first + rows, first + columns, matrix[rows, columns])
        for place, first, matrix in matrices
        for rows, columns in [np.nonzero(matrix)]
    ]
    place, row, column, value = (np.concatenate(each) for each in zip(*found, strict=True))
    return Local(place, row, column, value, offset)


@dataclass(frozen=True)
class Gaussian:
    """One species of free modes: matrices of the even and the odd bonds, the state's M, observables, and the
    scale of tr(O M)."""

    parts: tuple[Complexes, Complexes]
    state: Complexes
    observables: Mapping[str, Local]
    scale: float

    def measured(self, turn: Complexes) -> Fields:
        now = turn @ self.state @ turn.conj().T
        return {name: each.expectation(now, self.scale) for name, each in self.observables.items()}

    def exact(self, times: Reals) -> list[Complexes]:
        """exp(-i g t) of every time."""
        levels, modes = np.linalg.eigh(sum(self.parts))
        return [(modes * np.exp(-1j * levels * time)) @ modes.conj().T for time in times]

    def circuit(self, case: Case) -> list[Complexes]:
        """The same by Trotter layers."""
        solved = [np.linalg.eigh(part) for part in self.parts]
        step = np.eye(self.state.shape[0], dtype=np.complex128)
        for parity, time in layers_of(case):
            levels, modes = solved[parity]
            step = (modes * np.exp(-1j * levels * time)) @ modes.conj().T @ step
        done = steps_of(case) * np.arange(len(case.times))
        return [np.linalg.matrix_power(step, int(steps)) for steps in done]


def assembled(bonds: Sequence[Complexes], factors: Reals) -> Complexes:
    """sum_j factors_j g_j of small matrices, each on the modes of the two sites of its bond."""
    modes = len(bonds[0]) // 2
    whole = np.zeros((modes * (len(bonds) + 1),) * 2, dtype=np.complex128)
    for bond, (matrix, factor) in enumerate(zip(bonds, factors, strict=True)):
        here = slice(modes * bond, modes * (bond + 2))
        whole[here, here] += factor * matrix
    return whole


def halves(bonds: Sequence[Complexes]) -> tuple[Complexes, Complexes]:
    """The sums over even and over odd bonds."""
    odd = (np.arange(len(bonds)) % 2).astype(np.float64)
    return assembled(bonds, 1.0 - odd), assembled(bonds, odd)


def shares(sites: int) -> Reals:
    """Share of an on-site term that each bond has of its left and of its right site, (bond, 2)."""
    found = np.full((sites - 1, 2), 0.5)
    found[0, 0] = found[-1, 1] = 1.0
    return found


def energy_and_current(bonds: Sequence[Complexes], shift: Reals) -> dict[str, Local]:
    """h_j less a constant, and K_i = i[h_{i-1}, h_i] on inner sites."""
    modes = len(bonds[0]) // 2
    currents = []
    for bond in range(len(bonds) - 1):
        one, other = (assembled(bonds[bond : bond + 2], factors) for factors in np.eye(2))
        currents.append((bond + 1, modes * bond, 1j * (one @ other - other @ one)))
    densities = [(bond, modes * bond, matrix) for bond, matrix in enumerate(bonds)]
    return {
        "energy_density": local(densities, -shift),
        "energy_current": local(currents, np.zeros(len(bonds) + 1)),
    }


def free_ising(case: Case, sites: int) -> Gaussian:
    """The transverse-field chain in Majorana operators a_{2i}, a_{2i+1} of each site, as in the oracles."""
    field, bonds = case.parameters["transverse_field"], list[Complexes]()
    for left, right in shares(sites):
        above = np.zeros((4, 4), dtype=np.complex128)
        above[0, 1], above[1, 2], above[2, 3] = 2.0 * field * left, 2.0, 2.0 * field * right
        bonds.append(1j * (above - above.T))
    levels, modes = np.linalg.eigh(assembled(bonds, start_values(case, sites)[0]))
    state = -(modes * np.tanh(0.5 * levels)) @ modes.conj().T
    along = np.array([[0.0, -2j], [2j, 0.0]])  # sigma^z_i = -i a_{2i} a_{2i+1}
    observables = energy_and_current(bonds, np.zeros(sites - 1))
    observables["transverse_magnetisation"] = local(
        [(site, 2 * site, along) for site in range(sites)], np.zeros(sites)
    )
    return Gaussian(halves(bonds), state, observables, 0.25)


def free_species(case: Case, sites: int, tilt: Reals) -> Gaussian:
    """Fermions with hopping t_h (xxz at D = 0: J = 2 t_h, and every second mode with its sign reversed).

    tilt : exponent + sum_i tilt_i n_i of the start. Constants of energies stand in the offset.
    """
    hopping = case.parameters.get("hopping", 0.5 if case.model == "xxz" else 1.0)
    values, here = extra_values(case, sites), shares(sites)
    on_site = np.stack([here[:, 0] * values[:-1], here[:, 1] * values[1:]], axis=1)
    bonds = [np.array([[a, -hopping], [-hopping, b]], dtype=np.complex128) for a, b in on_site]
    levels, modes = np.linalg.eigh(assembled(bonds, start_values(case, sites)[0]) - np.diag(tilt))
    state = (modes * expit(-levels)) @ modes.conj().T
    flow = np.array([[0.0, -1j * hopping], [1j * hopping, 0.0]])  # i [h_j, all n right of it]
    observables = energy_and_current(bonds, 0.5 * on_site.sum(axis=1))
    observables["charge_density"] = local(
        [(site, site, np.ones((1, 1), dtype=np.complex128)) for site in range(sites)], np.full(sites, -0.5)
    )
    observables["charge_current"] = local(
        [(bond, bond, flow) for bond in range(sites - 1)], np.zeros(sites - 1)
    )
    return Gaussian(halves(bonds), state, observables, 1.0)


def is_free(case: Case) -> bool:
    interacting = case.parameters.get("anisotropy", 0.0) or case.parameters.get("repulsion", 0.0)
    return not interacting and case.extra.get("kind", "potential") in ONE_BODY


def free_fields(case: Case, sites: int, *, trotter: bool = False) -> Fields:
    """Every observable, (time, place), of a free chain of any length with the same middle."""

    def evolved(gas: Gaussian) -> Fields:
        turns = gas.circuit(case) if trotter else gas.exact(case.times)
        rows = [gas.measured(turn) for turn in turns]
        return {name: np.array([row[name] for row in rows]) for name in rows[0]}

    if case.model == "ising":
        return evolved(free_ising(case, sites))
    tilts = start_values(case, sites)[1]
    zero = np.zeros(sites)
    if case.model != "hubbard":
        return evolved(free_species(case, sites, sum(tilts.values(), zero)))
    mu, half = tilts["beta_mu"], 0.5 * tilts["beta_field"]
    up, down = (evolved(free_species(case, sites, tilt)) for tilt in (mu + half, mu - half))
    both = {name: up[name] + down[name] for name in up}
    moments = {
        "magnetisation": 0.5 * (up["charge_density"] - down["charge_density"]),
        "spin_current": 0.5 * (up["charge_current"] - down["charge_current"]),
        "double_occupancy": (up["charge_density"] + 0.5) * (down["charge_density"] + 0.5),
    }
    return both | moments
