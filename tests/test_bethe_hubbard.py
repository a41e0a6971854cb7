"""Hubbard thermodynamics: the numerical pieces, derivatives against differences, symmetries, honest errors.

Conventions: exp[-beta (H - h S^z - mu (N - L))], everything per site, hopping 1. Checks against the outside
are in tests/literature/test_hubbard.py.
"""

from __future__ import annotations

import numpy as np
import pytest
from scipy.integrate import quad

from tests.oracles.hubbard_short_chains import infinite_chain
from tnquench.bethe import hubbard
from tnquench.bethe.hubbard import KEYS, HubbardEquilibrium, hubbard_equilibrium, thermodynamics
from tnquench.bethe.hubbard_equations import hubbard_equations
from tnquench.bethe.hubbard_line import SHIFT_TERMS, SpectralLine, alternating_weights
from tnquench.bethe.hubbard_state import Fields, logarithms, solve_state
from tnquench.bethe.hubbard_velocities import effective_velocities, hubbard_light_cone
from tnquench.errors import ConvergenceError, InputError

#: Weights of the sixth-order first difference at 1, 2, 3 steps.
STENCIL = (0.75, -0.15, 1.0 / 60.0)


def difference(function, place: float, step: float) -> float:
    total = sum(
        weight * (function(place + n * step) - function(place - n * step)) / step
        for n, weight in enumerate(STENCIL, start=1)
    )
    return float(total)


def test_alternating_weights_sum_a_geometric_series() -> None:
    """Down to the rounding of 22 terms of size 1, and with few terms as the published bound says."""
    t = np.linspace(0.0, 1.0, 1001)
    sums = np.polynomial.polynomial.polyval(t, alternating_weights(SHIFT_TERMS))
    np.testing.assert_allclose(sums, 1.0 / (1.0 + t), rtol=0, atol=SHIFT_TERMS * 1.2e-16)
    coarse = np.polynomial.polynomial.polyval(t, alternating_weights(6))
    assert 1e-6 < np.max(np.abs(coarse - 1.0 / (1.0 + t))) < 2.0 * (3.0 + np.sqrt(8.0)) ** -6


@pytest.mark.parametrize("point", [0.0, 0.7, 5.0])
def test_shifts_convolve(point: float) -> None:
    """s * f for f = 1/(1 + x^2) by adaptive quadrature and by shifts, and its derivative."""
    line = SpectralLine(61, 1.5)
    values = line.to_real((1.0 / (1.0 + line.positions**2)).astype(np.complex128))

    def kernel(x: float) -> float:
        return float(1.0 / (4.0 * np.cosh(0.5 * np.pi * x)))

    def convolved(x: float) -> float:
        def integrand(y: float) -> float:
            return kernel(y) / (1.0 + (x - y) ** 2)

        return float(quad(integrand, -30.0, 30.0, limit=200, epsabs=1e-13, points=[x])[0])

    row = line.shifts(np.array([point]), above=1.0, below=1.0) @ line.coefficients
    assert (row @ values)[0] == pytest.approx(convolved(point), rel=0, abs=1e-11)
    slope = line.shifts(np.array([point]), above=1.0, below=1.0, slope=True) @ line.coefficients
    assert (slope @ values)[0].real == pytest.approx(difference(convolved, point, 0.02), rel=0, abs=1e-8)


def test_real_vectors_and_series_come_back() -> None:
    line = SpectralLine(21, 2.0)
    values = np.random.default_rng(3).normal(size=(4, 21))
    np.testing.assert_array_equal(line.to_real(line.to_complex(values)), values)
    again = line.evaluation(line.positions) @ (line.coefficients @ values[0])
    np.testing.assert_allclose(line.to_real(again), values[0], rtol=0, atol=1e-14)


@pytest.mark.parametrize("fields", [Fields(2.0, 0.3, -0.4), Fields(20.0, 0.0, 6.0)])
def test_solution_satisfies_the_equations_on_a_finer_grid(fields: Fields) -> None:
    """Carried to other nodes by its series, a converged solution still solves the equations there."""
    coarse = solve_state(hubbard_equations(1.0, nodes=91), fields)
    fine = hubbard_equations(1.0, nodes=137)
    moved = solve_state(fine, fields, coarse)
    assert coarse.residual < 1e-14
    assert moved.log_partition == pytest.approx(coarse.log_partition, rel=0, abs=1e-7 * fields.beta)
    direct = solve_state(fine, fields)
    np.testing.assert_allclose(moved.unknowns, direct.unknowns, rtol=0, atol=1e-11)


@pytest.mark.parametrize(("repulsion", "beta", "mu", "field"), [(4.0, 2.0, 0.7, 0.5), (-3.0, 1.0, -0.4, 0.8)])
def test_first_derivatives_are_those_of_the_free_energy(
    repulsion: float, beta: float, mu: float, field: float
) -> None:
    """First derivatives against sixth-order differences of the free energy (their error: 1e-10)."""
    given = {"repulsion": repulsion, "beta": beta, "mu": mu, "field": field}
    found = hubbard_equilibrium(**given)

    def free_energy(**changed: float) -> float:
        return hubbard_equilibrium(**(given | changed)).free_energy

    excess = -difference(lambda x: free_energy(mu=x), mu, 0.03)
    magnetisation = -difference(lambda x: free_energy(field=x), field, 0.03)
    shifted = difference(lambda x: x * free_energy(beta=x), beta, 0.03)
    doubles = difference(lambda x: free_energy(repulsion=x), repulsion, 0.03)
    assert found.density == pytest.approx(1.0 + excess, rel=0, abs=2e-9)
    assert found.magnetisation == pytest.approx(magnetisation, rel=0, abs=2e-9)
    assert found.energy == pytest.approx(shifted + field * magnetisation + mu * excess, rel=0, abs=5e-9)
    assert found.double_occupancy == pytest.approx(doubles + 0.5 * excess + 0.25, rel=0, abs=2e-9)
    assert found.entropy == pytest.approx(beta * (shifted - found.free_energy), rel=0, abs=2e-8)


def test_second_derivatives_are_those_of_the_first() -> None:
    given = {"repulsion": 4.0, "beta": 2.0, "mu": 0.7, "field": 0.5}
    found = hubbard_equilibrium(**given)

    def first(**changed: float) -> HubbardEquilibrium:
        return hubbard_equilibrium(**(given | changed))

    assert found.compressibility == pytest.approx(
        difference(lambda x: first(mu=x).density, 0.7, 0.03), rel=0, abs=1e-8
    )
    assert found.susceptibility == pytest.approx(
        difference(lambda x: first(field=x).magnetisation, 0.5, 0.03), rel=0, abs=1e-8
    )
    heat = -2.0 * difference(lambda x: first(beta=x).entropy, 2.0, 0.03)
    assert found.specific_heat == pytest.approx(heat, rel=0, abs=1e-7)


@pytest.mark.parametrize("repulsion", [-2.0, 0.0, 2.0])
def test_signs_of_the_fields(repulsion: float) -> None:
    """mu -> -mu takes n to 2 - n, h -> -h takes m to -m; all else stays."""
    plus = hubbard_equilibrium(repulsion=repulsion, beta=1.5, mu=0.6, field=0.4).as_dict()
    minus = hubbard_equilibrium(repulsion=repulsion, beta=1.5, mu=-0.6, field=-0.4).as_dict()
    assert minus["density"] == pytest.approx(2.0 - plus["density"], abs=1e-12)
    assert minus["magnetisation"] == pytest.approx(-plus["magnetisation"], abs=1e-12)
    expected = plus["double_occupancy"] + minus["density"] - 1.0
    assert minus["double_occupancy"] == pytest.approx(expected, abs=1e-12)
    for key in set(KEYS) - {"density", "magnetisation", "double_occupancy"}:
        assert minus[key] == pytest.approx(plus[key], abs=1e-12), key
    assert plus["density"] > 1.0
    assert plus["magnetisation"] > 0.0


@pytest.mark.parametrize("repulsion", [-3.0, 0.0, 3.0])
def test_units(repulsion: float) -> None:
    """Everything scales with the hopping as its unit says."""
    one = hubbard_equilibrium(repulsion=repulsion, beta=0.8, mu=0.5, field=0.3).as_dict()
    two = hubbard_equilibrium(repulsion=2 * repulsion, beta=0.4, mu=1.0, field=0.6, hopping=2.0).as_dict()
    powers = {"free_energy": 1, "energy": 1, "susceptibility": -1, "compressibility": -1}
    for key in KEYS:
        assert two[key] == pytest.approx(2.0 ** powers.get(key, 0) * one[key], rel=1e-12, abs=1e-14), key


def test_weak_repulsion_meets_free_fermions() -> None:
    """Odd and even parts of f in U join the closed form at U = 0: slope its <(n_up - 1/2)(n_down - 1/2)>."""
    given = {"beta": 1.0, "mu": 0.5, "field": 0.4}
    free = hubbard_equilibrium(repulsion=0.0, **given)
    plus, minus, twice, less = (
        hubbard_equilibrium(repulsion=value, **given).free_energy for value in (0.5, -0.5, 1.0, -1.0)
    )
    even = (4.0 * (plus + minus) / 2.0 - (twice + less) / 2.0) / 3.0
    slope = (8.0 * (plus - minus) - (twice - less)) / 6.0
    assert even == pytest.approx(free.free_energy, rel=0, abs=2e-5)
    centred = free.double_occupancy - 0.5 * (free.density - 1.0) - 0.25
    assert slope == pytest.approx(centred, rel=0, abs=2e-5)


def random_states(count: int) -> list[tuple[float, float, float, float]]:
    rng = np.random.default_rng(11)
    states = []
    for _ in range(count):
        repulsion = float(np.exp(rng.uniform(np.log(0.7), np.log(30.0))))
        beta = float(np.exp(rng.uniform(np.log(1e-3), np.log(25.0))))
        mu = float(rng.uniform(0.0, 0.5 * repulsion + 3.0)) * (rng.random() < 0.7)
        states.append((repulsion, beta, mu, float(rng.uniform(0.0, 3.0)) * (rng.random() < 0.7)))
    return states


def test_claimed_errors_cover_refinement(monkeypatch: pytest.MonkeyPatch) -> None:
    """Values on the grid chosen, and on grids too coarse for the state, against one of twice the nodes."""
    covered = []
    for ladder in ((41, 61, 91), (25, 37, 55)):
        monkeypatch.setattr(hubbard, "NODE_LADDER", ladder)
        monkeypatch.setattr(hubbard, "ERROR_LIMIT", np.inf)
        for repulsion, beta, mu, field in random_states(12):
            found = hubbard_equilibrium(repulsion=repulsion, beta=beta, mu=mu, field=field).as_dict()
            equations = hubbard_equations(0.25 * repulsion, nodes=2 * ladder[-1] + 1)
            fine = thermodynamics(solve_state(equations, Fields(beta, 0.5 * beta * field, beta * mu)))
            fine["double_occupancy"] += 0.5 * (fine["density"] - 1.0) + 0.25
            covered += [abs(found[key] - fine[key]) <= found[f"{key}_error"] for key in KEYS]
    assert np.mean(covered) >= 0.95
    assert len(covered) == 216


@pytest.mark.parametrize(("repulsion", "field"), [(4.0, 0.0), (8.0, 0.5), (1.0, 0.0), (-4.0, 0.5)])
@pytest.mark.parametrize("beta", [0.05, 1.0, 8.0])
def test_errors_are_small_enough_to_be_useful(repulsion: float, field: float, beta: float) -> None:
    found = hubbard_equilibrium(repulsion=repulsion, beta=beta, mu=0.8, field=field).as_dict()
    assert all(found[f"{key}_error"] < 1e-8 for key in KEYS)


def test_impossible_parameters_are_named() -> None:
    with pytest.raises(InputError) as caught:
        hubbard_equilibrium(repulsion=0.05, beta=-1.0, hopping=1.0)
    assert any(line.startswith("beta = -1: must be positive") for line in caught.value.problems)
    assert any("repulsion = 0.05: must be 0 or at least 0.1" in line for line in caught.value.problems)
    assert len(caught.value.problems) == 2
    with pytest.raises(InputError, match="hopping = 0: must be positive"):
        hubbard_equilibrium(repulsion=1.0, beta=1.0, hopping=0.0)
    with pytest.raises(InputError, match="mu = nan: must be a finite number"):
        hubbard_light_cone(repulsion=1.0, beta=1.0, mu=float("nan"))


def test_unresolved_states_are_refused_with_their_best_value(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(hubbard, "NODE_LADDER", (21, 31))
    with pytest.raises(ConvergenceError) as caught:
        hubbard_equilibrium(repulsion=1.0, beta=50.0, mu=0.7, field=0.3)
    best = caught.value.best
    assert isinstance(best, HubbardEquilibrium)
    assert best.free_energy_error > 1e-5
    assert abs(best.free_energy + 1.3) < 0.2


def test_extremes_stay_finite() -> None:
    """Saturated, empty, very hot, very cold and nearly atomic chains."""
    full = hubbard_equilibrium(repulsion=4.0, beta=20.0, mu=30.0, field=10.0)
    assert full.density == pytest.approx(2.0, abs=1e-12)
    assert full.free_energy == pytest.approx(1.0 - 30.0, abs=1e-11)
    polarised = hubbard_equilibrium(repulsion=4.0, beta=20.0, field=60.0)
    assert polarised.magnetisation == pytest.approx(0.5, abs=1e-12)
    assert polarised.energy == pytest.approx(-1.0, abs=1e-11)
    hot = hubbard_equilibrium(repulsion=4.0, beta=1e-3)
    assert hot.entropy == pytest.approx(2.0 * np.log(2.0), abs=1e-5)
    cold = hubbard_equilibrium(repulsion=4.0, beta=500.0)
    assert abs(cold.entropy) < 0.01


def test_density_of_momenta_where_it_is_known() -> None:
    """2 pi rho_total = 1 where cos k = 0: scattering displaces no momentum there, in whatever state."""
    state = solve_state(hubbard_equations(0.6, nodes=91), Fields(1.5, 0.4, 0.9))
    found = effective_velocities(state)
    assert found.momenta[45] == pytest.approx(0.5 * np.pi)
    assert found.charge_density[45] == pytest.approx(1.0, abs=1e-13)
    assert np.all(found.charge_density > 0.0)
    assert np.all((found.spin_filling > 0.0) & (found.spin_filling < 1.0))
    zeta = np.exp(state.unknowns[state.equations.towers :])
    np.testing.assert_allclose(found.charge_filling, 1.0 / (1.0 + zeta), rtol=1e-12)
    eta = np.expm1(logarithms(state.equations, state.unknowns)[[0, 91]].sum())  # at the middle of the line
    assert found.spin_filling[0] == pytest.approx(1.0 / (1.0 + eta), rel=1e-12)


def test_light_cone_of_an_empty_chain_and_its_maps() -> None:
    """Dilute particles move freely; neither sign of the fields nor the map to U < 0 changes a speed."""
    edge, error = hubbard_light_cone(repulsion=4.0, beta=20.0, mu=-12.0)
    assert edge == pytest.approx(2.0, abs=1e-12)
    assert error < 1e-12
    given = {"repulsion": 4.0, "beta": 0.8, "mu": 0.5, "field": 0.3, "hopping": 1.5}
    edge, error = hubbard_light_cone(**given)
    assert error < 1e-7
    mapped, _ = hubbard_light_cone(repulsion=-4.0, beta=0.8, mu=-0.15, field=1.0, hopping=1.5)
    assert mapped == pytest.approx(edge, abs=1e-12)
    assert hubbard_light_cone(repulsion=0.0, beta=1.0, hopping=1.5) == (3.0, 0.0)
    state = solve_state(hubbard_equations(4.0 / 6.0, nodes=205), Fields(1.2, 0.12, 0.4))
    assert 1.5 * effective_velocities(state).fastest == pytest.approx(edge, abs=2.0 * error + 1e-9)


@pytest.mark.parametrize(("mu", "field"), [(0.7, 0.0), (-1.2, 2.5)])
def test_free_fermions_at_high_temperature(mu: float, field: float) -> None:
    """The closed form at U = 0 against short open chains (their own error at beta = 0.2: 1e-11)."""
    exact = infinite_chain(repulsion=0.0, beta=0.2, mu=mu, field=field)
    found = hubbard_equilibrium(repulsion=0.0, beta=0.2, mu=mu, field=field).as_dict()
    for key in KEYS:
        assert found[key] == pytest.approx(exact[key], rel=0, abs=2e-11), key
