"""Rules that tie the settings of [chain], its extra terms and the profiles of [start] to the model."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import Any

from tnquench.config.chain import Chain
from tnquench.config.extras import KIND_MODELS, KINDS, POTENTIAL_KEYS, Potential
from tnquench.config.models import MODELS, PARAMETERS, takers
from tnquench.config.notation import shown_section
from tnquench.config.wording import allowed, alternatives, unit_suffix


class Unusable:
    """Stands for a setting that is wrong by itself, so that no rule speaks about it a second time."""


Settings = Mapping[str, Any]


def chain_conflicts(settings: Settings) -> list[str]:
    """Return one line per setting, profile or extra term that its model does not take or lacks."""
    model = settings["chain.model"]
    if not isinstance(model, str) or model not in MODELS:
        return []
    return [*_parameters(model, settings), *_profiles(model, settings), *_extras(model, settings)]


def section_of(settings: Settings, name: str) -> dict[str, Any]:
    """Return the settings of one section by their own names."""
    return {
        key.removeprefix(f"{name}."): value for key, value in settings.items() if key.startswith(f"{name}.")
    }


def _parameters(model: str, settings: Settings) -> Iterator[str]:
    own = MODELS[model].parameters
    for key in PARAMETERS:
        value = settings[f"chain.{key}"]
        if key in own and own[key] is None and value is None:
            yield f"[chain] {key}: missing; must be {allowed(Chain.model_fields[key])}"
        elif key not in own and value is not None and not isinstance(value, Unusable):
            takes = alternatives(own, last="and")
            yield f'[chain] {key}: belongs to {takers(key)}; model "{model}" takes {takes}'


def _profiles(model: str, settings: Settings) -> Iterator[str]:
    own = ("beta", *MODELS[model].profiles)
    for name in dict.fromkeys(name for entry in MODELS.values() for name in entry.profiles):
        if name not in own and isinstance(settings[f"start.{name}"], Mapping):
            takes = alternatives((f"[start.{key}]" for key in own), last="and")
            alone = " alone" if len(own) == 1 else ""
            yield f'[start.{name}]: belongs to {takers(name)}; model "{model}" takes {takes}{alone}'


def _extras(model: str, settings: Settings) -> Iterator[str]:
    extras = settings["chain.extra"]
    if not isinstance(extras, (list, tuple)):
        return
    for index, extra in enumerate(extras):
        kind = extra.get("kind") if isinstance(extra, Mapping) else None
        if not isinstance(kind, str) or kind not in KINDS:
            continue
        place = shown_section(f"chain.extra[{index}]")
        models = KIND_MODELS.get(kind, tuple(MODELS))
        if model not in models:
            others = alternatives((f'"{name}"' for name in models), last="and")
            there = alternatives(f'"{name}"' for name in KINDS if model in KIND_MODELS.get(name, MODELS))
            plural = "s" if len(models) > 1 else ""
            yield f'{place} kind = "{kind}": belongs to model{plural} {others}; model "{model}" takes {there}'
        elif kind == "next_nearest" and model != "xxz" and extra.get("anisotropy") is not None:
            yield f'{place} anisotropy: belongs to model "xxz"; in model "{model}" this term has none'
        if kind == "potential":
            yield from _potential(place, extra, sites=settings["chain.sites"])


def _potential(place: str, extra: Mapping[str, Any], *, sites: object) -> Iterator[str]:
    """Judge which settings a potential has for its shape, and how many values."""
    shape = extra.get("shape")
    if not isinstance(shape, str) or shape not in POTENTIAL_KEYS:
        return
    takes = POTENTIAL_KEYS[shape]
    values, file = extra.get("values"), extra.get("file")
    for key in dict.fromkeys(key for keys in POTENTIAL_KEYS.values() for key in keys):
        if key not in takes and extra.get(key) is not None:
            owners = alternatives(f'"{name}"' for name, keys in POTENTIAL_KEYS.items() if key in keys)
            own = alternatives(takes, last="and")
            yield f'{place} {key}: belongs to shape {owners}; shape "{shape}" takes {own}'
        elif key in takes and extra.get(key) is None and not (key == "values" and file is not None):
            field = Potential.model_fields[key]
            instead = " (or give file in its place)" if key == "values" else ""
            yield f"{place} {key}: missing; must be {allowed(field)}{unit_suffix(field)}{instead}"
    if shape != "table" and file is not None:
        own = alternatives(takes, last="and")
        yield f'{place} file: belongs to shape "table"; shape "{shape}" takes {own}'
    if shape == "table" and isinstance(values, (list, tuple)):
        if file is not None:
            yield f"{place} values and file: both given; keep one of them"
        elif isinstance(sites, int) and len(values) != sites:
            yield f"{place} table of {len(values)} values: must have {sites} (sites, one a site)"
