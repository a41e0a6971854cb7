"""The errors that predictions and equilibrium values claim, against closed forms and another method.

Closed forms: free modes of xxz at D = 0 and of ising, whose occupations are those of where each mode came
from (fields of joined halves and of smooth profiles), and their equilibrium integrals. Equilibrium free
energies at other anisotropies: the quantum transfer matrix of the oracles, which knows no strings; it is
itself good to about 1e-13, and what it can be asked for ends at moderate temperatures.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import replace
from itertools import pairwise

import numpy as np

from tests.benchmarks.honesty_scores import NOTHING, Score, score
from tests.honesty_cases import Case, Profile, bump, step, uniform, value_of, wave
from tests.oracles import transfer_matrix, transfer_matrix_gapped
from tests.oracles.free_fermions import infinite_chain
from tnquench.assemble import build_prediction
from tnquench.bethe.thermo import thermo
from tnquench.conventions import OBSERVABLE_PLACES, Reals, bond_positions, site_positions

#: Momenta of the periodic integrals of smooth profiles, and nodes of each arc between the edges of a ray.
MOMENTA, ARC = 8192, 200


def _case(name: str, model: str, beta: Profile, *, field: Profile | None = None, **parameters: float) -> Case:
    return Case(
        name,
        f"prediction, {model}",
        model,
        40,
        parameters,
        beta,
        1e-8,
        until=8.0 if model == "xxz" else 4.0,
        every=2.0 if model == "xxz" else 1.0,
        time_step=0.2 if model == "xxz" else 0.1,
        fields={"beta_field": field} if field else {},
    )


#: Predictions with a closed form.
PREDICTED: tuple[Case, ...] = (
    _case("xx halves", "xxz", step(0.5, 2.0), anisotropy=0.0),
    _case("xx halves with fields", "xxz", step(0.2, 1.0), field=step(0.8, -0.3), anisotropy=0.0),
    _case("xx cold halves", "xxz", step(3.0, 6.0), anisotropy=0.0),
    _case("xx bump", "xxz", bump(1.0, -0.6, 4.0), anisotropy=0.0),
    _case("xx bump of field", "xxz", uniform(0.8), field=bump(0.2, 0.7, 3.0), anisotropy=0.0),
    _case("xx smooth step", "xxz", step(0.4, 1.2, 3.0), anisotropy=0.0),
    _case("ising halves, ordered", "ising", step(0.3, 1.0), transverse_field=0.5),
    _case("ising halves, critical", "ising", step(0.5, 2.0), transverse_field=1.0),
    _case("ising halves, disordered", "ising", step(0.2, 0.6), transverse_field=1.8),
    _case("ising bump", "ising", bump(0.8, -0.4, 3.0), transverse_field=0.7),
    _case("ising wave", "ising", wave(0.6, 0.2, 20.0), transverse_field=1.3),
)


def modes_of(case: Case, k: Reals) -> dict[str, Reals]:
    """Energy, velocity and what each momentum carries of every observable, weight 1/(2 pi) a mode."""
    if case.model == "xxz":
        energy, velocity = np.cos(k), -np.sin(k)
        one = np.ones_like(k)
        return {
            "energy": energy,
            "velocity": velocity,
            "energy_density": energy,
            "energy_current": velocity * energy,
            "charge_density": one,
            "charge_current": velocity,
        }
    field = case.parameters["transverse_field"]
    energy = 2.0 * np.sqrt(np.maximum(1.0 + field**2 + 2.0 * field * np.cos(k), 1e-30))
    velocity = -4.0 * field * np.sin(k) / energy
    return {
        "energy": energy,
        "velocity": velocity,
        "energy_density": 0.5 * energy,
        "energy_current": 0.5 * velocity * energy,
        "transverse_magnetisation": -2.0 * (field + np.cos(k)) / energy,
    }


def filling(case: Case, energy: Reals, origin: Reals) -> Reals:
    """What multiplies the above: the occupation less 1/2 (n - 1/2 for xxz, 2 n - 1 = -tanh for ising)."""
    beta = value_of(case.beta, origin)
    field = value_of(case.fields["beta_field"], origin) if case.fields else 0.0
    exponent = beta * energy - field
    return np.asarray(-np.tanh(0.5 * exponent) * (0.5 if case.model == "xxz" else 1.0))


def closed_form(case: Case, name: str, x: Reals, time: float) -> Reals:
    """One observable at positions x and a time > 0, in a chain whose ends no mode has seen."""
    if case.beta["shape"] == "step" and not case.beta.get("width"):
        return np.array([_on_ray(case, name, place / time) for place in x])
    k = 2.0 * np.pi * (np.arange(MOMENTA) + 0.5) / MOMENTA
    modes = modes_of(case, k)
    origin = x[:, None] - modes["velocity"] * time
    return np.asarray(np.mean(modes[name] * filling(case, modes["energy"], origin), axis=1))


def undisturbed(case: Case, x: Reals) -> np.ndarray:
    """Which points (time, place), t > 0, no mode from an end has reached."""
    fastest = modes_of(case, np.linspace(0.0, 2.0 * np.pi, 4001))["velocity"].max()
    return np.asarray(np.abs(x)[None, :] + fastest * case.times[1:, None] < 0.5 * case.sites - 1.0)


def _on_ray(case: Case, name: str, ray: float) -> float:
    """Joined halves: modes faster than x/t come from the left. Arcs end where the velocity is x/t."""
    edges = _edges(case, ray)
    nodes, weights = np.polynomial.legendre.leggauss(ARC)
    value = 0.0
    for first, last in pairwise(edges):
        k = 0.5 * (first + last) + 0.5 * (last - first) * nodes
        modes = modes_of(case, k)
        side = np.where(modes["velocity"] > ray, -1.0, 1.0)
        value += 0.5 * (last - first) * float(weights @ (modes[name] * filling(case, modes["energy"], side)))
    return value / (2.0 * np.pi)


def _edges(case: Case, ray: float) -> list[float]:
    """0, every momentum of velocity `ray`, pi (where a gapless spectrum has its kink), and 2 pi."""
    grid = np.linspace(0.0, 2.0 * np.pi, 4001)
    excess = modes_of(case, grid)["velocity"] - ray
    found = [0.0, np.pi, 2.0 * np.pi]
    for place in np.flatnonzero(excess[:-1] * excess[1:] < 0.0):
        low, high = grid[place], grid[place + 1]
        for _ in range(60):
            middle = 0.5 * (low + high)
            rising = modes_of(case, np.array([middle]))["velocity"][0] - ray
            low, high = (middle, high) if rising * excess[place] > 0.0 else (low, middle)
        found.append(0.5 * (low + high))
    return sorted(found)


def prediction_scores() -> Iterator[Score]:
    """Score every observable of every prediction with a closed form, t > 0, before light from the ends."""
    for case in PREDICTED:
        prediction, absence = build_prediction(case.config())
        assert prediction is not None, absence
        for name, values in prediction.fields.items():
            x = (site_positions if OBSERVABLE_PLACES[name] == "site" else bond_positions)(case.sites)
            exact = np.array([closed_form(case, name, x, time) for time in case.times[1:]])
            if np.abs(exact).max() < NOTHING:
                continue
            seen = undisturbed(case, x)
            claimed = (prediction.grid_error[name] + prediction.strings_error[name])[1:][seen]
            error = (values[1:] - exact)[seen]
            yield score(case, name, "prediction", true=error, claimed=claimed)


# --- equilibrium ---------------------------------------------------------------------------------------

#: beta, field of xxz at D = 0 and of other anisotropies; beta, g of ising.
STATES = ((0.2, 0.0), (0.5, 0.7), (1.0, 0.0), (2.0, 0.4), (3.0, 1.2))
ANISOTROPIES = (0.5, -0.5, 0.3, 0.77, 1.0, 1.2, 1.5)
ISING_STATES = ((0.3, 0.5), (1.0, 1.0), (2.0, 1.7), (4.0, 0.4))


def ising_equilibrium(*, beta: float, transverse_field: float) -> dict[str, float]:
    """P. Pfeuty, Ann. Phys. 57, 79 (1970), by the trapezoidal rule on the circle."""
    k = 2.0 * np.pi * (np.arange(200_000) + 0.5) / 200_000
    energy = 2.0 * np.sqrt(1.0 + transverse_field**2 + 2.0 * transverse_field * np.cos(k))
    free = -float(np.mean(np.logaddexp(0.5 * beta * energy, -0.5 * beta * energy))) / beta
    average = -float(np.mean(0.5 * energy * np.tanh(0.5 * beta * energy)))
    return {"free_energy": free, "energy": average, "entropy": beta * (average - free)}


def equilibrium_scores() -> Iterator[Score]:
    """Score thermodynamic functions, one state a case."""

    def scored(name: str, found: object, exact: dict[str, float]) -> Iterator[Score]:
        values, errors = found.values, found.errors  # type: ignore[attr-defined]
        keys = [key for key in exact if key in values and abs(exact[key]) > NOTHING]
        true = np.array([[values[key] - exact[key] for key in keys]])
        claimed = np.array([[errors[key] for key in keys]])
        state = Case(name, "equilibrium", "", 0, {}, {}, 0.0)
        yield score(state, "all", "equilibrium", true=true, claimed=claimed)

    for beta, field in STATES:
        exact = infinite_chain(beta=beta, field=field)
        yield from scored(
            f"D = 0, {beta}, {field}", thermo("xxz", anisotropy=0.0, beta=beta, field=field), exact
        )
    for beta, ratio in ISING_STATES:
        exact = ising_equilibrium(beta=beta, transverse_field=ratio)
        found = thermo("ising", transverse_field=ratio, beta=beta)
        yield from scored(f"ising, {beta}, {ratio}", found, exact)
    for anisotropy in ANISOTROPIES:
        solve: Callable[..., float] = (
            transfer_matrix.free_energy if abs(anisotropy) < 1.0 else transfer_matrix_gapped.free_energy
        )
        for beta, field in STATES[: 4 if anisotropy < 1.5 else 3]:  # the transfer matrix's contour ends there
            exact = {"free_energy": solve(anisotropy=anisotropy, beta=beta, field=field)}
            found = thermo("xxz", anisotropy=anisotropy, beta=beta, field=field)
            yield from scored(f"D = {anisotropy}, {beta}, {field}", found, exact)


def by_model(scores: Iterator[Score]) -> list[Score]:
    """Equilibrium states count as one case a kind of chain: single numbers have no coverage of their own."""
    return [replace(each, case=each.case.split(",")[0]) for each in scores]
