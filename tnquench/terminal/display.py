"""Shows on standard error how a run goes: a progress bar on a terminal, plain lines anywhere else."""

from __future__ import annotations

import os
import sys
import time
from collections.abc import Iterator
from contextlib import contextmanager
from typing import TextIO

from rich.console import Console
from rich.markup import escape
from rich.progress import BarColumn, Task, TaskID, TextColumn, TimeElapsedColumn
from rich.progress import Progress as Bars
from rich.table import Column
from rich.text import Text

from tnquench.observables.quench import Progress, Quench
from tnquench.quantum_of import Watch
from tnquench.terminal.pace import Pace
from tnquench.terminal.units import duration, plain

#: Least seconds between two lines about one stage, and between two readings of a bar.
LINE_INTERVAL, BAR_INTERVAL = 5.0, 0.25

#: Shorter stages are called done, without their seconds.
SHORTEST_TOLD = 0.1


@contextmanager
def watching(stream: TextIO | None = None) -> Iterator[Watch]:
    """Yield a watch that shows stages and progress on `stream` (or standard error) within the block."""
    stream = sys.stderr if stream is None else stream
    if not stream.isatty() or os.environ.get("TERM") == "dumb":
        lines = LogLines(stream)
        yield Watch(stage=lines.stage, progress=lines.progress)
        return
    with stage_bars(stream) as bars:
        display = StageBar(bars)
        yield Watch(stage=display.stage, progress=display.progress)
        display.close()


class Reading:
    """What is known of one stage: its quench, how far it has come, and its pace."""

    def __init__(self, name: str, quench: Quench | None) -> None:
        self.name = name
        self.quench = quench
        self.began = time.perf_counter()
        self.until = quench.every * quench.samples if quench else 0.0
        self.pace = Pace(self.until, quench.bond_ceiling if quench else 1)
        self.latest: Progress | None = None

    def record(self, progress: Progress) -> None:
        """Take note of one half layer."""
        self.pace.record(progress)
        self.latest = progress

    def plan(self) -> str:
        """Return what the stage computes; empty if it runs no quench here."""
        quench = self.quench
        if quench is None:
            return ""
        size = f"{quench.chain.sites} sites, t up to {plain(self.until)}"
        return f"{size}, discarded weight {plain(quench.discarded_weight)}, step {plain(quench.time_step)}"

    def standing(self) -> str:
        """Return time reached, largest bond dimension, cost of a step, time left, as far as known."""
        if self.quench is None or self.latest is None:
            return "preparing the start" if self.quench else ""
        largest = self.latest.bond_dimensions.max()
        step = duration(self.pace.seconds_a_time() * self.quench.time_step)
        parts = [f"t {self.latest.time:.2f} of {plain(self.until)}", f"bond {largest}", f"{step} a step"]
        if (left := self.pace.seconds_left()) is not None:
            parts.append(f"{duration(left)} left")
        return ", ".join(parts)

    def outcome(self) -> str:
        """Return how long the stage took and how large the bonds became."""
        seconds = time.perf_counter() - self.began
        if self.latest is None:  # a companion that ended beside the main run is only waited for
            return duration(seconds) if seconds >= SHORTEST_TOLD else "done"
        return f"{duration(seconds)}, bond {self.latest.bond_dimensions.max()}"


class LogLines:
    """One line a stage; about its progress at most one every few seconds, unit of time and sample."""

    def __init__(self, stream: TextIO) -> None:
        self.stream = stream
        self.reading = Reading("", None)
        self.last_line = 0.0
        self.next_time = 0.0

    def stage(self, name: str, quench: Quench | None) -> None:
        """Announce a stage."""
        self.reading = Reading(name, quench)
        self.last_line = self.reading.began
        self.next_time = self._spacing()
        plan = self.reading.plan()
        self._write(f"{name}: {plan}" if plan else name)

    def progress(self, progress: Progress) -> None:
        """Say where the stage stands, if it is time to."""
        self.reading.record(progress)
        now = time.perf_counter()
        if progress.time < self.next_time - 1e-9 or now - self.last_line < LINE_INTERVAL:
            return
        self.last_line = now
        self.next_time = self._spacing() * (int(progress.time / self._spacing() + 1e-9) + 1)
        self._write(f"{self.reading.name}: {self.reading.standing()}")

    def _spacing(self) -> float:
        return max(1.0, self.reading.quench.every) if self.reading.quench else 1.0

    def _write(self, line: str) -> None:
        self.stream.write(f"{line}\n")
        self.stream.flush()


class StageBar:
    """A bar for the present stage; a stage that is over leaves one line above it."""

    def __init__(self, bars: Bars) -> None:
        self.bars = bars
        self.reading: Reading | None = None
        self.task = TaskID(0)
        self.last_update = 0.0

    def stage(self, name: str, quench: Quench | None) -> None:
        """Close the bar of the stage before and open one for this."""
        self.close()
        self.reading = Reading(name, quench)
        total = self.reading.until if quench else None
        self.task = self.bars.add_task(escape(name), total=total, standing=self.reading.standing())

    def progress(self, progress: Progress) -> None:
        """Move the bar."""
        if self.reading is None:
            return
        self.reading.record(progress)
        now = time.perf_counter()
        if now - self.last_update >= BAR_INTERVAL:
            self.last_update = now
            self.bars.update(self.task, completed=progress.time, standing=self.reading.standing())

    def close(self) -> None:
        """Replace the bar by one line."""
        if self.reading is not None:
            self.bars.remove_task(self.task)
            line = f"{self.reading.name}: {self.reading.outcome()}"
            self.bars.console.print(line, markup=False, highlight=False)
            self.reading = None


class _ElapsedWithoutTotal(TimeElapsedColumn):
    """Time since the beginning, for stages whose length is not known."""

    def render(self, task: Task) -> Text:
        """Return the time as text; empty where a bar shows progress."""
        return super().render(task) if task.total is None else Text("")


def stage_bars(stream: TextIO) -> Bars:
    """Return the bars of a terminal: name of the stage, bar, and where it stands."""
    return Bars(
        TextColumn("{task.description}", table_column=Column(no_wrap=True)),
        BarColumn(bar_width=None, table_column=Column(ratio=1, min_width=4)),
        TextColumn("{task.fields[standing]}", markup=False, table_column=Column(no_wrap=True)),
        _ElapsedWithoutTotal(),
        console=Console(file=stream),
        expand=True,
        transient=True,
        refresh_per_second=4,
    )
