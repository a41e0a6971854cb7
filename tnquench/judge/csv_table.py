"""Candidates as text: one row a point, a header with the names of the columns."""

from __future__ import annotations

import csv
import difflib
from array import array
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field

import numpy as np

from tnquench.conventions import Reals
from tnquench.judge.points import (
    COORDINATES,
    MOST_POINTS,
    OBSERVABLES,
    Complaints,
    Points,
    check_points,
)

#: As much of a bad cell as a message shows, and as much of a name as is compared with the known ones.
SHOWN, COMPARED = 24, 40
#: More columns, longer lines or more lines (comments and empty ones included) are no table of points.
MOST_COLUMNS, LONGEST_LINE, MOST_LINES = 1000, 100_000, 2 * MOST_POINTS

EXPECTED = "time,x,energy_density[,energy_current,charge_density,...]"


@dataclass
class _Column:
    """What one observable's column holds so far: line, time, position and value of each point."""

    lines: array[float] = field(default_factory=lambda: array("d"))
    times: array[float] = field(default_factory=lambda: array("d"))
    positions: array[float] = field(default_factory=lambda: array("d"))
    values: array[float] = field(default_factory=lambda: array("d"))


def read_csv(text: str, *, subject: str) -> tuple[dict[str, Points], tuple[str, ...]]:
    """Return the points of each observable in a CSV text, and what was left aside.

    text : a header `time,x,energy_density[,...]` and one row a (time, x) point in any order; lines that are
    empty or begin with # are skipped, and an empty cell means that the observable is not given at that point
    Raises InputError with one line a problem.
    """
    complaints = Complaints()
    rows = _rows(text, complaints)
    header = next(rows, None)
    if header is None:
        complaints.add(f"no header; begin with the line {EXPECTED}")
        complaints.raise_if_any(subject)
        return {}, ()
    names = [cell.strip() for cell in header[1]]
    if len(names) > MOST_COLUMNS:
        complaints.add(f"line {header[0]}: {len(names)} columns; allowed: {MOST_COLUMNS}")
        complaints.raise_if_any(subject)
    if foreign := _foreign_separator(names):
        complaints.add(f"line {header[0]}: separate columns by commas, not by {foreign}")
        complaints.raise_if_any(subject)
    remarks = check_names(names, complaints)
    complaints.raise_if_any(subject)
    fields = _points(names, rows, complaints)
    complaints.raise_if_any(subject)
    return fields, remarks


def check_names(names: Sequence[str], complaints: Complaints, *, what: str = "column") -> tuple[str, ...]:
    """Note missing, repeated and misspelt names; return a remark on what is ignored.

    names : of columns or variables; what : which of the two
    """
    for name in COORDINATES:
        if name not in names:
            complaints.add(f'no {what} "{name}"; found: {_listed(names)}{_near(name, names)}')
    for twice in sorted({name for name in names if name and names.count(name) > 1}):
        complaints.add(f'{what} "{twice}" stands {names.count(twice)} times; keep one')
    known = {*COORDINATES, *OBSERVABLES}
    unknown = [name for name in names if name and name not in known]
    misspelt = {
        name: close[0]
        for name in unknown
        if len(name) <= COMPARED and (close := difflib.get_close_matches(name, known, n=1, cutoff=0.8))
    }
    for name, near in misspelt.items():
        complaints.add(f'{what} "{_short(name)}" is unknown; did you mean "{near}"?')
    if not any(name in OBSERVABLES for name in names) and not misspelt:
        complaints.add(f"no observable among the {what}s; allowed: {', '.join(OBSERVABLES)}")
    ignored = [name for name in unknown if name not in misspelt]
    if not ignored:
        return ()
    return (f"{what}{'s' if len(ignored) > 1 else ''} without a meaning here, ignored: {_listed(ignored)}",)


def _rows(text: str, complaints: Complaints) -> Iterator[tuple[int, list[str]]]:
    """Yield the number and the cells of each line that says something."""
    for number, line in enumerate(_lines(text), start=1):
        if number > MOST_LINES:
            complaints.add(f"line {number}: more than {MOST_LINES} lines; judge a part of them")
            return
        if len(line) > LONGEST_LINE:
            complaints.add(f"line {number}: longer than {LONGEST_LINE} characters", "long")
            continue
        if not line.strip() or line.lstrip().startswith("#"):
            continue
        try:
            yield number, next(csv.reader([line]))
        except (csv.Error, StopIteration):
            complaints.add(f"line {number}: cannot be split into cells; separate them by commas", "split")


def _lines(text: str) -> Iterator[str]:
    """Yield the lines of a text one by one, without a list of all."""
    mark, start = "\n" if "\n" in text else "\r", 0
    while start < len(text):
        end = text.find(mark, start)
        end = len(text) if end < 0 else end
        yield text[start:end].removesuffix("\r")
        start = end + 1


def _points(
    names: list[str], rows: Iterator[tuple[int, list[str]]], complaints: Complaints
) -> dict[str, Points]:
    columns = {name: _Column() for name in names if name in OBSERVABLES}
    for count, (number, cells) in enumerate(rows, start=1):
        if count > MOST_POINTS:
            complaints.add(f"line {number}: more than {MOST_POINTS} points; judge a part of them")
            break
        if len(cells) != len(names):
            found = f"line {number}: {len(cells)} cells under a header of {len(names)}"
            complaints.add(f"{found}; give every row as many, empty ones for what is not known", "cells")
            continue
        _add_row(dict(zip(names, map(str.strip, cells), strict=True)), number, columns, complaints)
    fields = {}
    for name, column in columns.items():
        times, positions, values, lines = map(
            _reals, (column.times, column.positions, column.values, column.lines)
        )
        points = Points(times, positions, values, np.zeros_like(values))
        check_points(name, points, lines, "line", complaints)
        if len(points):
            fields[name] = points
    if not fields and not complaints.lines:
        complaints.add("no values below the header; give one row a point")
    return fields


def _add_row(row: dict[str, str], number: int, columns: dict[str, _Column], complaints: Complaints) -> None:
    given = [name for name in columns if row[name]]
    place = {name: _number(row[name], number, name, complaints) for name in COORDINATES} if given else {}
    for name in given:
        value = _number(row[name], number, name, complaints)
        if value is None or None in place.values():
            continue
        column = columns[name]
        column.lines.append(number)
        column.times.append(place["time"] or 0.0)
        column.positions.append(place["x"] or 0.0)
        column.values.append(value)


def _number(cell: str, line: int, name: str, complaints: Complaints) -> float | None:
    """Return a cell as a number; None, and a complaint, where it is none."""
    try:
        if "_" in cell:  # Python would take 1_000 for a number
            raise ValueError
        return float(cell)
    except ValueError:
        found = f'"{_short(cell)}" is not a number' if cell else "empty beside values"
        complaints.add(f"line {line}, {name}: {found}; write numbers like -0.125 or 1.5e-3", name, "number")
        return None


def _reals(numbers: array[float]) -> Reals:
    return np.array(numbers, dtype=np.float64)


def _foreign_separator(names: list[str]) -> str:
    """Return what a header is separated by, if it is not by commas."""
    marks = ((";", "semicolons"), ("\t", "tabs"), (" ", "blanks"))
    return next((said for mark, said in marks if len(names) == 1 and mark in names[0]), "")


def _near(name: str, names: Sequence[str]) -> str:
    """Say which column may be meant by a coordinate."""
    others = {"time": ("t", "times", "Time", "T"), "x": ("position", "X", "site", "bond", "place")}[name]
    found = next((other for other in others if other in names), None)
    return f'; call "{found}" so if it is meant' if found else f"; the header must be {EXPECTED}"


def _short(text: str) -> str:
    printable = "".join(letter if letter.isprintable() else "?" for letter in text)
    return printable if len(printable) <= SHOWN else f"{printable[:SHOWN]}..."


def _listed(names: Sequence[str]) -> str:
    shown = ", ".join(_short(name) or "(empty)" for name in names[:8])
    return f"{shown}, ..." if len(names) > 8 else shown or "nothing"
