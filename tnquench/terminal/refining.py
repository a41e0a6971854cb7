"""The command `refine`."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from tnquench.refine import refine
from tnquench.stopping import Limits
from tnquench.terminal.display import watching
from tnquench.terminal.options import Threads, usable_cores
from tnquench.terminal.running import stoppable
from tnquench.terminal.summary import show_findings


def refine_command(
    dataset: Annotated[Path, typer.Argument(metavar="FOLDER", help="The folder of a run, or its run.h5.")],
    weight: Annotated[
        float | None, typer.Option(metavar="W", help="New discarded weight; default: a tenth of the old one.")
    ] = None,
    step: Annotated[
        float | None, typer.Option(metavar="DT", help="New time step; default: the old one.")
    ] = None,
    threads: Threads = None,
) -> None:
    """Add a tighter main run to a finished run, which becomes a companion of it.

    Only the new main run is simulated; the errors are judged by the runs that are there. run.h5 and the
    report are replaced at the end; the folder's path is printed. What was stopped goes on when the same
    command is given again.
    """
    with stoppable(Limits()) as stop, watching() as watch:
        folder = refine(
            dataset,
            weight=weight,
            time_step=step,
            threads=threads or usable_cores(),
            watch=watch,
            stop=stop,
        )
    show_findings(folder)
    typer.echo(str(folder))
