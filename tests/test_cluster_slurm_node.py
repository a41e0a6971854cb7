"""Single jobs on a real Slurm, a cluster of this one machine, with a stand-in for the program."""

from __future__ import annotations

from collections.abc import Iterator

import pytest

from tests.dask_cases import carry_out
from tests.slurm_node import Node, eventually, missing, slurm_node
from tests.sweep_cases import Rehearsal, four_points, write_sweep

pytestmark = [pytest.mark.slurm, pytest.mark.skipif(bool(missing()), reason=missing())]


@pytest.fixture(scope="module")
def node() -> Iterator[Node]:
    with slurm_node(cores=4, largest_array=3) as running:
        yield running


@pytest.fixture
def here(node: Node, monkeypatch: pytest.MonkeyPatch) -> Node:
    return node.found_by(monkeypatch)


@pytest.mark.usefixtures("here")
def test_notice_of_the_limit_stops_a_task_and_puts_it_back(tmp_path):
    config = write_sweep(tmp_path, {"grid": {"chain.sites": [8]}})
    stage = Rehearsal(tmp_path, config, {}, engine="slurm", walltime="1m", notice="55s")
    (name,) = stage.names
    stage.plan({name: [{"seconds": 50.0}, {}]})
    stage.run()
    eventually(lambda: stage.states()[name] == "done", 90.0)
    log = (stage.sweep.folder / name / "log.txt").read_text()
    assert "stopped by SIGUSR1" in log
    assert "exit code 3" in log
    assert len(stage.tries(name)) == 2
    (output,) = (stage.sweep.folder / "slurm").glob("*.txt")
    assert "stopped, back into the queue" in output.read_text()


def test_runs_begin_when_their_quenches_are_through(tmp_path, here):
    config = write_sweep(tmp_path, {"grid": {"chain.sites": [4, 8]}})
    stage = Rehearsal(tmp_path, config, {}, engine="slurm", tasks="quenches")
    first, second = stage.names
    stage.plan({f"{second}/step_2": [{"code": 1}]})
    stage.run()
    eventually(lambda: not here.call("squeue", "--noheader"), 90.0)
    ended = (stage.home / "ended.txt").read_text().split()
    assert ended.index(first) > max(ended.index(task) for task in ended if task.startswith(f"{first}/"))
    assert second not in ended, "a run whose quench failed does not begin"
    assert stage.states() == {first: "done", second: "failed"}


@pytest.mark.usefixtures("here")
def test_dask_asks_slurm_for_workers(tmp_path):
    pytest.importorskip("dask_jobqueue", reason="dask-jobqueue is not installed")
    config = four_points(tmp_path, cluster={"memory": "300MB", "walltime": "10m"})
    stage = Rehearsal(tmp_path, config, {})
    done = carry_out(stage, config, scheduler="slurm", jobs=2)
    assert done.returncode == 0, done.stderr
    assert "2 workers asked of Slurm" in done.stdout
    assert set(stage.states().values()) == {"done"}
    assert len(list((stage.sweep.folder / "slurm").glob("*.out"))) == 2
