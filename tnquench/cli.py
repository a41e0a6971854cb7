"""The commands: arguments in, one documented function each, exit codes out. Nothing else ends the process.

Results go to standard output, everything else to standard error. Exit codes: 0 done, 1 a failure of the
program, 2 bad input, 3 stopped with checkpoints, 4 a check whose answer is no, 130 interrupted.
"""

from __future__ import annotations

import json
import sys
import traceback
from collections.abc import Sequence
from concurrent.futures.process import BrokenProcessPool
from errno import EACCES, EDQUOT, EEXIST, EFBIG, EIO, EISDIR, ENOENT, ENOSPC, ENOTDIR, EPERM, EROFS, ESTALE
from importlib.metadata import PackageNotFoundError, version
from multiprocessing import active_children
from pathlib import Path
from signal import SIG_IGN, SIGTERM, SIGUSR1, default_int_handler, signal
from typing import Annotated, Any

import typer
from threadpoolctl import threadpool_limits

from tnquench.assemble import no_prediction
from tnquench.bethe.thermo import THERMO_MODELS, thermo
from tnquench.bethe.transport import transport
from tnquench.config.document import effective_toml, settings_page
from tnquench.config.load import load_config
from tnquench.config.points import load_sweep
from tnquench.dataset.integrity import check_run
from tnquench.errors import TnquenchError, VerdictNegative
from tnquench.report.page import write_report
from tnquench.run import forecast, forecast_stretched, hydro
from tnquench.terminal.cost import cost_numbers, cost_rows, with_study
from tnquench.terminal.display import watching
from tnquench.terminal.judging import judge_command
from tnquench.terminal.options import AllowOutside, AsJson, ConfigFile, Into, Threads, usable_cores
from tnquench.terminal.refining import refine_command
from tnquench.terminal.running import run_command
from tnquench.terminal.sweeping import sweep_command
from tnquench.terminal.table import aligned, equilibrium_rows
from tnquench.terminal.thermo import Scan, answer_thermo, plot_scan, scan_rows

PROGRAM = "tnquench"

#: Exit codes that no exception of ours carries.
DONE, DEFECT, BAD_INPUT, INTERRUPTED = 0, 1, 2, 130

#: Errors of a file system that is full, read-only, gone, or failing: no defect of the program.
DISK_ERRORS = frozenset(
    {ENOSPC, EDQUOT, EFBIG, EROFS, ENOENT, ENOTDIR, EISDIR, EEXIST, EACCES, EPERM, EIO, ESTALE}
)

INTERRUPTION = f"{PROGRAM}: interrupted; no file is left half-written"

#: What a dataset's file begins with, or is called if it is too damaged for that.
HDF5_SIGNATURE = b"\x89HDF\r\n\x1a\n"
HDF5_SUFFIXES = frozenset({".h5", ".hdf5", ".nc"})

app = typer.Typer(
    add_completion=False,
    pretty_exceptions_enable=False,
    epilog=f"Example: {PROGRAM} run configs/demo.toml",
)


def _model(name: str) -> str:
    if name not in THERMO_MODELS:
        message = f'"{name}": no such model; available: {", ".join(THERMO_MODELS)}'
        raise typer.BadParameter(message)
    return name


def _scan(text: str) -> Scan:
    try:
        return Scan.parse(text)
    except ValueError as refusal:
        raise typer.BadParameter(str(refusal)) from refusal


def _setting(meaning: str) -> Any:
    """Return an option that takes a number or a scan."""
    return typer.Option(help=meaning, parser=_scan, metavar="X", show_default=False)


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


app.command("run", epilog=f"Example: {PROGRAM} run configs/demo.toml --into results/demo --threads 2")(
    run_command
)


@app.command("forecast", epilog=f"Example: {PROGRAM} forecast configs/demo.toml --threads 2")
def forecast_command(
    config: ConfigFile, threads: Threads = None, as_json: AsJson = False, allow_outside: AllowOutside = False
) -> None:
    """Estimate bond dimension, time, memory and disk of a run from short pilot runs; nothing is written.

    Of a sweep the first point is meant.
    """
    with watching() as watch:
        watch.stage("pilot runs", None)
        settings, quench, estimate = forecast(config, allow_outside=allow_outside)
        stretched = forecast_stretched(settings)
    cores = threads or usable_cores()
    numbers = with_study(
        cost_numbers(settings, quench, estimate, threads=cores),
        {factor: cost_numbers(*costs, threads=cores) for factor, costs in stretched.items()},
    )
    typer.echo(_as_json(numbers) if as_json else aligned(list(cost_rows(numbers))))


@app.command("hydro", epilog=f"Example: {PROGRAM} hydro configs/demo.toml --into results/demo-hydro")
def hydro_command(config: ConfigFile, into: Into = None, allow_outside: AllowOutside = False) -> None:
    """Write the hydrodynamic prediction of a config alone as a dataset.

    The folder, results/NAME-OF-CONFIG-hydro unless given, holds run.h5; its path is printed.
    """
    with watching() as watch:
        watch.stage("prediction", None)
        folder = hydro(config, into=into, allow_outside=allow_outside)
    typer.echo(str(folder))


@app.command("thermo", epilog=f"Example: {PROGRAM} thermo xxz --anisotropy 0.5 --beta 0.1:5:50")
def thermo_command(
    model: Annotated[
        str, typer.Argument(metavar="MODEL", help=f"{', '.join(THERMO_MODELS)}.", callback=_model)
    ],
    beta: Annotated[Scan | None, _setting("Inverse temperature.")] = None,
    anisotropy: Annotated[Scan | None, _setting("D (xxz).")] = None,
    coupling: Annotated[Scan | None, _setting("J (xxz, ising); default 1.")] = None,
    transverse_field: Annotated[Scan | None, _setting("g (ising).")] = None,
    hopping: Annotated[Scan | None, _setting("t_h (fermion, hubbard); default 1.")] = None,
    repulsion: Annotated[Scan | None, _setting("V (fermion), U (hubbard).")] = None,
    field: Annotated[Scan | None, _setting("h of exp[-beta (H - h S^z)] (xxz, hubbard).")] = None,
    mu: Annotated[Scan | None, _setting("mu of exp[-beta (H - mu N)] (fermion, hubbard).")] = None,
    wants_transport: Annotated[
        bool, typer.Option("--transport", help="Light cone, covariances and Drude weights instead.")
    ] = False,
    as_json: AsJson = False,
    plot: Annotated[
        Path | None, typer.Option(metavar="FILE", help="Save a plot of a scan: svg, pdf or png.")
    ] = None,
) -> None:
    """Print equilibrium values per site with their numerical errors.

    X is a number, or FROM:TO:COUNT for a scan of one option. Energies are in the unit of J or t_h. The energy
    is that of H without field and mu; the specific heat is taken at fixed field and mu. Magnetisation is that
    of S^z, for ising of sigma^z; the susceptibility is its derivative by h (ising: by g; fermion: that of the
    density by mu).
    """
    options = {
        "beta": beta, "anisotropy": anisotropy, "coupling": coupling, "transverse_field": transverse_field,
        "hopping": hopping, "repulsion": repulsion, "field": field, "mu": mu,
    }  # fmt: skip
    with threadpool_limits(1):
        found = answer_thermo(model, options, solve=transport if wants_transport else thermo)
    if plot is not None:
        plot_scan(found, plot)
    for failure in found.failures:
        typer.echo(f"{PROGRAM} thermo: {failure}", err=True)
    if as_json:
        typer.echo(_as_json(found.as_dict()))
    elif found.scanned:
        typer.echo(aligned(scan_rows(found)))
    else:
        unit = {"coupling": "J", "hopping": "t_h"}[THERMO_MODELS[model].scale]
        typer.echo(aligned(equilibrium_rows(found.found[0], heading=f"{model}, per site", unit=unit)))


@app.command("check", epilog=f"Example: {PROGRAM} check configs/demo.toml")
def check_command(
    path: Annotated[Path, typer.Argument(metavar="PATH", help="A config, or a dataset or its folder.")],
    allow_outside: AllowOutside = False,
) -> None:
    """Check a config, or the integrity of a dataset.

    A good config is printed with all settings in effect, of a sweep those of its first point. A damaged,
    altered or incomplete dataset gives exit code 4.
    """
    if _is_dataset(path):
        if findings := check_run(path):
            raise VerdictNegative(str(path), findings)
        typer.echo(f"{path}: sound and complete")
    else:
        config = load_config(path, allow_outside=allow_outside)
        if config.sweep.points:
            load_sweep(path, allow_outside=allow_outside)
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


app.command("judge", epilog=f"Example: {PROGRAM} judge ghd.csv --against results/demo --allow euler")(
    judge_command
)


app.command("refine", epilog=f"Example: {PROGRAM} refine results/demo --weight 1e-9")(refine_command)


app.command("sweep", epilog=f"Example: {PROGRAM} sweep configs/sweep.toml --into results/sweep --jobs 4")(
    sweep_command
)


@app.command("settings", epilog=f"Example: {PROGRAM} settings > settings.md")
def settings_command() -> None:
    """Print the reference page of every setting of a config, as Markdown."""
    typer.echo(settings_page())


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
    if arguments is None:
        signal(SIGTERM, SIG_IGN)  # the code is settled; asked again, the process still ends with it
        signal(SIGUSR1, SIG_IGN)
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
    if isinstance(error, OSError) and error.errno in DISK_ERRORS:
        place = error.filename2 or error.filename
        where = f": {place}" if place else ""
        return DEFECT, f"{PROGRAM}: {error.strerror}{where}; what was written before is whole"
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
