"""From a config to the numbers that the kernels take: settings stop here."""

from __future__ import annotations

from collections.abc import Callable
from math import sqrt
from typing import Any

import numpy as np
from scipy.interpolate import PchipInterpolator

from tnquench.bethe.strings import UnsupportedAnisotropy, supported_nu
from tnquench.budget.assess import RunSettings
from tnquench.budget.companions import coarser_steps, shorter_length
from tnquench.budget.verdict import SHARP_REACH
from tnquench.config.rules import default_time_step
from tnquench.config.schema import Config
from tnquench.conventions import Reals, bond_positions, site_positions
from tnquench.errors import ConvergenceError, InputError
from tnquench.evolution.real_time import steps_between
from tnquench.hydro.prediction import Prediction, predict_smooth, predict_step
from tnquench.model import profiles
from tnquench.model.chain import start_terms, xxz_chain
from tnquench.observables.quench import PREPARATION_SHARE, Quench

#: Error allowed in the start: this fraction of sqrt(discarded weight), the norm that one cut may lose.
START_SHARE = 0.03

#: The coarser companion needs a step to double: a main run takes at least so many in each interval.
FEWEST_STEPS = 2

#: A tangent or a Gaussian counts as flat beyond so many of its widths.
FLAT_BEYOND = 3.0

#: Shortest chain for which a prediction is made.
FEWEST_PREDICTED = 4

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


def start_profiles(config: Config, *, sites: int) -> tuple[Reals, Reals | None]:
    """Return beta on each bond and beta h on each site (None without a field) of a chain of `sites` sites."""
    bonds = bond_positions(sites)
    beta = profile_values(config.start.beta, bonds)
    if config.start.joint == "separate":
        beta = np.where(bonds == 0.0, 0.0, beta)
    field = config.start.beta_field
    return beta, None if field is None else profile_values(field, site_positions(sites))


def build_quench(config: Config, *, weight: float, time_step: float, sites: int | None = None) -> Quench:
    """Return the quench of a config at a given discarded weight and largest time step, on its own or another
    length."""
    sites = sites or config.chain.sites
    chain = xxz_chain(sites=sites, anisotropy=config.chain.anisotropy, coupling=config.chain.coupling)
    beta, field = start_profiles(config, sites=sites)
    return Quench(
        chain=chain,
        start_terms=start_terms(
            chain, beta=beta.tolist(), beta_charge=None if field is None else field.tolist()
        ),
        every=config.evolution.every,
        samples=config.evolution.intervals,
        steps=max(FEWEST_STEPS, steps_between(every=config.evolution.every, time_step=time_step)),
        trotter_order=config.evolution.trotter_order,
        discarded_weight=weight,
        preparation_weight=PREPARATION_SHARE * weight,
        preparation_distance=START_SHARE * sqrt(weight),
        bond_ceiling=config.evolution.bond_ceiling,
        cutting=config.evolution.cut,
    )


def build_shorter(config: Config, *, weight: float, time_step: float) -> Quench | None:
    """Return the same quench on a shorter chain, or None if the chain is too short to shorten."""
    sites = shorter_length(config.chain.sites)
    return None if sites is None else build_quench(config, weight=weight, time_step=time_step, sites=sites)


def no_prediction(config: Config) -> str:
    """Return why a config has no Euler prediction, as far as can be told at no cost; empty if nothing is
    against it."""
    if "euler" not in config.hydrodynamics.levels:
        return "no hydrodynamic level was asked for"
    try:
        supported_nu(config.chain.anisotropy)
    except UnsupportedAnisotropy as refusal:
        return str(refusal)
    if config.chain.sites < FEWEST_PREDICTED:
        return (
            f"{config.chain.sites} sites are no hydrodynamic system; predictions begin at {FEWEST_PREDICTED}"
        )
    profiles_ = (config.start.beta, config.start.beta_field)
    if any(_is_sharp(profile) for profile in profiles_) and not all(_is_flat_or_sharp(p) for p in profiles_):
        return "a sharp step beside a smooth profile has no prediction in this version"
    return ""


def build_prediction(config: Config) -> tuple[Prediction | None, str]:
    """Return the Euler prediction on the run's points, or None and the reason why there is none."""
    if reason := no_prediction(config):
        return None, reason
    joined = any(_is_sharp(profile) for profile in (config.start.beta, config.start.beta_field))
    try:
        return (_step_prediction if joined else _smooth_prediction)(config), ""
    except InputError as refusal:  # a start the theory cannot take; the chain can be simulated all the same
        return None, "; ".join(refusal.problems)
    except ConvergenceError as failure:
        return None, str(failure)


def _step_prediction(config: Config) -> Prediction:
    """Predict two joined halves."""
    sites = config.chain.sites
    beta, field = start_profiles(config, sites=sites)
    ends = {side: (float(beta[side]), 0.0 if field is None else float(field[side])) for side in (0, -1)}
    centre_beta = _centre_value(config.start.beta)
    if config.start.joint == "separate":
        centre_beta = 0.0
    return predict_step(
        anisotropy=config.chain.anisotropy,
        coupling=config.chain.coupling,
        left=ends[0],
        right=ends[-1],
        middle=(
            centre_beta,
            0.0 if config.start.beta_field is None else _centre_value(config.start.beta_field),
        ),
        times=sample_times(config),
        sites=site_positions(sites),
        bonds=bond_positions(sites),
    )


def _smooth_prediction(config: Config) -> Prediction:
    """Predict a smooth profile by characteristics."""
    sites = config.chain.sites
    field = config.start.beta_field
    return predict_smooth(
        anisotropy=config.chain.anisotropy,
        coupling=config.chain.coupling,
        beta=_smooth_function(config.start.beta, bond_positions(sites)),
        beta_field=np.zeros_like if field is None else _smooth_function(field, site_positions(sites)),
        times=sample_times(config),
        sites=site_positions(sites),
        bonds=bond_positions(sites),
    )


def sample_times(config: Config) -> Reals:
    """Return the times of all samples, shape (time,)."""
    return config.evolution.every * np.arange(config.evolution.intervals + 1, dtype=np.float64)


def _centre_value(profile: Any) -> float:
    """Return a profile's value at x = 0."""
    return float(profile_values(profile, np.zeros(1))[0])


def _is_sharp(profile: Any) -> bool:
    """Return whether a profile jumps at x = 0."""
    return (
        profile is not None
        and profile.shape == "step"
        and profile.width == 0.0
        and profile.left != profile.right
    )


def _is_flat_or_sharp(profile: Any) -> bool:
    """Return whether a profile is constant on both sides of x = 0."""
    return profile is None or profile.shape == "uniform" or (profile.shape == "step" and profile.width == 0.0)


def _smooth_function(profile: Any, positions: Reals) -> Callable[[Reals], Reals]:
    """Return a profile as a function of position; a table is interpolated monotonically and flat beyond its
    ends."""
    if profile.shape != "table":
        return lambda x: profile_values(profile, np.asarray(x, dtype=np.float64))
    if len(positions) == 1:
        return lambda x: np.full(np.shape(x), float(profile.values[0]))
    interpolate = PchipInterpolator(positions, np.asarray(profile.values, dtype=np.float64))
    return lambda x: np.asarray(interpolate(np.clip(x, positions[0], positions[-1])))


def default_step(config: Config) -> float:
    """Return the config's time step, or the default one where an accuracy leaves it open."""
    return config.evolution.time_step or default_time_step(
        trotter_order=config.evolution.trotter_order,
        coupling=config.chain.coupling,
        anisotropy=config.chain.anisotropy,
    )


def start_reach(config: Config) -> float:
    """Return the distance from x = 0 beyond which every profile of the start is flat, infinite if there is
    none."""
    return SHARP_REACH + max(
        _reach(profile) for profile in (config.start.beta, config.start.beta_field) if profile
    )


def _reach(profile: Any) -> float:
    """Return the distance from x = 0 beyond which one profile is flat."""
    if profile.shape in ("step", "bump"):
        return FLAT_BEYOND * float(profile.width)
    return 0.0 if profile.shape == "uniform" else float("inf")


def budget_settings(config: Config, quench: Quench) -> RunSettings:
    """Return what the budget must know of a main run."""
    return RunSettings(
        step_ratio=quench.steps / coarser_steps(quench.steps),
        trotter_order=quench.trotter_order,
        resolve_at=config.budget.resolve_at,
        reach=start_reach(config),
    )
