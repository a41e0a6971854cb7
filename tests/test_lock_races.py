"""Of many who take over a dead lock one wins, however slow a step is and wherever one of them dies."""

from __future__ import annotations

import contextlib
import json
import os
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest

from tests.lock_cases import end, names, start_holder
from tnquench.dataset import lock as lock_module
from tnquench.dataset.lock import folder_lock, lock_holder
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


def test_taker_that_died_half_way_is_succeeded(dead: Path) -> None:
    """A claim of a dead taker stands beside the dead lock; so does the claim of one who died taking that."""
    said = json.loads((dead / ".lock").read_text())
    for before, after in ((said["token"], "b" * 32), ("b" * 32, "c" * 32)):
        (dead / f".lock.after-{before}").write_text(json.dumps(said | {"token": after}))
    assert lock_holder(dead) is None
    assert_taken(dead)


def test_living_taker_counts_as_the_holder(living: Path) -> None:
    said = json.loads((living / ".lock").read_text())
    gone = said | {"token": "d" * 32, "process": said["process"] | {"started": 1.0}}
    (living / ".lock").rename(living / f".lock.after-{'d' * 32}")
    (living / ".lock").write_text(json.dumps(gone))
    assert_refused(living, str(said["process"]["pid"]))


@pytest.mark.parametrize("release", [False, True], ids=["rival stays", "rival has left"])
@pytest.mark.parametrize("before", ["_linked", "_found", "_claim"])
def test_slow_taker_does_not_take_the_lock_of_a_fast_one(
    tmp_path: Path, dead_lock: bytes, monkeypatch: pytest.MonkeyPatch, before: str, release: bool
) -> None:
    """Before each step of a taker in turn, another one takes the dead lock, and keeps it or gives it back."""
    outcomes = []
    for number in range(1, 9):
        folder = tmp_path / str(number)
        folder.mkdir()
        (folder / ".lock").write_bytes(dead_lock)
        with monkeypatch.context() as patch:
            outcomes.append(race(folder, patch, before=before, at=number, release=release))
        assert not release or names(folder) == []
    assert set(outcomes) <= {"second" if release else "refused", "rival refused", "alone"}
    assert len(set(outcomes)) > 1, "the rival came in time at least once, and too late at least once"


def race(folder: Path, patch: pytest.MonkeyPatch, *, before: str, at: int, release: bool) -> str:
    """Take a dead lock; before the call number `at` of a step, a rival does so from start to end."""
    step, calls, rival = getattr(lock_module, before), [0], contextlib.ExitStack()
    outcome = "alone"

    def interrupted(*arguments: Any) -> Any:
        nonlocal outcome
        calls[0] += 1
        if calls[0] == at:
            try:
                rival.enter_context(folder_lock(folder))
                outcome = "rival"
            except InputError:
                outcome = "rival refused"
            if release:
                rival.close()
        return step(*arguments)

    patch.setattr(lock_module, before, interrupted)
    try:
        with rival, folder_lock(folder):
            if outcome == "rival":
                outcome = "second" if release else "TWO HOLDERS"
    except InputError:
        outcome = "refused" if outcome == "rival" and not release else "REFUSED BY NOBODY"
    return outcome


RACE = """
import sys, time
from pathlib import Path
from tnquench.dataset.lock import folder_lock
from tnquench.errors import InputError
folder, number = Path(sys.argv[1]), sys.argv[2]
print("ready", flush=True)
for line in sys.stdin:
    try:
        with folder_lock(folder / line.strip()):
            print("won", flush=True)
            sys.stdin.readline()
    except InputError:
        print("lost", flush=True)
        sys.stdin.readline()
"""


def test_of_many_takers_at_once_one_wins(dead: Path) -> None:
    """Three processes run for twenty dead locks at the same moments; nobody lets go before all have tried."""
    lock = (dead / ".lock").read_bytes()
    rounds = 20
    for number in range(rounds):
        (dead / str(number)).mkdir()
        (dead / str(number) / ".lock").write_bytes(lock)
    takers = [
        subprocess.Popen(
            [sys.executable, "-c", RACE, str(dead), "x"],
            stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True, bufsize=1,
        )
        for _ in range(3)
    ]  # fmt: skip
    try:
        assert [answer(taker) for taker in takers] == ["ready"] * 3
        for number in range(rounds):
            tell(takers, f"{number}\n")
            assert sorted(answer(taker) for taker in takers) == ["lost", "lost", "won"], number
            tell(takers, "\n")
    finally:
        for taker in takers:
            taker.communicate()
    assert all(names(dead / str(number)) == [] for number in range(rounds))


def tell(takers: list[subprocess.Popen[str]], words: str) -> None:
    for taker in takers:
        assert taker.stdin is not None
        taker.stdin.write(words)
        taker.stdin.flush()


def answer(taker: subprocess.Popen[str]) -> str:
    assert taker.stdout is not None
    return taker.stdout.readline().strip()
