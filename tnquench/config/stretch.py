"""The section [stretch]: the same profile at several sizes, and what cannot be stretched."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import Annotated, Any, ClassVar

from pydantic import Field, Strict

from tnquench.config.chain_rules import Settings
from tnquench.config.notation import quantity, shown, shown_section
from tnquench.config.profile import LARGEST_LENGTH, SMALLEST_LENGTH
from tnquench.config.setting import Section, setting

SMALLEST_FACTOR, LARGEST_FACTOR = 0.1, 100.0
MOST_FACTORS = 16
#: Bounds of what is stretched, as the schema has them.
FEWEST_SITES, MOST_SITES, LONGEST_TIME = 2, 100_000, 1e6

#: The length of each profile that has one.
LENGTHS = {"step": "width", "bump": "width", "wave": "length"}
#: How the strength of a potential goes with the factor: V(x/factor) keeps its values.
STRENGTH_POWERS = {"harmonic": -2, "linear": -1, "box": 0}
#: Terms of random numbers: a longer chain has more of them, none of them stretched.
RANDOM_KINDS = ("bond_disorder", "site_disorder")


class Stretch(Section):
    """The stretch study: the run again with its profiles, chain and times stretched by each factor.

    Widths, wavelengths, sites (their parity kept), until and every are multiplied by the factor; harmonic
    potentials are divided by its square, linear ones by the factor, boxes widened. The deviation is compared
    at equal x/factor and t/factor, and p of deviation ~ factor^-p is fitted: 1 where diffusion corrects Euler
    hydrodynamics, 2 for free modes. Without this section no study is made.
    """

    EXAMPLE: ClassVar[str] = "factors = [1, 2, 4]"

    factors: (
        Annotated[
            tuple[Annotated[float, Field(ge=SMALLEST_FACTOR, le=LARGEST_FACTOR)], ...], Strict(strict=False)
        ]
        | None
    ) = setting(
        "factors, 1 among them: the run itself; three or more show whether one power describes them",
        default=None,
        default_rule="no study",
    )


def stretched_sites(sites: int, factor: float) -> int:
    """Return factor times as many sites, rounded so that a bond (or a site) stays at x = 0 where there is
    one."""
    return sites + 2 * round(0.5 * (factor - 1.0) * sites)


def stretch_conflicts(settings: Settings) -> Iterator[str]:
    """Yield one line per reason why a config cannot be stretched.

    settings : value or `Unusable` by dotted name, "section.key"
    """
    factors = settings["stretch.factors"]
    if not isinstance(factors, (list, tuple)) or not _are_numbers(*factors):
        return
    place = f"[stretch] factors = {shown(list(factors))}"
    if 1 not in factors:
        yield f"{place}: must hold 1, the run itself"
    if len(set(factors)) < len(factors):
        yield f"{place}: names a factor more than once; name each once"
    elif len(factors) < 2:
        yield f"{place}: must hold two factors at least; without a study leave the section out"
    if settings["hydrodynamics.levels"] in ([], ()):
        yield f'{place}: needs a prediction; set [hydrodynamics] levels = ["euler"]'
    if settings["budget.companions"] == "none":
        yield f'{place}: needs the companions that measure its errors; set [budget] companions = "full"'
    if len(factors) > MOST_FACTORS:
        yield f"{place}: {len(factors)} factors; at most {MOST_FACTORS} are allowed"
    if all(SMALLEST_FACTOR <= factor <= LARGEST_FACTOR for factor in factors) and factors:
        yield from _too_large(settings, smallest=min(factors), largest=max(factors))
    yield from _not_stretchable(settings)


def _not_stretchable(settings: Settings) -> Iterator[str]:
    """Yield what has no stretched form: tables and random terms."""
    instead = "cannot be stretched; use another shape, or leave [stretch] out"
    for name in ("beta", "beta_field", "beta_mu"):
        profile = settings[f"start.{name}"]
        if isinstance(profile, Mapping) and profile.get("shape") == "table":
            yield f'[start.{name}] shape = "table": a table {instead}'
    extras = settings["chain.extra"]
    for index, extra in enumerate(extras if isinstance(extras, (list, tuple)) else ()):
        if not isinstance(extra, Mapping):
            continue
        section, kind = shown_section(f"chain.extra[{index}]"), extra.get("kind")
        if kind == "potential" and extra.get("shape") == "table":
            yield f'{section} shape = "table": a table {instead}'
        elif isinstance(kind, str) and kind in RANDOM_KINDS:
            yield f'{section} kind = "{kind}": random numbers cannot be stretched; leave it or [stretch] out'


def _too_large(settings: Settings, *, smallest: float, largest: float) -> Iterator[str]:
    """Yield what leaves the bounds of its setting when it is stretched."""
    sites, until = settings["chain.sites"], settings["evolution.until"]
    if _are_numbers(sites) and sites >= FEWEST_SITES:
        for factor in (smallest, largest):
            many = stretched_sites(sites, factor)
            if not FEWEST_SITES <= many <= MOST_SITES:
                allowed = f"{FEWEST_SITES} to {MOST_SITES} are allowed"
                yield f"[stretch] factors: {quantity(factor)} times {sites} sites are {many}; {allowed}"
    if _are_numbers(until) and until <= LONGEST_TIME < largest * until:
        reached = f"[evolution] until = {quantity(until)} becomes {quantity(largest * until)}"
        yield f"[stretch] factors: {reached}; at most {quantity(LONGEST_TIME)} is allowed"
    for place, length in _lengths(settings):
        for factor in (smallest, largest):
            if not SMALLEST_LENGTH <= factor * length <= LARGEST_LENGTH and length <= LARGEST_LENGTH:
                allowed = f"{quantity(SMALLEST_LENGTH)} to {quantity(LARGEST_LENGTH)} are allowed"
                stretched = f"{place} = {quantity(length)} becomes {quantity(factor * length)}"
                yield f"[stretch] factors: {stretched}; {allowed}"


def _lengths(settings: Settings) -> Iterator[tuple[str, float]]:
    """Yield every positive length that is stretched, with its place."""
    for name in ("beta", "beta_field", "beta_mu"):
        profile = settings[f"start.{name}"]
        if isinstance(profile, Mapping) and profile.get("shape") in LENGTHS:
            key = LENGTHS[str(profile["shape"])]
            yield from _positive(f"[start.{name}] {key}", profile.get(key))
    extras = settings["chain.extra"]
    for index, extra in enumerate(extras if isinstance(extras, (list, tuple)) else ()):
        if isinstance(extra, Mapping) and extra.get("shape") == "box":
            yield from _positive(f"{shown_section(f'chain.extra[{index}]')} width", extra.get("width"))


def _positive(place: str, value: Any) -> Iterator[tuple[str, float]]:
    if _are_numbers(value) and value > 0:
        yield place, float(value)


def _are_numbers(*values: Any) -> bool:
    return all(isinstance(value, (int, float)) and not isinstance(value, bool) for value in values)
