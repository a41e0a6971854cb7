"""Thermodynamics at |D| >= 1 against the quantum transfer matrix and published results.

Conventions of every test: H = J sum_j [SxSx + SySy + D SzSz] - h sum Sz, spins S = sigma/2, k_B = 1.
"""

from __future__ import annotations

import numpy as np
import pytest
from scipy.special import zeta

from tests.oracles import transfer_matrix_gapped
from tnquench.bethe.gapped import gapped_equilibrium
from tnquench.bethe.gapped_thermal import ground_state_energy

TRANSFER_MATRIX_CASES = [
    (1.0, 1.0, 0.5, 0.0),
    (1.0, 1.0, 2.0, 0.5),
    (1.0, 1.0, 5.0, 0.3),
    (1.2, 1.0, 1.0, 0.0),
    (1.2, 1.0, 3.0, -0.7),
    (2.0, 1.0, 0.3, 0.0),
    (2.0, 1.0, 0.6, 1.0),
    (5.0, 1.0, 0.05, 1.0),
    (1.0, -1.0, 1.0, 0.3),
    (1.2, -1.0, 1.0, 0.0),
    (2.0, -1.0, 0.3, 0.4),
]


@pytest.mark.literature
@pytest.mark.parametrize(("anisotropy", "sign", "beta", "field"), TRANSFER_MATRIX_CASES)
def test_quantum_transfer_matrix(anisotropy: float, sign: float, beta: float, field: float) -> None:
    """The free energy from one nonlinear integral equation without strings.

    Source: A. Kluemper, Z. Phys. B 91, 507 (1993); see tests/oracles/transfer_matrix_gapped.py, where a
    negative coupling stands for -D. Regime: temperatures at which the contour fits into the period (D > 1).
    Tolerance: 1e-11; two contours of the oracle agree to 1e-13.
    """

    def oracle(width: float, stretch: float) -> float:
        return transfer_matrix_gapped.free_energy(
            anisotropy=anisotropy, coupling=sign, beta=beta, field=field, width=width, stretch=stretch
        )

    exact = oracle(0.43, 1.0)
    assert oracle(0.4, 1.1) == pytest.approx(exact, abs=1e-12)
    found = gapped_equilibrium(anisotropy=sign * anisotropy, beta=beta, field=field, accuracy=1e-11)
    assert found.free_energy == pytest.approx(exact, rel=0.0, abs=1e-11)


@pytest.mark.literature
def test_derivatives_of_the_quantum_transfer_matrix() -> None:
    """m, chi, energy and c at D = 1 from differences of the oracle's free energy, with their tolerance."""
    beta, field, step = 1.5, 0.4, 0.01
    found = gapped_equilibrium(anisotropy=1.0, beta=beta, field=field)

    def log_z(b: float, h: float) -> float:
        return -b * transfer_matrix_gapped.free_energy(anisotropy=1.0, beta=b, field=h, nodes=256)

    by_field = [log_z(beta, field + k * step) for k in (-2, -1, 0, 1, 2)]
    by_beta = [log_z(beta + k * step, field) for k in (-2, -1, 0, 1, 2)]
    slope, bend = (
        np.array([1.0, -8.0, 0.0, 8.0, -1.0]) / 12.0,
        np.array([-1.0, 16.0, -30.0, 16.0, -1.0]) / 12.0,
    )
    magnetisation = slope @ by_field / (step * beta)
    assert found.magnetisation == pytest.approx(magnetisation, abs=1e-8)
    assert found.susceptibility == pytest.approx(bend @ by_field / (step**2 * beta), abs=1e-7)
    assert found.energy == pytest.approx(field * magnetisation - slope @ by_beta / step, abs=1e-8)
    assert found.specific_heat == pytest.approx(beta**2 * (bend @ by_beta) / step**2, abs=1e-7)


@pytest.mark.literature
def test_ground_state_energies() -> None:
    """1/4 - ln 2 at D = 1 (L. Hulthen 1938) and R. Orbach's sum at D = 2 (Phys. Rev. 112, 309 (1958)).

    Orbach: J D/4 - J sinh(eta) [1/2 + 2 sum_n 1/(1 + e^(2 n eta))]. Cold states approach them: at D = 1 as
    f = e_0 - T^2/3 (c = 1, v = pi J/2; Affleck 1986), up to logarithms; at D = 2 exponentially.
    """
    assert ground_state_energy(1.0, 1.0) == pytest.approx(0.25 - np.log(2.0), abs=1e-13)
    eta = np.arccosh(2.0)
    order = np.arange(1, 30)
    orbach = 0.5 - np.sinh(eta) * (0.5 + 2.0 * np.sum(1.0 / (1.0 + np.exp(2.0 * order * eta))))
    assert ground_state_energy(2.0, 1.0) == pytest.approx(orbach, abs=1e-13)
    cold = gapped_equilibrium(anisotropy=1.0, beta=20.0)
    assert (cold.free_energy - 0.25 + np.log(2.0)) * 20.0**2 == pytest.approx(-1.0 / 3.0, rel=0.01)
    assert gapped_equilibrium(anisotropy=3.0, beta=20.0).energy == pytest.approx(
        ground_state_energy(3.0, 1.0), abs=1e-5
    )


@pytest.mark.literature
def test_specific_heat_maximum_of_the_heisenberg_chain() -> None:
    """C_max = 0.3497121235 k_B at T = 0.4802848685 J.

    Source: D. C. Johnston, R. K. Kremer, M. Troyer, X. Wang, A. Kluemper, S. L. Bud'ko, A. F. Panchula,
    P. C. Canfield, Phys. Rev. B 61, 9558 (2000), with A. Kluemper's numbers; from memory. Tolerance: its last
    digits.
    """
    top = 0.4802848685
    heat = [
        gapped_equilibrium(anisotropy=1.0, beta=1.0 / t).specific_heat for t in (top - 1e-3, top, top + 1e-3)
    ]
    assert heat[1] == pytest.approx(0.3497121235, abs=1e-9)
    vertex = top + 0.5e-3 * (heat[0] - heat[2]) / (heat[0] - 2.0 * heat[1] + heat[2])
    assert vertex == pytest.approx(top, abs=2e-6)  # the cubic term moves a parabola's vertex by 1e-6


@pytest.mark.literature
def test_susceptibility_maximum_of_the_heisenberg_chain() -> None:
    """The largest chi is 0.146926 /J, at T = 0.640851 J.

    Source: as above; from memory, hence compared to five digits.
    """
    top = 0.640851
    chi = [
        gapped_equilibrium(anisotropy=1.0, beta=1.0 / t).susceptibility for t in (top - 3e-3, top, top + 3e-3)
    ]
    assert chi[1] == pytest.approx(0.146927, abs=2e-6)
    vertex = top + 1.5e-3 * (chi[0] - chi[2]) / (chi[0] - 2.0 * chi[1] + chi[2])
    assert vertex == pytest.approx(top, abs=5e-5)


@pytest.mark.literature
def test_susceptibility_approaches_its_limit_logarithmically() -> None:
    """chi = [1 + 1/(2 ln(T_0/T))]/(pi^2 J), T_0 = 7.7 J, as T -> 0.

    Source: S. Eggert, I. Affleck, M. Takahashi, Phys. Rev. Lett. 73, 332 (1994); T_0 from memory. Tolerance:
    the next terms, 1.6 % at T = J/10 and vanishing with T.
    """
    excesses = []
    for beta in (10.0, 20.0):
        limit = (1.0 + 0.5 / np.log(7.7 * beta)) / np.pi**2
        excesses.append(gapped_equilibrium(anisotropy=1.0, beta=beta).susceptibility / limit - 1.0)
    assert 0.0 < excesses[1] < 0.5 * excesses[0] < 0.01


@pytest.mark.literature
def test_cold_ferromagnet_is_a_gas_of_magnons() -> None:
    """f = -J/4 - zeta(3/2)/sqrt(2 pi) T^(3/2) + T^2 + O(T^(5/2)) at D = -1.

    Source: M. Takahashi, Prog. Theor. Phys. Suppl. 87, 233 (1986); the coefficient of T^2 from memory. Both
    are read off from three temperatures with the next term fitted. Tolerance: the term after that.
    """
    temperatures = np.array([0.16, 0.08, 0.04])
    values = [
        gapped_equilibrium(anisotropy=-1.0, beta=1.0 / t, accuracy=1e-6).free_energy for t in temperatures
    ]
    scaled = (np.array(values) + 0.25) / temperatures**1.5
    fit = np.polynomial.polynomial.polyfit(np.sqrt(temperatures), scaled, 2)
    assert fit[0] == pytest.approx(-zeta(1.5) / np.sqrt(2.0 * np.pi), rel=0.02)
    assert fit[1] == pytest.approx(1.0, rel=0.2)


@pytest.mark.literature
def test_strong_fields_saturate() -> None:
    """Above h = J (1 + D) the antiferromagnet is polarised: a magnon then costs h - J (1 + D) at least."""
    for anisotropy in (1.0, 2.0):
        above = gapped_equilibrium(anisotropy=anisotropy, beta=20.0, field=1.5 + anisotropy)
        below = gapped_equilibrium(anisotropy=anisotropy, beta=20.0, field=0.5 + anisotropy)
        assert above.magnetisation == pytest.approx(0.5, abs=1e-4)
        assert below.magnetisation < 0.4
        assert above.energy == pytest.approx(0.25 * anisotropy, abs=1e-3)
