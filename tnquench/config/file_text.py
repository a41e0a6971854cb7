"""Reads small text files that a user names, and says in a few words why one cannot be read."""

from __future__ import annotations

import os
import stat
from pathlib import Path

#: Largest config or table that is read, in bytes.
LARGEST_FILE = 10_000_000

#: Flag with which opening a pipe does not wait for whoever writes into it; Windows has none.
NEVER_WAIT = getattr(os, "O_NONBLOCK", 0)


class UnreadableFileError(ValueError):
    """A file cannot be read as text; the message is the reason, to follow its name."""


def read_text(path: Path) -> str:
    """Return the text of a regular UTF-8 file of at most `LARGEST_FILE` bytes.

    Raises UnreadableFileError, with the reason, for anything else.
    """
    try:
        if path.is_dir():
            reason = "is a folder, not a file"
            raise UnreadableFileError(reason)
        # a pipe or a device might never end, and opening a pipe might already
        with open(path, "rb", opener=_never_waiting) as stream:
            if not stat.S_ISREG(os.fstat(stream.fileno()).st_mode):
                reason = "is not a regular file"
                raise UnreadableFileError(reason)
            content = stream.read(LARGEST_FILE + 1)
    except FileNotFoundError as error:
        reason = "no such file"
        raise UnreadableFileError(reason) from error
    except OSError as error:
        reason = f"cannot be read ({(error.strerror or 'unknown reason').lower()})"
        raise UnreadableFileError(reason) from error
    if len(content) > LARGEST_FILE:
        reason = f"is larger than {LARGEST_FILE // 1_000_000} MB, the most that is read"
        raise UnreadableFileError(reason)
    return _decoded(content)


def _never_waiting(name: str, flags: int) -> int:
    return os.open(name, flags | NEVER_WAIT)


def _decoded(content: bytes) -> str:
    try:
        return content.decode("utf-8-sig")  # some editors begin a UTF-8 file with a byte-order mark
    except UnicodeDecodeError as error:
        line = content.count(b"\n", 0, error.start) + 1
        reason = f"line {line} is not UTF-8 text (byte 0x{content[error.start]:02x}); save the file as UTF-8"
        raise UnreadableFileError(reason) from error
