"""The commands as a user meets them: bad input, help, settings, checked configs, equilibrium tables."""

from __future__ import annotations

import json
import math
import shlex
from pathlib import Path
from typing import Any

import pytest
import typer

from tests.command_line import ROOT, Answer, call, config_file
from tests.config_cases import CONFIGS, changed, toml
from tnquench import cli
from tnquench.config.document import settings_page
from tnquench.config.load import load_config, read_config

COMMANDS = ("run", "forecast", "hydro", "thermo", "check", "report", "judge", "refine", "sweep", "settings")

QUANTITIES = ("free_energy", "energy", "entropy", "magnetisation", "specific_heat", "susceptibility")

# --- bad input: a heading, one line a problem, exit code 2, nothing on standard output, nothing left behind

BAD_CONFIGS: dict[str, tuple[str | bytes, list[str]]] = {
    "malformed": ("chain = [", ["not valid TOML"]),
    "unknown key": (
        toml(changed("evolution.bond_cieling", 10)),
        ['bond_cieling: no such setting; did you mean "bond_ceiling"?'],
    ),
    "one site": (toml(changed("chain.sites", 1)), ["sites = 1: must be from 2"]),
    "negative step": (toml(changed("evolution.time_step", -0.05)), ["time_step = -0.05: must be positive"]),
    "table of wrong length": (
        toml(changed("start.beta", {"shape": "table", "values": [1.0, 1.0]})),
        ["table of 2 values: must have 3"],
    ),
    "NaN in a table": (
        toml(changed("start.beta", {"shape": "table", "values": [1.0, math.nan, 1.0]})),
        ["must be a finite number"],
    ),
    "three problems": (
        toml(changed("chain.sites", 1) | {"evolution": {"until": -1.0, "every": 0.5, "discarded_weight": 2}}),
        ["sites = 1", "until = -1.0", "discarded_weight = 2"],
    ),
    "not text": (b"\xff\xfe\x00", ["is not UTF-8 text"]),
}


def assert_refused(answer: Answer, subject: object, problems: list[str]) -> None:
    count = f"{len(problems)} problem{'s' if len(problems) > 1 else ''}"
    assert answer.code == 2
    assert answer.out == ""
    assert answer.lines[0] == f"{subject}: {count}, nothing was run"
    assert len(answer.lines) == 1 + len(problems), answer.err
    for line, problem in zip(answer.lines[1:], problems, strict=True):
        assert line.startswith("  ")
        assert problem in line


@pytest.mark.parametrize("case", BAD_CONFIGS)
def test_bad_config_is_refused_line_by_line(tmp_path: Path, case: str) -> None:
    text, problems = BAD_CONFIGS[case]
    file, folder = tmp_path / "bad.toml", tmp_path / "results"
    file.write_bytes(text if isinstance(text, bytes) else text.encode())
    assert_refused(call("run", file, "--into", folder), file, problems)
    assert list(tmp_path.iterdir()) == [file]


@pytest.mark.parametrize("command", ["run", "forecast", "hydro", "check"])
def test_every_command_that_takes_a_config_refuses_a_bad_one(tmp_path: Path, command: str) -> None:
    file = tmp_path / "bad.toml"
    file.write_text(toml(changed("chain.sites", 1)))
    answer = call(command, file)
    assert_refused(Answer(answer.code, answer.out, "\n".join(answer.lines[-2:])), file, ["sites = 1"])
    assert list(tmp_path.iterdir()) == [file]


@pytest.mark.parametrize("command", ["run", "hydro"])
def test_folder_that_cannot_be_written_is_refused_before_the_run(tmp_path: Path, command: str) -> None:
    file = config_file(tmp_path)
    answer = call(command, file, "--into", file / "results")
    assert answer.code == 2
    assert answer.out == ""
    assert answer.lines[-1] == f"  cannot be written: {file} is a file, not a folder; name another place"
    assert list(tmp_path.iterdir()) == [file]


@pytest.mark.parametrize(
    ("name", "problem"),
    [("missing.toml", "no such file"), ("", "no such dataset"), ("missing.h5", "no such dataset")],
)
def test_missing_path_is_refused(tmp_path: Path, name: str, problem: str) -> None:
    answer = call("check", tmp_path / name)
    assert answer.code == 2
    assert answer.out == ""
    assert problem in answer.lines[1]
    assert len(answer.lines) == 2


@pytest.mark.parametrize("command", ["run", "forecast", "hydro"])
def test_unreadable_config_is_refused(tmp_path: Path, command: str) -> None:
    answer = call(command, tmp_path)
    assert answer.code == 2
    assert answer.out == ""
    assert answer.lines[-1] == "  is a folder, not a file"


THERMO = ("thermo", "xxz", "--anisotropy", "0.5", "--beta", "1")

BAD_LINES = [
    ((), "tnquench: Missing command"),
    (("rnu",), "Did you mean 'run'?"),
    (("--verison",), "--verison"),
    (("run",), "tnquench run: Missing argument 'CONFIG'"),
    (("run", "a.toml", "b.toml"), "b.toml"),
    (("run", "a.toml", "--threads", "0"), "Invalid value for '--threads'"),
    (("run", "a.toml", "--threads", "two"), "Invalid value for '--threads'"),
    (("run", "a.toml", "--into"), "--into"),
    (("forecast", "a.toml", "--into", "x"), "No such option: --into"),
    (("thermo", "xyz", *THERMO[2:]), '"xyz": no such model; available: xxz, ising, fermion, hubbard'),
    ((*THERMO[:3], "nan", *THERMO[4:]), "nan is not a finite number"),
    ((*THERMO[:5], "inf"), "inf is not a finite number"),
    ((*THERMO[:5], "1:2"), "1:2 is neither a number nor FROM:TO:COUNT"),
    ((*THERMO, "--field", "much"), "'much' is not a number"),
]


@pytest.mark.parametrize(("words", "complaint"), BAD_LINES, ids=[" ".join(words) for words, _ in BAD_LINES])
def test_bad_command_line_is_one_line(words: tuple[str, ...], complaint: str) -> None:
    answer = call(*words)
    assert answer.code == 2
    assert answer.out == ""
    assert len(answer.lines) == 1
    assert complaint in answer.err
    assert answer.err.rstrip().endswith("--help)")


# --- help, version, settings, check of a config


@pytest.mark.parametrize("command", ["", *COMMANDS])
def test_help_ends_in_an_example_that_parses(command: str) -> None:
    answer = call(*([command] if command else []), "--help")
    assert answer.code == 0
    assert answer.err == ""
    last = answer.out.rstrip().splitlines()[-1].strip()
    program, *words = shlex.split(last.removeprefix("Example: ").partition(" > ")[0])
    assert program == "tnquench"
    assert words[0] == (command or "run")
    group: Any = typer.main.get_command(cli.app)
    group.commands[words[0]].make_context(words[0], words[1:])
    assert all((ROOT / word).is_file() for word in words if word.endswith(".toml"))


def test_help_names_every_command() -> None:
    assert set(cli.app.registered_commands[index].name for index in range(len(COMMANDS))) == set(COMMANDS)
    assert all(f"│ {command} " in call("--help").out for command in COMMANDS)


def test_version() -> None:
    answer = call("--version")
    assert answer.code == 0
    assert answer.out.startswith("tnquench")
    assert len(answer.out.splitlines()) == 1


def test_settings_page_goes_to_standard_output() -> None:
    answer = call("settings")
    assert (answer.code, answer.out.rstrip(), answer.err) == (0, settings_page().rstrip(), "")


@pytest.mark.parametrize("file", sorted(CONFIGS.glob("*.toml")), ids=lambda file: file.stem)
def test_checked_config_is_printed_as_toml_that_means_the_same(file: Path) -> None:
    answer = call("check", file)
    assert answer.code == 0
    assert answer.err == "" or answer.err.startswith(f"{file}: without a prediction: ")
    assert read_config(answer.out, subject="printed") == load_config(file)


# --- equilibrium


def test_thermo_json_has_exactly_these_keys() -> None:
    answer = call(*THERMO, "--field", "0.2", "--json")
    assert (answer.code, answer.err) == (0, "")
    assert set(json.loads(answer.out)) == {*QUANTITIES, *(f"{name}_error" for name in QUANTITIES)}


def test_thermo_table_says_what_its_json_says() -> None:
    numbers = json.loads(call(*THERMO, "--field", "0.2", "--json").out)
    heading, *rows = call(*THERMO, "--field", "0.2").out.splitlines()
    assert heading.split() == ["xxz,", "per", "site", "value", "error", "unit"]
    assert len(rows) == len(QUANTITIES)
    for row, name in zip(rows, QUANTITIES, strict=True):
        label, (value, error, _unit) = " ".join(row.split()[:-3]), row.split()[-3:]
        assert label == name.replace("_", " ")
        assert float(value) == pytest.approx(numbers[name], rel=0.0, abs=numbers[f"{name}_error"])
        assert float(error) == pytest.approx(numbers[f"{name}_error"], rel=0.06)


def test_thermo_scales_with_the_coupling() -> None:
    """H is proportional to J: (J, beta, h) = (2, 0.5, 0.4) is (1, 1, 0.2) with energies doubled."""
    single = json.loads(call(*THERMO, "--field", "0.2", "--json").out)
    words = ("--anisotropy", "0.5", "--beta", "0.5", "--field", "0.4", "--coupling", "2", "--json")
    double = json.loads(call("thermo", "xxz", *words).out)
    factors = dict(zip(QUANTITIES, (2.0, 2.0, 1.0, 1.0, 1.0, 0.5), strict=True))
    for name, factor in factors.items():
        assert double[name] == pytest.approx(factor * single[name], rel=1e-10, abs=1e-12)


def test_thermo_takes_negative_numbers() -> None:
    """A field turned round turns the magnetisation round."""
    words = ("thermo", "xxz", "--anisotropy", "-0.5", "--beta", "1", "--json", "--field")
    up, down = (json.loads(call(*words, field).out)["magnetisation"] for field in ("0.3", "-0.3"))
    assert up > 0.01
    assert down == pytest.approx(-up, rel=1e-12)
