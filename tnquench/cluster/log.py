"""The log of a task: output of its command, and a line where each try begins and ends."""

from __future__ import annotations

import os
import re
import signal
import socket
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path

#: A log is read from its end, so many bytes.
_TAIL = 20_000

_MARK = re.compile(r"^== (?P<time>\S+ \S+) (?P<what>begins|ends)(?:: exit code (?P<code>-?\d+))?")


@dataclass(frozen=True)
class LastTry:
    """What a log says of the last try of a task.

    code : of its exit, None if no end is told; lines : last lines of its output
    """

    code: int | None
    lines: tuple[str, ...]


def begin_mark(name: str) -> str:
    """Return the line with which a try begins."""
    return f"== {_now()} begins: {name}, on {socket.gethostname()}, process {os.getpid()}\n"


def end_mark(code: int, seconds: float) -> str:
    """Return the line with which a try ends."""
    return f"== {_now()} ends: exit code {code} ({said(code)}), {seconds:.1f} s\n"


def said(code: int) -> str:
    """Return what an exit code means."""
    if code < 0:
        try:
            return f"ended by {signal.Signals(-code).name}"
        except ValueError:
            return f"ended by signal {-code}"
    meanings = {0: "done", 1: "failed", 2: "bad input", 3: "stopped, can go on", 130: "interrupted"}
    return meanings.get(code, "failed")


def last_try(log: Path, *, lines: int = 3) -> LastTry | None:
    """Return the last try of a log; None if there was none, or the log cannot be read."""
    try:
        with log.open("rb") as stream:
            stream.seek(max(0, stream.seek(0, os.SEEK_END) - _TAIL))
            text = stream.read().decode("utf-8", "replace")
    except OSError:
        return None
    rows = text.splitlines()
    marks = [(place, found) for place, row in enumerate(rows) if (found := _MARK.match(row))]
    if not marks and not rows:
        return None
    ended = bool(marks) and marks[-1][1]["what"] == "ends"
    begun = next((place for place, mark in reversed(marks) if mark["what"] == "begins"), -1)
    output = [row for row in rows[begun + 1 :] if row.strip() and not _MARK.match(row)]
    code = int(marks[-1][1]["code"]) if ended and marks[-1][1]["code"] else None
    return LastTry(code, tuple(_printable(row) for row in output[-lines:]))


def _printable(row: str) -> str:
    """Return a line without what would steer a terminal; of a bar drawn over itself, its last state."""
    return "".join(char if char.isprintable() else " " for char in row.rstrip().split("\r")[-1])[:300]


def _now() -> str:
    return datetime.now(UTC).strftime("%Y-%m-%d %H:%M:%SZ")
