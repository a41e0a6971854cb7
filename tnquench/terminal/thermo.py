"""Equilibrium values at one point or along a scan: from options to numbers, rows and a plot."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from pathlib import Path

import matplotlib as mpl
import numpy as np
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure

from tnquench.bethe.functions import ThermodynamicFunctions
from tnquench.bethe.thermo import THERMO_MODELS, thermo
from tnquench.errors import ConvergenceError, InputError
from tnquench.report.canvas import FAINT, QUANTUM, STYLE
from tnquench.terminal.table import with_digits

#: Largest beta times the unit of energy; beyond it the solver meets the ground state to rounding.
LARGEST_BETA = 1000.0

#: Most points of a scan.
MOST_POINTS = 10_000

#: What a plot may be saved as.
PLOT_SUFFIXES = (".svg", ".pdf", ".png")

#: Errors below this are shown as this in the rows of a scan, which would grow too wide.
LEAST_SHOWN = 1e-8

SUBJECT = "tnquench thermo"


@dataclass(frozen=True)
class Scan:
    """Values of one option: a number, or FROM:TO:COUNT for equidistant ones, both ends included."""

    values: tuple[float, ...]

    @classmethod
    def parse(cls, text: str) -> Scan:
        """Return the values that `text` means. Raises ValueError with one sentence."""
        parts = text.split(":")
        if len(parts) == 1:
            return cls((_finite(text),))
        if len(parts) != 3 or not parts[2].isdecimal() or not 2 <= int(parts[2]) <= MOST_POINTS:
            message = f"{text} is neither a number nor FROM:TO:COUNT with a count from 2 to {MOST_POINTS}"
            raise ValueError(message)
        return cls(tuple(np.linspace(_finite(parts[0]), _finite(parts[1]), int(parts[2])).tolist()))


def _finite(text: str) -> float:
    """Return the number that `text` means."""
    try:
        value = float(text)
    except ValueError:
        message = f"{text!r} is not a number"
        raise ValueError(message) from None
    if not math.isfinite(value):
        message = f"{value} is not a finite number"
        raise ValueError(message)
    return value


@dataclass(frozen=True)
class ThermoAnswer:
    """Functions at every point of a scan, or at a single one.

    scanned : name of the setting that varies, empty at a single point; points : its values
    functions : one a point, None where the solver found no answer; failures : the reasons, in one line each
    """

    model: str
    scanned: str
    points: tuple[float, ...]
    functions: tuple[ThermodynamicFunctions | None, ...]
    failures: tuple[str, ...]

    @property
    def found(self) -> tuple[ThermodynamicFunctions, ...]:
        """The points that were solved."""
        return tuple(each for each in self.functions if each is not None)

    def as_dict(self) -> dict[str, object]:
        """Return numbers by name, or along a scan lists of numbers with None where there is no answer."""
        if not self.scanned:
            return dict(self.found[0].as_dict())
        rows = [None if each is None else each.as_dict() for each in self.functions]
        names = self.found[0].as_dict()
        return {
            self.scanned: list(self.points),
            **{name: [None if row is None else row[name] for row in rows] for name in names},
        }


def answer_thermo(
    model: str, options: Mapping[str, Scan | None], *, solve: Callable[..., ThermodynamicFunctions] = thermo
) -> ThermoAnswer:
    """Solve one point, or every point of the option that is a scan.

    options : beta and all settings of any model by name, None where not given
    solve : `thermo` or `transport`
    Raises InputError with one line per problem, ConvergenceError if no point at all has an answer.
    """
    given = {name: scan for name, scan in options.items() if scan is not None}
    if problems := _problems(model, given):
        raise InputError(SUBJECT, problems, consequence="")
    scanned = next((name for name, scan in given.items() if len(scan.values) > 1), "")
    fixed = {name: scan.values[0] for name, scan in given.items() if name != scanned}
    points = given[scanned].values if scanned else (fixed["beta"],)
    functions: list[ThermodynamicFunctions | None] = []
    failures = []
    for point in points:
        settings = {**fixed, scanned: point} if scanned else fixed
        try:
            functions.append(solve(model, **settings))
        except (ConvergenceError, InputError, ValueError) as failure:
            if not scanned:
                raise _refusal(failure) from failure
            functions.append(None)
            failures.append(f"{scanned} = {point:.6g}: {' '.join(str(failure).split())}")
    if not any(functions):
        raise InputError(SUBJECT, failures[:1], consequence="no point has an answer")
    return ThermoAnswer(model, scanned, points, tuple(functions), tuple(failures))


def _refusal(failure: Exception) -> Exception:
    """Return an exception that the command line knows."""
    if isinstance(failure, ConvergenceError | InputError):
        return failure
    return InputError(SUBJECT, [" ".join(str(failure).split())], consequence="")


def _problems(model: str, given: Mapping[str, Scan]) -> list[str]:
    """Return one line per option that is missing, foreign or out of bounds."""
    entry = THERMO_MODELS[model]
    allowed = ("beta", *entry.settings)
    problems = [f"{option(name)}: missing; {model} needs it" for name in entry.required if name not in given]
    problems += ["--beta: missing"] if "beta" not in given else []
    problems += [
        f"{option(name)}: not an option of {model}, which takes {', '.join(map(option, allowed))}"
        for name in given
        if name not in allowed
    ]
    problems += [
        f"{option(name)} {value:g}: must be positive"
        for name in ("beta", "coupling", "hopping")
        if name in given
        for value in given[name].values
        if not value > 0.0
    ][:3]
    scans = [name for name, scan in given.items() if len(scan.values) > 1]
    if len(scans) > 1:
        problems.append(f"{' and '.join(map(option, scans))}: only one option may be a scan")
    unit = given.get(entry.scale, Scan((1.0,)))
    if "beta" in given and max(given["beta"].values) * max(unit.values) > LARGEST_BETA:
        limit = f"beta times the {entry.scale} must be at most {LARGEST_BETA:g}"
        problems.append(f"--beta {max(given['beta'].values):g}: {limit}")
    return problems


def option(name: str) -> str:
    """Return the option of a setting."""
    return "--" + name.replace("_", "-")


def scan_rows(answer: ThermoAnswer) -> list[tuple[str, ...]]:
    """Return the values along a scan as rows, to the digits that their errors leave, and their errors."""
    names = list(answer.found[0].values)
    rows: list[tuple[str, ...]] = [(answer.scanned, *(f" {name.replace('_', ' ')}" for name in names))]
    for point, each in zip(answer.points, answer.functions, strict=True):
        cells = (
            [" -"] * len(names)
            if each is None
            else [with_digits(each.values[name], max(each.errors[name], LEAST_SHOWN)) for name in names]
        )
        rows.append((f"{point:.6g}", *cells))
    errors = [max(each.errors[name] for each in answer.found) for name in names]
    return [*rows, ("error", *(f" {error:.0e}" for error in errors))]


def plot_scan(answer: ThermoAnswer, file: Path) -> None:
    """Save a figure of every function along a scan, with a band of its error, as svg, pdf or png.

    Raises InputError for a single point, another kind of file, or a place that cannot be written to.
    """
    if not answer.scanned:
        problem = "--plot: needs a scan, for instance --beta 0.1:5:50"
        raise InputError(SUBJECT, [problem], consequence="")
    if file.suffix.lower() not in PLOT_SUFFIXES:
        problem = f"--plot {file}: must end in {', '.join(PLOT_SUFFIXES)}"
        raise InputError(SUBJECT, [problem], consequence="")
    with mpl.rc_context(STYLE):
        figure = _scan_figure(answer)
        try:
            figure.savefig(file)
        except OSError as error:
            problem = f"--plot {file}: cannot be written ({error.strerror})"
            raise InputError(SUBJECT, [problem], consequence="") from error


def _scan_figure(answer: ThermoAnswer) -> Figure:
    names = list(answer.found[0].values)
    columns = 3
    rows = -(-len(names) // columns)
    figure = Figure(figsize=(3.1 * columns, 2.2 * rows), layout="constrained", facecolor="white")
    FigureCanvasAgg(figure)
    for axes, name in zip(figure.subplots(rows, columns, squeeze=False).ravel(), names, strict=False):
        values = np.array([np.nan if each is None else each.values[name] for each in answer.functions])
        errors = np.array([np.nan if each is None else each.errors[name] for each in answer.functions])
        axes.fill_between(answer.points, values - errors, values + errors, color=FAINT, alpha=0.5, lw=0.0)
        axes.plot(answer.points, values, color=QUANTUM, marker="." if len(answer.points) < 30 else "")
        middle = 0.5 * float(np.nanmax(values) + np.nanmin(values))
        if np.nanmax(values) - np.nanmin(values) < LEAST_SHOWN:  # nothing but rounding would fill the panel
            axes.set_ylim(middle - 0.5, middle + 0.5)
        axes.ticklabel_format(axis="y", useOffset=False)
        axes.set_title(name.replace("_", " "))
        axes.set_xlabel(answer.scanned.replace("_", " "))
    for unused in figure.axes[len(names) :]:
        unused.remove()
    figure.suptitle(f"{answer.model}, per site, in equilibrium", x=0.01, ha="left")
    return figure
