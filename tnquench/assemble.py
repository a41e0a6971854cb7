"""From a config to the numbers that the kernels take: settings stop here."""

from __future__ import annotations

from math import sqrt

from tnquench.budget.assess import RunSettings
from tnquench.budget.companions import coarser_steps, shorter_length
from tnquench.config.energies import bond_energy
from tnquench.config.rules import default_time_step
from tnquench.config.schema import Config
from tnquench.evolution.real_time import steps_between
from tnquench.model.catalogue import build_chain
from tnquench.model.chain import start_terms
from tnquench.model.extras import ExtraTerm
from tnquench.observables.quench import PREPARATION_SHARE, Quench
from tnquench.prediction_of import build_prediction, is_exact, no_prediction, sample_times
from tnquench.start_of import extra_terms, start_profiles, start_reach

__all__ = [
    "budget_settings",
    "build_prediction",
    "build_quench",
    "build_shorter",
    "default_step",
    "extra_events",
    "no_prediction",
    "sample_times",
    "start_reach",
]

#: Error allowed in the start: this fraction of sqrt(discarded weight), the norm that one cut may lose.
START_SHARE = 0.1

#: The coarser companion needs a step to double: a main run takes at least so many in each interval.
FEWEST_STEPS = 2

#: Kinds of extra terms that are quadratic in fermions wherever the fermions of the chain are free.
_ONE_BODY = ("staggered_field", "site_disorder", "potential", "bond_alternation", "bond_disorder")


def build_quench(config: Config, *, weight: float, time_step: float, sites: int | None = None) -> Quench:
    """Return the quench of a config at a given discarded weight and largest time step, on its own or another
    length."""
    sites = sites or config.chain.sites
    chain, energy = build_chain(
        config.chain.model,
        sites=sites,
        parameters=config.chain.parameters,
        extras=extra_terms(config),
        full_sites=config.chain.sites,
    )
    beta, potentials = start_profiles(config, sites=sites)
    return Quench(
        chain=chain,
        start_terms=start_terms(
            chain,
            beta=beta.tolist(),
            potentials={charge: values.tolist() for charge, values in potentials.items()},
            energy=energy,
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


def default_step(config: Config) -> float:
    """Return the config's time step, or the default one where an accuracy leaves it open."""
    if config.evolution.time_step is not None:
        return config.evolution.time_step
    energy = bond_energy(config.chain.model_dump())
    assert energy is not None, "a loaded config has all parameters of its model"
    return default_time_step(trotter_order=config.evolution.trotter_order, energy=energy)


def budget_settings(config: Config, quench: Quench) -> RunSettings:
    """Return what the budget must know of a main run."""
    return RunSettings(
        step_ratio=quench.steps / coarser_steps(quench.steps),
        trotter_order=quench.trotter_order,
        resolve_at=config.budget.resolve_at,
        reach=start_reach(config),
    )


_EXTRA_NAMES = {
    "staggered_field": "a staggered field",
    "uniform_field": "a uniform field",
    "longitudinal_field": "a field along x",
    "next_nearest": "a next-nearest-neighbour coupling",
    "bond_alternation": "an alternation of the bonds",
    "bond_disorder": "disorder of the bonds",
    "site_disorder": "disorder on the sites",
}


def extra_events(config: Config) -> list[dict[str, object]]:
    """Return one event for each extra term: what it does to integrability, and what the prediction has of
    it."""
    events: list[dict[str, object]] = []
    for extra in extra_terms(config):
        name = f"a {extra.shape} potential" if extra.shape else _EXTRA_NAMES[extra.kind]
        when = "" if extra.in_start else ", absent from the start,"
        sentence = f"{name}{when} {_effect(config, extra)}"
        if not no_prediction(config):
            sentence += f"; {_predicted(config, extra)}"
        events.append({"kind": "extra", "detail": sentence})
    return events


def _effect(config: Config, extra: ExtraTerm) -> str:
    """Return what an extra term does to integrability."""
    model = config.chain.model
    if extra.strength == 0.0 and not any(extra.values):
        return "changes nothing, for its strength is zero"
    if extra.kind == "uniform_field":
        if model == "ising":
            return "only shifts the transverse field"
        return "commutes with the rest of the Hamiltonian and by itself breaks nothing"
    free = model == "ising" or 0.0 in (
        config.chain.parameters.get("anisotropy"),
        config.chain.parameters.get("repulsion"),
    )
    if free and extra.kind in _ONE_BODY:
        return "by itself leaves a chain of free fermions, but not a uniform one"
    return "breaks integrability"


def _predicted(config: Config, extra: ExtraTerm) -> str:
    """Return what the prediction has of an extra term."""
    parent = f"the prediction is that of the {config.chain.model} chain without it"
    if not is_exact(config, extra):
        return parent
    if extra.kind == "uniform_field":
        return "the prediction contains it exactly"
    start = " and of the local state at t = 0" if extra.in_start else ""
    return f"{parent}, save that it is part of the energy{start}; the force on the quasiparticles is left out"
