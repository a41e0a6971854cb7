"""The engine `slurm`: tasks as job arrays, submitted by sbatch; nothing of ours keeps running.

Every job carries out one task of a list kept beside the points. Slurm sends it SIGUSR1 some time before its
limit, it stops with a checkpoint and puts itself back into the queue.
"""

from __future__ import annotations

import getpass
import json
import math
import re
import shlex
import shutil
import subprocess
import sys
from collections.abc import Callable, Iterable, Iterator, Sequence
from dataclasses import asdict, dataclass, replace
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

from tnquench.cluster.tasks import Limits, Task
from tnquench.config.cluster import Cluster
from tnquench.errors import InputError

#: Folder of lists, scripts and outputs of jobs, below that of the sweep.
FOLDER_NAME = "slurm"

SUBMITTED = "submitted.jsonl"

#: Largest array where Slurm does not tell: its own default.
USUAL_ARRAY_SIZE = 1001

#: Bytes that the process watching over a task takes (measured: 163 MB), at most a quarter of the job's.
OVERHEAD = 200_000_000

#: Seconds that a command of Slurm may take.
PATIENCE = 60.0


@dataclass(frozen=True)
class Submission:
    """How jobs are submitted.

    cluster : resources and limits; setup : a file that the job's shell reads first, None for none
    """

    cluster: Cluster
    setup: Path | None = None


def submit(
    tasks: Sequence[Task], folder: Path, submission: Submission, *, tell: Callable[[str], None]
) -> list[str]:
    """Submit tasks as job arrays and return the numbers of the arrays.

    folder : of the sweep. Quenches come in arrays of their own, and the run of a point waits for those of
    its own point alone.
    Raises InputError if Slurm is not there or refuses.
    """
    beside = folder / FOLDER_NAME
    beside.mkdir(parents=True, exist_ok=True)
    stamp = datetime.now(UTC).strftime("%Y%m%d-%H%M%S-%f")
    jobs: list[str] = []
    points, largest = _by_point(tasks), _largest_array()
    parts = [points[first : first + largest] for first in range(0, len(points), largest)]
    for number, part in enumerate(parts):
        before: list[str] = []
        for quench, column in _columns(part):
            name = f"{stamp}-{number}-{quench or 'run'}"
            job = _submit_array(column, beside, name, submission, needs=() if quench else before)
            with (beside / SUBMITTED).open("a", encoding="utf-8") as record:
                record.write(
                    json.dumps({"job": job, "tasks": [task and task.name for task in column]}) + "\n"
                )
            before.append(job)
            jobs.append(job)
            count = sum(task is not None for task in column)
            tell(f"job {job}: {count} {'quenches ' + quench if quench else 'runs'}")
    return jobs


def queued_points(folder: Path) -> set[str]:
    """Return the points that have a job in Slurm's queue, running or waiting.

    Empty if nothing was submitted, and where Slurm is not installed, as behind a copy of the folder.
    Raises InputError if Slurm does not answer.
    """
    record = folder / FOLDER_NAME / SUBMITTED
    if not record.exists() or shutil.which("squeue") is None:
        return set()
    said = _slurm("squeue", "--noheader", "--array", f"--user={getpass.getuser()}", "--format=%F %K")
    present = {tuple(line.split()) for line in said.splitlines()}
    points = set()
    for line in record.read_text(encoding="utf-8").splitlines():
        entry = json.loads(line)
        for index, name in enumerate(entry["tasks"]):
            if name and (entry["job"], str(index)) in present:
                points.add(name.partition("/")[0])
    return points


def read_task(file: Path, index: int) -> tuple[Task | None, bool]:
    """Return one task of a list that `submit` wrote, None where its point has no such quench, and whether a
    job that stopped goes back into the queue."""
    said = json.loads(file.read_text(encoding="utf-8"))
    entry = said["tasks"][index]
    return (None if entry is None else _task(entry)), bool(said["requeue"])


def requeue(job: str) -> str:
    """Put a job back into the queue; return what Slurm complains about, nothing if all is well."""
    try:
        _slurm("scontrol", "requeue", job)
    except InputError as refusal:
        return refusal.problems[0]
    return ""


def clock(seconds: float) -> str:
    """Return a time as Slurm takes it, in whole minutes and seconds: 90 is 1:30."""
    whole = max(1, math.ceil(seconds))
    return f"{whole // 60}:{whole % 60:02d}"


def options(submission: Submission, limits: Limits) -> list[str]:
    """Return the options of sbatch that say what each job gets."""
    cluster = submission.cluster
    words = ["--ntasks=1", f"--cpus-per-task={limits.threads}", "--open-mode=append"]
    words.append(f"--signal=B:USR1@{max(1, round(cluster.notice_seconds))}")
    words.append("--requeue" if cluster.requeue else "--no-requeue")
    if cluster.walltime_seconds is not None:
        words.append(f"--time={clock(cluster.walltime_seconds)}")
    if cluster.memory_bytes is not None:
        words.append(f"--mem={math.ceil(cluster.memory_bytes / 2**20)}M")
    named = {"partition": cluster.partition, "account": cluster.account}
    words += [f"--{name}={value}" for name, value in named.items() if value is not None]
    return [*words, *(f"--{resource}" for resource in cluster.resources)]


def job_script(tasks_file: Path, setup: Path | None) -> str:
    """Return the script of a job: the site's setup, then one task in place of the shell.

    A notice that comes during the setup is ignored; the run's own limit counts then.
    """
    prepare = [f". {shlex.quote(str(setup))}"] if setup is not None else []
    program = shlex.join([sys.executable, "-m", "tnquench.cluster.array_task", str(tasks_file)])
    return "\n".join(["#!/bin/bash", "trap '' USR1", *prepare, f"exec {program}", ""])


def _submit_array(
    column: Sequence[Task | None], beside: Path, name: str, submission: Submission, *, needs: Sequence[str]
) -> str:
    """Submit one array and return its number."""
    tasks_file, script = beside / f"{name}.json", beside / f"{name}.sh"
    limits = next(task.limits for task in column if task is not None)
    entries = [None if task is None else _entry(task, submission.cluster) for task in column]
    tasks_file.write_text(json.dumps({"requeue": submission.cluster.requeue, "tasks": entries}, indent=1))
    script.write_text(job_script(tasks_file, submission.setup))
    at_once = f"%{submission.cluster.jobs}" if submission.cluster.jobs else ""
    words = ["sbatch", "--parsable", f"--job-name=tnquench-{beside.parent.name}"[:60]]
    words += [f"--array=0-{len(column) - 1}{at_once}", "--output=%A_%a.txt"]
    if needs:
        words += [f"--dependency=aftercorr:{':'.join(needs)}", "--kill-on-invalid-dep=yes"]
    said = _slurm(*words, *options(submission, limits), script.name, folder=beside)
    return said.strip().partition(";")[0]


def _by_point(tasks: Iterable[Task]) -> list[dict[str | None, Task]]:
    """Return the tasks of each point by quench."""
    points: dict[str, dict[str | None, Task]] = {}
    for task in tasks:
        points.setdefault(task.point, {})[task.quench] = task
    return list(points.values())


def _columns(points: Sequence[dict[str | None, Task]]) -> Iterator[tuple[str | None, list[Task | None]]]:
    """Yield the arrays of so many points: one a quench, one of the runs last, the same point at the same
    index everywhere."""
    quenches = dict.fromkeys(quench for tasks in points for quench in tasks if quench)
    for quench in (*quenches, None):
        yield quench, [tasks.get(quench) for tasks in points]


def _entry(task: Task, cluster: Cluster) -> dict[str, Any]:
    """Return a task as its list keeps it; its own limits leave time for a last checkpoint, and memory for
    the process that watches over it."""
    seconds, size = task.limits.walltime, task.limits.memory
    limits = replace(
        task.limits,
        walltime=None if seconds is None else max(1.0, seconds - cluster.notice_seconds),
        memory=None if size is None else size - min(OVERHEAD, size // 4),
    )
    return {**asdict(replace(task, limits=limits, needs=())), "folder": str(task.folder)}


def _task(entry: dict[str, Any]) -> Task:
    limits = Limits(**entry["limits"])
    program = tuple(map(str, entry["program"]))
    return Task(entry["point"], Path(entry["folder"]), limits, quench=entry["quench"], program=program)


def _largest_array() -> int:
    """Return how many tasks one array may have."""
    found = re.search(r"^MaxArraySize\s*=\s*(\d+)", _slurm("scontrol", "show", "config"), re.MULTILINE)
    return max(1, int(found[1]) if found else USUAL_ARRAY_SIZE)


def _slurm(*words: str, folder: Path | None = None) -> str:
    """Carry out a command of Slurm and return its output; raises InputError if it is missing or refuses."""
    subject = words[0]
    try:
        done = subprocess.run(
            words, cwd=folder, capture_output=True, text=True, timeout=PATIENCE, check=False
        )
    except FileNotFoundError as error:
        missing = "no such command: --engine slurm works where Slurm's commands are, on a login node"
        raise InputError(subject, [missing], consequence="nothing was submitted") from error
    except subprocess.TimeoutExpired as error:
        raise InputError(subject, [f"no answer within {PATIENCE:g} s"], consequence="") from error
    if done.returncode:
        said = " ".join(done.stderr.split()) or f"exit code {done.returncode}"
        raise InputError(subject, [said], consequence="")
    return done.stdout
