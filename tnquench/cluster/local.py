"""The engine `local`: processes on this machine, so many at once."""

from __future__ import annotations

import signal
import time
from collections import Counter
from collections.abc import Callable, Sequence

from tnquench.cluster.attempt import Attempt, answering
from tnquench.cluster.log import said
from tnquench.cluster.tasks import DONE, FAILED, Ending, Task
from tnquench.errors import InputError

#: Seconds between two looks at the processes.
LOOK = 0.05

#: A task whose process is ended from outside is tried so often.
TRIES = 3


def run_local(tasks: Sequence[Task], *, jobs: int, tell: Callable[[str], None]) -> dict[str, Ending]:
    """Carry tasks out, at most `jobs` at once, those that need others after them; return how they ended.

    A task that cannot begin because another did not end well is left out. SIGTERM, SIGUSR1 and Ctrl-C are
    passed on: running tasks stop with their checkpoints and no more begin; the second time all are killed.
    """
    pool, signals, passed = _Pool(tasks, jobs=jobs, tell=tell), list[int](), 0
    with answering(signals):
        while pool.is_busy:
            for number in signals[passed:]:
                passed += 1
                pool.stop(number, at_once=passed > 1)
            pool.look()
            time.sleep(LOOK)
    return pool.endings


class _Pool:
    """The running processes, the tasks that wait, and how the others ended."""

    def __init__(self, tasks: Sequence[Task], *, jobs: int, tell: Callable[[str], None]) -> None:
        self.waiting, self.jobs, self.tell = list(tasks), jobs, tell
        self.running: dict[str, Attempt] = {}
        self.endings: dict[str, Ending] = {}
        self.tries: Counter[str] = Counter()
        self.count, self.stopping = len(tasks), False

    @property
    def is_busy(self) -> bool:
        """Whether a task runs or can begin."""
        return bool(self.running) or (not self.stopping and any(map(self._can_begin, self.waiting)))

    def look(self) -> None:
        """Take note of the processes that have ended and begin others in their place."""
        for name, begun in list(self.running.items()):
            if (ending := begun.ended()) is not None:
                del self.running[name]
                self._settle(begun.task, ending)
        while not self.stopping and len(self.running) < self.jobs:
            task = next(filter(self._can_begin, self.waiting), None)
            if task is None:
                return
            self.waiting.remove(task)
            self.tries[task.name] += 1
            try:
                self.running[task.name] = Attempt(task)
            except InputError as refusal:  # the others go on
                self.tell(str(refusal))
                self._settle(task, Ending(task.name, FAILED, 0.0))

    def stop(self, number: int, *, at_once: bool) -> None:
        """Pass a signal on to all processes, or kill them; begin no more."""
        self.stopping = True
        name = signal.Signals(number).name
        doing = "killing" if at_once else "stopping, with their checkpoints,"
        advice = "" if at_once else "; once more kills them"
        self.tell(f"{name}: {doing} {len(self.running)} running tasks{advice}")
        for begun in self.running.values():
            if at_once:
                begun.kill()
            else:
                begun.ask(signal.SIGTERM if number == signal.SIGINT else number)

    def _can_begin(self, task: Task) -> bool:
        return all(name in self.endings and self.endings[name].code == DONE for name in task.needs)

    def _settle(self, task: Task, ending: Ending) -> None:
        if ending.code < DONE and not self.stopping and self.tries[task.name] < TRIES:
            self.tell(f"{task.name}: its process was ended from outside; trying again")
            self.waiting.insert(0, task)
            return
        self.endings[task.name] = ending
        self.tell(told(ending, len(self.endings), self.count))


def told(ending: Ending, number: int, count: int) -> str:
    """Return the line about a task that has ended."""
    return f"{ending.name}: {said(ending.code)}, {ending.seconds:.1f} s ({number} of {count})"
