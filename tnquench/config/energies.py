"""The largest energy of a bond: what a Trotter step is measured against.

The error of a Trotter step comes from nested commutators of neighbouring bond terms. The scale s of each
model was chosen so that a step of fixed s dt errs about as much as in xxz. The cube root of the norm a bond
of the leading error operator of the order-2 scheme, over its value for xxz at D = 0.5, divided by s, was
found to be 0.8, 1.0, 1.2, 0.8 (xxz, D = 0, 0.5, 1, 2), 0.8, 1.2, 1.0 (ising, g/J = 0.5, 1, 2), 0.8, 1.2, 0.8
(fermion, V/t_h = 0, 2, 4), 1.0, 1.1, 1.1 (hubbard, U/t_h = 0, 4, 16) and 1.2, 1.0, 0.5 (xxz, D = 0.5, in a
staggered field of 0.5, 1, 4 J): `python -m tests.benchmarks.bond_energy`. A field that is the same on both
sites of a bond commutes with it, but an end site belongs wholly to its only bond: half of it is seen there.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from itertools import pairwise
from math import isfinite
from typing import Any

from tnquench.config.models import MODELS, parameter_values

#: The scale of each model as messages write it.
ENERGY_IN_WORDS: dict[str, str] = {
    "xxz": "J max(1, |D|)",
    "ising": "2 max(J, |g|)",
    "fermion": "max(2 t_h, |V|)",
    "hubbard": "2 t_h + |U|/4",
}

#: Disorder and a field that changes sign: an end bond holds one site whole and half another of opposite sign.
_OPPOSED = 1.5


def bond_energy(chain: Mapping[str, Any]) -> float | None:
    """Return the energy scale of the bonds of a chain, extra terms included.

    chain : settings of [chain] by name; `extra` as mappings of the settings of each term
    Returns None where a setting that it needs is missing or is no number.
    """
    model, sites, extras = (chain.get(key) for key in ("model", "sites", "extra"))
    if not isinstance(model, str) or not isinstance(sites, int) or not isinstance(extras, (list, tuple)):
        return None
    if model not in MODELS:
        return None
    parameters = parameter_values(model, chain)
    if not _are_numbers(*parameters.values()):
        return None
    values = {key: float(value) for key, value in parameters.items() if isinstance(value, (int, float))}
    terms = [_numbers_of(extra) for extra in extras if isinstance(extra, Mapping)]
    return _with_extras(model, values, terms, sites=sites)


def _with_extras(
    model: str, parameters: Mapping[str, float], extras: Sequence[Mapping[str, Any]], *, sites: int
) -> float:
    """Return the scale of a model with its extra terms; several extras add up."""
    factor: float = 1.0 + sum(
        abs(extra["strength"]) for extra in extras if extra["kind"] in ("bond_alternation", "bond_disorder")
    )
    farther = sum(
        _next_nearest(model, parameters, extra) for extra in extras if extra["kind"] == "next_nearest"
    )
    if model == "ising":
        along_z = abs(parameters["transverse_field"]) + sum(_largest_field(extra, sites) for extra in extras)
        along_x = sum(
            abs(float(extra["strength"])) for extra in extras if extra["kind"] == "longitudinal_field"
        )
        return 2.0 * max(factor * parameters["coupling"], along_z, along_x) + farther
    unevenness = sum(_largest_difference(extra, sites) for extra in extras)
    return max(factor * _bond_alone(model, parameters), unevenness) + farther


def _bond_alone(model: str, parameters: Mapping[str, float]) -> float:
    if model == "xxz":
        return parameters["coupling"] * max(1.0, abs(parameters["anisotropy"]))
    hopping, repulsion = parameters["hopping"], abs(parameters["repulsion"])
    return max(2.0 * hopping, repulsion) if model == "fermion" else 2.0 * hopping + 0.25 * repulsion


def _next_nearest(model: str, parameters: Mapping[str, float], extra: Mapping[str, Any]) -> float:
    strength: float = abs(extra["strength"])
    if model == "xxz":
        anisotropy = extra.get("anisotropy")
        return strength * max(1.0, abs(float(parameters["anisotropy"] if anisotropy is None else anisotropy)))
    return 2.0 * strength if model == "ising" else strength


def _largest_difference(extra: Mapping[str, Any], sites: int) -> float:
    """Return the largest difference that a field along z makes between the two sites of a bond term."""
    kind: str = extra["kind"]
    strength: float = abs(extra["strength"])
    if kind == "uniform_field":
        return 0.5 * strength if sites > 2 else 0.0
    if kind in ("staggered_field", "site_disorder"):
        return _OPPOSED * strength
    if kind != "potential":
        return 0.0
    values = _potential(extra, sites)
    shares = [1.0, *([0.5] * (len(values) - 2)), 1.0]
    halves = [share * value for share, value in zip(shares, values, strict=True)]
    return max((abs(left - right) for left, right in pairwise(halves)), default=0.0)


def _largest_field(extra: Mapping[str, Any], sites: int) -> float:
    """Return the largest size of a field along z on any site."""
    if extra["kind"] in ("uniform_field", "staggered_field", "site_disorder"):
        return float(abs(extra["strength"]))
    if extra["kind"] != "potential":
        return 0.0
    return max(abs(value) for value in _potential(extra, sites))


def _potential(extra: Mapping[str, Any], sites: int) -> list[float]:
    """Return V on every site."""
    strength, width, table = extra["strength"], extra.get("width") or 0.0, extra.get("values")
    positions = [site - 0.5 * (sites - 1) for site in range(sites)]
    shape = extra.get("shape")
    if shape == "table":
        return [float(value) for value in table or () if _are_numbers(value)] or [0.0, 0.0]
    if shape == "harmonic":
        return [0.5 * strength * x * x for x in positions]
    if shape == "linear":
        return [strength * x for x in positions]
    return [strength if abs(x) > 0.5 * width else 0.0 for x in positions]


def _numbers_of(extra: Mapping[str, Any]) -> dict[str, Any]:
    """Return an extra's settings, those that are no numbers left out, with a strength in any case."""
    strength, values = extra.get("strength"), extra.get("values")
    numbers = {key: extra[key] for key in ("anisotropy", "width") if _is_number(extra.get(key))}
    return {
        **numbers,
        "kind": extra.get("kind"),
        "shape": extra.get("shape"),
        "values": values if isinstance(values, (list, tuple)) else (),
        "strength": strength if _is_number(strength) else 0.0,
    }


def _are_numbers(*values: object) -> bool:
    return all(_is_number(value) for value in values)


def _is_number(value: object) -> bool:
    if isinstance(value, bool) or not isinstance(value, (int, float)):
        return False
    try:
        return isfinite(value)
    except OverflowError:  # a whole number beyond all floats
        return False
