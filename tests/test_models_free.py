"""Long chains of every model against free fermions: the claimed error must cover the true one."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
import pytest

from tests.oracles import free_models
from tnquench.budget.assess import RunSettings, assess
from tnquench.budget.companions import coarser_steps, companion_quenches
from tnquench.conventions import ERROR_SOURCES, Reals, bond_positions, site_positions
from tnquench.model.catalogue import build_chain
from tnquench.model.chain import start_terms
from tnquench.model.profiles import step
from tnquench.observables.quench import PREPARATION_SHARE, QuantumRecord, Quench, simulate, start_of_quench


def main_run(
    model: str,
    *,
    sites: int,
    parameters: Mapping[str, float],
    beta: Reals,
    potentials: Mapping[str, Reals] | None = None,
    weight: float,
    every: float,
    samples: int,
    steps: int,
) -> Quench:
    """A quench of a model whose start is prepared as the program does by default."""
    chain, energy = build_chain(model, sites=sites, parameters=parameters)
    listed = {name: values.tolist() for name, values in (potentials or {}).items()}
    return Quench(
        chain=chain,
        start_terms=start_terms(chain, beta=beta.tolist(), potentials=listed, energy=energy),
        every=every,
        samples=samples,
        steps=steps,
        trotter_order=4,
        discarded_weight=weight,
        preparation_weight=PREPARATION_SHARE * weight,
        preparation_distance=0.03 * np.sqrt(weight),
    )


def judged(main: Quench) -> tuple[QuantumRecord, dict[str, Reals]]:
    """A run and its claimed errors without the influence of the ends, which the oracle's chain shares."""
    start = start_of_quench(main)
    runs = companion_quenches(main, shorter=None)
    records = {name: simulate(quench, start=start) for name, quench in runs.items()}
    record = simulate(main, start=start)
    sites = main.chain.sites
    budgets = assess(
        record,
        records,
        {},
        positions={"site": site_positions(sites), "bond": bond_positions(sites)},
        settings=RunSettings(
            step_ratio=main.steps / coarser_steps(main.steps), trotter_order=4, resolve_at=3.0
        ),
    )
    length = ERROR_SOURCES.index("length")
    return record, {
        name: np.asarray(budget.numerical - budget.error[length]) for name, budget in budgets.items()
    }


def assert_covered(main: Quench, exact: Mapping[str, Any]) -> None:
    """At least 95 % of all points of each observable; for the energy by at most ten times the truth."""
    record, claimed = judged(main)
    assert set(record.fields) | {"log_partition_function"} == set(exact)
    assert record.log_partition_function == pytest.approx(float(exact["log_partition_function"]), abs=1e-3)
    for name, values in record.fields.items():
        true = np.abs(values - exact[name])
        assert np.abs(exact[name]).max() > 1e-2, f"{name}: nothing happens"
        assert true.max() > 1e-8, f"{name}: nothing to cover"
        assert np.mean(true <= claimed[name]) >= 0.95, name
        if name.startswith("energy"):
            ratio = np.sqrt(np.mean(claimed[name] ** 2) / np.mean(true**2))
            assert ratio < 10.0, f"{name}: too wide to be useful"


@pytest.mark.parametrize("ratio", [0.5, 1.0, 2.0])
def test_ising_claims_cover_the_true_error(ratio: float) -> None:
    """L = 64 at g/J = 0.5, 1, 2: ordered, critical, disordered side of the ground state."""
    sites = 64
    beta = step(bond_positions(sites), left=0.2, right=0.8)
    main = main_run(
        "ising",
        sites=sites,
        parameters={"coupling": 1.0, "transverse_field": ratio},
        beta=beta,
        weight=1e-7,
        every=0.5,
        samples=2,
        steps=3,
    )
    times = [0.0, 0.5, 1.0]
    exact = free_models.ising_quench(sites=sites, transverse_field=ratio, beta=beta, times=times)
    assert_covered(main, exact)


def test_hubbard_claims_cover_the_true_error() -> None:
    """U = 0, L = 32, with steps of temperature, chemical potential and field."""
    sites = 32
    beta = step(bond_positions(sites), left=0.1, right=0.4)
    fields = {
        "charge_density": step(site_positions(sites), left=0.4, right=-0.2),
        "magnetisation": step(site_positions(sites), left=-0.6, right=0.3),
    }
    main = main_run(
        "hubbard",
        sites=sites,
        parameters={"hopping": 1.0, "repulsion": 0.0},
        beta=beta,
        potentials=fields,
        weight=1e-5,
        every=0.5,
        samples=2,
        steps=3,
    )
    exact = free_models.hubbard_quench(
        sites=sites,
        beta=beta,
        beta_mu=fields["charge_density"],
        beta_field=fields["magnetisation"],
        times=[0.0, 0.5, 1.0],
    )
    assert_covered(main, exact)


def test_fermion_claims_cover_the_true_error() -> None:
    """V = 0, L = 128, with steps of temperature and chemical potential."""
    sites = 128
    beta = step(bond_positions(sites), left=0.3, right=1.0)
    beta_mu = step(site_positions(sites), left=0.4, right=-0.4)
    main = main_run(
        "fermion",
        sites=sites,
        parameters={"hopping": 1.0, "repulsion": 0.0},
        beta=beta,
        potentials={"charge_density": beta_mu},
        weight=1e-7,
        every=1.0,
        samples=2,
        steps=3,
    )
    exact = free_models.fermion_quench(sites=sites, beta=beta, beta_mu=beta_mu, times=[0.0, 1.0, 2.0])
    assert_covered(main, exact)
