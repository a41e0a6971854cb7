"""Writes settings: the effective config as TOML, and the reference page of every setting."""

from __future__ import annotations

from collections.abc import Iterator
from textwrap import dedent

from pydantic.fields import FieldInfo

from tnquench.config.extras import KINDS
from tnquench.config.notation import written
from tnquench.config.profile import PROFILE_UNIT, SHAPES
from tnquench.config.schema import LATER, LATER_CHOICES, SECTIONS, Config
from tnquench.config.setting import Section, note
from tnquench.config.wording import allowed, alternatives

_VALUES_A_LINE = 8

_INTRODUCTION = """\
    # Settings

    A config is a TOML file. An unknown name is an error, and all problems of a config are reported at once.
    hbar = k_B = lattice spacing = 1. Energies are in the unit in which the coupling is given, times in its
    inverse: with `coupling = 1` these are J and 1/J, as the tables below write them. Another coupling
    rescales no other number. For fermion and hubbard read J as the unit in which the hopping is given.
    """

_PROFILES = """\
## Profiles: [start.beta], [start.beta_field] and [start.beta_mu]

`beta` has one value a bond, in units of 1/J; `beta_field` and `beta_mu` have one value a site, pure numbers.
Positions x count from the middle of the chain.
"""

_EXTRAS = """\
## Extra terms: [[chain.extra]]

Terms added to the Hamiltonian, each in a section of its own; a kind may appear more than once. Most of them
break integrability: the prediction then belongs to the model without them, and the report says so. The q of a
term is S^z (xxz), sigma^z (ising), n - 1/2 (fermion); in hubbard S^z for fields, n - 1 for potential and
disorder. A term of one site belongs half to each adjacent bond (wholly to the only bond of an end), a term of
sites i and i + 2 half to each of its two bonds. Signs, random numbers and tables count from the left end.
"""


def effective_toml(config: Config) -> str:
    """Return every setting of `config`, defaults included, as TOML that loads back to an equal config.

    A setting without a value (accuracy where a weight is given, say) is left out.
    """
    lines = [f"title = {written(config.title)}"]
    for name in SECTIONS:
        table = list(_table(name, getattr(config, name)))
        lines += ["", *table] if len(table) > 1 else []  # without any setting a section says nothing
    return "\n".join(lines) + "\n"


def settings_page() -> str:
    """Return the reference page of every setting, as Markdown made from the schema."""
    parts = [dedent(_INTRODUCTION), *_section_page("Top of the file", Config)]
    for name, section in SECTIONS.items():
        parts += _section_page(f"[{name}]", section, header=f"[{name}]\n")
        parts += _later(name)
    parts.append(_PROFILES)
    for shape, schema in SHAPES.items():
        parts += _section_page(f'shape = "{shape}"', schema, level=3, header="[start.beta]\n")
    parts.append(_EXTRAS)
    for kind, schema in KINDS.items():
        parts += _section_page(f'kind = "{kind}"', schema, level=3, header="[[chain.extra]]\n")
    return "\n".join(parts)


def _table(name: str, section: Section) -> Iterator[str]:
    yield f"[{name}]"
    values = {key: getattr(section, key) for key in type(section).model_fields}
    for key, value in values.items():
        if _is_list_of_sections(value) or (value == () and type(section).model_fields[key].default == ()):
            continue
        if isinstance(value, tuple) and len(value) > _VALUES_A_LINE:
            rows = [value[first : first + _VALUES_A_LINE] for first in range(0, len(value), _VALUES_A_LINE)]
            yield f"{key} = ["
            yield from (f"    {', '.join(written(entry) for entry in row)}," for row in rows)
            yield "]"
        elif value is not None and not isinstance(value, Section):
            yield f"{key} = {written(value)}"
    for key, value in values.items():
        if isinstance(value, Section):
            yield ""
            yield from _table(f"{name}.{key}", value)
        elif _is_list_of_sections(value):
            for entry in value:
                yield ""
                yield from _table(f"[{name}.{key}]", entry)


def _is_list_of_sections(value: object) -> bool:
    return isinstance(value, tuple) and any(isinstance(entry, Section) for entry in value)


def _section_page(heading: str, section: type[Section], *, level: int = 2, header: str = "") -> Iterator[str]:
    yield f"{'#' * level} {heading}\n"
    yield f"{' '.join((section.__doc__ or '').split())}\n"
    yield "| setting | allowed | default | unit | meaning |\n|---|---|---|---|---|"
    for key, field in section.model_fields.items():
        if key not in SECTIONS:
            cells = (f"`{key}`", str(allowed(field)), _default(field), _unit(field), field.description or "")
            yield f"| {' | '.join(cell.replace('|', chr(92) + '|') for cell in cells)} |"
    yield f"\n```toml\n{header}{section.EXAMPLE}\n```\n"


def _later(section: str) -> Iterator[str]:
    """Say which choices and settings of a section are not built yet."""
    belongs = f"{section}."
    choices = [
        f'"{name}"' for key, names in LATER_CHOICES.items() if key.startswith(belongs) for name in names
    ]
    settings = [f"`{key.removeprefix(belongs)}`" for key in LATER if key.startswith(belongs)]
    if choices or settings:
        yield f"Not available in this version: {alternatives([*choices, *settings], last='and')}.\n"


def _default(field: FieldInfo) -> str:
    if rule := note(field, "default_rule"):
        return str(rule)
    if field.is_required():
        return "must be given"
    return "none" if field.default is None else f"`{written(field.default)}`"


def _unit(field: FieldInfo) -> str:
    unit = note(field, "unit")
    return "that of the profile" if unit == PROFILE_UNIT else str(unit)
