"""Which process is this, and does it still live? Told across machines, reboots and changes of the clock."""

from __future__ import annotations

import os
import socket
from dataclasses import dataclass
from pathlib import Path

import psutil

#: Variables by which Slurm names a job and counts how often it was put back into the queue.
JOB, RESTARTS = "SLURM_JOB_ID", "SLURM_RESTART_COUNT"


@dataclass(frozen=True)
class Incarnation:
    """One process, not to be confused with a later one of the same number.

    machine : boot of the system and name space of process numbers, "" where the system does not tell them
    started : when the process began, by a clock that nobody sets (Linux: ticks since boot)
    job, restarts : the batch job it belongs to, "" outside, and how often that was requeued
    """

    host: str
    pid: int
    machine: str
    started: float
    job: str
    restarts: int


def this_process() -> Incarnation:
    """Describe the present process."""
    restarts = os.environ.get(RESTARTS, "0")
    return Incarnation(
        host=socket.gethostname(),
        pid=os.getpid(),
        machine=_machine(),
        started=_started(os.getpid()) or 0.0,
        job=os.environ.get(JOB, ""),
        restarts=int(restarts) if restarts.isdecimal() else 0,
    )


def is_alive(process: Incarnation) -> bool | None:
    """Tell whether a process lives, None if that cannot be seen from here (another machine)."""
    here = this_process()
    if process.machine == here.machine and (here.machine or process.host == here.host):
        return _started(process.pid) == process.started
    if here.job and process.job == here.job and process.restarts < here.restarts:
        return False  # the scheduler requeues a job only after its end
    return None


def _machine() -> str:
    try:
        boot = Path("/proc/sys/kernel/random/boot_id").read_text().strip()
        return f"{boot} {os.readlink('/proc/self/ns/pid')}"  # noqa: PTH115 - the link leads to no path
    except OSError:
        return ""


def _started(pid: int) -> float | None:
    """Return when a process began, None if it has ended (a zombie has)."""
    try:
        stat = Path(f"/proc/{pid}/stat").read_text()
        state, *fields = stat.rpartition(")")[2].split()  # the name before may hold anything
        return None if state in "ZX" else float(fields[18])
    except OSError:
        pass
    if Path("/proc/self/stat").exists():
        return None
    try:
        process = psutil.Process(pid)
        return None if process.status() == psutil.STATUS_ZOMBIE else float(process.create_time())
    except psutil.Error:
        return None
