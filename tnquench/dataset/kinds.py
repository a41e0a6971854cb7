"""Of what kind each attribute of a dataset is: a number, text, or a list or mapping in JSON notation."""

from __future__ import annotations

import json
from collections.abc import Iterator, Mapping
from math import isfinite

from tnquench.dataset.contents import Attribute
from tnquench.dataset.variables import JSON_ATTRIBUTES

#: Attributes that are finite numbers, those of them that cannot be negative, and one that is nan where no
#: sample is resolved.
SIZES: frozenset[str] = frozenset(
    {"light_cone_reach", "resolve_at", "reach", "discarded_weight", "time_step", "sites"}
    | {"seconds", "wall_seconds", "cpu_seconds"}
)
NUMBERS: frozenset[str] = SIZES | {"light_cone_left", "light_cone_right"}
GAPPED_NUMBERS: frozenset[str] = frozenset({"first_resolved_time"})
#: Attributes that are one text each; so are all whose name begins with `kind_`.
TEXTS: frozenset[str] = frozenset(
    {"config_toml", "config_file", "title", "machine", "created", "method", "digest", "content"}
    | {"observables", "units", "long_name"}
)
#: Attributes in JSON notation by what stands there; all others may be anything that JSON knows.
MAPPINGS: frozenset[str] = frozenset({"versions", "preparation", "main_run"})
LISTS_OF_MAPPINGS: frozenset[str] = frozenset({"events"})
#: What a main run must say of itself, each a finite number.
MAIN_RUN: tuple[str, ...] = ("discarded_weight", "time_step", "seconds")


def kind_complaints(owner: str, attributes: Mapping[str, Attribute]) -> Iterator[str]:
    """Yield one line for each attribute of `owner` that is of another kind than its name demands."""
    left, right = attributes.get("light_cone_left"), attributes.get("light_cone_right")
    if isinstance(left, int | float) and isinstance(right, int | float) and left > right:
        yield f"attribute light_cone_left of {owner} is larger than light_cone_right"
    for name, value in attributes.items():
        if expected := _expected(name, value):
            yield f"attribute {name} of {owner or 'the root'} is not {expected}"


def from_json(value: Attribute) -> object:
    """Return an attribute in JSON notation as lists and mappings, any other as it is.

    Raises ValueError if the text is no JSON, holds an endless number or is nested too deeply.
    """
    if not isinstance(value, str):
        return value
    try:
        return json.loads(value)
    except RecursionError as error:
        message = "nested too deeply"
        raise ValueError(message) from error


def _expected(name: str, value: Attribute) -> str:
    """Return what an attribute should be and is not, or nothing."""
    if name in NUMBERS and not _is_finite(value):
        return "a finite number"
    if name in SIZES and isinstance(value, int | float) and value < 0:
        return "zero or more"
    if name in GAPPED_NUMBERS and not _is_number(value):
        return "a number"
    if (name in TEXTS or name.startswith("kind_")) and not isinstance(value, str):
        return "text"
    return _expected_json(name, value) if name in JSON_ATTRIBUTES else ""


def _expected_json(name: str, value: Attribute) -> str:
    try:
        found = from_json(value)
    except ValueError:
        return "JSON text"
    if name in MAPPINGS and not isinstance(found, Mapping):
        return "a mapping"
    if name == "main_run" and isinstance(found, Mapping):
        missing = [key for key in MAIN_RUN if not _is_finite(found.get(key))]
        return f"a mapping with finite numbers {', '.join(missing)}" if missing else ""
    if name in LISTS_OF_MAPPINGS and not _is_list_of_mappings(found):
        return "a list of mappings"
    return ""


def _is_list_of_mappings(value: object) -> bool:
    return isinstance(value, list) and all(isinstance(entry, Mapping) for entry in value)


def _is_number(value: object) -> bool:
    return isinstance(value, int | float) and not isinstance(value, bool)


def _is_finite(value: object) -> bool:
    try:
        return isinstance(value, int | float) and not isinstance(value, bool) and isfinite(value)
    except OverflowError:  # an integer beyond all floating point numbers
        return False
