"""How each point of a sweep stands, read from its folder alone."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from contextlib import suppress
from dataclasses import dataclass, field
from pathlib import Path
from signal import SIGINT, SIGTERM, SIGUSR1
from typing import Any

from tnquench.cluster.log import LastTry, last_try, said
from tnquench.cluster.occupied import occupant
from tnquench.cluster.tasks import (
    DONE,
    INTERRUPTED,
    LOG_NAME,
    MAIN,
    STOPPED,
    log_name,
    quenches_of,
)
from tnquench.config.changes import changes, forbidden, shortened
from tnquench.config.load import read_config
from tnquench.config.points import Point
from tnquench.config.schema import Config
from tnquench.dataset.checkpoint import read_header
from tnquench.dataset.reader import Run, open_run
from tnquench.dataset.variables import FILE_NAME
from tnquench.errors import InputError
from tnquench.report.page import REPORT_NAME

CHECKPOINTS = "checkpoints"

#: Numbers of a complete dataset that an index shows: first time at which a deviation is resolved (none if it
#: never is), largest numerical error of any observable, largest bond dimension, time taken in seconds.
HEADLINES = ("first_resolved_time", "largest_numerical_error", "bond_dimension", "wall_seconds")

#: Exit codes after which a task goes on with its next try; a signal may come before the program answers it.
NO_FAILURES = (DONE, STOPPED, INTERRUPTED, -SIGINT, -SIGTERM, -SIGUSR1)

#: States of a point, in the order of the table's last line.
STATES = ("done", "running", "queued", "stopped", "waiting", "failed")


@dataclass(frozen=True)
class Standing:
    """How one point stands.

    state  : of STATES
    time   : that its main quench has reached; until : that it goes to (both in 1/energy)
    detail : what more there is to say; lines : last lines of the log of a failure
    numbers : headline numbers of a point that is done
    """

    name: str
    folder: Path
    state: str
    time: float
    until: float
    detail: str = ""
    lines: tuple[str, ...] = ()
    numbers: Mapping[str, Any] = field(default_factory=dict)


def standing(point: Point, folder: Path, *, known: Mapping[str, Any] | None, queued: bool) -> Standing:
    """Return how a point stands.

    known  : its headline numbers, where its dataset is known to be complete and of this very config
    queued : whether a batch system has it in its queue
    """
    until = point.config.evolution.until
    if known is not None:
        return Standing(point.name, folder, "done", until, until, numbers=known)
    found = _dataset(point.config, folder)
    if isinstance(found, Run) and not (folder / REPORT_NAME).exists():
        found = ""  # stopped between dataset and report
    if isinstance(found, Run):
        return Standing(point.name, folder, "done", until, until, numbers=headline(found))
    times = times_reached(folder)
    reached = min(times.get(MAIN, 0.0), until)

    def stands(state: str, detail: str = "", lines: Iterable[str] = ()) -> Standing:
        return Standing(point.name, folder, state, reached, until, detail, tuple(lines))

    if (holder := occupant(folder)) is not None:
        return stands("running", f"on {holder.host}, process {holder.pid}")
    if found:
        return stands("failed", found)
    tries = {log: last_try(folder / log) for log in _logs(point.config)}
    failures = {
        log: attempt for log, attempt in tries.items() if attempt is not None and _is_failure(attempt)
    }
    if queued:
        return stands("queued")
    for log, attempt in failures.items():
        return stands("failed", f"{said(attempt.code or 0)}, see {folder / log}", attempt.lines)
    if (whole := tries[LOG_NAME]) and whole.code == DONE and not (folder / FILE_NAME).exists():
        return stands("failed", f"ended as done but left no {FILE_NAME}", whole.lines)
    return stands("stopped" if times else "waiting", _parts(point.config, folder))


def headline(run: Run) -> dict[str, Any]:
    """Return the `HEADLINES` of a dataset, None where it has none."""
    firsts = [float(budget.attrs.get("first_resolved_time", "nan")) for budget in run.budget.values()]
    resolved = [first for first in firsts if first == first]  # nan: never
    errors = [float(budget["numerical"].max()) for budget in run.budget.values() if "numerical" in budget]
    bond, seconds = int(run.quantum["bond_dimension"].max()), float(run.provenance["wall_seconds"])
    values = (min(resolved, default=None), max(errors, default=None), bond, seconds)
    return dict(zip(HEADLINES, values, strict=True))


def times_reached(folder: Path) -> dict[str, float]:
    """Return the times that the quenches kept in a run folder have reached, by name."""
    newest: dict[str, tuple[float, float]] = {}
    for file in (folder / CHECKPOINTS).glob("*-*.h5"):
        if file.name.startswith("start-") or file.name.endswith(".previous.h5"):
            continue
        header = read_header(file)
        if header is not None:
            try:
                written = file.stat().st_mtime
            except OSError:  # replaced at this very moment
                continue
            name = str(header["quench"])
            newest[name] = max(newest.get(name, (0.0, 0.0)), (written, float(header["time"])))
    return {name: time for name, (_, time) in newest.items()}


def checkpoint_marks(folder: Path) -> dict[str, tuple[int, int]]:
    """Return size and date of every checkpoint of a run and its stretched runs: they tell if it comes on."""
    marks = {}
    for file in folder.glob(f"**/{CHECKPOINTS}/*.h5"):
        with suppress(OSError):  # replaced at this very moment
            found = file.stat()
            marks[str(file.relative_to(folder))] = (found.st_size, found.st_mtime_ns)
    return marks


def _dataset(config: Config, folder: Path) -> Run | str:
    """Return the dataset of a folder if it is complete and of this config; else why not, nothing where the
    run can simply go on."""
    file = folder / FILE_NAME
    if not file.exists():
        return ""
    try:
        run = open_run(file)
        stored = read_config(str(run.provenance["config_toml"]), subject=str(file))
    except InputError as error:
        return f"{FILE_NAME}: {error.problems[0]}"
    changed = changes(stored, config)
    if problems := [*forbidden(changed), *shortened(changed)]:
        return f"{FILE_NAME} is of another config: {problems[0]}"
    if changed or (config.stretch.factors and not run.stretch.sizes):
        return ""
    return run


def _logs(config: Config) -> list[str]:
    return [LOG_NAME, *(log_name(quench) for quench in quenches_of(config))]


def _is_failure(attempt: LastTry) -> bool:
    return attempt.code is not None and attempt.code not in NO_FAILURES


def _parts(config: Config, folder: Path) -> str:
    """Return how many quenches are through, where there are several."""
    names = quenches_of(config)
    until = config.evolution.until * (1.0 - 1e-12)
    through = sum(time >= until for name, time in times_reached(folder).items() if name in names)
    return f"{through} of {len(names)} quenches through" if through and len(names) > 1 else ""
