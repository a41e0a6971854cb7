"""Smooth profiles by characteristics: free streaming, an exact chain, joined halves, conservation."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np
import pytest

from tests.bethe_cases import rational, root_of_unity
from tests.hydro_cases import PLACES
from tests.oracles.free_fermions import free_evolution
from tnquench.conventions import Reals, bond_positions, site_positions
from tnquench.errors import InputError
from tnquench.hydro.mesh import OBSERVABLES
from tnquench.hydro.prediction import Prediction, predict_smooth, predict_step
from tnquench.hydro.smooth import LEVELS, SmoothStart, smooth_averages
from tnquench.model.profiles import bump, step, uniform, wave

Profile = Callable[[Reals], Reals]


def no_field(x: Reals) -> Reals:
    return uniform(x, value=0.0)


def hot_spot(x: Reals) -> Reals:
    return bump(x, base=1.6, height=-1.0, width=3.0)


def magnetised_spot(x: Reals) -> Reals:
    return bump(x, base=0.2, height=1.0, width=2.5)


def predict(
    *, anisotropy: float, sites: int, times: Reals, beta: Profile, beta_field: Profile = no_field
) -> Prediction:
    return predict_smooth(
        anisotropy=anisotropy,
        coupling=1.0,
        beta=beta,
        beta_field=beta_field,
        times=times,
        sites=site_positions(sites),
        bonds=bond_positions(sites),
    )


def free_streaming(
    x: Reals, time: float, *, beta: Profile, beta_field: Profile, wall: float
) -> dict[str, Reals]:
    """D = 0: a mode k moves at -sin k, back and forth between walls, with its initial occupation."""
    momenta = 2.0 * np.pi * np.arange(6000) / 6000
    energy, velocity = np.cos(momenta), -np.sin(momenta)
    start = x[:, None] - velocity * time
    period = 4.0 * wall
    shifted = np.mod(start + wall, period)
    origin = np.where(shifted > 0.5 * period, period - shifted, shifted) - wall
    occupied = 1.0 / (1.0 + np.exp(beta(origin) * energy - beta_field(origin)))
    return {
        "energy_density": np.mean(energy * occupied, axis=1),
        "energy_current": np.mean(velocity * energy * occupied, axis=1),
        "charge_density": np.mean(occupied - 0.5, axis=1),
        "charge_current": np.mean(velocity * occupied, axis=1),
    }


@pytest.mark.parametrize("time", [4.0, 35.0])
def test_free_fermions_stream(time: float) -> None:
    """At D = 0 the origin of a mode is x - v t, folded at the walls. Source: common practice, no source."""
    sites = 32
    prediction = predict(
        anisotropy=0.0, sites=sites, times=np.array([time]), beta=hot_spot, beta_field=magnetised_spot
    )
    assert prediction.method == "characteristics"
    assert prediction.light_cone == pytest.approx((-1.0, 1.0), abs=1e-6)
    for name, place in PLACES.items():
        x = site_positions(sites) if place == "site" else bond_positions(sites)
        wall = 0.5 * (sites + 1)
        exact = free_streaming(x, time, beta=hot_spot, beta_field=magnetised_spot, wall=wall)[name]
        inner = slice(1, -1) if name == "energy_current" else slice(None)
        error = np.abs(prediction.fields[name][0] - exact)[inner]
        assert np.all(error <= prediction.grid_error[name][0, inner] + 1e-7)
        assert prediction.grid_error[name].max() < 2e-6


def test_walls_reflect_as_the_ends_of_a_chain_do() -> None:
    """An exact chain at D = 0: the spot has run into both ends and is on its way back to the middle.

    Away from the ends, where the chain has Friedel oscillations, Euler theory is good to a few per cent.
    """
    sites, times = 60, np.array([45.0])

    def beta(x: Reals) -> Reals:
        return bump(x, base=1.6, height=-1.0, width=4.0)

    def beta_field(x: Reals) -> Reals:
        return bump(x, base=0.2, height=1.0, width=5.0)

    prediction = predict(anisotropy=0.0, sites=sites, times=times, beta=beta, beta_field=beta_field)
    on_bonds, on_sites = beta(bond_positions(sites)), beta_field(site_positions(sites))
    exact = free_evolution(sites=sites, beta=on_bonds, beta_field=on_sites, times=times)
    for name in OBSERVABLES:
        inner = slice(15, -15)
        error = np.abs(prediction.fields[name] - exact[name])[0, inner]
        assert error.max() < 0.04 * np.ptp(prediction.fields[name][0, inner])


def test_narrow_step_tends_to_joined_halves() -> None:
    """A step of width 1 differs from the sharp one by O(width/t) at D = 0.5."""
    sites, times = 24, np.array([2.0, 4.0, 8.0])

    def beta(x: Reals) -> Reals:
        return step(x, left=0.5, right=2.0, width=1.0)

    smooth = predict(anisotropy=0.5, sites=sites, times=times, beta=beta)
    sharp = predict_step(
        anisotropy=0.5,
        coupling=1.0,
        left=(0.5, 0.0),
        right=(2.0, 0.0),
        middle=(1.25, 0.0),
        times=times,
        sites=site_positions(sites),
        bonds=bond_positions(sites),
    )
    for name, x in (("energy_density", bond_positions(sites)), ("energy_current", site_positions(sites))):
        inside = np.abs(x) < 0.7 * times[:, None]
        difference = np.abs(smooth.fields[name] - sharp.fields[name])
        worst = [row[cone].max() for row, cone in zip(difference, inside, strict=True)]
        assert worst[0] < 0.03
        assert worst[1] < 0.6 * worst[0]
        assert worst[2] < 0.6 * worst[1]


@pytest.mark.parametrize("anisotropy", [0.5, rational(2, 5)])
def test_totals_are_conserved_and_current_grows_linearly(anisotropy: float) -> None:
    """Energy and charge are conserved, and so is the total energy current of a bulk: between flat ends its
    integral over x grows at a constant rate, that of joined halves. Tolerance: lattice sums of the profile.
    """
    sites, times = 36, np.array([0.0, 2.0, 6.0])

    def beta(x: Reals) -> Reals:
        return step(x, left=0.6, right=1.8, width=2.0)

    def beta_field(x: Reals) -> Reals:
        return step(x, left=0.8, right=-0.2, width=2.0)

    prediction = predict(anisotropy=anisotropy, sites=sites, times=times, beta=beta, beta_field=beta_field)
    charge = prediction.fields["charge_density"].sum(axis=1)
    assert np.ptp(charge) < 1e-6
    energy = prediction.fields["energy_density"].sum(axis=1)
    assert np.ptp(energy) < 1e-6
    growth = prediction.fields["energy_current"].sum(axis=1)[1:] / times[1:]
    np.testing.assert_allclose(growth, growth[0], rtol=1e-5)
    sharp = predict_step(
        anisotropy=anisotropy,
        coupling=1.0,
        left=(0.6, 0.8),
        right=(1.8, -0.2),
        middle=(1.2, 0.3),
        times=np.array([200.0]),
        sites=site_positions(601),
        bonds=bond_positions(601),
    )
    assert growth[0] == pytest.approx(sharp.fields["energy_current"].sum() / 200.0, rel=1e-4)


@pytest.mark.parametrize(("nu", "time"), [(3, 3.0), (3, 25.0), (5, 2.0)])
def test_claimed_errors_cover_a_finer_grid(nu: int, time: float) -> None:
    """Also after reflection (light crosses the chain in about 25)."""
    sites, times = 28, np.array([time])
    prediction = predict(anisotropy=root_of_unity(nu), sites=sites, times=times, beta=hot_spot)
    start = SmoothStart(root_of_unity(nu), 1.0, hot_spot, no_field, wall=0.5 * (sites + 1))
    finest = replace(LEVELS[1], nodes=44, mesh_spacing=0.07, phase=0.4, spacing=0.08)
    finer = {
        place: smooth_averages(start, finest, times, x)[0]
        for place, x in (("site", site_positions(sites)), ("bond", bond_positions(sites)))
    }
    covered = []
    for index, name in enumerate(OBSERVABLES):
        inner = slice(1, -1) if name == "energy_current" else slice(None)
        error = np.abs(prediction.fields[name][0] - finer[PLACES[name]][:, index])[inner]
        covered.append(error <= prediction.grid_error[name][0, inner])
        assert prediction.grid_error[name].max() < 2e-6
    assert np.concatenate(covered).all()


def test_standing_wave_between_walls() -> None:
    """A wave that fits between the walls keeps its mirror symmetry, moves no charge, and flattens."""
    sites, times = 31, np.array([0.0, 30.0])

    def beta(x: Reals) -> Reals:
        return wave(x, base=1.0, height=0.4, length=16.0)

    prediction = predict(anisotropy=root_of_unity(4), sites=sites, times=times, beta=beta)
    energy, current = prediction.fields["energy_density"], prediction.fields["energy_current"]
    np.testing.assert_allclose(energy, energy[:, ::-1], rtol=0.0, atol=1e-7)
    np.testing.assert_allclose(current, -current[:, ::-1], rtol=0.0, atol=1e-7)
    assert np.abs(prediction.fields["charge_density"]).max() < 1e-8
    assert np.ptp(energy[0]) > 5.0 * np.ptp(energy[1])
    one_length = energy[:, 7:23].mean(axis=1)
    np.testing.assert_allclose(one_length, one_length[0], rtol=0.0, atol=1e-6)


def test_too_narrow_a_profile_is_refused() -> None:
    with pytest.raises(InputError, match=r"changes within 0\.1\d? lattice spacings"):
        predict(
            anisotropy=0.5,
            sites=12,
            times=np.array([1.0]),
            beta=lambda x: step(x, left=0.5, right=2.0, width=0.1),
        )


def test_constant_profiles_are_uniform_states() -> None:
    prediction = predict(
        anisotropy=0.5, sites=12, times=np.array([0.0, 3.0]), beta=lambda x: uniform(x, value=0.7)
    )
    assert prediction.method == "uniform"
    assert np.ptp(prediction.fields["energy_density"]) < 1e-14
