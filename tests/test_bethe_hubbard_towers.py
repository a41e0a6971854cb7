"""Longer strings of the Hubbard chain and its Drude weights: sum rules, free limits, maps, honest errors.

Conventions: exp[-beta (H - h S^z - mu (N - L))], everything per site; charges H, S^z, n - 1.
"""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray

from tnquench.bethe.hubbard_equations import hubbard_equations
from tnquench.bethe.hubbard_state import Fields, solve_state
from tnquench.bethe.hubbard_towers import hubbard_drude, solve_tower, string_sums
from tnquench.bethe.hubbard_velocities import effective_velocities
from tnquench.errors import InputError

Reals = NDArray[np.float64]


def free_drude(*, beta: float, potentials: tuple[tuple[float, float], ...], shift: float = 0.0) -> Reals:
    """Drude weights of free modes -2 cos k + shift, for the S^z and potential of each species."""
    momenta = 2.0 * np.pi * (np.arange(400) + 0.5) / 400
    total = np.zeros((3, 3))
    for spin, potential in potentials:
        energy = -2.0 * np.cos(momenta)
        filling = 1.0 / (1.0 + np.exp(beta * (energy - potential)))
        charges = np.stack([energy + shift, np.full(400, spin), np.ones(400)])
        weight = 4.0 * np.sin(momenta) ** 2 * filling * (1.0 - filling) / 400
        total += (charges * weight) @ charges.T
    return total


@pytest.mark.parametrize("fields", [Fields(1.0, 0.2, 0.5), Fields(4.0, 0.8, -3.0)])
def test_strings_carry_the_covariance(fields: Fields) -> None:
    """Sums over strings against the covariance of the closed equations, which knows no strings.

    The deviation falls with the height like a power and is below 2e-3 of the diagonal at 48 strings (measured
    6e-4 for spin and charge, 2e-6 for the energy).
    """
    state = solve_state(hubbard_equations(1.0, nodes=137), fields)
    scale = np.sqrt(np.outer(np.diag(state.covariance), np.diag(state.covariance)))
    errors = [
        np.abs(string_sums(state, height=height).covariance - state.covariance) / scale for height in (12, 48)
    ]
    assert np.max(errors[1]) < 2e-3
    assert errors[1][0, 0] < 1e-5
    assert np.max(errors[0]) > 5.0 * np.max(errors[1])


def test_energy_of_a_half_filled_chain_is_carried_by_short_strings() -> None:
    state = solve_state(hubbard_equations(1.0, nodes=91), Fields(0.5, 0.0, 0.0))
    found = string_sums(state, height=32).covariance[0, 0]
    assert found == pytest.approx(state.covariance[0, 0], rel=2e-7)


def test_towers_start_with_the_known_strings_and_slow_down() -> None:
    state = solve_state(hubbard_equations(1.0, nodes=121), Fields(1.5, 0.2, 0.6))
    first = effective_velocities(state)
    for kind, (filling, speed) in enumerate(
        ((first.spin_filling, first.spin), (first.pair_filling, first.pair))
    ):
        tower = solve_tower(state, kind=kind, height=8)
        np.testing.assert_allclose(1.0 / (1.0 + np.exp(tower.log_eta[0])), filling, rtol=1e-10)
        near = slice(0, 55)  # farther out both derivatives fade into the error of the series
        speeds = (tower.energy / (1.5 * tower.momentum))[:, near]
        np.testing.assert_allclose(speeds[0], speed[near], rtol=0, atol=1e-8)
        fastest = np.max(np.abs(speeds), axis=1)
        assert np.all(np.diff(fastest) < 0.0)
        constants = np.log1p(np.exp(tower.log_eta[:, -1]))
        field = 0.2 if kind == 0 else 0.6
        expected = 2.0 * np.log(np.sinh(np.arange(2, 10) * field) / np.sinh(field))
        np.testing.assert_allclose(constants, expected, rtol=2e-3)


def test_polarised_chain_is_free() -> None:
    """In a field of 40 only spins up are left: free modes -2 cos k - U/2 at half the band and beyond."""
    values, errors = hubbard_drude(repulsion=4.0, beta=1.0, mu=-21.5, field=40.0)
    exact = free_drude(beta=1.0, potentials=((0.5, 0.5),), shift=-2.0)
    np.testing.assert_allclose(values, exact, rtol=0, atol=1e-9)
    assert np.all(errors < 1e-8)


def test_weak_repulsion_tends_to_free_fermions() -> None:
    """Energy-energy and the cross weights at U = 0.25 and 0.5, extrapolated linearly to U = 0.

    The weights of spin and of charge alone are left out: they fall steeply at small U (spin, measured: 0.091
    at U = 0.25, 0.049 at 0.5, against 0.232 at 0). Tolerance: the rest of order U^2, measured as 1.5e-4.
    """
    exact = free_drude(beta=0.5, potentials=((0.5, 0.7), (-0.5, 0.3)))
    less, more = (hubbard_drude(repulsion=u, beta=0.5, mu=0.5, field=0.4)[0] for u in (0.25, 0.5))
    found = 2.0 * less - more
    assert (4.0 * less[0, 0] - more[0, 0]) / 3.0 == pytest.approx(exact[0, 0], rel=0, abs=3e-4)
    for place in ((0, 1), (0, 2), (1, 2)):
        assert found[place] == pytest.approx(exact[place], rel=0, abs=3e-4)


def test_half_filling_without_field_conducts_only_heat() -> None:
    values, errors = hubbard_drude(repulsion=4.0, beta=0.5)
    assert values[0, 0] > 1.0
    assert np.max(np.abs(values - np.diag([values[0, 0], 0.0, 0.0]))) < 1e-12
    assert errors[0, 0] < 1e-5


def test_errors_cover_more_strings_and_nodes() -> None:
    given = {"repulsion": 2.0, "beta": 0.7, "mu": 0.8, "field": 0.5}
    values, errors = hubbard_drude(**given)
    state = solve_state(hubbard_equations(0.5, nodes=205), Fields(0.7, 0.175, 0.56))
    units = np.array([-1.0, 0.5, 1.0])
    finer = string_sums(state, height=96).drude * np.outer(units, units)
    assert np.all(np.abs(finer - values) <= errors)
    assert np.max(errors) < 1e-3
    assert np.all(np.linalg.eigvalsh(values) > 0.0)


def test_maps_and_units() -> None:
    """mu and h change their roles with the sign of U; energies scale with the hopping."""
    values, _ = hubbard_drude(repulsion=2.0, beta=0.7, mu=0.4, field=0.5)
    mapped, _ = hubbard_drude(repulsion=-2.0, beta=0.7, mu=0.25, field=0.8)
    swapped = values[np.ix_([0, 2, 1], [0, 2, 1])] / np.outer([1.0, 2.0, 0.5], [1.0, 2.0, 0.5])
    np.testing.assert_allclose(mapped, swapped, rtol=1e-10, atol=1e-13)
    scaled, _ = hubbard_drude(repulsion=4.0, beta=0.35, mu=0.8, field=1.0, hopping=2.0)
    np.testing.assert_allclose(scaled, values * np.outer([4.0, 2.0, 2.0], [4.0, 2.0, 2.0]), rtol=1e-10)


def test_free_chain_is_refused() -> None:
    with pytest.raises(InputError, match=r"repulsion = 0: must be at least 0\.1"):
        hubbard_drude(repulsion=0.0, beta=1.0)
