"""The section [sweep]: lists of values for settings, and the points that their combinations make."""

from __future__ import annotations

import hashlib
import re
from collections import Counter
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from itertools import product
from math import prod
from typing import Any, ClassVar

from tnquench.config.chain_rules import Settings
from tnquench.config.notation import shown, shown_key, written
from tnquench.config.setting import Section, setting
from tnquench.errors import InputError

MOST_POINTS = 100_000

#: Sections that are the same at all points.
NOT_SWEPT = ("sweep", "cluster")

#: Longest name of a point's folder and longest part of it, in characters.
_LONGEST_NAME, _LONGEST_LABEL = 120, 40
_DIGEST = 8


@dataclass(frozen=True)
class SweepPoint:
    """One point of a sweep.

    name     : of its folder; letters, digits and . _ + - only, different for every point
    settings : value of each swept setting by dotted name
    """

    name: str
    settings: Mapping[str, Any]


class Sweep(Section):
    """Many runs from one config: each swept setting, by its dotted name, has a list of values.

    Settings of [sweep.grid] are combined in every way; those of [sweep.together] change together, position by
    position, and count as one more axis of the grid. A swept setting need not stand elsewhere in the config.
    chain.extra.1 is the first extra term. `tnquench sweep` runs all points.
    """

    EXAMPLE: ClassVar[str] = (
        "grid.chain.sites = [32, 64]\n"
        "together.evolution.until = [5.0, 10.0]\n"
        "together.evolution.discarded_weight = [1e-9, 1e-8]"
    )

    grid: dict[str, Any] | None = setting(
        "lists of values by dotted name of the setting; every combination is a point",
        default=None,
        default_rule="no sweep",
    )
    together: dict[str, Any] | None = setting(
        "lists of values of equal length; the values at equal positions belong together",
        default=None,
        default_rule="no sweep",
    )

    @property
    def points(self) -> tuple[SweepPoint, ...]:
        """The points in the order of the lists, the last list running fastest; none without a sweep."""
        return tuple(sweep_points({"grid": self.grid, "together": self.together}))


def refuse_sweep(sweep: Sweep, subject: str) -> None:
    """Raise InputError, with advice, where a config that is to be run once holds a sweep."""
    if count := len(sweep.points):
        advice = f"run them with: tnquench sweep {subject}"
        raise InputError(subject, [f"[sweep]: makes {count} point{'s' * (count > 1)}, not one run; {advice}"])


def sweep_points(tables: Mapping[str, Any]) -> Iterator[SweepPoint]:
    """Yield the points of a sound [sweep] table, the last list running fastest."""
    grid, together = swept(tables.get("grid")), swept(tables.get("together"))
    axes = [[{key: value} for value in values] for key, values in grid.items()]
    if together:
        rows = zip(*together.values(), strict=True)
        axes.append([dict(zip(together, row, strict=True)) for row in rows])
    labels = _key_labels([*grid, *together])
    for combination in product(*axes) if axes else ():
        settings = {key: value for part in combination for key, value in part.items()}
        yield SweepPoint(_name(settings, labels), settings)


def swept(table: Any, parents: str = "") -> dict[str, Any]:
    """Return the leaves of nested tables by dotted name."""
    leaves: dict[str, Any] = {}
    for key, value in table.items() if isinstance(table, Mapping) else ():
        dotted = f"{parents}.{key}" if parents else str(key)
        leaves |= swept(value, dotted) if isinstance(value, Mapping) else {dotted: value}
    return leaves


def first_point(tables: dict[str, Any]) -> dict[str, Any]:
    """Return the tables of a config with the first value of every swept setting in its place.

    Tables without a sweep, or with one that is not sound, are returned as they are.
    """
    sweep = tables.get("sweep")
    point = next(sweep_points(sweep), None) if sweep is not None and is_sound(sweep) else None
    return tables if point is None else at_point(tables, point.settings)


def is_sound(sweep: Any) -> bool:
    """Whether a [sweep] table makes points as far as it can be known by itself."""
    if not isinstance(sweep, Mapping) or not set(sweep) <= {"grid", "together"}:
        return False
    return all(isinstance(table, Mapping) for table in sweep.values()) and not any(_problems(sweep))


def at_point(tables: Mapping[str, Any], settings: Mapping[str, Any]) -> dict[str, Any]:
    """Return tables with some settings replaced or added, by dotted name; the given ones stay as they are.

    A number in a name counts the entries of a list from 1. What cannot be reached is put where the schema
    will refuse it.
    """
    changed: Any = dict(tables)
    for dotted, value in settings.items():
        changed = _replaced(changed, dotted.split("."), value)
    return dict(changed)


def _replaced(table: Any, path: list[str], value: Any) -> Any:
    if not path:
        return value
    key, *rest = path
    if isinstance(table, (list, tuple)) and key.isdecimal() and 1 <= int(key[:9]) <= len(table):
        place = int(key) - 1
        return [*table[:place], _replaced(table[place], rest, value), *table[place + 1 :]]
    inside = dict(table) if isinstance(table, Mapping) else {}
    return {**inside, key: _replaced(inside.get(key), rest, value)}


def sweep_conflicts(settings: Settings) -> Iterator[str]:
    """Yield one line per reason why a sweep makes no points.

    settings : value or `Unusable` by dotted name, "section.key"
    """
    tables = {name: settings[f"sweep.{name}"] for name in ("grid", "together")}
    if all(table is None or isinstance(table, Mapping) for table in tables.values()):
        yield from _problems(tables)


def _problems(tables: Mapping[str, Any]) -> Iterator[str]:
    grid, together = swept(tables.get("grid")), swept(tables.get("together"))
    sound = True
    for section, lists in (("grid", grid), ("together", together)):
        for key, values in lists.items():
            for complaint in _about_list(key, values, is_grid=section == "grid"):
                sound = False
                yield f"[sweep.{section}] {_shown(key)}: {complaint}"
    for key, other in _overlaps(grid, together):
        sound = False
        yield f"[sweep] {_shown(key)} and {_shown(other)}: set the same twice; keep one of them"
    if sound:
        yield from _about_all(grid, together)


def _about_list(key: str, values: Any, *, is_grid: bool) -> Iterator[str]:
    """Yield what is wrong with one list by itself."""
    if key.split(".")[0] in NOT_SWEPT:
        yield f"[{key.split('.')[0]}] is the same at every point and cannot be swept"
    if not all(key.split(".")):
        yield 'must be a dotted name, such as "chain.anisotropy"'
    if not isinstance(values, (list, tuple)) or not values:
        found = "" if values in ([], ()) else f", not {shown(values)}"
        yield f"must be a list of one value at least{found}"
    elif any(map(_is_unwritable, values)):
        yield "holds a number of thousands of digits"
    elif is_grid and (twice := _repeated(values)) is not None:
        yield f"holds {shown(twice)} more than once; name each value once"


def _about_all(grid: Mapping[str, Any], together: Mapping[str, Any]) -> Iterator[str]:
    """Yield what is wrong with sound lists among each other."""
    lengths = {key: len(values) for key, values in together.items()}
    if len(set(lengths.values())) > 1:
        found = ", ".join(f"{_shown(key)} has {length}" for key, length in lengths.items())
        yield f"[sweep.together]: lists must be of equal length; {found}"
        return
    rows = list(zip(*together.values(), strict=True))
    if (twice := _repeated(rows)) is not None:
        position = [_sameness(row) for row in rows].index(_sameness(twice)) + 1
        yield f"[sweep.together]: the values at position {position} come more than once; name each point once"
    count = prod(len(values) for values in grid.values()) * max(len(rows), 1)
    if count > MOST_POINTS:
        yield f"[sweep]: more than {MOST_POINTS} points; split it into several sweeps"


def _overlaps(grid: Mapping[str, Any], together: Mapping[str, Any]) -> Iterator[tuple[str, str]]:
    """Yield pairs of swept settings of which one is, or holds, the other."""
    for key in grid:
        if key in together:
            yield key, key
    names = {*grid, *together}
    for key in sorted(names):
        parts = key.split(".")
        for length in range(1, len(parts)):
            if (parent := ".".join(parts[:length])) in names:
                yield parent, key


def _is_unwritable(value: Any) -> bool:
    try:
        written(value)
    except ValueError:  # Python refuses to write out so many digits
        return True
    return False


def _repeated(values: Any) -> Any:
    """Return the first value that comes a second time; None where all differ."""
    seen = Counter(_sameness(value) for value in values)
    return next((value for value in values if seen[_sameness(value)] > 1), None)


def _sameness(value: Any) -> Any:
    """Return what is equal for values that mean the same: 1 and 1.0 do, true and 1 do not."""
    if isinstance(value, tuple):
        return tuple(_sameness(entry) for entry in value)
    return value if isinstance(value, (int, float)) and not isinstance(value, bool) else written(value)


def _name(settings: Mapping[str, Any], labels: Mapping[str, str]) -> str:
    """Return the name of a point: setting_value for each swept setting; a long one ends in a digest."""
    name = "__".join(f"{labels[key]}_{_value_label(value)}" for key, value in settings.items())
    if len(name) <= _LONGEST_NAME:
        return name
    return f"{name[:_LONGEST_NAME]}-{_digest(written(dict(settings)))}"


def _key_labels(keys: list[str]) -> dict[str, str]:
    """Return the shortest end of each dotted name, two words where a profile or extra term holds the setting,
    that tells it from the others."""
    short = {key: "_".join(key.split(".")[-max(1, key.count(".")) :]) for key in keys}
    counts = Counter(label.casefold() for label in short.values())
    chosen = {key: label if counts[label.casefold()] == 1 else key for key, label in short.items()}
    return {key: re.sub(r"[^A-Za-z0-9_]+", "_", label)[:_LONGEST_LABEL] for key, label in chosen.items()}


def _value_label(value: Any) -> str:
    """Return a value as a file name writes it; what is no number or plain word ends in a digest."""
    if isinstance(value, (int, float)) and not isinstance(value, bool):
        return written(value).removesuffix(".0")[:_LONGEST_LABEL]
    text = value if isinstance(value, str) else written(value)
    plain = re.sub(r"[^a-z0-9.+-]+", "-", text.lower()).strip("-.")[:_LONGEST_LABEL]
    return plain if plain == text else f"{plain}-{_digest(text)}".lstrip("-")


def _shown(dotted: str) -> str:
    return ".".join(shown_key(key) for key in dotted.split("."))


def _digest(text: str) -> str:
    return hashlib.sha256(text.encode("utf-8", "surrogatepass")).hexdigest()[:_DIGEST]
