"""The error bar itself under test: synthetic errors of known law, and exact solutions."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from tests.budget_cases import NAMES
from tests.oracles.exact_chain import exact_evolution
from tests.oracles.free_fermions import free_evolution
from tnquench.budget import sources
from tnquench.budget.assess import PredictedLevel, RunSettings, assess, quantum_error
from tnquench.budget.companions import COARSE, SHORT, coarser_steps, companion_quenches, shorter_length
from tnquench.budget.sources import TruncatedRun
from tnquench.budget.verdict import ObservableBudget, judge_observable, light_cone_window, window_norm
from tnquench.conventions import ERROR_SOURCES, OBSERVABLE_PLACES, Reals, bond_positions, site_positions
from tnquench.model.chain import start_terms
from tnquench.model.profiles import step
from tnquench.model.spins import xxz_chain
from tnquench.observables.quench import QuantumRecord, Quench, simulate

TIMES, PLACES = 12, 31
TRUE = np.cos(np.linspace(0.0, 3.0, PLACES))[None, :] * np.ones((TIMES, 1))


def noisy_run(weight: float, power: float, *, seed: int = 2) -> TruncatedRun:
    """A run whose error is an irregular pattern times weight^power, the same pattern at every weight."""
    pattern = np.random.default_rng(seed).standard_normal((TIMES, PLACES))
    return TruncatedRun(TRUE + weight**power * pattern, np.full((TIMES, PLACES), weight))


@pytest.mark.parametrize("power", [0.7, 0.75, 0.8])
def test_truncation_estimate_covers_a_known_power_law(power: float) -> None:
    """At the power that it assumes it claims 2.6 local root mean squares of the error itself."""
    main, loose = noisy_run(1e-8, power), noisy_run(3e-7, power)
    claimed, error = sources.truncation(main=main, loose=loose), main.values - TRUE
    assert np.mean(np.abs(error) <= claimed) > 0.95
    assert np.median(claimed) < 6.0 * np.median(np.abs(error))
    if power == sources.TYPICAL_POWER:
        np.testing.assert_allclose(claimed, 2.6 * sources.local_scale(error), rtol=1e-8)


def test_truncation_estimate_uses_the_weight_really_lost() -> None:
    """Where the bond floor binds the companion loses far more than thirty times what the main run does."""
    main, loose = (noisy_run(w, 0.75) for w in (1e-8, 3e-7))
    bound = TruncatedRun(TRUE + 0.1 * (main.values - TRUE), main.discarded_weight * 0.1 ** (1 / 0.75))
    ordinary = sources.truncation(main=main, loose=loose)
    floored = sources.truncation(main=bound, loose=loose)
    np.testing.assert_allclose(floored, 0.1 * ordinary, rtol=1e-9)


def test_losses_further_apart_than_any_law_holds_claim_no_less() -> None:
    """A main run that loses next to nothing: its error is claimed as if it had lost 1e-4 of the companion."""
    loose = noisy_run(3e-7, 0.75)
    far, further = (TruncatedRun(TRUE, np.full((TIMES, PLACES), weight)) for weight in (3e-11, 3e-14))
    claimed = sources.truncation(main=far, loose=loose)
    np.testing.assert_allclose(sources.truncation(main=further, loose=loose), claimed, rtol=1e-12)


def test_truncation_estimate_lives_on_sites_and_bonds() -> None:
    sites = TruncatedRun(np.zeros((3, 6)), np.arange(15, dtype=np.float64).reshape(3, 5))
    assert sites.local_weight().shape == (3, 6)


@pytest.mark.parametrize("order", [2, 4])
def test_step_estimate_recovers_a_known_law(order: int) -> None:
    pattern = np.random.default_rng(0).standard_normal((TIMES, PLACES))
    error = {h: h**order * pattern for h in (0.1, 0.2)}
    claimed = sources.time_step(fine=TRUE + error[0.1], coarse=TRUE + error[0.2], step_ratio=2.0, order=order)
    assert np.mean(np.abs(error[0.1]) <= claimed) > 0.95
    assert np.median(claimed) < 6.0 * np.median(np.abs(error[0.1]))


def test_step_estimate_leaves_out_part_of_what_the_cuts_do() -> None:
    """Cuts alone, twice as large in the coarser run: at least 0.7 of their difference remains.

    A step error far above stays.
    """
    cuts = 1e-6 * np.random.default_rng(1).standard_normal((TIMES, PLACES))

    def claimed(*, step: Reals | float = 0.0, noise: Reals | float = 0.0) -> Reals:
        runs = {"fine": TRUE + cuts, "coarse": TRUE + 2.0 * cuts + step}
        return sources.time_step(**runs, step_ratio=2.0, order=2, noise=noise)

    np.testing.assert_allclose(claimed(noise=cuts), np.sqrt(0.5) * claimed(), rtol=1e-6)
    np.testing.assert_allclose(claimed(noise=10.0 * cuts), 0.7 * claimed(), rtol=1e-12)
    far = 1e3 * cuts[::-1]
    np.testing.assert_allclose(claimed(step=far, noise=cuts), claimed(step=far), rtol=1e-4)


def test_length_estimate_keeps_the_depth_below_the_end() -> None:
    """An end effect of the short chain is charged to the long chain at equal depth, noise is not."""
    long, noise = np.zeros((2, 24)), np.full((2, 24), 1e-6)
    short = np.full((2, 20), 1e-7)
    short[0, 0], short[0, 1] = 1e-2, 1e-3
    claimed = sources.length(long=long, short=short, noise=noise)
    assert np.all(claimed[:, :3] == pytest.approx(1e-2, rel=1e-3)), "neighbours share the largest difference"
    assert claimed[0, 3] == pytest.approx(1e-3, rel=1e-2)
    assert np.all(claimed[:, 4:] == 0.0)


def test_bound_saturates_at_twice_the_norm() -> None:
    bound = sources.truncation_bound(angle=np.array([0.0, 0.1, 7.0]), norm=0.75, shape=(3, 4))
    assert bound[0] == pytest.approx(0.0)
    assert bound[1] == pytest.approx(1.5 * np.sin(0.1))
    assert bound[2] == pytest.approx(1.5)


def test_verdict_counts_physics_apart() -> None:
    """The start's own mismatch is an entry of the source axis and no part of the numerical error."""
    times, places = np.array([0.0, 1.0]), np.array([-1.0, 0.0, 1.0])
    shape = (2, 3)
    budget = judge_observable(
        quantum=np.array([[0.0, 0.0, 0.0], [0.0, 0.5, 0.1]]),
        sources={
            "truncation": np.full(shape, 0.02),
            "prediction_grid": np.full(shape, 0.01),
            "initial_gradient": np.full(shape, 9.0),
        },
        bound=np.ones(shape),
        predictions={"euler": np.zeros(shape)},
        window=light_cone_window(times=times, positions=places, light_cone=(-1.0, 1.0)),
        positions=places,
        times=times,
        resolve_at=3.0,
    )
    np.testing.assert_allclose(budget.numerical, 0.03)
    assert budget.error[ERROR_SOURCES.index("initial_gradient")].max() == 9.0
    verdict = budget.levels["euler"]
    assert verdict.resolved.tolist() == [[False] * 3, [False, True, True]]
    assert verdict.first_resolved_time == 1.0
    assert [ERROR_SOURCES[index] for index in budget.dominant_source] == ["truncation", "truncation"]


def test_window_norm_is_the_root_mean_square_inside() -> None:
    window = np.array([[True, True, False]])
    assert window_norm(np.array([[3.0, 4.0, 100.0]]), window)[0] == pytest.approx(np.sqrt(12.5))


def test_companions_differ_from_the_main_run_by_what_they_isolate() -> None:
    main = free_quench(24, weight=1e-8, samples=2)
    short = shorter_length(24)
    assert short is not None
    assert (24 - short) % 2 == 0
    runs = companion_quenches(main, shorter=free_quench(short, weight=1e-8, samples=2))
    assert list(runs) == ["weight_30", COARSE, SHORT]
    assert [run.discarded_weight for run in runs.values()] == pytest.approx([3e-7] * 3)
    assert [run.bond_floor for run in runs.values()] == [main.bond_floor // 3] * 3
    assert runs["weight_30"].steps == main.steps
    assert runs[SHORT].steps == runs[COARSE].steps == coarser_steps(main.steps) < main.steps
    assert (runs[COARSE].chain.sites, runs[SHORT].chain.sites) == (24, short)
    assert shorter_length(4) is None


def free_quench(sites: int, *, weight: float, samples: int = 10, field: bool = False) -> Quench:
    chain = xxz_chain(sites=sites, anisotropy=0.0)
    beta, beta_field = free_start(sites, field=field)
    potentials = {"charge_density": beta_field.tolist()} if field else {}
    terms = start_terms(chain, beta=beta.tolist(), potentials=potentials)
    return Quench(
        chain=chain,
        start_terms=terms,
        every=0.5,
        samples=samples,
        steps=3,
        trotter_order=4,
        discarded_weight=weight,
        preparation_weight=1e-4 * weight,
        preparation_distance=0.03 * np.sqrt(weight),
    )


def free_start(sites: int, *, field: bool) -> tuple[Reals, Reals]:
    beta = step(bond_positions(sites), left=0.5, right=2.0)
    return beta, step(site_positions(sites), left=0.5, right=-0.5) * float(field)


SETTINGS = RunSettings(step_ratio=3.0, trotter_order=4, resolve_at=3.0)


def judged(
    sites: int, *, weight: float, field: bool
) -> tuple[QuantumRecord, dict[str, Reals], dict[str, Reals]]:
    """A free chain with its claimed errors (the ends' influence left out: the oracle has the same ends) and
    truth."""
    main = free_quench(sites, weight=weight, field=field)
    records = {name: simulate(quench) for name, quench in companion_quenches(main, shorter=None).items()}
    record = simulate(main)
    budgets = assess(
        record,
        records,
        {},
        positions={"site": site_positions(sites), "bond": bond_positions(sites)},
        settings=SETTINGS,
    )
    beta, beta_field = free_start(sites, field=field)
    exact = free_evolution(sites=sites, beta=beta, beta_field=beta_field, times=record.times)
    claimed = {name: without_ends(budget) for name, budget in budgets.items()}
    assert quantum_error(record, records, SETTINGS)[0] == pytest.approx(
        max(c.max() for c in claimed.values())
    )
    return record, claimed, exact


def without_ends(budget: ObservableBudget) -> Reals:
    """The claimed error without the influence of the ends, which an oracle with the same ends shares."""
    return np.asarray(budget.numerical - budget.error[ERROR_SOURCES.index("length")])


@pytest.mark.parametrize(
    ("sites", "weight", "field"), [(64, 1e-8, False), (32, 1e-6, False), (32, 1e-7, True)], ids=str
)
def test_claimed_error_covers_the_true_one_and_is_no_wider_than_needed(
    sites: int, weight: float, field: bool
) -> None:
    """At D = 0 free fermions give the truth: 95 % of all points covered, and 90 % of those in the last light
    cones.

    Norms over the light cone and all samples are within a factor 10.
    """
    record, claimed, exact = judged(sites, weight=weight, field=field)
    for name in NAMES:
        place = OBSERVABLE_PLACES[name]
        if not field and name.startswith("charge"):
            continue  # zero by symmetry
        true = np.abs(record.fields[name] - exact[name])
        assert np.mean(true <= claimed[name]) >= 0.95, name
        positions = site_positions(sites) if place == "site" else bond_positions(sites)
        window = light_cone_window(times=record.times, positions=positions, light_cone=(-1.0, 1.0))
        late = window & (record.times >= 0.7 * record.times[-1])[:, None]
        assert np.mean((true <= claimed[name])[late]) >= 0.9, name
        ratio = np.sqrt(np.mean(claimed[name][window] ** 2) / np.mean(true[window] ** 2))
        assert 0.9 < ratio < 10.0, name


@pytest.mark.parametrize(("anisotropy", "weight"), [(0.5, 1e-6), (1.0, 1e-7), (2.0, 1e-8), (-0.5, 1e-7)])
def test_claimed_error_covers_the_true_one_of_interacting_chains(anisotropy: float, weight: float) -> None:
    """Ten sites against exact diagonalisation, two temperatures, two fields: 95 % of points covered."""
    sites = 10
    beta = step(bond_positions(sites), left=0.3, right=1.5)
    field = step(site_positions(sites), left=0.4, right=-0.4)
    chain = xxz_chain(sites=sites, anisotropy=anisotropy)
    main = replace(
        free_quench(sites, weight=weight, samples=8),
        chain=chain,
        start_terms=start_terms(chain, beta=beta.tolist(), potentials={"charge_density": field.tolist()}),
    )
    records = {name: simulate(quench) for name, quench in companion_quenches(main, shorter=None).items()}
    record = simulate(main)
    exact = exact_evolution(
        sites=sites,
        anisotropy=anisotropy,
        beta=beta,
        beta_field=field,
        times=record.times,
        entanglement=False,
    )
    budgets = assess(
        record,
        records,
        {},
        positions={"site": site_positions(sites), "bond": bond_positions(sites)},
        settings=SETTINGS,
    )
    for name in NAMES:
        true = np.abs(record.fields[name] - exact[name])
        assert true.max() > 1e-7, "nothing to cover"
        assert np.mean(true <= without_ends(budgets[name])) >= 0.95, name


def test_a_wrong_theory_is_resolved_and_a_right_one_is_not() -> None:
    """The exact evolution as a 'prediction' stays unresolved, the same shifted by a percent is found out."""
    sites = 24
    main = free_quench(sites, weight=1e-8, samples=6)
    records = {name: simulate(quench) for name, quench in companion_quenches(main, shorter=None).items()}
    record = simulate(main)
    beta, _ = free_start(sites, field=False)
    exact = free_evolution(sites=sites, beta=beta, times=record.times)
    zero = {name: np.zeros_like(values) for name, values in record.fields.items()}
    truth = {name: exact[name] for name in zero}
    wrong = truth | {"energy_current": 1.01 * exact["energy_current"]}
    levels = {
        label: PredictedLevel(fields, zero, zero, (-1.0, 1.0))
        for label, fields in (("true", truth), ("off", wrong))
    }
    budgets = assess(
        record,
        records,
        levels,
        positions={"site": site_positions(sites), "bond": bond_positions(sites)},
        settings=SETTINGS,
    )
    claimed = without_ends(budgets["energy_current"])
    assert budgets["energy_current"].levels["off"].resolved.sum() == 0, "the unknown ends hide everything"
    found = {
        label: np.abs(budgets["energy_current"].levels[label].deviation) > SETTINGS.resolve_at * claimed
        for label in levels
    }
    window = light_cone_window(times=record.times, positions=site_positions(sites), light_cone=(-1.0, 1.0))
    assert found["true"].mean() < 0.01
    assert found["off"][-1][window[-1]].mean() > 0.5


def test_binding_ceiling_widens_the_claim() -> None:
    """A ceiling below what the weight needs: companions get lower ceilings, so the claim still covers the
    error."""
    sites, weight = 24, 1e-9
    main = replace(free_quench(sites, weight=weight, samples=8), bond_ceiling=16)
    records = {name: simulate(quench) for name, quench in companion_quenches(main, shorter=None).items()}
    record = simulate(main)
    assert any(event["kind"] == "bond_ceiling" for event in record.events)
    budgets = assess(
        record,
        records,
        {},
        positions={"site": site_positions(sites), "bond": bond_positions(sites)},
        settings=SETTINGS,
    )
    exact = free_evolution(sites=sites, beta=free_start(sites, field=False)[0], times=record.times)
    for name in ("energy_density", "energy_current"):
        true = np.abs(record.fields[name] - exact[name])
        assert true.max() > 1e-5
        assert np.mean(true <= without_ends(budgets[name])) >= 0.95
