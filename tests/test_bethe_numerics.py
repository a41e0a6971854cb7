"""Bethe ansatz of the XXZ chain: thermodynamic identities, convergence, honesty of errors, refusals.

Conventions: H = J sum [SxSx + SySy + D SzSz], state exp[-beta (H - h S^z)], everything per site, J = 1.
"""

from __future__ import annotations

from itertools import pairwise

import numpy as np
import pytest

from tests.bethe_cases import ALL, FRACTIONS, SOME, free_fermions, root_of_unity
from tnquench.bethe import states as states_module
from tnquench.bethe.correlations import covariance_matrix, entropy_density
from tnquench.bethe.equilibrium import KEYS, equilibrium, string_thermodynamics
from tnquench.bethe.grid import fine_line, interpolate, rapidity_grid
from tnquench.bethe.model import xxz_model
from tnquench.bethe.states import (
    averages,
    dress,
    effective_velocity,
    fermi,
    infinite_temperature_log_eta,
    solve_log_eta,
    thermal_filling,
)
from tnquench.bethe.strings import phase_derivative
from tnquench.errors import ConvergenceError


@pytest.mark.parametrize("beta_field", [0.0, 0.7, -2.0])
@pytest.mark.parametrize("anisotropy", [*ALL, *FRACTIONS])
def test_infinite_temperature(anisotropy: float, beta_field: float) -> None:
    """At beta = 0 ln eta is the constant solution, ln Z that of free spins, m = tanh(beta h / 2) / 2."""
    model = xxz_model(anisotropy=anisotropy, nodes=64)
    state = thermal_filling(model, beta=0.0, beta_field=beta_field)
    constants = infinite_temperature_log_eta(model, abs(beta_field))
    if beta_field < 0.0:
        constants[[-2, -1]] = -constants[[-1, -2]]
    np.testing.assert_allclose(state.log_eta, np.repeat(constants[:, None], 64, axis=1), rtol=0, atol=1e-11)
    assert state.log_partition == pytest.approx(np.log(2.0 * np.cosh(0.5 * beta_field)), rel=0, abs=1e-12)
    magnetisation = averages(model, state.filling).charge_density
    assert magnetisation == pytest.approx(0.5 * np.tanh(0.5 * beta_field), rel=0, abs=1e-12)


@pytest.mark.parametrize("anisotropy", [*ALL, *FRACTIONS])
def test_field_reversal(anisotropy: float) -> None:
    """-h turns m around and exchanges the last two strings; the result solves the equations of -h."""
    model = xxz_model(anisotropy=anisotropy, nodes=96)
    up, down = (thermal_filling(model, beta=1.5, beta_field=field) for field in (0.8, -0.8))
    np.testing.assert_allclose(down.filling[-2], 1.0 - up.filling[-1], rtol=0, atol=1e-12)
    np.testing.assert_allclose(down.filling[:-2], up.filling[:-2], rtol=0, atol=1e-12)
    driving = 1.5 * model.energy - 0.8 * model.charge
    direct, residual = solve_log_eta(model, driving, np.zeros_like(driving))
    assert residual < 1e-12
    np.testing.assert_allclose(fermi(direct), down.filling, rtol=0, atol=1e-8)
    above, below = averages(model, up.filling), averages(model, down.filling)
    assert below.charge_density == pytest.approx(-above.charge_density, rel=0, abs=1e-10)
    assert below.energy_density == pytest.approx(above.energy_density, rel=0, abs=1e-11)
    assert above.charge_density > 0.05


@pytest.mark.parametrize("anisotropy", ALL)
def test_thermodynamic_identities(anisotropy: float) -> None:
    """m = -df/dh, e - h m = d(beta f)/d beta, c and chi second derivatives, by differences of order 6."""
    beta, field, step = 1.3, 0.5, 0.02

    def log_partition(beta: float, field: float) -> float:
        model = xxz_model(anisotropy=anisotropy, nodes=72)
        return thermal_filling(model, beta=beta, beta_field=beta * field).log_partition

    shifts = step * np.arange(-3, 4)
    first = np.array([-1.0, 9.0, -45.0, 0.0, 45.0, -9.0, 1.0]) / (60.0 * step)
    second = np.array([2.0, -27.0, 270.0, -490.0, 270.0, -27.0, 2.0]) / (180.0 * step**2)
    along_beta = np.array([log_partition(beta + shift, field) for shift in shifts])
    along_field = np.array([log_partition(beta, field + shift) for shift in shifts])
    found = equilibrium(anisotropy=anisotropy, beta=beta, field=field)
    assert found.magnetisation == pytest.approx(first @ along_field / beta, rel=0, abs=1e-9)
    assert found.energy - field * found.magnetisation == pytest.approx(-first @ along_beta, rel=0, abs=1e-9)
    assert found.specific_heat == pytest.approx(beta**2 * (second @ along_beta), rel=0, abs=3e-8)
    assert found.susceptibility == pytest.approx(second @ along_field / beta, rel=0, abs=3e-8)


@pytest.mark.parametrize("beta_field", [0.0, 1.0, -0.3])
@pytest.mark.parametrize("anisotropy", [*ALL, *FRACTIONS])
def test_state_is_physical(anisotropy: float, beta_field: float) -> None:
    """Total densities are positive, nothing flows in equilibrium, the entropies by two formulas agree.

    Source of the second entropy: C. N. Yang, C. P. Yang, J. Math. Phys. 10, 1115 (1969).
    """
    beta = 2.0
    model = xxz_model(anisotropy=anisotropy, nodes=72)
    state = thermal_filling(model, beta=beta, beta_field=beta_field)
    total = model.signs[:, None] * dress(model, state.filling, model.momentum_derivative)
    assert np.all(total > 0.0)
    assert np.all((state.filling > 0.0) & (state.filling < 1.0))
    means = averages(model, state.filling)
    assert abs(means.energy_current) + abs(means.charge_current) < 1e-12
    identity = state.log_partition + beta * means.energy_density - beta_field * means.charge_density
    assert entropy_density(model, state.filling) == pytest.approx(identity, rel=0, abs=1e-9)
    velocity = effective_velocity(model, state.filling)
    np.testing.assert_allclose(velocity, -velocity[:, ::-1], rtol=0, atol=1e-8)


def test_covariances_are_derivatives() -> None:
    """d<S^z>/d beta at fixed beta h is -<H S^z>_c, and the matrix is symmetric and positive."""
    model = xxz_model(anisotropy=0.5, nodes=64)
    charges = np.stack([model.energy, -model.charge])
    covariance = covariance_matrix(model, thermal_filling(model, beta=1.0, beta_field=0.6).filling, charges)

    def magnetisation(beta: float) -> float:
        return averages(model, thermal_filling(model, beta=beta, beta_field=0.6).filling).charge_density

    near, far = magnetisation(1.01) - magnetisation(0.99), magnetisation(1.02) - magnetisation(0.98)
    slope = (8.0 * near - far) / 0.12
    assert covariance[0, 1] == pytest.approx(-slope, rel=0, abs=1e-8)
    assert covariance[0, 1] == pytest.approx(covariance[1, 0], rel=0, abs=1e-15)
    assert np.linalg.eigvalsh(covariance).min() > 0.0


def test_energies_scale_with_the_coupling() -> None:
    """J = 2 at beta/2 and field 2 h is J = 1 at beta and h, energies doubled."""
    unit = equilibrium(anisotropy=0.5, beta=1.6, field=0.3)
    double = equilibrium(anisotropy=0.5, beta=0.8, field=0.6, coupling=2.0)
    assert double.free_energy == pytest.approx(2.0 * unit.free_energy, rel=1e-12)
    assert double.energy == pytest.approx(2.0 * unit.energy, rel=1e-12)
    assert double.specific_heat == pytest.approx(unit.specific_heat, rel=1e-12)
    assert double.susceptibility == pytest.approx(0.5 * unit.susceptibility, rel=1e-12)


@pytest.mark.parametrize("nu", [2, 3, 8])
def test_grid_integrates_and_interpolates(nu: int) -> None:
    """Both quadratures give int a_1 = (pi - g)/pi, and interpolation reproduces a_1 between the nodes."""
    angle = np.pi / nu
    grid = rapidity_grid(angle, 64)
    fine, fine_weights = fine_line(grid, angle)
    for rapidities, weights in ((grid.rapidities, grid.weights), (fine, fine_weights)):
        integral = weights @ phase_derivative(rapidities, angle=angle)
        assert integral == pytest.approx(1.0 - 1.0 / nu, rel=0, abs=1e-12)
    values = phase_derivative(grid.rapidities, angle=angle)
    between = np.array([-7.0, -0.31, 0.0, float(grid.rapidities[5]), 0.02, 1.9, 25.0])
    exact = phase_derivative(between, angle=angle)
    np.testing.assert_allclose(interpolate(grid, values, between), exact, rtol=0, atol=1e-11)


@pytest.mark.parametrize("anisotropy", [0.5, root_of_unity(8)])
def test_convergence_is_exponential(anisotropy: float) -> None:
    """Sixteen nodes more gain more than a factor 10 each time, until rounding."""
    exact = string_thermodynamics(anisotropy=anisotropy, beta=2.0, field=0.3, coupling=1.0, nodes=160)
    errors = []
    for nodes in (24, 40, 56, 72):
        found = string_thermodynamics(anisotropy=anisotropy, beta=2.0, field=0.3, coupling=1.0, nodes=nodes)
        errors.append(max(abs(found[key] - exact[key]) for key in KEYS))
    assert errors[0] > 1e-7, "nothing to gain"
    for coarse, fine in pairwise(errors):
        assert fine < max(0.1 * coarse, 1e-12)


def test_claimed_errors_cover_true_errors() -> None:
    """Claims hold in 95 of 100 cases and stay useful; truth is a grid of 200 nodes, or integrals at D = 0."""
    ratios, claims = [], []
    for anisotropy in (0.0, 0.5, -0.5, root_of_unity(4)):
        for beta, field in ((0.01, 0.0), (0.5, 0.3), (2.0, -0.35), (7.0, 0.8), (20.0, 0.0), (20.0, 0.15)):
            found = equilibrium(anisotropy=anisotropy, beta=beta, field=field).as_dict()
            if anisotropy == 0.0:
                exact = free_fermions(beta=beta, field=field)
            else:
                exact = string_thermodynamics(
                    anisotropy=anisotropy, beta=beta, field=abs(field), coupling=1.0, nodes=200
                )
                exact["magnetisation"] *= -1.0 if field < 0.0 else 1.0
            ratios += [abs(found[key] - exact[key]) / found[f"{key}_error"] for key in KEYS]
            claims += [found[f"{key}_error"] for key in KEYS]
    assert np.mean(np.array(ratios) <= 1.0) >= 0.95
    assert max(claims) < 1e-9


@pytest.mark.parametrize(("beta", "field"), [(1e-3, 0.0), (1e-3, 2e3), (20.0, 5.0), (20.0, -0.5)])
@pytest.mark.parametrize("anisotropy", SOME)
def test_extreme_states_are_solved(anisotropy: float, beta: float, field: float) -> None:
    found = equilibrium(anisotropy=anisotropy, beta=beta, field=field)
    assert all(np.isfinite(value) for value in found.as_dict().values())
    assert found.free_energy <= 0.25 * anisotropy - 0.5 * abs(field) + 1e-9, "above the fully polarised state"
    assert found.entropy > -found.entropy_error
    assert max(found.specific_heat, found.susceptibility) > 0.0
    assert abs(found.magnetisation) <= 0.5 + found.magnetisation_error


def test_failure_carries_the_best_state(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(states_module, "NEWTON_STEPS", 1)
    with pytest.raises(ConvergenceError, match=r"D = 0\.5, beta = 5") as caught:
        thermal_filling(xxz_model(anisotropy=0.5, nodes=32), beta=5.0)
    assert caught.value.residual > 1e-10
    assert isinstance(caught.value.best, states_module.ThermalState)
    assert caught.value.best.filling.shape == (3, 32)


@pytest.mark.parametrize(
    "wrong",
    [
        {"beta": 0.0},
        {"beta": -1.0},
        {"beta": np.nan},
        {"beta": 1.0, "field": np.inf},
        {"beta": 1.0, "coupling": -1.0},
    ],
)
def test_meaningless_states_are_refused(wrong: dict[str, float]) -> None:
    with pytest.raises(ValueError, match="must be finite"):
        equilibrium(anisotropy=0.5, **wrong)


def test_models_are_cached_and_read_only() -> None:
    model = xxz_model(anisotropy=0.5, nodes=32)
    assert model is xxz_model(anisotropy=0.5, nodes=32)
    with pytest.raises(ValueError, match="read-only"):
        model.energy[0, 0] = 1.0
