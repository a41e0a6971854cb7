"""Checkpoints: a calculation in the middle, kept so that it can go on exactly.

Two generations are kept, `NAME.h5` and `NAME.previous.h5`, each whole and with a digest.
"""

from __future__ import annotations

import contextlib
import os
from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Any

from tnquench.dataset.checkpoint_file import UnsoundFile, read_file, read_file_header, write_file
from tnquench.dataset.packed import pack
from tnquench.errors import InputError

#: Generations in the order in which they are tried.
NEWEST, PREVIOUS = "newest", "previous"


def save_checkpoint(path: Path, content: Mapping[str, Any]) -> None:
    """Write `content` to `path`; what stood there becomes the previous generation.

    content : nested dict with text keys; leaves are arrays of numbers or truth values (their memory layout is
    kept), int, float, bool, str, None, numpy scalars, and lists or tuples of leaves or dicts. Its "header", a
    flat dict of text, numbers and truth values, can be read without the rest.
    Whenever the machine stops, a whole generation is there: the file is written beside, synced, and renamed.
    Raises OSError as it came (disk full, folder gone) with the generations as they were, TypeError for what
    cannot be kept.
    """
    packed, header = pack(content), pack(content.get("header", {}))
    if header.columns:
        message = "the header of a checkpoint holds no arrays"
        raise TypeError(message)
    partial = _beside(path, "partial")
    try:
        with partial.open("w+b") as stream:
            write_file(stream, packed, header.text)
            stream.flush()
            os.fsync(stream.fileno())
        _rotate(partial, path)
    except BaseException:
        with contextlib.suppress(OSError):
            partial.unlink()
        raise
    _sync_folder(path.parent)


def load_checkpoint(path: Path) -> dict[str, Any] | None:
    """Return the content last saved at `path`, None if there is none.

    The entry "generation" tells which one it is: "newest", or "previous" where the newest is missing or
    damaged.
    Raises InputError if there are files but none is sound.
    """
    problems = []
    for generation, file in _generations(path):
        try:
            with file.open("rb") as stream:
                return {**read_file(stream), "generation": generation}
        except FileNotFoundError:
            continue
        except UnsoundFile as damage:
            problems.append(f"{file.name}: {damage}")
        except OSError as error:
            problems.append(f"{file.name}: cannot be read: {error.strerror or error}")
    if not problems:
        return None
    advice = "no generation is sound: delete these files to start this part afresh, or --fresh for all"
    raise InputError(str(path), [*problems, advice], consequence="nothing was continued")


def read_header(path: Path) -> dict[str, Any] | None:
    """Return the header of the newest generation at `path` whose header is sound, None if there is none.

    The rest of the file is neither read nor checked.
    """
    for _, file in _generations(path):
        with contextlib.suppress(OSError, UnsoundFile), file.open("rb") as stream:
            return read_file_header(stream)
    return None


def _generations(path: Path) -> Iterator[tuple[str, Path]]:
    """Yield the files that may hold a generation, the newest first."""
    yield NEWEST, path
    yield PREVIOUS, _beside(path, "outgoing")
    yield PREVIOUS, path.with_suffix(".previous.h5")


def _beside(path: Path, role: str) -> Path:
    """Return a name for a passing file; always the same, so that what a killed run left is overwritten."""
    return path.with_name(f".{path.name}.{role}")


def _rotate(partial: Path, path: Path) -> None:
    """Put the new file at `path` and what was there at the previous generation.

    The previous generation, which may be the only sound one, goes only after the new one has come; meanwhile
    the old file has a name of its own.
    """
    (_, newest), (_, outgoing), (_, previous) = _generations(path)
    if newest.exists():
        try:
            os.link(newest, outgoing)
        except OSError:  # the file system knows no second names, or a killed run left one
            newest.replace(outgoing)
    partial.replace(newest)
    if outgoing.exists():
        outgoing.replace(previous)


def _sync_folder(folder: Path) -> None:
    with contextlib.suppress(OSError):  # some network file systems refuse; the file itself is complete
        descriptor = os.open(folder, os.O_RDONLY)
        try:
            os.fsync(descriptor)
        finally:
            os.close(descriptor)
