"""The command `sweep` from end to end, its table, and that tasks of either kind give the same dataset."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest

from tests.command_line import call
from tests.config_cases import toml
from tests.sweep_cases import Rehearsal, four_points
from tnquench.cluster.sweep import cores
from tnquench.cluster.tasks import quenches_of
from tnquench.config.load import read_config
from tnquench.dataset.checkpoint import save_checkpoint
from tnquench.dataset.integrity import read_contents
from tnquench.quantum_of import all_quenches
from tnquench.stretch_of import stretched_config, stretched_folder


@pytest.fixture
def stage(tmp_path: Path) -> Rehearsal:
    """A sweep of which one point is done, one failed, one was stopped, one waits."""
    stage = Rehearsal(tmp_path, four_points(tmp_path), {}, jobs=1)
    _, failed, stopped, _ = stage.names
    stage.plan({failed: [{"code": 1}], stopped: [{"code": 3}]})
    stage.sweep.carry_out(stage.sweep.points[:3], tell=stage.said.append)
    header = {"quench": "main", "time": 0.5, "until": 1.0, "stage": "evolution", "finished": False}
    checkpoints = stage.sweep.folder / stopped / "checkpoints"
    checkpoints.mkdir()
    save_checkpoint(checkpoints / "main-1234.h5", {"header": {**header, "time": 0.0}})
    save_checkpoint(checkpoints / "main-1234.h5", {"header": header})
    save_checkpoint(checkpoints / "start-1234.h5", {"header": {**header, "stage": "start", "time": 9.0}})
    return stage


def test_the_table_shows_how_every_point_stands(tmp_path, stage):
    answer = call("sweep", tmp_path / "small.toml", "--into", stage.sweep.folder, "--status")
    done, failed, stopped, waiting = stage.names
    log = stage.sweep.folder / failed / "log.txt"
    assert answer.code == 0
    assert [line.split() for line in answer.out.splitlines()] == [
        ["point", "state", "reached"],
        [done, "done", "t", "=", "1", "of", "1"],
        [failed, "failed", "t", "=", "0", "of", "1", "failed,", "see", str(log)],
        [stopped, "stopped", "at", "t", "=", "0.5", "t", "=", "0.5", "of", "1"],
        [waiting, "waiting", "t", "=", "0", "of", "1"],
    ]
    assert answer.lines == [
        f"{failed}: failed, see {log}",
        f"    try 0 of {failed}",
        "4 points: 1 done, 1 stopped, 1 waiting, 1 failed; --retry runs failed points again",
    ]


def test_the_table_as_json(tmp_path, stage):
    answer = call("sweep", tmp_path / "small.toml", "--into", stage.sweep.folder, "--status", "--json")
    rows = json.loads(answer.out)
    assert [row["state"] for row in rows] == ["done", "failed", "stopped", "waiting"]
    assert [row["time"] for row in rows] == [1.0, 0.0, 0.5, 0.0]
    assert rows[0]["wall_seconds"] == 12.5
    assert rows[1]["log"] == [f"try 0 of {stage.names[1]}"]


@pytest.mark.parametrize(
    ("words", "complaint"),
    [
        (["--engine", "slrum"], "must be local, dask, slurm"),
        (["--tasks", "x"], "must be runs, quenches"),
        (["--walltime", "soon"], "must be a time"),
        (["--memory", "8G"], "must be a size"),
        (["--partition", "--wrap=x"], "must be one plain word"),
        (["--scheduler", "here"], "must be the address of a Dask scheduler"),
        (["--jobs", "0"], "greater than or equal to 1"),
        (["--setup", "no-such-file", "--engine", "slurm"], "no such file"),
        (["--setup", "a-file"], "read by the jobs of Slurm alone, not by engine local"),
    ],
)
def test_options_are_checked(tmp_path, words, complaint):
    answer = call("sweep", four_points(tmp_path), "--into", tmp_path / "x", *words)
    assert answer.code == 2
    assert complaint in answer.err
    assert not (tmp_path / "x").exists()


def test_a_config_with_a_sweep_is_not_one_run(tmp_path):
    config = four_points(tmp_path)
    answer = call("run", config, "--into", tmp_path / "x")
    assert answer.code == 2
    assert f"run them with: tnquench sweep {config}" in answer.err
    assert not (tmp_path / "x" / "run.h5").exists()


def test_cores_are_divided_among_the_tasks(tmp_path, monkeypatch):
    stage = Rehearsal(tmp_path, four_points(tmp_path), {})
    monkeypatch.setattr("tnquench.cluster.sweep.cores", lambda: 16)
    assert cores() > 0

    def shares(points: int, **options: object) -> tuple[int, int]:
        cluster = stage.sweep.cluster.model_copy(update=options)
        jobs, limits = type(stage.sweep)(stage.sweep.points, stage.sweep.folder, cluster).shares(points)
        return jobs, limits.threads

    assert shares(4) == (4, 4)
    assert shares(1) == (1, 5), "few runs use more"
    assert shares(100) == (16, 1)
    assert shares(100, threads=4) == (4, 4)
    assert shares(100, jobs=2) == (2, 5)
    assert shares(2, tasks="quenches") == (6, 2)  # four sites: a main quench and two companions
    assert shares(100, engine="slurm") == (100, 1)
    assert shares(3, engine="dask") == (3, 1)
    assert shares(30, engine="dask", scheduler="tcp://a:1") == (30, 1)


def test_quenches_are_those_of_the_run():
    for sites, budget in ((4, {}), (8, {}), (8, {"companions": "none"})):
        tables = {
            "chain": {"sites": sites, "anisotropy": 0.5},
            "start": {"beta": {"shape": "step", "left": 0.5, "right": 2.0}},
            "evolution": {"until": 1.0, "every": 0.5, "discarded_weight": 1e-8},
            "budget": budget,
        }
        config = read_config(toml(tables), subject="a")
        assert quenches_of(config) == tuple(all_quenches(config))
    study = read_config(toml({**tables, "budget": {}, "stretch": {"factors": [1, 2.5, 0.5]}}), subject="a")
    expected = [*all_quenches(study)]
    for factor in (0.5, 2.5):
        names = all_quenches(stretched_config(study, factor))
        expected += [f"{stretched_folder(factor)}/{name}" for name in names]
    assert list(quenches_of(study)) == expected
    evolution = {"until": 1.0, "every": 0.5, "accuracy": 1e-4}
    chosen = read_config(toml({**tables, "budget": {}, "evolution": evolution}), subject="a")
    assert quenches_of(chosen) == (), "the run chooses its weight first"


def test_runs_and_quenches_as_tasks_give_the_same_dataset(tmp_path):
    tables = {
        "chain": {"sites": 6, "anisotropy": 0.5},
        "start": {"beta": {"shape": "step", "left": 0.5}},
        "evolution": {"until": 0.5, "every": 0.5, "discarded_weight": 1e-6},
        "hydrodynamics": {"levels": []},
        "sweep": {"grid": {"start.beta.right": [2.0]}},
    }
    config = tmp_path / "one.toml"
    config.write_text(toml(tables))
    for tasks in ("runs", "quenches"):
        answer = call("sweep", config, "--into", tmp_path / tasks, "--tasks", tasks, "--jobs", 2)
        assert answer.code == 0, answer.err
        assert answer.out.strip() == str(tmp_path / tasks)
        assert answer.lines[-1] == "1 point: 1 done"
    one, other = (
        read_contents(tmp_path / tasks / "beta_right_2" / "run.h5") for tasks in ("runs", "quenches")
    )
    assert one.variables.keys() == other.variables.keys()
    for name, variable in one.variables.items():
        if "seconds" not in name:
            np.testing.assert_array_equal(other.variables[name].values, variable.values, err_msg=name)
