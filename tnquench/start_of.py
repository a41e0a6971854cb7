"""The start and the extra terms of a config in numbers: profiles on places, reach, what each term is."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
from scipy.interpolate import PchipInterpolator

from tnquench.budget.verdict import SHARP_REACH
from tnquench.config.schema import Config
from tnquench.conventions import Reals, bond_positions, site_positions
from tnquench.model import profiles
from tnquench.model.catalogue import MODELS
from tnquench.model.extras import ExtraTerm

#: A tangent or a Gaussian counts as flat beyond so many of its widths.
FLAT_BEYOND = 3.0

_SHAPES: dict[str, Callable[..., Reals]] = {
    "uniform": profiles.uniform,
    "step": profiles.step,
    "bump": profiles.bump,
    "wave": profiles.wave,
}


def profile_values(profile: Any, positions: Reals) -> Reals:
    """Return a profile of the config at every position of a chain; a table gives its central values to a
    shorter one."""
    if profile.shape == "table":
        table = np.asarray(profile.values, dtype=np.float64)
        cut = (len(table) - len(positions)) // 2
        return table[cut : len(table) - cut]
    return _SHAPES[profile.shape](positions, **profile.model_dump(exclude={"shape"}))


def potential_profiles(config: Config) -> dict[str, Any]:
    """Return the profiles of field and chemical potential that the config has, by the charge's observable."""
    own = MODELS[config.chain.model].profiles
    given = {charge: getattr(config.start, name) for name, charge in own.items()}
    return {charge: profile for charge, profile in given.items() if profile is not None}


def start_profiles(config: Config, *, sites: int) -> tuple[Reals, dict[str, Reals]]:
    """Return beta on each bond of a chain of `sites` sites, and beta h or beta mu on each site by the
    charge's observable."""
    bonds = bond_positions(sites)
    beta = profile_values(config.start.beta, bonds)
    if config.start.joint == "separate":
        beta = np.where(bonds == 0.0, 0.0, beta)
    on_sites = site_positions(sites)
    return beta, {
        charge: profile_values(profile, on_sites) for charge, profile in potential_profiles(config).items()
    }


def extra_terms(config: Config) -> tuple[ExtraTerm, ...]:
    """Return the extra terms of a config as the model takes them."""
    return tuple(
        ExtraTerm(**extra.model_dump(exclude={"file"}, exclude_none=True)) for extra in config.chain.extra
    )


def value_at(profile: Any, x: float) -> float:
    """Return a profile's value at one position; not for tables."""
    return float(profile_values(profile, np.array([x]))[0])


def is_sharp(profile: Any) -> bool:
    """Return whether a profile jumps at x = 0."""
    return bool(profile.shape == "step" and profile.width == 0.0 and profile.left != profile.right)


def is_flat_or_sharp(profile: Any) -> bool:
    """Return whether a profile is constant on both sides of x = 0."""
    return bool(profile.shape == "uniform" or (profile.shape == "step" and profile.width == 0.0))


def smooth_function(profile: Any, positions: Reals) -> Callable[[Reals], Reals]:
    """Return a profile as a function of position; a table is interpolated monotonically and flat beyond its
    ends.

    positions : where the values of a table lie
    """
    if profile.shape != "table":
        return lambda x: profile_values(profile, np.asarray(x, dtype=np.float64))
    if len(positions) == 1:
        return lambda x: np.full(np.shape(x), float(profile.values[0]))
    interpolate = PchipInterpolator(positions, np.asarray(profile.values, dtype=np.float64))
    return lambda x: np.asarray(interpolate(np.clip(x, positions[0], positions[-1])))


def start_reach(config: Config) -> float:
    """Return the distance from x = 0 beyond which nothing moves until news from the middle arrives, infinite
    if there is none: every profile is flat there, and every extra term part of the start."""
    if any(not _rests(extra, config.chain.model) for extra in extra_terms(config)):
        return float("inf")
    every = (config.start.beta, *potential_profiles(config).values())
    return SHARP_REACH + max(_reach(profile) for profile in every)


def _rests(extra: ExtraTerm, model: str) -> bool:
    """Return whether an extra term leaves a start with flat profiles at rest, in the chain and in its
    prediction: a potential moves the predicted one, which lacks the force."""
    commutes = extra.kind == "uniform_field" and model != "ising"
    return commutes or (extra.in_start and extra.kind != "potential")


def _reach(profile: Any) -> float:
    """Return the distance from x = 0 beyond which one profile is flat."""
    if profile.shape in ("step", "bump"):
        return FLAT_BEYOND * float(profile.width)
    return 0.0 if profile.shape == "uniform" else float("inf")
