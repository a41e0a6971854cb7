"""Each companion and prediction feeds its own source of the budget, and the sources add up."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np
import pytest

from tests.budget_cases import (
    CARRIED_ERROR,
    CUTS,
    END_NOISE,
    LOOSE_NOISE,
    LOOSE_WEIGHT,
    NAMES,
    NORMS,
    ROUNDING,
    SAMPLES,
    SETTINGS,
    SHORTER,
    STEP_NOISE,
    Perturb,
    companions,
    expected_numerical,
    judge,
    noise,
    record,
    row,
    unchanged,
)
from tnquench.budget import sources
from tnquench.budget.assess import PredictedLevel
from tnquench.budget.companions import COARSE, LOOSE, SHORT, partner
from tnquench.conventions import ERROR_SOURCES, Reals


def claimed_truncation(name: str) -> Reals:
    main, loose = (
        sources.TruncatedRun(run.fields[name], run.discarded_weight)
        for run in (record(), record(LOOSE_NOISE, weight=LOOSE_WEIGHT))
    )
    return sources.truncation(main=main, loose=loose)


def claimed_step(name: str, *, fine: Perturb = unchanged, order: int = 4, ratio: float = 3.0) -> Reals:
    values = record(fine).fields[name]
    return sources.time_step(
        fine=values,
        coarse=record(STEP_NOISE).fields[name],
        step_ratio=ratio,
        order=order,
        noise=values - record().fields[name],
    )


def claimed_length(name: str) -> Reals:
    long, short = record().fields[name], record(END_NOISE, sites=SHORTER).fields[name]
    return sources.length(long=long, short=short, noise=np.zeros_like(long))


ONE_SOURCE = [
    ("truncation", {"loose": LOOSE_NOISE}, claimed_truncation),
    ("time_step", {"coarse": STEP_NOISE}, claimed_step),
    ("length", {"short": END_NOISE}, claimed_length),
    ("none", {}, lambda name: np.zeros_like(record().fields[name])),
]


@pytest.mark.parametrize(("source", "differing", "claim"), ONE_SOURCE, ids=[case[0] for case in ONE_SOURCE])
def test_each_companion_feeds_its_own_source(
    source: str, differing: dict[str, Perturb], claim: Callable[[str], Reals]
) -> None:
    for name, budget in judge(companions(**differing)).items():
        for other in set(ERROR_SOURCES) - {source, "preparation", "arithmetic"}:
            assert np.all(row(budget, other) == 0.0), (name, other)
        if source != "none":
            assert np.all(claim(name)[1:].max(axis=1) > 1e-6), name
            np.testing.assert_allclose(row(budget, source), claim(name), rtol=1e-12, err_msg=name)
        np.testing.assert_allclose(row(budget, "preparation"), CARRIED_ERROR[name], rtol=1e-14)
        rounding = ROUNDING * NORMS[name] * (1.0 + CUTS)[:, None] * np.ones_like(budget.numerical)
        np.testing.assert_allclose(row(budget, "arithmetic"), rounding, rtol=1e-12)
        known = claim(name) + CARRIED_ERROR[name] + rounding
        np.testing.assert_allclose(budget.numerical, known, rtol=1e-12, err_msg=name)


@pytest.mark.parametrize(("order", "ratio"), [(2, 2.0), (2, 3.0), (4, 2.0)])
def test_step_source_knows_order_and_ratio_of_the_steps(order: int, ratio: float) -> None:
    settings = replace(SETTINGS, trotter_order=order, step_ratio=ratio)
    for name, budget in judge(companions(coarse=STEP_NOISE), settings=settings).items():
        np.testing.assert_allclose(row(budget, "time_step"), claimed_step(name, order=order, ratio=ratio))


def test_step_and_length_are_measured_from_the_companion_of_equal_settings() -> None:
    """Nothing else must leak: the step from the run of equal weight, the ends from that of equal step too."""
    runs = companions(loose=LOOSE_NOISE, coarse=STEP_NOISE, short=END_NOISE)
    for name, budget in judge(runs).items():
        truncation = claimed_truncation(name)
        loose, coarse = record(LOOSE_NOISE).fields[name], record(STEP_NOISE).fields[name]
        blur = sources.WIDENING * sources.local_scale(loose - record().fields[name]) + truncation
        ends = sources.length(long=coarse, short=record(END_NOISE, sites=SHORTER).fields[name], noise=blur)
        np.testing.assert_allclose(row(budget, "truncation"), truncation, rtol=1e-12)
        np.testing.assert_allclose(row(budget, "time_step"), claimed_step(name, fine=LOOSE_NOISE), rtol=1e-12)
        assert ends.max() > 1e-4
        np.testing.assert_allclose(row(budget, "length"), ends, rtol=1e-9, atol=1e-15)
        np.testing.assert_allclose(budget.numerical, expected_numerical(budget), rtol=1e-12)


def test_companions_of_an_older_dataset_find_their_partners() -> None:
    """Ten and a hundred times the weight, step and length at ten times, the shorter chain with the main step:
    each is compared with the run it differs from by one thing, the tightest one tells of the cuts."""
    runs = {
        "weight_100": record(noise(2, 1e-4), weight=1e-6),
        "weight_10": record(LOOSE_NOISE, weight=1e-7),
        COARSE: record(STEP_NOISE, weight=1e-7, time_step=0.3),
        SHORT: record(END_NOISE, sites=SHORTER, weight=1e-7),
    }
    assert (partner(runs, COARSE), partner(runs, SHORT)) == ("weight_10", "weight_10")
    without = {name: run for name, run in runs.items() if name != "weight_10"}
    assert (partner(without, COARSE), partner(without, SHORT)) == (None, None)
    for name, budget in judge(runs).items():
        values = record().fields[name]
        main, loose = (
            sources.TruncatedRun(run.fields[name], run.discarded_weight)
            for run in (record(), runs["weight_10"])
        )
        truncation = sources.truncation(main=main, loose=loose)
        blur = sources.WIDENING * sources.local_scale(loose.values - values) + truncation
        ends = sources.length(long=loose.values, short=runs[SHORT].fields[name], noise=blur)
        np.testing.assert_allclose(row(budget, "truncation"), truncation, rtol=1e-12)
        np.testing.assert_allclose(row(budget, "time_step"), claimed_step(name, fine=LOOSE_NOISE), rtol=1e-12)
        np.testing.assert_allclose(row(budget, "length"), ends, rtol=1e-9, atol=1e-15)


def test_a_shorter_chain_of_another_step_has_no_partner() -> None:
    runs = companions()
    assert (partner(runs, COARSE), partner(runs, SHORT)) == (LOOSE, COARSE)
    assert partner({name: runs[name] for name in (LOOSE, SHORT)}, SHORT) is None
    assert partner(runs | {SHORT: record(sites=SHORTER, weight=LOOSE_WEIGHT, time_step=0.2)}, SHORT) is None
    assert partner(runs | {SHORT: record(sites=SHORTER, weight=1e-7, time_step=0.3)}, SHORT) is None


def test_without_companions_their_sources_are_unknown() -> None:
    for budget in judge({}).values():
        for source in ("truncation", "time_step", "length"):
            assert np.isnan(row(budget, source)).all(), source
        assert np.isnan(budget.numerical).all()
        assert np.isfinite(row(budget, "preparation")).all()
        assert np.isfinite(budget.bound).all()


def test_chain_too_short_to_shorten_knows_nothing_of_its_ends() -> None:
    runs = companions()
    del runs[SHORT]
    for name, budget in judge(runs).items():
        np.testing.assert_allclose(row(budget, "length"), 2.0 * NORMS[name], rtol=1e-14)


def level(
    *, shift: float = 0.0, grid: float = 0.0, strings: float = 0.0, cone: tuple[float, float] = (-1.0, 2.0)
) -> PredictedLevel:
    """A prediction off by `shift` with stated errors, each with a pattern of its own."""
    fields = record().fields
    ramp = {
        name: 1.0 + np.linspace(0.0, 1.0, values.size).reshape(values.shape)
        for name, values in fields.items()
    }
    return PredictedLevel(
        fields={name: values + shift * ramp[name] for name, values in fields.items()},
        grid_error={name: grid * ramp[name] for name in fields},
        strings_error={name: strings * ramp[name][::-1] for name in fields},
        light_cone=cone,
    )


def test_errors_of_the_predictions_enter_with_the_larger_of_two_levels() -> None:
    first, second = level(shift=0.1, grid=1e-3, strings=4e-3), level(shift=-0.2, grid=3e-3, strings=1e-3)
    for name, budget in judge(companions(), {"first": first, "second": second}).items():
        np.testing.assert_allclose(row(budget, "prediction_grid"), second.grid_error[name], rtol=1e-14)
        np.testing.assert_allclose(row(budget, "strings"), first.strings_error[name], rtol=1e-14)
        start = np.abs(record().fields[name][0] - second.fields[name][0])
        np.testing.assert_allclose(row(budget, "initial_gradient"), np.tile(start, (SAMPLES, 1)), rtol=1e-12)
        assert start.min() > 0.1
        np.testing.assert_allclose(budget.numerical, expected_numerical(budget), rtol=1e-12)
        assert budget.numerical.max() < 0.02, "the mismatch of the start is physics"
        for label, predicted in (("first", first), ("second", second)):
            off = record().fields[name] - predicted.fields[name]
            np.testing.assert_allclose(budget.levels[label].deviation, off, rtol=1e-12)


def test_two_levels_are_judged_in_the_union_of_their_light_cones() -> None:
    def norms(*cones: tuple[float, float]) -> dict[str, Reals]:
        levels = {str(index): level(shift=0.1, cone=cone) for index, cone in enumerate(cones)}
        return {
            name: budget.levels["0"].deviation_norm for name, budget in judge(companions(), levels).items()
        }

    union, alone, left, right = (
        norms(*cones)
        for cones in (
            [(-1.0, 0.2), (-0.2, 2.0)],
            [(-1.0, 2.0)],
            [(-1.0, 0.2)],
            [(-0.2, 2.0)],
        )
    )
    for name in NAMES:
        np.testing.assert_allclose(union[name], alone[name], rtol=1e-12)
        assert abs(left[name] - alone[name]).max() > 1e-4
        assert abs(right[name] - alone[name]).max() > 1e-4


HUBBARD = (*NAMES, "magnetisation", "spin_current", "double_occupancy")


def test_a_run_is_judged_by_the_observables_it_holds() -> None:
    """Seven of hubbard, three of ising; what a prediction lacks has errors and no verdict."""
    for names in (HUBBARD, ("energy_density", "energy_current", "transverse_magnetisation")):
        main = record(names=names)
        runs = {
            name: record(LOOSE_NOISE, names=names, weight=weight)
            for name, weight in ((LOOSE, LOOSE_WEIGHT), (COARSE, LOOSE_WEIGHT))
        }
        some = level(shift=0.1, grid=1e-3)
        partial = replace(some, fields={name: some.fields[name] for name in names if name in NAMES})
        for levels in ({}, {"euler": partial}):
            budgets = judge(runs, levels, main=main)
            assert tuple(budgets) == names
            for name, budget in budgets.items():
                predicted = bool(levels) and name in NAMES
                assert tuple(budget.levels) == (("euler",) if predicted else ())
                assert (row(budget, "prediction_grid").max() > 0.0) == predicted
                assert (row(budget, "initial_gradient").max() > 0.0) == predicted
                assert row(budget, "truncation")[1:].min() > 0.0
                np.testing.assert_allclose(budget.numerical, expected_numerical(budget), rtol=1e-12)


def test_without_its_prediction_an_observable_keeps_the_light_cone_of_the_others() -> None:
    """Its norms are taken over the points that the light cone of the run has reached."""
    names = ("energy_density", "transverse_magnetisation")
    grid = level(cone=(-1.0, 2.0))
    energy = replace(grid, fields={"energy_density": grid.fields["energy_density"]})
    much = noise(1, 3e-3)
    runs = {name: record(much, names=names, weight=LOOSE_WEIGHT) for name in (LOOSE, COARSE)}
    runs[SHORT] = record(END_NOISE, names=names, sites=SHORTER, weight=LOOSE_WEIGHT)
    with_cone = judge(runs, {"euler": energy}, main=record(names=names))["transverse_magnetisation"]
    without = judge(runs, {}, main=record(names=names))["transverse_magnetisation"]
    np.testing.assert_array_equal(with_cone.numerical, without.numerical)
    differ = np.abs(with_cone.numerical_norm / without.numerical_norm - 1.0)
    assert differ[:2].min() > 1e-3
