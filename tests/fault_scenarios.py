"""One try of each fault: a run is disturbed, and must come through as the row of the fault table says.

Each function takes the case, a new folder and a source of random numbers; it raises AssertionError where the
run did not survive, and NotHit where the fault came too late to do anything.
"""

from __future__ import annotations

import os
import signal
import time
from collections.abc import Callable
from pathlib import Path
from random import Random

import numpy as np
import psutil
import pytest

from tests.fault_cases import DONE, INTERRUPTED, STOPPED, Case, Outcome, Started
from tests.fault_sabotage import (
    GrowingMemory,
    KillInWriting,
    SlowLayers,
)
from tnquench.dataset.checkpoint import load_checkpoint

#: One try of a fault: (case, new folder, random numbers).
Scenario = Callable[[Case, Path, Random], None]


class NotHit(Exception):  # noqa: N818 - no error
    """The run was over before the fault came."""


def ended_clearly(outcome: Outcome, code: int, *said: str) -> None:
    """The run ended with this exit code and these words, and without a traceback."""
    assert outcome.code == code, f"exit code {outcome.code}, expected {code}:\n{outcome.err}"
    assert "Traceback" not in outcome.err
    assert "a defect of the program" not in outcome.err, outcome.err
    for words in said:
        assert words in outcome.err, f"{words!r} is missing in:\n{outcome.err}"


def killed(started: Started, at_cpu: float) -> None:
    """Kill a run once it has used so much processor time."""
    started.until(cpu=at_cpu)
    started.send(signal.SIGKILL)
    if started.end().code != -signal.SIGKILL:
        raise NotHit


def checkpoints(folder: Path) -> list[Path]:
    """Return the newest generations that are there."""
    return sorted(file for file in (folder / "checkpoints").glob("*.h5") if ".previous" not in file.name)


def all_sound(folder: Path) -> None:
    """Every checkpoint loads and holds finite numbers."""
    for file in checkpoints(folder):
        content = load_checkpoint(file)
        assert content is not None
        state = content.get("evolution", content.get("attempt", content))["state"]
        assert all(np.isfinite(tensor).all() for tensor in state["tensors"])


# --- kills ---


def killed_at_a_random_moment(case: Case, folder: Path, moments: Random) -> None:
    killed(case.start(folder), moments.uniform(0.02, 1.0) * case.cpu)
    case.completes(folder)


def killed_with_companions_beside(case: Case, folder: Path, moments: Random) -> None:
    started = case.start(folder, "--threads", 2)
    killed(started, moments.uniform(0.1, 0.6) * case.cpu)
    wait_for(lambda: not members(started.pid), "companions outlive the run")
    case.completes(folder, "--threads", 2)


def killed_again_and_again(case: Case, folder: Path, moments: Random) -> None:
    """Killed time after time before it can finish; whatever each attempt added is kept."""
    for _ in range(200):
        started = case.start(folder)
        started.until(cpu=moments.uniform(0.3, 0.6) * case.cpu)
        started.send(signal.SIGKILL)
        if started.end().code == DONE:
            case.same_in(folder)
            return
    pytest.fail("gets nowhere")


def killed_while_writing_a_checkpoint(case: Case, folder: Path, moments: Random, *, calls: int = 400) -> None:
    """Killed at one of the first so many calls to the file system for checkpoints, or half way before it."""
    share = moments.choice([1.0, moments.random()])
    sabotage = KillInWriting("checkpoints", moments.randrange(calls), share=share)
    if case.run(folder, sabotage=sabotage).code != -signal.SIGKILL:
        raise NotHit
    all_sound(folder)
    case.completes(folder)


def killed_while_writing_the_dataset(case: Case, folder: Path, moments: Random) -> None:
    sabotage = KillInWriting("run.h5", moments.randrange(1, 3), share=moments.choice([1.0, moments.random()]))
    assert case.run(folder, sabotage=sabotage).code == -signal.SIGKILL
    case.completes(folder)


def companion_killed(case: Case, folder: Path, moments: Random) -> None:
    """A companion's process is killed, as by the kernel for lack of memory: it gets a second try."""
    started = case.start(folder, "--threads", 2)
    target = moments.uniform(0.1, 0.5) * case.cpu
    while started.alive():
        workers = [worker for worker in members(started.pid) if worker.pid != started.pid]
        used = [worker for worker in workers if spent(worker) > target]
        if used:
            used[0].kill()
            break
        time.sleep(0.01)
    else:
        raise NotHit
    assert started.end().code == DONE
    case.same_in(folder)


def members(session: int) -> list[psutil.Process]:
    """Return the processes of a session that live."""
    found = []
    for process in psutil.process_iter():
        try:
            alive = process.status() != psutil.STATUS_ZOMBIE
            if alive and os.getsid(process.pid) == session:
                found.append(process)
        except (psutil.Error, OSError):
            continue
    return found


def spent(process: psutil.Process) -> float:
    try:
        return float(process.cpu_times().user)
    except psutil.Error:
        return 0.0


def wait_for(condition: object, otherwise: str) -> None:
    limit = time.monotonic() + 10.0
    while not condition():  # type: ignore[operator]
        assert time.monotonic() < limit, otherwise
        time.sleep(0.02)


# --- requests to end ---


def asked_to_end(number: signal.Signals, threads: int, case: Case, folder: Path, moments: Random) -> None:
    started = case.start(folder, "--threads", threads)
    started.until(cpu=moments.uniform(0.05, 0.9 if threads == 1 else 0.5) * case.cpu)
    started.send(number)
    outcome = started.end()
    if outcome.code == DONE:
        raise NotHit
    ended_clearly(outcome, STOPPED, "the same command goes on")
    assert not (folder / ".lock").exists()
    all_sound(folder)
    case.completes(folder, "--threads", threads)


def interrupted_twice(case: Case, folder: Path, moments: Random) -> None:
    started = case.start(folder, sabotage=SlowLayers(first=moments.randrange(1, 6), seconds=60.0))
    assert started.once(SlowLayers.said)
    started.send(signal.SIGINT)
    assert started.until(seconds=time.monotonic() - started.began + 0.5), "the layer under way goes on"
    started.send(signal.SIGINT)
    asked = time.monotonic()
    outcome = started.end()
    assert time.monotonic() - asked < 2.0
    ended_clearly(outcome, INTERRUPTED)
    case.completes(folder)


def time_limits(case: Case, folder: Path, moments: Random, *, layer_seconds: float = 0.05) -> None:
    """A row of jobs with a time limit each, until the run is done."""
    limit = round(3.0 + moments.random(), 1)
    slow = SlowLayers(seconds=layer_seconds)
    for _ in range(60):
        outcome = case.run(folder, "--walltime", f"{limit}s", sabotage=slow)
        if outcome.code == DONE:
            case.same_in(folder)
            return
        ended_clearly(outcome, STOPPED, "time limit")
        assert outcome.seconds < limit + 1.0, "the limit and the time to fork a process"
        assert not (folder / ".lock").exists()
    pytest.fail("gets nowhere")


def memory_limit(case: Case, folder: Path, moments: Random) -> None:
    """Memory grows layer by layer; the run ends with a checkpoint before it has more than the limit."""
    growing = GrowingMemory(first=moments.randrange(3), bytes=moments.randrange(4_000_000, 16_000_000))
    outcome = case.run(folder, "--memory", "300MB", sabotage=growing)
    ended_clearly(outcome, STOPPED, "memory limit")
    assert outcome.peak <= 300e6, f"{outcome.peak / 1e6:.0f} MB"
    all_sound(folder)
    case.completes(folder)
