"""One try of each fault of places and states: disks, damaged files, locks, clocks, faulty memory.

The contract is that of tests/fault_scenarios.py.
"""

from __future__ import annotations

import os
import re
import subprocess
import time
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from random import Random

import numpy as np

from tests.fault_cases import BAD_INPUT, DEFECT, DONE, NEGATIVE, Case, Started
from tests.fault_sabotage import ClockJumps, LongestFile, Sabotage, SpoiledGates
from tests.fault_scenarios import NotHit, all_sound, checkpoints, ended_clearly, killed
from tnquench.dataset.lock import DEAD_AFTER

# --- disks ---


@contextmanager
def small_disk(folder: Path, megabytes: float) -> Iterator[Path]:
    """Yield a file system in memory of so many megabytes; PermissionError where that is not allowed."""
    folder.mkdir(parents=True)
    mount("-t", "tmpfs", "-o", f"size={int(megabytes * 1024)}k", "tmpfs", folder)
    try:
        yield folder
    finally:
        subprocess.run(["umount", "-l", folder], check=True)


def mount(*words: object) -> bool:
    done = subprocess.run(["mount", *map(str, words)], capture_output=True, text=True, check=False)
    if os.geteuid() != 0 or "permission" in done.stderr:
        raise PermissionError(done.stderr)
    return done.returncode == 0


def disk_full(case: Case, folder: Path, moments: Random) -> None:
    with small_disk(folder / "disk", 40.0) as disk:
        filler = disk / "others"
        filler.write_bytes(bytes(int(40.0 * 2**20) - moments.randrange(8_000, 400_000)))
        outcome = case.run(disk / "run")
        if outcome.code == DONE:
            raise NotHit
        ended_clearly(outcome, DEFECT, "No space left on device")
        all_sound(disk / "run")
        filler.unlink()
        case.completes(disk / "run")


def file_too_long(case: Case, folder: Path, moments: Random) -> None:
    outcome = case.run(folder, sabotage=LongestFile(moments.randrange(500, 60_000)))
    if outcome.code == DONE:
        raise NotHit
    ended_clearly(outcome, DEFECT, "File too large")
    all_sound(folder)
    case.completes(folder)


def read_only_before(case: Case, folder: Path, moments: Random) -> None:
    with small_disk(folder / "disk", 40.0) as disk:
        killed(case.start(disk / "run"), moments.uniform(0.1, 0.6) * case.cpu)
        assert mount("-o", "remount,ro", disk)
        ended_clearly(case.run(disk / "run"), BAD_INPUT, "Read-only file system")
        assert mount("-o", "remount,rw", disk)
        case.completes(disk / "run")


def read_only_meanwhile(case: Case, folder: Path, moments: Random) -> None:
    with small_disk(folder / "disk", 40.0) as disk:
        started = case.start(disk / "run")
        started.until(cpu=moments.uniform(0.1, 0.6) * case.cpu)
        while started.alive() and not mount("-o", "remount,ro", disk):  # busy while a file is being written
            pass
        outcome = started.end()
        mount("-o", "remount,rw", disk)
        if outcome.code == DONE:
            raise NotHit
        ended_clearly(outcome, outcome.code, "Read-only file system")
        assert outcome.code in (DEFECT, BAD_INPUT)
        case.completes(disk / "run")


def vanished_folder(case: Case, folder: Path, moments: Random) -> None:
    """The folder goes while the run is under way, comes back later, and the run goes on in it."""
    started = case.start(folder / "run")
    started.until(cpu=moments.uniform(0.2, 0.7) * case.cpu)
    if not started.alive():
        raise NotHit
    (folder / "run").rename(folder / "elsewhere")
    outcome = started.end()
    ended_clearly(outcome, outcome.code, "No such file or directory", "run")
    assert outcome.code in (DEFECT, BAD_INPUT)
    assert not (folder / "run").exists(), "writes into a new folder as if nothing had happened"
    (folder / "elsewhere").rename(folder / "run")
    case.completes(folder / "run")


def file_in_the_way(case: Case, folder: Path, moments: Random) -> None:
    folder.mkdir()
    place = folder / moments.choice(["run", "run/checkpoints", "run/.lock"])
    place.parent.mkdir(exist_ok=True)
    if place.name == ".lock":
        place.mkdir()
    else:
        place.write_text("something else")
    ended_clearly(case.run(folder / "run"), BAD_INPUT, place.name)


# --- damage ---


def damage(file: Path, moments: Random) -> None:
    """Flip bytes of a file or cut it off."""
    image = bytearray(file.read_bytes())
    if moments.random() < 0.3:
        del image[moments.randrange(len(image)) :]
    else:
        for _ in range(moments.randrange(1, 4)):
            image[moments.randrange(len(image))] ^= moments.randrange(1, 256)
    file.write_bytes(bytes(image))


def damaged_checkpoint(case: Case, folder: Path, moments: Random) -> None:
    """The newest generation of one quench is damaged; where it is the only one, the run says so."""
    killed(case.start(folder), moments.uniform(0.3, 0.8) * case.cpu)
    files = checkpoints(folder)
    if not files:
        raise NotHit
    file = moments.choice(files)
    damage(file, moments)
    if file.with_suffix(".previous.h5").exists():
        case.completes(folder)
    else:
        ended_clearly(case.run(folder), BAD_INPUT, file.name, "--fresh")
        case.completes(folder, "--fresh")


def damaged_generations(case: Case, folder: Path, moments: Random) -> None:
    """Both generations of the quench under way are damaged: a refusal, and a fresh start on request."""
    killed(case.start(folder), moments.uniform(0.4, 0.8) * case.cpu)
    files = [file for file in checkpoints(folder) if file.with_suffix(".previous.h5").exists()]
    if not files:
        raise NotHit
    file = max(files, key=lambda path: path.stat().st_mtime)
    for each in (file, file.with_suffix(".previous.h5")):
        damage(each, moments)
    ended_clearly(case.run(folder), BAD_INPUT, file.name, "--fresh")
    case.completes(folder, "--fresh")


def damaged_dataset(case: Case, folder: Path, moments: Random) -> None:
    """Damage is found by whoever opens the dataset, and the run mends it from its checkpoints."""
    case.completes(folder)
    damage(folder / "run.h5", moments)
    ended_clearly(Started(["check", folder]).end(), NEGATIVE, "damaged", "run again")
    ended_clearly(Started(["report", folder]).end(), BAD_INPUT, "run.h5")
    case.completes(folder)


def damaged_lock(case: Case, folder: Path, moments: Random) -> None:
    killed(case.start(folder), moments.uniform(0.1, 0.6) * case.cpu)
    lock = folder / ".lock"
    if not lock.exists():
        raise NotHit
    lock.write_bytes(moments.randbytes(moments.randrange(50)))
    ended_clearly(case.run(folder), BAD_INPUT, "unknown", "delete .lock")
    old = time.time() - DEAD_AFTER - 60.0
    os.utime(lock, (old, old))
    case.completes(folder)


# --- locks, clocks, states ---


def two_runs_in_one_folder(case: Case, folder: Path, moments: Random) -> None:
    first = case.start(folder)
    assert first.once("prediction")
    first.until(cpu=moments.uniform(0.05, 0.5) * case.cpu)
    second = case.run(folder)
    assert first.alive(), "over before the second could try"
    ended_clearly(second, BAD_INPUT, f"process {first.pid} ", os.uname().nodename)
    assert first.end().code == DONE
    case.same_in(folder)


def lock_of_another_machine(case: Case, folder: Path, moments: Random) -> None:
    """A run died with its machine: its lock holds for ten minutes from its last sign of life."""
    killed(case.start(folder), moments.uniform(0.1, 0.6) * case.cpu)
    lock = folder / ".lock"
    if not lock.exists():
        raise NotHit
    lock.write_text(re.sub(r'"machine": "[^"]*"', '"machine": "another"', lock.read_text()))
    recent = time.time() - moments.uniform(0.0, DEAD_AFTER - 60.0)
    os.utime(lock, (recent, recent))
    ended_clearly(case.run(folder), BAD_INPUT, "another run works here")
    old = time.time() - DEAD_AFTER - moments.uniform(60.0, 1e6)
    os.utime(lock, (old, old))
    case.completes(folder)


def clock_jumps(case: Case, folder: Path, moments: Random) -> None:
    jumps = ClockJumps(moments.randrange(1000))
    started = case.start(folder, "--walltime", "1h", sabotage=jumps)
    try:
        killed(started, moments.uniform(0.1, 0.6) * case.cpu)
    finally:
        case.completes(folder, "--walltime", "1h", sabotage=jumps)


def spoiled_state(sabotage: Sabotage, said: str, case: Case, folder: Path) -> None:
    """The main run ends with a diagnosis; what is kept is sound, and goes on without the fault."""
    ended_clearly(case.run(folder, sabotage=sabotage), DEFECT, said)
    all_sound(folder)
    case.completes(folder)


def numbers_that_are_none(case: Case, folder: Path, moments: Random) -> None:
    spoiled_state(SpoiledGates(first=moments.randrange(8), factor=np.nan), "not finite numbers", case, folder)


def norm_drift(case: Case, folder: Path, moments: Random) -> None:
    factor = 1.0 + moments.choice([-1, 1]) * 10.0 ** moments.uniform(-7, -1)
    spoiled_state(SpoiledGates(first=moments.randrange(8), factor=factor), "norm", case, folder)
