"""Locks held by other processes, living and dead."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

HOLD = """
import sys, time
from pathlib import Path
from tnquench.dataset.lock import folder_lock
with folder_lock(Path(sys.argv[1])):
    print("held", flush=True)
    sys.stdin.read()
"""


def start_holder(folder: Path) -> subprocess.Popen[str]:
    """Start a process that holds the lock until its input is closed."""
    words = [sys.executable, "-c", HOLD, str(folder)]
    holder = subprocess.Popen(words, stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True)
    assert holder.stdout is not None
    assert holder.stdout.readline() == "held\n"
    return holder


def end(holder: subprocess.Popen[str]) -> None:
    holder.kill()
    holder.communicate()


def names(folder: Path) -> list[str]:
    return sorted(file.name for file in folder.iterdir())
