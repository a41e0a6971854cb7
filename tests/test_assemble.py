"""From the text of a config to the chain, its start and its prediction: nothing lost, no sign turned."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from math import cos, exp, inf, pi, sqrt, tanh
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from tests.oracles.exact_chain import exact_evolution
from tests.oracles.free_fermions import infinite_chain, joined_halves
from tnquench.assemble import (
    budget_settings,
    build_prediction,
    build_quench,
    build_shorter,
    default_step,
    no_prediction,
    start_reach,
)
from tnquench.config.load import read_config
from tnquench.config.schema import Config
from tnquench.conventions import OBSERVABLE_PLACES, Reals, bond_positions, site_positions
from tnquench.dataset.reader import open_run
from tnquench.hydro.prediction import Prediction
from tnquench.model.chain import start_terms, xxz_chain
from tnquench.observables.quench import Quench, simulate
from tnquench.outcome import QuantumSide
from tnquench.run import SILENT, Watch, quantum_side, run

COUPLING = 1.7
#: Tables without any symmetry.
BETA_TABLE = (0.3, 0.9, 0.5, 1.1, 0.7, 0.2, 0.6)
FIELD_TABLE = (0.4, -0.2, 0.7, 0.1, -0.5, 0.3, 0.9, -0.1)

EVOLUTION = "until = 0.4\nevery = 0.2\ndiscarded_weight = 1e-12\ntime_step = 0.05"


@dataclass(frozen=True)
class Case:
    """A start as a config writes it, and the same as formulas of position x (a table: of the index j)."""

    sites: int
    beta: str
    beta_field: str
    bond_value: Callable[[float], float]
    site_value: Callable[[float], float]
    joint: str = "coupled"


def by_index(values: tuple[float, ...], *, of: int) -> Callable[[float], float]:
    """The value whose place lies at x, in a row of values centred at 0."""
    return lambda x: values[round(x + 0.5 * (of - 1))]


def jump(x: float, left: float, right: float) -> float:
    return left if x < 0 else right if x > 0 else 0.5 * (left + right)


SHARP_BETA, SHARP_FIELD = '{shape="step", left=0.3, right=1.1}', '{shape="step", left=0.8, right=-0.3}'

CASES = {
    "sharp, bond at the joint": Case(
        8, SHARP_BETA, SHARP_FIELD, lambda x: jump(x, 0.3, 1.1), lambda x: jump(x, 0.8, -0.3)
    ),
    "sharp, site at the joint": Case(
        7, SHARP_BETA, SHARP_FIELD, lambda x: jump(x, 0.3, 1.1), lambda x: jump(x, 0.8, -0.3)
    ),
    "separate": Case(
        8,
        SHARP_BETA,
        SHARP_FIELD,
        lambda x: 0.0 if x == 0 else jump(x, 0.3, 1.1),
        lambda x: jump(x, 0.8, -0.3),
        joint="separate",
    ),
    "step with a width": Case(
        8,
        '{shape="step", left=1.2, right=0.4, width=1.5}',
        '{shape="step", left=-0.5, right=0.7, width=2.5}',
        lambda x: 0.8 - 0.4 * tanh(x / 1.5),
        lambda x: 0.1 + 0.6 * tanh(x / 2.5),
    ),
    "bump over a wave": Case(
        7,
        '{shape="bump", base=1.0, height=-0.7, width=1.3}',
        '{shape="wave", base=0.3, height=0.6, length=5.0}',
        lambda x: 1.0 - 0.7 * exp(-x * x / 3.38),
        lambda x: 0.3 + 0.6 * cos(2 * pi * x / 5.0),
    ),
    "wave, uniform field": Case(
        8,
        '{shape="wave", base=0.8, height=0.5, length=7.0}',
        '{shape="uniform", value=0.6}',
        lambda x: 0.8 + 0.5 * cos(2 * pi * x / 7.0),
        lambda _: 0.6,
    ),
    "tables": Case(
        8,
        f'{{shape="table", values={list(BETA_TABLE)}}}',
        f'{{shape="table", values={list(FIELD_TABLE)}}}',
        by_index(BETA_TABLE, of=7),
        by_index(FIELD_TABLE, of=8),
    ),
    "uniform, no field": Case(7, '{shape="uniform", value=0.9}', "", lambda _: 0.9, lambda _: 0.0),
}


def config_of(
    *,
    beta: str,
    beta_field: str = "",
    sites: int = 8,
    anisotropy: float = 0.5,
    evolution: str = EVOLUTION,
    joint: str = "coupled",
    levels: str = '["euler"]',
) -> Config:
    return read_config(
        text_of(
            beta=beta,
            beta_field=beta_field,
            sites=sites,
            anisotropy=anisotropy,
            evolution=evolution,
            joint=joint,
            levels=levels,
        ),
        subject="test",
    )


def text_of(
    *, beta: str, beta_field: str, sites: int, anisotropy: float, evolution: str, joint: str, levels: str
) -> str:
    field = f"beta_field = {beta_field}" if beta_field else ""
    return f"""
[chain]
sites = {sites}
coupling = {COUPLING}
anisotropy = {anisotropy}
[start]
joint = "{joint}"
beta = {beta}
{field}
[evolution]
{evolution}
[hydrodynamics]
levels = {levels}
"""


def case_config(case: Case, *, evolution: str = EVOLUTION) -> Config:
    return config_of(
        beta=case.beta, beta_field=case.beta_field, sites=case.sites, evolution=evolution, joint=case.joint
    )


def exact_of(case: Case, times: Reals) -> dict[str, Reals]:
    return exact_evolution(
        sites=case.sites,
        anisotropy=0.5,
        coupling=COUPLING,
        beta=[case.bond_value(j + 0.5 - 0.5 * (case.sites - 1)) for j in range(case.sites - 1)],
        beta_field=[case.site_value(i - 0.5 * (case.sites - 1)) for i in range(case.sites)],
        times=times,
    )


@pytest.mark.parametrize("name", CASES)
def test_a_config_becomes_the_exact_quench(name: str) -> None:
    """Every observable at t = 0 and later, against dense matrices with profiles from their formulas."""
    case = CASES[name]
    record = simulate(build_quench(case_config(case), weight=1e-12, time_step=0.05))
    np.testing.assert_allclose(record.times, [0.0, 0.2, 0.4], atol=1e-12)
    exact = exact_of(case, np.array([0.0, 0.2, 0.4]))
    for observable in OBSERVABLE_PLACES:
        np.testing.assert_allclose(
            record.fields[observable], exact[observable], rtol=0, atol=1e-6, err_msg=observable
        )
    np.testing.assert_allclose(
        record.operator_entanglement, exact["operator_entanglement"], rtol=0, atol=1e-6
    )
    np.testing.assert_allclose(record.total_energy, exact["total_energy"], rtol=0, atol=1e-6)
    assert record.log_partition_function == pytest.approx(float(exact["log_partition_function"]), abs=1e-6)


def test_numbers_of_the_evolution_arrive() -> None:
    evolution = (
        "until = 3.0\nevery = 0.5\ndiscarded_weight = 1e-9\ntime_step = 0.12\ntrotter_order = 2\n"
        'bond_ceiling = 77\ncut = "svd"'
    )
    config = config_of(beta=SHARP_BETA, evolution=evolution)
    quench = build_quench(config, weight=1e-9, time_step=0.12)
    assert (quench.every, quench.samples, quench.steps, quench.trotter_order) == (0.5, 6, 5, 2)
    assert (quench.bond_ceiling, quench.cutting, quench.discarded_weight) == (77, "svd", 1e-9)
    assert quench.preparation_distance < sqrt(1e-9)
    assert quench.preparation_weight < 1e-9
    assert build_quench(config, weight=1e-9, time_step=5.0).steps == 2, "the coarser companion needs a step"
    settings = budget_settings(config, quench)
    assert settings.step_ratio == pytest.approx(5 / 2)
    assert (settings.trotter_order, settings.resolve_at, settings.reach) == (2, 3.0, 1.5)


def test_default_step_shrinks_with_the_largest_bond_energy() -> None:
    accuracy = "until = 1.0\nevery = 0.5\naccuracy = 1e-4"
    for anisotropy, expected in ((0.5, 0.2 / 1.7), (-2.0, 0.1 / 1.7)):
        config = config_of(beta=SHARP_BETA, anisotropy=anisotropy, evolution=accuracy)
        assert default_step(config) == pytest.approx(expected)
    assert default_step(config_of(beta=SHARP_BETA, evolution=f"{accuracy}\ntime_step = 0.3")) == 0.3


@pytest.mark.parametrize("name", [name for name in CASES if name != "uniform, no field"])
def test_shorter_companion_keeps_the_middle(name: str) -> None:
    """Two sites less: the same values at the same distance from the middle."""
    case = CASES[name]
    config = case_config(case)
    main = build_quench(config, weight=1e-8, time_step=0.1)
    shorter = build_shorter(config, weight=1e-8, time_step=0.1)
    assert shorter is not None
    sites = case.sites - 2
    chain = xxz_chain(sites=sites, anisotropy=0.5, coupling=COUPLING)
    beta = [case.bond_value(j + 0.5 - 0.5 * (case.sites - 1)) for j in range(1, case.sites - 2)]
    field = [case.site_value(i - 0.5 * (case.sites - 1)) for i in range(1, case.sites - 1)]
    assert shorter.chain == chain
    expected = start_terms(chain, beta=beta, beta_charge=field)
    for found, term in zip(shorter.start_terms, expected, strict=True):
        assert found == pytest.approx(term)
    assert replace(shorter, chain=main.chain, start_terms=main.start_terms) == main


def test_a_chain_too_short_to_shorten_has_no_shorter_companion() -> None:
    config = config_of(beta=SHARP_BETA, sites=5)
    assert build_shorter(config, weight=1e-8, time_step=0.1) is None


LATER = "until = 6.0\nevery = 1.5\ndiscarded_weight = 1e-9"


def predicted(config: Config) -> Prediction:
    assert no_prediction(config) == ""
    prediction, absence = build_prediction(config)
    assert prediction is not None, absence
    return prediction


def places(name: str, sites: int) -> Reals:
    return site_positions(sites) if OBSERVABLE_PLACES[name] == "site" else bond_positions(sites)


@pytest.mark.parametrize("joint", ["coupled", "separate"])
def test_step_prediction_is_that_of_free_fermions(joint: str) -> None:
    """D = 0, J = 1.7, a step in beta and one in beta h: T. Antal et al. (1999), Y. Ogata (2002), as in the
    oracle; at t = 0 the thermal states of both halves, between them that of the bond at x = 0."""
    sites, times = 32, np.array([0.0, 1.5, 3.0, 4.5, 6.0])
    config = config_of(
        beta=SHARP_BETA, beta_field=SHARP_FIELD, sites=sites, anisotropy=0.0, evolution=LATER, joint=joint
    )
    prediction = predicted(config)
    assert prediction.method.startswith("joined halves")
    assert prediction.light_cone == pytest.approx((-COUPLING, COUPLING), abs=1e-6)
    left, right = (0.3, 0.8), (1.1, -0.3)
    for name in OBSERVABLE_PLACES:
        x = places(name, sites)
        inner = slice(1, -1) if name == "energy_current" else slice(None)
        for index, time in enumerate(times[1:], start=1):
            exact = joined_halves(x / time, left=left, right=right, coupling=COUPLING)[name]
            np.testing.assert_allclose(
                prediction.fields[name][index, inner], exact[inner], rtol=0, atol=1e-7, err_msg=name
            )
    start = prediction.fields["energy_density"][0]
    middle = (0.0 if joint == "separate" else 0.7, 0.25)
    for position, (beta, field) in ((0, left), (sites // 2 - 1, middle), (sites - 2, right)):
        assert start[position] == pytest.approx(energy_of(beta, field), abs=1e-7)


def energy_of(beta: float, field: float) -> float:
    """Energy a site in equilibrium at D = 0; zero where beta is."""
    if beta == 0.0:
        return 0.0
    return infinite_chain(beta=beta, field=field / beta, coupling=COUPLING)["energy"]


Profile = Callable[[Reals], Reals]


def streamed(x: Reals, time: float, *, beta: Profile, beta_field: Profile) -> dict[str, Reals]:
    """D = 0: mode k has energy J cos k, moves at -J sin k and keeps the occupation of where it began."""
    momenta = 2.0 * np.pi * (np.arange(8000) + 0.5) / 8000
    energy, velocity = COUPLING * np.cos(momenta), -COUPLING * np.sin(momenta)
    origin = x[:, None] - velocity * time
    occupied = 1.0 / (1.0 + np.exp(beta(origin) * energy - beta_field(origin)))
    return {
        "energy_density": np.mean(energy * occupied, axis=1),
        "energy_current": np.mean(velocity * energy * occupied, axis=1),
        "charge_density": np.mean(occupied - 0.5, axis=1),
        "charge_current": np.mean(velocity * occupied, axis=1),
    }


RAMP_SITES = 24
BETA_RAMP = [round(0.8 + 0.02 * (j - 11), 9) for j in range(RAMP_SITES - 1)]
FIELD_RAMP = [round(0.3 - 0.04 * (i - 11.5), 9) for i in range(RAMP_SITES)]

SMOOTH: dict[str, tuple[int, str, str, Profile, Profile]] = {
    "bumps": (
        24,
        '{shape="bump", base=1.2, height=-0.8, width=2.5}',
        '{shape="bump", base=0.2, height=0.9, width=2.0}',
        lambda x: 1.2 - 0.8 * np.exp(-(x**2) / 12.5),
        lambda x: 0.2 + 0.9 * np.exp(-(x**2) / 8.0),
    ),
    "step with a width in a uniform field": (
        24,
        '{shape="step", left=0.3, right=1.1, width=2.0}',
        '{shape="uniform", value=-0.7}',
        lambda x: 0.7 + 0.4 * np.tanh(x / 2.0),
        lambda x: np.full_like(x, -0.7),
    ),
    "wave without a field": (
        24,
        '{shape="wave", base=0.8, height=0.4, length=12.0}',
        "",
        lambda x: 0.8 + 0.4 * np.cos(2.0 * np.pi * x / 12.0),
        np.zeros_like,
    ),
    # piecewise cubics through points on a line are that line
    "tables on a line": (
        RAMP_SITES,
        f'{{shape="table", values={BETA_RAMP}}}',
        f'{{shape="table", values={FIELD_RAMP}}}',
        lambda x: 0.8 + 0.02 * x,
        lambda x: 0.3 - 0.04 * x,
    ),
}


@pytest.mark.parametrize("name", SMOOTH)
def test_smooth_prediction_is_free_streaming(name: str) -> None:
    """D = 0, J = 1.7, where no end has been felt: the integral over modes. Source: common practice, no
    source. Tolerance: the prediction's own error."""
    sites, beta, beta_field, bond_value, site_value = SMOOTH[name]
    config = config_of(
        beta=beta,
        beta_field=beta_field,
        sites=sites,
        anisotropy=0.0,
        evolution="until = 3.0\nevery = 3.0\ndiscarded_weight = 1e-9",
    )
    tolerance = 2e-4 if "tables" in name else 1e-7  # a table has kinks at the ends, where it goes on flat
    prediction = predicted(config)
    assert prediction.method == "characteristics"
    for observable in OBSERVABLE_PLACES:
        x = places(observable, sites)
        inside = np.abs(x) < 0.5 * (sites - 2) - 3.0 * COUPLING
        for index, time in enumerate((0.0, 3.0)):
            exact = streamed(x[inside], time, beta=bond_value, beta_field=site_value)[observable]
            error = np.abs(prediction.fields[observable][index, inside] - exact)
            claimed = prediction.grid_error[observable][index, inside]
            assert np.all(error <= claimed + 1e-7), observable
            assert error.max() < tolerance, observable


def test_a_step_in_the_field_alone_joins_halves() -> None:
    uniform = '{shape="uniform", value=0.4}'
    prediction = predicted(config_of(beta=uniform, beta_field=SHARP_FIELD, sites=16))
    assert prediction.method.startswith("joined halves")


def test_a_table_goes_on_flat_beyond_its_ends() -> None:
    """The end sites lie half a spacing outside the bonds: beta there is that of the last bond."""
    _, beta, beta_field, _, _ = SMOOTH["tables on a line"]
    prediction = predicted(
        config_of(beta=beta, beta_field=beta_field, sites=RAMP_SITES, anisotropy=0.0, evolution=EVOLUTION)
    )
    for end in (0, -1):
        exact = infinite_chain(
            beta=BETA_RAMP[end], field=FIELD_RAMP[end] / BETA_RAMP[end], coupling=COUPLING
        )["magnetisation"]
        assert prediction.fields["charge_density"][0, end] == pytest.approx(exact, abs=1e-7)


BUMP = '{shape="bump", base=1.0, height=-0.5, width=2.0}'


@pytest.mark.parametrize(
    ("changes", "reason"),
    [
        ({"levels": "[]"}, "no hydrodynamic level"),
        ({"anisotropy": 0.3}, "0.3"),
        ({"sites": 3}, "3 sites are no hydrodynamic system"),
        ({"beta_field": BUMP}, "sharp step beside a smooth profile"),
        ({"beta": BUMP, "beta_field": SHARP_FIELD}, "sharp step beside a smooth profile"),
        ({"beta_field": '{shape="step", left=0.0, right=1.0, width=2.0}'}, "sharp step beside a smooth"),
    ],
    ids=str,
)
def test_reasons_against_a_prediction(changes: dict[str, Any], reason: str) -> None:
    config = config_of(**({"beta": SHARP_BETA} | changes))
    assert reason in no_prediction(config)
    assert build_prediction(config) == (None, no_prediction(config))


@pytest.mark.parametrize(
    ("beta", "beta_field"),
    [
        (SHARP_BETA, ""),
        (SHARP_BETA, '{shape="uniform", value=0.4}'),
        ('{shape="uniform", value=0.4}', SHARP_FIELD),
        (BUMP, '{shape="step", left=0.4, right=0.4}'),
        (BUMP, BUMP),
    ],
)
def test_nothing_against_a_prediction(beta: str, beta_field: str) -> None:
    assert no_prediction(config_of(beta=beta, beta_field=beta_field)) == ""


@pytest.mark.parametrize(
    ("beta", "until", "reason"),
    [(SHARP_BETA, 4.0, "reaches the ends"), ('{shape="bump", base=1, height=1, width=0.01}', 1.0, "changes")],
)
def test_what_the_theory_refuses_is_a_reason(beta: str, until: float, reason: str) -> None:
    config = config_of(beta=beta, evolution=f"until = {until}\nevery = 1.0\ndiscarded_weight = 1e-9")
    assert no_prediction(config) == ""
    prediction, absence = build_prediction(config)
    assert prediction is None
    assert reason in absence


@pytest.mark.parametrize(
    ("beta", "beta_field", "reach"),
    [
        (SHARP_BETA, "", 1.5),
        (SHARP_BETA, SHARP_FIELD, 1.5),
        ('{shape="uniform", value=1.0}', "", 1.5),
        ('{shape="step", left=0.0, right=1.0, width=2.0}', "", 7.5),
        (BUMP, '{shape="uniform", value=1.0}', 7.5),
        (BUMP, '{shape="step", left=0.0, right=1.0, width=4.0}', 13.5),
        ('{shape="wave", base=1.0, height=0.5, length=4.0}', "", inf),
        ('{shape="uniform", value=1.0}', f'{{shape="table", values={list(FIELD_TABLE)}}}', inf),
    ],
)
def test_reach_of_a_start(beta: str, beta_field: str, reach: float) -> None:
    """A sharp start touches the places next to the joint; a smooth one three of its widths more."""
    assert start_reach(config_of(beta=beta, beta_field=beta_field)) == pytest.approx(reach)


def test_an_accuracy_is_met_and_said_to_be(tmp_path: Path) -> None:
    """The true error of a whole run stays below the accuracy that its config asks for."""
    case = CASES["sharp, bond at the joint"]
    file = tmp_path / "accurate.toml"
    file.write_text(
        text_of(
            beta=case.beta,
            beta_field=case.beta_field,
            sites=case.sites,
            anisotropy=0.5,
            evolution="until = 1.0\nevery = 0.5\naccuracy = 1e-4",
            joint="coupled",
            levels="[]",
        ),
        encoding="utf-8",
    )
    stages: list[str] = []
    watch = Watch(stage=lambda name, _: stages.append(name), progress=SILENT.progress)
    result = open_run(run(file, into=tmp_path / "result", watch=watch))
    assert stages.count("main run") == 1, "nothing is repeated once the accuracy is met"
    exact = exact_of(case, np.array([0.0, 0.5, 1.0]))
    for name in OBSERVABLE_PLACES:
        assert np.abs(result.quantum[name].to_numpy() - exact[name]).max() <= 1e-4, name
    kinds = [event["kind"] for event in result.provenance["events"]]
    assert kinds.count("accuracy_reached") == 1
    assert "accuracy_missed" not in kinds
    settings = result.provenance["main_run"]
    event = next(event for event in result.provenance["events"] if event["kind"] == "accuracy_reached")
    assert f"weight {settings['discarded_weight']:.1e}" in event["detail"]
    assert f"time step {settings['time_step']:.3g}" in event["detail"]
    assert "1.0e-04 asked" in event["detail"]


def missed(config: Config) -> tuple[QuantumSide, list[Quench]]:
    """The quantum side of a config whose accuracy is out of reach, and every main quench that was tried."""
    mains: list[Quench] = []

    def stage(name: str, quench: Quench | None) -> None:
        if name == "main run":
            assert quench is not None
            mains.append(quench)

    side = quantum_side(config, threads=1, watch=Watch(stage=stage, progress=SILENT.progress))
    assert side.quench == mains[-1]
    assert [event["kind"] for event in side.events] == ["accuracy_missed"]
    chosen = f"weight {mains[-1].discarded_weight:.1e}, time step {mains[-1].time_step:.3g}"
    assert chosen in str(side.events[0]["detail"])
    return side, mains


def hard_config(extra: str = "") -> Config:
    return config_of(
        beta=SHARP_BETA,
        beta_field=SHARP_FIELD,
        evolution=f"until = 1.0\nevery = 0.5\naccuracy = 1e-9\n{extra}",
        levels="[]",
    )


def test_a_step_held_too_long_is_admitted_at_once() -> None:
    """No weight mends a step that the config holds: nothing is repeated, and the event names the step."""
    side, mains = missed(hard_config("time_step = 0.25"))
    assert [main.time_step for main in mains] == [0.25]
    assert "mostly time step" in str(side.events[0]["detail"])


@pytest.mark.parametrize(
    ("pilots", "weights", "steps"),
    [
        ((1e-6, 0.05), (1e-6, 1e-7, 1e-8), (0.05, 0.05, 0.05)),
        ((1e-15, 0.25), (1e-15, 1e-15, 1e-15), (0.25, 0.125, 0.0625)),
    ],
    ids=["weight", "step"],
)
def test_repeats_mend_the_largest_source(
    monkeypatch: pytest.MonkeyPatch,
    pilots: tuple[float, float],
    weights: tuple[float, ...],
    steps: tuple[float, ...],
) -> None:
    """Pilot runs that chose badly: each repeat cuts less, or steps less, and the last one is admitted."""
    monkeypatch.setattr("tnquench.run.choose_settings", lambda *_, **__: pilots)
    _, mains = missed(hard_config())
    assert [main.discarded_weight for main in mains] == pytest.approx(weights)
    assert [main.time_step for main in mains] == pytest.approx(steps)
