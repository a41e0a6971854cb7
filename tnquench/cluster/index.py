"""The index of a sweep: one row a point in SWEEPFOLDER/index.csv, which a notebook or spreadsheet can read.

It also spares reading every dataset again: a row counts as long as its dataset has the same size and date and
its point the same config.
"""

from __future__ import annotations

import csv
import hashlib
import io
import os
from collections.abc import Iterable, Mapping, Sequence
from pathlib import Path
from typing import Any

from tnquench.cluster.status import HEADLINES, Standing
from tnquench.config.cluster import Cluster
from tnquench.config.document import effective_toml
from tnquench.config.notation import written
from tnquench.config.points import Point
from tnquench.config.sweep import Sweep
from tnquench.dataset.variables import FILE_NAME

INDEX_NAME = "index.csv"

#: Columns before and behind those of the swept settings.
FIRST, LAST = ("point", "state"), ("time", "until", *HEADLINES, "path", "modified", "bytes", "config")


def write_index(folder: Path, points: Sequence[Point], standings: Sequence[Standing]) -> Path:
    """Write the index of a sweep's folder, whole or not at all, and return its path.

    Raises OSError if it cannot be written.
    """
    swept = list(dict.fromkeys(key for point in points for key in point.settings))
    text = io.StringIO()
    table = csv.DictWriter(text, [*FIRST, *swept, *LAST], restval="", lineterminator="\n")
    table.writeheader()
    for point, stands in zip(points, standings, strict=True):
        settings = {key: _cell(value) for key, value in point.settings.items()}
        table.writerow({**_row(point, stands), **settings})
    path = folder / INDEX_NAME
    partial = path.with_name(f".{INDEX_NAME}.{os.getpid()}")
    try:
        partial.write_text(text.getvalue(), encoding="utf-8")
        partial.replace(path)
    finally:
        partial.unlink(missing_ok=True)
    return path


def known_numbers(folder: Path, points: Iterable[Point]) -> dict[str, dict[str, float | None]]:
    """Return the headline numbers of the points whose rows still hold, by point; none without an index."""
    try:
        text = (folder / INDEX_NAME).read_text(encoding="utf-8")
        rows = {row["point"]: row for row in csv.DictReader(io.StringIO(text))}
    except (OSError, ValueError, KeyError, csv.Error):
        return {}
    known = {}
    for point in points:
        row = rows.get(point.name)
        if row is None or row.get("state") != "done" or not row.get("modified"):
            continue
        mark = {**_file_mark(folder / point.name), "config": config_mark(point)}
        if mark == {key: row.get(key) for key in mark}:
            try:
                known[point.name] = {
                    key: float(row[key]) if row[key] else None for key in HEADLINES if key in row
                }
            except ValueError:
                continue
    return known


def config_mark(point: Point) -> str:
    """Return a digest of the settings of a point that change numbers."""
    plain = point.config.model_copy(update={"title": "", "cluster": Cluster(), "sweep": Sweep()})
    return hashlib.sha256(effective_toml(plain).encode()).hexdigest()[:16]


def _row(point: Point, stands: Standing) -> dict[str, Any]:
    row: dict[str, Any] = {
        "point": point.name,
        "state": stands.state,
        "time": stands.time,
        "until": stands.until,
        "path": point.name,
        **{key: "" if value is None else value for key, value in stands.numbers.items()},
    }
    if stands.state == "done":
        row |= {**_file_mark(stands.folder), "config": config_mark(point)}
    return row


def _file_mark(folder: Path) -> Mapping[str, str]:
    """Return size and date of a folder's dataset; empty without one."""
    try:
        found = (folder / FILE_NAME).stat()
    except OSError:
        return {"modified": "", "bytes": ""}
    return {"modified": str(found.st_mtime_ns), "bytes": str(found.st_size)}


def _cell(value: Any) -> Any:
    return value if isinstance(value, (int, float, str)) and not isinstance(value, bool) else written(value)
