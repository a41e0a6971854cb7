"""Sweeps for the tests: small configs, and a program that stands in for `tnquench` and takes no time.

The stand-in does what it is told for each point, and where it is told that all went well it leaves a dataset
that was made up beforehand. What the real program does has tests of its own.
"""

from __future__ import annotations

import json
import sys
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

from tests.config_cases import MINIMAL, toml
from tests.synthetic_run import synthetic_pieces
from tnquench.cluster.sweep import SweepRun
from tnquench.config.cluster import with_options
from tnquench.config.document import effective_toml
from tnquench.config.points import Point, load_sweep
from tnquench.dataset.writer import write_run

#: run CONFIG --into FOLDER ...: notes its words; waits and ends as plan.json says for this try of this task.
STAND_IN = """
import json, os, shutil, signal, sys, time
from pathlib import Path
words = sys.argv[1:]
folder = Path(words[words.index("--into") + 1])
only = words[words.index("--only") + 1] if "--only" in words else None
task = folder.name + ("/" + only if only else "")
home = Path(__file__).parent
tries = home / "tries" / task.replace("/", "@")
count = len(list(tries.parent.glob(tries.name + "#*")))
partial = home / f"partial-{os.getpid()}"
partial.write_text(json.dumps({"words": words, "pid": os.getpid()}))
partial.rename(str(tries) + "#" + str(count))
plan = json.loads((home / "plan.json").read_text()).get(task, [{}])
step = plan[min(count, len(plan) - 1)]
stopped = []
for number in (signal.SIGTERM, signal.SIGUSR1):
    signal.signal(number, lambda number, frame: stopped.append(number))
print("try", count, "of", task, flush=True)
if step.get("kill_worker"):
    step["seconds"] = 30.0
    os.kill(os.getppid(), signal.SIGKILL)
end = time.monotonic() + step.get("seconds", 0.0)
while time.monotonic() < end and not stopped:
    time.sleep(0.01)
(home / "ended.txt").open("a").write(task + "\\n")
if stopped:
    print("stopped by", signal.Signals(stopped[0]).name, flush=True)
    sys.exit(3)
if "signal" in step:
    os.kill(os.getpid(), step["signal"])
    time.sleep(10.0)
if step.get("code", 0) == 0 and only is None:
    shutil.copy(home / "datasets" / folder.name / "run.h5", folder / "run.h5")
    (folder / "report.html").touch()
sys.exit(step.get("code", 0))
"""


def write_sweep(folder: Path, sweep: Mapping[str, Any], **sections: Any) -> Path:
    """Write a config with a sweep to `folder`."""
    file = folder / "small.toml"
    file.write_text(toml({**MINIMAL, **sections, "sweep": sweep}))
    return file


def four_points(folder: Path, **sections: Any) -> Path:
    grid = {"start.beta.right": [1.0, 1.5], "chain.anisotropy": [0.5, 0.3]}
    return write_sweep(folder, {"grid": grid}, **sections)


def write_dataset(folder: Path, point: Point, *, whole: bool = False) -> None:
    """Write a dataset of made-up numbers that claims to come from the config of a point."""
    pieces = synthetic_pieces(sites=8, times=3, companions=whole, prediction=whole)
    pieces["provenance"]["config_toml"] = effective_toml(point.config)
    write_run(folder, **pieces)


class Rehearsal:
    """A sweep with the stand-in: what each task is to do, and what was done."""

    def __init__(self, folder: Path, config: Path, plan: Mapping[str, Sequence[Any]], **options: Any) -> None:
        self.home = folder / "stand-in"
        (self.home / "tries").mkdir(parents=True)
        script = self.home / "program.py"
        script.write_text(STAND_IN)
        self.plan(plan)
        loaded = load_sweep(config)
        for point in loaded.points:
            write_dataset(self.home / "datasets" / point.name, point)
        cluster = with_options(loaded.cluster, options, subject="test")
        program = (sys.executable, "-S", "-E", str(script))
        self.sweep = SweepRun(loaded.points, folder / "sweep", cluster, program=program)
        self.said: list[str] = []

    @property
    def names(self) -> list[str]:
        return [point.name for point in self.sweep.points]

    def plan(self, plan: Mapping[str, Sequence[Any]]) -> None:
        (self.home / "plan.json").write_text(json.dumps(plan))

    def run(self, *, retry: bool = False) -> dict[str, str]:
        """Run what is missing and return the states of all points."""
        if missing := self.sweep.missing(self.sweep.standings(), retry=retry):
            self.sweep.carry_out(missing, tell=self.said.append)
        return self.states()

    def states(self) -> dict[str, str]:
        return {stands.name: stands.state for stands in self.sweep.standings()}

    def tries(self, task: str) -> list[dict[str, Any]]:
        """What is known of every try of a task: words of the command and process number."""
        name = task.replace("/", "@")
        files = sorted(
            (self.home / "tries").glob(f"{name}#*"), key=lambda file: int(file.name.rpartition("#")[2])
        )
        return [json.loads(file.read_text()) for file in files]
