"""The command `run`: limits and signals around a run that goes on from its checkpoints."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Annotated, Any

import psutil
import typer

from tnquench.config.cluster import parse_duration, parse_memory
from tnquench.config.load import load_config
from tnquench.errors import InputError, Stopped
from tnquench.run import Continuation, run, run_one
from tnquench.stopping import Limits, Stop, answering_signals, resident_bytes
from tnquench.terminal.display import watching
from tnquench.terminal.options import AllowOutside, ConfigFile, Into, Threads, usable_cores
from tnquench.terminal.summary import show_findings

#: What a run of the smallest chain takes beyond the program itself, in bytes.
LEAST_MEMORY = 50_000_000


def _limit(parse: Callable[[str], float]) -> Callable[[str], float]:
    """Return a parser that complains about an option in its own words."""

    def parsed(text: str) -> float:
        try:
            return parse(text)
        except ValueError as refusal:
            message = f'"{text}": {refusal}'
            raise typer.BadParameter(message) from refusal

    return parsed


Walltime = Annotated[
    Any,
    typer.Option(
        metavar="TIME",
        help='Stop with checkpoints before it is over: "2h".',
        parser=_limit(parse_duration),
    ),
]
Memory = Annotated[
    Any,
    typer.Option(
        metavar="SIZE", help='Stop with checkpoints below this memory: "8GB".', parser=_limit(parse_memory)
    ),
]


def run_command(
    config: ConfigFile,
    into: Into = None,
    threads: Threads = None,
    walltime: Walltime = None,
    memory: Memory = None,
    fresh: Annotated[bool, typer.Option("--fresh", help="Forget the checkpoints that are there.")] = False,
    only: Annotated[
        str | None,
        typer.Option(metavar="QUENCH", help="Carry out one quench alone: main, weight_30, step_2 ..."),
    ] = None,
    checkpoint_every: Annotated[
        float | None, typer.Option(metavar="SECONDS", min=0.0, help="Least time between two checkpoints.")
    ] = None,
    allow_outside: AllowOutside = False,
) -> None:
    """Simulate a config with its companions, predict, judge; write dataset and report.

    The folder, results/NAME-OF-CONFIG unless given, holds run.h5, report.html and figures; its path is
    printed. Results do not depend on the number of threads. A run that was stopped (Ctrl-C, SIGTERM, SIGUSR1,
    a limit: exit code 3) or killed goes on when the same command is given again; with a larger `until` a
    finished one goes on too.
    """
    cluster = load_config(config, allow_outside=allow_outside).cluster
    limits = Limits(
        seconds=cluster.walltime_seconds if walltime is None else walltime,
        memory=cluster.memory_bytes if memory is None else memory,
    )
    require_room(limits, config)
    with stoppable(limits) as stop, watching() as watch:
        how = Continuation(stop=stop, checkpoint_every=checkpoint_every, fresh=fresh)
        if only is not None:
            folder = run_one(
                config,
                only,
                into=into,
                threads=threads or usable_cores(),
                watch=watch,
                continuation=how,
                allow_outside=allow_outside,
            )
        else:
            folder = run(
                config,
                into=into,
                threads=threads or usable_cores(),
                watch=watch,
                continuation=how,
                allow_outside=allow_outside,
            )
    if only is None:
        show_findings(folder)
    typer.echo(str(folder))


def require_room(limits: Limits, config: Path) -> None:
    """Raise InputError for a memory limit that the program alone exceeds, so that no run could ever end."""
    taken = resident_bytes(psutil.Process())
    if limits.memory is not None and limits.memory < taken + LEAST_MEMORY:
        needed = (taken + LEAST_MEMORY) / 1e6
        problem = f"memory limit of {limits.memory / 1e6:.0f} MB: the program alone takes {needed:.0f} MB"
        raise InputError(str(config), [f"{problem}; give more, tnquench forecast says how much"])


@contextmanager
def stoppable(limits: Limits) -> Iterator[Stop]:
    """Answer signals and limits within the block, and say how to go on where one has ended it."""
    try:
        with answering_signals(limits) as stop:
            yield stop
    except Stopped as stopped:
        said = f"tnquench: stopped, {stopped.why}; the same command goes on from the checkpoints"
        raise Stopped(said) from stopped
