"""The verdict stands at k times the numerical error, inside the window, after the start."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from tests.budget_cases import (
    NAMES,
    SAMPLES,
    positions_of,
    record,
)
from tnquench.budget.assess import PredictedLevel, RunSettings, assess
from tnquench.budget.companions import COARSE, LOOSE, SHORT
from tnquench.budget.verdict import END_MARGIN, ObservableBudget
from tnquench.conventions import ERROR_SOURCES, OBSERVABLE_PLACES, bond_positions

# The verdict: with identical companions and no rounding the numerical error is the start's alone.

LONG, ERROR = 30, 1e-3


def verdict_budgets(
    deviations: dict[tuple[int, float], float],
    *,
    resolve_at: float,
    grid: dict[tuple[int, float], float] | None = None,
    reach: float = 1.5,
) -> dict[str, ObservableBudget]:
    """Budgets of a chain of 30 sites whose numerical error is ERROR; deviations at (sample, position)."""
    main = replace(
        record(sites=LONG),
        norms=dict.fromkeys(NAMES, 0.0),
        start_error=dict.fromkeys(NAMES, ERROR),
    )
    runs = {name: main for name in (LOOSE, COARSE)}
    runs[SHORT] = record(sites=LONG - 4)
    predicted, errors = {}, {}
    for name in NAMES:
        place = OBSERVABLE_PLACES[name]
        predicted[name] = main.fields[name].copy()
        errors[name] = np.zeros_like(predicted[name])
        for target, entries in ((predicted[name], deviations), (errors[name], grid or {})):
            for (sample, where), value in entries.items():
                target[sample, np.argmin(np.abs(positions_of(LONG)[place] - where))] += value
    zero = {name: np.zeros_like(values) for name, values in predicted.items()}
    euler = PredictedLevel(predicted, errors, zero, (-1.0, 2.0))
    settings = RunSettings(step_ratio=2.0, trotter_order=2, resolve_at=resolve_at, reach=reach)
    return assess(main, runs, {"euler": euler}, positions=positions_of(LONG), settings=settings)


def cone_points(name: str, moment: int, *, reach: float = 1.5) -> list[float]:
    """Positions inside the cone of velocities -1 and 2 and away from the ends, listed one by one."""
    places = positions_of(LONG)[OBSERVABLE_PLACES[name]].tolist()
    edge = max(places) - END_MARGIN
    return [x for x in places if -moment - reach <= x <= 2 * moment + reach and abs(x) <= edge]


@pytest.mark.parametrize("sign", [1.0, -1.0])
@pytest.mark.parametrize("factor", [3.0, 1.5])
def test_verdict_stands_at_k_times_the_numerical_error(factor: float, sign: float) -> None:
    """Next to each other: 10 % below the threshold, 10 % above it."""
    below, above = (sign * share * factor * ERROR for share in (0.9, 1.1))
    entries = {(3, -0.2): above, (4, -0.2): below, (4, 2.2): above, (5, 3.2): below, (1, 0.2): below}
    for name, budget in verdict_budgets(entries, resolve_at=factor).items():
        np.testing.assert_allclose(budget.numerical, ERROR, rtol=1e-12)
        verdict = budget.levels["euler"]
        resolved = {(int(time), float(x)) for time, x in zip(*np.nonzero(verdict.resolved), strict=True)}
        places = positions_of(LONG)[OBSERVABLE_PLACES[name]]
        wanted = {(t, float(np.argmin(np.abs(places - x)))) for t, x in ((3, -0.2), (4, 2.2))}
        assert resolved == wanted, name
        assert verdict.first_resolved_time == 3.0
        shares = np.zeros(SAMPLES)
        shares[[3, 4]] = 1.0 / len(cone_points(name, 3)), 1.0 / len(cone_points(name, 4))
        np.testing.assert_allclose(verdict.resolved_share, shares, rtol=1e-12, err_msg=name)
        rms = above / np.sqrt(len(cone_points(name, 3)))
        assert verdict.deviation_norm[3] == pytest.approx(abs(rms), rel=1e-12)


@pytest.mark.parametrize(("where", "first"), [(7.2, 3.0), (-4.2, 3.0), (4.2, 2.0), (-7.2, float("nan"))])
def test_first_resolved_time_follows_the_skewed_light_cone(where: float, first: float) -> None:
    """Resolved everywhere and always at one place: it counts once the edge of velocity -1 or 2 is there."""
    entries = {(sample, where): 1.0 for sample in range(SAMPLES)}
    for name, budget in verdict_budgets(entries, resolve_at=3.0).items():
        verdict = budget.levels["euler"]
        assert verdict.first_resolved_time == pytest.approx(first, nan_ok=True), name
        shares = [float(where_in(name, where) in cone_points(name, t)) for t in range(SAMPLES)]
        counts = [len(cone_points(name, t)) for t in range(SAMPLES)]
        np.testing.assert_allclose(verdict.resolved_share, np.divide(shares, counts), rtol=1e-12)
        assert verdict.resolved.sum() == SAMPLES


def where_in(name: str, where: float) -> float:
    return float(min(positions_of(LONG)[OBSERVABLE_PLACES[name]], key=lambda x: abs(x - where)))


def test_reach_of_the_start_widens_the_window() -> None:
    entries = {(sample, -7.2): 1.0 for sample in range(SAMPLES)}
    for budget in verdict_budgets(entries, resolve_at=3.0, reach=4.5).values():
        assert budget.levels["euler"].first_resolved_time == 3.0


def test_nothing_is_resolved_next_to_an_open_end_nor_found_first_at_the_start() -> None:
    everywhere = {(sample, float(x)): 1.0 for sample in range(SAMPLES) for x in bond_positions(LONG)}
    for name, budget in verdict_budgets(everywhere, resolve_at=3.0, reach=np.inf).items():
        verdict = budget.levels["euler"]
        inner = cone_points(name, 0, reach=np.inf)
        assert verdict.first_resolved_time == 1.0
        assert verdict.resolved.sum(axis=1).tolist() == [len(inner)] * SAMPLES


def test_dominant_source_is_the_largest_inside_the_window() -> None:
    """Inside at sample 3 the grid dominates; at sample 2 it is as large but the cone is not there yet."""
    grid = {(3, 7.2): 10.0 * ERROR, (2, 7.2): 10.0 * ERROR, (4, -0.2): 2.0 * ERROR}
    for name, budget in verdict_budgets({(0, 0.2): 5.0}, resolve_at=3.0, grid=grid).items():
        named = [ERROR_SOURCES[index] for index in budget.dominant_source]
        wanted = ["preparation"] * SAMPLES
        wanted[3] = "prediction_grid"
        assert named == wanted, name
        count = len(cone_points(name, 3))
        norm = ERROR * np.sqrt((count - 1 + 11.0**2) / count)
        assert budget.numerical_norm[3] == pytest.approx(norm, rel=1e-12)
        assert budget.numerical_norm[2] == pytest.approx(ERROR, rel=1e-12)
