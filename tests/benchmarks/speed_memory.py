"""Memory of a run over that of its state, and what the forecast says of it. Linux: peaks are the kernel's.

Each is measured in a process of its own, which imports what the command imports, makes a tiny run and
multiplies two large matrices first, so that libraries and their buffers (tens of megabytes, whatever the run)
count as its baseline.
"""

from __future__ import annotations

import json
import subprocess
import sys
from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path

import numpy as np
import psutil
from threadpoolctl import threadpool_limits

import tnquench.cli
from tests.benchmarks.speed_cases import Line
from tnquench.assemble import build_quench
from tnquench.budget.pilot import forecast_quench
from tnquench.config.load import load_config
from tnquench.observables.quench import Quench, simulate

#: Most memory above the baseline in units of the state's, and most by which the forecast may be off.
MOST_STATES, FORECAST_OFF = 3.0, 0.3

ROOT = Path(__file__).parents[2]
CONFIG = ROOT / "configs" / "two_temperatures.toml"
WEIGHT, UNTIL = 1e-9, 12.0

#: Rows and columns of matrices that fill the buffers of linear algebra.
BUFFERS = 1200

COMMANDS = tnquench.cli.__name__  # what a run has in memory beside its state


def quench_of(sites: int, until: float, weight: float) -> Quench:
    """The quench of two temperatures on another chain, to another time."""
    config = load_config(CONFIG)
    quench = build_quench(config, weight=weight, time_step=0.2, sites=sites)
    return replace(quench, samples=round(until / quench.every))


def peak_of_run(quench: Quench) -> dict[str, float]:
    """Simulate a quench; return bytes: baseline, peak and largest state."""
    baseline = float(psutil.Process().memory_info().rss)
    Path("/proc/self/clear_refs").write_text("5")  # forgets the peak so far
    record = simulate(quench)
    return {
        "baseline": baseline,
        "peak": _peak(),
        "state": float(record.peak_state_bytes),
        "bond": float(record.bond_dimension.max()),
        "seconds": record.cpu_seconds,
    }


def _peak() -> float:
    """The largest resident memory of this process, bytes."""
    lines = Path("/proc/self/status").read_text().splitlines()
    return 1024.0 * next(float(line.split()[1]) for line in lines if line.startswith("VmHWM"))


def forecast_of_run(quench: Quench) -> dict[str, float]:
    """Return what the forecast says: peak of the process, and its part above the baseline; bytes."""
    baseline = float(psutil.Process().memory_info().rss)
    forecast = forecast_quench(quench, companions={})
    return {
        "baseline": baseline,
        "peak": forecast.memory_bytes,
        "state": forecast.state_bytes,
        "bond": float(forecast.bond_dimension.max()),
        "workspace": forecast.memory_bytes - forecast.state_bytes,
    }


MEASURES = {"run": peak_of_run, "forecast": forecast_of_run}


def _in_a_process(measure: str, sites: int, until: float, weight: float) -> dict[str, float]:
    """The same in a process of its own."""
    command = [sys.executable, "-m", "tests.benchmarks.speed_memory", measure]
    found = subprocess.run(
        [*command, str(sites), str(until), str(weight)], cwd=ROOT, check=True, capture_output=True, text=True
    )
    return dict(json.loads(found.stdout.splitlines()[-1]))


def memory_lines(sites: int = 64, until: float = UNTIL, weight: float = WEIGHT) -> Iterator[Line]:
    """Yield the lines of the row `memory`."""
    run = _in_a_process("run", sites, until, weight)
    above = max(run["peak"] - run["baseline"], 1.0)  # a tiny run stays below the buffers
    states = above / run["state"]
    what = f"peak above the baseline over the state, {sites} sites, weight {weight:g}, bond {run['bond']:.0f}"
    measured = f"{states:.2f} ({1e-6 * above:.0f} MB / {1e-6 * run['state']:.0f} MB)"
    yield Line(what, f"< {MOST_STATES:g}", measured, states < MOST_STATES)
    told = _in_a_process("forecast", sites, until, weight)
    off = told["peak"] / run["peak"] - 1.0
    measured = f"{off:+.0%} ({1e-6 * told['peak']:.0f} MB / {1e-6 * run['peak']:.0f} MB)"
    yield Line("forecast of the peak against it", f"{FORECAST_OFF:.0%}", measured, abs(off) <= FORECAST_OFF)
    off = (told["peak"] - told["baseline"]) / above - 1.0
    parts = f"bond {told['bond']:.0f} foretold, state {1e-6 * told['state']:.0f} MB"
    yield Line("its part above the baseline", "", f"{off:+.0%} ({parts})")


if __name__ == "__main__":
    name, *numbers = sys.argv[1:]
    with threadpool_limits(1):
        simulate(quench_of(8, 0.5, 1e-6))
        np.linalg.eigh(np.ones((BUFFERS, BUFFERS)) @ np.ones((BUFFERS, BUFFERS)))
        settings = quench_of(int(numbers[0]), float(numbers[1]), float(numbers[2]))
        print(json.dumps(MEASURES[name](settings)))
