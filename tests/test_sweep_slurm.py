"""Job arrays on a real Slurm, a cluster of this one machine."""

from __future__ import annotations

import json
import re
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import numpy as np
import pytest

from tests.config_cases import toml
from tests.slurm_node import Node, eventually, missing, slurm_node
from tnquench.cluster.slurm import FOLDER_NAME, SUBMITTED
from tnquench.dataset.integrity import read_contents

pytestmark = [pytest.mark.slurm, pytest.mark.skipif(bool(missing()), reason=missing())]

#: Four small runs, the last of them of some seconds, so that it is put back into the queue in its midst.
FOUR = {
    "title": "Four",
    "chain": {"anisotropy": 0.5},
    "start": {"beta": {"shape": "step", "left": 0.5, "right": 2.0}},
    "evolution": {"every": 0.5, "discarded_weight": 1e-8},
    "hydrodynamics": {"levels": []},
    "budget": {"companions": "none"},
    "sweep": {
        "together": {"chain.sites": [8, 9, 10, 16], "evolution.until": [0.5, 0.5, 0.5, 5.0]},
    },
}


@pytest.fixture(scope="module")
def node() -> Iterator[Node]:
    with slurm_node(cores=4, largest_array=3) as running:
        yield running


@pytest.fixture
def here(node: Node, monkeypatch: pytest.MonkeyPatch) -> Node:
    return node.found_by(monkeypatch)


def command(*words: object) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [sys.executable, "-m", "tnquench", *map(str, words)],
        capture_output=True,
        text=True,
        timeout=300,
        check=False,
    )


def numbers(file: Path) -> dict[str, object]:
    """What a dataset says about physics, by name: all but its provenance and the time that was taken."""
    contents = read_contents(file)
    arrays = {path: variable.values for path, variable in contents.variables.items()}
    said = {
        f"{group}@{name}": value
        for group, attributes in contents.attributes.items()
        for name, value in attributes.items()
        if group != "provenance"
    }
    return {name: value for name, value in {**arrays, **said}.items() if "seconds" not in name}


def test_an_array_of_runs_one_of_them_put_back_equals_local_runs(tmp_path, here):
    config = tmp_path / "four.toml"
    config.write_text(toml(FOUR))
    submitted = command("sweep", config, "--into", tmp_path / "slurm", "--engine", "slurm")
    assert submitted.returncode == 0, submitted.stderr
    assert "4 points: 4 queued" in submitted.stderr or "running" in submitted.stderr
    (long_one,) = (tmp_path / "slurm").glob("sites_16*")
    log = long_one / "log.txt"
    eventually(lambda: log.exists() and "main run" in log.read_text(), 60.0)
    here.call("scontrol", "requeue", job_of(tmp_path / "slurm", long_one.name))
    local = command("sweep", config, "--into", tmp_path / "local", "--engine", "local", "--jobs", "2")
    assert local.returncode == 0, local.stderr
    eventually(lambda: not here.call("squeue", "--noheader"), 120.0)
    assert len(re.findall("begins: ", log.read_text())) == 2, "the run was interrupted"
    assert "exit code 3 (stopped, can go on)" in log.read_text()
    status = command("sweep", config, "--into", tmp_path / "slurm", "--status")
    assert status.stderr == "4 points: 4 done\n"
    for point in (tmp_path / "local").glob("*/run.h5"):
        expected, found = numbers(point), numbers(tmp_path / "slurm" / point.parent.name / "run.h5")
        assert expected.keys() == found.keys()
        for name, value in expected.items():
            np.testing.assert_array_equal(found[name], value, err_msg=name)


def job_of(folder: Path, point: str) -> str:
    """The number of the job of a point."""
    for line in (folder / FOLDER_NAME / SUBMITTED).read_text().splitlines():
        entry = json.loads(line)
        if point in entry["tasks"]:
            return f"{entry['job']}_{entry['tasks'].index(point)}"
    message = f"{point} was not submitted"
    raise AssertionError(message)
