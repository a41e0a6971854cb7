"""Companion runs in processes of their own beside the main run, and what happens when one of them fails."""

from __future__ import annotations

import signal
import threading
from collections.abc import Callable, Iterator, Mapping
from concurrent.futures import Future, ProcessPoolExecutor
from concurrent.futures.process import BrokenProcessPool
from contextlib import contextmanager
from dataclasses import replace
from multiprocessing import active_children, get_context

import numpy as np
from threadpoolctl import threadpool_limits

from tnquench.budget.companions import LOOSE, WITHOUT
from tnquench.errors import StateError
from tnquench.evolution.chain_state import distance
from tnquench.observables.quench import Progress, QuantumRecord, Quench, simulate

#: How a companion may fail without taking the run along, and how that is said.
SURVIVABLE: dict[type[BaseException], str] = {
    StateError: "its state no longer holds finite numbers",
    MemoryError: "out of memory",
    BrokenProcessPool: "its process was ended from outside, often for lack of memory",
}


@contextmanager
def background(quenches: Mapping[str, Quench], *, workers: int) -> Iterator[dict[str, Future[QuantumRecord]]]:
    """Start quenches in processes of their own; yield their futures by name, none without workers.

    On any exception the processes are ended: nobody will fetch their results.
    """
    if workers < 1 or not quenches:
        yield {}
        return
    others = set(active_children())
    with ProcessPoolExecutor(
        min(workers, len(quenches)), mp_context=get_context("spawn"), initializer=_one_core
    ) as pool:
        try:
            with _interrupts_ignored():
                pending = {
                    name: pool.submit(companion_record, name, quench) for name, quench in quenches.items()
                }
            yield pending
        except BaseException:
            pool.shutdown(wait=False, cancel_futures=True)
            for worker in set(active_children()) - others:
                worker.terminate()
            raise


def companion_record(
    name: str, quench: Quench, report: Callable[[Progress], None] | None = None
) -> QuantumRecord:
    """Run one companion; its last state is kept only where it is compared with the main run's."""
    record = simulate(quench, report=report)
    return record if name == LOOSE else replace(record, last_state=None)


def fetched(name: str, quench: Quench, pending: Future[QuantumRecord]) -> QuantumRecord:
    """Return the result of a companion in a process of its own.

    A process that is ended takes all of its pool along, so whoever was in that pool gets a second try, alone.
    """
    try:
        return pending.result()
    except BrokenProcessPool:
        with background({name: quench}, workers=1) as again:
            return again[name].result()


def failure_event(name: str, error: BaseException) -> dict[str, object]:
    """Return the event of a companion that failed: why, and what its source claims without it."""
    why = next(said for kind, said in SURVIVABLE.items() if isinstance(error, kind))
    return {"kind": "companion_failed", "detail": f"{name}: {why}; {WITHOUT[name]}"}


def state_distance(main: QuantumRecord, companions: Mapping[str, QuantumRecord]) -> float:
    """Return the norm of the difference of the last states of the main run and of the one at ten times its
    weight.

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


def _one_core() -> None:
    """Keep a worker's linear algebra on one core."""
    threadpool_limits(1)
