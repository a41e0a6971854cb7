"""Thermal and generalized states of the XXZ chain at |D| >= 1 against matrices, closed forms, refinement."""

from __future__ import annotations

import time

import numpy as np
import pytest
from numpy.typing import NDArray

from tests.oracles.exact_chain import energy_currents, local_hamiltonian, magnetisations, spin_currents
from tests.oracles.high_temperature import series
from tnquench.bethe import gapped
from tnquench.bethe.gapped import gapped_equilibrium
from tnquench.bethe.gapped_grid import gapped_grid
from tnquench.bethe.gapped_model import (
    GappedModel,
    GappedState,
    gapped_model,
    gapped_state,
    generalized_state,
)
from tnquench.bethe.gapped_states import (
    dressed_charges,
    dressed_slopes,
    gapped_averages,
    gapped_covariance,
    gapped_drude,
    gapped_velocity,
)
from tnquench.bethe.gapped_tail import (
    extend,
    field_ratio,
    infinite_temperature_log_eta,
    infinite_temperature_log_x,
    tail_correction,
)
from tnquench.bethe.gapped_thermal import gapped_thermal, log_partition
from tnquench.bethe.thermodynamics import KEYS
from tnquench.conventions import Reals
from tnquench.errors import ConvergenceError

Complexes = NDArray[np.complex128]

SITES = 7


def model_at(anisotropy: float, *, strings: int = 16, nodes: int = 64, coupling: float = 1.0) -> GappedModel:
    return gapped_model(anisotropy=anisotropy, coupling=coupling, strings=strings, nodes=nodes)


@pytest.mark.parametrize("anisotropy", [1.0, 1.3, 2.0, 6.0, -1.0, -1.7])
@pytest.mark.parametrize("field", [0.0, 0.7])
def test_high_temperature_series(anisotropy: float, field: float) -> None:
    """-beta f against its series to order beta^7, whose coefficients come from matrices of short chains.

    Tolerance: the remainder of order beta^8, with a coefficient of the size of the last ones.
    """
    beta = 0.02 / (1.0 + abs(anisotropy))
    coefficients = series(anisotropy=anisotropy, field=field, order=7)
    exact = np.polynomial.polynomial.polyval(beta, coefficients)
    found = gapped_equilibrium(anisotropy=anisotropy, beta=beta, field=field, accuracy=1e-12)
    assert -beta * found.free_energy == pytest.approx(exact, rel=0.0, abs=2e-14 + 1e-12 * beta)


@pytest.mark.parametrize(("product", "field"), [(1.5, 0.0), (1.5, 0.8), (-2.0, 0.5), (-1.0, 0.0)])
def test_large_anisotropy_is_the_ising_chain(product: float, field: float) -> None:
    """D -> infinity at fixed J D: the transfer matrix of the classical chain, corrections of order 1/D^2.

    ln Z = ln[e^(-K/4) cosh(b/2) + sqrt(e^(-K/2) sinh(b/2)^2 + e^(K/2))], K = beta J D, b = beta h.
    """
    beta, size = 1.0, 1e4
    found = gapped_equilibrium(
        anisotropy=np.copysign(size, product), beta=beta, field=field, coupling=abs(product) / size
    )

    def log_z(k: float, b: float) -> float:
        return float(
            np.log(
                np.exp(-0.25 * k) * np.cosh(0.5 * b)
                + np.sqrt(np.exp(-0.5 * k) * np.sinh(0.5 * b) ** 2 + np.exp(0.5 * k))
            )
        )

    b, step = beta * field, 1e-3
    up, middle, down = (log_z(product, b + shift) for shift in (step, 0.0, -step))
    assert found.free_energy == pytest.approx(-middle, abs=1e-7)
    assert found.magnetisation == pytest.approx((up - down) / (2.0 * step), abs=1e-6)
    assert found.susceptibility == pytest.approx((up - 2.0 * middle + down) / step**2, abs=1e-6)


@pytest.mark.parametrize(
    ("anisotropy", "beta", "field"), [(2.0, 1.5, 0.6), (1.0, 0.8, 0.9), (-1.4, 0.7, -0.5)]
)
def test_derivatives_are_those_of_the_free_energy(anisotropy: float, beta: float, field: float) -> None:
    """Energy, magnetisation, c and chi by implicit differentiation against differences of ln Z."""
    step = 2e-3

    def log_z(at_beta: float, at_field: float) -> float:
        return -at_beta * gapped_equilibrium(anisotropy=anisotropy, beta=at_beta, field=at_field).free_energy

    found = gapped_equilibrium(anisotropy=anisotropy, beta=beta, field=field)
    here = log_z(beta, field)
    hot, cold = log_z(beta - step, field), log_z(beta + step, field)
    down, up = log_z(beta, field - step), log_z(beta, field + step)
    total = -(cold - hot) / (2.0 * step)
    assert found.energy - field * found.magnetisation == pytest.approx(total, abs=1e-6)
    assert found.magnetisation == pytest.approx((up - down) / (2.0 * step * beta), abs=1e-6)
    assert found.specific_heat == pytest.approx(beta**2 * (cold - 2.0 * here + hot) / step**2, abs=2e-6)
    assert found.susceptibility == pytest.approx((up - 2.0 * here + down) / (step**2 * beta), abs=2e-6)


@pytest.mark.parametrize("anisotropy", [1.0, 1.5, -2.0])
def test_zero_field_is_the_limit_of_small_ones(anisotropy: float) -> None:
    """chi at h = 0, where every string's dressed magnetisation vanishes, is m/h for h -> 0; m is odd in h."""
    none, small, other = (
        gapped_equilibrium(anisotropy=anisotropy, beta=1.0, field=field) for field in (0.0, 1e-3, -1e-3)
    )
    assert none.magnetisation == 0.0 or abs(none.magnetisation) < 1e-14
    assert other.magnetisation == -small.magnetisation
    assert small.magnetisation / 1e-3 == pytest.approx(none.susceptibility, rel=1e-5)


@pytest.mark.parametrize("anisotropy", [2.0, -1.5])
def test_convergence_is_exponential_in_the_number_of_strings(anisotropy: float) -> None:
    exact, *errors = (_log_z(anisotropy, strings) for strings in (40, 3, 5, 7, 9))
    moved = np.abs(np.array(errors) - exact)
    assert np.all(moved[1:] < 0.1 * moved[:-1])
    assert moved[-1] < 1e-8


def test_convergence_at_the_isotropic_point_is_better_than_fourth_order() -> None:
    exact, *errors = (_log_z(1.0, strings, nodes=100) for strings in (120, 15, 30, 60))
    moved = np.abs(np.array(errors) - exact)
    assert np.all(moved[1:] < moved[:-1] / 16.0)


def _log_z(anisotropy: float, strings: int, nodes: int = 48) -> float:
    state = gapped_thermal(anisotropy=anisotropy, beta=1.5, strings=strings, nodes=nodes)
    return log_partition(state).value


@pytest.mark.parametrize("a", [0.0, 0.02, 0.7, 40.0])
def test_the_tail_continues_the_constant_solution(a: float) -> None:
    """X_n = sinh((n + 1) a + b)/sinh(a) solves the closure for any b, not only the b = 0 of beta = 0."""
    strings, offset = 6, 0.3
    lengths = np.array([strings, strings + 1.0])
    start = infinite_temperature_log_x(lengths, a)
    if a:
        raised = (lengths + 1.0) * a + offset * a
        shifted = raised + np.log(-np.expm1(-2.0 * raised)) - a - np.log(-np.expm1(-2.0 * a))
    else:
        shifted = np.log(lengths + 1.0 + offset)
    excess = shifted - start
    assert float(extend(excess[:1], strings, a).value[0]) == pytest.approx(excess[1], abs=1e-13)
    constants = infinite_temperature_log_eta(strings, a)
    logs = np.logaddexp(0.0, constants)
    np.testing.assert_allclose(constants[1:-1], 0.5 * (logs[:-2] + logs[2:]), rtol=1e-13)


@pytest.mark.parametrize("mode", [1, 2])
@pytest.mark.parametrize("a", [0.05, 0.6])
def test_the_tail_continues_exact_solutions_with_structure(a: float, mode: int) -> None:
    """Deviations of string N to those of N + 1 in an exact solution of all equations that varies in rapidity.

    T_n(x) = e^(n a) A(x + i n eta/2) B(x - i n eta/2) - e^(-n a), A and B = 1 + c e^(+-2 i k x), solves
    Hirota's equation, and 1 + eta_n = T_(n+1)^+ T_(n+1)^- / (T_(n+1)^+ T_(n+1)^- - T_(n+2) T_n) with f^+- =
    f(x +- i eta/2) solves eta_n^+ eta_n^- = (1 + eta_(n-1)) (1 + eta_(n+1)), as is checked first. Source: A.
    Kluemper and P. A. Pearce, Physica A 183, 304 (1992), from memory.
    """
    eta, small, strings = 0.5, 1e-6, 3
    grid = gapped_grid(eta, 48)
    x = (eta * grid.rapidities).astype(np.complex128)

    def t(n: int, at: Complexes, c: float) -> Complexes:
        waves = [1.0 + c * np.exp(sign * 2j * mode * at - n * mode * eta) for sign in (1.0, -1.0)]
        return np.asarray(np.exp(n * a) * waves[0] * waves[1] - np.exp(-n * a))

    def log_one_plus_eta(n: int, at: Complexes, c: float) -> Complexes:
        both = t(n + 1, at + 0.5j * eta, c) * t(n + 1, at - 0.5j * eta, c)
        return np.asarray(np.log(both / (both - t(n + 2, at, c) * t(n, at, c))))

    def eta_of(n: int, at: Complexes) -> Complexes:
        return np.asarray(np.expm1(log_one_plus_eta(n, at, 0.01)))

    shifted = eta_of(2, x + 0.5j * eta) * eta_of(2, x - 0.5j * eta)
    np.testing.assert_allclose(shifted, (1.0 + eta_of(1, x)) * (1.0 + eta_of(3, x)), rtol=1e-12)
    last, beyond = (
        0.5 * (log_one_plus_eta(n, x, small) - log_one_plus_eta(n, x, 0.0)).real / small
        for n in (strings, strings + 1)
    )
    ratio = field_ratio(strings + 1, a) / field_ratio(strings, a)
    correction = tail_correction(grid.poisson[0], strings, a) @ last
    np.testing.assert_allclose(ratio * last + correction, beyond, rtol=0.0, atol=1e-5 * np.abs(beyond).max())
    assert np.abs(correction).max() > 0.1 * np.abs(beyond).max(), "structure matters"


@pytest.mark.parametrize("eta", [0.0, 0.3, 1.3])
def test_convolutions_are_exact_on_known_functions(eta: float) -> None:
    """s * (a_n-1 + a_n+1) = a_n and a_1 * a_n = a_n+1, with a_n written out."""
    grid = gapped_grid(eta, 80)

    def lorentzian(n: int) -> Reals:
        if not eta:
            return np.asarray(0.5 * n / np.pi / (grid.rapidities**2 + 0.25 * n**2))
        waves = np.cosh(n * eta) - np.cos(2.0 * eta * grid.rapidities)
        return np.asarray(np.sinh(n * eta) / waves / np.pi)

    smooth = grid.smoothing[0] @ (lorentzian(1) + lorentzian(3))
    np.testing.assert_allclose(smooth, lorentzian(2), rtol=0.0, atol=1e-11)
    np.testing.assert_allclose(grid.poisson[0] @ lorentzian(2), lorentzian(3), rtol=0.0, atol=1e-11)


STATES = [
    pytest.param(2.0, 0.7, 0.9, id="D = 2"),
    pytest.param(2.0, 0.7, 0.0, id="D = 2 without field"),
    pytest.param(1.0, 1.0, -0.8, id="D = 1"),
    pytest.param(-1.6, 0.7, 0.9, id="D = -1.6"),
]


@pytest.mark.parametrize(("anisotropy", "beta", "beta_field"), STATES)
def test_averages_and_covariances_of_thermal_states(
    anisotropy: float, beta: float, beta_field: float
) -> None:
    """Dressing gives the derivatives of ln Z; currents vanish."""
    model = model_at(anisotropy, strings=40 if abs(anisotropy) == 1.0 else 16, nodes=96)
    state = gapped_state(model, beta=beta, beta_field=beta_field)
    log_z = log_partition(
        gapped_thermal(anisotropy=anisotropy, beta=beta, beta_field=beta_field, strings=60, nodes=64)
    )
    means, sign = gapped_averages(model, state), np.sign(beta_field)
    assert means.energy_density == pytest.approx(-log_z.by_beta, abs=1e-10)
    assert means.charge_density == pytest.approx(sign * log_z.by_field, abs=1e-10)
    assert abs(means.energy_current) + abs(means.charge_current) < 1e-14
    covariance = gapped_covariance(model, state)
    expected = [log_z.by_beta_beta, -sign * log_z.by_beta_field, log_z.by_field_field]
    found = [covariance[0, 0], covariance[0, 1], covariance[1, 1]]
    np.testing.assert_allclose(found, expected, rtol=0.0, atol=1e-10)
    assert covariance[0, 1] == covariance[1, 0]


def trace_average(*factors: object) -> float:
    product = factors[0]
    for factor in factors[1:]:
        product = product @ factor  # type: ignore[operator]
    return float(product.diagonal().sum().real) / 2.0**SITES  # type: ignore[attr-defined]


@pytest.mark.parametrize("anisotropy", [1.0, 1.5, 2.5, -2.0])
def test_thermal_drude_weight_at_high_temperature(anisotropy: float) -> None:
    """The energy current is conserved: its Drude weight is the static variance, here from matrices.

    The literature's closed form of the same number is (1 + 2 D^2)/32 at J = 1. Spin Drude weight: none.
    """
    currents = energy_currents(local_hamiltonian(sites=SITES, anisotropy=anisotropy))
    variance = sum(trace_average(currents[3], each) for each in currents)
    assert variance == pytest.approx((1.0 + 2.0 * anisotropy**2) / 32.0, abs=1e-12)
    model = model_at(anisotropy, strings=60 if abs(anisotropy) == 1.0 else 16, nodes=96)
    drude = gapped_drude(model, gapped_state(model, beta=1e-7))
    assert drude[0, 0] == pytest.approx(variance, abs=3e-7)
    assert drude[1, 1] == 0.0


def boosted(model: GappedModel, *, beta: float, boost: float, beta_field: float) -> GappedState:
    """exp(-beta H + boost J_E + beta_field S^z); J_E has the one-particle values e v = -strength e'/2."""
    driving = beta * model.energy_source + 0.5 * boost * model.strength * model.energy_slope_source
    return generalized_state(model, driving, beta_field=beta_field)


@pytest.mark.parametrize("anisotropy", [1.0, 2.0, -1.5])
def test_boosted_states_have_the_currents_of_their_partition_function(anisotropy: float) -> None:
    """<J_E>/L = d ln Z/d boost, with ln Z = -beta e_0 + int s ln(1 + eta_1); both signs of the field."""
    model = model_at(anisotropy, strings=40 if anisotropy == 1.0 else 16, nodes=96)
    boost, step = 0.4, 1e-3

    def log_z(value: float) -> float:
        filling = boosted(model, beta=0.8, boost=value, beta_field=0.6).filling[0]
        return float(-(model.weights * model.momentum_source / (2.0 * np.pi)) @ np.log(filling))

    means = gapped_averages(model, boosted(model, beta=0.8, boost=boost, beta_field=0.6))
    values = [log_z(boost + shift * step) for shift in (-2, -1, 1, 2)]
    slope = np.array([1.0, -8.0, 8.0, -1.0]) @ values / (12.0 * step)
    assert means.energy_current == pytest.approx(slope, abs=1e-10)
    mirrored = gapped_averages(model, boosted(model, beta=0.8, boost=boost, beta_field=-0.6))
    assert mirrored.charge_current == -means.charge_current
    assert mirrored.energy_current == means.energy_current


@pytest.mark.parametrize("anisotropy", [1.0, 2.0, -1.5])
def test_currents_of_weakly_boosted_states_from_matrices(anisotropy: float) -> None:
    """At beta = 0 to lowest order: <j_E> = mu <j_E J_E>, <j_s> = mu b <j_s J_E M>, traces of seven sites."""
    terms = local_hamiltonian(sites=SITES, anisotropy=anisotropy)
    currents, charges = energy_currents(terms), magnetisations(sites=SITES)
    boost_operator, total = sum(currents), sum(charges)
    spin = spin_currents(sites=SITES)[3]
    expected_energy = trace_average(currents[3], boost_operator)
    expected_spin = trace_average(spin, boost_operator, total)
    model = model_at(anisotropy, strings=40 if anisotropy == 1.0 else 16, nodes=96)
    boost, field = 1e-3, 1e-2
    means = gapped_averages(model, boosted(model, beta=0.0, boost=boost, beta_field=field))
    assert means.energy_current / boost == pytest.approx(expected_energy, rel=1e-4)
    assert means.charge_current / (boost * field) == pytest.approx(expected_spin, rel=1e-3)


def test_dressed_functions_and_velocities() -> None:
    """e = -strength p'/2 when dressed too; dressed n is positive; long strings slow down at D > 1."""
    model = model_at(2.0)
    state = gapped_state(model, beta=1.0, beta_field=0.4)
    slopes, charges = dressed_slopes(model, state), dressed_charges(model, state)
    np.testing.assert_allclose(charges[0], -0.5 * model.strength * slopes[1], rtol=0.0, atol=1e-12)
    assert np.all(charges[1] > 0.0)
    speeds = np.abs(gapped_velocity(model, state)).max(axis=1)
    assert np.all(speeds[1:] < speeds[:-1])
    assert speeds[-1] < 1e-6


@pytest.mark.parametrize("seed", range(24))
def test_claimed_errors_cover_refinement(seed: int) -> None:
    """Random states: asking 100 times more moves values by less than the first claim."""
    random = np.random.default_rng(seed)
    anisotropy = float(random.choice([-1.0, 1.0]) * (1.0 + random.uniform(0.15, 1.8) ** 2))
    beta, field = float(10.0 ** random.uniform(-3.0, 1.0)), float(random.normal())
    first = gapped_equilibrium(anisotropy=anisotropy, beta=beta, field=field, accuracy=1e-6).as_dict()
    finer = gapped_equilibrium(anisotropy=anisotropy, beta=beta, field=field, accuracy=1e-10).as_dict()
    for key in KEYS:
        assert abs(first[key] - finer[key]) <= first[f"{key}_error"], key


@pytest.mark.parametrize("beta", [1e-3, 20.0])
def test_thermal_states_are_fast_and_reach_what_is_asked(beta: float) -> None:
    start = time.process_time()
    found = gapped_equilibrium(anisotropy=2.0, beta=beta, accuracy=1e-8)
    assert time.process_time() - start < 2.0  # 0.1 s on a free core
    assert found.free_energy_error < 1e-8 * (1.0 + 1.0 / beta)
    assert found.susceptibility_error < 1e-8 * found.susceptibility


@pytest.mark.parametrize(
    ("settings", "message"),
    [
        ({"anisotropy": 0.5, "beta": 1.0}, "between -1 and 1"),
        ({"anisotropy": 2.0, "beta": -1.0}, "beta and coupling positive"),
        ({"anisotropy": 2.0, "beta": np.inf}, "finite"),
        ({"anisotropy": 2.0, "beta": 10.0, "field": -70.0}, "at most 600"),
    ],
)
def test_bad_input_is_refused(settings: dict[str, float], message: str) -> None:
    with pytest.raises(ValueError, match=message):
        gapped_equilibrium(**settings)


@pytest.mark.parametrize("anisotropy", [1.0, 2.0, -1.5])
@pytest.mark.parametrize("beta", [0.001, 20.0])
def test_strongest_fields_polarise(anisotropy: float, beta: float) -> None:
    """At beta h = 600 all spins are up, and nothing overflows on the way."""
    found = gapped_equilibrium(anisotropy=anisotropy, beta=beta, field=600.0 / beta)
    assert found.energy == pytest.approx(0.25 * anisotropy, abs=1e-10)
    assert found.magnetisation == pytest.approx(0.5, abs=1e-10)
    assert abs(found.susceptibility) <= found.susceptibility_error
    model = model_at(anisotropy, strings=8, nodes=48)
    state = gapped_state(model, beta=1.0, beta_field=600.0)
    assert np.isfinite(gapped_covariance(model, state)).all()
    assert np.isfinite(gapped_drude(model, state)).all()


def test_what_cannot_be_reached_is_refused_with_the_best_values(monkeypatch: pytest.MonkeyPatch) -> None:
    """The susceptibility of a cold isotropic ferromagnet needs strings as long as its correlations."""
    monkeypatch.setattr(gapped, "STRINGS", gapped.STRINGS[:6])
    with pytest.raises(ConvergenceError, match="raise the temperature") as failure:
        gapped_equilibrium(anisotropy=-1.0, beta=20.0)
    assert failure.value.best is not None
