"""What a job of an array does: `python -m tnquench.cluster.array_task LIST` carries out one task of the list.

A task that was stopped by its time limit goes back into the queue, unless it has not come on at all.
"""

from __future__ import annotations

import os
import signal
import sys
from collections.abc import Mapping
from pathlib import Path

from tnquench.cluster.attempt import answering, attempt
from tnquench.cluster.slurm import read_task, requeue
from tnquench.cluster.status import checkpoint_marks
from tnquench.cluster.tasks import DONE, FAILED, STOPPED, Ending, Task

#: A task that took this share of its own limit was stopped by it.
NEARLY_ALL = 0.5

#: How often a task may go back that has kept nothing at all yet.
MOST_IN_VAIN = 3


def main() -> None:
    """Carry out the task of this job's place in its array and exit with its code."""
    index = int(os.environ["SLURM_ARRAY_TASK_ID"])
    task, goes_back = read_task(Path(sys.argv[1]), index)
    if task is None:  # a point without this quench
        sys.exit(DONE)
    before, signals = checkpoint_marks(task.folder), list[int]()
    with answering(signals):
        ending = attempt(task, signals)
    if ending.code == STOPPED and goes_back:
        job = f"{os.environ['SLURM_ARRAY_JOB_ID']}_{index}"
        complaint = _why_not(task, ending, signals, before=before) or requeue(job)
        sys.stderr.write(f"{task.name}: stopped, {complaint or 'back into the queue'}\n")
    sys.exit(ending.code if ending.code >= DONE else FAILED)


def _why_not(task: Task, ending: Ending, signals: list[int], *, before: Mapping[str, tuple[int, int]]) -> str:
    """Return why a stopped task does not go back into the queue; nothing if it does."""
    if {signal.SIGTERM, signal.SIGINT} & set(signals):
        return "cancelled, or put back by Slurm itself"
    limit = task.limits.walltime
    if signal.SIGUSR1 not in signals and (limit is None or ending.seconds < NEARLY_ALL * limit):
        return "and not by its time limit; see its log"
    now, restarts = checkpoint_marks(task.folder), int(os.environ.get("SLURM_RESTART_COUNT", "0"))
    if now == before and (now or restarts >= MOST_IN_VAIN):
        return "without having come on at all; give it more time"
    return ""


if __name__ == "__main__":
    main()
