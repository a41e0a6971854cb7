"""The engine `local`, and the folders that are the state of a sweep, with a stand-in for the program."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import threading
import time
from collections.abc import Callable
from pathlib import Path

import psutil
import pytest

from tests.sweep_cases import Rehearsal, four_points, write_dataset, write_sweep
from tnquench.cluster.attempt import attempt
from tnquench.cluster.occupied import occupant
from tnquench.cluster.tasks import Limits, Task
from tnquench.dataset.lock import folder_lock
from tnquench.errors import InputError


def until(happened: Callable[[], object], seconds: float = 10.0) -> None:
    deadline = time.monotonic() + seconds
    while not happened():
        assert time.monotonic() < deadline, "waited in vain"
        time.sleep(0.01)


def rehearse(folder: Path, plan: dict[str, list[dict[str, object]]], **options: object) -> Rehearsal:
    return Rehearsal(folder, four_points(folder), plan, **{"jobs": 2, "threads": 1, **options})


def test_every_point_runs_once_with_its_own_config(tmp_path):
    stage = rehearse(tmp_path, {}, walltime="90s", memory="2GB", threads=3)
    assert set(stage.states().values()) == {"waiting"}
    assert stage.run() == dict.fromkeys(stage.names, "done")
    for name, point in zip(stage.names, stage.sweep.points, strict=True):
        (attempt,) = stage.tries(name)
        folder = (tmp_path / "sweep" / name).resolve()
        assert attempt["words"] == [
            "run", str(folder / "config.toml"), "--into", str(folder),
            "--threads", "3", "--walltime", "90s", "--memory", "2000MB",
        ]  # fmt: skip
        text = (folder / "config.toml").read_text()
        assert "[sweep]" not in text
        assert f"anisotropy = {point.settings['chain.anisotropy']}" in text
    assert stage.run() == dict.fromkeys(stage.names, "done")
    assert all(len(stage.tries(name)) == 1 for name in stage.names), "what is done is not done again"


def test_only_what_is_missing_runs(tmp_path):
    stage = rehearse(tmp_path, {})
    first, second, *others = stage.sweep.points
    write_dataset(stage.sweep.folder / first.name, first)
    assert stage.states()[first.name] != "done", "it has no report yet"
    (stage.sweep.folder / first.name / "report.html").touch()
    with folder_lock(stage.sweep.folder / second.name):
        assert stage.states()[second.name] == "running"
        states = stage.run()
    assert states == {first.name: "done", second.name: "running"} | {each.name: "done" for each in others}
    assert [len(stage.tries(name)) for name in stage.names] == [0, 0, 1, 1]


def test_jobs_run_side_by_side_and_no_more(tmp_path):
    stage = rehearse(tmp_path, {})
    stage.plan({name: [{"seconds": 1.5}] for name in stage.names})
    most = 0
    thread = threading.Event()

    def watch() -> None:
        nonlocal most
        while not thread.wait(0.02):
            pids = [each["pid"] for name in stage.names for each in stage.tries(name)]
            ended = (
                (stage.home / "ended.txt").read_text().split() if (stage.home / "ended.txt").exists() else []
            )
            most = max(most, len(pids) - len(ended))

    watcher = threading.Thread(target=watch)
    watcher.start()
    stage.run()
    thread.set()
    watcher.join()
    assert most == 2


def test_failures_are_told_and_retried_on_request(tmp_path):
    stage = rehearse(tmp_path, {})
    bad, stopped, *_ = stage.names
    stage.plan({bad: [{"code": 1}, {}], stopped: [{"code": 3}, {}]})
    states = stage.run()
    assert (states[bad], states[stopped]) == ("failed", "waiting")
    stands = {each.name: each for each in stage.sweep.standings()}
    assert stands[bad].lines == (f"try 0 of {bad}",)
    assert stands[bad].detail == f"failed, see {stage.sweep.folder / bad / 'log.txt'}"
    states = stage.run()
    assert (states[bad], states[stopped]) == ("failed", "done"), "a stopped point goes on, a failed one waits"
    assert stage.run(retry=True) == dict.fromkeys(stage.names, "done")
    log = (stage.sweep.folder / bad / "log.txt").read_text().splitlines()
    assert [line[:4] for line in log] == ["== 2", "try ", "== 2"] * 2
    assert "exit code 1 (failed)" in log[2]


def test_a_process_ended_from_outside_is_tried_again(tmp_path):
    stage = rehearse(tmp_path, {})
    lost, hopeless, *_ = stage.names
    stage.plan({lost: [{"signal": signal.SIGKILL}, {}], hopeless: [{"signal": signal.SIGKILL}]})
    states = stage.run()
    assert (states[lost], len(stage.tries(lost))) == ("done", 2)
    assert (states[hopeless], len(stage.tries(hopeless))) == ("failed", 3)
    (stands,) = (each for each in stage.sweep.standings() if each.name == hopeless)
    assert stands.detail.startswith("ended by SIGKILL")


def test_quenches_come_before_the_run_that_needs_them(tmp_path):
    grid = {"chain.sites": [8, 10]}
    stage = Rehearsal(tmp_path, write_sweep(tmp_path, {"grid": grid}), {}, jobs=3, tasks="quenches")
    first, second = stage.names
    stage.plan({f"{second}/step_2": [{"code": 1}], f"{first}/main": [{"seconds": 0.5}]})
    states = stage.run()
    ended = (stage.home / "ended.txt").read_text().split()
    quenches = ["main", "weight_30", "step_2", "length"]
    assert set(ended) == {first, *(f"{name}/{quench}" for name in stage.names for quench in quenches)}
    assert ended.index(first) > ended.index(f"{first}/main")
    assert states == {first: "done", second: "failed"}
    (attempt,) = stage.tries(f"{first}/main")
    assert attempt["words"][-2:] == ["--only", "main"]
    assert (stage.sweep.folder / first / "log-main.txt").exists()
    assert stage.run(retry=True)[second] == "failed"
    stage.plan({})
    assert stage.run(retry=True)[second] == "done"


@pytest.mark.parametrize("times", [1, 2])
def test_signals_stop_the_tasks_and_the_second_kills_them(tmp_path, times):
    stage = rehearse(tmp_path, {})
    stage.plan({name: [{"seconds": 30.0}] for name in stage.names})
    if times == 2:  # deaf to requests
        script = stage.home / "program.py"
        script.write_text(script.read_text().replace("stopped.append(number)", "None"))

    def ask() -> None:
        until(lambda: sum(len(stage.tries(name)) for name in stage.names) == 2)
        for _ in range(times):
            time.sleep(0.3)
            os.kill(os.getpid(), signal.SIGTERM)

    asking = threading.Thread(target=ask)
    asking.start()
    states = stage.run()
    asking.join()
    tries = [stage.tries(name) for name in stage.names]
    assert [len(each) for each in tries] == [1, 1, 0, 0], "no more tasks begin"
    assert not any(psutil.pid_exists(attempt["pid"]) for each in tries for attempt in each)
    said = "SIGTERM: stopping, with their checkpoints, 2 running tasks; once more kills them"
    assert said in stage.said
    assert set(states.values()) == {"waiting"}, "whom the user has ended has not failed"


ORPHANAGE = """
import sys, time
from pathlib import Path
from tnquench.cluster.attempt import Attempt
from tnquench.cluster.tasks import Limits, Task
task = Task("p", Path(sys.argv[1]), Limits(), program=tuple(sys.argv[2:]))
Attempt(task)
time.sleep(30)
"""


@pytest.mark.skipif(sys.platform != "linux", reason="Linux tells a process that its parent has ended")
def test_a_task_stops_when_the_process_that_began_it_is_killed(tmp_path):
    stage = rehearse(tmp_path, {"p": [{"seconds": 30.0}]})
    folder = tmp_path / "p"
    folder.mkdir()
    words = [sys.executable, "-c", ORPHANAGE, str(folder), *stage.sweep.program]
    parent = subprocess.Popen(words, cwd=Path(__file__).parents[1])
    try:
        until(lambda: stage.tries("p"), seconds=20.0)
    finally:
        parent.kill()
        parent.wait()
    until(lambda: not psutil.pid_exists(stage.tries("p")[0]["pid"]))
    assert "stopped by SIGTERM" in (folder / "log.txt").read_text()


def test_a_folder_that_cannot_be_written(tmp_path):
    stage = rehearse(tmp_path, {})
    stage.sweep.folder.write_text("a file where the folder should be")
    with pytest.raises(InputError, match="cannot be written"):
        stage.run()


def test_a_task_waits_until_whoever_writes_there_has_left(tmp_path):
    stage = rehearse(tmp_path, {})
    folder = tmp_path / "p"
    task = Task("p", folder, Limits(), quench="main", program=stage.sweep.program)
    with folder_lock(folder, name=".lock-step_2"), folder_lock(folder, name=".lock-main"):
        assert occupant(folder) is not None
        waiting = threading.Thread(target=attempt, args=(task,))
        waiting.start()
        time.sleep(0.5)
        assert not stage.tries("p/main")
    with folder_lock(folder, name=".lock-step_2"):  # another quench is no hindrance
        waiting.join(20.0)
        assert len(stage.tries("p/main")) == 1
        assert occupant(folder) is not None
    assert occupant(folder) is None


def test_one_folder_that_cannot_be_written_leaves_the_others_alone(tmp_path):
    stage = rehearse(tmp_path, {})
    (stage.sweep.folder / stage.names[0] / "log.txt").mkdir(parents=True)
    states = stage.run()
    assert [states[name] for name in stage.names[1:]] == ["done"] * 3
    assert any("log.txt: 1 problem" in line for line in stage.said)
    assert not stage.tries(stage.names[0])
