"""Checkpoint files under faults: two generations, damage, full disks, a machine that stops at any moment."""

from __future__ import annotations

import hashlib
import io
import os
import subprocess
import sys
from errno import EFBIG, ENOSPC
from pathlib import Path
from typing import Any

import h5py
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from tnquench.dataset import checkpoint_file
from tnquench.dataset.checkpoint import load_checkpoint, read_header, save_checkpoint
from tnquench.errors import InputError


@pytest.fixture(scope="module")
def scratch(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return tmp_path_factory.mktemp("checkpoints")


def numbered(number: int) -> dict[str, Any]:
    return {"header": {"number": number}, "state": np.full(200, float(number))}


def number_of(content: dict[str, Any] | None) -> tuple[int, str]:
    assert content is not None
    number = content["header"]["number"]
    assert np.array_equal(content["state"], np.full(200, float(number))), "a wrong number"
    return number, content["generation"]


def saved(path: Path, *numbers: int) -> None:
    for number in numbers:
        save_checkpoint(path, numbered(number))


def test_nothing_there(tmp_path: Path) -> None:
    assert load_checkpoint(tmp_path / "main.h5") is None
    assert read_header(tmp_path / "main.h5") is None
    assert load_checkpoint(tmp_path / "none" / "main.h5") is None


def test_two_generations_are_kept(tmp_path: Path) -> None:
    path = tmp_path / "main-ab.h5"
    saved(path, 1, 2, 3)
    assert sorted(file.name for file in tmp_path.iterdir()) == ["main-ab.h5", "main-ab.previous.h5"]
    assert number_of(load_checkpoint(path)) == (3, "newest")
    assert read_header(path) == {"number": 3}
    path.unlink()
    assert number_of(load_checkpoint(path)) == (2, "previous")
    assert read_header(path) == {"number": 2}
    saved(path, 4)
    assert number_of(load_checkpoint(path)) == (4, "newest")


def test_damaged_newest_falls_back_and_both_damaged_is_refused(tmp_path: Path) -> None:
    path = tmp_path / "main.h5"
    saved(path, 1, 2)
    path.write_bytes(path.read_bytes()[:-300])
    assert number_of(load_checkpoint(path)) == (1, "previous")
    path.with_suffix(".previous.h5").write_bytes(b"")
    with pytest.raises(InputError) as refusal:
        load_checkpoint(path)
    assert len(refusal.value.problems) == 3
    assert "main.h5: " in refusal.value.problems[0]
    assert "main.previous.h5: truncated" in refusal.value.problems[1]
    assert "--fresh" in refusal.value.problems[2]
    assert read_header(path) is None


def test_newer_layout_is_refused(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    path = tmp_path / "main.h5"
    with monkeypatch.context() as patch:
        patch.setattr(checkpoint_file, "LAYOUT", 2)
        saved(path, 1)
    with pytest.raises(InputError, match="layout 2"):
        load_checkpoint(path)


def test_other_hdf5_file_with_a_right_digest_is_refused(tmp_path: Path) -> None:
    path = tmp_path / "main.h5"
    with h5py.File(path, "w") as file:
        file["contents"] = np.frombuffer(b'{"mapping": {"a": {"array": {}}}}', dtype=np.uint8)
        file.create_group("arrays")
    with path.open("r+b") as stream:
        checkpoint_file._seal(stream, b'"text"', hashlib.sha256(path.read_bytes()))
    with pytest.raises(InputError, match="not a checkpoint"):
        load_checkpoint(path)
    assert read_header(path) is None


@pytest.fixture(scope="module")
def images(scratch: Path) -> tuple[bytes, bytes]:
    """A newest and a previous generation."""
    path = scratch / "image.h5"
    saved(path, 1, 2)
    return path.read_bytes(), path.with_suffix(".previous.h5").read_bytes()


def judged(path: Path, damaged: bytes, *, sound: bytes) -> None:
    """A damaged newest generation gives the previous one; a harmless change gives the right numbers."""
    path.write_bytes(damaged)
    assert damaged != sound
    assert number_of(load_checkpoint(path)) == (1, "previous")
    header = read_header(path)
    assert header in ({"number": 1}, {"number": 2})


@settings(max_examples=150, deadline=None)
@given(data=st.data())
def test_flipped_bytes_never_give_a_wrong_number(
    scratch: Path, images: tuple[bytes, bytes], data: Any
) -> None:
    newest = bytearray(images[0])
    places = st.integers(0, len(newest) - 1) | st.integers(len(newest) - 300, len(newest) - 1)
    for place in data.draw(st.sets(places, min_size=1, max_size=4)):
        newest[place] ^= data.draw(st.integers(1, 255))
    judged(scratch / "image.h5", bytes(newest), sound=images[0])


@settings(max_examples=60, deadline=None)
@given(data=st.data())
def test_truncation_and_additions_are_found(scratch: Path, images: tuple[bytes, bytes], data: Any) -> None:
    newest = images[0]
    length = data.draw(st.integers(0, len(newest) - 1))
    judged(scratch / "image.h5", newest[:length], sound=newest)
    judged(scratch / "image.h5", newest[:length] + bytes(len(newest) - length), sound=newest)
    judged(scratch / "image.h5", newest + newest[length:], sound=newest)


def test_swapped_blocks_are_found(scratch: Path, images: tuple[bytes, bytes]) -> None:
    newest, previous = images
    half = len(newest) // 2
    judged(scratch / "image.h5", newest[:half] + previous[half:], sound=newest)
    judged(scratch / "image.h5", previous[:half] + newest[half:], sound=newest)


class Stop(Exception):  # noqa: N818 - stands for the end of the power
    """The machine stops here."""


@pytest.mark.parametrize("links", [True, False], ids=["links", "no links"])
@pytest.mark.parametrize("damaged", [False, True], ids=["sound", "newest damaged"])
def test_whenever_the_machine_stops_a_sound_generation_is_there(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, links: bool, damaged: bool
) -> None:
    """Stop before each call to the file system in turn; what is then on the disk must load."""
    path = tmp_path / "main.h5"

    def refuse(*_: object) -> None:
        raise OSError(95, "no links")

    for stop_at in range(100):
        for file in tmp_path.iterdir():
            file.unlink()
        saved(path, 1, 2)
        if damaged:
            path.write_bytes(path.read_bytes()[:-1])
        with monkeypatch.context() as patch:
            if not links:
                patch.setattr(os, "link", refuse)
            calls = count_calls(patch, stop_at)
            try:
                saved(path, 3)
                finished = True
            except Stop:
                finished = False
        number, _ = number_of(load_checkpoint(path))
        assert number in ((1, 3) if damaged else (1, 2, 3))
        if finished:
            assert number == 3
            assert len(calls) == stop_at > 5
            return
    pytest.fail("never finished")


def count_calls(patch: pytest.MonkeyPatch, stop_at: int) -> list[str]:
    """Let the call of number `stop_at` to the file system, and all after it, fail without effect."""
    calls: list[str] = []

    def watched(name: str, call: Any) -> Any:
        def step(*args: Any, **others: Any) -> Any:
            if len(calls) >= stop_at:
                raise Stop
            calls.append(name)
            return call(*args, **others)

        return step

    for owner, names in ((Path, ("unlink", "replace", "exists", "open")), (os, ("link", "fsync", "open"))):
        for name in names:
            patch.setattr(owner, name, watched(name, getattr(owner, name)))
    return calls


def test_leftovers_of_a_killed_write_do_not_pile_up(tmp_path: Path) -> None:
    path = tmp_path / "main.h5"
    saved(path, 1)
    (tmp_path / ".main.h5.partial").write_bytes(b"x" * 100_000)
    (tmp_path / ".main.h5.outgoing").write_bytes(b"x")
    saved(path, 2)
    assert sorted(file.name for file in tmp_path.iterdir()) == ["main.h5", "main.previous.h5"]
    assert number_of(load_checkpoint(path)) == (2, "newest")


FULL_DISK = """
import resource, sys
from pathlib import Path
import numpy as np
from tnquench.dataset.checkpoint import load_checkpoint, save_checkpoint
path, unlimited = Path(sys.argv[1]), resource.RLIM_INFINITY
for number, room in enumerate([0, 100, 3000, 9000, 100_000, 1_600_000, 1_600_300]):
    resource.setrlimit(resource.RLIMIT_FSIZE, (room, unlimited))
    try:
        save_checkpoint(path, {"header": {}, "state": np.zeros(200_000), "text": "x" * 5000})
    except OSError as error:
        print(error.errno, sorted(file.name for file in path.parent.iterdir()))
    resource.setrlimit(resource.RLIMIT_FSIZE, (unlimited, unlimited))
    assert load_checkpoint(path)["header"]["number"] == 2 + number
    save_checkpoint(path, {"header": {"number": 3 + number}, "state": np.full(200, 3.0 + number)})
"""


def test_full_disk_leaves_the_generations_and_no_partial_file(tmp_path: Path) -> None:
    """A limit on the length of files stands for a disk that is full at one place or another of the file."""
    path = tmp_path / "main.h5"
    saved(path, 1, 2)
    words = [sys.executable, "-c", FULL_DISK, str(path)]
    done = subprocess.run(words, capture_output=True, text=True, timeout=60, check=False)
    expected = f"{EFBIG} ['main.h5', 'main.previous.h5']"
    assert (done.stdout.splitlines(), done.stderr, done.returncode) == ([expected] * 7, "", 0)
    assert number_of(load_checkpoint(path)) == (9, "newest")


class FailingStream(io.BytesIO):
    """A stream one of whose actions finds the disk full."""

    def __init__(self, action: str) -> None:
        super().__init__()
        setattr(self, action, fail)


def fail(*_: object) -> None:
    raise OSError(ENOSPC, os.strerror(ENOSPC))


@pytest.mark.parametrize("action", ["write", "truncate", "seek", "fsync"])
def test_errors_of_the_disk_come_as_they_are(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, action: str
) -> None:
    path = tmp_path / "main.h5"
    saved(path, 1, 2)
    sink = checkpoint_file._Sink
    with monkeypatch.context() as patch:
        if action == "fsync":
            patch.setattr(os, "fsync", fail)
        else:
            patch.setattr(checkpoint_file, "_Sink", lambda _: sink(FailingStream(action)))
        with pytest.raises(OSError, match="No space left") as failure:
            saved(path, 3)
        assert failure.value.errno == ENOSPC
    assert number_of(load_checkpoint(path)) == (2, "newest")
    assert sorted(file.name for file in tmp_path.iterdir()) == ["main.h5", "main.previous.h5"]


def test_folder_that_is_not_there(tmp_path: Path) -> None:
    with pytest.raises(FileNotFoundError):
        saved(tmp_path / "gone" / "main.h5", 1)


def test_interrupted_write_leaves_the_generations(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    path = tmp_path / "main.h5"
    saved(path, 1, 2)

    def interrupt(*_: object) -> None:
        raise KeyboardInterrupt

    with monkeypatch.context() as patch:
        patch.setattr(checkpoint_file, "_seal", interrupt)
        with pytest.raises(KeyboardInterrupt):
            saved(path, 3)
    assert number_of(load_checkpoint(path)) == (2, "newest")
    assert len(list(tmp_path.iterdir())) == 2
