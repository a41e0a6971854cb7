"""One try of one task: its command as a process of its own, its output in the log."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import time
from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager, suppress
from pathlib import Path
from types import FrameType

from tnquench.cluster.log import begin_mark, end_mark
from tnquench.cluster.occupied import occupant
from tnquench.cluster.tasks import INTERRUPTED, Ending, Task
from tnquench.errors import InputError

GUARD = Path(__file__).with_name("guard.py")

#: Linear algebra of a task: otherwise every process would begin as many threads as the machine has cores.
ONE_CORE = {"OMP_NUM_THREADS": "1", "OPENBLAS_NUM_THREADS": "1", "MKL_NUM_THREADS": "1"}

#: How long a task waits for another process to leave its folder, and between two looks, in seconds.
PATIENCE, LOOK = 120.0, 0.2

PASSED_ON = (signal.SIGINT, signal.SIGTERM, signal.SIGUSR1)


class Attempt:
    """The process of a task, begun on construction.

    It leads a session of its own, so that Ctrl-C on a terminal does not reach it twice, and is asked to stop
    when this process, or the thread that began it, ends.
    Raises InputError if the log cannot be written.
    """

    def __init__(self, task: Task) -> None:
        self.task = task
        self.began, self.killed = time.monotonic(), False
        with _refusing(task.log):
            self._log = task.log.open("ab", buffering=0)
            self._log.write(begin_mark(task.name).encode())
        self._process = subprocess.Popen(
            [sys.executable, "-S", str(GUARD), str(os.getpid()), *task.command()],
            stdin=subprocess.DEVNULL,
            stdout=self._log,
            stderr=subprocess.STDOUT,
            start_new_session=True,
            env={**ONE_CORE, **_environment()},
        )

    def ended(self, *, wait: float | None = 0.0) -> Ending | None:
        """Return how the process ended, None if it has not within `wait` seconds (None: however long)."""
        try:
            code = self._process.wait(wait)
        except subprocess.TimeoutExpired:
            return None
        seconds = time.monotonic() - self.began
        code = INTERRUPTED if self.killed else code
        if not self._log.closed:
            with suppress(OSError):  # a full disk, a vanished folder: the exit code tells as well
                self._log.write(end_mark(code, seconds).encode())
            self._log.close()
        return Ending(self.task.name, code, seconds)

    def ask(self, number: int) -> None:
        """Send the process a signal; one that has ended gets none."""
        if self._process.poll() is None:
            self._process.send_signal(number)

    def kill(self) -> None:
        """End the process and its companions at once, as the user wishes: no failure."""
        self.killed = True
        if self._process.poll() is None:
            os.killpg(self._process.pid, signal.SIGKILL)


def attempt(task: Task, signals: Sequence[int] = ()) -> Ending:
    """Carry a task out and return how it ended; waits until whoever writes in its folder has left.

    A process whose worker was lost may still be writing its last checkpoint.
    signals : passed on as they come in, Ctrl-C as SIGTERM
    """
    deadline = time.monotonic() + PATIENCE
    while occupant(task.folder, task.quench) and time.monotonic() < deadline and not signals:
        time.sleep(LOOK)
    begun, passed = Attempt(task), 0
    try:
        while (ending := begun.ended(wait=LOOK)) is None:
            for number in signals[passed:]:
                begun.ask(signal.SIGTERM if number == signal.SIGINT else number)
                passed += 1
    except BaseException:
        begun.ask(signal.SIGTERM)
        raise
    return ending


@contextmanager
def answering(signals: list[int]) -> Iterator[None]:
    """Collect the signals that ask this process to end, in the order in which they come, within the block."""

    def answer(number: int, _frame: FrameType | None) -> None:
        signals.append(number)

    before = {number: signal.signal(number, answer) for number in PASSED_ON}
    try:
        yield
    finally:
        for number, handler in before.items():
            signal.signal(number, handler)


def _environment() -> Mapping[str, str]:
    return os.environ


@contextmanager
def _refusing(path: Path) -> Iterator[None]:
    try:
        yield
    except OSError as error:
        reason = (error.strerror or "unknown reason").lower()
        raise InputError(str(path), [f"cannot be written ({reason})"]) from error
