"""The hydrodynamic prediction of a config: that of the model without its extra terms, which are added only
where they can be treated exactly at Euler scale."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np

from tnquench.config.schema import Config
from tnquench.conventions import Reals, bond_positions, site_positions
from tnquench.errors import ConvergenceError, InputError
from tnquench.hydro.ising import predict_ising
from tnquench.hydro.prediction import Prediction, predict_smooth, predict_step
from tnquench.model.extras import ExtraTerm, potential
from tnquench.start_of import (
    extra_terms,
    is_flat_or_sharp,
    is_sharp,
    potential_profiles,
    smooth_function,
    start_profiles,
    value_at,
)

#: Shortest chain for which a prediction is made.
FEWEST_PREDICTED = 4

#: Potentials that vary slowly enough to be taken into a smooth start point by point.
SLOW_POTENTIALS = ("harmonic", "linear")

Function = Callable[[Reals], Reals]


@dataclass(frozen=True)
class ExactExtras:
    """The extra terms that the prediction contains.

    field : h of all uniform fields -h sum q; started_field : of those that belong to the start's energy
    potentials : harmonic and linear potentials + sum V q on smooth starts; started_potentials : likewise
    """

    field: float = 0.0
    started_field: float = 0.0
    potentials: tuple[ExtraTerm, ...] = ()
    started_potentials: tuple[ExtraTerm, ...] = ()

    def on_site(self, x: Reals) -> Reals:
        """Return the energy a unit of charge at positions x."""
        return _sum_of(self.potentials, x) - self.field

    def started_on_site(self, x: Reals) -> Reals:
        """Return what of it belongs to the start."""
        return _sum_of(self.started_potentials, x) - self.started_field


def is_joined(config: Config) -> bool:
    """Return whether the start consists of two halves joined sharply."""
    return any(is_sharp(profile) for profile in _profiles(config))


def is_exact(config: Config, extra: ExtraTerm) -> bool:
    """Return whether the prediction contains an extra term, at least in energy and start.

    A uniform field commutes with H wherever its q is conserved; in ising, part of the start, it shifts the
    transverse field. A slow potential is taken into energies and into the local chemical potential of smooth
    starts; its force is not.
    """
    if config.chain.model == "ising":
        return extra.kind == "uniform_field" and extra.in_start
    if config.chain.model == "hubbard":
        return False
    slow = extra.kind == "potential" and extra.shape in SLOW_POTENTIALS and not is_joined(config)
    return slow or extra.kind == "uniform_field"


def no_prediction(config: Config) -> str:
    """Return why a config has no Euler prediction, as far as can be told at no cost; empty if nothing is
    against it."""
    if "euler" not in config.hydrodynamics.levels:
        return "no hydrodynamic level was asked for"
    if config.chain.model == "hubbard":
        return "there is no hydrodynamic prediction for the Hubbard chain in this version"
    if config.chain.sites < FEWEST_PREDICTED:
        return (
            f"{config.chain.sites} sites are no hydrodynamic system; predictions begin at {FEWEST_PREDICTED}"
        )
    if is_joined(config) and not all(is_flat_or_sharp(profile) for profile in _profiles(config)):
        return "a sharp step beside a smooth profile has no prediction in this version"
    return ""


def build_prediction(config: Config) -> tuple[Prediction | None, str]:
    """Return the Euler prediction on the run's points, or None and the reason why there is none."""
    if reason := no_prediction(config):
        return None, reason
    if config.chain.model == "ising":
        predict = _ising_prediction
    else:
        predict = _step_prediction if is_joined(config) else _smooth_prediction
    try:
        return predict(config), ""
    except InputError as refusal:  # a start the theory cannot take; the chain can be simulated all the same
        return None, "; ".join(refusal.problems)
    except ConvergenceError as failure:
        return None, str(failure)


def sample_times(config: Config) -> Reals:
    """Return the times of all samples, shape (time,)."""
    return config.evolution.every * np.arange(config.evolution.intervals + 1, dtype=np.float64)


def _step_prediction(config: Config) -> Prediction:
    """Predict two joined halves of xxz or fermion."""
    sites = config.chain.sites
    beta, potentials = start_profiles(config, sites=sites)
    field, extras = potentials.get("charge_density", np.zeros(sites)), _exact_extras(config)
    centre = 0.0 if config.start.joint == "separate" else value_at(config.start.beta, 0.0)
    centre_field = sum(value_at(profile, 0.0) for profile in potential_profiles(config).values())
    states = ((beta[0], field[0]), (beta[-1], field[-1]), (centre, centre_field))
    left, right, middle = (
        (float(inverse), float(product + inverse * extras.started_field)) for inverse, product in states
    )
    coupling, anisotropy = _as_xxz(config)
    prediction = predict_step(
        anisotropy=anisotropy,
        coupling=coupling,
        left=left,
        right=right,
        middle=middle,
        times=sample_times(config),
        sites=site_positions(sites),
        bonds=bond_positions(sites),
    )
    return with_site_energy(prediction, extras.on_site(site_positions(sites)))


def _smooth_prediction(config: Config) -> Prediction:
    """Predict a smooth profile of xxz or fermion by characteristics."""
    x, extras = site_positions(config.chain.sites), _exact_extras(config)
    bonds = bond_positions(config.chain.sites)
    beta = smooth_function(config.start.beta, bonds)
    given = [smooth_function(profile, x) for profile in potential_profiles(config).values()]
    field = given[0] if given else np.zeros_like
    coupling, anisotropy = _as_xxz(config)
    prediction = predict_smooth(
        anisotropy=anisotropy,
        coupling=coupling,
        beta=beta,
        beta_field=_with_start_energy(field, beta, extras),
        times=sample_times(config),
        sites=x,
        bonds=bonds,
    )
    return with_site_energy(prediction, extras.on_site(x))


def _ising_prediction(config: Config) -> Prediction:
    """Predict the transverse-field chain, sharp or smooth."""
    bonds, parameters = bond_positions(config.chain.sites), config.chain.parameters
    smooth, joined = smooth_function(config.start.beta, bonds), is_joined(config)
    separate = config.start.joint == "separate"
    return predict_ising(
        coupling=parameters["coupling"],
        transverse_field=parameters["transverse_field"] + _exact_extras(config).started_field,
        beta=(lambda x: np.where(x == 0.0, 0.0, smooth(x))) if joined and separate else smooth,
        times=sample_times(config),
        sites=site_positions(config.chain.sites),
        bonds=bonds,
        joined=joined,
    )


def with_site_energy(prediction: Prediction, energies: Reals) -> Prediction:
    """Return a prediction for h_j + the shares of sum_i v_i q_i in place of h_j, q conserved by H.

    energies : v_i (site,). Each site's term lies half on each adjacent bond, wholly on the only bond of an
    end, so that energy_density gains these shares of v q. What flows through an inner site i, K_i =
    i[all left of it, all right of it], gains v_i times the mean of the charge currents on its two bonds:
    exact, from the commutators of the halves of v_i q_i with the bond terms beside it.
    """
    if not np.any(energies):
        return prediction
    shares = np.full(energies.size, 0.5)
    shares[[0, -1]] = 1.0

    def added(density: Reals, current: Reals, weights: Reals) -> tuple[Reals, Reals]:
        on_site = shares * weights * density
        flow = np.zeros_like(density)
        flow[:, 1:-1] = 0.5 * weights[1:-1] * (current[:, :-1] + current[:, 1:])
        return on_site[:, :-1] + on_site[:, 1:], flow

    tables = [dict(table) for table in (prediction.fields, prediction.grid_error, prediction.strings_error)]
    for table, weights in zip(tables, (energies, np.abs(energies), np.abs(energies)), strict=True):
        energy, flow = added(table["charge_density"], table["charge_current"], weights)
        table["energy_density"] = table["energy_density"] + energy
        table["energy_current"] = table["energy_current"] + flow
    return replace(prediction, fields=tables[0], grid_error=tables[1], strings_error=tables[2])


def _as_xxz(config: Config) -> tuple[float, float]:
    """Return coupling and anisotropy of the xxz chain with the same thermodynamics: for fermion J = 2 t_h,
    D = V/(2 t_h), S^z in the place of n - 1/2."""
    parameters = config.chain.parameters
    if config.chain.model == "fermion":
        return 2.0 * parameters["hopping"], 0.5 * parameters["repulsion"] / parameters["hopping"]
    return parameters["coupling"], parameters["anisotropy"]


def _exact_extras(config: Config) -> ExactExtras:
    """Return the extra terms of a config that the prediction contains."""
    exact = [extra for extra in extra_terms(config) if is_exact(config, extra)]
    fields = [extra for extra in exact if extra.kind == "uniform_field"]
    potentials = tuple(extra for extra in exact if extra.kind == "potential")
    return ExactExtras(
        field=sum(extra.strength for extra in fields),
        started_field=sum(extra.strength for extra in fields if extra.in_start),
        potentials=potentials,
        started_potentials=tuple(extra for extra in potentials if extra.in_start),
    )


def _with_start_energy(field: Function, beta: Function, extras: ExactExtras) -> Function:
    """Return beta h(x) - beta(x) v(x): energies v of the charge act in the start as a local field."""
    if not extras.started_field and not extras.started_potentials:
        return field
    return lambda x: np.asarray(field(x) - beta(x) * extras.started_on_site(np.asarray(x)))


def _sum_of(potentials: tuple[ExtraTerm, ...], x: Reals) -> Reals:
    return sum((potential(extra, x) for extra in potentials), np.zeros(np.shape(x)))


def _profiles(config: Config) -> tuple[object, ...]:
    return config.start.beta, *potential_profiles(config).values()
