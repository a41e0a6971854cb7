"""What was probably meant by a name that the schema does not know."""

from __future__ import annotations

import difflib
from collections.abc import Iterable, Iterator, Mapping
from typing import Any

from tnquench.config.extras import KINDS
from tnquench.config.notation import shown_key, shown_section
from tnquench.config.profile import SHAPES
from tnquench.config.schema import LATER, PROFILES, SECTIONS, Config
from tnquench.config.setting import Section, note
from tnquench.config.wording import alternatives

_LONGEST_COMPARED = 60
_NEAR_ELSEWHERE = 0.75


def nearest(name: str, names: Iterable[str], *, similarity: float = 0.6) -> str | None:
    """Return the one of `names` that is most like `name`, case ignored; None where none comes near."""
    found = difflib.get_close_matches(name[:_LONGEST_COMPARED].lower(), sorted(names), n=1, cutoff=similarity)
    return found[0] if found else None


def unknown_name(name: str, value: Any, *, section: str, owner: type[Section] | None) -> str:
    """Return the line about a setting or section that is not in the schema.

    section : dotted name of the section it was found in; empty at the top
    owner   : the section's schema; None for a profile without a valid shape
    """
    dotted = f"{section}.{name}" if section else name
    if dotted in LATER:
        return f"{_heading(name, value, section=section)}: {LATER[dotted]}"
    heading, hint = _heading(name, value, section=section), _hint(name, section=section, owner=owner)
    kind = "section" if heading.endswith("]") else "setting"
    return f"{heading}: {hint}" if hint.startswith("belongs to") else f"{heading}: no such {kind}; {hint}"


def _heading(name: str, value: Any, *, section: str) -> str:
    """Return the place as the config writes it: [section], [[section]] or [section] key."""
    key = shown_key(name)
    dotted = f"{section}.{key}" if section else key
    if shown_section(section).startswith("[["):
        return f"{shown_section(section)} {key}"
    if isinstance(value, Mapping):
        return f"[{dotted}]"
    if isinstance(value, (list, tuple)) and value and isinstance(value[0], Mapping):
        return f"[[{dotted}]]"
    return f"[{section}] {key}" if section else key


def _hint(name: str, *, section: str, owner: type[Section] | None) -> str:
    section = section.partition("[")[0]  # chain.extra[1] is an entry of chain.extra
    own = _own_names(section, owner)
    elsewhere = {key: places for key, places in _CATALOGUE.items() if section not in places}
    if owner is not None and (meant := _by_symbol(name, owner)):
        return f'did you mean "{meant}"?'
    if owner is not None and (other := _of_other_variant(name, owner)):
        return other
    if name in elsewhere:
        return f"belongs to {_places(elsewhere[name], near=section)}"
    if meant := nearest(name, own):
        return f"did you mean [{meant}]?" if meant in SECTIONS and not section else f'did you mean "{meant}"?'
    for other, schema in SECTIONS.items():
        if other != section and (by_symbol := _by_symbol(name, schema)):
            return f'did you mean "{by_symbol}" of [{other}]?'
    if meant := nearest(name, elsewhere, similarity=_NEAR_ELSEWHERE):
        return f'did you mean "{meant}" of {_places(elsewhere[meant], near=section)}?'
    return f"allowed: {', '.join(own)}"


def _of_other_variant(name: str, owner: type[Section]) -> str | None:
    """Return a hint where `owner` is a shape of profile (a kind of extra) and `name` a setting of others."""
    for tag, variants in (("shape", SHAPES), ("kind", KINDS)):
        own = next((variant for variant, schema in variants.items() if schema is owner), None)
        others = [f'"{other}"' for other, schema in variants.items() if name in schema.model_fields]
        if own is not None and others:
            takes = alternatives((key for key in owner.model_fields if key != tag), last="and")
            return f'belongs to {tag} {alternatives(others)}; {tag} "{own}" takes {takes}'
    return None


def _own_names(section: str, owner: type[Section] | None) -> tuple[str, ...]:
    if owner is not None:
        return tuple(owner.model_fields)
    return tuple(key for key, places in _CATALOGUE.items() if section in places)


def _by_symbol(name: str, owner: type[Section]) -> str | None:
    """Return the setting that has `name` as its symbol, as physicists write it."""
    for key, field in owner.model_fields.items():
        if name.lower() in [symbol.lower() for symbol in note(field, "symbols")]:
            return key
    return None


def _places(sections: Iterable[str], *, near: str) -> str:
    """Name sections; only those under the same heading as `near`, where there are any."""
    listed = tuple(sections)
    under = [section for section in listed if near and section.split(".")[0] == near.split(".")[0]]
    return alternatives(
        f"[[{section}]]" if section == "chain.extra" else f"[{section}]" for section in under or listed
    )


def _all_settings() -> Iterator[tuple[str, str]]:
    for key in Config.model_fields:
        yield key, ""
    for section, schema in SECTIONS.items():
        for key in schema.model_fields:
            yield key, section
    for profile in PROFILES:
        for key in dict.fromkeys(key for shape in SHAPES.values() for key in shape.model_fields):
            yield key, f"start.{profile}"
    for key in dict.fromkeys(key for kind in KINDS.values() for key in kind.model_fields):
        yield key, "chain.extra"


def _catalogue() -> dict[str, tuple[str, ...]]:
    places: dict[str, tuple[str, ...]] = {}
    for key, section in _all_settings():
        places[key] = (*places.get(key, ()), section)
    return places


#: Every setting with the sections that have it ("" is the top of the config).
_CATALOGUE = _catalogue()
