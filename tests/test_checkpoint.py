"""Checkpoints come back exact to the last bit and stride, in two generations, or are found damaged."""

from __future__ import annotations

import io
import math
import os
import struct
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
from hypothesis.extra import numpy as hnp

from tnquench.dataset import checkpoint_file
from tnquench.dataset.checkpoint import load_checkpoint, read_header, save_checkpoint
from tnquench.errors import InputError

HEADER = {
    "quench": "main",
    "fingerprint": "ab12",
    "time": 0.1 + 0.2,
    "finished": False,
    "format": 1,
    "x": None,
}


def assert_same(found: Any, expected: Any) -> None:
    """Equal in type, bits, shape and strides, all the way down."""
    assert type(found) is type(expected)
    if isinstance(expected, np.ndarray):
        assert found.dtype.str == expected.dtype.str
        assert found.shape == expected.shape
        assert found.tobytes() == expected.tobytes()
        assert found.size == 0 or found.strides == expected.strides
        assert found.flags.writeable
    elif isinstance(expected, dict):
        assert list(found) == list(expected)
        for key, value in expected.items():
            assert_same(found[key], value)
    elif isinstance(expected, list | tuple):
        assert len(found) == len(expected)
        for one, other in zip(found, expected, strict=True):
            assert_same(one, other)
    elif isinstance(expected, np.generic):
        assert found.tobytes() == expected.tobytes()
    elif isinstance(expected, float):
        assert struct.pack("d", found) == struct.pack("d", expected)
    else:
        assert found == expected


def round_trip(path: Path, value: Any) -> Any:
    save_checkpoint(path, {"header": HEADER, "value": value})
    loaded = load_checkpoint(path)
    assert loaded is not None
    assert loaded.pop("generation") == "newest"
    assert list(loaded) == ["header", "value"]
    assert_same(loaded["header"], HEADER)
    return loaded["value"]


@pytest.fixture(scope="module")
def scratch(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return tmp_path_factory.mktemp("checkpoints")


ODD_SCALARS = [
    None, True, False, 0, -1, 2**63 - 1, 2**63, -(2**63), 2**127 + 12345, -(2**200), 10**5000,
    0.0, -0.0, 5e-324, 1.7976931348623157e308, 0.1, math.inf, -math.inf, math.nan,
    struct.unpack("d", b"\1" * 6 + b"\xf8\xff")[0], "", "ä\x00\n\ud800", "array",
    np.float64(0.1), np.int8(-3), np.bool_(True), np.complex128(1 - 2j),
]  # fmt: skip


@pytest.mark.parametrize("value", ODD_SCALARS, ids=range(len(ODD_SCALARS)))
def test_scalars_survive_bit_for_bit(scratch: Path, value: Any) -> None:
    assert_same(round_trip(scratch / "scalar.h5", value), value)


def test_state_of_a_bit_generator_goes_on_with_the_same_numbers(scratch: Path) -> None:
    generator = np.random.default_rng(7)
    generator.normal(size=1001)
    state = round_trip(scratch / "generator.h5", generator.bit_generator.state)
    expected = generator.normal(size=10)
    other = np.random.default_rng(0)
    other.bit_generator.state = state
    assert np.array_equal(other.normal(size=10), expected)


def test_marks_of_the_file_may_be_names_of_the_content(scratch: Path) -> None:
    value = {"array": {"mapping": [1, {"float": "00"}]}, "tuple": (1, [2.0, (np.arange(3),)]), "": {}}
    assert_same(round_trip(scratch / "marks.h5", value), value)


BASE = np.random.default_rng(3).normal(size=(3, 4, 5))
LAYOUTS = {
    "C order": BASE,
    "Fortran order": np.asfortranarray(BASE),
    "permuted": BASE.transpose(1, 2, 0),
    "gaps": BASE[:, :, :3],
    "steps": BASE[::2, :, ::2],
    "backwards": BASE[::-1, :, ::-1],
    "stretched": np.broadcast_to(BASE[0], (7, 4, 5)),
    "axis of length one": BASE[:1].transpose(2, 0, 1),
    "new axes": BASE[0, :, None, :, None],
    "empty": BASE[:0],
    "no axes": np.array(3.5),
    "complex": (BASE + 1j * BASE.T.reshape(3, 4, 5)).transpose(2, 0, 1),
    "single precision": BASE.astype(np.float32).T,
    "half precision": BASE.astype(np.float16),
    "other byte order": BASE.astype(">f8").T,
    "whole numbers": np.arange(24, dtype=np.int64).reshape(4, 6).T,
    "bytes": np.arange(24, dtype=np.uint8).reshape(4, 6)[:, 1:4],
    "truth values": np.array([[True, False], [False, False]]).T,
    "not finite": np.array([np.nan, np.inf, -np.inf, -0.0]),
}


@pytest.mark.parametrize("layout", LAYOUTS)
def test_arrays_come_back_as_they_lay(scratch: Path, layout: str) -> None:
    assert_same(round_trip(scratch / "layout.h5", LAYOUTS[layout]), LAYOUTS[layout])


def test_many_arrays_of_many_layouts_keep_apart(scratch: Path) -> None:
    value = [*LAYOUTS.values(), dict(LAYOUTS), *LAYOUTS.values()]
    assert_same(round_trip(scratch / "many.h5", value), value)


def test_small_part_of_a_large_array_takes_no_room_for_the_rest(scratch: Path) -> None:
    part = np.zeros((1000, 100))[:, ::50]
    found = round_trip(scratch / "part.h5", part)
    assert np.array_equal(found, part)
    assert found.flags.c_contiguous
    assert (scratch / "part.h5").stat().st_size < 20_000


def test_linear_algebra_rounds_the_same_after_a_restart(scratch: Path) -> None:
    rng = np.random.default_rng(11)
    for order in ((0, 1, 2), (2, 1, 0), (1, 0, 2)):
        tensor = rng.normal(size=(4, 30, 30)).transpose(order)
        again = round_trip(scratch / "algebra.h5", tensor)
        for before, after in ((tensor, again), (tensor[1], again[1])):
            flat, other = before.reshape(-1, before.shape[-1]), after.reshape(-1, after.shape[-1])
            assert np.array_equal(flat.T @ flat, other.T @ other)
            assert np.array_equal(np.linalg.svd(flat)[1], np.linalg.svd(other)[1])
        assert np.array_equal(
            np.einsum("abc,abd->cd", tensor, tensor), np.einsum("abc,abd->cd", again, again)
        )


LEAVES = st.one_of(
    st.none(), st.booleans(), st.integers(), st.floats(), st.text(max_size=5),
    hnp.arrays(
        st.sampled_from([np.float64, np.int32, np.complex128, np.bool_]),
        hnp.array_shapes(max_dims=3, min_side=0),
    ),
)  # fmt: skip
CONTENT = st.recursive(
    LEAVES,
    lambda inner: st.lists(inner, max_size=3) | st.dictionaries(st.text(max_size=3), inner, max_size=3),
    max_leaves=8,
)


@settings(max_examples=60, deadline=None)
@given(value=CONTENT)
def test_any_content_comes_back(scratch: Path, value: Any) -> None:
    assert_same(round_trip(scratch / "any.h5", value), value)


@pytest.mark.parametrize(
    "value",
    [
        object(),
        {1: 2},
        np.array(["a"]),
        np.array([None]),
        {1, 2},
        b"bytes",
        np.ma.masked_array([1.0], [True]),
    ],
    ids=lambda value: type(value).__name__,
)
def test_what_cannot_be_kept_is_refused_before_anything_is_written(tmp_path: Path, value: Any) -> None:
    with pytest.raises(TypeError, match="cannot be kept"):
        save_checkpoint(tmp_path / "a.h5", {"header": {}, "value": value})
    assert list(tmp_path.iterdir()) == []


def test_header_holds_no_arrays(tmp_path: Path) -> None:
    with pytest.raises(TypeError, match="header"):
        save_checkpoint(tmp_path / "a.h5", {"header": {"x": np.arange(3)}})


def test_any_hdf5_reader_finds_the_numbers(scratch: Path) -> None:
    path = scratch / "other.h5"
    save_checkpoint(
        path, {"header": {}, "a": np.arange(3.0), "b": np.arange(6.0).reshape(2, 3).T, "c": np.array([1j])}
    )
    with h5py.File(path, "r") as file:
        assert file["arrays/<f8"][()].tolist() == [0, 1, 2, 0, 1, 2, 3, 4, 5]
        assert file["arrays/<c16"][()].tolist() == [1j]
        assert file["contents"][()].tobytes().startswith(b"{")


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
        checkpoint_file._seal(stream, b'"text"')
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


def test_writing_makes_no_second_copy_in_memory(tmp_path: Path) -> None:
    """The peak of resident memory grows by far less than the state; measured in a process of its own."""
    script = (
        "import numpy as np, resource, sys\nfrom pathlib import Path\n"
        "from tnquench.dataset.checkpoint import save_checkpoint\n"
        "peak = lambda: resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024\n"
        "save_checkpoint(Path(sys.argv[1]), {'header': {}, 'a': np.ones(10)})\n"
        "state = [np.ones((2, 1000, 1000)).transpose(2, 0, 1) for _ in range(10)]\n"
        "before = peak()\nsave_checkpoint(Path(sys.argv[1]), {'header': {}, 'state': state})\n"
        "print(peak() - before)"
    )
    words = [sys.executable, "-c", script, str(tmp_path / "a.h5")]
    done = subprocess.run(words, capture_output=True, text=True, timeout=60, check=True)
    assert (tmp_path / "a.h5").stat().st_size > 160e6
    assert float(done.stdout) < 20.0, "megabytes, for a state of 160"


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
