"""Reads a sweep: every point a checked config of its own, or every problem at once and where it is."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from tnquench.config.cluster import Cluster
from tnquench.config.load import config_text, parsed, read_config, read_tables
from tnquench.config.messages import MOST_LINES
from tnquench.config.schema import Config
from tnquench.config.sweep import SweepPoint, at_point, is_sound, sweep_points
from tnquench.errors import InputError


@dataclass(frozen=True)
class Point:
    """One point of a sweep: name of its folder, values of the swept settings, and its config, without
    [sweep]."""

    name: str
    settings: Mapping[str, Any]
    config: Config


@dataclass(frozen=True)
class LoadedSweep:
    """All points of a sweep, in the order of its lists, and where they are to run."""

    points: tuple[Point, ...]
    cluster: Cluster


def load_sweep(path: str | Path, *, allow_outside: bool = False) -> LoadedSweep:
    """Read the sweep in a TOML file.

    allow_outside : as of `load_config`
    Raises InputError with one line per problem of the file, of [sweep], and of each point; a problem of all
    points is told once.
    """
    text, folder = config_text(path), Path(path).parent
    tables = parsed(text, subject=str(path))
    sweep = tables.get("sweep")
    if sweep is None or not is_sound(sweep):
        read_config(text, subject=str(path), folder=folder, allow_outside=allow_outside)  # tells all
    plans = list(sweep_points(sweep)) if sweep is not None else []
    if not plans:
        advice = "name settings and values in [sweep.grid] or [sweep.together], or use: tnquench run"
        raise InputError(str(path), [f"[sweep]: missing, or without any setting; {advice}"])
    base = {name: table for name, table in tables.items() if name != "sweep"}
    points, problems = [], dict[str, tuple[str, ...]]()
    for plan in plans:
        try:
            config = read_tables(
                at_point(base, plan.settings), subject=plan.name, folder=folder, allow_outside=allow_outside
            )
        except InputError as refusal:
            problems[plan.name] = refusal.problems
        else:
            points.append(Point(plan.name, plan.settings, config))
    if problems:
        raise InputError(str(path), list(_told(problems, plans)))
    return LoadedSweep(tuple(points), points[0].config.cluster)


def _told(problems: Mapping[str, tuple[str, ...]], plans: Iterable[SweepPoint]) -> Iterable[str]:
    """Return the lines of all points; those of every point come first, once, without a point's name."""
    shared = set.intersection(*(set(problems.get(plan.name, ())) for plan in plans))
    first = next(iter(problems.values()))
    lines = [line for line in first if line in shared]
    for name, found in problems.items():
        lines += [f"point {name}: {line}" for line in found if line not in shared]
    if len(lines) > MOST_LINES:
        lines = [*lines[:MOST_LINES], f"{len(lines) - MOST_LINES} more problems; mend these first"]
    return lines
