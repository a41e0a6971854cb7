"""Checkpoints come back exact to the last bit and stride, in two generations, or are found damaged."""

from __future__ import annotations

import math
import struct
import subprocess
import sys
from pathlib import Path
from typing import Any

import h5py
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp

from tnquench.dataset.checkpoint import load_checkpoint, save_checkpoint

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
