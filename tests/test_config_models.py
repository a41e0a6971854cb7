"""What each model takes in [chain] and [start]: defaults, strangers, steps; one clear line each."""

from __future__ import annotations

from typing import Any

import pytest

from tests.config_cases import MINIMAL, problems, toml
from tnquench.config.energies import bond_energy
from tnquench.config.load import read_config
from tnquench.config.models import MODELS, parameter_values

UNIFORM = {"shape": "uniform", "value": 0.3}


def with_chain(start: dict[str, Any] | None = None, **chain: Any) -> dict[str, Any]:
    """The minimal config with another chain, and more profiles in its start."""
    return {**MINIMAL, "chain": chain, "start": {**MINIMAL["start"], **(start or {})}}


@pytest.mark.parametrize(
    ("chain", "parameters"),
    [
        ({"anisotropy": -0.5}, {"coupling": 1.0, "anisotropy": -0.5}),
        ({"model": "ising", "transverse_field": 1}, {"coupling": 1.0, "transverse_field": 1.0}),
        ({"model": "fermion", "repulsion": 2.0}, {"hopping": 1.0, "repulsion": 2.0}),
        ({"model": "hubbard", "repulsion": 4.0, "hopping": 0.5}, {"hopping": 0.5, "repulsion": 4.0}),
    ],
)
def test_parameters_of_each_model_with_their_defaults(chain, parameters):
    config = read_config(toml(with_chain(sites=5, **chain)), subject="a.toml")
    assert config.chain.parameters == parameters
    others = {"coupling", "anisotropy", "transverse_field", "hopping", "repulsion"} - set(parameters)
    assert all(getattr(config.chain, name) is None for name in others)


@pytest.mark.parametrize(
    ("chain", "lines"),
    [
        (
            {"model": "ising", "transverse_field": 1.0, "anisotropy": 0.5},
            ['[chain] anisotropy: belongs to model "xxz"; model "ising" takes coupling and transverse_field'],
        ),
        (
            {"model": "hubbard", "coupling": 1.0},
            [
                '[chain] coupling: belongs to models "xxz" and "ising"; model "hubbard" takes hopping and '
                "repulsion",
                "[chain] repulsion: missing; must be a number from -1e6 to 1e6",
            ],
        ),
        ({"model": "ising"}, ["[chain] transverse_field: missing; must be a number from -1e6 to 1e6"]),
        ({"model": "fermion", "repulsion": "V"},
         ['[chain] repulsion = "V": must be a number from -1e6 to 1e6']),
        ({"model": "fermion", "repulsion": 1.0, "hopping": 0},
         ["[chain] hopping = 0: must be from 1e-6 to 1e6"]),
        ({"model": "fermion", "repulsion": 1.0, "mu": 1.0},
         ["[chain] mu: no such setting; allowed: model, sites, coupling, anisotropy, transverse_field, "
          "hopping, repulsion, extra"]),
    ],
)  # fmt: skip
def test_settings_of_other_models_are_told_from_missing_ones(chain, lines):
    assert problems(with_chain(sites=4, **chain)) == lines


@pytest.mark.parametrize(
    ("chain", "profile", "line"),
    [
        ({"anisotropy": 1.0}, "beta_mu",
         '[start.beta_mu]: belongs to models "fermion" and "hubbard"; model "xxz" takes [start.beta] and '
         "[start.beta_field]"),
        ({"model": "fermion", "repulsion": 1.0}, "beta_field",
         '[start.beta_field]: belongs to models "xxz" and "hubbard"; model "fermion" takes [start.beta] and '
         "[start.beta_mu]"),
        ({"model": "ising", "transverse_field": 1.0}, "beta_field",
         '[start.beta_field]: belongs to models "xxz" and "hubbard"; model "ising" takes [start.beta] alone'),
    ],
)  # fmt: skip
def test_profiles_of_other_models(chain, profile, line):
    assert problems(with_chain(start={profile: UNIFORM}, sites=4, **chain)) == [line]


def test_hubbard_takes_both_profiles():
    start = {"beta_mu": UNIFORM, "beta_field": {"shape": "table", "values": [1.0, 0.0, 0.0, -1.0]}}
    config = read_config(toml(with_chain(start, model="hubbard", sites=4, repulsion=4.0)), subject="a")
    assert config.start.beta_mu is not None
    assert config.start.beta_field is not None
    start["beta_mu"] = {"shape": "table", "values": [1.0]}
    assert problems(with_chain(start, model="hubbard", sites=4, repulsion=4.0)) == [
        "[start.beta_mu] table of 1 values: must have 4 (sites, one a site)"
    ]


def test_separate_halves_may_differ_in_chemical_potential_alone():
    start = {"joint": "separate", "beta": UNIFORM}
    chain = {"model": "fermion", "sites": 4, "repulsion": 0.0}
    assert problems(with_chain(start, **chain))[0].endswith('found "uniform"; use "coupled"')
    start["beta_mu"] = {"shape": "step", "left": 1.0, "right": -1.0}
    assert read_config(toml(with_chain(start, **chain)), subject="a").start.joint == "separate"


ENERGIES = [
    ({"model": "xxz", "anisotropy": -3.0, "coupling": 2.0}, [], 6.0),
    ({"model": "ising", "transverse_field": -0.5}, [], 2.0),
    ({"model": "ising", "transverse_field": 2.0}, [], 4.0),
    ({"model": "fermion", "repulsion": 1.0, "hopping": 1.5}, [], 3.0),
    ({"model": "fermion", "repulsion": -5.0}, [], 5.0),
    ({"model": "hubbard", "repulsion": -8.0}, [], 4.0),
    ({"anisotropy": 0.5}, [{"kind": "staggered_field", "strength": 0.2}], 1.0),
    ({"anisotropy": 0.5}, [{"kind": "staggered_field", "strength": 4.0}], 6.0),
    ({"anisotropy": 0.5}, [{"kind": "uniform_field", "strength": -6.0}], 3.0),
    ({"anisotropy": 0.5}, [{"kind": "next_nearest", "strength": -0.5}], 1.5),
    ({"anisotropy": -2.0}, [{"kind": "next_nearest", "strength": 0.5}], 3.0),
    ({"anisotropy": -2.0}, [{"kind": "next_nearest", "strength": 0.5, "anisotropy": 0.0}], 2.5),
    ({"anisotropy": 0.5}, [{"kind": "bond_alternation", "strength": -0.3}], 1.3),
    # sites at -1.5, -0.5, 0.5, 1.5: V = 9, 1, 1, 9 and the bonds hold 9 | 0.5, 0.5 | 0.5, 0.5 | 9
    ({"anisotropy": 0.5}, [{"kind": "potential", "shape": "harmonic", "strength": 8.0}], 8.5),
    ({"anisotropy": 0.5}, [{"kind": "potential", "shape": "box", "strength": 4.0, "width": 2.0}], 4.0),
    ({"anisotropy": 0.5}, [{"kind": "potential", "shape": "table", "values": [0, 8, 0, 0]}], 4.0),
    ({"model": "ising", "transverse_field": 1.0}, [{"kind": "uniform_field", "strength": 1.0}], 4.0),
    ({"model": "ising", "transverse_field": 1.0}, [{"kind": "longitudinal_field", "strength": 3.0}], 6.0),
]  # fmt: skip


@pytest.mark.parametrize(("chain", "extra", "energy"), ENERGIES)
def test_default_step_shrinks_with_the_energy_of_a_bond(chain, extra, energy):
    tables = with_chain(sites=4, extra=extra, **chain)
    config = read_config(toml(tables), subject="a.toml")
    assert bond_energy(config.chain.model_dump()) == pytest.approx(energy)
    assert config.evolution.time_step == pytest.approx(0.2 / energy)
    tables["evolution"] = {**MINIMAL["evolution"], "time_step": 1.01 / energy, "until": 2.0, "every": 2.0}
    lines = problems(tables)
    assert len(lines) == 1
    assert "where step times" in lines[0]
    assert lines[0].endswith("is 1; beyond it no error estimate holds")


def test_the_limit_of_the_step_is_said_in_the_words_of_the_model():
    tables = with_chain(sites=4, model="ising", transverse_field=2.0)
    tables["evolution"] = {**MINIMAL["evolution"], "time_step": 0.5}
    assert problems(tables) == [
        "[evolution] time_step = 0.5: must be at most 0.25, where step times 2 max(J, |g|) is 1; beyond it "
        "no error estimate holds"
    ]
    tables["chain"] = {"model": "hubbard", "sites": 4, "repulsion": 4.0, "extra": [
        {"kind": "site_disorder", "strength": 4.0}]}  # fmt: skip
    assert problems(tables) == [
        "[evolution] time_step = 0.5: must be at most 0.1666666667, where step times the bond energy, "
        "2 t_h + |U|/4 and what extra terms add, is 1; beyond it no error estimate holds"
    ]


def test_energies_of_unfinished_chains_are_unknown():
    for chain in ({}, {"model": "xxz", "sites": 4, "extra": ()}, {"model": "x", "sites": 4, "extra": ()}):
        assert bond_energy(chain) is None


def test_defaults_stand_in_for_what_is_not_given():
    assert parameter_values("xxz", {"anisotropy": 2.0}) == {"coupling": 1.0, "anisotropy": 2.0}
    assert set(MODELS) == {"xxz", "ising", "fermion", "hubbard"}
