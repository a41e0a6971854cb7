"""Rules that tie settings to one another, and the default that follows from others."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterator, Mapping
from typing import Any

from tnquench.config.chain_rules import Settings, Unusable, chain_conflicts, section_of
from tnquench.config.cluster import cluster_conflicts
from tnquench.config.energies import ENERGY_IN_WORDS, bond_energy
from tnquench.config.notation import quantity, shown
from tnquench.config.stretch import stretch_conflicts
from tnquench.config.sweep import sweep_conflicts

MOST_TIMES = 100_000
MOST_STEPS = 10_000_000
#: Longest time step times largest bond energy: estimates of the Trotter error were found to claim too little
#: from about 2 on (8 to 12 sites, D = 1, order 4), and to hold at 1.
LONGEST_PHASE = 1.0
#: Relative rounding allowed when `until` is compared with multiples of `every`.
MULTIPLE_TOLERANCE = 1e-9
#: Smallest width (lattice spacings) of a step that is not sharp.
SMALLEST_WIDTH = 1e-3
#: Gram eigenvalues carry rounding near 1e-16 of the largest, so smaller weights drown in it (common practice,
#: no source).
SMALLEST_GRAM_WEIGHT = 1e-13


def conflicts(settings: Settings) -> list[str]:
    """Return one line per contradiction between settings.

    settings : value or `Unusable` by dotted name, "section.key"; profiles as mappings of their own keys
    """
    rules = (
        _weight_or_accuracy,
        _times,
        _steps,
        _gram_weight,
        _widths,
        _tables,
        _separate,
        _levels,
        stretch_conflicts,
        sweep_conflicts,
        cluster_conflicts,
    )
    return [*chain_conflicts(settings), *(problem for rule in rules for problem in rule(settings))]


def default_time_step(*, trotter_order: int, energy: float) -> float:
    """Return the Trotter step used where none is asked for; `energy` : the scale of `bond_energy`."""
    return {2: 0.05, 4: 0.2}[trotter_order] / energy


def _is_number(*values: object) -> bool:
    return all(isinstance(value, (int, float)) for value in values)


def _weight_or_accuracy(settings: Settings) -> Iterator[str]:
    weight, accuracy = settings["evolution.discarded_weight"], settings["evolution.accuracy"]
    if weight is None and accuracy is None:
        yield "[evolution] discarded_weight: missing; give it, or accuracy in its place"
    if weight is not None and accuracy is not None:
        yield "[evolution] discarded_weight and accuracy: both given; keep one of them"
    if accuracy is not None and settings["budget.companions"] == "none":
        wanted = 'needs the companions that verify it; set companions = "full", or give a discarded_weight'
        yield f'[budget] companions = "none": [evolution] accuracy {wanted}'


def _times(settings: Settings) -> Iterator[str]:
    until, every = settings["evolution.until"], settings["evolution.every"]
    if not _is_number(until, every):
        return
    ratio = until / every
    if ratio > MOST_TIMES:
        limit = f"more than {MOST_TIMES} measurements up to until = {quantity(until)}; make it longer"
        yield f"[evolution] every = {shown(every)}: gives {limit}"
    elif round(ratio) < 1 or abs(ratio - round(ratio)) > MULTIPLE_TOLERANCE * ratio:
        near = [quantity(count * every) for count in (int(ratio), int(ratio) + 1) if count > 0]
        wanted = f"must be a whole multiple of every = {quantity(every)}; nearest: {' or '.join(near)}"
        yield f"[evolution] until = {shown(until)}: {wanted}"


def _steps(settings: Settings) -> Iterator[str]:
    names = ("time_step", "until", "trotter_order", "accuracy")
    step, until, order, accuracy = (settings[f"evolution.{name}"] for name in names)
    chain = section_of(settings, "chain")
    energy = bond_energy(chain)
    if energy and step is None and accuracy is None and _is_number(order):
        step = default_time_step(trotter_order=order, energy=energy)
    if energy and _is_number(step) and step > LONGEST_PHASE / energy:
        scale = ENERGY_IN_WORDS[chain["model"]]
        scale = f"the bond energy, {scale} and what extra terms add," if chain["extra"] else scale
        limit = f"must be at most {quantity(LONGEST_PHASE / energy)}, where step times {scale}"
        yield (
            f"[evolution] time_step = {quantity(step)}: {limit} is {LONGEST_PHASE:g}; beyond it no error "
            "estimate holds"
        )
    if _is_number(step, until) and until > MOST_STEPS * step:
        limit = f"more than {MOST_STEPS} steps up to until = {quantity(until)}; make it longer"
        yield f"[evolution] time_step = {quantity(step)}: gives {limit}"


def _gram_weight(settings: Settings) -> Iterator[str]:
    cut, weight = settings["evolution.cut"], settings["evolution.discarded_weight"]
    if cut == "gram" and _is_number(weight) and weight < SMALLEST_GRAM_WEIGHT:
        sound = f"sound for weights from {quantity(SMALLEST_GRAM_WEIGHT)} on, not {quantity(weight)}"
        yield f'[evolution] cut = "gram": {sound}; use "subspace" or "svd"'


def _widths(settings: Settings) -> Iterator[str]:
    for name in ("beta", "beta_field", "beta_mu"):
        profile = settings[f"start.{name}"]
        if not isinstance(profile, Mapping) or profile.get("shape") != "step":
            continue
        width: Any = profile.get("width", 0.0)
        if _is_number(width) and 0.0 < width < SMALLEST_WIDTH:
            wanted = f"must be 0 (sharp) or from {quantity(SMALLEST_WIDTH)} on"
            yield f"[start.{name}] width = {shown(width)}: {wanted} (in units of the lattice spacing)"


def _tables(settings: Settings) -> Iterator[str]:
    sites = settings["chain.sites"]
    lengths = {
        "beta": ("sites - 1, one a bond", -1),
        "beta_field": ("sites, one a site", 0),
        "beta_mu": ("sites, one a site", 0),
    }
    for name, (meaning, excess) in lengths.items():
        profile = settings[f"start.{name}"]
        if not isinstance(profile, Mapping) or profile.get("shape") != "table":
            continue
        values = profile.get("values")
        if not isinstance(values, (list, tuple)):
            continue
        if profile.get("file") is not None:
            yield f"[start.{name}] values and file: both given; keep one of them"
        elif _is_number(sites) and len(values) != sites + excess:
            yield f"[start.{name}] table of {len(values)} values: must have {sites + excess} ({meaning})"


def _separate(settings: Settings) -> Iterator[str]:
    joint, sites = settings["start.joint"], settings["chain.sites"]
    if joint != "separate":
        return
    profiles = [settings[f"start.{name}"] for name in ("beta", "beta_field", "beta_mu")]
    shapes = [profile.get("shape") for profile in profiles if isinstance(profile, Mapping)]
    judged = not any(isinstance(profile, Unusable) for profile in profiles)
    if judged and not ("step" in shapes and set(shapes) <= {"step", "uniform"}):
        found = " and ".join(f'"{shape}"' for shape in shapes)
        wanted = f'needs a profile of shape "step" (and none but "step" or "uniform"), found {found}'
        yield f'[start] joint = "separate": {wanted}; use "coupled"'
    if _is_number(sites) and sites % 2:
        wanted = f"needs an even number of sites, so that a bond lies at x = 0, found sites = {sites}"
        yield f'[start] joint = "separate": {wanted}'


def _levels(settings: Settings) -> Iterator[str]:
    levels = settings["hydrodynamics.levels"]
    if not isinstance(levels, (list, tuple)):
        return
    counts = Counter(level for level in levels if isinstance(level, str))
    twice = sorted(level for level, count in counts.items() if count > 1)
    for level in twice:
        yield f"[hydrodynamics] levels holds {shown(level)} more than once; name each level once"
