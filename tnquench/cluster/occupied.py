"""Who writes in the folder of a point just now: a whole run, or single quenches of it."""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path

from tnquench.dataset.lock import LONE_LOCK, WHOLE_LOCK, Holder, lock_holder


def occupant(folder: Path, quench: str | None = None) -> Holder | None:
    """Return who writes in a run folder; None if nobody does.

    quench : whose part of the folder is meant; None for all of it
    """
    for place, name in _locks(folder, quench):
        if (holder := lock_holder(place, name)) is not None:
            return holder
    return None


def _locks(folder: Path, quench: str | None) -> Iterator[tuple[Path, str]]:
    yield folder, WHOLE_LOCK
    if quench is not None:
        place = folder / quench
        yield place.parent, f"{LONE_LOCK}{place.name}"
        return
    for place in (folder, *folder.glob("stretch_*")):
        for file in place.glob(f"{LONE_LOCK}*"):
            if "." not in file.name[len(LONE_LOCK) :]:  # a claim to a lock has its token behind a dot
                yield place, file.name
