"""The tasks of a sweep: which command each is, and which others it waits for."""

from __future__ import annotations

import sys
from collections.abc import Iterable, Iterator
from dataclasses import dataclass, replace
from pathlib import Path

from tnquench.budget.companions import COARSE, LOOSE, SHORT, shorter_length
from tnquench.config.schema import Config
from tnquench.config.stretch import stretched_sites

#: Name of the main quench of a run.
MAIN = "main"

CONFIG_NAME, LOG_NAME = "config.toml", "log.txt"

#: Exit codes of a task's command.
DONE, FAILED, BAD_INPUT, STOPPED, INTERRUPTED = 0, 1, 2, 3, 130


@dataclass(frozen=True)
class Limits:
    """What each task may take: processes, seconds, bytes; None where there is no limit."""

    threads: int = 1
    walltime: float | None = None
    memory: int | None = None


@dataclass(frozen=True)
class Task:
    """One command of a sweep.

    point  : name of the point; folder : its folder, an ordinary run folder with a config
    quench : the one quench that is carried out; None for the whole run, or what is left of it
    needs  : names of the tasks that come before
    program : words before `run`; none for this package under the Python of the machine that runs the task
    """

    point: str
    folder: Path
    limits: Limits
    quench: str | None = None
    needs: tuple[str, ...] = ()
    program: tuple[str, ...] = ()

    @property
    def name(self) -> str:
        """The point, and the quench if it is one."""
        return f"{self.point}/{self.quench}" if self.quench else self.point

    @property
    def log(self) -> Path:
        """Where the command's output goes; a quench has a log of its own."""
        return self.folder / log_name(self.quench)

    def command(self) -> list[str]:
        """Return the words of the command."""
        program = self.program or (sys.executable, "-m", "tnquench")
        words = [*program, "run", str(self.folder / CONFIG_NAME), "--into", str(self.folder)]
        words += ["--threads", str(self.limits.threads)]
        if self.limits.walltime is not None:
            words += ["--walltime", f"{max(1, int(self.limits.walltime))}s"]
        if self.limits.memory is not None:
            words += ["--memory", f"{self.limits.memory // 1_000_000}MB"]
        return [*words, "--only", self.quench] if self.quench else words


@dataclass(frozen=True)
class Ending:
    """How a task's command ended: exit code (minus the signal's number for a signal) and seconds taken."""

    name: str
    code: int
    seconds: float


def log_name(quench: str | None) -> str:
    """Return the name of a task's log."""
    return f"log-{quench.replace('/', '-')}.txt" if quench else LOG_NAME


def quenches_of(config: Config) -> tuple[str, ...]:
    """Return the quenches of a run that can be tasks of their own, those of a stretch study among them.

    None where the run must choose them as it goes: for an accuracy it chooses weight and step.
    """
    if config.evolution.accuracy is not None:
        return ()
    sizes = {"": config.chain.sites} | {
        f"stretch_{factor:g}/": stretched_sites(config.chain.sites, factor)
        for factor in sorted(config.stretch.factors or ())
        if factor != 1.0
    }
    with_companions = config.budget.companions != "none"
    return tuple(
        prefix + name
        for prefix, sites in sizes.items()
        for name in (MAIN, *(_companions(sites) if with_companions else ()))
    )


def _companions(sites: int) -> tuple[str, ...]:
    short = () if shorter_length(sites) is None else (SHORT,)
    return (LOOSE, COARSE, *short)


def tasks_of(whole: Task, quenches: Iterable[str]) -> Iterator[Task]:
    """Yield the tasks of a point: its quenches, if any, then the whole run, which needs them.

    Each may take what the whole run may.
    """
    parts = [replace(whole, quench=quench) for quench in quenches]
    yield from parts
    yield replace(whole, needs=tuple(part.name for part in parts))
