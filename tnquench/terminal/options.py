"""Arguments and options that several commands take."""

from __future__ import annotations

import os
from pathlib import Path
from typing import Annotated

import typer

#: A main run and its companions, or the charges of its bonds: more pay where the bonds have many charges.
MOST_THREADS = 5

ConfigFile = Annotated[Path, typer.Argument(metavar="CONFIG", help="TOML file with the settings.")]
Into = Annotated[Path | None, typer.Option("--into", metavar="FOLDER", help="Where the dataset goes.")]
Threads = Annotated[
    int | None,
    typer.Option(metavar="N", min=1, help=f"Cores to use at once; default: all, at most {MOST_THREADS}."),
]
AllowOutside = Annotated[
    bool,
    typer.Option("--allow-outside", help="Let the config name table files outside of its own folder."),
]
AsJson = Annotated[bool, typer.Option("--json", help="Print JSON.")]


def usable_cores() -> int:
    """Return how many cores a run takes unless told otherwise."""
    cores = len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1
    return min(MOST_THREADS, cores)
