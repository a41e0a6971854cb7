"""What the engine `slurm` asks of Slurm, noted down by programs of the same names."""

from __future__ import annotations

import json
import subprocess
import sys
from pathlib import Path

import pytest

from tests.sweep_cases import Rehearsal, four_points, write_sweep
from tnquench.cluster.slurm import Submission, clock, job_script, options, read_task, requeue
from tnquench.cluster.tasks import Limits
from tnquench.config.cluster import Cluster, with_options
from tnquench.errors import InputError

#: Notes its words; answers as the file ANSWER beside it says, sbatch with the next number of a job.
PRETENDER = """\
#!{python} -SE
import json, sys
from pathlib import Path
home, name = Path(__file__).parent, Path(__file__).name
calls = home / "calls.txt"
with calls.open("a") as stream:
    stream.write(json.dumps([name, *sys.argv[1:]]) + "\\n")
answer = home / (name + ".answer")
if name == "sbatch":
    print(100 + calls.read_text().count('["sbatch"'))
elif answer.exists():
    print(answer.read_text())
elif (home / (name + ".refusal")).exists():
    sys.exit((home / (name + ".refusal")).read_text())
"""


class Pretence:
    """Commands of Slurm on the path that only note what they are asked."""

    def __init__(self, folder: Path, monkeypatch: pytest.MonkeyPatch) -> None:
        self.folder = folder / "bin"
        self.folder.mkdir()
        for name in ("sbatch", "squeue", "scontrol"):
            file = self.folder / name
            file.write_text(PRETENDER.format(python=sys.executable))
            file.chmod(0o755)
        self.answer("scontrol", "MaxArraySize            = 1001")
        monkeypatch.setenv("PATH", f"{self.folder}:/usr/bin:/bin")

    def answer(self, name: str, text: str) -> None:
        (self.folder / f"{name}.answer").write_text(text)

    def calls(self, name: str) -> list[list[str]]:
        file = self.folder / "calls.txt"
        lines = file.read_text().splitlines() if file.exists() else []
        return [words[1:] for line in lines if (words := json.loads(line))[0] == name]


@pytest.fixture
def pretence(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Pretence:
    return Pretence(tmp_path, monkeypatch)


def test_one_array_holds_all_runs(tmp_path, pretence):
    cluster = {
        "engine": "slurm", "walltime": "2h", "memory": "8GB", "threads": 2, "jobs": 50, "partition": "long",
        "account": "p1", "resources": ["constraint=icelake&avx512", "exclusive"],
    }  # fmt: skip
    stage = Rehearsal(tmp_path, four_points(tmp_path, cluster=cluster), {})
    assert set(stage.run().values()) == {"waiting"}, "Slurm's queue is empty"
    (words,) = pretence.calls("sbatch")
    assert words[:4] == ["--parsable", "--job-name=tnquench-sweep", "--array=0-3%50", "--output=%A_%a.txt"]
    assert words[4:-1] == [
        "--ntasks=1", "--cpus-per-task=2", "--open-mode=append", "--signal=B:USR1@180", "--requeue",
        "--time=120:00", "--mem=7630M", "--partition=long", "--account=p1",
        "--constraint=icelake&avx512", "--exclusive",
    ]  # fmt: skip
    beside = stage.sweep.folder / "slurm"
    (tasks_file,) = beside.glob("*.json")
    tasks = [read_task(tasks_file, index) for index in range(4)]
    assert [task.point for task, _ in tasks if task] == stage.names
    assert all(goes_back for _, goes_back in tasks)
    first = tasks[0][0]
    assert first is not None
    assert first.folder == (stage.sweep.folder / stage.names[0]).resolve()
    assert first.limits == Limits(threads=2, walltime=7200.0 - 180.0, memory=7_800_000_000)
    script = (beside / words[-1]).read_text()
    assert script.startswith("#!/bin/bash\n")
    assert str(tasks_file) in script


def test_what_is_queued_is_not_submitted_twice(tmp_path, pretence):
    stage = Rehearsal(tmp_path, four_points(tmp_path), {}, engine="slurm")
    stage.run()
    pretence.answer("squeue", "7 3\n101 0\n101 2\n102 1")
    assert list(stage.states().values()) == ["queued", "waiting", "queued", "waiting"]
    stage.run()
    assert [words[2] for words in pretence.calls("sbatch")] == ["--array=0-3", "--array=0-1"]
    assert list(stage.states().values()) == ["queued", "waiting", "queued", "queued"]


def test_arrays_are_no_larger_than_slurm_allows(tmp_path, pretence):
    pretence.answer("scontrol", "Configuration data\nMaxArraySize            = 3\n")
    stage = Rehearsal(tmp_path, four_points(tmp_path), {}, engine="slurm")
    stage.run()
    assert [words[2] for words in pretence.calls("sbatch")] == ["--array=0-2", "--array=0-0"]


def test_the_run_of_a_point_waits_for_its_own_quenches(tmp_path, pretence):
    config = write_sweep(tmp_path, {"grid": {"chain.sites": [4, 8]}})  # four sites have no shorter chain
    stage = Rehearsal(tmp_path, config, {}, engine="slurm", tasks="quenches")
    stage.run()
    submitted = pretence.calls("sbatch")
    assert [words[2] for words in submitted] == ["--array=0-1"] * 5
    waits = [[word for word in words if word.startswith("--dependency")] for words in submitted]
    assert waits == [[]] * 4 + [["--dependency=aftercorr:101:102:103:104"]]
    assert "--kill-on-invalid-dep=yes" in submitted[-1]
    lists = sorted((stage.sweep.folder / "slurm").glob("*-length.json"))
    assert [read_task(lists[0], index)[0] is None for index in (0, 1)] == [True, False]


def test_without_slurm_nothing_is_submitted(tmp_path, monkeypatch):
    monkeypatch.setenv("PATH", str(tmp_path))
    stage = Rehearsal(tmp_path, four_points(tmp_path), {}, engine="slurm")
    with pytest.raises(InputError, match="no such command: --engine slurm works where Slurm's commands are"):
        stage.run()


def test_what_slurm_complains_about_is_passed_on(tmp_path, pretence):
    (pretence.folder / "scontrol.answer").unlink()
    (pretence.folder / "scontrol.refusal").write_text("slurm_load_ctl_conf error:\n  Unable to contact")
    stage = Rehearsal(tmp_path, four_points(tmp_path), {}, engine="slurm")
    with pytest.raises(InputError) as caught:
        stage.run()
    assert caught.value.problems == ("slurm_load_ctl_conf error: Unable to contact",)
    assert requeue("7_1") == "slurm_load_ctl_conf error: Unable to contact"


def test_the_setup_comes_first_and_its_name_is_no_code(tmp_path):
    setup = tmp_path / "$(touch spoiled) 'x.sh"
    setup.write_text("echo set up; export PATH=/nowhere\n")
    script = tmp_path / "job.sh"
    list_file = tmp_path / "$(touch spoiled) list.json"
    script.write_text(job_script(list_file, setup).replace(sys.executable, "/bin/echo"))
    done = subprocess.run(
        ["/bin/bash", str(script)], cwd=tmp_path, capture_output=True, text=True, check=True
    )
    assert done.stdout.splitlines() == ["set up", f"-m tnquench.cluster.array_task {list_file}"]
    assert not (tmp_path / "spoiled").exists()


def test_nothing_is_asked_that_is_not_set():
    words = options(Submission(Cluster(requeue=False)), Limits())
    assert words == [
        "--ntasks=1", "--cpus-per-task=1", "--open-mode=append", "--signal=B:USR1@180", "--no-requeue",
    ]  # fmt: skip
    short = with_options(Cluster(), {"walltime": "2m"}, subject="test")
    assert "--signal=B:USR1@30" in options(Submission(short), Limits())


@pytest.mark.parametrize(
    ("seconds", "text"), [(0.1, "0:01"), (90.0, "1:30"), (7200.0, "120:00"), (86401.0, "1440:01")]
)
def test_times_are_told_as_slurm_takes_them(seconds, text):
    assert clock(seconds) == text
