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


SMALL = st.floats(min_value=-2.0, max_value=2.0)
POSITIVE = st.floats(min_value=0.1, max_value=10.0)

#: Parameters of each model, those with a default optional; and its profiles beside beta.
PARAMETERS: dict[str, tuple[dict[str, st.SearchStrategy[float]], dict[str, st.SearchStrategy[float]]]] = {
    "xxz": ({"anisotropy": st.floats(min_value=-4.0, max_value=4.0)}, {"coupling": POSITIVE}),
    "ising": ({"transverse_field": SMALL}, {"coupling": POSITIVE}),
    "fermion": ({"repulsion": SMALL}, {"hopping": POSITIVE}),
    "hubbard": ({"repulsion": SMALL}, {"hopping": POSITIVE}),
}
PROFILES = {
    "xxz": ("beta_field",),
    "ising": (),
    "fermion": ("beta_mu",),
    "hubbard": ("beta_mu", "beta_field"),
}


def extras(model: str, sites: int) -> st.SearchStrategy[dict[str, Any]]:
    """Extra terms that a model takes."""
    seed, positive = st.integers(0, 10**9), st.floats(min_value=0.0, max_value=2.0)
    energy = {"strength": SMALL}

    def term(kind: str, keys: dict[str, Any], **more: Any) -> st.SearchStrategy[dict[str, Any]]:
        optional = {**more, "in_start": st.booleans()}
        return st.fixed_dictionaries({"kind": st.just(kind), **keys}, optional=optional)

    def potential(shape: str, **keys: Any) -> st.SearchStrategy[dict[str, Any]]:
        return term("potential", {"shape": st.just(shape), **keys})

    kinds = [
        term("staggered_field", energy),
        term("uniform_field", energy),
        term("bond_alternation", {"strength": st.floats(min_value=-1.0, max_value=1.0)}),
        term("bond_disorder", {"strength": positive}, seed=seed),
        term("site_disorder", {"strength": positive}, seed=seed),
        potential("harmonic", strength=SMALL),
        potential("linear", strength=SMALL),
        potential("box", strength=SMALL, width=POSITIVE),
        potential("table", values=st.lists(SMALL, min_size=sites, max_size=sites)),
    ]
    if model == "ising":
        kinds.append(term("longitudinal_field", energy))
    if model != "hubbard":
        kinds.append(term("next_nearest", energy, **({"anisotropy": SMALL} if model == "xxz" else {})))
    return st.one_of(kinds)


@st.composite
def good_chains(draw: st.DrawFn) -> dict[str, Any]:
    model, sites = draw(st.sampled_from(sorted(PARAMETERS))), draw(st.integers(2, 24))
    required, optional = PARAMETERS[model]
    chain: dict[str, Any] = {"sites": sites, **draw(st.fixed_dictionaries(required, optional=optional))}
    if model != "xxz" or draw(st.booleans()):
        chain["model"] = model
    if draw(st.booleans()):
        chain["extra"] = draw(st.lists(extras(model, sites), max_size=3))
    return chain


@st.composite
def good_configs(draw: st.DrawFn) -> dict[str, Any]:
    chain = draw(good_chains())
    sites = chain["sites"]
    every = draw(st.floats(min_value=1e-3, max_value=2.0))
    start = {"beta": draw(profiles(sites - 1))}
    for name in PROFILES[chain.get("model", "xxz")]:
        if draw(st.booleans()):
            start[name] = draw(profiles(sites))
    weight = st.fixed_dictionaries({"discarded_weight": st.floats(min_value=1e-12, max_value=1e-3)})
    accuracy = st.fixed_dictionaries({"accuracy": st.floats(min_value=1e-10, max_value=0.1)})
    return {
        "title": draw(st.text(st.characters(exclude_categories=["Cs", "Cc", "Zl", "Zp"]), max_size=200)),
        "chain": chain,
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
