"""What was asked: one compact line each for chain, start, evolution, prediction and errors."""

from __future__ import annotations

import tomllib
from collections.abc import Mapping
from typing import Any

from tnquench.dataset.reader import Run
from tnquench.report.models import ModelWords, extra_lines, words_of
from tnquench.report.units import Units, units_of
from tnquench.report.wording import LEVEL_NAMES, capitalised, labelled, plain

Table = Mapping[str, Any]

#: Profiles of the start beside the inverse temperature, as the products that they are.
PROFILES = {"beta_mu": "chemical potential βμ", "beta_field": "field βh"}

#: Settings that are sections of their own, lists of numbers, and text; others are numbers or truth values.
SECTIONS = frozenset({"beta", *PROFILES})
LISTS = frozenset({"values", "factors"})
TEXTS = frozenset({"model", "joint", "shape", "kind", "cut", "companions", "levels"})
#: No setting is larger, in any unit.
LARGEST_SETTING = 1e60

ORDERS = {2: "second", 4: "fourth"}


def settings_of(run: Run) -> dict[str, Any]:
    """Return the effective config stored in the run as nested tables; empty if it cannot be read.

    What is of another kind than the setting demands is left out: a dataset may say anything.
    """
    try:
        tables = tomllib.loads(str(run.provenance.get("config_toml", "")))
    except (ValueError, RecursionError):  # no TOML, an endless number, brackets nested too deeply
        return {}
    return {name: _sound(table) for name, table in tables.items() if isinstance(table, Mapping)}


def _sound(table: Table) -> dict[str, Any]:
    """Return a table without settings of another kind than their name demands."""
    sound: dict[str, Any] = {}
    for name, value in table.items():
        if name == "extra":
            sound[name] = [_sound(entry) for entry in _entries(value) if isinstance(entry, Mapping)]
        elif name in SECTIONS:
            sound |= {name: _sound(value)} if isinstance(value, Mapping) else {}
        elif name in LISTS:
            sound |= {name: value} if all(_is_finite(entry) for entry in _entries(value)) else {}
        elif isinstance(value, str) if name in TEXTS else _is_finite(value):
            sound[name] = value
    return sound


def _entries(value: object) -> list[Any]:
    return value if isinstance(value, list) else [value]


def _is_finite(value: object) -> bool:
    return isinstance(value, int | float) and abs(value) < LARGEST_SETTING


def is_step(settings: Table) -> bool:
    """Whether the start joins two halves at x = 0."""
    start = settings.get("start", {})
    shapes = [start.get(name, {}).get("shape") for name in ("beta", *PROFILES)]
    return "step" in shapes and all(shape in ("step", "uniform", None) for shape in shapes)


def subject(settings: Table) -> str:
    """Return the observable a run is about: where the temperature is the same everywhere, the charge whose
    field or chemical potential varies, else the energy."""
    start = settings.get("start", {})
    if start.get("beta", {}).get("shape") != "uniform":
        return "energy_density"
    varying = [name for name in PROFILES if start.get(name, {}).get("shape", "uniform") != "uniform"]
    spins_are_charges = settings.get("chain", {}).get("model", "xxz") != "hubbard"
    if not varying:
        return "energy_density"
    return "charge_density" if "beta_mu" in varying or spins_are_charges else "magnetisation"


def question(run: Run, settings: Table) -> list[tuple[str, str]]:
    """Return pairs of a heading and a line of text."""
    units, words = units_of(settings), words_of(settings)
    lines = [("Chain", _chain(settings.get("chain", {}), words))]
    if extras := extra_lines(settings.get("chain", {}).get("extra")):
        lines.append(("Extra terms", "; ".join(extras)))
    lines.append(("Start", _start(settings.get("start", {}), units)))
    if len(run.quantum):
        lines.append(("Evolution", _evolution(settings.get("evolution", {}), run, units)))
    if remarks := [remark for name, remark in words.remarks.items() if name in run.quantum]:
        lines.append(("Measured", capitalised("; ".join(remarks))))
    lines.append(("Prediction", _prediction(run)))
    if run.budget:
        lines.append(("Errors", _budget(run)))
    return lines


def _chain(chain: Table, words: ModelWords) -> str:
    sites = f"{chain.get('sites', '?')} sites, open ends"
    said = [part for part in (words.kind, words.hamiltonian) if part]
    for setting, symbol in words.symbols.items():
        value = chain.get(setting, 1.0 if setting == words.unit else float("nan"))
        said.append(f"{symbol} = {plain(float(value))}")
    own = float(chain.get(words.unit, 1.0)) != 1
    scale = f" (energies and times in the units in which {words.symbol} has this value)" if own else ""
    return f"{', '.join(said)}{scale}; {sites}"


def _start(start: Table, units: Units) -> str:
    parts = [
        f"{labelled('inverse temperature β', units.symbol('1/energy'))}: {_profile(start.get('beta', {}))}"
    ]
    parts += [f"{said}: {_profile(start[name])}" for name, said in PROFILES.items() if name in start]
    if start.get("joint") == "separate":
        parts.append("halves separate (no bond at x = 0 in the start)")
    return "; ".join(parts)


def _profile(profile: Table) -> str:
    shape = profile.get("shape")
    values = {key: plain(value) for key, value in profile.items() if isinstance(value, int | float)}
    if shape == "step" and {"left", "right"} <= set(values):
        width = f", joined over a width {values['width']}" if profile.get("width") else ""
        return f"{values['left']} on the left, {values['right']} on the right of x = 0{width}"
    if shape == "bump" and {"base", "height", "width"} <= set(values):
        return f"{values['base']} plus a Gaussian of height {values['height']} and width {values['width']}"
    if shape == "wave" and {"base", "height", "length"} <= set(values):
        return f"{values['base']} plus a wave of amplitude {values['height']} and length {values['length']}"
    if shape == "uniform" and "value" in values:
        return f"{values['value']} everywhere"
    table = profile.get("values")
    if isinstance(table, list) and table:
        return f"a table of {len(table)} values from {plain(min(table))} to {plain(max(table))}"
    return f"{shape or 'not stated'}"


def _evolution(evolution: Table, run: Run, units: Units) -> str:
    parts = [f"to {units.instant(float(run.coordinates['time'].values[-1]))}"]
    if "every" in evolution:
        parts[0] += f", measured every {units.duration(evolution['every'])}"
    if "accuracy" in evolution:
        unit = units.symbol("energy")
        parts.append(f"accuracy {plain(evolution['accuracy'])} {unit}".rstrip() + " asked")
    if "discarded_weight" in evolution:
        parts.append(f"discarded weight {plain(evolution['discarded_weight'])} a cut")
    order = f"{ORDERS.get(evolution.get('trotter_order', 4), '')}-order Trotter steps"
    if "time_step" in evolution:
        order += f" of at most {units.duration(evolution['time_step'])}"
    parts.append(order)
    if "bond_ceiling" in evolution:
        parts.append(f"bond dimension up to {evolution['bond_ceiling']}")
    return "; ".join(parts)


def absence(run: Run) -> str:
    """Return why a run has no prediction, as far as it says."""
    events = run.provenance.get("events") or []
    found = (event for event in events if isinstance(event, Mapping) and event.get("kind") == "no_prediction")
    return str(next(found, {}).get("detail", ""))


def _prediction(run: Run) -> str:
    if not run.hydrodynamics:
        reason = absence(run)
        return f"none: {reason}" if reason else "none was computed for this chain"
    said = [
        f"{LEVEL_NAMES.get(level, level)}, {theory.attrs.get('method', '')}"
        for level, theory in run.hydrodynamics.items()
    ]
    return "; ".join(part.rstrip(", ") for part in said)


def _budget(run: Run) -> str:
    if not run.companions:
        return "not estimated (no companion runs); rigorous bound on truncation only"
    said = (
        f"measured from {len(run.companions)} cheaper companion run{'s' if len(run.companions) > 1 else ''}"
    )
    thresholds = [
        float(budget.attrs["resolve_at"]) for budget in run.budget.values() if "resolve_at" in budget.attrs
    ]
    if run.hydrodynamics and thresholds:
        said += f"; resolved where |deviation| exceeds {plain(thresholds[0])} times the numerical error"
    return said
