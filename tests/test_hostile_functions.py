"""Candidates that are Python functions: never run without consent, judged like tables with it, and whatever
they do wrong said in one line."""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np
import pytest

from tests.command_line import call
from tests.hostile_cases import watched
from tests.hostile_functions import FUNCTIONS
from tests.judge_cases import grid_columns, table
from tests.synthetic_run import write_synthetic_run
from tnquench.conventions import OBSERVABLE_PLACES
from tnquench.dataset.reader import Run, open_run
from tnquench.errors import InputError
from tnquench.judge.judgement import judge

WAVE = """\
import numpy as np
from beside import amplitude

def wave(times, positions):
    print("at work")
    t = times[:, None]
    return {
        "energy_density": -0.2 + amplitude * np.tanh(-positions["bond"] / (1 + t)),
        "charge_current": 0.0 * positions["bond"] * t,
        "charge_density": 0.01 * positions["site"] * t,
    }
"""


@pytest.fixture(scope="module")
def run(tmp_path_factory: pytest.TempPathFactory) -> Run:
    return open_run(write_synthetic_run(tmp_path_factory.mktemp("reference"), sites=16, times=5))


@pytest.fixture
def wave(tmp_path: Path) -> Path:
    (tmp_path / "beside.py").write_text("amplitude = 0.06\n")
    (tmp_path / "theory.py").write_text(WAVE)
    return tmp_path / "theory.py"


def test_nothing_is_imported_without_consent(run: Run, tmp_path: Path) -> None:
    file = tmp_path / "trap.py"
    file.write_text(
        f"open({str(tmp_path / 'sprung')!r}, 'w').close()\ndef f(times, positions): return {{}}\n"
    )
    for target in (f"{file}:f", f"{tmp_path / 'nowhere.py'}:f"):
        answer = call("judge", target, "--against", run.path)
        assert (answer.code, len(answer.lines)) == (2, 2)
        assert (
            "is Python code, which is not run unless you say so; if you trust it, add --run-code"
            in answer.err
        )
    for source in (f"{file}:f", file):
        with pytest.raises(InputError):
            judge(source, run)
    assert not (tmp_path / "sprung").exists()
    assert call("judge", f"{file}:f", "--against", run.path, "--run-code").code == 2
    assert (tmp_path / "sprung").exists()


def test_function_is_judged_like_the_table_of_its_values(run: Run, wave: Path, tmp_path: Path) -> None:
    times = run.coordinates["time"].values[1:]
    t, bond, site = times[:, None], run.coordinates["bond"].values, run.coordinates["site"].values
    fields = {
        "energy_density": (bond, -0.2 + 0.06 * np.tanh(-bond / (1 + t))),
        "charge_current": (bond, 0.0 * bond * t),
        "charge_density": (site, 0.01 * site * t),
    }
    rows = [grid_columns(name, times, places, values) for name, (places, values) in fields.items()]
    (tmp_path / "same.csv").write_text(table(rows))
    by_table = judge(tmp_path / "same.csv", run)
    by_function = judge(f"{wave}:wave", run, run_code=True)
    by_object = judge(lambda *_: {name: values for name, (_, values) in fields.items()}, run)
    for found in (by_function, by_object):
        assert [each.name for each in found.observables] == [each.name for each in by_table.observables]
        for one, other in zip(found.observables, by_table.observables, strict=True):
            assert one.used == other.used
            assert one.found.rms == pytest.approx(other.found.rms, rel=1e-9)
            assert one.passed == other.passed
    assert OBSERVABLE_PLACES["charge_density"] == "site"


def test_what_a_function_prints_is_no_part_of_the_result(run: Run, wave: Path) -> None:
    before = (list(sys.path), set(sys.modules))
    answer = call("judge", f"{wave}:wave", "--against", run.path, "--run-code", "--json")
    assert answer.code == 4
    assert answer.out.startswith("{")
    assert "at work" in answer.err
    assert "computed by the code of" in answer.out
    assert list(sys.path) == before[0]
    assert not {"beside", "candidate_of_tnquench"} & (set(sys.modules) - before[1])
    assert not (wave.parent / "__pycache__").exists()


SAID = {
    "raises": "line 2, in f: ZeroDivisionError: division by zero",
    "exits": "line 3, in f: SystemExit",
    "exits when loaded": "line 1, in <module>: SystemExit",
    "is no Python": "line 1: SyntaxError",
    "is missing": "holds no function f",
    "is no function": "f is no function",
    "returns nothing": "returned NoneType; return a mapping",
    "returns unknown names": "no observable among the observables; allowed",
    "returns the transpose": "energy_density: shape (15, 4); allowed: (time, bond) = (4, 15)",
    "returns sites for bonds": "energy_density: shape (4, 16); allowed: (time, bond) = (4, 15)",
    "returns complex numbers": "return an array of real numbers",
    "returns nan": "energy_density at t = 0.5, x = -7: nan is not a finite number",
    "recurses": "line 2, in f: RecursionError",
}


@pytest.mark.parametrize("kind", FUNCTIONS)
def test_every_fault_of_a_function_is_one_line(run: Run, tmp_path: Path, kind: str) -> None:
    file = tmp_path / "theory.py"
    file.write_text(FUNCTIONS[kind])
    found = watched("judge", f"{file}:f", "--against", run.path, "--run-code")
    assert not found.faults, found.faults
    assert (found.answer.code, len(found.answer.lines)) == (2, 2)
    assert SAID.get(kind, "") in found.answer.err


def test_what_cannot_be_a_function_is_refused(run: Run, tmp_path: Path) -> None:
    (tmp_path / "a.py").write_text("def f(times, positions): return {}\n")
    (tmp_path / "folder.py").mkdir()
    for target, said in (
        ("nowhere.py:f", "no such file"),
        ("folder.py:f", "is not a regular file"),
        ("a.py", "is Python code; name a function in it"),
        ("a.py:", "no such file"),
        ("a.py:f.g", "no such file"),
        ("a.py:1", "no such file"),
    ):
        answer = call("judge", f"{tmp_path}/{target}", "--against", run.path, "--run-code")
        assert (answer.code, len(answer.lines)) == (2, 2)
        assert said in answer.err
