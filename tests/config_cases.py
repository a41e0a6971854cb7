"""Configs for the tests: a minimal good one, spoiled in one place, and strategies for good ones."""

from __future__ import annotations

import tomllib
from pathlib import Path
from typing import Any

import pytest
from hypothesis import strategies as st

from tnquench.config.load import read_config
from tnquench.config.notation import written
from tnquench.errors import InputError

CONFIGS = Path(__file__).parents[1] / "configs"

NAN, INFINITE = float("nan"), float("inf")

MINIMAL: dict[str, Any] = {
    "chain": {"sites": 4, "anisotropy": 0.5},
    "start": {"beta": {"shape": "step", "left": 0.5, "right": 2.0}},
    "evolution": {"until": 1.0, "every": 0.5, "discarded_weight": 1e-8},
}


def toml(tables: dict[str, Any]) -> str:
    """Write nested tables with every section inline, so that any value may stand anywhere."""
    return "".join(
        f"{written(key) if not key.isidentifier() else key} = {written(tables[key])}\n" for key in tables
    )


def changed(path: str, value: Any) -> dict[str, Any]:
    """Return the minimal config with one setting, by dotted path, replaced or added."""
    tables: dict[str, Any] = tomllib.loads(toml(MINIMAL))
    *parents, key = path.split(".")
    table = tables
    for parent in parents:
        table = table.setdefault(parent, {})
    table[key] = value
    return tables


def without(path: str) -> dict[str, Any]:
    tables = changed(path, None)
    *parents, key = path.split(".")
    table = tables
    for parent in parents:
        table = table[parent]
    del table[key]
    return tables


def problems(tables: dict[str, Any] | str, *, folder: Path | None = None) -> list[str]:
    text = tables if isinstance(tables, str) else toml(tables)
    with pytest.raises(InputError) as caught:
        read_config(text, subject="a.toml", folder=folder)
    return list(caught.value.problems)


values = st.floats(min_value=-1000.0, max_value=1000.0)
lengths = st.floats(min_value=1e-3, max_value=1e6)


def profiles(size: int) -> st.SearchStrategy[dict[str, Any]]:
    def shape(name: str, **keys: st.SearchStrategy[Any]) -> st.SearchStrategy[dict[str, Any]]:
        return st.fixed_dictionaries({"shape": st.just(name), **keys})

    return st.one_of(
        shape("step", left=values, right=values, width=st.just(0) | lengths),
        shape("bump", base=values, height=values, width=lengths),
        shape("wave", base=values, height=values, length=lengths),
        shape("uniform", value=values),
        shape("table", values=st.lists(values, min_size=size, max_size=size)),
    )


@st.composite
def good_configs(draw: st.DrawFn) -> dict[str, Any]:
    sites = draw(st.integers(2, 24))
    every = draw(st.floats(min_value=1e-3, max_value=2.0))
    start = {"beta": draw(profiles(sites - 1))}
    if draw(st.booleans()):
        start["beta_field"] = draw(profiles(sites))
    weight = st.fixed_dictionaries({"discarded_weight": st.floats(min_value=1e-12, max_value=1e-3)})
    accuracy = st.fixed_dictionaries({"accuracy": st.floats(min_value=1e-10, max_value=0.1)})
    return {
        "title": draw(st.text(st.characters(exclude_categories=["Cs", "Cc", "Zl", "Zp"]), max_size=200)),
        "chain": {
            "sites": sites,
            "anisotropy": draw(st.floats(min_value=-4.0, max_value=4.0)),
            "coupling": draw(st.floats(min_value=0.1, max_value=10.0)),
        },
        "start": start,
        "evolution": {
            "until": every * draw(st.integers(1, 20)),
            "every": every,
            "trotter_order": draw(st.sampled_from([2, 4])),
            "cut": draw(st.sampled_from(["subspace", "svd", "gram"])),
            **draw(weight | accuracy),
        },
        "hydrodynamics": {"levels": draw(st.sampled_from([[], ["euler"]]))},
        "budget": {"resolve_at": draw(st.floats(min_value=0.1, max_value=10.0))},
    }
