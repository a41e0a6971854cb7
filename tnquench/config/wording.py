"""What a setting allows, in words: shared by messages and by the reference page."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from types import NoneType, UnionType
from typing import Annotated, Any, Literal, Union, get_args, get_origin

from pydantic.fields import FieldInfo

from tnquench.config.notation import quantity, written
from tnquench.config.setting import note

_POSITIVE = "positive"
_TEXT = "text in quotes"
_SECTION = "a profile, in a section of its own"


@dataclass(frozen=True)
class Allowed:
    """What one setting accepts: a noun with bounds, or a choice; alone or in a list."""

    noun: str = ""
    bounds: str = ""
    choices: tuple[Any, ...] = ()
    listed: bool = False

    def __str__(self) -> str:
        """Say it in full, to follow "must be"."""
        if self.choices:
            either = alternatives(written(choice) for choice in self.choices)
            return f"a list, empty or of {either}" if self.listed else either
        if self.listed:
            nouns = "texts in quotes" if self.noun == _TEXT else f"{self.noun.removeprefix('a ')}s"
            return f"a list of {nouns}{', each ' if self.bounds else ''}{self.bounds}"
        if self.bounds.startswith(_POSITIVE):
            return f"a {_POSITIVE} {self.noun.removeprefix('a ')}{self.bounds.removeprefix(_POSITIVE)}"
        return f"{self.noun} {self.bounds}".rstrip()


def allowed(field: FieldInfo) -> Allowed:
    """Read from the type and the bounds of a setting what it accepts."""
    return _allowed(field.annotation, field.metadata)


def unit_suffix(field: FieldInfo, *, profile_unit: str = "") -> str:
    """Return " (in units of ...)" for a setting with a unit; `profile_unit` stands for a profile's own."""
    unit = note(field, "unit")
    unit = profile_unit if unit == "profile" else unit
    return f" (in units of {unit})" if unit else ""


def alternatives(names: Iterable[str], *, last: str = "or") -> str:
    """Join names as prose does: "a, b or c"."""
    listed: Sequence[str] = tuple(names)
    return f" {last} ".join([", ".join(listed[:-1]), listed[-1]]) if len(listed) > 1 else "".join(listed)


def _allowed(annotation: Any, metadata: Sequence[Any]) -> Allowed:
    origin, arguments = get_origin(annotation), get_args(annotation)
    if origin is Annotated:
        inner = [bound for entry in arguments[1:] for bound in getattr(entry, "metadata", [entry])]
        return _allowed(arguments[0], inner)
    if origin in (Union, UnionType):
        return _allowed(next(kind for kind in arguments if kind is not NoneType), metadata)
    if origin is tuple:
        item = _allowed(arguments[0], metadata)
        if item.noun == _SECTION:
            return Allowed(noun="a list of sections, each headed by the name in double brackets")
        return Allowed(noun=item.noun, bounds=item.bounds, choices=item.choices, listed=True)
    if origin is dict:
        return Allowed(noun="lists of values by name, in a section of their own")
    if origin is Literal:
        return Allowed(choices=arguments)
    nouns = {int: "a whole number", float: "a number", str: _TEXT, bool: "true or false"}
    return Allowed(noun=nouns.get(annotation, _SECTION), bounds=_bounds(metadata))


def _bounds(metadata: Sequence[Any]) -> str:
    names = ("gt", "ge", "le", "max_length")
    limits = {name: getattr(bound, name) for bound in metadata for name in names if hasattr(bound, name)}
    if "max_length" in limits:
        return f"on one line, at most {limits['max_length']} characters"
    lowest = quantity(limits["ge"]) if "ge" in limits else ""
    highest = quantity(limits["le"]) if "le" in limits else ""
    if limits.get("gt") == 0:
        return f"{_POSITIVE}, at most {highest}" if highest else _POSITIVE
    return f"from {lowest} to {highest}" if lowest and highest else ""
