"""Two joined halves at Euler scale, against closed forms, exact sum rules and a second quadrature."""

from __future__ import annotations

from fractions import Fraction

import numpy as np
import pytest

from tests.bethe_cases import rational, root_of_unity
from tests.hydro_cases import PLACES, STRINGS, PanelState, panels
from tests.oracles.exact_chain import energy_currents, local_hamiltonian
from tests.oracles.free_fermions import joined_halves
from tnquench.bethe.grid import interpolate
from tnquench.bethe.states import thermal_filling
from tnquench.conventions import Reals, bond_positions, site_positions
from tnquench.errors import InputError
from tnquench.hydro.crossings import find_crossings
from tnquench.hydro.joined import join_halves, states_on_rays
from tnquench.hydro.mesh import OBSERVABLES, RapidityMesh, dressed_slopes, rapidity_mesh, reference_state
from tnquench.hydro.prediction import Prediction, predict_step
from tnquench.hydro.thermal_states import State, thermal_on_mesh

SITES = 24
TIMES = np.array([0.0, 2.0, 5.0, 8.0])


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


def on_rays(
    rays: Reals, *, nodes: int = 48, anisotropy: float, left: State, right: State
) -> dict[str, Reals]:
    """Averages on many rays at one resolution."""
    mesh = rapidity_mesh(anisotropy=anisotropy, coupling=1.0, nodes=nodes, spacing=4.0 / nodes)
    columns = join_halves(mesh, thermal_on_mesh(mesh, left), thermal_on_mesh(mesh, right), rays=rays).T
    return dict(zip(OBSERVABLES, columns, strict=True))


FREE_CASES = [
    pytest.param((0.5, 0.0), (2.0, 0.0), 1.0, id="temperature"),
    pytest.param((0.0, 1.5), (0.0, -1.5), 1.0, id="field"),
    pytest.param((1.0, 1.0), (3.0, -0.7), 1.3, id="both, J = 1.3"),
    pytest.param((-0.5, 0.3), (8.0, 2.0), 1.0, id="negative and low temperature"),
]


@pytest.mark.literature
@pytest.mark.parametrize(("left", "right", "coupling"), FREE_CASES)
def test_free_fermions_agree_with_closed_integrals(left: State, right: State, coupling: float) -> None:
    """At D = 0 every mode keeps the occupation of the half it comes from; the cone's edges are at J.

    Source: T. Antal, Z. Racz, A. Rakos, G. M. Schutz, Phys. Rev. E 59, 4912 (1999) for fields; Y. Ogata,
    Phys. Rev. E 66, 016135 (2002) for temperatures (from memory). Tolerance: the claimed error and 1e-7.
    """
    times = TIMES / coupling
    prediction = halves(anisotropy=0.0, left=left, right=right, coupling=coupling, times=times)
    assert prediction.light_cone == pytest.approx((-coupling, coupling), abs=1e-9)
    for name, place in PLACES.items():
        x = site_positions(SITES)[1:-1] if place == "site" else bond_positions(SITES)
        inner = slice(1, -1) if place == "site" else slice(None)
        for row, time in list(enumerate(times))[1:]:
            exact = joined_halves(x / time, left=left, right=right, coupling=coupling)[name]
            error = np.abs(prediction.fields[name][row, inner] - exact)
            assert np.all(error <= prediction.grid_error[name][row, inner] + 1e-7)
            assert prediction.grid_error[name].max() < 1e-6, "the error bar is honest but too wide"


@pytest.mark.literature
@pytest.mark.parametrize(("p", "q"), [(1, 2), (1, 3), (1, 5), (1, 8), (2, 5), (3, 7), (3, 8), (5, 12)])
def test_domain_wall_is_an_arcsine(p: int, q: int) -> None:
    """Up on the left, down on the right: -(q/2 pi) arcsin(z/s), s = sin(g)/sin(pi/q), inside |z| < sin(g).

    Source: M. Collura, A. De Luca, J. Viti, Phys. Rev. B 97, 081111 (2018), at D = cos(pi p/q) (formula from
    memory; p/q = 1/2 is Antal et al. 1999), with its current from the continuity equation; z = x/t.
    """
    edge, scale = np.sin(np.pi * p / q), np.sin(np.pi * p / q) / np.sin(np.pi / q)
    rays = np.linspace(-0.99, 0.99, 23) * edge
    up, down = (0.0, 60.0), (0.0, -60.0)
    anisotropy = 0.0 if q == 2 else rational(p, q)
    result = on_rays(rays, nodes=64, anisotropy=anisotropy, left=up, right=down)
    density = -q / (2.0 * np.pi) * np.arcsin(rays / scale)
    current = q * scale / (2.0 * np.pi) * (np.sqrt(1.0 - (rays / scale) ** 2) - np.cos(np.pi / q))
    np.testing.assert_allclose(result["charge_density"], density, rtol=0.0, atol=1e-9)
    np.testing.assert_allclose(result["charge_current"], current, rtol=0.0, atol=1e-9)


@pytest.mark.literature
def test_low_temperature_current_is_conformal() -> None:
    """The energy current at the joint tends to (pi c/12)(T_L^2 - T_R^2), c = 1; corrections vanish with T.

    Source: D. Bernard and B. Doyon, J. Phys. A 45, 362001 (2012). Tolerance: about twice the deviations seen,
    which fall by more than half when both temperatures are halved.
    """
    deviations = []
    for hot in (0.1, 0.05, 0.025):
        cold = 0.5 * hot
        states = on_rays(np.zeros(1), anisotropy=0.5, left=(1.0 / hot, 0.0), right=(1.0 / cold, 0.0))
        current = states["energy_current"][0]
        deviations.append(abs(current / (np.pi / 12.0 * (hot**2 - cold**2)) - 1.0))
    assert deviations[0] < 0.008
    assert deviations[1] < 0.5 * deviations[0]
    assert deviations[2] < 0.5 * deviations[1]


def energy_current_variance(anisotropy: float) -> float:
    """<J_E^2> per site at infinite temperature, J_E = sum_j K_j, from matrices on seven sites."""
    currents = energy_currents(local_hamiltonian(sites=7, anisotropy=anisotropy))
    return sum(float((currents[3] @ each).trace().real) for each in currents) / 2.0**7


@pytest.mark.parametrize("nu", [2, 3, 4, 7])
def test_energy_current_obeys_the_high_temperature_sum_rule(nu: int) -> None:
    """The total energy current J_E is conserved, so between betas -b and b, b -> 0, its profile integrates
    to the static variance of J_E: integral of j_E over x/t = 2 b <J_E^2>/L + O(b^3).

    Source: conservation of J_E, X. Zotos, F. Naef, P. Prelovsek, Phys. Rev. B 55, 11029 (1997); the variance
    is computed here from matrices. Tolerance: b^2 and the quadrature over rays.
    """
    small = 0.01
    rays = np.linspace(-1.6, 1.6, 801)
    anisotropy = root_of_unity(nu)
    result = on_rays(rays, anisotropy=anisotropy, left=(-small, 0.0), right=(small, 0.0))
    integral = np.trapezoid(result["energy_current"], rays)
    assert integral == pytest.approx(2.0 * small * energy_current_variance(anisotropy), rel=3e-4)


@pytest.mark.literature
@pytest.mark.parametrize("nu", [2, 3, 4, 7])
def test_spin_current_obeys_the_drude_weight(nu: int) -> None:
    """At infinite temperature and fields +-b the spin current integrates to 2 b lim <J(t) J>/L.

    Source: T. Prosen and E. Ilievski, Phys. Rev. Lett. 111, 057203 (2013); E. Ilievski and J. De Nardis,
    Phys. Rev. Lett. 119, 020602 (2017): lim <J(t) J>/L = [1 - (nu/2 pi) sin(2 pi/nu)]/8 at D = cos(pi/nu).
    """
    small = 0.01
    rays = np.linspace(-1.02, 1.02, 801)
    result = on_rays(rays, anisotropy=root_of_unity(nu), left=(0.0, small), right=(0.0, -small))
    integral = np.trapezoid(result["charge_current"], rays)
    ballistic = (1.0 - nu / (2.0 * np.pi) * np.sin(2.0 * np.pi / nu)) / 8.0
    assert integral == pytest.approx(2.0 * small * ballistic, rel=1e-3)


def thermal_at(mesh: RapidityMesh, state: State, string: int, x: Reals) -> Reals:
    log_eta = thermal_filling(mesh.model, beta=state[0], beta_field=state[1]).log_eta
    return 1.0 / (1.0 + np.exp(interpolate(mesh.grid, log_eta[string], x)))


@pytest.mark.parametrize(
    ("turn", "sign"),
    [(Fraction(1, 3), 1), (Fraction(1, 4), -1), (Fraction(2, 5), 1), (Fraction(3, 7), 1)],
    ids=str,
)
def test_second_quadrature_agrees(turn: Fraction, sign: int) -> None:
    """Panels cut at the crossings, dressed without windows, interpolation or iteration, give the same state:
    v_eff equals the ray at every crossing, and the averages agree. Tolerance: the panels' own, about 1e-8.
    """
    left, right, ray = (0.4, 0.8), (2.0, -0.3), 0.3
    anisotropy = rational(turn.numerator, turn.denominator, sign)
    mesh = rapidity_mesh(anisotropy=anisotropy, coupling=1.0, nodes=96, spacing=0.06)
    sides = {"left": thermal_on_mesh(mesh, left), "right": thermal_on_mesh(mesh, right)}
    reference = reference_state(mesh, 0.5 * (sides["left"] + sides["right"]))
    _, slopes = states_on_rays(mesh, reference, rays=np.array([ray]), **sides)
    crossings, _ = find_crossings(mesh, slopes, np.array([ray]))
    cuts = [
        mesh.layout.rapidities(crossings.position[crossings.row == string])
        for string in range(len(STRINGS[turn]))
    ]
    assert all(cut.size for cut in cuts)
    grids = [panels(cut, count=52 if turn.numerator == 1 else 130) for cut in cuts]
    fillings = []
    for string, (x, _) in enumerate(grids):
        energy, momentum = interpolate(mesh.grid, slopes[0, :, string], x)
        chosen = [thermal_at(mesh, state, string, x) for state in (left, right)]
        fillings.append(np.where(energy / momentum > ray, *chosen))
    state = PanelState(turn, sign, grids, fillings)
    dressed = state.dressed()
    for string, cut in enumerate(cuts):
        np.testing.assert_allclose(state.velocities(dressed, string, cut), ray, rtol=0.0, atol=1e-7)
    result = join_halves(mesh, *sides.values(), rays=np.array([ray]))[0]
    np.testing.assert_allclose(result, state.averages(dressed), rtol=0.0, atol=1e-8)


def test_anisotropy_and_temperature_change_sign_together() -> None:
    """Rotating every second spin about z turns H(D) into -H(-D): energies and their currents change sign."""
    plus = halves(anisotropy=0.5, left=(0.7, 0.6), right=(2.0, -0.4))
    minus = halves(anisotropy=-0.5, left=(-0.7, 0.6), right=(-2.0, -0.4))
    for name in OBSERVABLES:
        sign = -1.0 if name.startswith("energy") else 1.0
        np.testing.assert_allclose(minus.fields[name], sign * plus.fields[name], rtol=0.0, atol=1e-9)


def test_continuity_holds_between_rays() -> None:
    """d/dz (z q - j) = q on rays z = x/t, for energy and charge, in the interior of the cone."""
    nodes, weights = np.polynomial.legendre.leggauss(40)
    rays = np.concatenate([[-0.5], 0.5 * nodes, [0.5]])
    result = on_rays(rays, anisotropy=0.5, left=(0.5, 1.0), right=(2.0, -0.5))
    for kind in ("energy", "charge"):
        density, current = result[f"{kind}_density"], result[f"{kind}_current"]
        flux = rays * density - current
        assert 0.5 * weights @ density[1:-1] == pytest.approx(flux[-1] - flux[0], abs=1e-8)


@pytest.mark.parametrize(("nu", "left", "right"), [(3, (0.5, 0.0), (2.0, 0.0)), (6, (1.0, 1.5), (3.0, -0.7))])
def test_claimed_errors_cover_a_finer_grid(nu: int, left: State, right: State) -> None:
    times = np.array([4.0])
    prediction = halves(anisotropy=root_of_unity(nu), left=left, right=right, times=times)
    places = {"site": site_positions(SITES), "bond": bond_positions(SITES)}
    mesh = rapidity_mesh(anisotropy=root_of_unity(nu), coupling=1.0, nodes=112, spacing=0.06)
    fillings = thermal_on_mesh(mesh, left), thermal_on_mesh(mesh, right)
    finer = {place: join_halves(mesh, *fillings, rays=x / times[0]) for place, x in places.items()}
    for index, name in enumerate(OBSERVABLES):
        inner = slice(1, -1)
        error = np.abs(prediction.fields[name][0] - finer[PLACES[name]][:, index])[inner]
        assert np.all(error <= prediction.grid_error[name][0, inner])
        assert prediction.grid_error[name].max() < 2e-6


def test_times_at_rest_and_light_cone() -> None:
    """Local equilibrium at t = 0; nothing has changed outside the cone, and it has just inside."""
    left, right = (0.5, 0.0), (2.0, 0.0)
    prediction = halves(anisotropy=0.5, left=left, right=right)
    energy, current = prediction.fields["energy_density"], prediction.fields["energy_current"]
    bonds, sites = bond_positions(SITES), site_positions(SITES)
    assert np.ptp(energy[0, bonds < 0.0]) == 0.0
    assert np.ptp(energy[0, bonds > 0.0]) == 0.0
    assert energy[0, 0] > energy[0, bonds == 0.0][0] > energy[0, -1]
    assert np.all(current[:, [0, -1]] == 0.0)
    first, last = prediction.light_cone
    for row, time in list(enumerate(TIMES))[1:]:
        outside = (sites < first * time) | (sites > last * time)
        assert np.all(np.abs(current[row, outside]) < 1e-12)
        assert np.all(current[row, ~outside] > 1e-6)
        np.testing.assert_allclose(energy[row, bonds < first * time], energy[0, 0], rtol=0.0, atol=1e-12)
    mesh = rapidity_mesh(anisotropy=0.5, coupling=1.0, nodes=64, spacing=0.07)
    energy_slope, momentum_slope = dressed_slopes(mesh, thermal_on_mesh(mesh, right))
    fastest = np.max(energy_slope / momentum_slope)  # over the nodes, so a little too small
    assert fastest <= last < fastest + 2e-3


def test_equal_halves_stay_as_they_are() -> None:
    prediction = halves(anisotropy=0.5, left=(1.0, 0.4), right=(1.0, 0.4))
    assert prediction.method == "uniform"
    for name, place in PLACES.items():
        assert prediction.fields[name].shape == (TIMES.size, SITES if place == "site" else SITES - 1)
        assert np.all(prediction.strings_error[name] == 0.0)
        assert np.ptp(prediction.fields[name]) < 1e-15
    assert prediction.fields["charge_density"][0, 0] > 0.0


def test_light_at_the_ends_is_refused_with_its_time() -> None:
    with pytest.raises(InputError, match=r"reaches the ends at t = 10\.54"):
        halves(anisotropy=0.5, left=(0.5, 0.0), right=(2.0, 0.0), times=np.array([0.0, 11.0]))
