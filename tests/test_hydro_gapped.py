"""Two joined halves at |D| >= 1: exact sum rules, symmetries, a second solution, and refinement."""

from __future__ import annotations

import numpy as np
import pytest

from tests.hydro_gapped_cases import CoupledSolution, panels
from tests.oracles.exact_chain import energy_currents, local_hamiltonian
from tnquench.bethe.gapped_model import GappedModel, gapped_model, gapped_state
from tnquench.bethe.gapped_states import dressed_slopes, gapped_averages
from tnquench.conventions import OBSERVABLE_PLACES, Reals, bond_positions, site_positions
from tnquench.errors import InputError
from tnquench.hydro.gapped import solve_gapped
from tnquench.hydro.gapped_joined import Halves, halves_of, join_gapped_halves, states_on_rays
from tnquench.hydro.gapped_sides import side_weights, sides_of
from tnquench.hydro.mesh import OBSERVABLES
from tnquench.hydro.prediction import Prediction, predict_step
from tnquench.hydro.step import State, Step

SITES = 24
TIMES = np.array([0.0, 2.0, 5.0])


def halves(
    *, anisotropy: float, left: State, right: State, coupling: float = 1.0, times: Reals = TIMES
) -> Prediction:
    return predict_step(
        anisotropy=anisotropy,
        coupling=coupling,
        left=left,
        right=right,
        middle=(0.5 * (left[0] + right[0]), 0.5 * (left[1] + right[1])),
        times=times,
        sites=site_positions(SITES),
        bonds=bond_positions(SITES),
    )


def joined(anisotropy: float, left: State, right: State, *, strings: int = 10, nodes: int = 64) -> Halves:
    model = gapped_model(anisotropy=anisotropy, coupling=1.0, strings=strings, nodes=nodes)
    states = [gapped_state(model, beta=beta, beta_field=field) for beta, field in (left, right)]
    return halves_of(model, states[0], states[1])


def on_rays(problem: Halves, rays: Reals) -> dict[str, Reals]:
    return dict(zip(OBSERVABLES, join_gapped_halves(problem, rays=rays)[0].T, strict=True))


def energy_current_variance(anisotropy: float) -> float:
    """<J_E^2> per site at infinite temperature, J_E = sum_j K_j, from matrices on seven sites."""
    currents = energy_currents(local_hamiltonian(sites=7, anisotropy=anisotropy))
    return sum(float((currents[3] @ each).trace().real) for each in currents) / 2.0**7


@pytest.mark.parametrize(("anisotropy", "strings"), [(1.5, 10), (2.0, 8), (5.0, 5), (-2.0, 8)])
def test_energy_current_obeys_the_high_temperature_sum_rule(anisotropy: float, strings: int) -> None:
    """The total energy current J_E is conserved, so between betas -b and b, b -> 0, its profile integrates
    to the static variance of J_E: integral of j_E over x/t = 2 b <J_E^2>/L + O(b^3).

    Source: conservation of J_E, X. Zotos, F. Naef, P. Prelovsek, Phys. Rev. B 55, 11029 (1997); the variance
    is computed here from matrices. Tolerance: b^2 and the quadrature over rays.
    """
    small, rays = 0.003 / (1.0 + abs(anisotropy)), np.linspace(-2.0, 2.0, 161)
    result = on_rays(joined(anisotropy, (-small, 0.0), (small, 0.0), strings=strings, nodes=48), rays)
    integral = np.trapezoid(result["energy_current"], rays)
    assert integral == pytest.approx(2.0 * small * energy_current_variance(anisotropy), rel=2e-3)


CASES = [
    pytest.param(2.0, (0.5, 0.0), (2.0, 0.0), id="temperatures"),
    pytest.param(2.0, (0.5, 0.6), (2.0, 0.2), id="fields"),
    pytest.param(1.6, (0.5, 0.8), (1.0, -0.5), id="opposite fields"),
    pytest.param(-2.0, (0.5, 0.5), (1.0, 0.8), id="negative D"),
]


@pytest.mark.parametrize(("anisotropy", "left", "right"), CASES)
def test_continuity_holds_between_rays(anisotropy: float, left: State, right: State) -> None:
    """d/dz (z q - j) = q on rays z = x/t: q and j integrate to each other over the whole cone.

    Holds across kinks and jumps. Tolerance: of the midpoint rule, at jumps of the charge half their size
    (below 0.2) times the spacing; the energy has kinks with square roots.
    """
    problem = joined(anisotropy, left, right, nodes=48)
    rays = np.linspace(-1.9, 1.9, 161)
    spacing = float(rays[1] - rays[0])
    result = on_rays(problem, np.concatenate([rays[[0, -1]], 0.5 * (rays[1:] + rays[:-1])]))
    for kind, tolerance in (("energy", 1e-4), ("charge", 0.1 * spacing)):
        density, current = result[f"{kind}_density"], result[f"{kind}_current"]
        flux = rays[[0, -1]] * density[:2] - current[:2]
        assert density[2:].sum() * spacing == pytest.approx(flux[1] - flux[0], abs=tolerance)


@pytest.mark.parametrize(("anisotropy", "left", "right"), CASES[:2])
def test_continuity_holds_locally(anisotropy: float, left: State, right: State) -> None:
    """The same between rays where profiles are smooth, to the accuracy of Gauss-Legendre quadrature."""
    nodes, weights = np.polynomial.legendre.leggauss(24)
    first, last = -1.2, -0.4
    rays = np.concatenate([[first], 0.5 * (first + last) + 0.5 * (last - first) * nodes, [last]])
    result = on_rays(joined(anisotropy, left, right), rays)
    for kind in ("energy", "charge"):
        density, current = result[f"{kind}_density"], result[f"{kind}_current"]
        flux = rays * density - current
        integral = 0.5 * (last - first) * weights @ density[1:-1]
        assert integral == pytest.approx(flux[-1] - flux[0], abs=1e-9)


def test_energy_in_the_right_half_grows_with_the_current_through_the_joint() -> None:
    """d/dt of the energy at x > 0, the integral of e(z) - e_right over z > 0, is the current at x = 0."""
    problem = joined(2.0, (0.5, 0.0), (2.0, 0.0))
    nodes, weights = np.polynomial.legendre.leggauss(200)
    edge = 1.7705595374
    rays = np.concatenate([[0.0, 2.0], 0.5 * edge * (1.0 + nodes)])
    result = on_rays(problem, rays)
    energy = result["energy_density"]
    arrived = 0.5 * edge * weights @ (energy[2:] - energy[1])
    assert arrived == pytest.approx(result["energy_current"][0], abs=2e-6)


@pytest.mark.parametrize("anisotropy", [2.0, -1.5])
def test_uniform_stays_uniform(anisotropy: float) -> None:
    problem = joined(anisotropy, (1.0, 0.4), (1.0, 0.4))
    means = gapped_averages(problem.model, problem.states[0])
    for name, values in on_rays(problem, np.linspace(-1.5, 1.5, 9)).items():
        np.testing.assert_allclose(values, getattr(means, name), rtol=0.0, atol=1e-12)
    prediction = halves(anisotropy=anisotropy, left=(1.0, 0.4), right=(1.0, 0.4))
    assert prediction.method == "uniform"
    for name, place in OBSERVABLE_PLACES.items():
        if name in prediction.fields:
            assert prediction.fields[name].shape == (TIMES.size, SITES if place == "site" else SITES - 1)
            assert np.ptp(prediction.fields[name]) < 1e-14


def test_anisotropy_and_temperature_change_sign_together() -> None:
    """Rotating every second spin about z turns H(D) into -H(-D): energies and spin currents change sign.

    j_s follows from continuity of S^z, which the rotation leaves alone while time runs backwards.
    """
    rays = np.linspace(-1.5, 1.5, 7)
    plus = on_rays(joined(2.0, (0.7, 0.6), (1.5, 0.3)), rays)
    minus = on_rays(joined(-2.0, (-0.7, 0.6), (-1.5, 0.3)), rays)
    assert np.ptp(plus["energy_density"]) > 0.1
    np.testing.assert_allclose(minus["energy_density"], -plus["energy_density"], rtol=0.0, atol=1e-11)
    np.testing.assert_allclose(minus["charge_density"], plus["charge_density"], rtol=0.0, atol=1e-11)
    np.testing.assert_allclose(minus["energy_current"], -plus["energy_current"], rtol=0.0, atol=1e-11)


def test_mirror_image_and_coupling() -> None:
    """Exchanging halves mirrors profiles and reverses currents; J is the unit of energy, 1/J that of time."""
    left, right = (0.5, 0.6), (2.0, -0.2)
    rays = np.linspace(-1.4, 1.4, 8)
    here, there = on_rays(joined(2.0, left, right), rays), on_rays(joined(2.0, right, left), -rays)
    for name in OBSERVABLES:
        sign = -1.0 if name.endswith("current") else 1.0
        np.testing.assert_allclose(there[name], sign * here[name], rtol=0.0, atol=1e-10)
    model = gapped_model(anisotropy=2.0, coupling=3.0, strings=10, nodes=64)
    states = [gapped_state(model, beta=beta / 3.0, beta_field=field) for beta, field in (left, right)]
    strong = on_rays(halves_of(model, states[0], states[1]), 3.0 * rays)
    powers = {"energy_density": 3.0, "charge_density": 1.0, "energy_current": 9.0, "charge_current": 3.0}
    for name, power in powers.items():
        np.testing.assert_allclose(strong[name], power * here[name], rtol=0.0, atol=1e-9)


def test_domain_wall_of_opposite_fields_stays_where_it_is() -> None:
    """At equal temperatures and fields +-h fillings are uniform: only the sign differs, and does not move.

    Source: L. Piroli, J. De Nardis, M. Collura, B. Bertini, M. Fagotti, Phys. Rev. B 96, 115124 (2017): spin
    does not spread ballistically at |D| > 1 in this case.
    """
    prediction = halves(anisotropy=1.5, left=(1.0, 0.9), right=(1.0, -0.9))
    up = halves(anisotropy=1.5, left=(1.0, 0.9), right=(1.0, 0.9)).fields["charge_density"][0, 0]
    sites = site_positions(SITES)
    for row in prediction.fields["charge_density"]:
        np.testing.assert_allclose(row, -np.sign(sites) * up, rtol=0.0, atol=1e-10)
    assert np.abs(prediction.fields["charge_current"]).max() < 1e-12
    assert np.abs(prediction.fields["energy_current"]).max() < 1e-12


def test_sign_of_the_magnetisation_travels_with_long_strings() -> None:
    """Opposite fields differ from parallel ones in the sign only, from the ray z = j/m on, where m jumps."""
    rays = np.linspace(-1.6, 1.6, 65)
    parallel = on_rays(joined(2.0, (0.5, 0.6), (2.0, 0.2)), rays)
    opposite = on_rays(joined(2.0, (0.5, 0.6), (2.0, -0.2)), rays)
    for name in ("energy_density", "energy_current"):
        np.testing.assert_allclose(opposite[name], parallel[name], rtol=0.0, atol=1e-12)
    sign = np.sign(opposite["charge_density"])
    np.testing.assert_allclose(opposite["charge_density"], sign * parallel["charge_density"], atol=1e-12)
    np.testing.assert_allclose(opposite["charge_current"], sign * parallel["charge_current"], atol=1e-12)
    lead = parallel["charge_current"] - rays * parallel["charge_density"]
    np.testing.assert_array_equal(sign, np.sign(lead))
    assert 0 < np.count_nonzero(sign > 0) < rays.size


@pytest.mark.parametrize(
    ("anisotropy", "left", "right"),
    [(2.0, (0.5, 0.0), (2.0, 0.0)), (1.3, (0.5, 0.4), (1.5, -0.7)), (-1.5, (0.3, 0.0), (1.0, 0.5))],
)
def test_claimed_errors_cover_a_finer_solution(anisotropy: float, left: State, right: State) -> None:
    times, count = np.array([5.0]), 18
    prediction = predict_step(
        anisotropy=anisotropy, coupling=1.0, left=left, right=right, middle=left, times=times,
        sites=site_positions(count), bonds=bond_positions(count),
    )  # fmt: skip
    problem = joined(anisotropy, left, right, strings=20, nodes=90)
    places = {"site": site_positions(count)[1:-1], "bond": bond_positions(count)}
    for name in OBSERVABLES:
        place = OBSERVABLE_PLACES[name]
        inner = slice(1, -1) if place == "site" else slice(None)
        exact = on_rays(problem, places[place] / times[0])[name]
        claim = (prediction.grid_error[name] + prediction.strings_error[name])[0, inner]
        assert np.all(np.abs(prediction.fields[name][0, inner] - exact) <= claim)
        assert claim.max() < 1e-7


def test_isotropic_chain_is_the_limit() -> None:
    """Profiles at D = 1 lie between those at D = 1.02 and, extrapolated linearly, agree with D -> 1."""
    rays = np.array([-0.9, -0.4, 0.1, 0.7])
    left, right = (0.5, 0.0), (1.5, 0.0)
    near, nearer = (
        on_rays(joined(d, left, right, strings=22, nodes=112), rays)["energy_density"] for d in (1.02, 1.01)
    )
    at_one = on_rays(joined(1.0, left, right, strings=18, nodes=112), rays)["energy_density"]
    np.testing.assert_allclose(at_one, 2.0 * nearer - near, rtol=0.0, atol=2e-5)
    assert np.all(np.abs(nearer - at_one) > 1e-4)


def test_side_weights_integrate_over_the_side() -> None:
    """The side v_eff > ray of a state against a fine sum; none or all of it where a string does not cross."""
    model = gapped_model(anisotropy=2.0, coupling=1.0, strings=6, nodes=64)
    slopes = dressed_slopes(model, gapped_state(model, beta=1.0))
    sides = sides_of(model)
    rays = np.array([-0.7, 0.2, 1.0])
    weights = side_weights(sides, np.repeat(slopes[None], 3, axis=0), rays)
    fine = np.pi * ((np.arange(40000) + 0.5) / 40000 - 0.5)
    for string in (0, 1, 5):
        energy, momentum = (
            (np.exp(2j * np.multiply.outer(fine, np.arange(33))) @ (slopes[k, string] @ sides.analysis)).real
            for k in (0, 1)
        )
        for row, ray in enumerate(rays):
            exact = np.mean(np.where(energy / momentum > ray, momentum, 0.0)) * np.pi / model.half.eta
            assert weights[row, string] @ (model.weights * slopes[1, string]) == pytest.approx(
                exact, abs=2e-4
            )
    assert np.all(weights[2, 5] == 0.0)
    assert np.all(weights[0, 5] == 1.0)


def _interpolated(model: GappedModel, values: Reals, x: Reals) -> Reals:
    """Trigonometric interpolation of node values (node,) at rapidities x = eta u (equidistant nodes)."""
    coefficients = values @ sides_of(model).analysis
    return np.asarray((np.exp(2j * np.multiply.outer(x, np.arange(coefficients.size))) @ coefficients).real)


@pytest.mark.parametrize("ray", [-0.6, 0.3])
def test_fully_coupled_equations_on_panels_give_the_same_state(ray: float) -> None:
    """v_eff equals the ray at every cut, and the averages agree with those of the decoupled equations.

    Tolerance: strings beyond the tenth, whose part is about exp(-20 beta h).
    """
    strings, problem = 10, joined(2.0, (0.5, 2.4), (1.2, 2.8), strings=10, nodes=64)
    model = problem.model
    guess = dressed_slopes(model, problem.states[0])[None]
    _, slopes, _ = states_on_rays(problem, rays=np.array([ray]), slopes=guess)
    points, weights, fillings, cuts = [], [], [], []
    fine = np.linspace(-0.5 * np.pi, 0.5 * np.pi, 4001)
    for string in range(strings):
        excess = _velocity(model, slopes[0], string, fine) - ray
        place = np.flatnonzero(np.diff(np.sign(excess)) != 0)
        cut = np.array([_bisected(model, slopes[0], string, ray, fine[i], fine[i + 1]) for i in place])
        x, w = panels(cut)
        above = _velocity(model, slopes[0], string, x) > ray
        chosen = [_interpolated(model, np.log(s.filling[string]), x) for s in problem.states]
        points.append(x)
        weights.append(w)
        cuts.append(cut)
        fillings.append(np.exp(np.where(above, *chosen)))
    coupled = CoupledSolution(model.half.eta, points, weights, fillings)
    result = join_gapped_halves(problem, rays=np.array([ray]))[0][0]
    expected = coupled.averages()[[OBSERVABLES.index(name) for name in
        ("energy_density", "charge_density", "energy_current", "charge_current")]]  # fmt: skip
    np.testing.assert_allclose(result, expected, rtol=0.0, atol=2e-8)
    assert sum(cut.size for cut in cuts) >= 2


def _velocity(model: GappedModel, slopes: Reals, string: int, x: Reals) -> Reals:
    energy, momentum = (_interpolated(model, slopes[k, string], x) for k in (0, 1))
    return np.asarray(energy / momentum)


def _bisected(model: GappedModel, slopes: Reals, string: int, ray: float, low: float, high: float) -> float:
    start = _velocity(model, slopes, string, np.array([low]))[0] > ray
    for _ in range(40):
        middle = 0.5 * (low + high)
        same = (_velocity(model, slopes, string, np.array([middle]))[0] > ray) == start
        low, high = (middle, high) if same else (low, middle)
    return 0.5 * (low + high)


def test_times_at_rest_and_light_cone() -> None:
    """Local equilibrium at t = 0; nothing has changed outside the cone."""
    prediction = halves(anisotropy=2.0, left=(0.5, 0.0), right=(2.0, 0.0))
    energy, current = prediction.fields["energy_density"], prediction.fields["energy_current"]
    bonds, sites = bond_positions(SITES), site_positions(SITES)
    assert np.ptp(energy[0, bonds < 0.0]) == 0.0
    assert energy[0, 0] > energy[0, bonds == 0.0][0] > energy[0, -1]
    first, last = prediction.light_cone
    for row, time in list(enumerate(TIMES))[1:]:
        outside = (sites < first * time) | (sites > last * time)
        outside[[0, -1]] = True
        assert np.all(np.abs(current[row, outside]) < 1e-12)
        assert np.all(current[row, ~outside] > 1e-6)
    assert all(
        np.all(each == 0.0)
        for each in (prediction.fields["charge_density"], prediction.fields["charge_current"])
    )


def test_light_at_the_ends_is_refused_with_its_time() -> None:
    with pytest.raises(InputError, match=r"reaches the ends at t = 7\.0"):
        halves(anisotropy=2.0, left=(0.5, 0.0), right=(2.0, 0.0), times=np.array([0.0, 11.0]))


def test_weaker_anisotropies_are_refused() -> None:
    step = Step(coupling=1.0, left=(1.0, 0.0), right=(2.0, 0.0), middle=(1.5, 0.0))
    with pytest.raises(ValueError, match="between -1 and 1"):
        solve_gapped(step, 0.5, np.array([0.1]))
