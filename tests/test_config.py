"""The config: what loads, its defaults, and files that are no configs."""

from __future__ import annotations

import io
import os
from collections.abc import Callable
from pathlib import Path

import pytest
from pydantic import ValidationError

from tests.config_cases import CONFIGS, MINIMAL, NAN, changed, problems, toml, without
from tnquench.config import file_text
from tnquench.config.load import load_config, read_config
from tnquench.config.models import MODELS
from tnquench.config.schema import Config
from tnquench.errors import InputError


def test_defaults_are_filled_in():
    config = read_config(toml(MINIMAL), subject="a.toml")
    assert config.title == "Untitled"
    assert (config.chain.model, config.chain.coupling) == ("xxz", 1.0)
    assert (config.start.joint, config.start.beta_field) == ("coupled", None)
    evolution = config.evolution
    assert (evolution.time_step, evolution.trotter_order, evolution.bond_ceiling) == (0.2, 4, 4000)
    assert (evolution.accuracy, evolution.cut, evolution.intervals) == (None, "subspace", 2)
    assert config.hydrodynamics.levels == ("euler",)
    assert (config.budget.companions, config.budget.resolve_at) == ("full", 3.0)


@pytest.mark.parametrize(
    ("order", "coupling", "anisotropy", "step"),
    [(4, 1.0, 0.5, 0.2), (2, 1.0, 0.5, 0.05), (4, 2.0, 0.5, 0.1), (4, 1.0, -4.0, 0.05)],
)
def test_default_step_follows_the_largest_bond_energy(order, coupling, anisotropy, step):
    tables = changed("chain.coupling", coupling)
    tables["chain"]["anisotropy"] = anisotropy
    tables["evolution"]["trotter_order"] = order
    assert read_config(toml(tables), subject="a.toml").evolution.time_step == pytest.approx(step, rel=1e-15)


def test_accuracy_leaves_the_step_to_the_program():
    tables = without("evolution.discarded_weight")
    tables["evolution"]["accuracy"] = 1e-4
    evolution = read_config(toml(tables), subject="a.toml").evolution
    assert (evolution.discarded_weight, evolution.accuracy, evolution.time_step) == (None, 1e-4, None)


@pytest.mark.parametrize("name", [path.stem for path in CONFIGS.glob("*.toml")])
def test_shipped_configs_load(name):
    config = load_config(CONFIGS / f"{name}.toml")
    assert config.title != "Untitled"
    assert config.hydrodynamics.levels == ("euler",)


def test_there_is_a_config_for_every_model():
    shipped = [load_config(path) for path in CONFIGS.glob("*.toml")]
    assert {config.chain.model for config in shipped} == set(MODELS)
    assert any(config.chain.extra for config in shipped)


def test_a_config_is_frozen():
    config = read_config(toml(MINIMAL), subject="a.toml")
    with pytest.raises(ValidationError):
        config.chain.sites = 6


def test_construction_refuses_contradictions_too():
    tables = changed("evolution.until", 0.7)
    with pytest.raises(ValidationError, match="must be a whole multiple of every"):
        Config.model_validate(tables)


def test_windows_files_load(tmp_path):
    path = tmp_path / "a.toml"
    path.write_bytes(b"\xef\xbb\xbf" + toml(MINIMAL).replace("\n", "\r\n").encode())
    assert load_config(path) == read_config(toml(MINIMAL), subject="a.toml")


def test_all_problems_come_at_once(tmp_path):
    path = tmp_path / "broken.toml"
    path.write_text(
        """
        [chain]
        model = "isnig"
        sites = 1
        time_step = 0.1
        [start]
        joint = "coupled"
        [start.beta]
        shape = "table"
        file = "missing.csv"
        [evolution]
        until = 1.0
        every = 0.3
        accuracy = 1e-3
        discarded_weight = 1e-9
        bond_cieling = 3
        """
    )
    with pytest.raises(InputError) as caught:
        load_config(path)
    assert caught.value.exit_code == 2
    assert str(caught.value).splitlines() == [
        f"{path}: 7 problems, nothing was run",
        '  [chain] model = "isnig": must be "xxz", "ising", "fermion" or "hubbard"; did you mean "ising"?',
        "  [chain] sites = 1: must be from 2 to 100000 (a bond joins two sites)",
        "  [chain] time_step: belongs to [evolution]",
        '  [evolution] bond_cieling: no such setting; did you mean "bond_ceiling"?',
        '  [start.beta] file = "missing.csv": no such file',
        "  [evolution] discarded_weight and accuracy: both given; keep one of them",
        "  [evolution] until = 1.0: must be a whole multiple of every = 0.3; nearest: 0.9 or 1.2",
    ]


def test_long_series_are_cut_short():
    table = {"shape": "table", "values": [NAN] * 50}
    assert problems(changed("start.beta", table)) == [
        "[start.beta] values[0] = nan: must be a finite number",
        "[start.beta] values[1] = nan: must be a finite number",
        "[start.beta] values[2] = nan: must be a finite number",
        "[start.beta] values: 47 more such entries",
        "[start.beta] table of 50 values: must have 3 (sites - 1, one a bond)",
    ]
    flood = {**MINIMAL, **{f"unknown_{index}": 1 for index in range(300)}}
    lines = problems(flood)
    assert len(lines) == 101
    assert lines[-1] == "200 more problems; mend these first"


@pytest.mark.parametrize(
    ("text", "line"),
    [
        (
            "[chain\n",
            "line 1, column 7: not valid TOML (expected ']' at the end of a table declaration): \"[chain\"",
        ),
        (
            "a = 1\nmodel = xxz\n",
            'line 2, column 9: not valid TOML (invalid value; text needs quotes, as in shape = "step"): '
            '"model = xxz"',
        ),
        ("a = [1,", "at the end of the file: not valid TOML (invalid value)"),
        ("[a]\n[a]\n", "line 2, column 3: not valid TOML (cannot declare ('a',) twice): \"[a]\""),
        ("a = " + "[" * 100_000, "not a config: brackets nested too deeply"),
        ("a = " + "9" * 5000, "not valid TOML: holds a number or a date that cannot be read"),
    ],
)
def test_malformed_toml_names_line_and_column(text, line):
    assert problems(text) == [line]


def test_an_empty_file_lists_what_is_needed():
    assert problems("") == [
        "[chain]: section missing; it must set sites",
        "[start]: section missing; it must set [start.beta]",
        "[evolution]: section missing; it must set until and every",
        "[chain] anisotropy: missing; must be a number from -1000 to 1000",
        "[evolution] discarded_weight: missing; give it, or accuracy in its place",
    ]


def _as_missing(path: Path) -> str:
    path.with_name("demo.toml").write_text("")
    return f"no such file; did you mean {path.with_name('demo.toml')}?"


def _as_folder(path: Path) -> str:
    path.mkdir()
    return "is a folder, not a file"


def _as_pipe(path: Path) -> str:
    os.mkfifo(path)
    return "is not a regular file"


def _as_latin(path: Path) -> str:
    path.write_bytes(b"# first\ntitle = '\xe9'\n")
    return "line 2 is not UTF-8 text (byte 0xe9); save the file as UTF-8"


def _as_huge(path: Path) -> str:
    with path.open("wb") as stream:
        stream.truncate(file_text.LARGEST_FILE + 1)
    return "is larger than 10 MB, the most that is read"


@pytest.mark.parametrize("spoil", [_as_missing, _as_folder, _as_pipe, _as_latin, _as_huge])
def test_files_that_cannot_be_read(tmp_path: Path, spoil: Callable[[Path], str]):
    path = tmp_path / "dem.toml"
    reason = spoil(path)
    with pytest.raises(InputError) as caught:
        load_config(path)
    assert str(caught.value) == f"{path}: 1 problem, nothing was run\n  {reason}"


def test_a_refusing_file_system_is_quoted(tmp_path, monkeypatch):
    path = tmp_path / "a.toml"
    path.write_text(toml(MINIMAL))

    def refuse(*_: object) -> io.BytesIO:
        raise PermissionError(13, "Permission denied")

    monkeypatch.setattr("tnquench.config.file_text._never_waiting", refuse)
    with pytest.raises(InputError, match=r"cannot be read \(permission denied\)"):
        load_config(path)


def test_a_name_that_no_file_can_have():
    with pytest.raises(InputError):
        load_config("a\0b.toml")
