"""The speed of the engine as one table: targets, what was measured, pass or fail; one process, one run.

Run: python -m tests.benchmarks.speed [ROWS]

    quimb    the same work by quimb's general-purpose evolution             4 minutes
    error    time to reach the same true error, against quimb               8
    small    a step at small bonds                                          1/4
    large    share of the matrix-product peak at large bonds                1/2
    threads  two threads against one                                        1
    memory   peak over the state's bytes, and the forecast of it            2
    reach    a long run on two threads, only if asked for: `reach` or `all`
    profile  what the parts of a layer cost, only if asked for              1

Without words all but the last two, with `all` all but the last. One BLAS thread. Rows on one thread are timed
by processor time, so that other work on the machine disturbs them less; `threads` and `reach` by the clock on
the wall. Absolute times depend on the machine; ratios of one run are the result.
"""

from __future__ import annotations

import os
import sys
import time
from collections.abc import Callable, Iterator

from threadpoolctl import threadpool_limits

from tests.benchmarks.speed_cases import Line
from tests.benchmarks.speed_error import error_lines
from tests.benchmarks.speed_memory import memory_lines
from tests.benchmarks.speed_quimb import quimb_lines
from tests.benchmarks.speed_reach import reach_lines
from tests.benchmarks.speed_single import large_lines, profile_lines, small_lines, thread_lines
from tnquench.terminal.table import aligned

ROWS: dict[str, Callable[[], Iterator[Line]]] = {
    "quimb": quimb_lines,
    "error": error_lines,
    "small": small_lines,
    "large": large_lines,
    "threads": thread_lines,
    "memory": memory_lines,
    "reach": reach_lines,
    "profile": profile_lines,
}

#: What takes long, and what is no target.
REACH, PROFILE = "reach", "profile"

HEADING = ("row", "", "target", "measured", "")


def chosen(words: list[str]) -> list[str]:
    """Return the rows that the words ask for; SystemExit if a word names none."""
    unknown = [word for word in words if word not in (*ROWS, "all")]
    if unknown:
        message = f"no row {', '.join(unknown)}; there are {', '.join(ROWS)}, and all"
        raise SystemExit(message)
    if not words:
        return [row for row in ROWS if row not in (REACH, PROFILE)]
    return [row for row in ROWS if row in words or ("all" in words and row != PROFILE)]


def main(words: list[str]) -> None:
    """Measure the rows and print the table; each line is also told as soon as it is known."""
    rows = chosen(words)
    load = f"load of the machine at the start {os.getloadavg()[0]:.1f}, at the end "
    cells: list[tuple[str, ...]] = [HEADING]
    for row in rows:
        began, name = time.perf_counter(), row
        for line in ROWS[row]():
            cells.append(line.cells(name))
            print(*cells[-1], sep=" | ", file=sys.stderr, flush=True)
            name = ""
        print(f"{row} took {time.perf_counter() - began:.0f} s", file=sys.stderr, flush=True)
    print(aligned(cells))
    print(f"{load}{os.getloadavg()[0]:.1f}, on {os.cpu_count()} processors")


if __name__ == "__main__":
    with threadpool_limits(1):
        main(sys.argv[1:])
