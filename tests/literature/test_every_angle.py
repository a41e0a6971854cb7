"""The gapless XXZ chain at anisotropies beyond cos(pi/nu), against routes without strings and when cold.

Conventions of every test here: exp[-beta (H - h Sz)], H = J sum_j [SxSx + SySy + D SzSz], J = 1, spins
S = sigma/2, everything per site.
"""

from __future__ import annotations

import numpy as np
import pytest
from numpy.polynomial import Chebyshev
from numpy.polynomial.polynomial import polyval

from tests.bethe_cases import rational
from tests.oracles.high_temperature import series
from tests.oracles.transfer_matrix import ellipse, free_energy, log_one_plus
from tnquench.bethe.correlations import covariance_matrix, drude_matrix
from tnquench.bethe.equilibrium import equilibrium
from tnquench.bethe.model import xxz_model
from tnquench.bethe.states import thermal_filling
from tnquench.conventions import Reals

BETWEEN = (0.3, 0.9, -0.3, 0.01, -0.6, 0.99, -0.97, 0.9999)


@pytest.mark.literature
@pytest.mark.parametrize("anisotropy", BETWEEN)
@pytest.mark.parametrize(("beta", "field"), [(0.2, 0.5), (1.0, -1.5), (2.0, 0.0)])
def test_free_energy_between_angles(anisotropy: float, beta: float, field: float) -> None:
    """Interpolation in D against the quantum transfer matrix, which takes any D.

    Source: A. Kluemper, Z. Phys. B 91, 507 (1993). Tolerance: 1e-10, the accuracy asked of the other angles;
    the claim stops at 1e-8 of the scale and must cover the difference.
    """
    found = equilibrium(anisotropy=anisotropy, beta=beta, field=field)
    expected = free_energy(anisotropy=anisotropy, beta=beta, field=field)
    assert found.free_energy == pytest.approx(expected, rel=0, abs=1e-10)
    assert abs(found.free_energy - expected) <= found.free_energy_error + 1e-12
    assert found.free_energy_error < 1e-7


@pytest.mark.literature
def test_cold_chain_next_to_the_isotropic_ferromagnet() -> None:
    """The same at beta = 20, where the susceptibility has begun to diverge."""
    found = equilibrium(anisotropy=-0.99, beta=20.0)
    exact = free_energy(anisotropy=-0.99, beta=20.0, field=0.0)
    assert abs(found.free_energy - exact) <= found.free_energy_error < 1e-6


@pytest.mark.literature
@pytest.mark.parametrize("anisotropy", [0.3, rational(3, 8), rational(2, 7, -1), rational(29, 70)])
def test_derivatives_at_any_angle(anisotropy: float) -> None:
    """m, energy, c and chi as derivatives of the free energy of the transfer matrix.

    Source as above; Chebyshev interpolants of degree 14 over half lengths of 0.25: rounding grows to 1e-12 in
    first and 1e-10 in second derivatives. Tolerances 1e-9 and 1e-8, at 0.3 the claims if larger.
    """
    beta, field = 1.2, 0.6

    def massieu(betas: np.ndarray) -> np.ndarray:
        return np.array([b * free_energy(anisotropy=anisotropy, beta=b, field=field) for b in betas])

    def potential(fields: np.ndarray) -> np.ndarray:
        return np.array([free_energy(anisotropy=anisotropy, beta=beta, field=h) for h in fields])

    by_beta = Chebyshev.interpolate(massieu, 14, domain=[beta - 0.25, beta + 0.25])
    by_field = Chebyshev.interpolate(potential, 14, domain=[field - 0.25, field + 0.25])
    found = equilibrium(anisotropy=anisotropy, beta=beta, field=field)
    magnetisation, enthalpy = -float(by_field.deriv()(field)), float(by_beta.deriv()(beta))
    assert found.magnetisation == pytest.approx(magnetisation, rel=0, abs=1e-9)
    assert found.energy == pytest.approx(enthalpy + field * magnetisation, rel=0, abs=1e-9)
    heat, response = -(beta**2) * float(by_beta.deriv(2)(beta)), -float(by_field.deriv(2)(field))
    assert abs(found.specific_heat - heat) < 1e-8 + found.specific_heat_error
    assert abs(found.susceptibility - response) < 1e-8 + found.susceptibility_error
    assert max(found.specific_heat_error, found.susceptibility_error) < 2e-8


@pytest.mark.literature
@pytest.mark.parametrize("anisotropy", [0.3, -0.85, rational(5, 12)])
@pytest.mark.parametrize("field", [0.0, 0.7])
def test_series_at_any_angle(anisotropy: float, field: float) -> None:
    """-beta f to order beta^8 by linked clusters (source in the oracle); the remainder is of order beta^9."""
    coefficients = series(anisotropy=anisotropy, field=field, order=8)
    for beta in (0.4, 0.1):
        found = equilibrium(anisotropy=anisotropy, beta=beta, field=field)
        remainder = abs(-beta * found.free_energy - polyval(beta, coefficients))
        assert remainder < 2e-4 * beta**9 + 1e-12


def boosted_log_partition(*, anisotropy: float, beta: float, boosts: Reals) -> Reals:
    """ln Z per site of exp(-beta H + boost J_E), by the quantum transfer matrix with a modified driving term.

    J_E is the next logarithmic derivative of the transfer matrix after H, so its driving term is the
    rapidity derivative of that of H: beta e becomes beta e - boost (J sin g / 2) e', up to a sign that an
    even response does not feel. Source: A. Kluemper and K. Sakai, J. Phys. A 35, 2173 (2002); the factor is
    that of a single magnon, which carries e de/dk = -(J sin g / 2) de/d lambda.
    """
    angle = np.arccos(anisotropy)
    eta, narrow = 1j * angle, min(angle, np.pi - angle)
    reach = np.arcsinh(np.sin(angle) * np.sqrt(0.5 * beta))
    points, weights = ellipse(half_length=max(reach, 0.5 * narrow), half_height=0.43 * narrow, nodes=512)
    distances = points[:, None] - points[None, :]
    kernel = weights * np.sinh(2.0 * eta) / (np.sinh(distances + eta) * np.sinh(distances - eta))
    bare = np.sinh(eta) / (np.sinh(points) * np.sinh(points + eta))
    slope = -bare * (1.0 / np.tanh(points) + 1.0 / np.tanh(points + eta))
    results = []
    for boost in boosts:
        driving = -0.5 * np.sinh(eta) * (beta * bare - 0.5 * boost * np.sin(angle) * slope)
        log_a = np.zeros(points.size, dtype=np.complex128)
        for fraction in np.linspace(0.0, 1.0, 3 + int(beta))[1:]:
            for _ in range(12):
                residual = log_a - fraction * driving + kernel @ log_one_plus(log_a)
                log_a = log_a - np.linalg.solve(
                    np.eye(points.size) + kernel / (1.0 + np.exp(-log_a)), residual
                )
        results.append(np.sum(weights * bare * log_one_plus(log_a)).real - 0.25 * beta * anisotropy)
    return np.array(results)


@pytest.mark.literature
@pytest.mark.parametrize("beta", [0.5, 2.0])
@pytest.mark.parametrize("anisotropy", [0.5, rational(2, 5), rational(3, 8, -1)])
def test_thermal_drude_weight(anisotropy: float, beta: float) -> None:
    """<J_E^2> / L from strings equals the second derivative of a boosted transfer matrix, at any temperature.

    Source: A. Kluemper and K. Sakai, J. Phys. A 35, 2173 (2002), solved anew here. Tolerance: second
    differences of order 4 with steps 0.02 and rounding 1e-14 are good to about 1e-9.
    """
    step = 0.02
    logs = boosted_log_partition(anisotropy=anisotropy, beta=beta, boosts=np.array([0.0, step, 2.0 * step]))
    expected = (-logs[2] + 16.0 * logs[1] - 15.0 * logs[0]) * 2.0 / (12.0 * step**2)
    model = xxz_model(anisotropy=anisotropy, nodes=72)
    filling = thermal_filling(model, beta=beta).filling
    carried = model.energy * model.energy_derivative / model.momentum_derivative
    assert covariance_matrix(model, filling, carried[None])[0, 0] == pytest.approx(expected, rel=0, abs=1e-7)
    assert drude_matrix(model, filling, model.energy[None])[0, 0] == pytest.approx(expected, rel=0, abs=1e-7)


@pytest.mark.literature
@pytest.mark.parametrize(("p", "q"), [(2, 5), (3, 7), (3, 8), (2, 7)])
def test_low_temperatures_are_conformal(p: int, q: int) -> None:
    """c = pi T/(3 v), chi = K/(pi v) with K = pi/[2 (pi - g)], <J_E^2>/L = pi v T^3/3; v = (pi/2) sin g/g.

    Sources: H. W. J. Bloete, J. L. Cardy, M. P. Nightingale, Phys. Rev. Lett. 56, 742 (1986); I. Affleck,
    same volume, 746; J. des Cloizeaux, M. Gaudin, J. Math. Phys. 7, 1384 (1966); S. Lukyanov, Nucl. Phys. B
    522, 533 (1998) for the powers of the corrections: T^2 and T^(4 g/(pi - g)). Kluemper and Sakai (2002)
    for the energy current: in a conformal theory it is v^2 times the momentum, whose fluctuations are those
    of the energy over v^2. Tolerance: those corrections at T = 1/40, and their fall.
    """
    angle = np.pi * p / q
    velocity, luttinger = 0.5 * np.pi * np.sin(angle) / angle, np.pi / (2.0 * (np.pi - angle))
    excess = []
    for beta in (20.0, 40.0):
        found = equilibrium(anisotropy=np.cos(angle), beta=beta)
        model = xxz_model(anisotropy=np.cos(angle), nodes=108)
        flow = drude_matrix(model, thermal_filling(model, beta=beta).filling, model.energy[None])[0, 0]
        excess.append(
            [
                found.specific_heat * beta * 3.0 * velocity / np.pi - 1.0,
                found.susceptibility * np.pi * velocity / luttinger - 1.0,
                flow * beta**3 * 3.0 / (np.pi * velocity) - 1.0,
            ]
        )
    warm, cold = np.abs(excess)
    assert np.all(cold < 0.02)
    assert np.all(cold < 0.5 * warm)
