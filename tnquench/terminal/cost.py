"""What a run will cost, as numbers for scripts and as lines for people."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Set
from math import prod
from typing import Any

import numpy as np

from tnquench.assemble import no_prediction
from tnquench.budget.companions import SHORT
from tnquench.budget.pilot import Forecast
from tnquench.config.schema import Config
from tnquench.conventions import CURRENTS, ERROR_SOURCES
from tnquench.dataset.variables import COORDINATES, LEVELS, Variable, held_by, variables_of
from tnquench.observables.quench import Quench
from tnquench.quantum_of import planned_companions
from tnquench.terminal.units import duration, plain, size

#: Times at which the bond dimension is shown.
TIMES_SHOWN = 5

#: Bytes of a text on the source scale, and of what the file says about each variable (measured).
TEXT_BYTES, RECORD_BYTES = 16, 1550


def cost_numbers(config: Config, quench: Quench, forecast: Forecast, *, threads: int) -> dict[str, Any]:
    """Return the forecast as plain numbers by name: seconds, bytes, times in the inverse of the coupling.

    threads : processes used; with one the companions follow the main run, with more they run beside it
    """
    companions = planned_companions(config, quench)
    beside = forecast.companion_seconds / max(1, threads - 1)
    together = forecast.main_seconds + beside if threads == 1 else max(forecast.main_seconds, beside)
    return {
        "discarded_weight": quench.discarded_weight,
        "time_step": quench.time_step,
        "time": forecast.times.tolist(),
        "bond_dimension": [round(value) for value in forecast.bond_dimension.tolist()],
        "main_seconds": forecast.main_seconds,
        "companions": len(companions),
        "companion_seconds": forecast.companion_seconds,
        "threads": threads,
        "wall_seconds": together,
        "memory_bytes": forecast.memory_bytes,
        "total_memory_bytes": forecast.memory_bytes * min(threads, 1 + len(companions)),
        "disk_bytes": dataset_bytes(config, quench, companions),
        "pilot_seconds": forecast.pilot_seconds,
        "pilot_time": forecast.pilot_time,
    }


def with_study(numbers: dict[str, Any], stretched: Mapping[float, dict[str, Any]]) -> dict[str, Any]:
    """Return the forecast of a run with that of its stretch study; unchanged without one.

    stretched : numbers of each stretched run by factor; they stand under "stretched", and wall time, memory
    and disk of the whole become those of all runs, one after the other
    """
    if not stretched:
        return numbers
    family = [numbers, *stretched.values()]
    whole: dict[str, Any] = {
        name: sum(run[name] for run in family) for name in ("wall_seconds", "disk_bytes", "pilot_seconds")
    }
    whole |= {name: max(run[name] for run in family) for name in ("memory_bytes", "total_memory_bytes")}
    return numbers | whole | {"stretched": [{"factor": factor} | run for factor, run in stretched.items()]}


def cost_rows(numbers: Mapping[str, Any]) -> Iterator[tuple[str, str]]:
    """Yield the forecast as pairs of a name and a value with its unit."""
    times, bonds = numbers["time"], numbers["bond_dimension"]
    for index in np.unique(np.linspace(0, len(times) - 1, TIMES_SHOWN).round().astype(int)).tolist():
        yield f"largest bond dimension at t = {plain(times[index])}", f"{bonds[index]}"
    weight, step = plain(numbers["discarded_weight"]), plain(numbers["time_step"])
    yield f"main run (discarded weight {weight}, time step {step})", duration(numbers["main_seconds"])
    yield f"its {numbers['companions']} companions together", duration(numbers["companion_seconds"])
    for run in numbers.get("stretched", ()):
        bonds, seconds = run["bond_dimension"][-1], run["main_seconds"] + run["companion_seconds"]
        said = (
            f"stretched by {plain(run['factor'])}, to t = {plain(run['time'][-1])} (bond dimension {bonds})"
        )
        yield f"{said}, with companions", duration(seconds)
    threads = "1 thread" if numbers["threads"] == 1 else f"{numbers['threads']} threads"
    yield f"all simulations on {threads}", duration(numbers["wall_seconds"])
    largest = "largest" if "stretched" in numbers else "main"
    yield f"memory of the {largest} run", size(numbers["memory_bytes"])
    yield f"memory of all processes on {threads}, at most", size(numbers["total_memory_bytes"])
    yield "dataset on disk; report and figures add a few MB", size(numbers["disk_bytes"])


def dataset_bytes(config: Config, quench: Quench, companions: Mapping[str, Quench]) -> int:
    """Return the size of a run's dataset, whose layout is known before it is computed.

    Every observable counts as predicted where there is a prediction.
    """
    conserved = ["energy_density", *quench.chain.charges]
    names = [*conserved, *(CURRENTS[density] for density in conserved), *quench.chain.densities]
    wanted = () if no_prediction(config) else config.hydrodynamics.levels
    levels = [level for level in LEVELS if level in wanted]
    sizes = _places(config.chain.sites)
    sizes |= {"time": config.evolution.intervals + 1, "source": len(ERROR_SOURCES)}
    tables = [COORDINATES, _only("quantum", held_by("quantum", names))]
    for name in names:
        absent = tuple(f"{level}_" for level in LEVELS if level not in levels)
        rows = variables_of(f"budget/{name}")
        tables.append({row: variable for row, variable in rows.items() if not row.startswith(absent)})
    for level in levels:
        held = {f"{name}{error}" for name in names for error in ("", "_grid_error", "_strings_error")}
        tables.append(_only(f"hydrodynamics/{level}", held))
    total = sum(_table_bytes(table, sizes) for table in tables)
    for name, companion in companions.items():
        own = {f"{place}_length": count for place, count in _places(companion.chain.sites).items()}
        group = f"companions/{name}"
        table = _only(group, held_by(group, names), own_places=name == SHORT)
        total += _table_bytes(table, sizes | own)
    return total


def _only(group: str, held: Set[str], *, own_places: bool = False) -> dict[str, Variable]:
    """Return the rows of a group's table that a file holds."""
    return {name: row for name, row in variables_of(group, own_places=own_places).items() if name in held}


def _places(sites: int) -> dict[str, int]:
    return {"site": sites, "bond": sites - 1}


def _table_bytes(table: Mapping[str, Variable], sizes: Mapping[str, int]) -> int:
    arrays = sum(prod(sizes[dim] for dim in row.dims) * _item_bytes(row) for row in table.values())
    return arrays + RECORD_BYTES * len(table)


def _item_bytes(row: Variable) -> int:
    return TEXT_BYTES if row.dtype == "str" else int(np.dtype(row.dtype).itemsize)
