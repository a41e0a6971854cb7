"""The commands: arguments in, one documented function each, exit codes out. Nothing else ends the process.

Results go to standard output, everything else to standard error. Exit codes: 0 done, 1 a failure of the
program, 2 bad input, 4 a check whose answer is no, 130 interrupted.
"""

from __future__ import annotations

import json
import math
import os
import sys
import traceback
from collections.abc import Sequence
from concurrent.futures.process import BrokenProcessPool
from errno import EDQUOT, ENOSPC
from importlib.metadata import PackageNotFoundError, version
from multiprocessing import active_children
from pathlib import Path
from signal import SIGTERM, default_int_handler, signal
from typing import Annotated, Any

import typer
from threadpoolctl import threadpool_limits

from tnquench.assemble import no_prediction
from tnquench.bethe.equilibrium import equilibrium
from tnquench.bethe.strings import UnsupportedAnisotropy, supported_nu
from tnquench.config.document import effective_toml, settings_page
from tnquench.config.load import load_config
from tnquench.config.schema import LATER_CHOICES
from tnquench.dataset.integrity import check_run
from tnquench.errors import InputError, TnquenchError, VerdictNegative
from tnquench.report.page import write_report
from tnquench.run import forecast, hydro, run
from tnquench.terminal.cost import cost_numbers, cost_rows
from tnquench.terminal.display import watching
from tnquench.terminal.summary import show_findings
from tnquench.terminal.table import aligned, equilibrium_rows

PROGRAM = "tnquench"
#: Largest beta times coupling of `thermo`; beyond it the solver meets the ground state to rounding.
LARGEST_BETA = 1000.0

#: A main run and its four companions: more processes would idle.
MOST_THREADS = 5

#: Exit codes that no exception of ours carries.
DONE, DEFECT, BAD_INPUT, INTERRUPTED = 0, 1, 2, 130

INTERRUPTION = f"{PROGRAM}: interrupted; no file is left half-written"

#: What a dataset's file begins with, or is called if it is too damaged for that.
HDF5_SIGNATURE = b"\x89HDF\r\n\x1a\n"
HDF5_SUFFIXES = frozenset({".h5", ".hdf5", ".nc"})

app = typer.Typer(
    add_completion=False,
    pretty_exceptions_enable=False,
    epilog=f"Example: {PROGRAM} run configs/demo.toml",
)


def _number(value: float) -> float:
    if not math.isfinite(value):
        message = f"{value} is not a finite number"
        raise typer.BadParameter(message)
    return value


def _positive(value: float) -> float:
    if not _number(value) > 0.0:
        message = f"{value} is not positive"
        raise typer.BadParameter(message)
    return value


def _model(name: str) -> str:
    if name != "xxz":
        reason = "not available in this version" if name in LATER_CHOICES["chain.model"] else "no such model"
        message = f'"{name}": {reason}; available: "xxz"'
        raise typer.BadParameter(message)
    return name


def _anisotropy(value: float) -> float:
    try:
        supported_nu(value)
    except UnsupportedAnisotropy as refusal:
        raise typer.BadParameter(str(refusal)) from refusal
    return value


ConfigFile = Annotated[Path, typer.Argument(metavar="CONFIG", help="TOML file with the settings.")]
Into = Annotated[Path | None, typer.Option("--into", metavar="FOLDER", help="Where the dataset goes.")]
Threads = Annotated[
    int | None,
    typer.Option(metavar="N", min=1, help=f"Processes at once; default: one a core, at most {MOST_THREADS}."),
]
Anisotropy = Annotated[float, typer.Option(help="D: 0 or ±cos(pi/nu), nu = 3..8.", callback=_anisotropy)]
AsJson = Annotated[bool, typer.Option("--json", help="Print JSON.")]


def _show_version(wanted: bool) -> None:
    if wanted:
        try:
            typer.echo(f"{PROGRAM} {version(PROGRAM)}")
        except PackageNotFoundError:
            typer.echo(f"{PROGRAM}, not installed")
        raise typer.Exit


@app.callback()
def _program(
    show_version: Annotated[
        bool, typer.Option("--version", help="Print the version.", callback=_show_version, is_eager=True)
    ] = False,
    debug: Annotated[bool, typer.Option("--debug", help="Show tracebacks.")] = False,
) -> None:
    """Judge hydrodynamics of one-dimensional quantum chains against error-controlled exact dynamics."""


@app.command("run", epilog=f"Example: {PROGRAM} run configs/demo.toml --into results/demo --threads 2")
def run_command(config: ConfigFile, into: Into = None, threads: Threads = None) -> None:
    """Simulate a config with its companions, predict, judge; write dataset and report.

    The folder, results/NAME-OF-CONFIG unless given, holds run.h5, report.html and figures; its path is
    printed. Results do not depend on the number of threads.
    """
    with watching() as watch:
        folder = run(config, into=into, threads=threads or usable_cores(), watch=watch)
    show_findings(folder)
    typer.echo(str(folder))


@app.command("forecast", epilog=f"Example: {PROGRAM} forecast configs/demo.toml --threads 2")
def forecast_command(config: ConfigFile, threads: Threads = None, as_json: AsJson = False) -> None:
    """Estimate bond dimension, time, memory and disk of a run from short pilot runs; nothing is written."""
    with watching() as watch:
        watch.stage("pilot runs", None)
        settings, quench, estimate = forecast(config)
    numbers = cost_numbers(settings, quench, estimate, threads=threads or usable_cores())
    typer.echo(_as_json(numbers) if as_json else aligned(list(cost_rows(numbers))))


@app.command("hydro", epilog=f"Example: {PROGRAM} hydro configs/demo.toml --into results/demo-hydro")
def hydro_command(config: ConfigFile, into: Into = None) -> None:
    """Write the hydrodynamic prediction of a config alone as a dataset.

    The folder, results/NAME-OF-CONFIG-hydro unless given, holds run.h5; its path is printed.
    """
    with watching() as watch:
        watch.stage("prediction", None)
        folder = hydro(config, into=into)
    typer.echo(str(folder))


@app.command("thermo", epilog=f"Example: {PROGRAM} thermo xxz --anisotropy 0.5 --beta 2 --field 0.1")
def thermo_command(
    model: Annotated[str, typer.Argument(metavar="MODEL", help="Model of the chain: xxz.", callback=_model)],
    anisotropy: Anisotropy,
    beta: Annotated[float, typer.Option(help="Inverse temperature.", callback=_positive)],
    field: Annotated[float, typer.Option(help="h of exp[-beta (H - h S^z)].", callback=_number)] = 0.0,
    coupling: Annotated[float, typer.Option(help="J.", callback=_positive)] = 1.0,
    as_json: AsJson = False,
) -> None:
    """Print equilibrium values per site with their numerical errors, from the Bethe ansatz.

    Energies are in the unit of the coupling. The energy is that of H without the field; the specific heat is
    taken at fixed field.
    """
    if beta * coupling > LARGEST_BETA:
        problem = f"--beta {beta:g}: beta times the coupling must be at most {LARGEST_BETA:g}"
        subject = f"{PROGRAM} thermo"
        raise InputError(subject, [problem])
    with threadpool_limits(1):
        state = equilibrium(anisotropy=anisotropy, beta=beta, field=field, coupling=coupling)
    heading = f"{model}, per site"
    typer.echo(_as_json(state.as_dict()) if as_json else aligned(equilibrium_rows(state, heading=heading)))


@app.command("check", epilog=f"Example: {PROGRAM} check configs/demo.toml")
def check_command(
    path: Annotated[Path, typer.Argument(metavar="PATH", help="A config, or a dataset or its folder.")],
) -> None:
    """Check a config, or the integrity of a dataset.

    A good config is printed with all settings in effect. A damaged, altered or incomplete dataset gives exit
    code 4.
    """
    if _is_dataset(path):
        if findings := check_run(path):
            raise VerdictNegative(str(path), findings)
        typer.echo(f"{path}: sound and complete")
    else:
        config = load_config(path)
        typer.echo(f"# {path}: no problems; all settings in effect:\n\n{effective_toml(config)}", nl=False)
        if reason := no_prediction(config):
            typer.echo(f"{path}: without a prediction: {reason}", err=True)


@app.command("report", epilog=f"Example: {PROGRAM} report results/demo")
def report_command(
    dataset: Annotated[Path, typer.Argument(metavar="DATASET", help="The folder of a run, or its run.h5.")],
) -> None:
    """Rebuild report.html and the figures beside a dataset and print the path of the page."""
    with watching() as watch:
        watch.stage("report", None)
        page = write_report(dataset)
    typer.echo(str(page))


@app.command("settings", epilog=f"Example: {PROGRAM} settings > settings.md")
def settings_command() -> None:
    """Print the reference page of every setting of a config, as Markdown."""
    typer.echo(settings_page())


def usable_cores() -> int:
    """Return how many processes a run takes unless told otherwise."""
    cores = len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1
    return min(MOST_THREADS, cores)


def _as_json(numbers: dict[str, Any]) -> str:
    return json.dumps(numbers, indent=2, allow_nan=False)


def _is_dataset(path: Path) -> bool:
    """Whether a path means a dataset, not a config: a folder, an HDF5 file, or a file called like one."""
    if path.is_dir() or path.suffix.lower() in HDF5_SUFFIXES:
        return True
    try:
        if not path.is_file():  # a pipe might never open
            return False
        with path.open("rb") as stream:
            return stream.read(len(HDF5_SIGNATURE)) == HDF5_SIGNATURE
    except (OSError, ValueError):  # the loader says why it cannot be read
        return False


def main(arguments: Sequence[str] | None = None) -> None:
    """Carry out a command line and exit with its code.

    arguments : words after the program's name; those of the process if not given. --debug may stand anywhere.
    """
    words = sys.argv[1:] if arguments is None else arguments
    if arguments is None:
        signal(SIGTERM, default_int_handler)  # a batch system's stop ends companions too, like Ctrl-C
    debug, others = "--debug" in words, set(active_children())
    try:
        outcome = app([word for word in words if word != "--debug"], prog_name=PROGRAM, standalone_mode=False)
        if sys.stdout is not None:  # it is None where the caller closed it
            sys.stdout.flush()
        code, message = (INTERRUPTED, INTERRUPTION) if outcome == INTERRUPTED else (outcome or DONE, "")
    except (Exception, KeyboardInterrupt) as error:
        if debug:
            traceback.print_exc()
        code, message = answer(error)
    for worker in set(active_children()) - others:  # companions whose results nobody will fetch
        worker.terminate()
    if message:
        typer.echo(message, err=True)
    sys.exit(code)


def answer(error: BaseException) -> tuple[int, str]:
    """Return the exit code for an exception and what to tell the user."""
    if isinstance(error, TnquenchError):
        return error.exit_code, str(error) if error.exit_code != DEFECT else f"{PROGRAM}: {error}"
    if hasattr(error, "format_message"):  # a complaint about the command line, whatever its class
        return BAD_INPUT, _usage_message(error)
    if isinstance(error, KeyboardInterrupt | typer.Abort):
        return INTERRUPTED, INTERRUPTION
    if isinstance(error, OSError) and error.errno in (ENOSPC, EDQUOT):
        return DEFECT, f"{PROGRAM}: {error.strerror}"
    if isinstance(error, MemoryError):
        return DEFECT, f"{PROGRAM}: out of memory; {PROGRAM} forecast CONFIG estimates what a run needs"
    if isinstance(error, BrokenProcessPool):
        return DEFECT, f"{PROGRAM}: a companion's process was ended from outside, often for lack of memory"
    said = " ".join(str(error).split()) or "no message"
    advice = "please run the same command with --debug and report what it prints"
    return DEFECT, f"{PROGRAM}: a defect of the program ({type(error).__name__}: {said}); {advice}"


def _usage_message(error: Any) -> str:
    """Return a complaint about the command line as one line that names the help to read."""
    command = error.ctx.command_path if error.ctx else PROGRAM
    return f"{command}: {' '.join(error.format_message().split())} (see {command} --help)"
