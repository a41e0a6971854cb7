"""The conservation check against fields whose continuity equation is known in closed form."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.special import erf

from tests.judge_cases import grid_columns
from tests.oracles.free_fermions import free_evolution
from tnquench.conventions import Reals, bond_positions, site_positions
from tnquench.judge.conservation import check_conservation
from tnquench.judge.points import Points

TIMES: Reals = 0.25 * np.arange(1.0, 41.0)
DIFFUSION = 0.7


def points(name: str, times: Reals, positions: Reals, values: Reals) -> Points:
    columns = grid_columns(name, times, positions, values)
    return Points(columns["time"], columns["x"], columns[name], np.zeros(values.size))


def spreading(positions: Reals, *, leak: float = 0.0) -> tuple[Reals, Reals]:
    """A step that spreads by diffusion, q = erf(x/2 sqrt(D(t+2))), J = -D dq/dx; `leak` adds a source."""
    clock, place = np.meshgrid(TIMES + 2.0, positions, indexing="ij")
    width = 2.0 * np.sqrt(DIFFUSION * clock)
    density = erf(place / width) + leak * clock
    current = -DIFFUSION * 2.0 / np.sqrt(np.pi) / width * np.exp(-((place / width) ** 2))
    return density, current


@pytest.mark.parametrize("spacing", [1.0, 0.5, 0.3])
def test_diffusion_is_conserved_and_a_source_is_seen(spacing: float) -> None:
    """The range ends where the current still flows: only together with the fluxes the total is conserved."""
    positions = np.arange(-5.0, 3.0, spacing)
    for leak, conserved in ((0.0, True), (0.02, False)):
        density, current = spreading(positions, leak=leak)
        fields = {
            "energy_density": points("energy_density", TIMES, positions, density),
            "energy_current": points("energy_current", TIMES, positions, current),
        }
        (found,) = check_conservation(fields)
        assert found.total is not None
        assert found.local is not None
        assert found.total.holds is conserved
        assert found.reason == ""
        if conserved:
            assert found.local.holds
            assert found.local.tolerance < 0.5 * found.local.scale
        else:
            expected = 0.02 * np.ptp(TIMES) * np.ptp(positions)
            assert found.total.violation == pytest.approx(expected, rel=0.05)


def test_wrong_current_is_seen() -> None:
    positions = np.arange(-8.0, 8.25, 0.25)
    density, current = spreading(positions)
    for factor, holds in ((1.0, True), (0.5, False), (-1.0, False)):
        fields = {
            "charge_density": points("charge_density", TIMES, positions, density),
            "charge_current": points("charge_current", TIMES, positions, factor * current),
        }
        (found,) = check_conservation(fields)
        assert found.local is not None
        assert found.local.holds is holds


def test_lattice_currents_between_the_places_of_the_density() -> None:
    """An exact chain: energy on bonds, its currents on sites; magnetisation the other way round."""
    sites, times = 24, 0.1 * np.arange(1.0, 41.0)
    field = np.where(site_positions(sites) < 0, 0.6, -0.2)
    beta = np.where(bond_positions(sites) < 0, 0.5, 2.0)
    exact = free_evolution(sites=sites, beta=beta, beta_field=field, times=times)
    sides = {"energy_density": bond_positions, "energy_current": site_positions,
             "charge_density": site_positions, "charge_current": bond_positions}  # fmt: skip
    fields = {name: points(name, times, places(sites), exact[name]) for name, places in sides.items()}
    for found in check_conservation(fields):
        assert found.total is not None
        assert found.local is not None
        assert found.total.holds
        assert found.local.holds
        assert found.local.violation < 0.02 * found.local.scale


def test_what_cannot_be_checked_is_said() -> None:
    positions = np.arange(-5.0, 3.0)
    density, current = spreading(positions)
    alone = points("energy_density", TIMES, positions, density)
    (found,) = check_conservation({"energy_density": alone})
    assert (found.total, found.local) == (None, None)
    assert "current is not given" in found.reason
    scattered = alone.chosen(np.arange(len(alone)) % 7 != 0)
    (found,) = check_conservation({"energy_density": scattered})
    assert "no grid" in found.reason
    late = points("energy_current", TIMES + 0.01, positions, current)
    (found,) = check_conservation({"energy_density": alone, "energy_current": late})
    assert "other times" in found.reason
    assert check_conservation({"energy_current": late}) == ()
