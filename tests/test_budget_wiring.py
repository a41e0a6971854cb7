"""How the budget is put together: each companion feeds its own source, each source its own row, and the
verdict follows from the sum; the rigorous bound, the totals and the forecast are checked against numbers
found apart."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from types import SimpleNamespace
from typing import Any

import numpy as np
import pytest

from tests.config_cases import toml
from tests.oracles.free_fermions import free_evolution
from tnquench.assemble import build_quench
from tnquench.budget import pilot, sources
from tnquench.budget.assess import PredictedLevel, RunSettings, assess
from tnquench.budget.companions import COARSE, LOOSE, LOOSER, SHORT
from tnquench.budget.verdict import END_MARGIN, ObservableBudget
from tnquench.config.load import read_config
from tnquench.config.schema import Config
from tnquench.conventions import ERROR_SOURCES, OBSERVABLE_PLACES, Reals, bond_positions, site_positions
from tnquench.evolution import layers
from tnquench.evolution.cutting import Cut, CutRule, cut
from tnquench.hydro.prediction import Prediction
from tnquench.model.chain import start_terms, xxz_chain
from tnquench.observables.quench import Progress, QuantumRecord, Quench, simulate
from tnquench.outcome import Pieces, QuantumSide, run_pieces

SITES, SHORTER, SAMPLES = 16, 12, 6
NORMS = {"energy_density": 0.5, "energy_current": 0.25, "charge_density": 0.4, "charge_current": 0.3}
START_ERROR = {"energy_density": 1e-7, "energy_current": 2e-7, "charge_density": 3e-7, "charge_current": 4e-7}
CUTS = 100.0 * np.arange(SAMPLES)
SETTINGS = RunSettings(step_ratio=3.0, trotter_order=4, resolve_at=3.0)
ROUNDING = 2.0**-52
Perturb = Callable[[str, Reals], Reals]


def positions_of(sites: int) -> dict[str, Reals]:
    return {"site": site_positions(sites), "bond": bond_positions(sites)}


def noise(seed: int, size: float) -> Perturb:
    """An irregular pattern, another one for every observable."""

    def add(name: str, values: Reals) -> Reals:
        generator = np.random.default_rng([seed, list(OBSERVABLE_PLACES).index(name)])
        return np.asarray(values + size * generator.standard_normal(values.shape))

    return add


def unchanged(_name: str, values: Reals) -> Reals:
    return values


def record(
    perturb: Perturb = unchanged, *, sites: int = SITES, weight: float = 1e-8, samples: int = SAMPLES
) -> QuantumRecord:
    """A run whose fields are functions of time and position alone, so that chains of all lengths agree."""
    times = np.arange(samples, dtype=np.float64)
    fields = {}
    for row, (name, place) in enumerate(OBSERVABLE_PLACES.items()):
        values = np.cos(0.3 * times[:, None] + 0.2 * (row + 1) * positions_of(sites)[place][None, :])
        fields[name] = perturb(name, values)
    lost = weight * times[:, None] * (1.0 + np.arange(sites - 1)[None, :] / sites)
    return QuantumRecord(
        times=times,
        fields=fields,
        bond_dimension=np.full((samples, sites - 1), 32.0),
        operator_entanglement=np.zeros((samples, sites - 1)),
        discarded_weight=lost,
        angle=0.01 * times,
        norms=NORMS,
        start_distance=1e-7,
        start_error=START_ERROR,
        start_steps=8,
        log_partition_function=0.0,
        total_energy=np.zeros(samples),
        total_charge=np.zeros(samples),
        events=(),
        seconds=1.0,
        cpu_seconds=1.0,
        cuts=100.0 * times,
        peak_state_bytes=1,
    )


def companions(
    *,
    loose: Perturb = unchanged,
    looser: Perturb | None = None,
    coarse: Perturb | None = None,
    short: Perturb | None = None,
) -> dict[str, QuantumRecord]:
    """Companions that agree with the one at ten times the weight unless told otherwise."""

    def central(name: str, values: Reals) -> Reals:
        full = record(loose).fields[name]
        removed = (full.shape[1] - values.shape[1]) // 2
        return full[:, removed : full.shape[1] - removed]

    return {
        LOOSE: record(loose, weight=1e-7),
        LOOSER: record(looser or loose, weight=1e-6),
        COARSE: record(coarse or loose, weight=1e-7),
        SHORT: record(short or central, sites=SHORTER, weight=1e-7),
    }


def judge(
    runs: dict[str, QuantumRecord],
    levels: dict[str, PredictedLevel] | None = None,
    *,
    main: QuantumRecord | None = None,
    settings: RunSettings = SETTINGS,
) -> dict[str, ObservableBudget]:
    return assess(main or record(), runs, levels or {}, positions=positions_of(SITES), settings=settings)


def row(budget: ObservableBudget, source: str) -> Reals:
    return np.asarray(budget.error[ERROR_SOURCES.index(source)])


def expected_numerical(budget: ObservableBudget) -> Reals:
    """Everything but the physics of the start."""
    return np.asarray(sum(row(budget, source) for source in ERROR_SOURCES if source != "initial_gradient"))


LOOSE_NOISE, LOOSER_NOISE = noise(1, 3e-5), noise(2, 1e-4)
STEP_NOISE, END_NOISE = noise(3, 2e-4), noise(4, 5e-4)


def claimed_truncation(name: str) -> Reals:
    main, *looser_runs = (
        sources.TruncatedRun(run.fields[name], run.discarded_weight)
        for run in (record(), record(LOOSE_NOISE, weight=1e-7), record(LOOSER_NOISE, weight=1e-6))
    )
    return sources.truncation(main=main, loose=looser_runs[0], looser=looser_runs[1])


def claimed_step(name: str, *, fine: Perturb = unchanged, order: int = 4, ratio: float = 3.0) -> Reals:
    return sources.time_step(
        fine=record(fine).fields[name], coarse=record(STEP_NOISE).fields[name], step_ratio=ratio, order=order
    )


def claimed_length(name: str) -> Reals:
    long, short = record().fields[name], record(END_NOISE, sites=SHORTER).fields[name]
    return sources.length(long=long, short=short, noise=np.zeros_like(long))


ONE_SOURCE = [
    ("truncation", {"loose": LOOSE_NOISE, "looser": LOOSER_NOISE}, claimed_truncation),
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
        np.testing.assert_allclose(row(budget, "preparation"), START_ERROR[name], rtol=1e-14)
        rounding = ROUNDING * NORMS[name] * (1.0 + CUTS)[:, None] * np.ones_like(budget.numerical)
        np.testing.assert_allclose(row(budget, "arithmetic"), rounding, rtol=1e-12)
        known = claim(name) + START_ERROR[name] + rounding
        np.testing.assert_allclose(budget.numerical, known, rtol=1e-12, err_msg=name)


@pytest.mark.parametrize(("order", "ratio"), [(2, 2.0), (2, 3.0), (4, 2.0)])
def test_step_source_knows_order_and_ratio_of_the_steps(order: int, ratio: float) -> None:
    settings = replace(SETTINGS, trotter_order=order, step_ratio=ratio)
    for name, budget in judge(companions(coarse=STEP_NOISE), settings=settings).items():
        np.testing.assert_allclose(row(budget, "time_step"), claimed_step(name, order=order, ratio=ratio))


def test_step_and_length_are_measured_from_the_companion_of_equal_weight() -> None:
    """Truncation must not leak: both compare with the run at ten times the weight, not with the main run."""
    runs = companions(loose=LOOSE_NOISE, looser=LOOSER_NOISE, coarse=STEP_NOISE, short=END_NOISE)
    for name, budget in judge(runs).items():
        truncation = claimed_truncation(name)
        long = record(LOOSE_NOISE).fields[name]
        blur = sources.WIDENING * sources.local_scale(long - record().fields[name]) + truncation
        ends = sources.length(long=long, short=record(END_NOISE, sites=SHORTER).fields[name], noise=blur)
        np.testing.assert_allclose(row(budget, "truncation"), truncation, rtol=1e-12)
        np.testing.assert_allclose(row(budget, "time_step"), claimed_step(name, fine=LOOSE_NOISE), rtol=1e-12)
        assert ends.max() > 1e-4
        np.testing.assert_allclose(row(budget, "length"), ends, rtol=1e-9, atol=1e-15)
        np.testing.assert_allclose(budget.numerical, expected_numerical(budget), rtol=1e-12)


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
    for name in OBSERVABLE_PLACES:
        np.testing.assert_allclose(union[name], alone[name], rtol=1e-12)
        assert abs(left[name] - alone[name]).max() > 1e-4
        assert abs(right[name] - alone[name]).max() > 1e-4


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
        norms=dict.fromkeys(OBSERVABLE_PLACES, 0.0),
        start_error=dict.fromkeys(OBSERVABLE_PLACES, ERROR),
    )
    runs = {name: main for name in (LOOSE, LOOSER, COARSE)}
    runs[SHORT] = record(sites=LONG - 4)
    predicted, errors = {}, {}
    for name, place in OBSERVABLE_PLACES.items():
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


# The rigorous bound on a run that truncates visibly.

SPIN = {
    "x": np.array([[0.0, 0.5], [0.5, 0.0]]),
    "y": np.array([[0.0, -0.5j], [0.5j, 0.0]]),
    "z": np.diag([0.5, -0.5]),
}


def dense_norms() -> dict[str, float]:
    """Largest eigenvalues of the observables at D = 0 and J = 1, written out on three sites."""

    def product(**sites: str) -> Any:
        factors = [SPIN[sites[key]] if key in sites else np.eye(2) for key in ("a", "b", "c")]
        return np.kron(np.kron(factors[0], factors[1]), factors[2])

    first = product(a="x", b="x") + product(a="y", b="y")
    second = product(b="x", c="x") + product(b="y", c="y")
    operators = {
        "energy_density": first,
        "energy_current": 1j * (first @ second - second @ first),
        "charge_density": product(a="z"),
        "charge_current": product(a="x", b="y") - product(a="y", b="x"),
    }
    return {name: float(np.abs(np.linalg.eigvalsh(matrix)).max()) for name, matrix in operators.items()}


def free_quench(sites: int = 12) -> Quench:
    chain = xxz_chain(sites=sites, anisotropy=0.0)
    beta = np.where(bond_positions(sites) < 0.0, 0.5, 2.0)
    field = np.where(site_positions(sites) < 0.0, 0.8, -0.3)
    return Quench(
        chain=chain,
        start_terms=start_terms(chain, beta=beta.tolist(), beta_charge=field.tolist()),
        every=0.5,
        samples=4,
        steps=3,
        trotter_order=4,
        discarded_weight=1e-5,
        preparation_weight=1e-10,
        preparation_distance=1e-4,
        bond_floor=1,
    )


def simulate_with_cuts(
    quench: Quench, monkeypatch: pytest.MonkeyPatch
) -> tuple[QuantumRecord, list[list[float]]]:
    """Run a quench; return also the weights that its real-time cuts lost in each sampling interval.

    The rounding of a weight measured as a difference of norms is part of what may be lost.
    """
    lost: list[list[float]] = [[]]

    def listening(blocks: list[Reals], rule: CutRule, *, guess: list[Reals] | None = None) -> Cut:
        result = cut(blocks, rule, guess=guess)
        if rule.weight_target == quench.discarded_weight:  # the start is cut by a rule of its own
            assert 0.0 <= result.uncertainty < 1e-14
            lost[-1].append(result.discarded_weight + result.uncertainty)
        return result

    def next_interval(progress: Progress) -> None:
        if abs(progress.time / quench.every - len(lost)) < 1e-9:
            lost.append([])

    with monkeypatch.context() as patch:
        patch.setattr(layers, "cut", listening)
        return simulate(quench, report=next_interval), lost[:-1]


def test_rigorous_bound_holds_and_is_the_sum_of_all_angles(monkeypatch: pytest.MonkeyPatch) -> None:
    """The same steps almost without cuts are the truth, so that nothing but the cuts makes a difference."""
    quench = free_quench()
    cut_run, lost = simulate_with_cuts(quench, monkeypatch)
    uncut_run, traces = simulate_with_cuts(replace(quench, discarded_weight=1e-14), monkeypatch)
    angles, traced = (
        np.cumsum([0.0, *(np.arcsin(np.sqrt(weights)).sum() for weights in run)]) for run in (lost, traces)
    )
    assert len(lost) == quench.samples
    np.testing.assert_allclose(cut_run.cuts, np.cumsum([0, *(len(weights) for weights in lost)]))
    assert 0.1 < angles[-1] < 0.5 * np.pi
    budgets = assess(
        cut_run, {}, {}, positions=positions_of(quench.chain.sites), settings=replace(SETTINGS, reach=np.inf)
    )
    for name, norm in dense_norms().items():
        bound = 2.0 * norm * np.sin(np.minimum(angles, 0.5 * np.pi))
        np.testing.assert_allclose(budgets[name].bound, np.tile(bound[:, None], budgets[name].bound.shape[1]))
        true = np.abs(cut_run.fields[name] - uncut_run.fields[name])
        assert true[1:].max(axis=1).min() > 1e-6, name
        left_over = 2.0 * norm * np.sin(traced)  # what the reference may itself have lost
        assert np.all(true <= budgets[name].bound + left_over[:, None] + 1e-13), name
        if name.startswith("energy"):
            assert true.max() > 0.01 * bound[-1], "the bound is no vacuous number either"


# Totals and events of a whole run.


def config_of(*, sites: int, until: float, width: float = 0.0, field: bool = True, **budget: Any) -> Config:
    start: dict[str, Any] = {"beta": {"shape": "step", "left": 0.5, "right": 2.0, "width": width}}
    if field:
        start["beta_field"] = {"shape": "uniform", "value": 0.8}
    tables = {
        "chain": {"sites": sites, "anisotropy": 0.0},
        "start": start,
        "evolution": {"until": until, "every": 0.5, "discarded_weight": 1e-8},
        "budget": {"companions": "none", **budget},
    }
    return read_config(toml(tables), subject="a.toml")


def pieces_of(config: Config, main: QuantumRecord, prediction: Prediction | None) -> Pieces:
    quench = build_quench(config, weight=1e-8, time_step=0.25)
    side = QuantumSide(quench, main, {}, {})
    return run_pieces(config, Path("a.toml"), side, prediction, "no prediction was asked for")


def test_totals_are_those_of_energy_and_of_charge() -> None:
    """Against free fermions; the field holds the magnetisation far from the energy."""
    config = config_of(sites=8, until=1.0)
    main = simulate(build_quench(config, weight=1e-8, time_step=0.25))
    exact = free_evolution(
        sites=8,
        beta=np.array([0.5, 0.5, 0.5, 1.25, 2.0, 2.0, 2.0]),
        beta_field=np.full(8, 0.8),
        times=main.times,
    )
    group = pieces_of(config, main, None).groups["quantum"]
    charge = exact["charge_density"].sum(axis=1)
    assert charge[0] > 0.5 > 0.0 > exact["total_energy"][0]
    for energies, charges in (
        (main.total_energy, main.total_charge),
        (group["total_energy"], group["total_charge"]),
    ):
        np.testing.assert_allclose(energies, exact["total_energy"], atol=1e-3)
        np.testing.assert_allclose(charges, charge, atol=1e-3)
    np.testing.assert_allclose(main.total_energy, main.fields["energy_density"].sum(axis=1), rtol=1e-12)
    np.testing.assert_allclose(main.total_charge, main.fields["charge_density"].sum(axis=1), rtol=1e-12)


@pytest.mark.parametrize(
    ("cone", "until", "meets"),
    [((-1.0, 1.0), 2.0, False), ((-1.0, 1.0), 9.0, True), ((-0.1, 6.0), 2.0, True), ((-6.0, 0.1), 2.0, True)],
)
def test_light_cone_at_the_ends_is_an_event(cone: tuple[float, float], until: float, meets: bool) -> None:
    """A smooth start on 16 sites: the ends are 7.5 spacings from the middle."""
    config = config_of(sites=SITES, until=until, width=0.5, field=False)
    main = record(samples=round(until / 0.5) + 1)
    prediction = Prediction(
        fields=main.fields,
        grid_error={name: np.zeros_like(values) for name, values in main.fields.items()},
        strings_error={name: np.zeros_like(values) for name, values in main.fields.items()},
        light_cone=cone,
        method="characteristics",
        references=(),
    )
    events = pieces_of(config, main, prediction).provenance["events"]
    assert [event["kind"] for event in events] == ["light_cone_at_end"] * meets
    events = pieces_of(config, main, None).provenance["events"]
    assert [event["kind"] for event in events] == ["no_prediction"]


# The forecast: pilots replaced by runs that obey the stated laws exactly, on a clock of their own.

OVERHEAD, PER_CUBE, PREPARATION_SECONDS = 3e-4, 2e-9, 0.75
FORECAST_SITES, FORECAST_SAMPLES = 24, 6


class Laboratory:
    """Stands in for `simulate`: the cube root of a bond is 2 + time * decades below a weight of 1e-5.

    spread : whether the growth has the shape of a light cone of velocity 1 rather than the same everywhere
    """

    def __init__(self, *, spread: bool = False) -> None:
        self.clock = 100.0
        self.spread = spread
        self.weights: list[float] = []

    def perf_counter(self) -> float:
        return self.clock

    def bonds(self, quench: Quench, moment: float) -> Reals:
        positions = bond_positions(quench.chain.sites)
        age = np.maximum(moment - np.abs(positions), 0.0) if self.spread else np.full(len(positions), moment)
        roots = 2.0 + age * -np.log10(quench.discarded_weight / 1e-5)
        depth = 0.5 * len(positions) + 0.5 - np.abs(positions)
        return np.asarray(np.minimum(np.rint(roots**3), 4.0**depth))

    def simulate(self, quench: Quench, *, report: Callable[[Progress], None]) -> None:
        self.weights.append(quench.discarded_weight)
        self.clock += PREPARATION_SECONDS
        for sample in range(quench.samples + 1):
            moment = sample * quench.every
            bonds = self.bonds(quench, moment)
            seconds = half_layer_seconds(bonds)
            self.clock += seconds
            report(Progress(moment, bonds.astype(np.int64), seconds))


def half_layer_seconds(bonds: Reals) -> float:
    """The same time for each cut (every other bond) and a cost that grows as the cube of the bond."""
    return float(OVERHEAD * len(bonds) / 2.0 + PER_CUBE * (bonds**3).sum() / 2.0)


def forecast_chain(*, sites: int = FORECAST_SITES, samples: int = FORECAST_SAMPLES, order: int = 4) -> Quench:
    chain = xxz_chain(sites=sites, anisotropy=0.5)
    return replace(
        free_quench(),
        chain=chain,
        start_terms=start_terms(chain, beta=[1.0] * (sites - 1)),
        every=1.0,
        samples=samples,
        trotter_order=order,
        discarded_weight=1e-8,
    )


def installed(monkeypatch: pytest.MonkeyPatch, *, spread: bool = False) -> Laboratory:
    laboratory = Laboratory(spread=spread)
    monkeypatch.setattr(pilot, "simulate", laboratory.simulate)
    monkeypatch.setattr(pilot, "time", SimpleNamespace(perf_counter=laboratory.perf_counter))
    return laboratory


def true_seconds(laboratory: Laboratory, quench: Quench, *, layers_per_interval: int) -> float:
    """Half layers of each interval at the mean of its first and last bonds."""
    total = PREPARATION_SECONDS
    for sample in range(quench.samples):
        ends = [laboratory.bonds(quench, (sample + part) * quench.every) for part in (0, 1)]
        total += layers_per_interval * half_layer_seconds(0.5 * (ends[0] + ends[1]))
    return total


@pytest.mark.parametrize(("order", "count"), [(4, 3 * 10 + 1), (2, 3 * 2 + 1)])
def test_forecast_finds_the_cube_law_and_the_growth_law(
    order: int, count: int, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Two pilots at 100 and 10 times the weight give bonds and seconds of the run and its companions."""
    laboratory, quench = installed(monkeypatch), forecast_chain(order=order)
    looser = replace(quench, discarded_weight=1e-7)
    found = pilot.forecast_quench(quench, companions={"once": looser, "twice": looser}, seconds=1e9)
    assert laboratory.weights == pytest.approx([1e-6, 1e-7])
    expected = [laboratory.bonds(quench, t).max() for t in range(FORECAST_SAMPLES + 1)]
    np.testing.assert_allclose(found.bond_dimension, expected, rtol=1e-9)
    np.testing.assert_allclose(found.times, np.arange(FORECAST_SAMPLES + 1.0))
    main = true_seconds(laboratory, quench, layers_per_interval=count)
    other = true_seconds(laboratory, looser, layers_per_interval=count)
    assert main > 3.0 * other > 3.0 * PREPARATION_SECONDS
    assert found.main_seconds == pytest.approx(main, rel=1e-6)
    assert found.companion_seconds == pytest.approx(2.0 * other, rel=1e-6)
    assert found.pilot_time == FORECAST_SAMPLES
    assert found.pilot_seconds == pytest.approx(laboratory.clock - 100.0)


def test_pilots_stay_above_the_weight_of_a_loose_run(monkeypatch: pytest.MonkeyPatch) -> None:
    laboratory = installed(monkeypatch)
    pilot.forecast_quench(replace(forecast_chain(), discarded_weight=1e-6), companions={}, seconds=1e9)
    assert laboratory.weights == pytest.approx([1e-4, 1e-5])


def test_forecast_keeps_floor_and_ceiling(monkeypatch: pytest.MonkeyPatch) -> None:
    installed(monkeypatch)
    quench = replace(forecast_chain(), bond_floor=20, bond_ceiling=3000)
    found = pilot.forecast_quench(quench, companions={}, seconds=1e9)
    assert found.bond_dimension[0] == 20
    assert found.bond_dimension[-1] == 3000


def test_forecast_goes_on_where_the_pilot_ran_out_of_time(monkeypatch: pytest.MonkeyPatch) -> None:
    """Cube roots grow linearly with time and their profile widens as a light cone does."""
    laboratory, quench = installed(monkeypatch, spread=True), forecast_chain(sites=40, samples=16)
    found = pilot.forecast_quench(quench, companions={}, seconds=0.0)
    assert found.pilot_time == 8.0, "a pilot takes nine samples at least"
    expected = [laboratory.bonds(quench, t).max() for t in range(17)]
    np.testing.assert_allclose(found.bond_dimension, expected, rtol=1e-9)
    last = np.concatenate([[1.0], laboratory.bonds(quench, 16.0), [1.0]])
    still = np.concatenate([[1.0], laboratory.bonds(quench, 8.0), [1.0]])
    doubles = found.state_bytes / 8.0
    copies = doubles / (last[1:] * last[:-1]).sum()
    assert np.abs(copies - np.array([1.0, 2.0, 4.0])).min() < 0.1
    assert doubles > 10.0 * (still[1:] * still[:-1]).sum()
    assert found.memory_bytes > found.state_bytes


# The choice of weight and step: errors of known law in both.


def lawful(quench: Quench) -> QuantumRecord:
    """A run whose errors are weight^0.55 and step^order, each with a pattern of its own."""
    cuts, step = quench.discarded_weight**0.55, 5e-4 * quench.time_step**quench.trotter_order

    def add(name: str, values: Reals) -> Reals:
        return np.asarray(values + cuts * noise(7, 1.0)(name, 0.0 * values) + step * np.cos(5.0 * values))

    return record(add, weight=quench.discarded_weight)


def claims(quench: Quench) -> tuple[float, float]:
    """Largest errors over all observables that the estimates would claim for truncation and step."""
    weights = [10.0**power * quench.discarded_weight for power in range(3)]
    main, loose, looser = (lawful(replace(quench, discarded_weight=weight)) for weight in weights)
    coarse = lawful(replace(quench, discarded_weight=weights[1], steps=quench.steps // 2))
    ratio = quench.steps / (quench.steps // 2)
    cutting, stepping = 0.0, 0.0
    for name in OBSERVABLE_PLACES:
        runs = [sources.TruncatedRun(run.fields[name], run.discarded_weight) for run in (main, loose, looser)]
        found = sources.truncation(main=runs[0], loose=runs[1], looser=runs[2])
        cutting = max(cutting, float(found.max()))
        found = sources.time_step(
            fine=loose.fields[name],
            coarse=coarse.fields[name],
            step_ratio=ratio,
            order=quench.trotter_order,
        )
        stepping = max(stepping, float(found.max()))
    return cutting, stepping


@pytest.mark.parametrize("order", [2, 4])
def test_chosen_settings_meet_their_shares_of_the_accuracy(
    order: int, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(pilot, "simulate", lawful)

    def build(weight: float, time_step: float) -> Quench:
        steps = round(1.0 / time_step)
        quench = replace(free_quench(SITES), every=1.0, trotter_order=order)
        return replace(quench, discarded_weight=weight, steps=steps)

    accuracy = 1e-5
    weight, step = pilot.choose_settings(build, accuracy=accuracy, time_step=0.125, fixed_step=False)
    assert 1e-15 < weight < 1e-7
    assert claims(build(weight, 0.125))[0] == pytest.approx(0.5 * accuracy, rel=0.01)
    scale = (step / 0.125) ** order
    assert 0.01 < step < 0.5
    assert step != pytest.approx(0.125, rel=0.05)
    assert scale * claims(build(1e-7, 0.125))[1] == pytest.approx(0.25 * accuracy, rel=0.01)
    kept = pilot.choose_settings(build, accuracy=accuracy, time_step=0.125, fixed_step=True)
    assert kept == pytest.approx((weight, 0.125))
