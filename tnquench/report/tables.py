"""The summary of a run: one row an observable."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np

from tnquench.conventions import Reals
from tnquench.report.comparison import Comparison
from tnquench.report.verdict import first_resolved, largest
from tnquench.report.wording import DASH, SOURCE_NAMES, number, percent, plain, quantity

NOT_KNOWN = DASH


@dataclass(frozen=True)
class Cell:
    """A cell of the summary: its text, and what stands small below it."""

    text: str
    below: str = ""


@dataclass(frozen=True)
class Summary:
    """The summary: headings, and by observable one cell a heading."""

    headings: tuple[str, ...]
    rows: tuple[tuple[str, tuple[Cell, ...]], ...]


@dataclass(frozen=True)
class _Points:
    """Where a row is evaluated: (time, place) of the largest value, overall and at the last time."""

    overall: tuple[int, int]
    last: tuple[int, int]


Column = Callable[[Comparison, _Points], Cell]


def summary(fields: list[Comparison]) -> Summary:
    """Return what the run says on each observable, over the points inside the light cone after the start.

    fields : the observables of one run; columns that the run cannot fill are left out
    """
    columns = _columns(fields)
    return Summary(
        tuple(columns),
        tuple((field.said, _cells(field, list(columns.values()))) for field in fields),
    )


def _columns(fields: list[Comparison]) -> dict[str, Column]:
    compared = any(field.deviation is not None for field in fields)
    estimated = any(field.numerical is not None for field in fields)
    bounded = any(field.bound is not None for field in fields)
    found: dict[str, Column] = {}
    if not compared:
        found["Values"] = lambda field, _: Cell(_range(field))
    if compared:
        found["Largest deviation"] = lambda field, at: Cell(
            _quantity(field, field.deviation, at.overall, 2), _deviates(field, at.overall)
        )
    if estimated:
        heading = "Numerical error there" if compared else "Largest numerical error"
        found[heading] = lambda field, at: Cell(
            _quantity(field, field.numerical, at.overall, 1),
            "" if field.deviation is not None else _where(field, at.overall),
        )
    if bounded:
        heading = "Rigorous bound there" if compared or estimated else "Largest rigorous bound"
        found[heading] = lambda field, at: Cell(_quantity(field, field.bound, at.overall, 1))
    if compared:
        found["Largest deviation at the last time"] = lambda field, at: Cell(
            _quantity(field, field.deviation, at.last, 2),
            _below(field, at.last, estimated=estimated),
        )
    if compared and estimated:
        found["First resolved"] = lambda field, _: Cell(_first(field))
        found["Resolved points"] = lambda field, _: Cell(_share(field, field.resolved))
    elif compared and bounded:
        found["Points beyond the bound"] = lambda field, _: Cell(_share(field, _beyond(field)))
    if estimated:
        found["Dominant error source"] = lambda field, at: Cell(_dominant(field, at.overall[0]))
    return found


def _cells(field: Comparison, columns: list[Column]) -> tuple[Cell, ...]:
    size = next(
        (values for values in (field.deviation, field.numerical, field.bound) if values is not None), None
    )
    if size is None:
        return tuple(Cell(NOT_KNOWN) for _ in columns)
    among = field.judged if field.judged.any() else field.window
    last = largest(size[-1:], field.window[-1:])[1]
    points = _Points(overall=largest(size, among), last=(field.times.size - 1, last))
    return tuple(column(field, points) for column in columns)


def _quantity(field: Comparison, values: Reals | None, at: tuple[int, int], digits: int) -> str:
    return NOT_KNOWN if values is None else quantity(float(values[at]), field.unit, digits=digits)


def _deviates(field: Comparison, at: tuple[int, int]) -> str:
    return "no prediction" if field.deviation is None else _where(field, at)


def _below(field: Comparison, at: tuple[int, int], *, estimated: bool) -> str:
    if field.deviation is None:
        return ""
    return f"± {_quantity(field, field.numerical, at, 1)}" if estimated else _where(field, at)


def _range(field: Comparison) -> str:
    low, high = float(field.known.min()), float(field.known.max())
    return f"{number(low)} to {quantity(high, field.unit)}"


def _where(field: Comparison, at: tuple[int, int]) -> str:
    return f"x = {plain(float(field.positions[at[1]]))}, t = {plain(float(field.times[at[0]]))}"


def _first(field: Comparison) -> str:
    if field.resolved is None:
        return NOT_KNOWN
    first = first_resolved(field)
    return "never" if first is None else f"t = {plain(first)}"


def _share(field: Comparison, chosen: Any) -> str:
    points = int(np.count_nonzero(field.judged))
    if chosen is None or points == 0:
        return NOT_KNOWN
    return percent(np.count_nonzero(chosen & field.judged) / points)


def _beyond(field: Comparison) -> Any:
    if field.deviation is None or field.bound is None:
        return None
    return np.abs(field.deviation) > field.bound


def _dominant(field: Comparison, time: int) -> str:
    if not field.dominant:
        return NOT_KNOWN
    return SOURCE_NAMES.get(field.dominant[time], field.dominant[time])
