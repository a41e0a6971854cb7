"""From the text of a config to the chain of every model, with its extra terms and its start."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
import pytest

from tests.oracles import exact_models
from tests.oracles.exact_models import ExactChain
from tests.oracles.exact_quench import exact_quench
from tnquench.assemble import build_quench, build_shorter
from tnquench.config.extras import KIND_MODELS, KINDS
from tnquench.config.load import read_config
from tnquench.config.models import MODELS as CONFIG_MODELS
from tnquench.config.models import parameter_values
from tnquench.config.notation import written
from tnquench.config.schema import Config
from tnquench.model.catalogue import MODELS
from tnquench.model.pauli import add
from tnquench.observables.quench import Quench, simulate
from tnquench.start_of import extra_terms

#: Tables without any symmetry, cut to the length of a chain.
BETA = (0.3, 0.9, 0.5, 1.1, 0.7, 0.2, 0.6)
FIRST, SECOND = (0.4, -0.2, 0.7, 0.1, -0.5, 0.3, 0.9, -0.1), (-0.3, 0.5, 0.2, -0.6, 0.1, 0.8, -0.4, 0.2)
VALUES = np.array([0.2, -0.5, 0.9, 0.4, -0.1, 0.6])

EVOLUTION = {"until": 0.4, "every": 0.2, "discarded_weight": 1e-12, "time_step": 0.04}

PARAMETERS = {
    "xxz": {"coupling": 1.3, "anisotropy": -0.6},
    "ising": {"coupling": 0.8, "transverse_field": 0.7},
    "fermion": {"hopping": 0.7, "repulsion": 0.9},
    "hubbard": {"hopping": 0.8, "repulsion": 1.7},
}


def config_of(
    model: str, *, sites: int, extra: Any = (), potentials: Mapping[str, Any] | None = None
) -> Config:
    """A config with tables in its start; `potentials` : profile -> values, one a site."""
    start = {"beta": {"shape": "table", "values": list(BETA[: sites - 1])}}
    for name, values in (potentials or {}).items():
        start[name] = {"shape": "table", "values": list(values)}
    chain = {"model": model, "sites": sites, **PARAMETERS[model], "extra": list(extra)}
    tables = {"chain": chain, "start": start, "evolution": EVOLUTION}
    text = "".join(f"{key} = {written(table)}\n" for key, table in tables.items())
    return read_config(text, subject="test")


def quench_of(config: Config) -> Quench:
    return build_quench(config, weight=1e-12, time_step=0.04)


def assert_exact(config: Config, chain: ExactChain, start: ExactChain, potentials: dict[str, Any]) -> None:
    """Every observable at t = 0 and later agrees with dense matrices."""
    record = simulate(quench_of(config))
    exact = exact_quench(
        chain, start=start, beta=BETA[: chain.sites - 1], potentials=potentials, times=[0.0, 0.2, 0.4]
    )
    assert set(record.fields) == set(chain.observables())
    for name, field in record.fields.items():
        np.testing.assert_allclose(field, exact[name], rtol=0, atol=1e-6, err_msg=name)
    assert record.log_partition_function == pytest.approx(float(exact["log_partition_function"]), abs=1e-6)


STAGGER = np.array([1.0, -1.0, 1.0, -1.0, 1.0, -1.0])
X = np.arange(6) - 2.5


def test_xxz_with_fields_potentials_and_farther_exchange() -> None:
    config = config_of(
        "xxz",
        sites=6,
        potentials={"beta_field": FIRST[:6]},
        extra=[
            {"kind": "staggered_field", "strength": 0.3, "in_start": False},
            {"kind": "uniform_field", "strength": 0.2},
            {"kind": "potential", "shape": "table", "values": VALUES.tolist()},
            {"kind": "potential", "shape": "box", "strength": 0.7, "width": 3.5, "in_start": False},
            {"kind": "next_nearest", "strength": 0.25},
            {"kind": "next_nearest", "strength": 0.4, "anisotropy": 1.1, "in_start": False},
        ],
    )
    box = np.where(np.abs(X) > 1.75, 0.7, 0.0)
    start = exact_models.xxz(sites=6, **PARAMETERS["xxz"], potential=VALUES - 0.2, second=(0.25, -0.6))
    later = exact_models.xxz(
        sites=6,
        **PARAMETERS["xxz"],
        potential=VALUES - 0.2 - 0.3 * STAGGER + box,
        second=(0.65, (0.25 * -0.6 + 0.4 * 1.1) / 0.65),
    )
    assert_exact(config, later, start, {"charge_density": FIRST[:6]})


def test_ising_with_fields_along_both_axes() -> None:
    config = config_of(
        "ising",
        sites=6,
        extra=[
            {"kind": "longitudinal_field", "strength": 0.4},
            {"kind": "staggered_field", "strength": 0.3, "in_start": False},
            {"kind": "potential", "shape": "linear", "strength": 0.1},
            {"kind": "bond_alternation", "strength": 0.2, "in_start": False},
            {"kind": "next_nearest", "strength": 0.15},
        ],
    )
    common: dict[str, Any] = {**PARAMETERS["ising"], "longitudinal_field": 0.4, "second": 0.15}
    start = exact_models.ising(sites=6, **common, potential=0.1 * X)
    later = exact_models.ising(
        sites=6, **common, potential=0.1 * X - 0.3 * STAGGER, factors=1.0 + 0.2 * STAGGER[:5]
    )
    assert_exact(config, later, start, {})


def test_fermions_in_a_trap() -> None:
    config = config_of(
        "fermion",
        sites=6,
        potentials={"beta_mu": FIRST[:6]},
        extra=[
            {"kind": "potential", "shape": "harmonic", "strength": 0.3},
            {"kind": "uniform_field", "strength": 0.5, "in_start": False},
            {"kind": "bond_alternation", "strength": -0.3},
            {"kind": "next_nearest", "strength": 0.35, "in_start": False},
        ],
    )
    common: dict[str, Any] = {**PARAMETERS["fermion"], "factors": 1.0 - 0.3 * STAGGER[:5]}
    start = exact_models.fermion(sites=6, **common, potential=0.15 * X**2)
    later = exact_models.fermion(sites=6, **common, potential=0.15 * X**2 - 0.5, second=0.35)
    assert_exact(config, later, start, {"charge_density": FIRST[:6]})


def test_hubbard_with_both_profiles() -> None:
    config = config_of(
        "hubbard",
        sites=4,
        potentials={"beta_mu": FIRST[:4], "beta_field": SECOND[:4]},
        extra=[
            {"kind": "potential", "shape": "linear", "strength": 0.2},
            {"kind": "staggered_field", "strength": 0.4, "in_start": False},
            {"kind": "bond_alternation", "strength": 0.3},
        ],
    )
    common: dict[str, Any] = {
        **PARAMETERS["hubbard"],
        "factors": 1.0 + 0.3 * STAGGER[:3],
        "potential": 0.2 * (np.arange(4) - 1.5),
    }
    start = exact_models.hubbard(sites=4, **common)
    later = exact_models.hubbard(sites=4, **common, magnetic_field=0.4 * STAGGER[:4])
    assert_exact(config, later, start, {"charge_density": FIRST[:4], "magnetisation": SECOND[:4]})


def test_config_and_model_agree_on_what_each_model_takes() -> None:
    assert set(CONFIG_MODELS) == set(MODELS)
    for name, entry in MODELS.items():
        assert tuple(CONFIG_MODELS[name].parameters) == entry.parameters
        assert CONFIG_MODELS[name].profiles == tuple(entry.profiles)
        for kind in KINDS:
            assert (name in KIND_MODELS.get(kind, tuple(MODELS))) == entry.has_extra(kind), (name, kind)


@pytest.mark.parametrize("model", MODELS)
@pytest.mark.parametrize("sites", [2, 3, 5])
def test_any_number_of_sites_makes_a_chain(model: str, sites: int) -> None:
    quench = quench_of(config_of(model, sites=sites))
    assert quench.chain.sites == sites
    assert len(quench.start_terms) == sites - 1
    defaults = {key: value for key, value in CONFIG_MODELS[model].parameters.items() if value is not None}
    assert parameter_values(model, PARAMETERS[model]) == {**defaults, **PARAMETERS[model]}


@pytest.mark.parametrize("kind", ["bond_disorder", "site_disorder"])
def test_a_seed_reproduces_disorder(kind: str) -> None:
    def terms(seed: int) -> Any:
        extra = {"kind": kind, "strength": 0.5, "seed": seed}
        return quench_of(config_of("xxz", sites=8, extra=[extra])).chain.bond_terms

    assert terms(3) == terms(3)
    assert terms(3) != terms(4)


def sum_of_site_terms(quench: Quench, qubit: int) -> complex:
    """The whole of sigma^z on one qubit in H."""
    return add(*quench.chain.bond_terms).get(((qubit, 3),), 0.0)


@pytest.mark.parametrize("model", ["xxz", "hubbard"])
def test_a_shorter_companion_keeps_signs_disorder_and_tables(model: str) -> None:
    """Eight sites become six: whatever a site or bond of the middle had it still has."""
    extra = [
        {"kind": "staggered_field", "strength": 0.3},
        {"kind": "site_disorder", "strength": 0.7, "seed": 5},
        {"kind": "potential", "shape": "table", "values": list(SECOND)},
        {"kind": "potential", "shape": "harmonic", "strength": 0.2},
        {"kind": "bond_disorder", "strength": 0.4, "seed": 5},
        {"kind": "bond_alternation", "strength": 0.2},
    ]
    config = config_of(model, sites=8, extra=extra)
    main, shorter = quench_of(config), build_shorter(config, weight=1e-12, time_step=0.04)
    assert shorter is not None
    assert shorter.chain.sites == 6
    qubits = main.chain.qubits_per_site
    for qubit in range(6 * qubits):
        found, expected = (sum_of_site_terms(shorter, qubit), sum_of_site_terms(main, qubit + qubits))
        assert found == pytest.approx(expected, rel=1e-12)
    for bond in range(5):
        for term, coefficient in shorter.chain.bond_terms[bond].items():
            if len({qubit // qubits for qubit, _ in term}) > 1:
                moved = tuple((qubit + qubits, letter) for qubit, letter in term)
                assert main.chain.bond_terms[bond + 1][moved] == pytest.approx(coefficient, rel=1e-12)
    middle = {
        tuple((qubit + qubits, letter) for qubit, letter in term): value
        for term, value in shorter.start_terms[2].items()
    }
    assert middle == pytest.approx(dict(main.start_terms[3]))


def test_extras_reach_the_model_as_they_are_written() -> None:
    config = config_of(
        "xxz",
        sites=4,
        extra=[
            {"kind": "next_nearest", "strength": 0.5},
            {"kind": "potential", "shape": "box", "strength": 1.0, "width": 2.0, "in_start": False},
        ],
    )
    exchange, box = extra_terms(config)
    assert (exchange.kind, exchange.strength, exchange.anisotropy, exchange.in_start) == (
        "next_nearest", 0.5, None, True)  # fmt: skip
    assert (box.shape, box.strength, box.width, box.in_start) == ("box", 1.0, 2.0, False)
