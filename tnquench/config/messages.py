"""Turns what validation found into one line per problem: place, found, allowed, what to do."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from itertools import islice
from typing import Any

from pydantic.fields import FieldInfo
from pydantic_core import ErrorDetails

from tnquench.config.extras import KINDS
from tnquench.config.hints import nearest, unknown_name
from tnquench.config.notation import shown, shown_section
from tnquench.config.profile import SHAPES
from tnquench.config.schema import LATER_CHOICES, PROFILES, SECTIONS, Config
from tnquench.config.setting import Section, note
from tnquench.config.wording import Allowed, allowed, alternatives, unit_suffix

#: Most lines about the entries of one list, and about one config.
MOST_ENTRIES = 3
MOST_LINES = 100

_OUT_OF_BOUNDS = {"greater_than", "greater_than_equal", "less_than", "less_than_equal"}


@dataclass(frozen=True)
class Place:
    """Where in a config something is: a setting (and the entry of its list), or a whole section."""

    section: str
    owner: type[Section] | None = None
    key: str | None = None
    entry: int | None = None

    @property
    def name(self) -> str:
        """The place as a message begins with it."""
        setting = f"{self.key}[{self.entry}]" if self.entry is not None else self.key
        return f"{shown_section(self.section)} {setting}" if self.section else str(setting)


def place_of(location: Sequence[int | str]) -> Place:
    """Return the place that pydantic's location (with its tags of shape or kind) means."""
    top, inner = str(location[0]), location[1:]
    if top not in SECTIONS:
        return Place("", Config, top)
    if not inner:
        return Place(top)
    section, owner, rest = top, SECTIONS[top], inner
    if top == "start" and inner[0] in PROFILES:
        section = f"start.{inner[0]}"
        if len(inner) == 1:
            return Place(section)
        owner, rest = SHAPES[str(inner[1])], inner[2:]
    if top == "chain" and inner[0] == "extra" and len(inner) > 1:
        section = f"chain.extra[{inner[1]}]"
        if len(inner) == 2:
            return Place(section)
        owner, rest = KINDS[str(inner[2])], inner[3:]
    entry = rest[1] if len(rest) > 1 and isinstance(rest[1], int) else None
    return Place(section, owner, str(rest[0]), entry)


def problem_lines(errors: Sequence[ErrorDetails]) -> list[str]:
    """Return one line per problem; a long series about one list, or about a whole config, is cut short."""
    entries: Counter[tuple[str, str | None]] = Counter()
    lines: list[str] = []
    for position, error in enumerate(errors):
        place = place_of(error["loc"])
        if place.entry is not None:
            entries[place.section, place.key] += 1
            if entries[place.section, place.key] > MOST_ENTRIES:
                continue
        lines.extend(islice(_lines(place, error), MOST_LINES))
        if len(lines) >= MOST_LINES:
            lines.append(f"{len(errors) - position - 1} more problems; mend these first")
            break
    for (section, key), count in entries.items():
        if count > MOST_ENTRIES:
            lines.append(f"{shown_section(section)} {key}: {count - MOST_ENTRIES} more such entries")
    return lines


def _lines(place: Place, error: ErrorDetails) -> Iterator[str]:
    kind, found = error["type"], error["input"]
    if place.key is None:
        yield from _about_section(place, kind, found)
    elif kind == "extra_forbidden":
        yield unknown_name(place.key, found, section=place.section, owner=place.owner)
    elif place.owner is not None:
        field = place.owner.model_fields[place.key]
        accepted = _with_unit(str(allowed(field)), place, field)
        if kind == "missing":
            yield f"{place.name}: missing; must be {accepted}"
        else:
            yield f"{place.name} = {shown(found)}: {_complaint(place, field, kind=kind, found=found)}"


def _complaint(place: Place, field: FieldInfo, *, kind: str, found: Any) -> str:
    accepted = allowed(field)
    if accepted.choices and (place.entry is not None or not accepted.listed):
        return _about_choice(place, accepted, found=found)
    too_large = kind == "float_type" and isinstance(found, int) and not isinstance(found, bool)
    if kind == "finite_number" or too_large:
        return "must be a finite number"
    if kind in _OUT_OF_BOUNDS:
        return f"must be {_with_unit(accepted.bounds, place, field)}"
    entry = Allowed(noun=accepted.noun, bounds=accepted.bounds) if place.entry is not None else accepted
    return f"must be {_with_unit(str(entry), place, field)}"


def _about_choice(place: Place, accepted: Allowed, *, found: Any) -> str:
    either = str(Allowed(choices=accepted.choices))
    if found in LATER_CHOICES.get(f"{place.section}.{place.key}", ()):
        return f"not available in this version; available: {either}"
    names = [choice for choice in accepted.choices if isinstance(choice, str)]
    meant = nearest(found, names) if isinstance(found, str) and len(names) > 1 else None
    return f'must be {either}; did you mean "{meant}"?' if meant else f"must be {either}"


def _about_section(place: Place, kind: str, found: Any) -> Iterator[str]:
    is_profile = place.section not in SECTIONS
    if kind == "missing":
        yield f"[{place.section}]: section missing; it must set {_needed(place.section)}"
    elif kind in ("union_tag_not_found", "union_tag_invalid"):
        tag, variants = ("kind", KINDS) if place.section.startswith("chain.") else ("shape", SHAPES)
        yield _about_tag(place.section, found, tag=tag, variants=variants)
        known = {key for variant in variants.values() for key in variant.model_fields}
        for key, value in found.items():
            if key not in known:
                yield unknown_name(key, value, section=place.section, owner=None)
    elif place.section.startswith("chain."):
        yield f"{shown_section(place.section)} = {shown(found)}: must be a section, headed [[chain.extra]]"
    else:
        parent, _, key = place.section.rpartition(".")
        name = f"[{parent}] {key}" if parent else key
        uniform = '; for one value everywhere it sets shape = "uniform" and value' if is_profile else ""
        yield f"{name} = {shown(found)}: must be one section, headed [{place.section}]{uniform}"


def _about_tag(section: str, found: Mapping[str, Any], *, tag: str, variants: Iterable[str]) -> str:
    """Say that a profile's shape, or an extra's kind, is missing or unknown."""
    place, either = f"{shown_section(section)} {tag}", alternatives(f'"{name}"' for name in variants)
    if tag not in found:
        return f"{place}: missing; must be {either}"
    meant = nearest(found[tag], variants) if isinstance(found[tag], str) else None
    hint = f'; did you mean "{meant}"?' if meant else ""
    return f"{place} = {shown(found[tag])}: must be {either}{hint}"


def _needed(section: str) -> str:
    if section not in SECTIONS:
        return "shape and the values of that shape"
    required = [key for key, field in SECTIONS[section].model_fields.items() if field.is_required()]
    return alternatives((f"[start.{key}]" if key in PROFILES else key for key in required), last="and")


def _with_unit(text: str, place: Place, field: FieldInfo) -> str:
    unit = unit_suffix(field, profile_unit="1/J" if place.section == "start.beta" else "")
    remark = note(field, "remark") if place.entry is None else ""
    return f"{text}{unit}{f' ({remark})' if remark else ''}"
