"""Commands that compute and write: whole runs, forecasts, failures on the way, interruptions."""

from __future__ import annotations

import errno
import json
import os
import shutil
import signal
import time
from concurrent.futures.process import BrokenProcessPool
from pathlib import Path
from typing import NoReturn

import numpy as np
import pytest
import typer

from tests.command_line import Answer, call, config_file, start
from tests.synthetic_run import NAMES, write_synthetic_run
from tnquench import open_run
from tnquench.checkpoints import CHECKPOINTS
from tnquench.errors import ConvergenceError, StateError


@pytest.fixture(scope="module")
def finished(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, Answer]:
    """A whole run on two threads in a process of its own: its folder and what the command answered."""
    folder = tmp_path_factory.mktemp("run")
    process = start("run", config_file(folder), "--into", folder / "results", "--threads", 2)
    out, err = process.communicate(timeout=120)
    return folder / "results", Answer(process.returncode, out, err)


def test_run_prints_its_folder_alone(finished: tuple[Path, Answer]) -> None:
    folder, answer = finished
    assert (answer.code, answer.out) == (0, f"{folder}\n"), answer.err


def test_run_tells_each_stage_in_one_line_and_then_the_verdict(finished: tuple[Path, Answer]) -> None:
    _, answer = finished
    expected = ["prediction", "main run: 8 sites, t up to 0.5, discarded weight 1e-8, step 0.1667"]
    expected += [f"companion {name}" for name in ("weight_30", "step_2", "length")]
    expected += ["budget and dataset", "report"]
    assert answer.lines[: len(expected)] == expected
    assert "energy density" in answer.lines[len(expected)]


def test_run_leaves_dataset_report_and_figures(finished: tuple[Path, Answer]) -> None:
    folder, _ = finished
    assert {entry.name for entry in folder.iterdir()} == {"run.h5", "report.html", "figures", "checkpoints"}
    dataset = open_run(folder)
    assert set(NAMES) <= set(dataset.quantum)
    assert list(dataset.hydrodynamics) == ["euler"]
    assert len(dataset.companions) == 3


def test_dataset_of_a_run_is_sound(finished: tuple[Path, Answer]) -> None:
    folder, _ = finished
    for path in (folder, folder / "run.h5"):
        assert call("check", path) == Answer(0, f"{path}: sound and complete\n", "")


def test_one_thread_gives_the_same_numbers(
    finished: tuple[Path, Answer], tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    folder, _ = finished
    monkeypatch.setattr("tnquench.run.write_report", lambda _folder: None)  # seconds, and not in question
    assert call("run", config_file(tmp_path), "--into", tmp_path / "again", "--threads", 1).code == 0
    twice, once = open_run(folder), open_run(tmp_path / "again")
    for name in NAMES:
        np.testing.assert_allclose(once.quantum[name], twice.quantum[name], rtol=0.0, atol=1e-12)


def test_report_is_rebuilt_from_the_dataset_alone(finished: tuple[Path, Answer], tmp_path: Path) -> None:
    folder, _ = finished
    shutil.copy(folder / "run.h5", tmp_path)
    page = tmp_path / "report.html"
    assert call("report", tmp_path / "run.h5") == Answer(0, f"{page}\n", "report\n")
    assert page.stat().st_size == pytest.approx((folder / "report.html").stat().st_size, rel=0.01)


# --- forecast and prediction alone


def test_forecast_foretells_the_run(finished: tuple[Path, Answer], tmp_path: Path) -> None:
    """Of a run of half a second only sizes can be foretold: bonds to 30 %, disk to 25 %."""
    folder, _ = finished
    answer = call("forecast", config_file(tmp_path), "--threads", 3, "--json")
    assert (answer.code, answer.err) == (0, "pilot runs\n")
    numbers = json.loads(answer.out)
    dataset = open_run(folder)
    assert numbers["time"] == dataset.quantum["time"].values.tolist()
    found = dataset.quantum["bond_dimension"].values.max(axis=1)
    np.testing.assert_allclose(numbers["bond_dimension"][1:], found[1:], rtol=0.3, atol=0.0)
    assert numbers["disk_bytes"] == pytest.approx((folder / "run.h5").stat().st_size, rel=0.25)
    assert numbers["companions"] == 3
    assert numbers["total_memory_bytes"] == 3 * numbers["memory_bytes"]
    assert numbers["wall_seconds"] == max(numbers["main_seconds"], numbers["companion_seconds"] / 2)
    assert [entry.name for entry in tmp_path.iterdir()] == ["tiny.toml"]


def test_forecast_table_has_a_unit_in_every_line(tmp_path: Path) -> None:
    answer = call("forecast", config_file(tmp_path), "--threads", 1)
    assert answer.code == 0
    lines = answer.out.splitlines()
    bonds = [line for line in lines if line.startswith("largest bond dimension at t = ")]
    assert len(bonds) == 2
    assert all(line.split()[-1].isdigit() for line in bonds)
    assert all(line.split()[-1] in {"ms", "s", "min", "kB", "MB"} for line in lines if line not in bonds)
    assert any(line.startswith("all simulations on 1 thread ") for line in lines)


def test_hydro_writes_a_sound_prediction_alone(tmp_path: Path) -> None:
    answer = call("hydro", config_file(tmp_path), "--into", tmp_path / "theory")
    assert answer == Answer(0, f"{tmp_path / 'theory'}\n", "prediction\n")
    assert call("check", tmp_path / "theory").code == 0
    assert not len(open_run(tmp_path / "theory").quantum)


def test_default_folders_are_named_for_the_config(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)
    assert call("hydro", config_file(tmp_path).name).out == f"{Path('results', 'tiny-hydro')}\n"
    assert (tmp_path / "results" / "tiny-hydro" / "run.h5").is_file()


# --- a dataset that is not what it was


def test_damaged_dataset_gets_the_answer_no(tmp_path: Path) -> None:
    file = write_synthetic_run(tmp_path, sites=8, times=4)
    image = bytearray(file.read_bytes())
    image[len(image) // 2] ^= 0xFF
    file.write_bytes(image)
    answer = call("check", tmp_path)
    assert (answer.code, answer.out) == (4, "")
    assert answer.lines[0] == f"{tmp_path}: verdict negative"
    assert len(answer.lines) == 2
    assert call("report", tmp_path).code == 2


def test_file_that_only_is_called_a_dataset_is_checked_as_one(tmp_path: Path) -> None:
    file = tmp_path / "run.h5"
    file.write_text("[chain]")
    assert call("check", file).lines == [f"{file}: verdict negative", "  not an HDF5 file"]


def test_dataset_under_another_name_is_recognised(tmp_path: Path) -> None:
    file = write_synthetic_run(tmp_path, sites=8, times=4).rename(tmp_path / "dataset")
    assert call("check", file) == Answer(0, f"{file}: sound and complete\n", "")


# --- what goes wrong on the way


def failing(monkeypatch: pytest.MonkeyPatch, error: BaseException) -> None:
    def fail(*_words: object, **_options: object) -> NoReturn:
        raise error

    monkeypatch.setattr("tnquench.terminal.running.load_config", fail)


FAILURES = [
    (RuntimeError("of\nsome kind"), 1, "a defect of the program (RuntimeError: of some kind); please run"),
    (KeyError(), 1, "a defect of the program (KeyError: no message)"),
    (StateError("not finite"), 1, "not finite"),
    (ConvergenceError("an iteration", residual=1e-3), 1, "an iteration did not converge"),
    (MemoryError(), 1, "out of memory"),
    (BrokenProcessPool(), 1, "a companion's process was ended from outside"),
    (OSError(errno.ENOSPC, os.strerror(errno.ENOSPC)), 1, "No space left on device"),
    (KeyboardInterrupt(), 130, "interrupted; no file is left half-written"),
    (typer.Abort(), 130, "interrupted; no file is left half-written"),
]


@pytest.mark.parametrize(("error", "code", "message"), FAILURES, ids=lambda value: type(value).__name__)
def test_failure_is_told_in_one_line(
    monkeypatch: pytest.MonkeyPatch, error: BaseException, code: int, message: str
) -> None:
    failing(monkeypatch, error)
    answer = call("run", "a.toml")
    assert (answer.code, answer.out) == (code, "")
    assert len(answer.lines) == 1
    assert answer.err.startswith(f"tnquench: {message}")


@pytest.mark.parametrize("words", [("--debug", "run", "a.toml"), ("run", "a.toml", "--debug")])
def test_debug_shows_the_traceback(monkeypatch: pytest.MonkeyPatch, words: tuple[str, ...]) -> None:
    failing(monkeypatch, RuntimeError("of some kind"))
    answer = call(*words)
    assert (answer.code, answer.out) == (1, "")
    assert answer.lines[0] == "Traceback (most recent call last):"
    assert answer.lines[-1].startswith("tnquench: a defect of the program")


@pytest.mark.parametrize(("sign", "threads"), [(signal.SIGINT, 1), (signal.SIGTERM, 2)])
def test_interrupted_run_leaves_a_checkpoint(tmp_path: Path, sign: signal.Signals, threads: int) -> None:
    file = config_file(tmp_path, until=500.0, discarded_weight=1e-14)
    process = start("run", file, "--into", tmp_path / "results", "--threads", threads)
    assert process.stderr is not None
    assert process.stderr.readline() == "prediction\n"
    assert process.stderr.readline().startswith("no prediction: [evolution] until = 500: light")
    assert process.stderr.readline().startswith("main run")
    time.sleep(0.5)
    process.send_signal(sign)
    out, err = process.communicate(timeout=20)
    assert (process.returncode, out) == (3, "")
    why = "interrupted" if sign == signal.SIGINT else "asked to end (SIGTERM)"
    assert err == f"tnquench: stopped, {why}; the same command goes on from the checkpoints\n"
    assert [entry.name for entry in (tmp_path / "results").iterdir()] == [CHECKPOINTS]
    assert len(list((tmp_path / "results" / CHECKPOINTS).glob("main-*.h5"))) == 1
    assert group_is_gone(process.pid), "a companion goes on behind our back"


@pytest.mark.parametrize("sign", [signal.SIGTERM, signal.SIGUSR1])
def test_a_run_asked_again_and_again_ends_as_asked_once(tmp_path: Path, sign: signal.Signals) -> None:
    """Slurm asks every process of a job, and our own parent passes it on."""
    file = config_file(tmp_path, until=500.0, discarded_weight=1e-14)
    process = start("run", file, "--into", tmp_path / "results", "--threads", 1)
    assert process.stderr is not None
    assert any(line.startswith("main run") for line in process.stderr)
    deadline = time.monotonic() + 20
    while process.poll() is None and time.monotonic() < deadline:
        process.send_signal(sign)
        time.sleep(0.002)
    _, err = process.communicate(timeout=20)
    assert process.returncode == 3, err
    assert err.startswith("tnquench: stopped, asked to end")


def group_is_gone(group: int) -> bool:
    """Whether every process of a group ends within a few seconds."""
    for _ in range(50):
        try:
            os.killpg(group, 0)
        except ProcessLookupError:
            return True
        time.sleep(0.1)
    return False
