"""What the runs of the honesty study should have found: exact dynamics, Trotter circuits, longer chains."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from tests.benchmarks.honesty_free import (
    Complexes,
    Fields,
    extra_values,
    free_fields,
    is_free,
    layers_of,
    start_values,
    steps_of,
)
from tests.honesty_cases import Case
from tests.oracles import exact_models
from tests.oracles.exact_models import ExactChain, Matrix, total
from tests.oracles.exact_quench import exponent_of_start, real_block, sectors, square_root_start
from tnquench.conventions import Reals

#: Sites added on each side of a chain whose ends are to be out of reach.
FARTHER = 40

# --- short chains --------------------------------------------------------------------------------------

CHARGE = {"beta_mu": "charge_density", "beta_field": "charge_density"}


def short_chain(case: Case, **changed: Any) -> ExactChain:
    """The matrices of a chain that is not free."""
    kind, sites = case.extra.get("kind", ""), case.sites
    options: dict[str, Any] = dict(case.parameters)
    if kind == "bond_alternation":
        options["factors"] = 1.0 + case.extra["strength"] * (-1.0) ** np.arange(sites - 1)
    elif kind == "next_nearest":
        strength = case.extra["strength"]
        options["second"] = (strength, case.parameters["anisotropy"]) if case.model == "xxz" else strength
    elif kind == "longitudinal_field":
        options["longitudinal_field"] = case.extra["strength"]
    elif kind == "staggered_field" and case.model == "hubbard":
        options["magnetic_field"] = -extra_values(case, sites)
    elif kind:
        options["potential"] = extra_values(case, sites)
    return getattr(exact_models, case.model)(sites=sites, **(options | changed))  # type: ignore[no-any-return]


def short_fields(case: Case) -> tuple[Fields, Fields]:
    """Every observable by exact diagonalisation, and after the Trotter layers; none of the latter where
    next-nearest neighbours take part."""
    chain = short_chain(case)
    beta, given = start_values(case, case.sites)
    names = CHARGE if case.model != "hubbard" else CHARGE | {"beta_field": "magnetisation"}
    exponent = exponent_of_start(chain, beta, {names[name]: values for name, values in given.items()})
    parts = [total(chain.terms[parity::2]) for parity in (0, 1)]
    members = sectors(*parts, exponent)
    roots, _ = square_root_start(exponent, members)
    rhos = [root @ root for root in roots]

    def evolved(intervals: Sequence[Complexes]) -> Fields:
        return _measured(chain, members, rhos, intervals, len(case.times))

    exact = [_exact_interval(real_block(chain.hamiltonian, states), case.every) for states in members]
    if case.extra.get("kind") == "next_nearest":
        return evolved(exact), {}
    circuit = [_circuit_interval([real_block(part, states) for part in parts], case) for states in members]
    return evolved(exact), evolved(circuit)


def _exact_interval(hamiltonian: Reals, time: float) -> Complexes:
    """exp(-i H t)."""
    levels, vectors = np.linalg.eigh(hamiltonian)
    return np.asarray((vectors * np.exp(-1j * levels * time)) @ vectors.T)


def _circuit_interval(parts: Sequence[Reals], case: Case) -> Complexes:
    """The Trotter layers of one sampling interval."""
    solved = [np.linalg.eigh(part) for part in parts]
    step = np.eye(len(parts[0]), dtype=np.complex128)
    for parity, time in layers_of(case):
        levels, vectors = solved[parity]
        step = vectors @ (np.exp(-1j * levels * time)[:, None] * (vectors.T @ step))
    return np.asarray(np.linalg.matrix_power(step, steps_of(case)))


def _measured(
    chain: ExactChain,
    members: Sequence[NDArray[np.intp]],
    rhos: Sequence[Reals],
    intervals: Sequence[Complexes],
    samples: int,
) -> Fields:
    """Expectation values sector by sector: what an observable has between sectors meets no element of rho."""
    blocks = {
        name: [[_block(matrix, states) for matrix in matrices] for states in members]
        for name, matrices in chain.observables().items()
    }
    rows: dict[str, list[Reals]] = {name: [] for name in blocks}
    now: list[Complexes] = [rho.astype(np.complex128) for rho in rhos]
    for sample in range(samples):
        if sample:
            now = [turn @ rho @ turn.conj().T for rho, turn in zip(now, intervals, strict=True)]
        for name, sectors_of in blocks.items():
            values = [
                [float((matrix.data @ rho[matrix.col, matrix.row]).real) for matrix in matrices]
                for matrices, rho in zip(sectors_of, now, strict=True)
            ]
            rows[name].append(np.sum(values, axis=0))
    return {name: np.array(each) for name, each in rows.items()}


def _block(matrix: Matrix, states: NDArray[np.intp]) -> Any:
    """The elements of a matrix between some basis states, as rows, columns and values."""
    return matrix[states][:, states].tocoo()


# --- all of it -----------------------------------------------------------------------------------------


def truth_of(case: Case) -> dict[str, Fields]:
    """What a case should give: `exact`, `circuit` (the same by Trotter layers), `longer` (the middle of a
    chain whose ends are FARTHER sites away; free chains without extra terms alone)."""
    if not is_free(case):
        exact, circuit = short_fields(case)
        return {"exact": exact} | ({"circuit": circuit} if circuit else {})
    found = {
        "exact": free_fields(case, case.sites),
        "circuit": free_fields(case, case.sites, trotter=True),
    }
    if not case.extra:
        farther = free_fields(case, case.sites + 2 * FARTHER)
        found["longer"] = {name: values[:, FARTHER:-FARTHER] for name, values in farther.items()}
    return found
