"""Covariances, Drude weights and light cones of every model against closed forms and thermodynamics."""

from __future__ import annotations

import json

import numpy as np
import pytest
from scipy.integrate import quad

from tests.command_line import call
from tnquench.bethe.thermo import thermo
from tnquench.bethe.transport import transport

POINTS = {
    "xxz, D = 0.5 in a field": ("xxz", {"anisotropy": 0.5, "beta": 1.3, "field": 0.4}),
    "xxz, D = 0.37": ("xxz", {"anisotropy": 0.37, "beta": 1.3, "field": 0.2}),
    "xxz, D = 1.5 in a field": ("xxz", {"anisotropy": 1.5, "beta": 0.8, "field": -0.4}),
    "xxz, D = 1": ("xxz", {"anisotropy": 1.0, "beta": 1.0}),
    "ising": ("ising", {"transverse_field": 0.7, "beta": 1.1}),
    "fermion": ("fermion", {"repulsion": -0.8, "beta": 0.9, "mu": 0.3}),
    "hubbard": ("hubbard", {"repulsion": 4.0, "beta": 1.0, "mu": 0.4, "field": 0.3}),
    "hubbard, attractive": ("hubbard", {"repulsion": -3.0, "beta": 0.7, "mu": 0.4, "field": 0.3}),
}


def mean(function: object) -> float:
    """Average over the zone."""
    return float(quad(function, 0.0, np.pi, epsabs=1e-13, epsrel=1e-12, limit=200)[0] / np.pi)


@pytest.mark.parametrize("name", POINTS)
def test_variances_are_derivatives_of_the_free_energy(name: str) -> None:
    """Var(S^z) = chi/beta, Var(n) = kappa/beta, and the specific heat at fixed fields holds all of them."""
    model, settings = POINTS[name]
    functions, moments = thermo(model, **settings), transport(model, **settings)
    values, found = functions.values, moments.values
    beta, field, mu = (settings.get(key, 0.0) for key in ("beta", "field", "mu"))
    heat, room = found["energy_variance"], functions.errors["specific_heat"]
    for charge, potential in (("spin", field), ("particle", mu)):
        if f"{charge}_variance" not in found:
            continue
        key = "compressibility" if model == "hubbard" and charge == "particle" else "susceptibility"
        variance, claim = found[f"{charge}_variance"], moments.errors[f"{charge}_variance"]
        assert variance == pytest.approx(values[key] / beta, abs=claim + functions.errors[key] / beta)
        heat += potential**2 * variance - 2.0 * potential * found[f"energy_{charge}_covariance"]
        room += potential**2 * claim + 2.0 * abs(potential) * moments.errors[f"energy_{charge}_covariance"]
    if model == "hubbard":
        heat += 2.0 * field * mu * found["spin_particle_covariance"]
        room += 2.0 * abs(field * mu) * moments.errors["spin_particle_covariance"]
    room += moments.errors["energy_variance"]
    assert beta**2 * heat == pytest.approx(values["specific_heat"], abs=(1.0 + beta**2) * room)


@pytest.mark.literature
def test_free_fermions_carry_what_each_mode_carries() -> None:
    """D = 0: int dk/2pi n(1 - n) v^2 q_a q_b with epsilon = J cos k - h; q is J cos k for H, 1 for S^z.

    Source: B. Doyon and H. Spohn, SciPost Phys. 3, 039 (2017), for non-interacting modes.
    """
    beta, field = 1.4, 0.3
    found = transport("xxz", anisotropy=0.0, beta=beta, field=field)

    def weight(k: float) -> float:
        return float(0.25 / np.cosh(0.5 * beta * (np.cos(k) - field)) ** 2)

    expected = {
        "energy_variance": mean(lambda k: weight(k) * np.cos(k) ** 2),
        "spin_variance": mean(weight),
        "energy_spin_covariance": mean(lambda k: weight(k) * np.cos(k)),
        "energy_drude_weight": mean(lambda k: weight(k) * (np.sin(k) * np.cos(k)) ** 2),
        "spin_drude_weight": mean(lambda k: weight(k) * np.sin(k) ** 2),
        "energy_spin_drude_weight": mean(lambda k: weight(k) * np.sin(k) ** 2 * np.cos(k)),
        "light_cone": 1.0,
    }
    for key, value in expected.items():
        assert found.values[key] == pytest.approx(value, abs=1e-9), key


@pytest.mark.literature
@pytest.mark.parametrize("anisotropy", [0.5, -0.5, 0.3, 1.0, 2.0])
def test_hot_chains_carry_energy_as_the_energy_current_of_a_site(anisotropy: float) -> None:
    """<J_E^2>/L -> (1 + 2 D^2)/32 J^4: the energy current is conserved; from moments at infinite temperature.

    Source: A. Kluemper and K. Sakai, J. Phys. A 35, 2173 (2002), high-temperature limit; from the trace of
    [sum_j h_{j-1} h_j commutators]^2 over three-site strings. Corrections are of order beta.
    """
    found = transport("xxz", anisotropy=anisotropy, beta=1e-3)
    assert found.values["energy_drude_weight"] == pytest.approx((1.0 + 2.0 * anisotropy**2) / 32.0, rel=2e-3)


@pytest.mark.literature
@pytest.mark.parametrize(("numerator", "denominator"), [(1, 3), (1, 4), (2, 5), (3, 7)])
def test_spin_drude_weight_at_high_temperature(numerator: int, denominator: int) -> None:
    """(1/8) [sin^2(pi l/m)/sin^2(pi/m)] [1 - (m/2 pi) sin(2 pi/m)] at D = cos(pi l/m), D_s/beta in full.

    Sources: T. Prosen and E. Ilievski, Phys. Rev. Lett. 111, 057203 (2013); E. Ilievski and J. De Nardis,
    Phys. Rev. Lett. 119, 020602 (2017).
    """
    turn, unit = np.pi * numerator / denominator, np.pi / denominator
    expected = 0.125 * (np.sin(turn) / np.sin(unit)) ** 2 * (1.0 - np.sin(2.0 * unit) / (2.0 * unit))
    found = transport("xxz", anisotropy=float(np.cos(turn)), beta=1e-4)
    assert found.values["spin_drude_weight"] == pytest.approx(expected, rel=1e-3)


def test_irrational_angles_answer_only_what_is_continuous() -> None:
    found = transport("xxz", anisotropy=0.37, beta=1.0)
    assert "spin_drude_weight" not in found.values
    assert set(found.values) == set(found.errors)
    near = [transport("xxz", anisotropy=value, beta=1.0).values for value in (0.36, 0.38)]
    for key in ("energy_drude_weight", "light_cone", "spin_variance"):
        assert found.values[key] == pytest.approx(0.5 * (near[0][key] + near[1][key]), abs=1e-4)


@pytest.mark.parametrize("field", [-1.4, 0.6])
def test_transverse_field_chain_in_closed_form(field: float) -> None:
    """int dk/2pi n(1 - n) v^2 epsilon^2; the fastest mode has 2 min(J, |g|).

    Source of the modes: P. Pfeuty, Ann. Phys. 57, 79 (1970).
    """
    beta = 0.9

    def energy(k: float) -> float:
        return float(2.0 * np.sqrt(1.0 + field**2 + 2.0 * field * np.cos(k)))

    found = transport("ising", transverse_field=field, beta=beta).values
    carried = mean(lambda k: (4.0 * field * np.sin(k)) ** 2 * 0.25 / np.cosh(0.5 * beta * energy(k)) ** 2)
    assert found["energy_drude_weight"] == pytest.approx(carried, abs=1e-11)
    assert found["light_cone"] == pytest.approx(2.0 * min(1.0, abs(field)), abs=1e-12)


def test_command_prints_transport() -> None:
    words = ("thermo", "xxz", "--anisotropy", "0.5", "--beta", "1", "--transport")
    numbers = json.loads(call(*words, "--json").out)
    assert numbers["light_cone"] == pytest.approx(
        transport("xxz", anisotropy=0.5, beta=1.0).values["light_cone"]
    )
    assert "spin drude weight" in call(*words).out
