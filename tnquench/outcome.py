"""From results to the pieces of a dataset: groups of arrays, their attributes, and where they come from."""

from __future__ import annotations

import os
import platform
import resource
import sys
from collections.abc import Mapping
from dataclasses import dataclass, field
from datetime import UTC, datetime
from importlib.metadata import PackageNotFoundError, version
from pathlib import Path
from typing import Any

import numpy as np

from tnquench.assemble import budget_settings, extra_events, sample_times, start_reach
from tnquench.budget.advice import advise
from tnquench.budget.assess import PredictedLevel, RunSettings, assess
from tnquench.budget.bounds import state_numbers
from tnquench.budget.companions import CompanionRun
from tnquench.budget.verdict import SHARP_REACH, SOURCE_KINDS, ObservableBudget
from tnquench.config.document import effective_toml
from tnquench.config.schema import Config
from tnquench.conventions import ERROR_SOURCES, Reals, bond_positions, site_positions
from tnquench.hydro.prediction import Prediction
from tnquench.observables.quench import QuantumRecord, Quench

#: Packages whose versions a dataset records.
PACKAGES = ("tnquench", "numpy", "scipy", "quimb", "h5py", "h5netcdf", "xarray", "pydantic", "matplotlib")


@dataclass(frozen=True)
class QuantumSide:
    """The main run and its companions with their settings, and events of the choice of settings.

    failures : events of companions that failed; state_distance : norm of the difference of the last states of
    the main run and of the looser companion, nan where it is not known
    settings : what the budget must know, if it does not follow from the quench
    """

    quench: Quench
    main: QuantumRecord
    companion_quenches: dict[str, Quench]
    companions: Mapping[str, CompanionRun]
    in_processes: bool = False
    events: tuple[dict[str, object], ...] = ()
    failures: tuple[dict[str, object], ...] = ()
    state_distance: float = float("nan")
    settings: RunSettings | None = None

    @property
    def cpu_elsewhere(self) -> float:
        """Processor time of the companions that ran in processes of their own."""
        if not self.in_processes:
            return 0.0
        return sum(
            record.cpu_seconds for record in self.companions.values() if isinstance(record, QuantumRecord)
        )


@dataclass
class Pieces:
    """What a dataset is written from."""

    coordinates: dict[str, Any]
    groups: dict[str, dict[str, Any]] = field(default_factory=dict)
    attributes: dict[str, dict[str, Any]] = field(default_factory=dict)
    provenance: dict[str, Any] = field(default_factory=dict)

    def as_arguments(self) -> dict[str, Any]:
        """Return the pieces as the keyword arguments of the writer."""
        return {
            "coordinates": self.coordinates,
            "groups": self.groups,
            "attributes": self.attributes,
            "provenance": self.provenance,
        }


def run_pieces(
    config: Config, config_file: Path, quantum: QuantumSide, prediction: Prediction | None, absence: str
) -> Pieces:
    """Judge a run and return its dataset; absence : why there is no prediction, where there is none."""
    main, sites = quantum.main, config.chain.sites
    pieces = _empty_pieces(config, config_file, times=main.times)
    pieces.groups["quantum"] = {
        **main.fields,
        "bond_dimension": main.bond_dimension.astype(np.int64),
        "operator_entanglement": main.operator_entanglement,
        "discarded_weight": main.discarded_weight,
        **main.totals,
    }
    if prediction is not None:
        _add_prediction(pieces, config, prediction)
    budgets = assess(
        main,
        quantum.companions,
        {} if prediction is None else {"euler": _level(prediction)},
        positions={"site": site_positions(sites), "bond": bond_positions(sites)},
        settings=quantum.settings or budget_settings(config, quantum.quench),
    )
    for name, budget in budgets.items():
        _add_budget(pieces, name, budget, config, judged=bool(quantum.companions))
    for name, record in quantum.companions.items():
        former = quantum.settings is not None and name in quantum.settings.unloosened
        _add_companion(pieces, name, record, sites, former_main=former)
    pieces.provenance["events"] = [
        *extra_events(config),
        *quantum.events,
        *quantum.failures,
        *main.events,
        *_outlook(config, prediction, absence),
    ]
    pieces.provenance["preparation"] = {
        "imaginary_time_steps": main.start_steps,
        "distance": main.start_distance,
        "error": main.start_error,
        "log_partition_function": main.log_partition_function,
    }
    pieces.provenance["main_run"] = {
        "discarded_weight": quantum.quench.discarded_weight,
        "time_step": quantum.quench.time_step,
        "trotter_order": quantum.quench.trotter_order,
        "cuts": float(main.cuts[-1]),
        "seconds": main.seconds,
        "state_bytes": main.peak_state_bytes,
    } | state_numbers(main, quantum.state_distance)
    pieces.provenance["advice"] = advise(main, quantum.companions, budgets, quantum.quench)
    return pieces


def prediction_pieces(config: Config, config_file: Path, prediction: Prediction) -> Pieces:
    """Return the dataset of a prediction alone."""
    pieces = _empty_pieces(config, config_file, times=sample_times(config))
    _add_prediction(pieces, config, prediction)
    events = [*extra_events(config), *_outlook(config, prediction, "")]
    pieces.provenance.update({"events": events, "preparation": {}})
    return pieces


def _empty_pieces(config: Config, config_file: Path, *, times: Reals) -> Pieces:
    """Return the coordinates and what is known of the provenance before anything is computed."""
    sites = config.chain.sites
    return Pieces(
        coordinates={
            "time": times,
            "site": site_positions(sites),
            "bond": bond_positions(sites),
            "source": list(ERROR_SOURCES),
        },
        provenance={
            "title": config.title,
            "model": _model(config),
            "config_toml": effective_toml(config),
            "config_file": config_file.name,
            "versions": {"python": platform.python_version()} | {name: _version(name) for name in PACKAGES},
            "machine": _machine(),
            "created": datetime.now(UTC).isoformat(timespec="seconds"),
            "peak_memory_bytes": float(_peak_memory()),
        },
    )


def _add_prediction(pieces: Pieces, config: Config, prediction: Prediction) -> None:
    """Add a prediction with its errors and its light cone."""
    group = "hydrodynamics/euler"
    pieces.groups[group] = dict(prediction.fields)
    for name in prediction.fields:
        pieces.groups[group][f"{name}_grid_error"] = prediction.grid_error[name]
        pieces.groups[group][f"{name}_strings_error"] = prediction.strings_error[name]
    left, right = prediction.light_cone
    pieces.attributes[group] = {
        "light_cone_left": left,
        "light_cone_right": right,
        "light_cone_reach": start_reach(config),
        "method": prediction.method,
        "references": list(prediction.references),
    }


def _add_budget(pieces: Pieces, name: str, budget: ObservableBudget, config: Config, *, judged: bool) -> None:
    """Add one observable's budget; without companions only the rigorous bound and the deviation are known."""
    rows: dict[str, Any] = {"bound": budget.bound, **budget.tighter}
    if judged:
        rows |= {
            "error": budget.error,
            "numerical": budget.numerical,
            "numerical_norm": budget.numerical_norm,
            "dominant_source": budget.dominant_source,
        }
    first = float("nan")
    for level, verdict in budget.levels.items():
        rows[f"{level}_deviation"] = verdict.deviation
        rows[f"{level}_deviation_norm"] = verdict.deviation_norm
        if judged:
            rows[f"{level}_resolved"] = verdict.resolved.astype(np.int8)
            first = verdict.first_resolved_time
    pieces.groups[f"budget/{name}"] = rows
    pieces.attributes[f"budget/{name}"] = {
        **{f"kind_{source}": kind for source, kind in SOURCE_KINDS.items()},
        "first_resolved_time": first,
        "resolve_at": config.budget.resolve_at,
    }


def _add_companion(pieces: Pieces, name: str, record: CompanionRun, sites: int, *, former_main: bool) -> None:
    """Add a companion's observables, what its cuts lost, and its settings."""
    length = record.fields["energy_current"].shape[1]
    own = (
        {}
        if length == sites
        else {"site_length": site_positions(length), "bond_length": bond_positions(length)}
    )
    lost = {"discarded_weight": record.discarded_weight} if np.isfinite(record.discarded_weight).all() else {}
    pieces.groups[f"companions/{name}"] = {**record.fields, **lost, **own}
    pieces.attributes[f"companions/{name}"] = {
        "discarded_weight": record.weight_asked,
        "time_step": record.time_step,
        "sites": length,
        "seconds": record.seconds,
    } | ({"former_main": 1} if former_main else {})


def _level(prediction: Prediction) -> PredictedLevel:
    """Return a prediction as the budget takes it."""
    return PredictedLevel(
        prediction.fields, prediction.grid_error, prediction.strings_error, prediction.light_cone
    )


def _outlook(config: Config, prediction: Prediction | None, absence: str) -> list[dict[str, object]]:
    """Return events about the prediction: that there is none, or that its light cone meets the ends of the
    chain."""
    if prediction is None:
        return [{"kind": "no_prediction", "detail": absence}]
    rim = start_reach(config) - SHARP_REACH
    if not np.isfinite(rim):
        return []
    way = max(0.5 * (config.chain.sites - 1) - rim, 0.0)
    arrival = way / max(abs(edge) for edge in prediction.light_cone)
    if arrival >= config.evolution.until:
        return []
    detail = f"the fastest excitations from where the start varies reach the ends at t = {arrival:.3g}"
    return [{"kind": "light_cone_at_end", "detail": detail}]


def _model(config: Config) -> dict[str, Any]:
    """Return the model's name, its parameters, and the extra terms of H."""
    chain = config.chain
    return {
        "name": chain.model,
        "parameters": chain.parameters,
        "extras": [extra.model_dump(exclude_none=True) for extra in chain.extra],
    }


def _version(package: str) -> str:
    """Return a package's version."""
    try:
        return version(package)
    except PackageNotFoundError:
        return "not installed"


def _machine() -> str:
    """Return the kind of machine in one line."""
    return f"{platform.system()} {platform.machine()}, {os.cpu_count()} cores"


def _peak_memory() -> int:
    """Return the largest resident memory of this process so far, in bytes."""
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    return peak if sys.platform == "darwin" else 1024 * peak
