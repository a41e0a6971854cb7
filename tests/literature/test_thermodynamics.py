"""Equilibrium of the XXZ chain from the Bethe ansatz against routes that share nothing with it.

Conventions of every test here: exp[-beta (H - h Sz)], H = J sum_j [SxSx + SySy + D SzSz], spins S = sigma/2,
everything per site; energy is that of H alone, specific_heat = T ds/dT at fixed h.
"""

from __future__ import annotations

import numpy as np
import pytest
from numpy.polynomial import Chebyshev
from numpy.polynomial.polynomial import polyval

from tests.oracles.free_fermions import infinite_chain
from tests.oracles.high_temperature import series
from tests.oracles.transfer_matrix import free_energy
from tnquench.bethe.equilibrium import equilibrium
from tnquench.bethe.model import xxz_model
from tnquench.bethe.states import averages, thermal_filling

ANISOTROPIES = [pytest.param(np.cos(np.pi / nu) if nu > 2 else 0.0, id=f"nu={nu}") for nu in range(2, 9)]
ANISOTROPIES += [
    pytest.param(np.cos(np.pi * p / q), id=f"{p}/{q}")
    for p, q in ((2, 5), (3, 7), (3, 8), (2, 7), (5, 12), (30, 43), (29, 70))
]
STATES = [(0.2, 0.5), (1.0, -1.5), (2.0, 0.0)]


def check_free_energy(*, anisotropy: float, beta: float, field: float) -> None:
    """Compare both routes at J = 1.2 and see that the claimed error covers the difference."""
    found = equilibrium(anisotropy=anisotropy, beta=beta, field=field, coupling=1.2)
    expected = free_energy(anisotropy=anisotropy, beta=beta, field=field, coupling=1.2)
    difference = abs(found.free_energy - expected)
    assert difference < 1e-10
    assert difference <= found.free_energy_error + 1e-12, "the claimed error does not cover the difference"
    assert found.free_energy_error < 1e-9, "the claimed error is honest but too wide to be useful"


@pytest.mark.literature
@pytest.mark.parametrize("anisotropy", ANISOTROPIES)
@pytest.mark.parametrize(("beta", "field"), STATES)
def test_free_energy_against_transfer_matrix(anisotropy: float, beta: float, field: float) -> None:
    """Free energy from Takahashi's strings against the quantum transfer matrix, which has none.

    Source: A. Kluemper, Z. Phys. B 91, 507 (1993); F. Goehmann, A. Kluemper, A. Seel, J. Phys. A 37, 7625
    (2004); equations from memory, checked in tests/test_oracles.py.
    Tolerance: the equation is solved to 1e-12 (tests/test_oracles.py deforms its contour); 1e-10 leaves room
    for the rapidity grid of the strings. The claimed error may be missed by the 1e-12 of the other side.
    """
    check_free_energy(anisotropy=anisotropy, beta=beta, field=field)


@pytest.mark.literature
@pytest.mark.parametrize(
    ("anisotropy", "beta", "field"),
    [
        (0.0, 8.0, 0.4),
        (0.5, 8.0, -0.4),
        (np.sqrt(0.5), 8.0, 0.3),
        (np.cos(np.pi / 5), 4.0, 0.4),
        (np.cos(np.pi / 6), 4.0, -0.4),
        (-0.5, 1.0, 0.7),
        (-np.cos(np.pi / 5), 3.0, -0.5),
    ],
)
def test_free_energy_when_cold_or_ferromagnetic(anisotropy: float, beta: float, field: float) -> None:
    """As above (same source, conventions and tolerance) down to T = J/10 and at negative anisotropy."""
    check_free_energy(anisotropy=anisotropy, beta=beta, field=field)


@pytest.mark.literature
@pytest.mark.parametrize(("nu", "beta", "field"), [(3, 1.5, -0.8), (5, 1.0, 0.6)])
def test_derivatives_against_transfer_matrix(nu: int, beta: float, field: float) -> None:
    """Every other equilibrium function is a derivative of the free energy of the transfer matrix.

    Source: as for the free energy; with F = beta f: <H - h Sz> = dF/dbeta, m = -df/dh, chi = -d2f/dh2,
    c = -beta^2 d2F/dbeta2, s = beta (<H - h Sz> - f). Derivatives of Chebyshev interpolants of degree 14 over
    intervals of half length 0.25: rounding 1e-15 grows to about 1e-12 in the first and 1e-10 in the second
    derivative, hence 1e-10 and 1e-8.
    """
    anisotropy = float(np.cos(np.pi / nu))

    def massieu(betas: np.ndarray) -> np.ndarray:
        return np.array([b * free_energy(anisotropy=anisotropy, beta=b, field=field) for b in betas])

    def potential(fields: np.ndarray) -> np.ndarray:
        return np.array([free_energy(anisotropy=anisotropy, beta=beta, field=h) for h in fields])

    warm = Chebyshev.interpolate(massieu, 14, domain=[beta - 0.25, beta + 0.25])
    bent = Chebyshev.interpolate(potential, 14, domain=[field - 0.25, field + 0.25])
    found = equilibrium(anisotropy=anisotropy, beta=beta, field=field)
    magnetisation, enthalpy = -float(bent.deriv()(field)), float(warm.deriv()(beta))
    assert found.magnetisation == pytest.approx(magnetisation, rel=0, abs=1e-10)
    assert found.energy == pytest.approx(enthalpy + field * magnetisation, rel=0, abs=1e-10)
    assert found.entropy == pytest.approx(beta * enthalpy - float(warm(beta)), rel=0, abs=1e-10)
    assert found.specific_heat == pytest.approx(-(beta**2) * float(warm.deriv(2)(beta)), rel=0, abs=1e-8)
    assert found.susceptibility == pytest.approx(-float(bent.deriv(2)(field)), rel=0, abs=1e-8)


@pytest.mark.literature
@pytest.mark.parametrize(("beta", "field"), [(0.1, 0.5), (1.0, -1.5), (3.0, 0.7), (8.0, -0.4), (20.0, 0.0)])
def test_free_fermions_in_equilibrium(beta: float, field: float) -> None:
    """At D = 0 every equilibrium function is a closed integral over free modes.

    Source: E. Lieb, T. Schultz, D. Mattis, Ann. Phys. 16, 407 (1961); S. Katsura, Phys. Rev. 127, 1508
    (1962).
    Modes of energy J cos k - h, Sz = n - 1/2. Tolerance 1e-10: both sides converge exponentially.
    """
    exact = infinite_chain(beta=beta, field=field, coupling=1.2)
    found = equilibrium(anisotropy=0.0, beta=beta, field=field, coupling=1.2).as_dict()
    for name, value in exact.items():
        assert found[name] == pytest.approx(value, rel=0, abs=1e-10), name


@pytest.mark.literature
@pytest.mark.parametrize(("beta", "field"), [(0.1, 0.5), (1.0, -1.5), (3.0, 0.7)])
def test_strings_at_free_fermions(beta: float, field: float) -> None:
    """The string route itself at D = 0 (two strings that do not scatter) against the closed integrals.

    Source, conventions and tolerance as above; the default rapidity grid of the model.
    """
    exact = infinite_chain(beta=beta, field=field, coupling=1.2)
    model = xxz_model(anisotropy=0.0, coupling=1.2)
    state = thermal_filling(model, beta=beta, beta_field=beta * field)
    means = averages(model, state.filling)
    assert state.free_energy == pytest.approx(exact["free_energy"], rel=0, abs=1e-10)
    assert means.energy_density == pytest.approx(exact["energy"], rel=0, abs=1e-10)
    assert means.charge_density == pytest.approx(exact["magnetisation"], rel=0, abs=1e-10)
    assert abs(means.energy_current) < 1e-10
    assert abs(means.charge_current) < 1e-10


@pytest.mark.literature
@pytest.mark.parametrize("anisotropy", [*ANISOTROPIES[:4], *ANISOTROPIES[-4:], -0.5])
@pytest.mark.parametrize("field", [0.0, 0.7])
def test_high_temperature_series(anisotropy: float, field: float) -> None:
    """-beta f against its series to order beta^8, exact for the infinite chain.

    Source: moments of H - h Sz on open chains of 8 and 9 sites, differences by the linked cluster theorem
    (J. Oitmaa, C. Hamer, W. Zheng, Series Expansion Methods, Cambridge 2006): computed, not quoted.
    Tolerance: the remainder is of order beta^9, its coefficient measured as at most 1e-4 at J = 1; the test
    allows twice that, and rounding.
    """
    coefficients = series(anisotropy=anisotropy, field=field, order=8)
    for beta in (0.4, 0.2, 0.1):
        found = equilibrium(anisotropy=anisotropy, beta=beta, field=field)
        remainder = abs(-beta * found.free_energy - polyval(beta, coefficients))
        assert remainder < 2e-4 * beta**9 + 1e-13


@pytest.mark.literature
def test_low_temperatures_at_one_half() -> None:
    """At D = 1/2 the free energy is -3 J/8 - pi T^2 / (6 v) (c = 1), and chi tends to 1 / (2 v (pi - g)).

    Source: H. W. J. Bloete, J. L. Cardy, M. P. Nightingale, Phys. Rev. Lett. 56, 742 (1986); I. Affleck, same
    volume, 746; velocity v = (pi/2) J sin(g)/g with D = cos g (J. des Cloizeaux, M. Gaudin, J. Math. Phys. 7,
    1384 (1966)). The ground-state energy -3 J/8 and the limit of chi are recalled from memory.
    Tolerance: corrections of relative order T^2 (with a logarithm), measured 2e-4 at T = J/80, a quarter of
    those at J/40.
    """
    velocity = 0.75 * np.sqrt(3.0)
    excesses = []
    for beta in (40.0, 80.0):
        found = equilibrium(anisotropy=0.5, beta=beta)
        heat = -(found.free_energy + 0.375) * beta**2 * 6.0 * velocity / np.pi
        response = found.susceptibility * 2.0 * velocity * (2.0 * np.pi / 3.0)
        excesses.append([abs(heat - 1.0), abs(response - 1.0)])
    warm, cold = np.array(excesses)
    assert np.all(cold < 3e-4)
    np.testing.assert_allclose(cold / warm, 0.25, rtol=0, atol=0.03)
