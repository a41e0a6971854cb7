"""Joined halves at |D| just below 1: combined across the isotropic points, walls of spin apart."""

from __future__ import annotations

import numpy as np
import pytest

from tests.bethe_cases import rational
from tnquench.conventions import OBSERVABLE_PLACES, Reals, bond_positions, site_positions
from tnquench.hydro.alignment import carried, zone_marks
from tnquench.hydro.gapless import sign_ray_gapless, solve_gapless
from tnquench.hydro.gapped import sign_ray_gapped
from tnquench.hydro.mesh import OBSERVABLES
from tnquench.hydro.prediction import Prediction, predict_step
from tnquench.hydro.step import State, Step

SITES, TIME = 8, 3.0
TEMPERATURES: tuple[State, State] = ((0.5, 0.0), (2.0, 0.0))
WALL: tuple[State, State] = ((0.0, 60.0), (0.0, -60.0))


def halves(anisotropy: float, left: State, right: State, *, time: float = TIME) -> Prediction:
    return predict_step(
        anisotropy=anisotropy, coupling=1.0, left=left, right=right, middle=left, times=np.array([time]),
        sites=site_positions(SITES), bonds=bond_positions(SITES),
    )  # fmt: skip


def claim(prediction: Prediction, name: str) -> Reals:
    return np.asarray((prediction.grid_error[name] + prediction.strings_error[name])[0])


def test_energies_of_a_long_string_table_are_reproduced() -> None:
    """-cos(pi/14) can be solved itself, with fourteen strings, but is none of the anisotropies combined."""
    anisotropy = rational(1, 14, -1)
    found = halves(anisotropy, *TEMPERATURES)
    step = Step(1.0, *TEMPERATURES, middle=TEMPERATURES[0])
    for name in ("energy_density", "energy_current"):
        places = (site_positions if OBSERVABLE_PLACES[name] == "site" else bond_positions)(SITES)[1:-1]
        exact = solve_gapless(step, anisotropy, places / TIME, target=1e-5)
        column = exact.values[:, OBSERVABLES.index(name)]
        error = np.abs(found.fields[name][0, 1:-1] - column)
        assert np.all(error <= claim(found, name)[1:-1] + exact.grid[:, OBSERVABLES.index(name)])
        assert claim(found, name).max() < 3e-5
        assert np.ptp(column) > 0.01, "nothing that varies"
    assert found.fields["charge_density"] == pytest.approx(0.0, abs=1e-6)


def test_isotropic_point_is_passed_smoothly() -> None:
    """Profiles at 1 - d, 1 and 1 + d lie on a line to second order in d = 1e-3."""
    below, at_one, above = (halves(value, *TEMPERATURES) for value in (0.999, 1.0, 1.001))
    for name in ("energy_density", "energy_current"):
        first, middle, last = (each.fields[name][0] for each in (below, at_one, above))
        bend = np.abs(first - 2.0 * middle + last)
        assert bend.max() < 3e-6 + claim(below, name).max()
        assert claim(below, name).max() < 3e-5
        assert np.abs(last - first).max() > 1e-4, "nothing that varies"
    assert below.light_cone == pytest.approx(at_one.light_cone, abs=2e-3)


@pytest.mark.literature
def test_domain_wall_near_the_isotropic_ferromagnet() -> None:
    """Up on the left, down on the right: m = -z/(2 sin g), j = (sin g/4) [1 - z^2/sin(g)^2] for |z| < sin(g).

    The limit of large denominators of the closed form at rational angles; source: M. Collura, A. De Luca,
    J. Viti, Phys. Rev. B 97, 081111 (2018), from memory.
    """
    anisotropy = -0.98
    edge = np.sqrt(1.0 - anisotropy**2)
    found = halves(anisotropy, *WALL, time=3.9)
    sites, bonds = site_positions(SITES) / 3.9, bond_positions(SITES) / 3.9
    current = np.where(np.abs(bonds) < edge, 0.25 * edge * (1.0 - (bonds / edge) ** 2), 0.0)
    exact = {"charge_density": np.clip(-0.5 * sites / edge, -0.5, 0.5), "charge_current": current}
    for name, profile in exact.items():
        error = np.abs(found.fields[name][0] - profile)
        assert np.all(error <= claim(found, name) + 1e-9)
        assert error.max() < 5e-4
        assert claim(found, name).max() < 5e-3


def test_longest_strings_move_alike_on_both_sides() -> None:
    """The ray of a wall is smooth in D: 1.02, 1, cos(pi/10) and cos(pi/9) lie on a parabola."""
    step = Step(1.0, (0.5, 0.8), (2.0, -0.3), (1.0, 0.0))
    values = np.array([1.02, 1.0, rational(1, 10), rational(1, 9)])
    rays = [sign_ray_gapped(step, value) for value in values[:2]]
    rays += [sign_ray_gapless(step, value) for value in values[2:]]
    line = np.polyval(np.polyfit(values[:3], rays[:3], 2), values[3])
    assert rays[3] == pytest.approx(line, abs=2e-3)
    assert rays[3] - rays[0] > 0.01
    mirrored = Step(1.0, step.right, step.left, step.middle)
    assert sign_ray_gapless(mirrored, rational(1, 9)) == pytest.approx(-rays[3], abs=1e-7)


def test_rays_are_carried_between_marks() -> None:
    here, there = (-1.0, 0.2, 1.5), (-1.1, 0.4, 1.3)
    rays = np.array([-np.inf, -2.0, -1.0, -0.4, 0.2, 0.85, 1.5, 2.5, np.inf, np.nan])
    expected = [-np.inf, -2.1, -1.1, -0.35, 0.4, 0.85, 1.3, 2.3, np.inf, np.nan]
    np.testing.assert_allclose(carried(rays, here=here, there=there), expected, rtol=0.0, atol=1e-14)
    marks = zone_marks(np.array([0.6, 0.8]), [(-2.0, 2.0), (-1.0, 1.0)], [0.0, 0.7], coupling=1.0)
    np.testing.assert_allclose(marks, [(-2.0, -0.32, 0.32, 2.0), (-1.0, 0.46, 0.94, 1.0)], rtol=1e-14)
    wide = zone_marks(np.array([0.6, 0.8]), [(-2.0, 2.0), (-2.0, 2.0)], [0.0, 0.1], coupling=1.0)
    np.testing.assert_allclose(wide, [(-2.0, -0.8, 0.8, 2.0), (-2.0, -0.5, 0.7, 2.0)], rtol=1e-14)
    outside = zone_marks(np.array([0.6]), [(-1.0, 1.0)], [3.0], coupling=1.0)[0]
    assert list(outside) == sorted(outside)
