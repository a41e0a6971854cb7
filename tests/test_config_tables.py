"""Table profiles: values inline and from files."""

from __future__ import annotations

from typing import Any

import pytest

from tests.config_cases import NAN, changed, problems, toml
from tnquench.config.document import effective_toml
from tnquench.config.load import load_config, read_config
from tnquench.config.notation import shown
from tnquench.config.profile import TableProfile


def table_config(file: str) -> dict[str, Any]:
    return changed("start.beta", {"shape": "table", "file": file})


def test_inline_table():
    config = read_config(
        toml(changed("start.beta", {"shape": "table", "values": [1, 2.5, 3]})), subject="a.toml"
    )
    assert isinstance(config.start.beta, TableProfile)
    assert config.start.beta.values == (1.0, 2.5, 3.0)


UNIT = "(in units of 1/J)"


@pytest.mark.parametrize(
    ("profile", "values", "complaint"),
    [
        ("beta", [1.0, 2.0], "table of 2 values: must have 3 (sites - 1, one a bond)"),
        ("beta_field", [1.0] * 3, "table of 3 values: must have 4 (sites, one a site)"),
        ("beta", [1.0, NAN, 2.0], "values[1] = nan: must be a finite number"),
        ("beta", [1.0, "x", 2.0], f'values[1] = "x": must be a number from -1000 to 1000 {UNIT}'),
        ("beta", [1.0, 5e3, 2.0], f"values[1] = 5000.0: must be from -1000 to 1000 {UNIT}"),
        (
            "beta",
            3,
            f"values = 3: must be a list of numbers, each from -1000 to 1000 {UNIT} "
            "(or give file in its place)",
        ),
    ],
)
def test_wrong_inline_tables(profile, values, complaint):
    assert problems(changed(f"start.{profile}", {"shape": "table", "values": values})) == [
        f"[start.{profile}] {complaint}"
    ]


def test_table_without_values_or_with_both():
    missing = "[start.beta] values: missing; must be a list of numbers, each from -1000 to 1000"
    assert problems(changed("start.beta", {"shape": "table"})) == [
        f"{missing} (in units of 1/J) (or give file in its place)"
    ]
    both = {"shape": "table", "values": [1.0, 2.0, 3.0], "file": "a.csv"}
    assert problems(changed("start.beta", both)) == [
        "[start.beta] values and file: both given; keep one of them"
    ]


@pytest.mark.parametrize(
    "content", ["1\n2.5\n3e0\n", "beta\n# comment\n1\n\n 2.5 \r\n3", "# only\n1\n2.5\n3\n"]
)
def test_table_files_are_read_beside_the_config(tmp_path, monkeypatch, content):
    (tmp_path / "deep").mkdir()
    (tmp_path / "deep" / "b.csv").write_text(content)
    path = tmp_path / "a.toml"
    path.write_text(toml(table_config("deep/b.csv")))
    monkeypatch.chdir("/")
    config = load_config(path)
    assert isinstance(config.start.beta, TableProfile)
    assert config.start.beta.values == (1.0, 2.5, 3.0)
    assert read_config(effective_toml(config), subject="again") == config, "the effective config stands alone"


@pytest.mark.parametrize(
    ("content", "complaints"),
    [
        (b"1\nnan\n3\n", ["line 2: nan is not a finite number"]),
        (b"1\ninf\n3\n", ["line 2: inf is not a finite number"]),
        (b"1\n2\nthree\n", ['line 3: "three" is not a number']),
        (b"1,5\n", ["line 1: 2 columns; must be one number a line, with a decimal point"]),
        (b"", ["holds no numbers; must have one a line"]),
        (b"beta\nfield\n1\n", ['line 2: "field" is not a number']),
        (b"1\n\xff\n", ["line 2 is not UTF-8 text (byte 0xff); save the file as UTF-8"]),
        (
            b"1\n" + b"nan\n" * 5,
            [*(f"line {line}: nan is not a finite number" for line in (2, 3, 4)), "2 more such lines"],
        ),
    ],
)
def test_wrong_table_files(tmp_path, content, complaints):
    (tmp_path / "b.csv").write_bytes(content)
    lines = [f'[start.beta] file = "b.csv": {complaint}' for complaint in complaints]
    assert problems(table_config("b.csv"), folder=tmp_path) == lines


def test_a_table_file_of_wrong_length(tmp_path):
    (tmp_path / "b.csv").write_text("1\n2\n")
    line = "[start.beta] table of 2 values: must have 3 (sites - 1, one a bond)"
    assert problems(table_config("b.csv"), folder=tmp_path) == [line]


def test_table_files_stay_below_the_folder_of_the_config(tmp_path):
    outside = "lies outside the folder of the config; must be in it or below, by a relative path"
    folder = tmp_path / "home"
    folder.mkdir()
    (tmp_path / "b.csv").write_text("1\n2\n3\n")
    (folder / "link.csv").symlink_to(tmp_path / "b.csv")
    (folder / "ring").symlink_to(folder / "ring")
    for file in ("../b.csv", str(tmp_path / "b.csv"), str(folder / "b.csv"), "link.csv"):
        assert problems(table_config(file), folder=folder) == [
            f"[start.beta] file = {shown(file)}: {outside}"
        ]
    assert len(problems(table_config("ring"), folder=folder)) == 1
    assert problems(table_config("."), folder=folder) == ['[start.beta] file = ".": is a folder, not a file']
    for file in ("", "a\0b"):
        assert problems(table_config(file), folder=folder)[0].endswith("is not the name of a file")
    assert problems(table_config("b.csv")) == [
        '[start.beta] file = "b.csv": can be read only for a config that is a file itself; '
        "give values in its place"
    ]
    assert problems(table_config("x" * 5000), folder=folder)[0].endswith(
        "cannot be read (file name too long)"
    )
