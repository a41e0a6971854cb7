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

#: Seconds to wait for a scheduler.
PATIENCE = "30s"


def run_dask(
    tasks: Sequence[Task],
    *,
    cluster: Cluster,
    limits: Limits,
    jobs: int,
    setup: Path | None,
    tell: Callable[[str], None],
) -> dict[str, Ending]:
    """Carry tasks out, at most `jobs` at once, those that need others after them; return how they ended.

    A task that cannot begin because another did not end well is left out.
    Raises InputError if dask.distributed is missing or the scheduler does not answer.
    """
    distributed, endings = _distributed(), dict[str, Ending]()
    try:
        with _client(
            distributed, cluster=cluster, limits=limits, jobs=jobs, setup=setup, tell=tell
        ) as client:
            _carry_out(distributed, client, list(tasks), endings, jobs=jobs, tell=tell)
    except KeyboardInterrupt:
        tell("interrupted: no more tasks begin; those of lost workers stop with their checkpoints")
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
        able = [task for task in waiting if _can_begin(task, endings)]
        for task in able[: max(0, jobs - len(names))]:
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
def _client(
    distributed: Any,
    *,
    cluster: Cluster,
    limits: Limits,
    jobs: int,
    setup: Path | None,
    tell: Callable[[str], None],
) -> Iterator[Any]:
    """Yield a client of the scheduler that the settings name, or of workers begun for it alone."""
    if cluster.scheduler is None:
        workers: Any = distributed.LocalCluster(
            n_workers=jobs,
            threads_per_worker=1,
            memory_limit=0,  # a task's memory is its own process's
            dashboard_address=None,
            silence_logs=logging.CRITICAL,
        )
    elif cluster.scheduler == SLURM_WORKERS:
        workers = _slurm_workers(cluster, limits, setup)
        workers.scale(jobs)
        tell(f"{jobs} workers asked of Slurm")
    else:
        try:
            with distributed.Client(cluster.scheduler, timeout=PATIENCE) as client:
                yield client
        except OSError as error:
            problem = f"no scheduler answers at {cluster.scheduler}"
            raise InputError(cluster.scheduler, [problem]) from error
        return
    with workers, distributed.Client(workers) as client:
        yield client


def _slurm_workers(cluster: Cluster, limits: Limits, setup: Path | None) -> Any:
    """Return workers that dask-jobqueue asks of Slurm, one task each."""
    try:
        from dask_jobqueue.slurm import SLURMCluster
    except ImportError as error:
        raise _missing(JOBQUEUE) from error
    return SLURMCluster(
        queue=cluster.partition,
        account=cluster.account,
        cores=1,
        processes=1,
        job_cpu=limits.threads,
        memory=f"{cluster.memory_bytes or 10**9}B",
        walltime=clock(cluster.walltime_seconds or 86_400.0),
        job_extra_directives=[f"--{resource}" for resource in cluster.resources],
        job_script_prologue=[f". {shlex.quote(str(setup))}"] if setup is not None else [],
        log_directory=None,
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
