"""What a run will cost, as numbers for scripts and as lines for people."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from math import prod
from typing import Any

import numpy as np

from tnquench.budget.companions import SHORT
from tnquench.budget.pilot import Forecast
from tnquench.config.schema import Config
from tnquench.conventions import ERROR_SOURCES
from tnquench.dataset.variables import COORDINATES, LEVELS, OBSERVABLES, Variable, variables_of
from tnquench.observables.quench import Quench
from tnquench.run import planned_companions
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
        "disk_bytes": dataset_bytes(config, companions),
        "pilot_seconds": forecast.pilot_seconds,
        "pilot_time": forecast.pilot_time,
    }


def cost_rows(numbers: Mapping[str, Any]) -> Iterator[tuple[str, str]]:
    """Yield the forecast as pairs of a name and a value with its unit."""
    times, bonds = numbers["time"], numbers["bond_dimension"]
    for index in np.unique(np.linspace(0, len(times) - 1, TIMES_SHOWN).round().astype(int)).tolist():
        yield f"largest bond dimension at t = {plain(times[index])}", f"{bonds[index]}"
    weight, step = plain(numbers["discarded_weight"]), plain(numbers["time_step"])
    yield f"main run (discarded weight {weight}, time step {step})", duration(numbers["main_seconds"])
    yield f"its {numbers['companions']} companions together", duration(numbers["companion_seconds"])
    threads = "1 thread" if numbers["threads"] == 1 else f"{numbers['threads']} threads"
    yield f"all simulations on {threads}", duration(numbers["wall_seconds"])
    yield "memory of the main run", size(numbers["memory_bytes"])
    yield f"memory of all processes on {threads}, at most", size(numbers["total_memory_bytes"])
    yield "dataset on disk; report and figures add a few MB", size(numbers["disk_bytes"])


def dataset_bytes(config: Config, companions: Mapping[str, Quench]) -> int:
    """Return the size of a run's dataset, whose layout is known before it is computed."""
    levels = [level for level in LEVELS if level in config.hydrodynamics.levels]
    absent = tuple(f"{level}_" for level in LEVELS if level not in levels)
    sizes = _places(config.chain.sites)
    sizes |= {"time": config.evolution.intervals + 1, "source": len(ERROR_SOURCES)}
    budgets = [variables_of(f"budget/{name}") for name in OBSERVABLES]
    tables = [COORDINATES, variables_of("quantum")]
    tables += [{name: row for name, row in table.items() if not name.startswith(absent)} for table in budgets]
    tables += [variables_of(f"hydrodynamics/{level}") for level in levels]
    total = sum(_table_bytes(table, sizes) for table in tables)
    for name, companion in companions.items():
        own = {f"{place}_length": count for place, count in _places(companion.chain.sites).items()}
        table = variables_of(f"companions/{name}", own_places=name == SHORT)
        total += _table_bytes(table, sizes | own)
    return total


def _places(sites: int) -> dict[str, int]:
    return {"site": sites, "bond": sites - 1}


def _table_bytes(table: Mapping[str, Variable], sizes: Mapping[str, int]) -> int:
    arrays = sum(prod(sizes[dim] for dim in row.dims) * _item_bytes(row) for row in table.values())
    return arrays + RECORD_BYTES * len(table)


def _item_bytes(row: Variable) -> int:
    return TEXT_BYTES if row.dtype == "str" else int(np.dtype(row.dtype).itemsize)
