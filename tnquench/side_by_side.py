"""The quenches of a run: each kept by checkpoints, companions in processes of their own beside the main run,
and what happens when one of them fails."""

from __future__ import annotations

import ctypes
import os
import signal
import sys
import threading
from collections.abc import Callable, Iterator, Mapping
from concurrent.futures import Future, ProcessPoolExecutor
from concurrent.futures import TimeoutError as NotYet
from concurrent.futures.process import BrokenProcessPool
from contextlib import contextmanager, nullcontext
from dataclasses import dataclass, field, replace
from multiprocessing import active_children, get_context
from multiprocessing.process import BaseProcess

import numpy as np
from threadpoolctl import threadpool_limits

from tnquench.budget.companions import LOOSE, WITHOUT
from tnquench.checkpoints import QuenchKeeper, Store
from tnquench.errors import StateError, Stopped
from tnquench.evolution.chain_state import distance
from tnquench.observables.quench import Progress, QuantumRecord, Quench, simulate, start_of_quench
from tnquench.observables.start import Start
from tnquench.stopping import Stop, answering_in_worker

#: How a companion may fail without taking the run along, and how that is said.
SURVIVABLE: dict[type[BaseException], str] = {
    StateError: "its state no longer holds finite numbers",
    MemoryError: "out of memory",
    BrokenProcessPool: "its process was ended from outside, often for lack of memory",
}

#: Seconds between two looks at the limits while another process works.
PATIENCE = 0.5


@dataclass(frozen=True)
class Task:
    """One quench to be carried out: its name, what it is, its start if another has prepared it, and where it
    is kept (None: nowhere)."""

    name: str
    quench: Quench
    start: Start | None = None
    store: Store | None = None

    def with_start(self, start: Start) -> Task:
        """Return the task with this start, if it would prepare the same."""
        return replace(self, start=start) if start.serves(self.quench.bond_ceiling) else self


def carry_out(
    task: Task, stop: Stop, report: Callable[[Progress], None] | None = None, *, keeps_state: bool = False
) -> QuantumRecord:
    """Carry out one quench, or what is left of it; its last state is kept only where it will be compared.

    Raises Stopped, with a checkpoint, where `stop` has a reason.
    """
    keeper = None if task.store is None else QuenchKeeper(task.store, task.name, task.quench, stop)
    with nullcontext() if keeper is None else stop.between_layers():
        record = simulate(task.quench, report=report, keeper=keeper, start=task.start)
    return record if keeps_state or task.name == LOOSE else replace(record, last_state=None)


def start_of_task(task: Task, stop: Stop) -> Start:
    """Prepare the start of a task, or take it up where it is kept; raises Stopped like `carry_out`."""
    if task.store is None:
        return start_of_quench(task.quench)
    with stop.between_layers():
        return start_of_quench(task.quench, keeper=QuenchKeeper(task.store, task.name, task.quench, stop))


@dataclass
class Background:
    """Processes that carry out tasks beside this one; none if `pool` is None.

    workers : how many processes; pending : the results to come, by the tasks' names
    """

    pool: ProcessPoolExecutor | None
    workers: int = 0
    pending: dict[str, Future[QuantumRecord]] = field(default_factory=dict)

    @property
    def busy(self) -> int:
        """How many of the processes are at work."""
        return min(self.workers, sum(not result.done() for result in self.pending.values()))

    def begin(self, task: Task) -> None:
        """Hand a task to the processes, if there are any."""
        if self.pool is not None:
            with _interrupts_ignored():
                self.pending[task.name] = self.pool.submit(_in_worker, task)

    def taken_back(self, name: str) -> bool:
        """Whether a task is this process's own: never handed over, or taken back before it was begun."""
        return name not in self.pending or self.pending[name].cancel()


@contextmanager
def background(stop: Stop, *, workers: int) -> Iterator[Background]:
    """Yield processes for tasks, none without workers.

    A run that is stopped stops them too and waits for their checkpoints; on any other exception they are
    ended at once, for nobody will fetch their results.
    """
    if workers < 1:
        yield Background(None)
        return
    others = set(active_children())
    with ProcessPoolExecutor(
        workers,
        mp_context=get_context("spawn"),
        initializer=_begin_worker,
        initargs=(stop.deadline, os.getpid()),
    ) as pool:
        try:
            yield Background(pool, workers)
        except BaseException as error:
            pool.shutdown(wait=False, cancel_futures=True)
            for worker in set(active_children()) - others:
                _end(worker, gently=isinstance(error, Stopped))
            raise


def _end(worker: BaseProcess, *, gently: bool) -> None:
    """Ask a worker to stop with a checkpoint, or kill it."""
    if not gently:
        worker.kill()
    elif worker.pid is not None and worker.is_alive():
        os.kill(worker.pid, signal.SIGUSR1)


def fetched(task: Task, running: Background, stop: Stop) -> QuantumRecord:
    """Return the result of a task in a process of its own.

    A process that is ended takes all of its pool along, so whoever was in that pool gets a second try, alone.
    Raises Stopped where `stop` has a reason or the task was stopped.
    """
    try:
        return _awaited(running.pending[task.name], stop)
    except BrokenProcessPool:
        if running.pool is not None:
            running.pool.shutdown(wait=True)  # what is left of it may still work on this very task
        with background(stop, workers=1) as again:
            again.begin(task)
            return _awaited(again.pending[task.name], stop)


def _awaited(pending: Future[QuantumRecord], stop: Stop) -> QuantumRecord:
    while True:
        try:
            return pending.result(timeout=PATIENCE)
        except NotYet:
            if pending.done():  # a timeout of the task's own
                raise
            if why := stop.memory_reason():
                raise Stopped(why) from None


def failure_event(name: str, error: BaseException) -> dict[str, object]:
    """Return the event of a companion that failed: why, and what its source claims without it."""
    why = next(said for kind, said in SURVIVABLE.items() if isinstance(error, kind))
    return {"kind": "companion_failed", "detail": f"{name}: {why}; {WITHOUT[name]}"}


def state_distance(main: QuantumRecord, companions: Mapping[str, QuantumRecord]) -> float:
    """Return the norm of the difference of the last states of the main run and of the looser one.

    Exact up to rounding; nan where a state is missing.
    """
    loose = companions[LOOSE].last_state if LOOSE in companions else None
    if main.last_state is None or loose is None:
        return float(np.nan)
    return distance(main.last_state, loose)


@contextmanager
def _interrupts_ignored() -> Iterator[None]:
    """Ignore Ctrl-C while processes start: they inherit it, so that only this process answers to it later."""
    if threading.current_thread() is not threading.main_thread():
        yield
        return
    previous = signal.signal(signal.SIGINT, signal.SIG_IGN)
    try:
        yield
    finally:
        signal.signal(signal.SIGINT, previous)


#: What can stop the task of a worker; set when the worker begins.
_worker_stop: Stop | None = None


def _begin_worker(deadline: float | None, parent: int) -> None:
    """Keep a worker's linear algebra on one core, let signals stop it, and let it end with its parent."""
    global _worker_stop
    threadpool_limits(1)
    _worker_stop = answering_in_worker()
    _worker_stop.deadline = deadline
    _worker_stop.parent = parent
    _end_with_parent(parent)


def _in_worker(task: Task) -> QuantumRecord:
    assert _worker_stop is not None, "the pool's initializer has run"
    return carry_out(task, _worker_stop)


def _end_with_parent(parent: int) -> None:
    """Have the kernel kill this process when its parent is killed: two runs must not keep one quench."""
    if not sys.platform.startswith("linux"):
        return
    set_parent_death_signal = 1
    ctypes.CDLL(None, use_errno=True).prctl(set_parent_death_signal, signal.SIGKILL)
    if os.getppid() != parent:  # it died before the kernel knew
        os._exit(1)
