"""What is judged: values at points in time and space, whatever file they came from."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from tnquench.conventions import OBSERVABLE_PLACES, Reals
from tnquench.errors import InputError

#: Observables a candidate may give, and the two coordinates that it must give.
OBSERVABLES: tuple[str, ...] = tuple(OBSERVABLE_PLACES)
COORDINATES: tuple[str, ...] = ("time", "x")

#: A candidate that is larger is refused before it is read.
MOST_BYTES = 256 * 2**20
MOST_POINTS = 1_000_000
#: Local observables are of order one; squares of what is larger than this would overflow.
LARGEST_VALUE = 1e60

#: Origin of a candidate that is a table of numbers and tells nothing of its own error.
TABLE = "table"
#: Origin of one that is the quantum side of a dataset.
QUANTUM = "quantum"


@dataclass(frozen=True)
class Points:
    """Values of one observable at scattered points.

    times, positions, values : (point,), in the reference's units and lattice spacings
    error : numerical error that the candidate itself claims, (point,), zero where it claims none
    """

    times: Reals
    positions: Reals
    values: Reals
    error: Reals

    def __len__(self) -> int:
        return self.values.size

    def chosen(self, which: Any) -> Points:
        """Return some of the points, by mask or index."""
        return Points(self.times[which], self.positions[which], self.values[which], self.error[which])


@dataclass(frozen=True)
class Candidate:
    """Somebody's result: its points by observable.

    name    : what it is called in texts
    origin  : TABLE, QUANTUM (the chain of another dataset) or the level of a prediction, such as "euler"
    remarks : what was left aside while reading
    settings : effective config of a dataset as nested tables, empty for a table
    """

    name: str
    origin: str
    fields: Mapping[str, Points]
    remarks: tuple[str, ...] = ()
    settings: Mapping[str, Any] = field(default_factory=dict)


@dataclass
class Complaints:
    """Problems of one candidate, one line a kind: the first of it and how many more there are."""

    lines: dict[tuple[str, ...], str] = field(default_factory=dict)
    counts: dict[tuple[str, ...], int] = field(default_factory=dict)

    def add(self, line: str, *kind: str, count: int = 1) -> None:
        """Note `count` problems of one kind; the line of the first is kept."""
        self.lines.setdefault(kind or (line,), line)
        self.counts[kind or (line,)] = self.counts.get(kind or (line,), 0) + count

    def raise_if_any(self, subject: str) -> None:
        """Raise InputError with one line a kind of problem."""
        if self.lines:
            more = {kind: count - 1 for kind, count in self.counts.items()}
            lines = [
                f"{line} (and {more[kind]} more of this kind)" if more[kind] else line
                for kind, line in self.lines.items()
            ]
            raise InputError(subject, lines, consequence="nothing was judged")


def check_points(name: str, points: Points, where: Reals, unit: str, complaints: Complaints) -> None:
    """Note what makes the points of an observable unusable.

    where : number of the line or entry of each point, (point,); unit : "line" or "entry"
    """
    for said, values in (("time", points.times), ("x", points.positions), (name, points.values)):
        finite = np.isfinite(values)
        for bad, problem, remedy in (
            (~finite, "not a finite number", "leave the point out"),
            (finite & (np.abs(values) > LARGEST_VALUE), f"beyond ±{LARGEST_VALUE:g}", "check its unit"),
        ):
            if count := int(np.count_nonzero(bad)):
                first = int(np.argmax(bad))
                line = f"{unit} {where[first]:.0f}, {said}: {values[first]:g} is {problem}; {remedy}"
                complaints.add(line, said, problem, count=count)
    order = np.lexsort((points.positions, points.times))
    times, positions = points.times[order], points.positions[order]
    same = np.flatnonzero((times[1:] == times[:-1]) & (positions[1:] == positions[:-1]))
    if same.size:
        pair = sorted((int(where[order[same[0]]]), int(where[order[same[0] + 1]])))
        line = (
            f"{unit} {pair[1]}, {name}: the point t = {times[same[0]]:g}, x = {positions[same[0]]:g} stands"
        )
        complaints.add(
            f"{line} already in {unit} {pair[0]}; give each point once", name, "twice", count=same.size
        )
