"""The Ising chain's Euler prediction against closed forms, conformal field theory and the exact chain."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.integrate import quad

from tests.oracles.free_models import ising_quench
from tnquench.conventions import Reals, bond_positions, site_positions
from tnquench.errors import InputError
from tnquench.hydro.ising import faster_than, predict_ising
from tnquench.hydro.prediction import Prediction


def predict(
    *, field: float, beta: object, times: list[float], sites: int, joined: bool, coupling: float = 1.0
) -> Prediction:
    return predict_ising(
        coupling=coupling,
        transverse_field=field,
        beta=beta,  # type: ignore[arg-type]
        times=np.array(times),
        sites=site_positions(sites),
        bonds=bond_positions(sites),
        joined=joined,
    )


def sharp(left: float, right: float) -> object:
    return lambda x: left + 0.5 * (right - left) * (1.0 + np.sign(x))


def mean(function: object) -> float:
    """Average over the zone."""
    return float(quad(function, 0.0, np.pi, epsabs=1e-13, epsrel=1e-12, limit=200)[0] / np.pi)


@pytest.mark.parametrize(("coupling", "field"), [(1.0, 0.5), (0.7, 1.4), (1.0, -1.0), (1.0, 1.0), (0.9, 0.0)])
def test_a_uniform_chain_stays_in_equilibrium(coupling: float, field: float) -> None:
    """e = -int dk/2pi (epsilon/2) tanh(beta epsilon/2), <sigma^z> = int dk/2pi (d epsilon/dg)/2 tanh.

    Source: P. Pfeuty, Ann. Phys. 57, 79 (1970).
    """
    beta = 0.8

    def energy(k: float) -> float:
        square = coupling**2 + field**2 + 2.0 * coupling * field * np.cos(k)
        return 2.0 * float(np.sqrt(max(square, 1e-30)))

    expected = -mean(lambda k: 0.5 * energy(k) * np.tanh(0.5 * beta * energy(k)))
    along = mean(lambda k: 2.0 * (field + coupling * np.cos(k)) / energy(k) * np.tanh(0.5 * beta * energy(k)))
    for joined in (False, True):
        found = predict(
            field=field, coupling=coupling, beta=sharp(beta, beta), times=[0.0, 3.0], sites=24, joined=joined
        )
        np.testing.assert_allclose(found.fields["energy_density"], expected, atol=1e-11)
        np.testing.assert_allclose(found.fields["transverse_magnetisation"], along, atol=1e-11)
        np.testing.assert_allclose(found.fields["energy_current"], 0.0, atol=1e-12)


def test_modes_faster_than_a_ray() -> None:
    """The velocities at both ends of the interval are those of the ray; the middle of it is faster."""
    for coupling, field in ((1.0, 0.6), (0.8, -1.3), (1.0, 1.0)):

        def velocity(k: Reals, coupling: float = coupling, field: float = field) -> Reals:
            energy = 2.0 * np.sqrt(coupling**2 + field**2 + 2.0 * coupling * field * np.cos(k))
            return np.asarray(np.abs(4.0 * coupling * field * np.sin(k) / energy))

        speeds = np.linspace(0.05, 2.0 * min(coupling, abs(field)) * 0.99, 7)
        lower, upper = faster_than(coupling, field, speeds)
        inside = 0.5 * (lower + upper)
        assert (velocity(inside) > speeds).all()
        gapless = coupling == abs(field)
        np.testing.assert_allclose(velocity(lower), speeds, rtol=1e-9)
        if not gapless:
            np.testing.assert_allclose(velocity(upper), speeds, rtol=1e-9)
        else:
            np.testing.assert_allclose(upper, np.pi, rtol=1e-7)


def test_critical_current_between_two_cold_halves() -> None:
    """j_E = (pi c/12) (T_L^2 - T_R^2), c = 1/2, at low temperature.

    Source: D. Bernard and B. Doyon, J. Phys. A 45, 362001 (2012). Corrections are of relative order (T/J)^2.
    """
    for scale, tolerance in ((40.0, 2e-3), (80.0, 5e-4)):
        found = predict(field=1.0, beta=sharp(scale, 2.0 * scale), times=[4.0], sites=31, joined=True)
        warm, cold = 1.0 / scale, 0.5 / scale
        expected = np.pi / 24.0 * (warm**2 - cold**2)
        assert found.fields["energy_current"][0, 15] == pytest.approx(expected, rel=tolerance)


@pytest.mark.parametrize("field", [0.5, 1.0, 2.0, -0.7])
def test_what_leaves_the_left_half_flows_through_the_joint(field: float) -> None:
    """At Euler scale e(x, t) = e(x/t): the energy right of x = 0 grows by t times the current's change.

    int_0^inf [e(u) - e_R] du = j(0) - j_R, by the continuity equation on rays.
    """
    sites, time = 4001, 900.0
    found = predict(field=field, beta=sharp(0.4, 1.5), times=[time], sites=sites, joined=True)
    bonds = bond_positions(sites)
    energy = found.fields["energy_density"][0]
    gained = np.sum((energy - energy[-1])[bonds > 0.0])
    assert gained / time == pytest.approx(found.fields["energy_current"][0, sites // 2], rel=2e-3)


@pytest.mark.parametrize("field", [0.5, 1.0, 2.0])
def test_smooth_profiles_approach_the_exact_chain(field: float) -> None:
    """Stretched by two in space and time, the distance from the exact chain falls at least threefold.

    The exact chain is its Gaussian state; Euler hydrodynamics of free modes is corrected at second order in
    gradients, so the distance should fall by four.
    """
    distances = []
    for stretch in (1, 2):
        sites, time = 48 * stretch, 4.0 * stretch
        width = 5.0 * stretch

        def beta(x: Reals, width: float = width) -> Reals:
            return np.asarray(0.8 - 0.4 * np.exp(-0.5 * (x / width) ** 2))

        found = predict(field=field, beta=beta, times=[0.0, time], sites=sites, joined=False)
        exact = ising_quench(
            sites=sites,
            coupling=1.0,
            transverse_field=field,
            beta=beta(bond_positions(sites)),
            times=[0.0, time],
        )
        inner = slice(sites // 4, -sites // 4)
        distances.append(
            [
                np.abs((found.fields[name] - exact[name])[1, inner]).max()
                for name in ("energy_density", "energy_current", "transverse_magnetisation")
            ]
        )
    ratio = np.array(distances[0]) / np.array(distances[1])
    assert (ratio > 3.0).all(), ratio
    assert np.max(distances[0]) < 0.02


@pytest.mark.parametrize("field", [0.7, 1.0, -1.6])
def test_modes_come_back_from_the_ends_in_time(field: float) -> None:
    """A warm middle whose fastest modes have come back from the ends, against the exact chain."""
    sites, time = 96, 36.0 / min(1.0, abs(field))

    def beta(x: Reals) -> Reals:
        return np.asarray(0.8 - 0.4 * np.exp(-0.5 * (x / 8.0) ** 2))

    found = predict(field=field, beta=beta, times=[0.0, time], sites=sites, joined=False)
    exact = ising_quench(
        sites=sites, coupling=1.0, transverse_field=field, beta=beta(bond_positions(sites)), times=[0.0, time]
    )
    difference = (found.fields["energy_current"] - exact["energy_current"])[1, 8:-8]
    largest = np.abs(exact["energy_current"][1, 8:-8]).max()
    assert np.abs(difference).max() < 0.02 * largest


def test_a_steep_tangent_approaches_the_step() -> None:
    """Two methods, one limit: the difference is of first order in the tangent's width."""
    sites = 61
    step = predict(field=0.8, beta=sharp(0.5, 2.0), times=[12.0], sites=sites, joined=True)
    for width in (0.1, 0.02):

        def beta(x: Reals, width: float = width) -> Reals:
            return np.asarray(0.5 + 0.75 * (1.0 + np.tanh(x / width)))

        tangent = predict(field=0.8, beta=beta, times=[12.0], sites=sites, joined=False)
        for name in step.fields:
            np.testing.assert_allclose(step.fields[name], tangent.fields[name], atol=0.03 * width)
            assert np.all(step.grid_error[name] < 1e-9)


def test_light_that_reaches_the_ends_is_refused() -> None:
    with pytest.raises(InputError, match="reaches the ends"):
        predict(field=0.5, beta=sharp(1.0, 2.0), times=[0.0, 20.0], sites=10, joined=True)
