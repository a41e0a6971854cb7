"""A complete dataset of SYNTHETIC numbers, for tests of the file format and of the report.

Nothing here is physics: arrays are smooth made-up functions shaped like a front that spreads from the joint
of two temperatures, with errors and deviations of plausible size. No test may take these numbers for results.
"""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np

from tnquench.conventions import (
    CURRENTS,
    ERROR_SOURCES,
    OBSERVABLE_PLACES,
    PHYSICAL_SOURCES,
    Reals,
    bond_positions,
    site_positions,
)
from tnquench.dataset.writer import write_run

FRONT_VELOCITY = 1.2
RESOLVE_AT = 3.0
COMPANION_WEIGHTS = {"weight_10": 1e-7, "weight_100": 1e-6, "step_2": 1e-7, "length": 1e-7}
#: Made-up size of each source of error relative to a made-up unit growing with time.
SOURCE_SIZES = dict(zip(ERROR_SOURCES, (1.0, 0.3, 0.02, 0.01, 1e-8, 0.1, 0.0, 2.0), strict=True))

#: Variables of a budget that only companion runs, and only a prediction, can give.
MEASURED_ONLY = ("error", "numerical", "numerical_norm", "dominant_source", "euler_resolved")
PREDICTED_ONLY = ("euler_deviation", "euler_deviation_norm", "euler_resolved")

#: Observables of each model, settings of [chain] and further profiles of [start].
ENERGY, CHARGE = ("energy_density", "energy_current"), ("charge_density", "charge_current")
MODELS: dict[str, tuple[tuple[str, ...], str, str]] = {
    "xxz": (ENERGY + CHARGE, "anisotropy = 0.5", ""),
    "ising": ((*ENERGY, "transverse_magnetisation"), "transverse_field = 0.5", ""),
    "fermion": (ENERGY + CHARGE, "repulsion = 1.0", "beta_mu"),
    "hubbard": (
        (*ENERGY, *CHARGE, "magnetisation", "spin_current", "double_occupancy"),
        "repulsion = 4.0",
        "beta_mu beta_field",
    ),
}
NAMES = MODELS["xxz"][0]

CONFIG_TOML = """\
title = "Synthetic numbers for format tests"
[chain]
model = "{model}"
sites = {sites}
{parameters}
[start.beta]
shape = "step"
left = 0.5
right = 2.0
[evolution]
until = 10.0
every = 0.5
discarded_weight = 1e-8
time_step = 0.2
"""
PROFILE_TOML = """\
[start.{name}]
shape = "step"
left = 0.4
right = -0.4
"""


def config_toml(*, sites: int, model: str = "xxz") -> str:
    """The config that a made-up dataset claims to come from."""
    _, parameters, profiles = MODELS[model]
    text = CONFIG_TOML.format(sites=sites, model=model, parameters=parameters)
    return text + "".join(PROFILE_TOML.format(name=name) for name in profiles.split())


def write_synthetic_run(folder: Path, **choices: Any) -> Path:
    """Write a made-up dataset to `folder`/run.h5 and return its path; `choices` as of `synthetic_pieces`."""
    return write_run(folder, **synthetic_pieces(**choices))


def synthetic_pieces(
    *,
    sites: int = 32,
    times: int = 21,
    companions: bool = True,
    prediction: bool = True,
    model: str = "xxz",
) -> dict[str, Any]:
    """Return the keyword arguments of `write_run` for a made-up dataset.

    Without companions the budget has no measured errors and no verdict, without a prediction no deviation.
    Densities without a current are never predicted.
    """
    time: Reals = 0.5 * np.arange(times, dtype=np.float64)
    places: dict[str, Reals] = {"site": site_positions(sites), "bond": bond_positions(sites)}
    names = MODELS[model][0]
    smooth = {name: front(name, time, places[OBSERVABLE_PLACES[name]]) for name in names}
    quantum: dict[str, Reals] = {
        name: values + wiggle(name, time, places[OBSERVABLE_PLACES[name]]) for name, values in smooth.items()
    }
    predicted = {name: values for name, values in smooth.items() if prediction and is_conserved(name)}
    groups: dict[str, dict[str, Any]] = {"quantum": quantum | growth(time, places["bond"], quantum)}
    attributes: dict[str, dict[str, Any]] = {}
    if prediction:
        groups["hydrodynamics/euler"] = predicted | prediction_errors(predicted)
        attributes["hydrodynamics/euler"] = prediction_attributes()
    for name in names:
        left_out = (() if companions else MEASURED_ONLY) + (() if name in predicted else PREDICTED_ONLY)
        rows = budget(quantum[name] - smooth[name], time)
        groups[f"budget/{name}"] = {row: values for row, values in rows.items() if row not in left_out}
        attributes[f"budget/{name}"] = budget_attributes()
    for name, weight in COMPANION_WEIGHTS.items() if companions else ():
        groups[f"companions/{name}"] = companion(name, time, sites, names)
        attributes[f"companions/{name}"] = companion_attributes(name, weight, sites)
    return {
        "coordinates": {"time": time, **places, "source": list(ERROR_SOURCES)},
        "groups": groups,
        "attributes": attributes,
        "provenance": provenance(sites, model),
    }


def is_conserved(name: str) -> bool:
    return name in CURRENTS or name in CURRENTS.values()


def front(name: str, time: Reals, place: Reals) -> Reals:
    """A step that widens linearly in time (densities), or a bump at the joint (currents)."""
    width = (1.0 + FRONT_VELOCITY * time)[:, None]
    scaled = place[None, :] / width
    if not name.endswith("current"):
        base = {"energy_density": -0.2, "charge_density": 0.05, "magnetisation": 0.02}.get(name, 0.2)
        return base + 0.06 * np.tanh(-1.5 * scaled)
    values: Reals = 0.04 * np.exp(-1.5 * scaled**2) * np.tanh(time)[:, None]
    if name == "energy_current":
        values[:, [0, -1]] = 0.0
    return values


def wiggle(name: str, time: Reals, place: Reals) -> Reals:
    """A made-up deviation: oscillates behind the front, falls off like 1/time, vanishes at both ends."""
    inside = np.exp(-((place[None, :] / (2.0 + FRONT_VELOCITY * time[:, None])) ** 4))
    decay = 0.04 * time / (1.0 + time**2)
    values: Reals = decay[:, None] * inside * np.cos(0.7 * place[None, :])
    if name == "energy_current":
        values[:, [0, -1]] = 0.0
    return values


TOTALS = {
    "energy_density": ("total_energy", 1e-7),
    "charge_density": ("total_charge", 1e-9),
    "magnetisation": ("total_magnetisation", 1e-8),
}


def growth(time: Reals, bond: Reals, quantum: dict[str, Reals]) -> dict[str, Any]:
    """Bond dimension, entanglement and discarded weight growing inside the front; slight drifts."""
    inside = 1.0 / (1.0 + np.exp(np.abs(bond)[None, :] - FRONT_VELOCITY * time[:, None] - 2.0))
    entanglement = 0.1 + 0.25 * time[:, None] * inside
    return {
        "bond_dimension": np.rint(4.0 * np.exp(1.5 * entanglement)).astype(np.int64),
        "operator_entanglement": entanglement,
        "discarded_weight": 1e-8 * time[:, None] * inside,
        **{
            total: quantum[density][0].sum() * (1.0 + drift * time)
            for density, (total, drift) in TOTALS.items()
            if density in quantum
        },
    }


def prediction_errors(prediction: dict[str, Reals]) -> dict[str, Reals]:
    """Small made-up errors of the grids; strings exact."""
    grids = {f"{name}_grid_error": 1e-5 * np.abs(values) for name, values in prediction.items()}
    strings = {f"{name}_strings_error": np.zeros_like(values) for name, values in prediction.items()}
    return grids | strings


def prediction_attributes() -> dict[str, Any]:
    return {
        "light_cone_left": -FRONT_VELOCITY,
        "light_cone_right": FRONT_VELOCITY,
        "method": "joined halves (self-similar)",
        "references": ["castro_alvaredo_2016", "bertini_2016"],
    }


def budget(deviation: Reals, time: Reals) -> dict[str, Any]:
    """Errors that grow with time, source by source; the verdict follows from them as in a real run."""
    unit = 2e-5 * np.sinh(0.35 * time)[:, None] * np.exp(-(np.linspace(-1.5, 1.5, deviation.shape[1]) ** 2))
    error = np.stack([size * unit for size in SOURCE_SIZES.values()])
    summed = [index for index, source in enumerate(ERROR_SOURCES) if source not in PHYSICAL_SOURCES]
    numerical = error[summed].sum(axis=0) + 1e-12
    return {
        "error": error,
        "bound": 50.0 * (unit + 1e-10),
        "numerical": numerical,
        "euler_deviation": deviation,
        "euler_resolved": (np.abs(deviation) > RESOLVE_AT * numerical).astype(np.int8),
        "euler_deviation_norm": np.sqrt(np.mean(deviation**2, axis=1)),
        "numerical_norm": np.sqrt(np.mean(numerical**2, axis=1)),
        "dominant_source": error[summed].sum(axis=2).argmax(axis=0),
    }


def budget_attributes() -> dict[str, Any]:
    kinds = {f"kind_{source}": "estimate" for source in ERROR_SOURCES}
    kinds |= {f"kind_{source}": "physics" for source in PHYSICAL_SOURCES}
    return kinds | {"first_resolved_time": 0.5, "resolve_at": RESOLVE_AT}


def companion(name: str, time: Reals, sites: int, observables: tuple[str, ...]) -> dict[str, Reals]:
    """The made-up front again, shorter by a quarter where the companion is the one of another length."""
    length = companion_sites(name, sites)
    places = {"site": site_positions(length), "bond": bond_positions(length)}
    fields = {
        observable: front(observable, time, place) + wiggle(observable, time, place)
        for observable, place in ((each, places[OBSERVABLE_PLACES[each]]) for each in observables)
    }
    own_places = {"site_length": places["site"], "bond_length": places["bond"]}
    return fields | own_places if length != sites else fields


def companion_sites(name: str, sites: int) -> int:
    return 3 * sites // 4 if name == "length" else sites


def companion_attributes(name: str, weight: float, sites: int) -> dict[str, Any]:
    return {
        "discarded_weight": weight,
        "time_step": 0.4 if name == "step_2" else 0.2,
        "sites": companion_sites(name, sites),
        "seconds": 1.5,
    }


def provenance(sites: int, model: str) -> dict[str, Any]:
    return {
        "config_toml": config_toml(sites=sites, model=model),
        "config_file": "synthetic.toml",
        "title": "Synthetic numbers for format tests",
        "versions": {"tnquench": "0.0.0", "numpy": "0.0.0"},
        "machine": "no machine: synthetic numbers",
        "wall_seconds": 12.5,
        "cpu_seconds": 20.0,
        "created": "2000-01-01T00:00:00+00:00",
        "events": [{"time": 4.5, "kind": "bond_ceiling", "detail": "made up: weight 2e-8, 1e-8 was asked"}],
        "preparation": {"error": 1e-9, "steps": 16, "order": 4},
    }
