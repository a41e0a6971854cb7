"""Two joined halves at Euler scale against closed results at D = 0 and against conformal field theory.

Conventions of every test here: H = J sum_j [SxSx + SySy + D SzSz], spins S = sigma/2, left half x < 0,
exp(-beta H + beta_field Sz) in each half, hbar = k_B = 1, currents positive to the right.
"""

from __future__ import annotations

import numpy as np
import pytest

from tests.hydro_cases import PLACES
from tests.oracles.free_fermions import joined_halves
from tnquench.conventions import bond_positions, site_positions
from tnquench.hydro.prediction import Prediction, predict_step

SITES = 41


def join(
    *,
    anisotropy: float,
    left: tuple[float, float],
    right: tuple[float, float],
    times: np.ndarray,
    coupling: float = 1.0,
) -> Prediction:
    """The prediction on a chain of 41 sites, with the mean of both halves at x = t = 0."""
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


@pytest.mark.literature
@pytest.mark.parametrize(
    ("left", "right"),
    [
        pytest.param((0.5, 0.0), (2.0, 0.0), id="temperatures"),
        pytest.param((1.5, 0.8), (1.5, -0.8), id="fields"),
        pytest.param((3.0, -0.5), (0.3, 1.2), id="both"),
    ],
)
def test_free_fermion_halves(left: tuple[float, float], right: tuple[float, float]) -> None:
    """At D = 0 all four profiles are closed integrals over the modes that arrive from either half.

    Source: T. Antal, Z. Racz, A. Rakos, G. M. Schutz, Phys. Rev. E 59, 4912 (1999) for fields; Y. Ogata,
    Phys. Rev. E 66, 016135 (2002) for temperatures; references from memory. Modes of energy J cos k.
    Regime: an infinite chain; rays inside, on the edge (square-root singularity) and outside the light cone.
    Tolerance: 1e-8, where the prediction stops to refine its rapidity grid (on the edge itself the densities
    are square roots of the distance, and rounding leaves that much). The claimed error must cover the true
    one at 95 % of all points, the rule of every error budget here, and no claim may be wider than 3e-8: it is
    twice the change in the last refinement, and at least that of its neighbours.
    """
    coupling, times = 1.2, np.array([5.0, 12.5])
    found = join(anisotropy=0.0, coupling=coupling, left=left, right=right, times=times)
    positions = {"site": site_positions(SITES), "bond": bond_positions(SITES)}
    covered = []
    for name, place in PLACES.items():
        inner = slice(1, -1) if name == "energy_current" else slice(None)
        for row, claimed, time in zip(found.fields[name], found.grid_error[name], times, strict=True):
            exact = joined_halves(positions[place] / time, left=left, right=right, coupling=coupling)[name]
            difference = np.abs(row - exact)[inner]
            assert difference.max() < 1e-8, name
            assert claimed.max() < 3e-8, f"{name}: the claim is too wide to be useful"
            covered.append(difference <= claimed[inner])
    assert np.concatenate(covered).mean() >= 0.95
    assert found.light_cone == pytest.approx((-coupling, coupling), rel=0, abs=1e-9)


def conformal_excess(*, anisotropy: float, colder: float) -> float:
    """Relative excess over the conformal current between T = 1/10 and T = 1/20, both divided by `colder`."""
    left, right = (10.0 * colder, 0.0), (20.0 * colder, 0.0)
    found = join(anisotropy=anisotropy, left=left, right=right, times=np.array([10.0]))
    conformal = np.pi / 12.0 * (left[0] ** -2 - right[0] ** -2)
    return float(found.fields["energy_current"][0, SITES // 2] / conformal - 1.0)


@pytest.mark.literature
@pytest.mark.parametrize(
    ("nu", "halved"), [pytest.param(3, 0.25, id="T^2"), pytest.param(4, 2.0 ** (-4.0 / 3.0), id="T^(4/3)")]
)
def test_cold_halves_carry_the_conformal_current(nu: int, halved: float) -> None:
    """At low temperatures the energy current through the joint is (pi c / 12) (T_L^2 - T_R^2) with c = 1.

    Source: D. Bernard and B. Doyon, J. Phys. A 45, 362001 (2012). No velocity enters, and none is fitted.
    Regime: T much less than J. Umklapp corrects the current by a relative T^(4 g / (pi - g)) at D = cos g
    (scaling dimension as in S. Lukyanov, Nucl. Phys. B 522, 533 (1998); from memory), the curvature of the
    spectrum by T^2. At D = 1/2 both powers are 2, and a logarithm slows the fall to 0.30 per halving of T.
    Tolerance: 1 % of the current at T = J/10 and J/20 (measured 0.4 % and 0.7 %), and that fall.
    """
    anisotropy = float(np.cos(np.pi / nu))
    warm, cold = (conformal_excess(anisotropy=anisotropy, colder=colder) for colder in (1.0, 2.0))
    assert abs(warm) < 0.01
    assert cold / warm == pytest.approx(halved, rel=0, abs=0.07 if nu == 3 else 0.01)


@pytest.mark.literature
def test_cold_free_fermions_carry_the_conformal_current() -> None:
    """At D = 0 a linear spectrum is not needed: the corrections to the conformal current are exponential.

    Source: as above; v(k) dk = d(energy) makes the current an integral over energies between -J and J, which
    misses the conformal one by e^(-beta J): 8e-4 at T = J/10 and J/20, 1e-7 at half of these.
    """
    assert abs(conformal_excess(anisotropy=0.0, colder=1.0)) < 1e-3
    assert abs(conformal_excess(anisotropy=0.0, colder=2.0)) < 2e-7
