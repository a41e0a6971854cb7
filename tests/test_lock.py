"""Locks of folders: one holder, dead ones recognised, one winner among many takers, no trust in clocks."""

from __future__ import annotations

import json
import os
import time
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest

from tests.lock_cases import end, names, start_holder
from tnquench.dataset import lock as lock_module
from tnquench.dataset import process as process_module
from tnquench.dataset.lock import DEAD_AFTER, Holder, folder_lock, lock_holder
from tnquench.errors import InputError


@pytest.fixture(scope="module")
def dead_lock(tmp_path_factory: pytest.TempPathFactory) -> bytes:
    """What a killed process left."""
    folder = tmp_path_factory.mktemp("dead")
    end(start_holder(folder))
    assert names(folder) == [".lock"]
    return (folder / ".lock").read_bytes()


@pytest.fixture
def dead(tmp_path: Path, dead_lock: bytes) -> Path:
    """A folder whose lock was left by a killed process."""
    (tmp_path / ".lock").write_bytes(dead_lock)
    return tmp_path


@pytest.fixture(scope="module")
def holder(tmp_path_factory: pytest.TempPathFactory) -> Iterator[tuple[int, bytes]]:
    """Another living process, by its number and its lock."""
    folder = tmp_path_factory.mktemp("living")
    started = start_holder(folder)
    yield started.pid, (folder / ".lock").read_bytes()
    end(started)


@pytest.fixture
def living(tmp_path: Path, holder: tuple[int, bytes]) -> Path:
    """A folder that another living process holds."""
    (tmp_path / ".lock").write_bytes(holder[1])
    return tmp_path


def rewrite(folder: Path, **changes: Any) -> None:
    """Change what the lock says of its process."""
    path = folder / ".lock"
    said = json.loads(path.read_text())
    said["process"] |= changes
    path.write_text(json.dumps(said))


def touch(folder: Path, *, ago: float) -> None:
    moment = time.time() - ago
    os.utime(folder / ".lock", (moment, moment))


def assert_refused(folder: Path, *parts: str) -> None:
    with pytest.raises(InputError) as refusal, folder_lock(folder):
        pytest.fail("two holders")
    assert refusal.value.exit_code == 2
    assert len(refusal.value.problems) == 1
    for part in parts:
        assert part in refusal.value.problems[0]


def assert_taken(folder: Path) -> None:
    with folder_lock(folder):
        holder = lock_holder(folder)
        assert holder is not None
        assert holder.pid == os.getpid()
        assert names(folder) == [".lock"]
    assert names(folder) == []


def test_lock_is_made_held_and_released(tmp_path: Path) -> None:
    folder = tmp_path / "new" / "folder"
    assert lock_holder(folder) is None
    assert_taken(folder)
    assert lock_holder(folder) is None


def test_lock_is_released_by_an_error(tmp_path: Path) -> None:
    with pytest.raises(ZeroDivisionError), folder_lock(tmp_path):
        raise ZeroDivisionError
    assert names(tmp_path) == []


def test_same_process_does_not_hold_it_twice_but_two_names_do(tmp_path: Path) -> None:
    with folder_lock(tmp_path):
        assert_refused(tmp_path, str(os.getpid()))
        with folder_lock(tmp_path, ".other"):
            assert names(tmp_path) == [".lock", ".other"]
    assert names(tmp_path) == []


def test_living_holder_is_named_and_untouched(living: Path) -> None:
    holder = lock_holder(living)
    assert isinstance(holder, Holder)
    before = (living / ".lock").read_bytes()
    assert_refused(living, holder.host, f"process {holder.pid} ", holder.since)
    assert (living / ".lock").read_bytes() == before
    assert names(living) == [".lock"]


def test_lock_of_a_killed_process_is_taken_over(dead: Path) -> None:
    assert lock_holder(dead) is None
    assert_taken(dead)


def test_zombie_holds_nothing(tmp_path: Path) -> None:
    holder = start_holder(tmp_path)
    os.kill(holder.pid, 9)
    os.waitid(os.P_PID, holder.pid, os.WEXITED | os.WNOWAIT)  # dead, but not yet collected by its parent
    assert_taken(tmp_path)
    holder.communicate()


def test_number_given_to_a_later_process_is_recognised(living: Path) -> None:
    started = json.loads((living / ".lock").read_text())["process"]["started"]
    rewrite(living, started=started - 1)
    assert_taken(living)


@pytest.mark.parametrize("jump", [-1e9, -7200.0, 7200.0, 1e9], ids=lambda jump: f"{jump:+.0e}s")
def test_jumps_of_the_clock_neither_steal_nor_keep_a_lock_of_this_machine(
    living: Path, dead_lock: bytes, monkeypatch: pytest.MonkeyPatch, jump: float
) -> None:
    touch(living, ago=jump)
    real = time.time
    monkeypatch.setattr(time, "time", lambda: real() + jump)
    assert lock_holder(living) is not None
    assert_refused(living, "process ")
    (living / ".lock").write_bytes(dead_lock)
    touch(living, ago=0.0)
    assert lock_holder(living) is None
    assert_taken(living)


ELSEWHERE = {"host": "node17", "machine": "another boot", "pid": 1}


@pytest.mark.parametrize(
    ("ago", "lives"),
    [(5.0, True), (DEAD_AFTER - 30, True), (DEAD_AFTER + 30, False), (-30.0, True), (-1e8, False)],
    ids=["just now", "in time", "too long ago", "slightly ahead", "far in the future"],
)
def test_lock_of_another_machine_lives_by_its_touches(dead: Path, ago: float, lives: bool) -> None:
    rewrite(dead, **ELSEWHERE)
    touch(dead, ago=ago)
    if lives:
        assert_refused(dead, "node17", "process 1 ")
        holder = lock_holder(dead)
        assert holder is not None
        assert holder.host == "node17"
    else:
        assert lock_holder(dead) is None
        assert_taken(dead)


@pytest.mark.parametrize(
    ("job", "restarts", "taken"), [("7", 1, True), ("7", 2, False), ("8", 0, False), ("", 0, False)]
)
def test_requeued_job_takes_over_its_own_lock_from_another_machine(
    dead: Path, monkeypatch: pytest.MonkeyPatch, job: str, restarts: int, taken: bool
) -> None:
    """The scheduler starts a job again only after it ended: 7 was started for the third time here."""
    rewrite(dead, **ELSEWHERE, job=job, restarts=restarts)
    monkeypatch.setenv(process_module.JOB, "7")
    monkeypatch.setenv(process_module.RESTARTS, "2")
    if taken:
        assert_taken(dead)
    else:
        assert_refused(dead, "node17")


@pytest.mark.parametrize(
    "text", ["", "{", "[]", '{"process": {}}', '{"process": {"pid": "x"}}', "\udcff" * 9]
)
def test_unreadable_lock_counts_while_it_is_young(tmp_path: Path, text: str) -> None:
    (tmp_path / ".lock").write_bytes(text.encode(errors="surrogateescape"))
    assert_refused(tmp_path, "unknown")
    assert lock_holder(tmp_path) is not None
    touch(tmp_path, ago=DEAD_AFTER + 30)
    assert_taken(tmp_path)


def test_lock_names_no_path(tmp_path: Path) -> None:
    """A token from a file becomes part of a file's name; it must not lead elsewhere."""
    with folder_lock(tmp_path):
        said = json.loads((tmp_path / ".lock").read_text())
    (tmp_path / ".lock").write_text(json.dumps(said | {"token": "/../../x"}))
    touch(tmp_path, ago=DEAD_AFTER + 30)
    assert_taken(tmp_path)


def test_holder_touches_its_lock_but_no_other(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(lock_module, "HEARTBEAT", 0.01)
    with folder_lock(tmp_path):
        touch(tmp_path, ago=1000.0)
        wait_until(lambda: time.time() - (tmp_path / ".lock").stat().st_mtime < 100.0)
        rewrite(tmp_path, pid=1)
        touch(tmp_path, ago=1000.0)
        time.sleep(0.1)
        assert time.time() - (tmp_path / ".lock").stat().st_mtime > 900.0
    assert names(tmp_path) == [".lock"], "a lock that is no longer ours stays"


def wait_until(condition: Any) -> None:
    limit = time.monotonic() + 10.0
    while not condition():
        assert time.monotonic() < limit
        time.sleep(0.01)


def test_vanished_folder_is_no_reason_to_fail_at_the_end(tmp_path: Path) -> None:
    folder = tmp_path / "folder"
    with folder_lock(folder):
        (folder / ".lock").unlink()
        folder.rmdir()
    assert not folder.exists()


def test_file_in_the_place_of_the_folder_is_refused(tmp_path: Path) -> None:
    (tmp_path / "file").write_text("")
    assert lock_holder(tmp_path / "file") is None
    for folder in (tmp_path / "file", tmp_path / "file" / "below", tmp_path / "null\0"):
        with pytest.raises(InputError, match="cannot be written"), folder_lock(folder):
            pytest.fail("held")


def test_full_disk_is_no_fault_of_the_input(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def fail(*_: object) -> None:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(Path, "write_text", fail)
    with pytest.raises(OSError, match="No space left"), folder_lock(tmp_path):
        pytest.fail("held")
    assert names(tmp_path) == []


def test_file_system_without_links(dead: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def refuse(*_: object) -> None:
        raise OSError(95, "Operation not supported")

    monkeypatch.setattr(os, "link", refuse)
    assert_taken(dead)
    with folder_lock(dead):
        assert_refused(dead, str(os.getpid()))
