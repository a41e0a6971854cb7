"""Interpolation between samples: exact where it must be, and its claimed error covers the true one."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.special import jv

from tnquench.conventions import Reals
from tnquench.judge.interpolation import interpolate, stencil
from tnquench.judge.rays import along_rays

GENERATOR = np.random.default_rng(11)


def scattered(times: Reals, positions: Reals, count: int = 2000) -> tuple[Reals, Reals]:
    return (
        GENERATOR.uniform(times[0], times[-1], count),
        GENERATOR.uniform(positions[0], positions[-1], count),
    )


def gaussian(time: Reals, x: Reals) -> Reals:
    return np.asarray(np.exp(-(((x - 0.8 * time + 4) / (1.5 + 0.2 * time)) ** 2)))


@pytest.mark.parametrize("every", [0.25, 0.5, 1.0])
@pytest.mark.parametrize("width", [1.5, 2.0, 3.0])
def test_claimed_error_covers_the_true_one(every: float, width: float) -> None:
    """A packet that moves and widens, over hardly more than one lattice spacing at first."""

    def packet(time: Reals, x: Reals) -> Reals:
        return np.asarray(np.exp(-(((x - 0.8 * time + 4) / (width + 0.2 * time)) ** 2)))

    times, positions = np.arange(0.0, 10.1, every), np.arange(-12.0, 13.0)
    at = scattered(times, positions)
    assert_covered(packet(*np.meshgrid(times, positions, indexing="ij")), packet(*at), times, positions, at)


@pytest.mark.parametrize("every", [0.25, 0.5, 1.0])
def test_claimed_error_covers_the_true_one_behind_a_front(every: float) -> None:
    """Squared Bessel functions, the domain wall's building blocks: they alternate from site to site, so that
    only the time is interpolated."""
    times, positions = np.arange(0.0, 10.1, every), np.arange(-12.0, 13.0)
    at = GENERATOR.uniform(0, times[-1], 2000), GENERATOR.integers(-12, 13, 2000).astype(np.float64)
    grid = jv(positions[None, :], times[:, None]) ** 2
    assert_covered(grid, jv(at[1], at[0]) ** 2, times, positions, at)


def assert_covered(
    grid: Reals, exact: Reals, times: Reals, positions: Reals, at: tuple[Reals, Reals]
) -> None:
    found = interpolate(grid, None, times=times, positions=positions, at_times=at[0], at_positions=at[1])
    true = np.abs(found.values - exact)
    assert np.mean(true <= found.added + 1e-12) >= 0.98
    assert np.max(true / (found.added + 1e-5)) < 2.0
    claimed, missed = np.sqrt(np.mean(found.added**2)), np.sqrt(np.mean(true**2))
    assert claimed < max(40.0 * missed, 1e-5), "honest, but of no use"


def test_alternating_field_is_not_mistaken_for_a_smooth_one() -> None:
    """Half-way between the places of a staggered field all orders agree on zero, by symmetry."""
    times, positions = np.arange(0.0, 5.1, 0.5), np.arange(-12.0, 13.0)
    grid = np.ones_like(times)[:, None] * np.cos(np.pi * positions)[None, :]
    middle = np.full(times.size, 0.5)
    found = interpolate(grid, None, times=times, positions=positions, at_times=times, at_positions=middle)
    assert np.all(found.added > 0.1)


def test_polynomials_up_to_degree_seven_are_exact() -> None:
    nodes = np.cumsum(GENERATOR.uniform(0.5, 1.5, 12))
    at = GENERATOR.uniform(nodes[0], nodes[-1], 200)
    found = stencil(nodes, at, 8)
    for degree in range(8):
        scaled = (nodes / 6 - 1) ** degree
        values = np.einsum("pa,pa->p", found.weights, scaled[found.indices])
        np.testing.assert_allclose(values, (at / 6 - 1) ** degree, atol=1e-10)


def test_samples_are_returned_as_they_are() -> None:
    times, positions = np.arange(5.0), np.arange(7.0)
    grid, error = GENERATOR.standard_normal((5, 7)), GENERATOR.uniform(1, 2, (5, 7))
    clock, place = (part.ravel() for part in np.meshgrid(times, positions, indexing="ij"))
    found = interpolate(
        grid, error, times=times, positions=positions, at_times=clock * (1 + 1e-13), at_positions=place
    )
    np.testing.assert_array_equal(found.values, grid.ravel())
    np.testing.assert_allclose(found.error, error.ravel(), rtol=1e-9)
    assert found.exact.all()
    assert not found.added.any()


@pytest.mark.parametrize(("samples", "places"), [(1, 1), (1, 5), (2, 2), (3, 9)])
def test_few_samples_are_enough_to_say_something(samples: int, places: int) -> None:
    times, positions = np.arange(float(samples)), np.arange(float(places))
    grid = times[:, None] + positions[None, :]
    at = scattered(times, positions, 50)
    found = interpolate(grid, None, times=times, positions=positions, at_times=at[0], at_positions=at[1])
    np.testing.assert_allclose(found.values, at[0] + at[1], atol=1e-12)
    assert np.all(np.isfinite(found.added))


def test_self_similar_field_is_followed_along_rays_and_others_are_not() -> None:
    times, positions = np.arange(0.0, 8.1, 0.5), np.arange(-15.0, 16.0)
    clock, place = np.meshgrid(times, positions, indexing="ij")
    at = scattered(times[1:], positions)
    with np.errstate(divide="ignore", invalid="ignore"):
        ray = np.nan_to_num(place / clock, nan=0.0, posinf=99, neginf=-99)
    values, error = along_rays(np.tanh(2 * ray), times=times, positions=positions,
                               at_times=at[0], at_positions=at[1])  # fmt: skip
    true = np.abs(values - np.tanh(2 * at[1] / at[0]))
    assert np.mean(true <= error + 1e-6) >= 0.95
    assert error.max() < 0.02
    _, error = along_rays(
        np.tanh(place), times=times, positions=positions, at_times=at[0], at_positions=at[1]
    )
    assert np.median(error[np.abs(at[1]) < 3]) > 0.1
