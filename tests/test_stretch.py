"""The fit of the stretch study: norms over one rescaled window, and exponents with an honest uncertainty."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from tnquench.budget.stretch import (
    LATTICE_UNCERTAINTY,
    PARTS,
    WHOLE,
    RescaledWindow,
    StretchedField,
    fit_exponent,
    study_observable,
    supported_order,
    time_windows,
)
from tnquench.conventions import STRETCH_FINDINGS, STRETCH_NORMS, bond_positions, site_positions

TRIALS = 200
FACTORS = np.array([1.0, 2.0, 4.0])
WINDOW = RescaledWindow(light_cone=(-1.0, 1.0), reach=5.0, edge=12.0)


def covered(truth, found):
    return abs(found.value - truth) <= found.uncertainty


@pytest.mark.parametrize("power", [0.5, 1.0, 1.6, 2.0])
@pytest.mark.parametrize("factors", [(1, 2, 4), (1, 1.5, 2, 3), (1, 2, 4, 8, 16)])
@pytest.mark.parametrize("relative", [0.01, 0.1])
def test_known_powers_lie_within_the_claimed_uncertainty(power, factors, relative):
    """Gaussian noise of the stated size on each value."""
    draw = np.random.default_rng(1)
    factors = np.array(factors, dtype=float)
    errors = relative * factors**-power
    fits = [
        fit_exponent(factors, factors**-power + errors * draw.normal(size=factors.size), errors, resolve_at=3)
        for _ in range(TRIALS)
    ]
    assert sum(covered(power, found) for found in fits) >= 0.95 * TRIALS
    allowed = 0.3 if relative == 0.01 else 2.0
    assert np.median([found.uncertainty for found in fits]) <= allowed, "must tell p = 1 from p = 2"


@pytest.mark.parametrize("relative", [1e-3, 3e-3, 0.01, 0.03, 0.1])
def test_powers_with_corrections_lie_within_the_claimed_uncertainty(relative):
    """deviation = factor^-p (1 + b/factor) with b of either sign: the power of infinite stretch is meant.

    Numerical errors as the budget claims them cover 95 of 100 true ones: those are half as large.
    """
    draw = np.random.default_rng(2)
    hits = 0
    for _ in range(TRIALS):
        power, slope = draw.choice([1.0, 2.0]), draw.uniform(-0.4, 0.6)
        truth = FACTORS**-power * (1.0 + slope / FACTORS)
        noise = 0.5 * relative * truth * draw.normal(size=3)
        hits += covered(power, fit_exponent(FACTORS, truth + noise, relative * truth, resolve_at=3))
    assert hits >= 0.95 * TRIALS


def test_growing_relative_errors_near_the_limit_of_resolution_stay_honest():
    """The error is the same at all factors, so that the last value is hardly resolved or left out."""
    draw = np.random.default_rng(3)
    errors = np.full(3, 0.015)
    fits = [
        fit_exponent(FACTORS, FACTORS**-2.0 + errors * draw.normal(size=3), errors, resolve_at=3)
        for _ in range(TRIALS)
    ]
    assert 0 < sum(not found.used[2] for found in fits) < TRIALS
    assert sum(covered(2.0, found) for found in fits) >= 0.95 * TRIALS


def test_weights_are_those_of_least_squares():
    """Against numpy's polynomial fit; errors so large that no scatter is added."""
    draw = np.random.default_rng(4)
    factors = np.array([1.0, 2.0, 3.0, 5.0, 8.0])
    relative = np.array([0.05, 0.1, 0.07, 0.2, 0.12])
    values = factors**-1.3 * (1.0 + 0.1 * relative * draw.normal(size=5))
    found = fit_exponent(factors, values, relative * values, resolve_at=3)
    line, covariance = np.polyfit(np.log(factors), np.log(values), 1, w=1 / relative, cov="unscaled")
    assert found.value == pytest.approx(-line[0], rel=1e-12)
    assert found.numerical == pytest.approx(2 * np.sqrt(covariance[0, 0]), rel=1e-12)

    def change(y):
        halves = [(np.log(factors)[part], y[part], 1 / relative[part]) for part in (slice(3), slice(2, 5))]
        lower, upper = (np.polyfit(x, y, 1, w=w)[0] for x, y, w in halves)
        return lower - upper

    assert found.change == pytest.approx(change(np.log(values)), rel=1e-9)
    change_error = np.linalg.norm([change(unit) for unit in np.diag(relative)])
    ratio = (3 * 5 * 8 / (1 * 2 * 3)) ** (1 / 3)  # of the geometric means of the halves
    trend = 1.5 * np.sqrt(ratio) / (ratio - 1) * np.hypot(found.change, change_error)
    expected = np.linalg.norm([found.numerical, trend, LATTICE_UNCERTAINTY])
    assert found.uncertainty == pytest.approx(expected, rel=1e-9)


def test_scatter_beyond_the_errors_widens_the_uncertainty():
    values = np.array([1.0, 0.5 * 1.1, 0.25 * 0.9, 0.125 * 1.1])
    factors = np.array([1.0, 2.0, 4.0, 8.0])
    tight = fit_exponent(factors, values, 1e-6 * values, resolve_at=3)
    assert tight.numerical < 1e-5
    slopes = -np.diff(np.log(values)) / np.log(2.0)
    assert tight.uncertainty > 0.3 * np.ptp(slopes)


@pytest.mark.parametrize(
    ("value", "uncertainty", "finding"),
    [
        (-0.5, 0.2, "not_falling"), (0.1, 0.2, "not_falling"), (0.6, 0.2, "slower"),
        (0.9, 0.2, "first_order"), (1.5, 0.2, "between"), (1.9, 0.2, "second_order"),
        (2.6, 0.2, "faster"), (1.5, 0.6, "undecided"), (0.5, 0.6, "undecided"),
    ],
)  # fmt: skip
def test_orders(value, uncertainty, finding):
    assert supported_order(value, uncertainty) == finding
    assert finding in STRETCH_FINDINGS


def test_what_cannot_be_decided_is_not():
    unresolved = fit_exponent(FACTORS, np.array([1.0, 0.2, 0.1]), np.full(3, 0.1), resolve_at=3)
    assert unresolved.finding == "unresolved"
    assert np.isnan(unresolved.value)
    assert unresolved.used.tolist() == [True, False, False]
    two = fit_exponent(FACTORS[:2], np.array([1.0, 0.5]), np.full(2, 1e-3), resolve_at=3)
    assert two.value == pytest.approx(1.0)
    assert two.finding == "undecided", "two factors cannot show whether one power describes them"
    constant = fit_exponent(FACTORS, np.ones(3), np.full(3, 1e-3), resolve_at=3)
    assert constant.finding == "not_falling"
    zero = fit_exponent(FACTORS, np.zeros(3), np.zeros(3), resolve_at=3)
    assert zero.finding == "unresolved"


def test_parts_of_the_time():
    parts = time_windows(8)
    assert list(parts) == [*PARTS, WHOLE]
    indices = np.concatenate([np.arange(8)[parts[name]] for name in PARTS])
    assert indices.tolist() == list(range(1, 8)), "all samples but the start, each once"
    assert np.arange(8)[parts[WHOLE]].tolist() == list(range(1, 8))
    assert list(time_windows(3)) == [WHOLE]


# --- norms of fields


def made_field(factor, power, *, sites=40, place=bond_positions, numerical=1e-6):
    """factor^-power times a function of x/factor and t/factor."""
    times = factor * np.linspace(0.0, 3.0, 7)
    positions = place(int(factor * sites))
    x, t = positions[None, :] / factor, times[:, None] / factor
    shape = np.exp(-((x / 3.0) ** 2)) * np.cos(x) * (1.0 + t)
    deviation = 0.1 * factor**-power * shape
    return StretchedField(factor, times, positions, deviation, np.full_like(deviation, numerical))


@pytest.mark.parametrize("place", [bond_positions, site_positions])
def test_smooth_fields_give_their_power_in_both_norms_and_all_windows(place):
    fields = [made_field(factor, 1.5, place=place) for factor in (1.0, 2.0, 4.0)]
    study = study_observable(fields, window=WINDOW, windows=time_windows(7), resolve_at=3)
    assert study.deviation.shape == (2, 3, 7)
    assert study.window_deviation.shape == (2, 3, 4)
    mean = [found.value for found in study.exponents[STRETCH_NORMS.index("rms")]]
    np.testing.assert_allclose(mean, 1.5, atol=2e-3)
    # the highest point lies half a spacing from the crest on one lattice, upon it on another
    highest = study.exponents[STRETCH_NORMS.index("maximum")]
    assert all(abs(found.value - 1.5) < 0.11 and covered(1.5, found) for found in highest)


def test_fields_that_reach_the_ends_of_the_window_stay_within_the_least_uncertainty():
    """Constant fields: what remains is how many points each lattice has in the window."""
    for place in (bond_positions, site_positions):
        for edge in (11.0, 11.5, 12.0):
            window = RescaledWindow(light_cone=(-1.0, 1.0), reach=5.0, edge=edge)
            fields = []
            for factor in (1.0, 2.0, 4.0):
                made = made_field(factor, 1.0, place=place)
                fields.append(replace(made, deviation=np.full_like(made.deviation, 0.1 / factor)))
            study = study_observable(fields, window=window, windows=time_windows(7), resolve_at=3)
            for found in study.exponents[STRETCH_NORMS.index("rms")]:
                assert covered(1.0, found)


def test_norms_are_those_of_the_rescaled_window():
    field = made_field(2.0, 1.0)
    fields = [made_field(1.0, 1.0), field]
    study = study_observable(fields, window=WINDOW, windows={WHOLE: slice(1, 7)}, resolve_at=3)
    x, t = field.positions / 2.0, field.times / 2.0
    expected = []
    for row, time in zip(field.deviation[1:], t[1:], strict=True):
        inside = np.abs(x) <= time + 5.0
        expected.append(np.sum(row[inside] ** 2) * 0.5 / (2.0 * (time + 5.0)))
    assert study.window_deviation[0, 1, 0] == pytest.approx(np.sqrt(np.mean(expected)), rel=1e-12)
    assert study.window_deviation[1, 1, 0] == pytest.approx(np.abs(field.deviation[1:]).max(), rel=1e-12)


def test_the_edges_of_the_first_run_bound_all_windows():
    window = RescaledWindow(light_cone=(-9.0, 9.0), reach=5.0, edge=12.0)
    for factor in (1.0, 2.0, 4.0):
        field = made_field(factor, 1.0)
        seen = np.abs(field.positions[window.points(field)[-1]]) / factor
        assert 12.0 - 1.0 / factor <= seen.max() <= 12.0


def test_errors_of_the_norms_cover_every_error_within_the_claim():
    """Errors drawn anywhere within +-numerical move both norms by no more than is claimed."""
    draw = np.random.default_rng(5)
    windows = {WHOLE: slice(1, 7)}
    for _ in range(50):
        true = made_field(1.0, 1.0)
        claim = 10 ** draw.uniform(-4, -1, size=true.deviation.shape)
        wrong = true.deviation + claim * draw.choice([-1.0, 1.0], size=claim.shape)
        seen = StretchedField(1.0, true.times, true.positions, wrong, claim)
        found, right = (
            study_observable([field, made_field(2.0, 1.0)], window=WINDOW, windows=windows, resolve_at=3)
            for field in (seen, true)
        )
        moved = np.abs(found.window_deviation[:, 0] - right.window_deviation[:, 0])
        assert np.all(moved <= found.window_numerical[:, 0] * (1 + 1e-12))
