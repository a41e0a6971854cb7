"""From the text of a config to the chain and its start: nothing lost, no sign turned."""

from __future__ import annotations

from dataclasses import replace
from math import inf, sqrt

import numpy as np
import pytest

from tests.assemble_cases import (
    BUMP,
    CASES,
    COUPLING,
    FIELD_TABLE,
    FOUR,
    SHARP_BETA,
    SHARP_FIELD,
    case_config,
    config_of,
    exact_of,
)
from tnquench.assemble import budget_settings, build_quench, build_shorter, default_step, start_reach
from tnquench.model.chain import start_terms
from tnquench.model.spins import xxz_chain
from tnquench.observables.quench import simulate


@pytest.mark.parametrize("name", CASES)
def test_a_config_becomes_the_exact_quench(name: str) -> None:
    """Every observable at t = 0 and later, against dense matrices with profiles from their formulas."""
    case = CASES[name]
    record = simulate(build_quench(case_config(case), weight=1e-12, time_step=0.05))
    np.testing.assert_allclose(record.times, [0.0, 0.2, 0.4], atol=1e-12)
    exact = exact_of(case, np.array([0.0, 0.2, 0.4]))
    for observable in FOUR:
        np.testing.assert_allclose(
            record.fields[observable], exact[observable], rtol=0, atol=1e-6, err_msg=observable
        )
    np.testing.assert_allclose(
        record.operator_entanglement, exact["operator_entanglement"], rtol=0, atol=1e-6
    )
    np.testing.assert_allclose(record.totals["total_energy"], exact["total_energy"], rtol=0, atol=1e-6)
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
    expected = start_terms(chain, beta=beta, potentials={"charge_density": field})
    for found, term in zip(shorter.start_terms, expected, strict=True):
        assert found == pytest.approx(term)
    assert replace(shorter, chain=main.chain, start_terms=main.start_terms) == main


def test_a_chain_too_short_to_shorten_has_no_shorter_companion() -> None:
    config = config_of(beta=SHARP_BETA, sites=5)
    assert build_shorter(config, weight=1e-8, time_step=0.1) is None


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
