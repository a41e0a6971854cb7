"""A sweep as a whole: how its points stand, which are still to be run, and the engine that runs them."""

from __future__ import annotations

import contextlib
import os
from collections import Counter
from collections.abc import Callable, Iterable, Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path

from tnquench.cluster.dask_engine import Workers, run_dask
from tnquench.cluster.index import known_numbers, write_index
from tnquench.cluster.local import run_local
from tnquench.cluster.slurm import FOLDER_NAME, Submission, queued_points, submit
from tnquench.cluster.status import Standing, standing
from tnquench.cluster.tasks import CONFIG_NAME, STOPPED, Limits, Task, quenches_of, tasks_of
from tnquench.config.cluster import Cluster
from tnquench.config.document import effective_toml
from tnquench.config.points import Point
from tnquench.errors import InputError

#: A main quench and its companions, or the charges of its bonds: few runs use more.
MOST_THREADS = 5


@dataclass(frozen=True)
class SweepRun:
    """A sweep in its folder.

    points : in the order of the sweep; folder : of all points; cluster : where they run
    setup  : file that the shell of a batch job reads first, None for none; program : as in `Task`
    """

    points: Sequence[Point]
    folder: Path
    cluster: Cluster
    setup: Path | None = None
    program: tuple[str, ...] = ()

    def standings(self) -> list[Standing]:
        """Return how every point stands, in order, and write the index where the folder can be written.

        Raises InputError if jobs were submitted and Slurm cannot be asked.
        """
        known, queued = known_numbers(self.folder, self.points), queued_points(self.folder)
        found = [
            standing(
                point, self.folder / point.name, known=known.get(point.name), queued=point.name in queued
            )
            for point in self.points
        ]
        with contextlib.suppress(OSError):
            if self.folder.is_dir():
                write_index(self.folder, self.points, found)
        return found

    def missing(self, standings: Iterable[Standing], *, retry: bool) -> list[Point]:
        """Return the points that are to be run: neither done nor running nor queued; failed ones on
        request."""
        wanted = {"waiting", "stopped", *(("failed",) if retry else ())}
        names = {stands.name for stands in standings if stands.state in wanted}
        return [point for point in self.points if point.name in names]

    def carry_out(self, points: Sequence[Point], *, tell: Callable[[str], None]) -> None:
        """Run points with the engine of the section [cluster]; with slurm they are only submitted.

        Raises InputError if the folder cannot be written or the engine is not there.
        """
        jobs, limits = self.shares(len(points))
        tasks = list(self._tasks(points, limits))
        self._prepare(points)
        cluster = self.cluster
        tell(f"points: {len(points)}, tasks: {len(tasks)}, {cluster.engine}: {_said(jobs, limits, cluster)}")
        if cluster.engine == "slurm":
            submit(tasks, self.folder, Submission(cluster, self.setup), tell=tell)
        elif cluster.engine == "dask":
            outputs = self.folder / FOLDER_NAME
            run_dask(tasks, Workers(cluster, limits, jobs, outputs, self.setup), tell=tell)
        else:
            run_local(tasks, jobs=jobs, tell=tell)

    def shares(self, points: int) -> tuple[int, Limits]:
        """Return how many tasks run at once, and what each may take, for so many points."""
        cluster = self.cluster
        count = max(1, points * (max(map(_width, self.points)) if cluster.tasks == "quenches" else 1))
        is_here = cluster.engine == "local" or (cluster.engine == "dask" and cluster.scheduler is None)
        jobs = cluster.jobs or (min(count, max(1, cores() // (cluster.threads or 1))) if is_here else count)
        threads = cluster.threads or 1
        if cluster.engine == "local" and cluster.threads is None:
            threads = min(MOST_THREADS, max(1, cores() // jobs))
        return jobs, Limits(threads, cluster.walltime_seconds, cluster.memory_bytes)

    def _tasks(self, points: Iterable[Point], limits: Limits) -> Iterator[Task]:
        for point in points:
            quenches = quenches_of(point.config) if self.cluster.tasks == "quenches" else ()
            folder = (self.folder / point.name).resolve()
            yield from tasks_of(Task(point.name, folder, limits, program=self.program), quenches)

    def _prepare(self, points: Iterable[Point]) -> None:
        """Give each point its folder and config."""
        for point in points:
            file = self.folder / point.name / CONFIG_NAME
            text = f"# point {point.name} of a sweep\n{effective_toml(point.config)}"
            try:
                if file.exists() and file.read_text(encoding="utf-8") == text:
                    continue
                file.parent.mkdir(parents=True, exist_ok=True)
                partial = file.with_name(f".{CONFIG_NAME}.{os.getpid()}")
                partial.write_text(text, encoding="utf-8")
                partial.replace(file)
            except (OSError, UnicodeDecodeError) as error:
                reason = str(getattr(error, "strerror", None) or "not a text file").lower()
                raise InputError(str(file), [f"cannot be written ({reason})"]) from error


def cores() -> int:
    """Return how many cores this process may use."""
    return len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1


def summary(standings: Iterable[Standing]) -> dict[str, int]:
    """Return how many points are in each state that occurs."""
    return dict(Counter(stands.state for stands in standings))


def exit_code(standings: Iterable[Standing]) -> int:
    """Return the exit code of a sweep: 0 all done or with the batch system, 1 some failed, 3 the same command
    goes on."""
    states = {stands.state for stands in standings}
    if "failed" in states:
        return 1
    return STOPPED if states & {"waiting", "stopped"} else 0


def _width(point: Point) -> int:
    return len(quenches_of(point.config)) or 1


def _said(jobs: int, limits: Limits, cluster: Cluster) -> str:
    at_once = (
        f"{jobs} at once" if cluster.jobs or cluster.engine == "local" else "as many as there is room for"
    )
    return f"{at_once}, {limits.threads} thread{'s' * (limits.threads > 1)} each"
