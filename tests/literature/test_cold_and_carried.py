"""Cold chains against conformal field theory, and the thermal Drude weight at |D| >= 1.

Conventions of every test here: k_B = hbar = 1, everything per site; spins S = sigma/2 in xxz, J = 1 unless
said.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest

from tests.bethe_cases import rational
from tests.oracles.transfer_matrix import ellipse, log_one_plus
from tnquench.bethe.thermo import thermo
from tnquench.bethe.transport import transport
from tnquench.conventions import Reals


def luttinger(anisotropy: float) -> tuple[float, float]:
    """Sound velocity v = (pi/2) sin(g)/g and parameter K = pi/[2 (pi - g)] at D = cos g, J = 1.

    Source: J. des Cloizeaux, M. Gaudin, J. Math. Phys. 7, 1384 (1966); A. Luther, I. Peschel, Phys. Rev. B
    12, 3908 (1975); from memory.
    """
    angle = float(np.arccos(anisotropy))
    return 0.5 * np.pi * np.sin(angle) / angle, np.pi / (2.0 * (np.pi - angle))


@pytest.mark.literature
@pytest.mark.parametrize("anisotropy", [rational(2, 5, -1), rational(1, 3, -1)])
def test_cold_chains_at_negative_anisotropies(anisotropy: float) -> None:
    """c = pi T/(3 v), chi = K/(pi v), <J_E^2>/L = pi v T^3/3.

    Sources: H. W. J. Bloete, J. L. Cardy, M. P. Nightingale, Phys. Rev. Lett. 56, 742 (1986); I. Affleck,
    same volume, 746; A. Kluemper and K. Sakai, J. Phys. A 35, 2173 (2002) for the energy current. Tolerance:
    corrections of order T^2 (umklapp is of higher order here): measured at most 0.8 per cent at T = 1/40, a
    quarter of those at 1/20.
    """
    velocity, parameter = luttinger(anisotropy)
    excess = []
    for beta in (20.0, 40.0):
        found = thermo("xxz", anisotropy=anisotropy, beta=beta).values
        carried = transport("xxz", anisotropy=anisotropy, beta=beta).values["energy_drude_weight"]
        excess.append(
            [
                found["specific_heat"] * beta * 3.0 * velocity / np.pi - 1.0,
                found["susceptibility"] * np.pi * velocity / parameter - 1.0,
                carried * beta**3 * 3.0 / (np.pi * velocity) - 1.0,
            ]
        )
    warm, cold = np.abs(excess)
    assert np.all(cold < 0.01)
    np.testing.assert_allclose(cold / warm, 0.25, rtol=0, atol=0.06)


@pytest.mark.literature
def test_cold_chain_at_an_irrational_angle() -> None:
    """c = pi T/(3 v) and chi = K/(pi v) at D = 0.3, interpolated; sources as above.

    Tolerance: T^2 corrections, measured 1.5 and 0.32 per cent at T = 1/20.
    """
    velocity, parameter = luttinger(0.3)
    found = thermo("xxz", anisotropy=0.3, beta=20.0).values
    assert found["specific_heat"] * 20.0 * 3.0 * velocity / np.pi == pytest.approx(1.0, abs=2e-2)
    assert found["susceptibility"] * np.pi * velocity / parameter == pytest.approx(1.0, abs=5e-3)


@pytest.mark.literature
@pytest.mark.parametrize("anisotropy", [rational(1, 3), rational(2, 5)])
def test_light_cone_of_a_cold_chain_is_the_sound_velocity(anisotropy: float) -> None:
    """At D >= 0 nothing in the cold chain is faster than sound; the excess falls with T^2.

    Source: velocity as above. Tolerance: measured 4e-4 or less at T = 1/40.
    """
    velocity, _ = luttinger(anisotropy)
    warm, cold = (
        transport("xxz", anisotropy=anisotropy, beta=beta).values["light_cone"] / velocity - 1.0
        for beta in (20.0, 40.0)
    )
    assert abs(cold) < 1e-3
    assert abs(cold) < 0.5 * abs(warm)


@pytest.mark.literature
@pytest.mark.parametrize("repulsion", [1.0, -1.0])
def test_cold_fermions_are_a_luttinger_liquid(repulsion: float) -> None:
    """d n/d mu = K/(pi v) at half filling, V = t_h and -t_h: J = 2 t_h, D = V/(2 t_h).

    Source: F. D. M. Haldane, Phys. Rev. Lett. 45, 1358 (1980), with v and K as above. Tolerance: as above;
    energies are 2 t_h, so that T = t_h/20 is as cold as J/40.
    """
    velocity, parameter = luttinger(0.5 * repulsion)
    found = thermo("fermion", repulsion=repulsion, beta=20.0).values
    assert found["density"] == pytest.approx(0.5, abs=1e-12)
    assert found["susceptibility"] * np.pi * 2.0 * velocity / parameter == pytest.approx(1.0, abs=5e-3)
    assert found["specific_heat"] * 20.0 * 3.0 * 2.0 * velocity / np.pi == pytest.approx(1.0, abs=1e-2)


@pytest.mark.literature
def test_critical_ising_chain_has_central_charge_one_half() -> None:
    """c = pi T/(6 v) and <J_E^2>/L = pi v T^3/6 at g = J with v = 2 J; corrections of order T^2.

    Sources: P. Pfeuty, Ann. Phys. 57, 79 (1970) for v; Bloete, Cardy and Nightingale, and Affleck (1986), as
    above. Tolerance: measured 2.7e-4 at T = J/40.
    """
    coupling, excess = 1.3, []
    for beta in (20.0 / coupling, 40.0 / coupling):
        state = {"transverse_field": coupling, "coupling": coupling, "beta": beta}
        heat = thermo("ising", **state).values["specific_heat"]
        carried = transport("ising", **state).values["energy_drude_weight"]
        velocity = 2.0 * coupling
        excess.append(
            [
                heat * 6.0 * velocity * beta / np.pi - 1.0,
                carried * 6.0 * beta**3 / (np.pi * velocity) - 1.0,
            ]
        )
    warm, cold = np.abs(excess)
    assert np.all(cold < 3e-4)
    np.testing.assert_allclose(cold / warm, 0.25, rtol=0, atol=0.01)


def boosted_log_partition(*, anisotropy: float, beta: float, boosts: Reals) -> Reals:
    """ln Z per site of exp(-beta H + boost J_E) but for a term without boost, D >= 1, without strings.

    The equation of tests/oracles/transfer_matrix_gapped.py; J_E is the next logarithmic derivative of the
    transfer matrix after H, so that beta e becomes beta e - boost (i J sinh(eta)/2) e'. The factor is that of
    a single magnon; its sign does not matter to an even response.
    """
    isotropic = anisotropy == 1.0
    eta = 1.0 if isotropic else float(np.arccosh(anisotropy))
    unit = 1.0 if isotropic else float(np.sinh(eta))
    reach = unit * np.sqrt(0.5 * beta)
    length = max(float(reach if isotropic else np.arcsin(min(1.0, reach))), 0.5 * eta)
    turned, turned_weights = ellipse(half_length=length, half_height=0.43 * eta, nodes=288)
    points, weights = 1j * turned, 1j * turned_weights
    distances = points[:, None] - points[None, :]
    bare: Any
    slope: Any
    kernel: Any
    if isotropic:
        bare = 1.0 / (points * (points + 1.0))
        slope = -bare * (1.0 / points + 1.0 / (points + 1.0))
        kernel = weights * 2.0 / ((distances + 1.0) * (distances - 1.0))
    else:
        bare = unit / (np.sinh(points) * np.sinh(points + eta))
        slope = -bare * (1.0 / np.tanh(points) + 1.0 / np.tanh(points + eta))
        kernel = weights * np.sinh(2.0 * eta) / (np.sinh(distances + eta) * np.sinh(distances - eta))
    results = []
    for boost in boosts:
        driving = -0.5 * unit * (beta * bare - 0.5j * boost * unit * slope)
        log_a = np.zeros(points.size, dtype=np.complex128)
        for fraction in np.linspace(0.0, 1.0, 3 + int(beta))[1:]:
            for _ in range(12):
                residual = log_a - fraction * driving + kernel @ log_one_plus(log_a)
                jacobian = np.eye(points.size) + kernel / (1.0 + np.exp(-log_a))
                change = np.linalg.solve(jacobian, residual)
                log_a = log_a - change
                if np.abs(change).max() < 1e-13 * max(1.0, float(np.abs(log_a).max())):
                    break
        results.append(float(np.sum(weights * bare * log_one_plus(log_a)).real))
    return np.array(results)


@pytest.mark.literature
@pytest.mark.parametrize(("anisotropy", "beta"), [(1.0, 0.7), (1.0, 2.0), (1.3, 1.5), (2.0, 0.5)])
def test_thermal_drude_weight_of_isotropic_and_gapped_chains(anisotropy: float, beta: float) -> None:
    """<J_E^2>/L from strings equals the second derivative of a boosted transfer matrix.

    Source: A. Kluemper and K. Sakai, J. Phys. A 35, 2173 (2002); K. Sakai and A. Kluemper, J. Phys. A 36,
    11617 (2003) for D > 1; solved anew here. Tolerance: second differences of order 4 with steps 0.02 and
    rounding 1e-14 are good to about 1e-9; the claim must cover the difference up to that.
    """
    step = 0.02
    logs = boosted_log_partition(anisotropy=anisotropy, beta=beta, boosts=np.array([0.0, step, 2.0 * step]))
    expected = (-logs[2] + 16.0 * logs[1] - 15.0 * logs[0]) * 2.0 / (12.0 * step**2)
    found = transport("xxz", anisotropy=anisotropy, beta=beta)
    claimed = found.errors["energy_drude_weight"]
    assert abs(found.values["energy_drude_weight"] - expected) < claimed + 2e-8
    assert claimed < 1e-6
