"""What differs between two configs, setting by setting."""

from __future__ import annotations

import tomllib
from collections.abc import Iterator, Mapping
from typing import Any

from tnquench.config.document import effective_toml
from tnquench.config.notation import shown
from tnquench.config.schema import Config

#: What changes no number of a dataset, by section or dotted name.
WITHOUT_EFFECT = frozenset({"title", "sweep", "cluster"})

#: What may change between a run and its continuation: it makes another dataset from the same beginning.
CONTINUED = frozenset({"hydrodynamics", "budget", "stretch", "evolution.until"})


def changes(earlier: Config, now: Config) -> dict[str, tuple[Any, Any]]:
    """Return the settings that differ, with both values (None where one is not set), by dotted name.

    Settings without effect on the numbers are left out.
    """
    had, has = (dict(_leaves(tomllib.loads(effective_toml(config)))) for config in (earlier, now))
    return {
        key: (had.get(key), has.get(key))
        for key in sorted(had.keys() | has.keys())
        if had.get(key) != has.get(key) and not _is_among(key, WITHOUT_EFFECT)
    }


def forbidden(changed: Mapping[str, tuple[Any, Any]]) -> list[str]:
    """Return one line per change with which a run cannot be continued."""
    return [
        f"{key}: {_told(has)} now, {_told(had)} in the folder"
        for key, (had, has) in changed.items()
        if not _is_among(key, CONTINUED)
    ]


def shortened(changed: Mapping[str, tuple[Any, Any]]) -> list[str]:
    """Return a line if less time is asked for now: a finished run grows, but does not shrink."""
    until = changed.get("evolution.until")
    if until is None or until[1] >= until[0]:
        return []
    return [f"evolution.until: {_told(until[1])} now, but the folder's run goes to {_told(until[0])}"]


def _leaves(tables: Mapping[str, Any], parents: str = "") -> Iterator[tuple[str, Any]]:
    for key, value in tables.items():
        dotted = f"{parents}{key}"
        if isinstance(value, Mapping):
            yield from _leaves(value, f"{dotted}.")
        else:
            yield dotted, value


def _is_among(key: str, names: frozenset[str]) -> bool:
    return key in names or key.partition(".")[0] in names


def _told(value: object) -> str:
    return "not set" if value is None else shown(value)
