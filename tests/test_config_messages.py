"""One wrong setting gives one line, in exactly these words."""

from __future__ import annotations

import pytest

from tests.config_cases import INFINITE, NAN, changed, problems, toml, without
from tnquench.config.load import read_config
from tnquench.config.notation import shown

SINGLE = [
    ("evolution.time_step", -0.05, "[evolution] time_step = -0.05: must be positive (in units of 1/J)"),
    ("evolution.time_step", 0, "[evolution] time_step = 0: must be positive (in units of 1/J)"),
    ("evolution.time_step", "x", '[evolution] time_step = "x": must be a positive number (in units of 1/J)'),
    ("evolution.time_step", True,
     "[evolution] time_step = true: must be a positive number (in units of 1/J)"),
    ("evolution.time_step", 1e-9,
     "[evolution] time_step = 1e-9: gives more than 10000000 steps up to until = 1; make it longer"),
    ("evolution.until", INFINITE, "[evolution] until = inf: must be a finite number"),
    ("evolution.until", 10**400,
     "[evolution] until = (a number of about 401 digits): must be a finite number"),
    ("evolution.until", 1e7,
     "[evolution] until = 10000000.0: must be positive, at most 1e6 (in units of 1/J)"),
    ("evolution.until", 0.7,
     "[evolution] until = 0.7: must be a whole multiple of every = 0.5; nearest: 0.5 or 1"),
    ("evolution.until", 0.2,
     "[evolution] until = 0.2: must be a whole multiple of every = 0.5; nearest: 0.5"),
    ("evolution.every", 1e-6,
     "[evolution] every = 1e-6: gives more than 100000 measurements up to until = 1; make it longer"),
    ("evolution.discarded_weight", 0.5, "[evolution] discarded_weight = 0.5: must be from 1e-16 to 0.001"),
    ("evolution.accuracy", 1e-4, "[evolution] discarded_weight and accuracy: both given; keep one of them"),
    ("evolution.trotter_order", 3, "[evolution] trotter_order = 3: must be 2 or 4"),
    ("evolution.trotter_order", "4", '[evolution] trotter_order = "4": must be 2 or 4'),
    ("evolution.bond_ceiling", 0, "[evolution] bond_ceiling = 0: must be from 1 to 1e6"),
    ("evolution.bond_ceiling", 10.5, "[evolution] bond_ceiling = 10.5: must be a whole number from 1 to 1e6"),
    ("evolution.cut", "Gram",
     '[evolution] cut = "Gram": must be "subspace", "svd" or "gram"; did you mean "gram"?'),
    ("evolution.bond_cieling", 10, '[evolution] bond_cieling: no such setting; did you mean "bond_ceiling"?'),
    ("evolution.dt", 0.1, '[evolution] dt: no such setting; did you mean "time_step"?'),
    ("evolution.xyzzy", 1,
     "[evolution] xyzzy: no such setting; allowed: until, every, discarded_weight, accuracy, "
     "time_step, trotter_order, bond_ceiling, cut"),
    ("chain.sites", 1, "[chain] sites = 1: must be from 2 to 100000 (a bond joins two sites)"),
    ("chain.sites", 4.0,
     "[chain] sites = 4.0: must be a whole number from 2 to 100000 (a bond joins two sites)"),
    ("chain.coupling", -1.0, "[chain] coupling = -1.0: must be from 1e-6 to 1e6"),
    ("chain.anisotropy", NAN, "[chain] anisotropy = nan: must be a finite number"),
    ("chain.model", "xyz",
     '[chain] model = "xyz": must be "xxz", "ising", "fermion" or "hubbard"; did you mean "xxz"?'),
    ("chain.time_step", 0.1, "[chain] time_step: belongs to [evolution]"),
    ("chain.dt", 0.1, '[chain] dt: no such setting; did you mean "time_step" of [evolution]?'),
    ("chain.time_stpe", 0.1, '[chain] time_stpe: no such setting; did you mean "time_step" of [evolution]?'),
    ("chain.Delta", 1, '[chain] Delta: no such setting; did you mean "anisotropy"?'),
    ("chain.L", 8, '[chain] L: no such setting; did you mean "sites"?'),
    ("chain.hopping", 1,
     '[chain] hopping: belongs to models "fermion" and "hubbard"; model "xxz" takes coupling and anisotropy'),
    ("chain.U", 1, '[chain] U: no such setting; did you mean "repulsion"?'),
    ("chain.strength", 1, "[chain] strength: belongs to [[chain.extra]]"),
    ("start.joint", "seperate",
     '[start] joint = "seperate": must be "coupled" or "separate"; did you mean "separate"?'),
    ("start.left", 1.0, "[start] left: belongs to [start.beta], [start.beta_field] or [start.beta_mu]"),
    ("start.beta_mu", {"shape": "uniform", "value": 0.1},
     '[start.beta_mu]: belongs to models "fermion" and "hubbard"; model "xxz" takes [start.beta] and '
     '[start.beta_field]'),
    ("start.beta", 0.5,
     '[start] beta = 0.5: must be one section, headed [start.beta]; for one value everywhere it sets '
     'shape = "uniform" and value'),
    ("start.beta", {"left": 1.0},
     '[start.beta] shape: missing; must be "step", "bump", "wave", "uniform" or "table"'),
    ("start.beta.shape", "stpe",
     '[start.beta] shape = "stpe": must be "step", "bump", "wave", "uniform" or "table"; did you '
     'mean "step"?'),
    ("start.beta.left", "0.5",
     '[start.beta] left = "0.5": must be a number from -1000 to 1000 (in units of 1/J)'),
    ("start.beta.left", NAN, "[start.beta] left = nan: must be a finite number"),
    ("start.beta.left", 1e5, "[start.beta] left = 100000.0: must be from -1000 to 1000 (in units of 1/J)"),
    ("start.beta.width", -1,
     "[start.beta] width = -1: must be from 0 to 1e6 (in units of the lattice spacing)"),
    ("start.beta.width", 1e-4,
     "[start.beta] width = 0.0001: must be 0 (sharp) or from 0.001 on (in units of the lattice "
     "spacing)"),
    ("start.beta.height", 1,
     '[start.beta] height: belongs to shape "bump" or "wave"; shape "step" takes left, right and '
     'width'),
    ("start.beta.widht", 1, '[start.beta] widht: no such setting; did you mean "width"?'),
    ("start.beta_field", {"shape": "uniform", "value": "up"},
     '[start.beta_field] value = "up": must be a number from -1000 to 1000'),
    ("start.beta_field", {"shape": "uniform"},
     "[start.beta_field] value: missing; must be a number from -1000 to 1000"),
    ("hydrodynamics.levels", ["diffusive"],
     '[hydrodynamics] levels[0] = "diffusive": not available in this version; available: "euler"'),
    ("hydrodynamics.levels", "euler",
     '[hydrodynamics] levels = "euler": must be a list, empty or of "euler"'),
    ("hydrodynamics.levels", ["euler", "euler"],
     '[hydrodynamics] levels holds "euler" more than once; name each level once'),
    ("budget.companions", "all",
     '[budget] companions = "all": must be "full" or "none"'),
    ("budget.resolve_at", 0, "[budget] resolve_at = 0: must be positive, at most 1e6"),
    ("budgt", {}, "[budgt]: no such section; did you mean [budget]?"),
    ("sites", 4, "sites: belongs to [chain]"),
    ("beta", {"shape": "uniform"}, "[beta]: belongs to [start]"),
    ("titel", "x", 'titel: no such setting; did you mean "title"?'),
    ("title", 3, "title = 3: must be text in quotes on one line, at most 200 characters"),
    ("title", "two\nlines",
     'title = "two\\nlines": must be text in quotes on one line, at most 200 characters'),
    ("chain", 3, "chain = 3: must be one section, headed [chain]"),
]  # fmt: skip


@pytest.mark.parametrize(
    ("path", "value", "line"), SINGLE, ids=[f"{path}-{shown(value)}" for path, value, _ in SINGLE]
)
def test_one_wrong_setting_gives_one_exact_line(path, value, line):
    assert problems(changed(path, value)) == [line]


@pytest.mark.parametrize(
    ("path", "lines"),
    [
        (
            "chain",
            [
                "[chain]: section missing; it must set sites",
                "[chain] anisotropy: missing; must be a number from -1000 to 1000",
            ],
        ),
        ("start", ["[start]: section missing; it must set [start.beta]"]),
        ("start.beta", ["[start.beta]: section missing; it must set shape and the values of that shape"]),
        (
            "evolution",
            [
                "[evolution]: section missing; it must set until and every",
                "[evolution] discarded_weight: missing; give it, or accuracy in its place",
            ],
        ),
        (
            "evolution.discarded_weight",
            ["[evolution] discarded_weight: missing; give it, or accuracy in its place"],
        ),
        (
            "evolution.until",
            ["[evolution] until: missing; must be a positive number, at most 1e6 (in units of 1/J)"],
        ),
        (
            "start.beta.right",
            ["[start.beta] right: missing; must be a number from -1000 to 1000 (in units of 1/J)"],
        ),
    ],
)
def test_what_is_missing_is_named(path, lines):
    assert problems(without(path)) == lines


def test_gram_cuts_refuse_weights_below_their_rounding():
    tables = changed("evolution.cut", "gram")
    tables["evolution"]["discarded_weight"] = 1e-14
    line = '[evolution] cut = "gram": sound for weights from 1e-13 on, not 1e-14; use "subspace" or "svd"'
    assert problems(tables) == [line]


def test_separate_halves_need_a_step_and_a_bond_in_the_middle():
    tables = changed("start.joint", "separate")
    assert read_config(toml(tables), subject="a.toml").start.joint == "separate"
    tables["chain"]["sites"] = 5
    tables["start"]["beta"] = {"shape": "wave", "base": 1.0, "height": 0.1, "length": 4.0}
    assert problems(tables) == [
        '[start] joint = "separate": needs a profile of shape "step" (and none but "step" or "uniform"), '
        'found "wave"; use "coupled"',
        '[start] joint = "separate": needs an even number of sites, so that a bond lies at x = 0, '
        "found sites = 5",
    ]


def test_separate_halves_may_differ_in_field_alone():
    tables = changed("start.joint", "separate")
    tables["start"]["beta"] = {"shape": "uniform", "value": 1.0}
    assert problems(tables)[0].endswith('found "uniform"; use "coupled"')
    tables["start"]["beta_field"] = {"shape": "step", "left": 1.0, "right": -1.0}
    assert read_config(toml(tables), subject="a.toml").start.joint == "separate"
