"""The section [stretch]: what it accepts, what it refuses, and what a stretched config is."""

from __future__ import annotations

import numpy as np
import pytest

from tests.command_line import call
from tnquench.config.document import effective_toml
from tnquench.config.load import read_config
from tnquench.conventions import bond_positions, site_positions
from tnquench.errors import InputError
from tnquench.run import run
from tnquench.start_of import extra_terms, start_profiles
from tnquench.stretch_of import other_factors, stretched_config
from tnquench.terminal.cost import with_study

HEAD = """
title = "A hot spot"
[chain]
model = "xxz"
sites = {sites}
anisotropy = 0.5
{extra}
[start.beta]
{beta}
[start.beta_field]
{field}
[evolution]
until = 2.0
every = 0.5
discarded_weight = 1e-8
{rest}
[stretch]
factors = {factors}
"""

BUMP = 'shape = "bump"\nbase = 1.0\nheight = -0.5\nwidth = 2.0'
WAVE = 'shape = "wave"\nbase = 0.0\nheight = 0.2\nlength = 12.0'


def text(*, sites=24, beta=BUMP, field=WAVE, extra="", rest="", factors="[1, 2, 4]"):
    return HEAD.format(sites=sites, beta=beta, field=field, extra=extra, rest=rest, factors=factors)


def config(**parts):
    return read_config(text(**parts), subject="a.toml")


def problems(**parts):
    with pytest.raises(InputError) as refusal:
        config(**parts)
    assert refusal.value.exit_code == 2
    return refusal.value.problems


@pytest.mark.parametrize("factor", [0.5, 1.0, 1.5, 2.0, 3.0])
@pytest.mark.parametrize("sites", [24, 25])
def test_profiles_take_the_same_values_at_equal_rescaled_points(factor, sites):
    step = 'shape = "step"\nleft = 0.5\nright = 2.0\nwidth = 1.5'
    for beta, field in ((BUMP, WAVE), (step, 'shape = "uniform"\nvalue = 0.3')):
        base = config(sites=sites, beta=beta, field=field)
        stretched = stretched_config(base, factor)
        there = stretched.chain.sites
        assert there % 2 == sites % 2, "what lies at x = 0 stays there"
        assert abs(there - factor * sites) <= 1
        beta_there, fields_there = start_profiles(stretched, sites=there)
        for places, values, name in (
            (bond_positions(there), beta_there, "beta"),
            (site_positions(there), fields_there["charge_density"], "beta_field"),
        ):
            profile = getattr(base.start, name)
            expected = formula(profile, places / factor)
            np.testing.assert_allclose(values, expected, rtol=1e-13, atol=1e-15)
        assert stretched.evolution.until == pytest.approx(2.0 * factor)
        assert stretched.evolution.every == pytest.approx(0.5 * factor)
        assert stretched.evolution.intervals == base.evolution.intervals
        assert stretched.evolution.time_step == base.evolution.time_step
        assert other_factors(stretched) == (), "a stretched run has no study of its own"


def formula(profile, x):
    """The profile's formula as the reference page states it."""
    if profile.shape == "bump":
        return profile.base + profile.height * np.exp(-((x / profile.width) ** 2) / 2)
    if profile.shape == "wave":
        return profile.base + profile.height * np.cos(2 * np.pi * x / profile.length)
    if profile.shape == "step":
        return profile.left + (profile.right - profile.left) * (1 + np.tanh(x / profile.width)) / 2
    return np.full(x.shape, profile.value)


def test_a_sharp_step_stays_sharp():
    base = config(beta='shape = "step"\nleft = 0.5\nright = 2.0', field='shape = "uniform"\nvalue = 0.0')
    assert stretched_config(base, 4.0).start == base.start


def test_potentials_keep_their_values_at_equal_rescaled_points():
    kinds = [
        ("harmonic", "strength = 0.04"),
        ("linear", "strength = 0.1"),
        ("box", "strength = 2.0\nwidth = 9.0"),
    ]
    rows = [f'[[chain.extra]]\nkind = "potential"\nshape = "{shape}"\n{more}' for shape, more in kinds]
    rows.append('[[chain.extra]]\nkind = "staggered_field"\nstrength = 0.2')
    base = config(extra="\n".join(rows))
    harmonic, linear, box, field = extra_terms(stretched_config(base, 2.0))
    assert harmonic.strength * 6.0**2 == pytest.approx(0.04 * 3.0**2)
    assert linear.strength * 6.0 == pytest.approx(0.1 * 3.0)
    assert (box.strength, box.width) == (2.0, 18.0)
    assert field.strength == 0.2, "what acts on every site alike is no profile"


def test_a_stretched_config_loads_from_its_own_text():
    for factor in (0.5, 2.0, 4.0):
        stretched = stretched_config(config(), factor)
        assert read_config(effective_toml(stretched), subject="again") == stretched
    assert "[stretch]" not in effective_toml(stretched_config(config(), 2.0))
    assert "factors = [1.0, 2.0, 4.0]" in effective_toml(config())


@pytest.mark.parametrize(
    ("parts", "said"),
    [
        ({"factors": "[2, 4]"}, "must hold 1"),
        ({"factors": "[]"}, "must hold 1"),
        ({"factors": "[1]"}, "two factors at least"),
        ({"factors": "[1, 2, 2]"}, "more than once"),
        ({"factors": "[1, 0]"}, "from 0.1 to 100"),
        ({"factors": '[1, "two"]'}, "number"),
        ({"sites": 2000, "factors": "[1, 60]"}, "120000; 2 to 100000 are allowed"),
        ({"rest": '[budget]\ncompanions = "none"'}, 'companions = "full"'),
        ({"rest": "[hydrodynamics]\nlevels = []"}, "needs a prediction"),
        ({"sites": 3, "beta": 'shape = "table"\nvalues = [1.0, 1.0]'}, "a table cannot be stretched"),
        (
            {"extra": '[[chain.extra]]\nkind = "site_disorder"\nstrength = 0.5'},
            "random numbers cannot be stretched",
        ),
        (
            {"beta": BUMP.replace("2.0", "0.005"), "factors": "[0.1, 1]"},
            "[start.beta] width = 0.005 becomes 0.0005",
        ),
    ],
)
def test_refusals_say_what_and_why(parts, said):
    found = problems(**parts)
    assert any(said in line for line in found), found
    assert all("\n" not in line for line in found)


def test_a_study_without_a_prediction_is_refused_before_anything_runs(tmp_path):
    file = tmp_path / "hubbard.toml"
    hubbard = text(field='shape = "uniform"\nvalue = 0.0')
    file.write_text(hubbard.replace('"xxz"', '"hubbard"').replace("anisotropy = 0.5", "repulsion = 4.0"))
    with pytest.raises(InputError, match="needs a prediction"):
        run(file, into=tmp_path / "out")


def test_unknown_keys_have_a_near_match(tmp_path):
    file = tmp_path / "a.toml"
    file.write_text(text().replace("factors", "factor"))
    answer = call("check", file)
    assert answer.code == 2
    assert 'did you mean "factors"' in answer.err


def test_forecast_adds_all_factors():
    one = {
        "wall_seconds": 2.0, "disk_bytes": 10, "pilot_seconds": 1.0, "memory_bytes": 5,
        "total_memory_bytes": 7, "main_seconds": 1.5,
    }  # fmt: skip
    two = {name: 3 * value for name, value in one.items()}
    whole = with_study(one, {2.0: two})
    assert (whole["wall_seconds"], whole["disk_bytes"], whole["pilot_seconds"]) == (8.0, 40, 4.0)
    assert (whole["memory_bytes"], whole["total_memory_bytes"]) == (15, 21), "one run after the other"
    assert whole["main_seconds"] == 1.5
    assert whole["stretched"] == [{"factor": 2.0} | two]
    assert with_study(one, {}) == one
