"""The engine `dask`: same results as here, workers that are lost, a scheduler that is not there."""

from __future__ import annotations

import signal
import sys

import pytest

from tests.dask_cases import carry_out
from tests.sweep_cases import Rehearsal, four_points, write_sweep
from tnquench.errors import InputError

pytest.importorskip("distributed", reason="dask.distributed is not installed")


def test_workers_here_do_all_tasks_and_those_of_a_lost_worker_again(tmp_path):
    config = four_points(tmp_path)
    stage = Rehearsal(tmp_path, config, {})
    good, failing, lost, stopped = stage.names
    stage.plan({failing: [{"code": 1}], lost: [{"kill_worker": True}, {}], stopped: [{"code": 3}]})
    done = carry_out(stage, config, jobs=2)
    assert done.returncode == 0, done.stderr
    assert stage.states() == {good: "done", failing: "failed", lost: "done", stopped: "waiting"}
    assert [len(stage.tries(name)) for name in stage.names] == [1, 1, 2, 1]
    assert "points: 4, tasks: 4, dask: 2 at once, 1 thread each" in done.stdout
    assert f"{failing}: failed" in done.stdout
    log = (stage.sweep.folder / lost / "log.txt").read_text()
    assert f"stopped by {signal.SIGTERM.name}" in log, (
        "the task of a lost worker stops before it is done again"
    )


def test_a_scheduler_elsewhere_is_given_all_tasks(tmp_path):
    config = write_sweep(tmp_path, {"grid": {"chain.sites": [4, 8]}})
    stage = Rehearsal(tmp_path, config, {})
    first, second = stage.names
    stage.plan({f"{first}/main": [{"seconds": 0.5}], f"{second}/main": [{"code": 1}]})
    done = carry_out(stage, config, begin_scheduler=True, tasks="quenches")
    assert done.returncode == 0, done.stderr
    assert stage.states() == {first: "done", second: "failed"}
    ended = (stage.home / "ended.txt").read_text().split()
    assert len(ended) == 3 + 4 + 1  # quenches of either point, and the run of the first
    assert ended.index(first) > ended.index(f"{first}/main"), "the run comes after its quenches"


def test_a_scheduler_that_does_not_answer_is_named(tmp_path, monkeypatch):
    monkeypatch.setattr("tnquench.cluster.dask_engine.PATIENCE", "1s")
    address = "tcp://127.0.0.1:9"
    stage = Rehearsal(tmp_path, four_points(tmp_path), {}, engine="dask", scheduler=address)
    with pytest.raises(InputError) as caught:
        stage.run()
    assert caught.value.problems == (f"no scheduler answers at {address}",)


def test_without_dask_the_message_says_what_to_install(tmp_path, monkeypatch):
    monkeypatch.setitem(sys.modules, "distributed", None)
    stage = Rehearsal(tmp_path, four_points(tmp_path), {}, engine="dask")
    with pytest.raises(InputError, match=r"pip install 'tnquench\[cluster\]'"):
        stage.run()
    assert not (stage.sweep.folder / stage.names[0] / "log.txt").exists()
