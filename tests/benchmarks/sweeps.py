"""Sweeps: eight runs on two workers against one, and what the engines cost a task.

python -m tests.benchmarks.sweeps [local] [dask] [costs]

Times are of the wall, so the machine should be idle: the load before each part is shown.
"""

from __future__ import annotations

import os
import shutil
import sys
import tempfile
import time
from collections.abc import Callable
from functools import partial
from pathlib import Path

from tests.config_cases import toml
from tnquench.cluster.attempt import attempt
from tnquench.cluster.dask_engine import Workers, run_dask
from tnquench.cluster.local import run_local
from tnquench.cluster.sweep import SweepRun
from tnquench.cluster.tasks import Limits, Task
from tnquench.config.cluster import Cluster, with_options
from tnquench.config.points import load_sweep
from tnquench.terminal.table import aligned

#: Eight runs of one core each, of equal cost: the angle changes little, the profile's left side not at all.
RUNS = {
    "title": "Eight equal runs",
    "chain": {"sites": 16, "anisotropy": 0.5},
    "start": {"beta": {"shape": "step", "left": 0.5}},
    "evolution": {"until": 6.0, "every": 0.5, "discarded_weight": 1e-8},
    "hydrodynamics": {"levels": []},
    "budget": {"companions": "none"},
    "sweep": {"grid": {"start.beta.right": [1.0 + 0.01 * step for step in range(8)]}},
}

#: Tasks that do nothing, for the cost of a task itself.
EMPTY_TASKS = 60
NOTHING = ("/bin/true",)


def main() -> None:
    """Measure and print both tables."""
    parts = sys.argv[1:] or ["local", "dask", "costs"]
    folder = Path(tempfile.mkdtemp(prefix="sweeps-"))
    try:
        rows = [scaling(folder, engine) for engine in parts if engine != "costs"]
        if rows:
            print(aligned([("engine", "1 worker", "2 workers", "faster by", "load before"), *rows]))
        if "costs" in parts:
            print(aligned([("what", "time"), *costs(folder)]))
    finally:
        shutil.rmtree(folder)


def scaling(folder: Path, engine: str) -> tuple[str, ...]:
    """Return the row of one engine: eight runs on one worker and on two."""
    config = folder / "runs.toml"
    config.write_text(toml(RUNS))
    loaded, load = load_sweep(config), f"{os.getloadavg()[0]:.2f}"
    seconds = []
    for jobs in (1, 2):
        cluster = with_options(loaded.cluster, {"engine": engine, "jobs": jobs, "threads": 1}, subject="")
        sweep = SweepRun(loaded.points, folder / f"{engine}-{jobs}", cluster)
        seconds.append(seconds_of(partial(sweep.carry_out, loaded.points, tell=silent)))
        assert {stands.state for stands in sweep.standings()} == {"done"}
    one, two = seconds
    return engine, f"{one:.1f} s", f"{two:.1f} s", f"{one / two:.2f}", load


def costs(folder: Path) -> list[tuple[str, str]]:
    """Return what a task that does nothing takes by itself, and more with each engine."""
    tasks = [Task(f"task_{number}", folder / f"task_{number}", Limits()) for number in range(EMPTY_TASKS)]
    tasks = [Task(task.point, task.folder, task.limits, program=NOTHING) for task in tasks]
    for task in tasks:
        task.folder.mkdir()
    alone = seconds_of(lambda: [attempt(task) for task in tasks]) / EMPTY_TASKS
    workers = Workers(Cluster(), Limits(), 1, folder)
    start = seconds_of(lambda: run_dask([], workers, tell=silent))
    local = seconds_of(lambda: run_local(tasks, jobs=1, tell=silent)) / EMPTY_TASKS
    dask = (seconds_of(lambda: run_dask(tasks, workers, tell=silent)) - start) / EMPTY_TASKS
    return [
        ("a task that does nothing", f"{1e3 * alone:.0f} ms"),
        ("more with local, a task", f"{1e3 * (local - alone):.0f} ms"),
        ("more with dask, a task", f"{1e3 * (dask - alone):.0f} ms"),
        ("start and end of a Dask worker", f"{start:.1f} s"),
    ]


def seconds_of(work: Callable[[], object]) -> float:
    """Return the wall time of some work."""
    began = time.perf_counter()
    work()
    return time.perf_counter() - began


def silent(_line: str) -> None:
    """Say nothing."""


if __name__ == "__main__":
    main()
