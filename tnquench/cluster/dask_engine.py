"""The engine `dask`: tasks on workers of dask.distributed, on this machine or behind a scheduler's address.

Workers and their tasks see the same folders. A task whose worker is lost is given to another and goes on from
its last checkpoint.
"""

from __future__ import annotations

import logging
import shlex
import uuid
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from itertools import islice
from pathlib import Path
from typing import Any

from tnquench.cluster.attempt import attempt
from tnquench.cluster.local import told
from tnquench.cluster.slurm import clock
from tnquench.cluster.tasks import DONE, FAILED, Ending, Limits, Task
from tnquench.config.cluster import SLURM_WORKERS, Cluster
from tnquench.errors import InputError

DISTRIBUTED, JOBQUEUE = "dask.distributed", "dask-jobqueue"

#: How often a task that raised, other than by losing its worker, is tried again.
RETRIES = 2

#: What a worker asks of Slurm unless told otherwise: memory in bytes, seconds.
USUAL_BYTES, USUAL_SECONDS = 4 * 10**9, 86_400.0

#: Seconds to wait for a scheduler.
PATIENCE = "30s"


@dataclass(frozen=True)
class Workers:
    """Which workers are wanted.

    cluster : says where the scheduler is, and what Slurm is asked for; limits : of each task
    jobs    : tasks at once; folder : where jobs of Slurm write; setup : what their shell reads first
    """

    cluster: Cluster
    limits: Limits
    jobs: int
    folder: Path
    setup: Path | None = None


def run_dask(tasks: Sequence[Task], wanted: Workers, *, tell: Callable[[str], None]) -> dict[str, Ending]:
    """Carry tasks out, those that need others after them; return how they ended.

    A task that cannot begin because another did not end well is left out.
    Raises InputError if dask.distributed is missing or the scheduler does not answer.
    """
    distributed, endings = _distributed(), dict[str, Ending]()
    try:
        with _client(distributed, wanted, tell=tell) as client:
            _carry_out(distributed, client, list(tasks), endings, jobs=wanted.jobs, tell=tell)
    except KeyboardInterrupt:
        tell("interrupted: no more tasks begin; those of workers that end stop with their checkpoints")
    return endings


def _carry_out(
    distributed: Any,
    client: Any,
    waiting: list[Task],
    endings: dict[str, Ending],
    *,
    jobs: int,
    tell: Callable[[str], None],
) -> None:
    """Keep `jobs` tasks with the scheduler until none is left that can begin; enter how they ended."""
    count, names, stream = len(waiting), dict[str, str](), distributed.as_completed()
    while True:
        able = (task for task in waiting if _can_begin(task, endings))
        for task in list(islice(able, max(0, jobs - len(names)))):
            waiting.remove(task)
            key = f"{task.name}-{uuid.uuid4().hex}"
            names[key] = task.name
            stream.add(client.submit(attempt, task, key=key, pure=False, retries=RETRIES))
        if not names:
            return
        future = next(stream)
        name = names.pop(future.key)
        if future.status == "finished":
            endings[name] = future.result()
        else:
            endings[name] = Ending(name, FAILED, 0.0)
            tell(f"{name}: {future.exception()}")
        tell(told(endings[name], len(endings), count))


def _can_begin(task: Task, endings: dict[str, Ending]) -> bool:
    return all(name in endings and endings[name].code == DONE for name in task.needs)


@contextmanager
def _client(distributed: Any, wanted: Workers, *, tell: Callable[[str], None]) -> Iterator[Any]:
    """Yield a client of the scheduler that the settings name, or of workers begun for it alone."""
    address = wanted.cluster.scheduler
    if address is None:
        workers: Any = distributed.LocalCluster(
            n_workers=wanted.jobs,
            threads_per_worker=1,
            memory_limit=0,  # a task's memory is its own process's
            dashboard_address=None,
            silence_logs=logging.CRITICAL,
        )
    elif address == SLURM_WORKERS:
        workers = _slurm_workers(wanted)
        workers.scale(wanted.jobs)
        tell(f"{wanted.jobs} workers asked of Slurm")
    else:
        try:
            with distributed.Client(address, timeout=PATIENCE) as client:
                yield client
        except OSError as error:
            raise InputError(address, [f"no scheduler answers at {address}"]) from error
        return
    with workers, distributed.Client(workers) as client:
        yield client


def _slurm_workers(wanted: Workers) -> Any:
    """Return workers that dask-jobqueue asks of Slurm, one task each."""
    try:
        from dask_jobqueue.slurm import SLURMCluster
    except ImportError as error:
        raise _missing(JOBQUEUE) from error
    cluster, setup = wanted.cluster, wanted.setup
    return SLURMCluster(
        queue=cluster.partition,
        account=cluster.account,
        cores=1,
        processes=1,
        job_cpu=wanted.limits.threads,
        memory=f"{cluster.memory_bytes or USUAL_BYTES}B",
        walltime=clock(cluster.walltime_seconds or USUAL_SECONDS),
        job_extra_directives=[f"--{resource}" for resource in cluster.resources],
        job_script_prologue=[f". {shlex.quote(str(setup))}"] if setup is not None else [],
        log_directory=str(wanted.folder),
    )


def _distributed() -> Any:
    try:
        import distributed
    except ImportError as error:
        raise _missing(DISTRIBUTED) from error
    return distributed


def _missing(package: str) -> InputError:
    advice = "install the optional packages: pip install 'tnquench[cluster]'"
    return InputError(package, [f"is not installed; {advice}"])
