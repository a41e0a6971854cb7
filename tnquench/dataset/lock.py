"""A lock on a folder, so that two runs never write in one place; it works on network file systems.

The lock is a small file that names its holder and comes into being whole, by a link. Its holder touches it
now and then: from another machine, whose processes cannot be looked at, a lock is dead when it has long not
been touched. A dead lock is taken over by the one process that links a claim to succeed just this lock; then
the claimant's file replaces it. Nothing depends on how long a step takes, so two takers never both win.
"""

from __future__ import annotations

import contextlib
import json
import os
import threading
import time
import uuid
from collections.abc import Iterator, Sequence
from dataclasses import asdict, dataclass
from errno import EDQUOT, EMLINK, ENOSPC, ENOSYS, EOPNOTSUPP, EPERM
from pathlib import Path

from tnquench.dataset.process import Incarnation, is_alive, this_process
from tnquench.errors import InputError

#: A full disk is no fault of the input.
FULL = frozenset({ENOSPC, EDQUOT})

#: Errors of file systems that know no second names.
NO_LINKS = frozenset({EPERM, ENOSYS, EOPNOTSUPP, EMLINK})

#: Name of the lock on a whole run's folder, and what those on single quenches of it begin with.
WHOLE_LOCK, LONE_LOCK = ".lock", ".lock-"

#: Seconds between two touches by the holder, and after how many a lock untouched is dead for other machines.
HEARTBEAT, DEAD_AFTER = 30.0, 600.0

#: No lock says more than this many bytes.
LONGEST = 1 << 16


@dataclass(frozen=True)
class Holder:
    """Who holds a lock: host, process id, and since when (local time as text)."""

    host: str
    pid: int
    since: str


@dataclass(frozen=True)
class _Lock:
    """What a lock file says; token : unlike any other lock's."""

    process: Incarnation
    since: str
    token: str

    @property
    def holder(self) -> Holder:
        """Who this is, for the user."""
        return Holder(self.process.host, self.process.pid, self.since)

    def text(self) -> str:
        """Return what the lock's file shall say."""
        return json.dumps(asdict(self))

    @staticmethod
    def parsed(text: str) -> _Lock:
        """Return the lock that a file's text describes; raises ValueError, TypeError or KeyError."""
        said = json.loads(text)
        process = Incarnation(**said["process"])
        if not isinstance(process.pid, int) or not str(said["token"]).isalnum():
            message = "not a lock"
            raise TypeError(message)
        return _Lock(process, str(said["since"]), str(said["token"]))


@dataclass(frozen=True)
class _Found:
    """A lock file as it was found; lock : None if it cannot be read."""

    lock: _Lock | None
    status: os.stat_result

    @property
    def token(self) -> str:
        """What tells this lock from any other."""
        if self.lock is None:
            return f"unreadable-{self.status.st_ino}-{self.status.st_mtime_ns}"
        return self.lock.token

    @property
    def holder(self) -> Holder:
        """Who this is, for the user."""
        return self.lock.holder if self.lock else Holder("an unknown host", 0, "an unknown time")

    def lives(self, *, now: float) -> bool:
        """Tell whether the holder lives; a touch in the future says as little as one long ago."""
        alive = is_alive(self.lock.process) if self.lock else None
        return abs(now - self.status.st_mtime) <= DEAD_AFTER if alive is None else alive


@contextlib.contextmanager
def folder_lock(folder: Path, name: str = WHOLE_LOCK) -> Iterator[None]:
    """Hold the lock on a folder, which is made if missing; a dead lock is taken over.

    Raises InputError naming the holder if it lives, or if the folder cannot be written; OSError if the disk
    is full.
    """
    path = folder / name
    with _refusing(path):
        folder.mkdir(parents=True, exist_ok=True)
        lock = _acquire(path)
    ended = threading.Event()
    heartbeat = threading.Thread(target=_touch, args=(path, lock, ended), daemon=True, name=f"lock {path}")
    heartbeat.start()
    try:
        yield
    finally:
        if lock.process == this_process():  # a forked child must not release its parent's lock
            ended.set()
            heartbeat.join()
            with contextlib.suppress(OSError):  # a vanished folder holds nothing
                if _is_ours(path, lock):
                    path.unlink()


def lock_holder(folder: Path, name: str = WHOLE_LOCK) -> Holder | None:
    """Return who holds the lock on a folder; None if nobody does, or only a dead lock is there."""
    found = _chain(folder / name)
    return found[-1].holder if found and found[-1].lives(now=time.time()) else None


def _acquire(path: Path) -> _Lock:
    """Return a new lock at `path`; raises InputError if a living holder is there."""
    lock = _Lock(this_process(), time.strftime("%Y-%m-%d %H:%M:%S"), uuid.uuid4().hex)
    own = path.with_name(f"{path.name}.{lock.token}")
    try:
        own.write_text(lock.text())
        now = own.stat().st_mtime  # by the clock of the file server, like the touches it is compared with
        while not _linked(own, path):
            chain = _chain(path)
            if not chain:
                continue
            if chain[-1].lives(now=now):
                raise _held(path, chain[-1].holder)
            if _succeeded(own, path, chain):
                break
        return lock
    finally:
        with contextlib.suppress(OSError):
            own.unlink(missing_ok=True)


def _succeeded(own: Path, path: Path, chain: Sequence[_Found]) -> bool:
    """Try to put `own` in the place of a dead lock; False if others were faster.

    chain : the dead lock and the claims of those who died while they took it over
    """
    claim = _claim(path, chain[-1])
    if not _linked(own, claim):
        return False
    present = _found(path)
    if present is None or present.token != chain[0].token:  # it was taken over, or given up, meanwhile
        claim.unlink(missing_ok=True)
        return False
    own.replace(path)
    for old in path.parent.glob(f"{path.name}.after-*"):  # void now: all of them concern an earlier lock
        with contextlib.suppress(OSError):
            old.unlink()
    return True


def _chain(path: Path) -> list[_Found]:
    """Return the lock at `path`, the claim to succeed it, the claim to succeed that, and so on."""
    chain = []
    found = _found(path)
    while found is not None:
        chain.append(found)
        found = _found(_claim(path, found))
    return chain


def _claim(path: Path, found: _Found) -> Path:
    return path.with_name(f"{path.name}.after-{found.token}")


def _found(path: Path) -> _Found | None:
    """Return what stands at `path`, None if nothing does."""
    try:
        with path.open("rb") as stream:
            status, text = os.fstat(stream.fileno()), stream.read(LONGEST)
    except (FileNotFoundError, NotADirectoryError):
        return None
    try:
        return _Found(_Lock.parsed(text.decode()), status)
    except (ValueError, TypeError, KeyError):
        return _Found(None, status)


def _linked(own: Path, path: Path) -> bool:
    """Give `own` the second name `path`; False if there is such a file."""
    try:
        os.link(own, path)
    except FileExistsError:
        # a server may have made the link and lost its answer
        with contextlib.suppress(FileNotFoundError):
            return path.samefile(own)
        return False
    except OSError as error:
        if error.errno not in NO_LINKS:
            raise
        return _created(path, own.read_text())
    return True


def _created(path: Path, text: str) -> bool:
    """Make a new file, where links are not known; False if there is such a file."""
    try:
        with path.open("x") as stream:
            stream.write(text)
    except FileExistsError:
        return False
    return True


def _touch(path: Path, lock: _Lock, ended: threading.Event) -> None:
    """Touch the lock until told to stop."""
    while not ended.wait(HEARTBEAT):
        with contextlib.suppress(OSError):  # the folder may be gone for a while
            if _is_ours(path, lock):
                os.utime(path)


def _is_ours(path: Path, lock: _Lock) -> bool:
    found = _found(path)
    return found is not None and found.lock == lock


def _held(path: Path, holder: Holder) -> InputError:
    who = f"process {holder.pid} on {holder.host} since {holder.since}"
    problem = (
        f"another run works here: {who}; wait for its end or name another folder "
        f"(if that process is gone for certain, delete {path.name})"
    )
    return InputError(str(path), [problem])


@contextlib.contextmanager
def _refusing(path: Path) -> Iterator[None]:
    """Turn errors of the file system into one line for the user, except a full disk."""
    try:
        yield
    except (OSError, ValueError) as error:  # ValueError: a null byte in the name
        if isinstance(error, OSError) and error.errno in FULL:
            raise
        reason = getattr(error, "strerror", None) or str(error)
        raise InputError(str(path), [f"cannot be written: {reason}"]) from error
