"""Extra terms, [[chain.extra]]: what loads, what is refused and in which words, and how they are written."""

from __future__ import annotations

from typing import Any

import pytest

from tests.config_cases import changed, problems, toml
from tnquench.config.document import effective_toml
from tnquench.config.extras import BondDisorder, NextNearest, Potential
from tnquench.config.load import load_config, read_config

ISING = {"model": "ising", "transverse_field": 1.0, "sites": 4}
HUBBARD = {"model": "hubbard", "repulsion": 4.0, "sites": 4}
ALL = (
    '"staggered_field", "uniform_field", "longitudinal_field", "next_nearest", "bond_alternation", '
    '"bond_disorder", "site_disorder" or "potential"'
)


def with_extras(*extras: Any, **chain: Any) -> dict[str, Any]:
    tables = changed("chain.extra", list(extras))
    if chain:
        tables["chain"] = {**chain, "extra": list(extras)}
    return tables


def test_extras_are_told_apart_by_kind_and_may_repeat():
    config = read_config(
        toml(
            with_extras(
                {"kind": "next_nearest", "strength": 0.5},
                {"kind": "bond_disorder", "strength": 0.2, "seed": 7, "in_start": False},
                {"kind": "potential", "shape": "table", "values": [1, 2, 3, 4]},
                {"kind": "next_nearest", "strength": -0.1, "anisotropy": 0.0},
            )
        ),
        subject="a.toml",
    )
    first, disorder, table, last = config.chain.extra
    assert isinstance(first, NextNearest)
    assert isinstance(last, NextNearest)
    assert isinstance(disorder, BondDisorder)
    assert isinstance(table, Potential)
    assert (first.strength, first.anisotropy, first.in_start) == (0.5, None, True)
    assert (disorder.seed, disorder.in_start) == (7, False)
    assert table.values == (1.0, 2.0, 3.0, 4.0)
    assert last.anisotropy == 0.0


def test_extras_are_written_as_sections_of_their_own():
    tables = with_extras(
        {"kind": "next_nearest", "strength": 0.5, "in_start": False},
        {"kind": "potential", "shape": "box", "strength": 1.0, "width": 2.0},
    )
    config = read_config(toml(tables), subject="a.toml")
    text = effective_toml(config)
    assert (
        '[[chain.extra]]\nkind = "next_nearest"\nstrength = 0.5\nin_start = false\n\n'
        '[[chain.extra]]\nkind = "potential"\nshape = "box"\nstrength = 1.0\nwidth = 2.0\nin_start = true\n'
    ) in text
    assert read_config(text, subject="again") == config
    assert "extra" not in effective_toml(read_config(toml(with_extras()), subject="a.toml"))


LINES = [
    ({"kind": "uniform_field"}, {},
     "strength: missing; must be a number from -1e6 to 1e6 (in units of J)"),
    ({"kind": "uniform_field", "strength": 1.0, "h": 1.0}, {},
     'h: no such setting; did you mean "strength"?'),
    ({"kind": "uniform_field", "strength": "x"}, {},
     'strength = "x": must be a number from -1e6 to 1e6 (in units of J)'),
    ({"kind": "uniform_field", "strength": 1.0, "seed": 3}, {},
     'seed: belongs to kind "bond_disorder" or "site_disorder"; kind "uniform_field" takes strength and '
     "in_start"),
    ({"kind": "uniform_field", "strength": 1.0, "in_start": 1}, {}, "in_start = 1: must be true or false"),
    ({"kind": "uniform_field", "strength": 1.0, "in_strat": True}, {},
     'in_strat: no such setting; did you mean "in_start"?'),
    ({"kind": "unifrom_field"}, {},
     f'kind = "unifrom_field": must be {ALL}; did you mean "uniform_field"?'),
    ({"strength": 1.0}, {}, f"kind: missing; must be {ALL}"),
    ({"kind": "bond_disorder", "strength": -0.1}, {}, "strength = -0.1: must be from 0 to 10"),
    ({"kind": "bond_disorder", "strength": 0.1, "seed": 1.5}, {},
     "seed = 1.5: must be a whole number from 0 to 1e9"),
    ({"kind": "bond_alternation", "strength": 2}, {}, "strength = 2: must be from -1 to 1"),
    ({"kind": "longitudinal_field", "strength": 1.0}, {},
     'kind = "longitudinal_field": belongs to model "ising"; model "xxz" takes "staggered_field", '
     '"uniform_field", "next_nearest", "bond_alternation", "bond_disorder", "site_disorder" or "potential"'),
    ({"kind": "next_nearest", "strength": 1.0}, HUBBARD,
     'kind = "next_nearest": belongs to models "xxz", "ising" and "fermion"; model "hubbard" takes '
     '"staggered_field", "uniform_field", "bond_alternation", "bond_disorder", "site_disorder" or '
     '"potential"'),
    ({"kind": "next_nearest", "strength": 1.0, "anisotropy": 0.5}, ISING,
     'anisotropy: belongs to model "xxz"; in model "ising" this term has none'),
    ({"kind": "potential", "shape": "harmonic"}, {},
     "strength: missing; must be a number from -1e6 to 1e6 (in units of J)"),
    ({"kind": "potential", "shape": "box", "strength": 1.0}, {},
     "width: missing; must be a number from 0.001 to 1e6 (in units of the lattice spacing)"),
    ({"kind": "potential", "shape": "linear", "strength": 1.0, "width": 2.0}, {},
     'width: belongs to shape "box"; shape "linear" takes strength'),
    ({"kind": "potential", "shape": "table", "values": [1.0] * 4, "strength": 2.0}, {},
     'strength: belongs to shape "harmonic", "linear" or "box"; shape "table" takes values'),
    ({"kind": "potential", "shape": "table"}, {},
     "values: missing; must be a list of numbers, each from -1e6 to 1e6 (in units of J) (or give file in its "
     "place)"),
    ({"kind": "potential", "shape": "table", "values": [1.0] * 3}, {},
     "table of 3 values: must have 4 (sites, one a site)"),
    ({"kind": "potential", "shape": "table", "values": [1.0, "x", 1.0, 1.0]}, {},
     'values[1] = "x": must be a number from -1e6 to 1e6 (in units of J)'),
    ({"kind": "potential", "shape": "table", "values": [1.0] * 4, "file": "a.csv"}, {},
     "values and file: both given; keep one of them"),
    ({"kind": "potential", "shape": "box", "strength": 1.0, "width": 2.0, "file": "a.csv"}, {},
     'file: belongs to shape "table"; shape "box" takes strength and width'),
    ({"kind": "potential", "shape": "parabola", "strength": 1.0}, {},
     'shape = "parabola": must be "harmonic", "linear", "box" or "table"'),
    (3, {}, "= 3: must be a section, headed [[chain.extra]]"),
]  # fmt: skip


@pytest.mark.parametrize(("extra", "chain", "line"), LINES)
def test_one_wrong_extra_gives_one_exact_line(extra, chain, line):
    good = {"kind": "staggered_field", "strength": 0.1}
    assert problems(with_extras(extra, **chain)) == [f"[[chain.extra]] #1 {line}"]
    assert problems(with_extras(good, extra, **chain)) == [f"[[chain.extra]] #2 {line}"]


def test_a_single_section_is_no_list():
    wanted = "must be a list of sections, each headed by the name in double brackets"
    assert problems(changed("chain.extra", {"kind": "uniform_field"})) == [
        f"[chain] extra = {{...}}: {wanted}"
    ]
    assert problems(changed("chain.extra", 3)) == [f"[chain] extra = 3: {wanted}"]


def test_all_problems_of_all_extras_come_at_once():
    tables = with_extras(
        {"kind": "uniform_field", "strength": "x"},
        {"kind": "longitudinal_field", "strength": 1.0},
        {"kind": "potential", "shape": "box", "width": -1.0},
        {"kind": "nonsense", "widht": 2.0},
    )
    lines = problems(tables)
    assert [line.split(":")[0] for line in lines] == [
        '[[chain.extra]] #1 strength = "x"',
        "[[chain.extra]] #3 width = -1.0",
        '[[chain.extra]] #4 kind = "nonsense"',
        "[[chain.extra]] #4 widht",
        '[[chain.extra]] #2 kind = "longitudinal_field"',
        "[[chain.extra]] #3 strength",
    ]


def test_a_potential_is_read_from_a_file_beside_the_config(tmp_path):
    (tmp_path / "v.csv").write_text("V\n0.5\n0\n0\n0.5\n")
    path = tmp_path / "a.toml"
    path.write_text(toml(with_extras({"kind": "potential", "shape": "table", "file": "v.csv"})))
    config = load_config(path)
    (extra,) = config.chain.extra
    assert isinstance(extra, Potential)
    assert (extra.values, extra.file) == ((0.5, 0.0, 0.0, 0.5), None)
    assert read_config(effective_toml(config), subject="again") == config
    tables = with_extras({"kind": "potential", "shape": "table", "file": "w.csv"})
    assert problems(tables, folder=tmp_path) == ['[[chain.extra]] #1 file = "w.csv": no such file']
