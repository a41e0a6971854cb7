"""When a run must end before its time: a time or memory limit, a signal of the batch system, Ctrl-C.

A quench that is kept ends between two layers of gates, with a checkpoint. Whatever else a run does is short
and done again, so it ends at once. A second Ctrl-C kills the process and its children.
"""

from __future__ import annotations

import os
import signal
import sys
import threading
import time
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from types import FrameType

import psutil

from tnquench.errors import Stopped

#: What ends a run, and how that is said.
SIGNALS = {
    signal.SIGINT: "interrupted",
    signal.SIGTERM: "asked to end (SIGTERM)",
    signal.SIGUSR1: "asked to end (SIGUSR1)",
    signal.SIGALRM: "the time limit is near",
}

#: Those of them that a batch system sends.
SCHEDULERS = (signal.SIGTERM, signal.SIGUSR1)

#: A quench ends so many of its slowest layers and checkpoints, and seconds, before the time limit.
LAYERS_AHEAD, CHECKPOINTS_AHEAD, SECONDS_AHEAD = 2.0, 2.0, 0.5

#: Memory is taken to grow by so many times its largest growth so far before it is looked at again.
GROWTHS_AHEAD = 2.0

#: Seconds between two looks at the memory of all processes.
MEMORY_INTERVAL = 0.2

#: Exit code of a process that was interrupted twice.
KILLED = 130


@dataclass(frozen=True)
class Limits:
    """What a run may take: seconds from its beginning, bytes of all its processes; None where unlimited."""

    seconds: float | None = None
    memory: int | None = None


class Stop:
    """Whether a run should end, and why.

    deadline : on the monotonic clock, which no change of the date moves and all processes share
    """

    def __init__(self, limits: Limits | None = None, *, deadline: float | None = None) -> None:
        limits = limits or Limits()
        self.memory = limits.memory
        self.deadline = deadline if limits.seconds is None else time.monotonic() + limits.seconds
        self.asked = ""
        self.waits_for_layer = False
        self.parent: int | None = None  # a worker's: it ends with it
        self._process = psutil.Process()
        self._last_look, self._last_bytes, self._growth = 0.0, 0, 0

    def ask(self, why: str) -> None:
        """Ask for the end; the first reason counts. Raises Stopped unless a quench is under way that will
        end by itself."""
        self.asked = self.asked or why
        if not self.waits_for_layer:
            raise Stopped(self.asked)

    @contextmanager
    def between_layers(self) -> Iterator[None]:
        """Let requests wait for the next call of `reason` within the block."""
        before, self.waits_for_layer = self.waits_for_layer, True
        try:
            yield
        finally:
            self.waits_for_layer = before

    def reason(self, *, layer_seconds: float = 0.0, checkpoint_seconds: float = 0.0) -> str:
        """Return why to end now, empty if there is no reason; the arguments say what the next layer and a
        checkpoint take."""
        ahead = SECONDS_AHEAD + LAYERS_AHEAD * layer_seconds + CHECKPOINTS_AHEAD * checkpoint_seconds
        if self.asked:
            return self.asked
        if self.parent not in (None, os.getppid()):
            return "the process that asked for it has ended"
        if self.deadline is not None and time.monotonic() + ahead > self.deadline:
            return SIGNALS[signal.SIGALRM]
        return self.memory_reason()

    def memory_reason(self) -> str:
        """Return that the memory limit is near, if it is."""
        now = time.monotonic()
        if self.memory is None or now - self._last_look < MEMORY_INTERVAL:
            return ""
        taken = resident_bytes(self._process)
        self._growth = max(self._growth, taken - self._last_bytes) if self._last_bytes else 0
        self._last_look, self._last_bytes = now, taken
        if taken + GROWTHS_AHEAD * self._growth <= self.memory:
            return ""
        return f"the memory limit is near: {taken / 1e6:.0f} MB in use of {self.memory / 1e6:.0f} MB"


def resident_bytes(process: psutil.Process) -> int:
    """Return the resident memory of a process and its children, in bytes."""
    total = int(process.memory_info().rss)
    for child in process.children(recursive=True):
        try:
            total += int(child.memory_info().rss)
        except psutil.Error:  # it has ended meanwhile
            continue
    return total


@contextmanager
def answering_signals(limits: Limits) -> Iterator[Stop]:
    """Yield a stop that the signals of a batch system, Ctrl-C and the time limit ask within the block.

    Only a process's main thread can answer signals; elsewhere the limits alone count. After a stop that was
    asked for, further requests of a batch system are ignored.
    """
    stop = Stop(limits)
    if threading.current_thread() is not threading.main_thread():
        yield stop
        return

    def answer(number: int, _frame: FrameType | None) -> None:
        said = SIGNALS[signal.Signals(number)]
        if stop.asked and number == signal.SIGINT:
            kill_all()
        stop.ask(said)

    before = {number: signal.signal(number, answer) for number in SIGNALS}
    if limits.seconds is not None:
        signal.setitimer(signal.ITIMER_REAL, limits.seconds)
    try:
        yield stop
    finally:
        signal.setitimer(signal.ITIMER_REAL, 0.0)
        for number, handler in before.items():
            asked_again = stop.asked and number in SCHEDULERS
            signal.signal(number, _already_ending if asked_again else handler)


def _already_ending(_number: int, _frame: FrameType | None) -> None:
    """Ignore a signal. A scheduler may ask every process of a job, and a parent pass it on: the second
    request must not kill a process that is ending as the first one wished."""


def answering_in_worker() -> Stop:
    """Return the stop of a worker process, which SIGTERM and SIGUSR1 ask; Ctrl-C is for its parent alone."""
    stop = Stop()
    stop.waits_for_layer = True
    for number in SCHEDULERS:
        signal.signal(number, lambda number, _frame: stop.ask(SIGNALS[signal.Signals(number)]))
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    return stop


def kill_all() -> None:
    """End this process and its children at once."""
    for child in psutil.Process().children(recursive=True):
        child.kill()
    sys.stderr.write("killed; the checkpoints written so far are whole\n")
    sys.stderr.flush()
    os._exit(KILLED)
