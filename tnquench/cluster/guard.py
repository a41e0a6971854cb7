"""Becomes the command that follows, which is asked to end when the process that began it is gone.

Run as a script, so that nothing else is imported: guard.py PARENT COMMAND...
"""

from __future__ import annotations

import ctypes
import os
import signal
import sys

#: Linux: the signal that a process gets when the thread that began it ends (prctl(2)); it survives execve.
PR_SET_PDEATHSIG = 1

#: Exit code of a run that can go on.
STOPPED = 3


def main() -> None:
    """Arrange for the signal and become the command."""
    parent, command = int(sys.argv[1]), sys.argv[2:]
    signal.signal(signal.SIGUSR1, signal.SIG_IGN)  # until the command itself answers to it
    if sys.platform == "linux":
        ctypes.CDLL(None).prctl(PR_SET_PDEATHSIG, int(signal.SIGTERM))
        if os.getppid() != parent:  # it went before we asked
            sys.exit(STOPPED)
    os.execv(command[0], command)


if __name__ == "__main__":
    main()
