"""The fault table: `python -m tests.benchmarks.faults [WORDS OF A FAULT ...]` prints fault, tries, survived.

At the end stands how fast checkpoints are written and read (alone with the word "speed").

Each try starts a real run of a chain of eight sites, disturbs it at a random moment (the seeds are fixed, the
moments are in processor time), and demands the dataset of the undisturbed run to the last bit, or a clear
refusal; see tests/fault_scenarios.py and fault_places.py. Checkpoints are written after each layer of gates,
so that many moments fall into writing one. Faults of a disk need root, to mount small ones.
"""

from __future__ import annotations

import shutil
import sys
import tempfile
import time
import traceback
from collections.abc import Mapping
from functools import partial
from pathlib import Path
from random import Random
from signal import SIGINT, SIGTERM, SIGUSR1

import numpy as np

import tests.fault_places as places
import tests.fault_scenarios as faults
from tests.fault_cases import Case, undisturbed
from tests.fault_scenarios import Scenario
from tnquench.dataset.checkpoint import load_checkpoint, save_checkpoint

#: Faults of runs with companions; the companions take four times as long as the main run.
WITH_COMPANIONS: dict[str, tuple[Scenario, int]] = {
    "SIGKILL at a random moment": (faults.killed_at_a_random_moment, 25),
    "SIGKILL with companions in processes of their own": (faults.killed_with_companions_beside, 5),
    "SIGKILL again and again": (faults.killed_again_and_again, 3),
    "SIGKILL of a companion's process": (faults.companion_killed, 3),
    "SIGTERM with companions in processes of their own": (partial(faults.asked_to_end, SIGTERM, 2), 3),
}

#: Faults of runs without.
ALONE: dict[str, tuple[Scenario, int]] = {
    "SIGKILL while a checkpoint is written": (faults.killed_while_writing_a_checkpoint, 25),
    "SIGKILL while the dataset is written": (faults.killed_while_writing_the_dataset, 10),
    "SIGTERM": (partial(faults.asked_to_end, SIGTERM, 1), 5),
    "SIGUSR1": (partial(faults.asked_to_end, SIGUSR1, 1), 5),
    "Ctrl-C": (partial(faults.asked_to_end, SIGINT, 1), 5),
    "Ctrl-C twice": (faults.interrupted_twice, 3),
    "time limits in a row": (faults.time_limits, 3),
    "memory limit": (faults.memory_limit, 5),
    "disk full": (places.disk_full, 10),
    "file longer than allowed": (places.file_too_long, 5),
    "disk read-only at the start": (places.read_only_before, 3),
    "disk read-only meanwhile": (places.read_only_meanwhile, 5),
    "folder gone meanwhile": (places.vanished_folder, 5),
    "file in the place of a folder": (places.file_in_the_way, 5),
    "checkpoint damaged": (places.damaged_checkpoint, 10),
    "both generations damaged": (places.damaged_generations, 5),
    "dataset damaged": (places.damaged_dataset, 10),
    "lock damaged": (places.damaged_lock, 3),
    "two runs in one folder": (places.two_runs_in_one_folder, 5),
    "lock left by another machine": (places.lock_of_another_machine, 3),
    "clock jumps or stands still": (places.clock_jumps, 6),
    "state is not numbers": (places.numbers_that_are_none, 5),
    "norm drifts": (places.norm_drift, 5),
}

#: A fault may come too late so many times as it is wanted.
CHANCES = 5


def main(words: list[str]) -> int:
    """Print the table; return 1 if a run did not survive."""
    folder, lost = Path(tempfile.mkdtemp(prefix="faults-")), 0
    print(f"{'fault':<52}{'tries':>6}{'survived':>10}", flush=True)
    for rows, companions in ((WITH_COMPANIONS, "full"), (ALONE, "none")):
        chosen = {name: row for name, row in rows.items() if not words or any(word in name for word in words)}
        if chosen:
            (folder / companions).mkdir()
            lost += print_rows(chosen, undisturbed(folder / companions, companions=companions))
    if not words or "speed" in words:
        print(speed(folder / "speed.h5"))
    shutil.rmtree(folder)
    return 1 if lost else 0


def print_rows(rows: Mapping[str, tuple[Scenario, int]], case: Case) -> int:
    """Print rows of the table; return how many runs did not survive."""
    lost = 0
    for name, (scenario, tries) in rows.items():
        began = time.monotonic()
        results = [tried(scenario, case, case.config.parent, name, seed) for seed in range(tries)]
        hit = [result for result in results if result is not None]
        lost += len(hit) - sum(hit)
        print(f"{name:<52}{len(hit):>6}{sum(hit):>10}   {time.monotonic() - began:.0f} s", flush=True)
    return lost


def speed(path: Path, *, megabytes: int = 512) -> str:
    """Return in words how fast checkpoints are written and read: the fastest of three times."""
    state = [np.random.default_rng(0).normal(size=(4, 500, 500)) for _ in range(megabytes // 8)]
    writing, reading = [], []
    for _ in range(3):
        began = time.perf_counter()
        save_checkpoint(path, {"header": {}, "state": state})
        written = time.perf_counter()
        load_checkpoint(path)
        writing.append(megabytes / (written - began))
        reading.append(megabytes / (time.perf_counter() - written))
    return f"checkpoint of {megabytes} MB: written {max(writing):.0f} MB/s, read {max(reading):.0f} MB/s"


def tried(scenario: Scenario, case: Case, folder: Path, name: str, seed: int) -> bool | None:
    """Return whether a run survived; None if the fault never hit it."""
    moments = Random(f"{name} {seed}")
    for chance in range(CHANCES):
        place = folder / f"{name} {seed} {chance}".replace(" ", "-")
        try:
            scenario(case, place, moments)
        except faults.NotHit:
            continue
        except Exception:
            print(f"--- {name}, try {seed}:\n{traceback.format_exc()}", file=sys.stderr, flush=True)
            return False
        finally:
            shutil.rmtree(place, ignore_errors=True)
        return True
    return None


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
