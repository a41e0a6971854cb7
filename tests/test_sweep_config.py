"""The section [sweep]: the points it makes, their names, and one clear line for everything that is wrong."""

from __future__ import annotations

import re
import tomllib
from pathlib import Path
from typing import Any

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from tests.config_cases import CONFIGS, MINIMAL, NAN, toml
from tests.test_config_anything import anything
from tnquench.config.document import effective_toml
from tnquench.config.load import load_config, read_config
from tnquench.config.points import LoadedSweep, load_sweep
from tnquench.config.sweep import MOST_POINTS, Sweep, refuse_sweep, sweep_points
from tnquench.errors import InputError


def loaded(folder: Path, sweep: Any, **sections: Any) -> LoadedSweep:
    file = folder / "a.toml"
    text = (
        toml({**MINIMAL, **sections, "sweep": sweep}) if not isinstance(sweep, str) else toml(MINIMAL) + sweep
    )
    file.write_text(text)
    return load_sweep(file)


def problems(folder: Path, sweep: Any, **sections: Any) -> list[str]:
    with pytest.raises(InputError) as caught:
        loaded(folder, sweep, **sections)
    assert caught.value.exit_code == 2
    return list(caught.value.problems)


def test_a_grid_holds_every_combination_the_last_list_running_fastest(tmp_path):
    sweep = loaded(
        tmp_path, {"grid": {"chain.anisotropy": [0.5, -2], "start": {"beta": {"right": [1.0, 1e-9]}}}}
    )
    assert [dict(point.settings) for point in sweep.points] == [
        {"chain.anisotropy": 0.5, "start.beta.right": 1.0},
        {"chain.anisotropy": 0.5, "start.beta.right": 1e-9},
        {"chain.anisotropy": -2, "start.beta.right": 1.0},
        {"chain.anisotropy": -2, "start.beta.right": 1e-9},
    ]
    assert [point.name for point in sweep.points] == [
        "anisotropy_0.5__beta_right_1",
        "anisotropy_0.5__beta_right_1e-9",
        "anisotropy_-2__beta_right_1",
        "anisotropy_-2__beta_right_1e-9",
    ]
    last = sweep.points[-1].config
    assert (last.chain.anisotropy, last.start.beta.model_dump()["right"]) == (-2.0, 1e-9)
    assert last.chain.sites == MINIMAL["chain"]["sites"], "what is not swept stays"


def test_lists_together_count_as_one_axis(tmp_path):
    together = {"chain.sites": [4, 6], "evolution.until": [1.0, 2.0]}
    sweep = loaded(tmp_path, {"grid": {"chain.anisotropy": [0.5, 0.3]}, "together": together})
    assert [point.name for point in sweep.points] == [
        "anisotropy_0.5__sites_4__until_1",
        "anisotropy_0.5__sites_6__until_2",
        "anisotropy_0.3__sites_4__until_1",
        "anisotropy_0.3__sites_6__until_2",
    ]


def test_a_point_is_a_config_of_its_own(tmp_path):
    (tmp_path / "beta.csv").write_text("0.5\n0.6\n0.7\n")
    (tmp_path / "other.csv").write_text("1.5\n1.6\n1.7\n")
    start = {"beta": {"shape": "table"}}
    sweep = loaded(
        tmp_path,
        {"grid": {"start.beta.file": ["beta.csv", "other.csv"]}},
        start=start,
        cluster={"walltime": "2h"},
    )
    for point, first in zip(sweep.points, (0.5, 1.5), strict=True):
        text = effective_toml(point.config)
        assert "sweep" not in tomllib.loads(text)
        assert read_config(text, subject="again") == point.config, "tables are inside"
        assert tomllib.loads(text)["start"]["beta"]["values"][0] == first
        assert point.config.cluster.walltime_seconds == 7200.0
        assert point.name.startswith(f"beta_file_{'beta' if first < 1 else 'other'}.csv")


def test_profiles_and_extra_terms_can_be_swept(tmp_path):
    betas = [{"shape": "uniform", "value": 1.0}, {"shape": "step", "left": 0.5, "right": 1.0}]
    extra = [{"kind": "uniform_field", "strength": 0.1}, {"kind": "staggered_field", "strength": 0.2}]
    sweep = loaded(
        tmp_path,
        {"grid": {"start.beta": betas, "chain.extra.2.strength": [0.3, 0.4]}},
        chain={"sites": 4, "anisotropy": 0.5, "extra": extra},
    )
    strengths = [[term.strength for term in point.config.chain.extra] for point in sweep.points]
    assert strengths == [[0.1, 0.3], [0.1, 0.4]] * 2
    assert [point.config.start.beta.shape for point in sweep.points] == ["uniform"] * 2 + ["step"] * 2
    assert all(
        re.fullmatch(r"beta_[a-z0-9.-]+__extra_2_strength_0\.[34]", point.name) for point in sweep.points
    )


def test_a_config_with_a_sweep_loads_as_its_first_point_and_is_not_one_run(tmp_path):
    file = tmp_path / "a.toml"
    chain = {"sites": 4}  # the anisotropy stands in the sweep alone
    file.write_text(toml({**MINIMAL, "chain": chain, "sweep": {"grid": {"chain.anisotropy": [0.3, 0.5]}}}))
    config = load_config(file)
    assert config.chain.anisotropy == 0.3
    assert [point.settings["chain.anisotropy"] for point in config.sweep.points] == [0.3, 0.5]
    assert read_config(effective_toml(config), subject="again") == config
    with pytest.raises(InputError) as caught:
        refuse_sweep(config.sweep, str(file))
    assert caught.value.problems == (
        f"[sweep]: makes 2 points, not one run; run them with: tnquench sweep {file}",
    )
    refuse_sweep(Sweep(), "a.toml")


WRONG = [
    ({}, ["[sweep]: missing, or without any setting; name settings and values in [sweep.grid] or "
          "[sweep.together], or use: tnquench run"]),
    ({"grid": {"chain.sites": 4}}, ["[sweep.grid] chain.sites: must be a list of one value at least, not 4"]),
    ({"grid": {"chain.sites": []}}, ["[sweep.grid] chain.sites: must be a list of one value at least"]),
    ({"grid": {"chain.sites": [4, 6, 4.0]}},
     ["[sweep.grid] chain.sites: holds 4 more than once; name each value once"]),
    ({"together": {"chain.sites": [4, 6], "evolution.until": [1.0]}},
     ["[sweep.together]: lists must be of equal length; chain.sites has 2, evolution.until has 1"]),
    ({"together": {"chain.sites": [4, 4, 6], "evolution.until": [1.0, 1.0, 1.0]}},
     ["[sweep.together]: the values at position 1 come more than once; name each point once"]),
    ({"grid": {"chain.sites": [4]}, "together": {"chain.sites": [6]}},
     ["[sweep] chain.sites and chain.sites: set the same twice; keep one of them"]),
    ({"grid": {"start.beta.right": [1.0], "start.beta": [{"shape": "uniform", "value": 1.0}]}},
     ["[sweep] start.beta and start.beta.right: set the same twice; keep one of them"]),
    ({"grid": {"cluster.walltime": ["1h", "2h"]}},
     ["[sweep.grid] cluster.walltime: [cluster] is the same at every point and cannot be swept"]),
    ({"grid": {"chain.sites": list(range(2, 402)), "chain.coupling": list(range(1, 401))}},
     [f"[sweep]: more than {MOST_POINTS} points; split it into several sweeps"]),
    ({"grids": {"chain.sites": [4]}}, ['[sweep.grids]: no such section; did you mean "grid"?']),
    ({"grid": 3}, ["[sweep] grid = 3: must be lists of values by name, in a section of their own"]),
    (3, ["sweep = 3: must be one section, headed [sweep]"]),
    (f"sweep.grid.chain.sites = [4, 0x{'f' * 5000}]",
     ["[sweep.grid] chain.sites: holds a number of thousands of digits"]),
    # what is wrong at every point is told once, the rest with its point
    ({"grid": {"chain.anisotrpy": [1, 2]}},
     ['[chain] anisotrpy: no such setting; did you mean "anisotropy"?']),
    ({"grid": {"anisotropy": [1, 2]}}, ["anisotropy: belongs to [chain] or [[chain.extra]]"]),
    ({"grid": {"chain.sites.more": [1, 2]}},
     ["[chain] sites = {...}: must be a whole number from 2 to 100000 (a bond joins two sites)"]),
    ({"grid": {"chain.sites": [4, 1], "evolution.until": [0.5, 0.7]}},
     ["point sites_4__until_0.7: [evolution] until = 0.7: must be a whole multiple of every = 0.5; "
      "nearest: 0.5 or 1",
      "point sites_1__until_0.5: [chain] sites = 1: must be from 2 to 100000 (a bond joins two sites)",
      "point sites_1__until_0.7: [chain] sites = 1: must be from 2 to 100000 (a bond joins two sites)",
      "point sites_1__until_0.7: [evolution] until = 0.7: must be a whole multiple of every = 0.5; "
      "nearest: 0.5 or 1"]),
]  # fmt: skip


@pytest.mark.parametrize(("sweep", "lines"), WRONG)
def test_what_is_wrong_is_said_in_one_line_each(tmp_path, sweep, lines):
    assert problems(tmp_path, sweep) == lines


def test_without_a_section_there_is_advice(tmp_path):
    file = tmp_path / "a.toml"
    file.write_text(toml(MINIMAL))
    with pytest.raises(InputError, match="or use: tnquench run"):
        load_sweep(file)


def test_a_flood_of_problems_is_cut_short(tmp_path):
    lines = problems(tmp_path, {"grid": {"evolution.until": [0.5 + 0.001 * step for step in range(1, 300)]}})
    assert len(lines) == 101
    assert lines[-1] == "199 more problems; mend these first"


def test_problems_of_the_section_cluster_are_told_once(tmp_path):
    lines = problems(
        tmp_path, {"grid": {"chain.sites": [4, 6]}}, cluster={"walltime": "soon", "partition": "a b"}
    )
    assert [line.split(":")[0] for line in lines] == [
        '[cluster] walltime = "soon"',
        '[cluster] partition = "a b"',
    ]


def test_shipped_sweep_loads():
    assert len(load_sweep(CONFIGS / "sweep.toml").points) == 6


#: Values of all kinds, for names; whether a config takes them is another matter.
values = st.one_of(
    st.floats(allow_nan=False),
    st.integers(-(10**12), 10**12),
    st.text(max_size=60),
    st.booleans(),
    st.lists(st.integers(), max_size=3),
    st.dictionaries(st.text("ab", min_size=1), st.text(max_size=3), max_size=2),
)


@settings(max_examples=100, deadline=None, derandomize=True)
@given(
    st.dictionaries(
        st.from_regex(r"[a-z]{1,8}(\.[a-z_]{1,30}){0,3}", fullmatch=True),
        st.lists(values, min_size=1, max_size=4, unique_by=lambda value: repr(value).casefold()),
        min_size=1,
        max_size=4,
    )
)
def test_names_are_safe_and_differ(lists):
    names = [point.name for point in sweep_points({"grid": lists})]
    for name in names:
        assert re.fullmatch(r"[A-Za-z_][A-Za-z0-9._+-]{0,200}", name), name
    different = {repr(sorted(point.settings.items())) for point in sweep_points({"grid": lists})}
    assert len({name.casefold() for name in names}) == len(different), "also where case is ignored"


def test_nan_is_refused_at_its_point(tmp_path):
    (line,) = problems(tmp_path, {"grid": {"chain.anisotropy": [0.5, NAN]}})
    assert line == "point anisotropy_nan: [chain] anisotropy = nan: must be a finite number"


keys = st.sampled_from(
    ["chain", "sites", "chain.sites", "start.beta.left", "grid", "sweep.grid", "", ".", "a..b"]
)
tables = st.dictionaries(keys | st.text(max_size=4), st.lists(anything, max_size=3) | anything, max_size=3)


@settings(max_examples=150, deadline=None, derandomize=True, suppress_health_check=[HealthCheck.too_slow])
@given(
    st.fixed_dictionaries({}, optional={"grid": tables, "together": tables, "combine": anything}) | anything
)
def test_any_section_makes_points_or_is_explained(tmp_path_factory, sweep):
    folder = tmp_path_factory.mktemp("any")
    try:
        points = loaded(folder, sweep).points
    except InputError as refusal:
        for line in refusal.problems:
            assert line.isprintable()
            assert len(line) < 600
    else:
        assert len({point.name for point in points}) == len(points)
