"""The command `sweep`."""

from __future__ import annotations

import json
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Annotated, Any

import typer

from tnquench.cluster.status import STATES, Standing
from tnquench.cluster.sweep import SweepRun, exit_code, summary
from tnquench.config.cluster import (
    ENGINES,
    SLURM_WORKERS,
    TASKS,
    Cluster,
    parse_address,
    parse_duration,
    parse_memory,
    parse_word,
    with_options,
)
from tnquench.config.points import load_sweep
from tnquench.errors import InputError
from tnquench.terminal.options import AllowOutside
from tnquench.terminal.table import aligned
from tnquench.terminal.units import plain

#: Where sweeps go unless told otherwise, below the working directory.
DEFAULT_FOLDER = Path("results")


def _checked(check: Callable[[str], object]) -> Callable[[str], str]:
    """Return a parser of an option that takes what `check` takes."""

    def parse(text: str) -> str:
        try:
            check(text)
        except ValueError as refusal:
            raise typer.BadParameter(str(refusal)) from refusal
        return text

    return parse


def _one_of(names: Sequence[str]) -> Callable[[str], str]:
    def check(text: str) -> None:
        if text not in names:
            message = f"must be {', '.join(names)}"
            raise ValueError(message)

    return _checked(check)


def _option(meaning: str, metavar: str, check: Callable[[str], str]) -> Any:
    return typer.Option(help=meaning, metavar=metavar, parser=check, show_default=False)


def sweep_command(
    config: Annotated[Path, typer.Argument(metavar="CONFIG", help="TOML file with a section sweep.")],
    into: Annotated[Path | None, typer.Option(metavar="FOLDER", help="Where all points go.")] = None,
    engine: Annotated[
        str | None, _option(f"What runs the tasks: {', '.join(ENGINES)}.", "NAME", _one_of(ENGINES))
    ] = None,
    jobs: Annotated[int | None, typer.Option(metavar="N", min=1, help="Tasks at once.")] = None,
    threads: Annotated[int | None, typer.Option(metavar="N", min=1, help="Processes of each task.")] = None,
    tasks: Annotated[
        str | None, _option(f"What a task is: {' or '.join(TASKS)}.", "WHAT", _one_of(TASKS))
    ] = None,
    walltime: Annotated[
        str | None, _option("Longest time of a task, such as 2h.", "TIME", _checked(parse_duration))
    ] = None,
    memory: Annotated[
        str | None, _option("Most memory of a task, such as 8GB.", "SIZE", _checked(parse_memory))
    ] = None,
    scheduler: Annotated[
        str | None, _option("Dask: a scheduler's address, or slurm.", "ADDRESS", _checked(parse_address))
    ] = None,
    partition: Annotated[str | None, _option("Slurm: the partition.", "NAME", _checked(parse_word))] = None,
    account: Annotated[str | None, _option("Slurm: who is charged.", "NAME", _checked(parse_word))] = None,
    setup: Annotated[
        Path | None,
        typer.Option(
            metavar="FILE", help="Slurm: shell lines that a job reads first (modules and the like)."
        ),
    ] = None,
    status: Annotated[bool, typer.Option("--status", help="Show how the points stand; run nothing.")] = False,
    retry: Annotated[bool, typer.Option("--retry", help="Run failed points again.")] = False,
    as_json: Annotated[bool, typer.Option("--json", help="Print the points as JSON.")] = False,
    allow_outside: AllowOutside = False,
) -> None:
    """Run every point of a sweep that is not done yet, each a run of its own in FOLDER/POINT.

    FOLDER is results/NAME-OF-CONFIG unless given; its path is printed, and FOLDER/index.csv lists all points.
    The same command goes on after any interruption. Options come before the config's section cluster. Exit
    code 1 if points failed, 3 if some were stopped and can go on.
    """
    loaded = load_sweep(config, allow_outside=allow_outside)
    options = {
        "engine": engine, "jobs": jobs, "threads": threads, "tasks": tasks, "walltime": walltime,
        "memory": memory, "scheduler": scheduler, "partition": partition, "account": account,
    }  # fmt: skip
    cluster = with_options(loaded.cluster, options, subject=str(config))
    folder = (into or DEFAULT_FOLDER / config.stem).absolute()  # tasks may begin elsewhere
    sweep = SweepRun(loaded.points, folder, cluster, _usable(setup, cluster))
    standings = sweep.standings()
    if not status and (missing := sweep.missing(standings, retry=retry)):
        sweep.carry_out(missing, tell=lambda line: typer.echo(line, err=True))
        standings = sweep.standings()
    _show(standings, sweep.folder, as_json=as_json, table=status)
    if not status and (code := exit_code(standings)):
        raise typer.Exit(code)


def _usable(setup: Path | None, cluster: Cluster) -> Path | None:
    """Return the absolute path of a setup file; raises InputError if there is none or nothing reads it."""
    if setup is None:
        return None
    if cluster.engine != "slurm" and cluster.scheduler != SLURM_WORKERS:
        problem = f"--setup: read by the jobs of Slurm alone, not by engine {cluster.engine}"
        raise InputError(str(setup), [problem])
    if not setup.is_file():
        raise InputError(str(setup), ["--setup: no such file"])
    return setup.resolve()


def _show(standings: Sequence[Standing], folder: Path, *, as_json: bool, table: bool) -> None:
    """Print the table or the folder; failures and the summary go to standard error."""
    if as_json:
        typer.echo(json.dumps([_as_dict(stands) for stands in standings], indent=2, allow_nan=False))
    elif table:
        typer.echo(aligned([("point", "state", "reached", ""), *map(_row, standings)]))
    for stands in standings:
        if stands.state == "failed":
            typer.echo(f"{stands.name}: {stands.detail}", err=True)
            for line in stands.lines:
                typer.echo(f"    {line}", err=True)
    counts = summary(standings)
    told = ", ".join(f"{counts[state]} {state}" for state in STATES if state in counts)
    advice = "; --retry runs failed points again" if "failed" in counts else ""
    points = f"{len(standings)} point{'s' * (len(standings) > 1)}"
    typer.echo(f"{points}: {told}{advice}", err=True)
    if not as_json and not table:
        typer.echo(str(folder))


def _row(stands: Standing) -> tuple[str, str, str, str]:
    state = f"stopped at t = {plain(stands.time)}" if stands.state == "stopped" else stands.state
    return stands.name, state, f"t = {plain(stands.time)} of {plain(stands.until)}", stands.detail


def _as_dict(stands: Standing) -> dict[str, Any]:
    return {
        "point": stands.name,
        "state": stands.state,
        "time": stands.time,
        "until": stands.until,
        "path": str(stands.folder),
        "detail": stands.detail,
        "log": list(stands.lines),
        **stands.numbers,
    }
