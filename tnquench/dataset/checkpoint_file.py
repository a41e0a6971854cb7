"""One checkpoint file: content in HDF5, its header as a line of text behind it, and a digest of both.

The dataset `contents` is JSON text of everything but the arrays, the group `arrays` holds their entries, one
long dataset for each type of number. Behind the HDF5 file proper, where HDF5 does not look, stand the header
as a line of text and a last line with the SHA-256 of the header and of all bytes before the last line. No
byte reaches the HDF5 library before the digest is found right: the library does not survive every damage.
"""

from __future__ import annotations

import hashlib
import io
import math
import re
from collections.abc import Callable, Mapping
from typing import IO, Any

import h5py
import numpy as np
from numpy.typing import NDArray

from tnquench.dataset.packed import Packed, unpack

#: Layout of the file; a newer one is refused.
LAYOUT = 1

#: HDF5 1.10 format, as in the dataset of a run.
LIBRARY_VERSION = ("v110", "v110")

#: The last line: layout, bytes of HDF5, bytes of the header, digest of the header, digest of all before.
LAST_LINE = "\ntnquench checkpoint {:04d} {:020d} {:010d} SHA-256 {} {}\n"
LAST_LINE_FORM = re.compile(
    rb"\ntnquench checkpoint (\d{4}) (\d{20}) (\d{10}) SHA-256 ([0-9a-f]{64}) ([0-9a-f]{64})\n"
)
LAST_LINE_BYTES = len(LAST_LINE.format(0, 0, 0, "0" * 64, "0" * 64))

#: Bytes read at once when a file is summed up.
STRIDE = 1 << 22


class UnsoundFile(Exception):  # noqa: N818 - the file is at fault; always turned into a line of an InputError
    """A checkpoint file cannot be used; says why in one line."""


def write_file(stream: IO[bytes], packed: Packed, header: str) -> None:
    """Write a whole checkpoint file; raises OSError as it came, and leaves no open HDF5 file behind."""
    places = _lay_out(stream, packed)
    digest = _write_entries(stream, packed, places)
    _seal(stream, header.encode(), digest)


def read_file(stream: IO[bytes]) -> dict[str, Any]:
    """Return the content of a checkpoint file after its digest was found right; raises UnsoundFile."""
    body, header, expected = _read_end(stream)
    digest = hashlib.sha256()
    _sum_up(digest, stream, 0, body)
    digest.update(header)
    if digest.hexdigest() != expected:
        message = "damaged: its bytes differ from their digest"
        raise UnsoundFile(message)
    try:
        with h5py.File(stream, "r") as file:
            return dict(unpack(file["contents"][()].tobytes().decode(), _fetching(stream, file["arrays"])))
    except (MemoryError, KeyboardInterrupt):
        raise
    except Exception as error:  # the digest is right and yet it is not ours
        message = f"not a checkpoint of this program ({type(error).__name__})"
        raise UnsoundFile(message) from error


def read_file_header(stream: IO[bytes]) -> dict[str, Any]:
    """Return the header alone, checked by its own digest; raises UnsoundFile."""
    try:
        return dict(unpack(_read_end(stream)[1].decode(), _no_arrays))
    except (ValueError, TypeError, KeyError) as error:
        message = "its header is not of this program"
        raise UnsoundFile(message) from error


class _Sink(io.RawIOBase):
    """A file for HDF5 to write to, which keeps the first error and from then on takes everything in silence.

    An error inside the HDF5 library would come back in another form and leave a file that cannot be closed.
    """

    def __init__(self, stream: IO[bytes]) -> None:
        self.stream = stream
        self.error: BaseException | None = None

    def write(self, data: Any) -> int:
        """Write all of `data`, unless something failed before."""
        if self.error is None:
            try:
                self.stream.write(data)
            except BaseException as error:  # also an interruption: it must not pass through the library
                self.error = error
        return len(data)

    def truncate(self, size: int | None = None) -> int:
        """Cut or lengthen the file, unless something failed before."""
        if self.error is None:
            try:
                self.stream.truncate(size)
            except BaseException as error:
                self.error = error
        return size or 0

    def seek(self, offset: int, whence: int = io.SEEK_SET) -> int:
        """Go to a place, unless something failed before."""
        if self.error is None:
            try:
                return self.stream.seek(offset, whence)
            except BaseException as error:
                self.error = error
        return offset

    def readinto(self, room: Any) -> int:
        """Read into `room`."""
        found = self.stream.read(len(room))
        room[: len(found)] = found
        return len(found)


def _lay_out(stream: IO[bytes], packed: Packed) -> dict[str, int]:
    """Let HDF5 write the file but for the arrays' entries; return where those of each type belong."""
    sink = _Sink(stream)
    with h5py.File(sink, "w", libver=LIBRARY_VERSION) as file:
        file.attrs["layout"] = LAYOUT
        file["contents"] = np.frombuffer(packed.text.encode(), dtype=np.uint8)
        arrays = file.create_group("arrays")
        places = {name: _make_room(arrays, name, size) for name, size in packed.sizes.items() if size}
    if sink.error is not None:
        raise sink.error
    return places


def _write_entries(stream: IO[bytes], packed: Packed, places: Mapping[str, int]) -> Any:
    """Write the entries where they belong, straight from the arrays; return the SHA-256 of the whole file."""
    digest, reached = hashlib.sha256(), 0
    for name, place in sorted(places.items(), key=lambda item: item[1]):
        _sum_up(digest, stream, reached, place)
        stream.seek(place)
        for array in packed.columns[name]:
            data = array.reshape(-1).view(np.uint8).data
            stream.write(data)
            digest.update(data)
        reached = place + packed.sizes[name] * np.dtype(name).itemsize
    _sum_up(digest, stream, reached, stream.seek(0, io.SEEK_END))
    return digest


def _make_room(arrays: h5py.Group, name: str, size: int) -> int:
    """Add a dataset whose entries will be written past the library; return where they stand in the file."""
    layout = h5py.h5p.create(h5py.h5p.DATASET_CREATE)
    layout.set_alloc_time(h5py.h5d.ALLOC_TIME_EARLY)
    layout.set_fill_time(h5py.h5d.FILL_TIME_NEVER)
    kind, space = h5py.h5t.py_create(np.dtype(name), logical=True), h5py.h5s.create_simple((size,))
    place = h5py.h5d.create(arrays.id, name.encode(), kind, space, layout).get_offset()
    assert place is not None, "room is made at once"
    return int(place)


def _seal(stream: IO[bytes], header: bytes, digest: Any) -> None:
    """Add the header and the last line; digest : running SHA-256 of what is there."""
    size = stream.seek(0, io.SEEK_END)
    digest.update(header)
    last = LAST_LINE.format(LAYOUT, size, len(header), _sha256(header), digest.hexdigest())
    stream.write(header + last.encode())


def _sha256(data: bytes) -> str:
    return hashlib.sha256(data).hexdigest()


def _sum_up(digest: Any, stream: IO[bytes], first: int, last: int) -> None:
    """Add the bytes from `first` until `last` to a running SHA-256."""
    room = memoryview(bytearray(min(STRIDE, last - first)))
    stream.seek(first)
    while first < last:
        count = stream.readinto(room[: last - first])  # type: ignore[attr-defined]
        if not count:
            message = "shorter than it says"
            raise UnsoundFile(message)
        digest.update(room[:count])
        first += count


def _read_end(stream: IO[bytes]) -> tuple[int, bytes, str]:
    """Return the bytes of HDF5, the header (checked), and the digest of both that the last line says."""
    size = stream.seek(0, io.SEEK_END)
    if size < LAST_LINE_BYTES:
        message = "truncated"
        raise UnsoundFile(message)
    stream.seek(size - LAST_LINE_BYTES)
    found = LAST_LINE_FORM.fullmatch(stream.read(LAST_LINE_BYTES))
    if found is None:
        message = "damaged or truncated: its last line is missing"
        raise UnsoundFile(message)
    layout, body, length = (int(found[place]) for place in (1, 2, 3))
    if layout != LAYOUT:
        message = f"layout {layout}, this program reads {LAYOUT}"
        raise UnsoundFile(message)
    if body + length + LAST_LINE_BYTES != size:
        message = "damaged or truncated: its length differs from the one it says"
        raise UnsoundFile(message)
    stream.seek(body)
    header = stream.read(length)
    if _sha256(header).encode() != found[4]:
        message = "damaged: its header differs from its digest"
        raise UnsoundFile(message)
    return body, header, found[5].decode()


def _fetching(stream: IO[bytes], arrays: h5py.Group) -> Callable[[str, int, list[int]], NDArray[Any]]:
    """Return the function that reads entries of a type from a place on."""
    places = {name: (entries.id.get_offset(), entries.size) for name, entries in arrays.items()}

    def fetch(name: str, first: int, shape: list[int]) -> NDArray[Any]:
        if math.prod(shape) == 0:
            return np.empty(shape, dtype=np.dtype(name))
        place, there = places[name]
        if not 0 <= first <= first + math.prod(shape) <= there:
            message = "an array ends beyond what is there"
            raise ValueError(message)
        found = np.empty(shape, dtype=np.dtype(name))
        stream.seek(place + first * found.itemsize)
        if stream.readinto(found.reshape(-1).view(np.uint8)) != found.nbytes:  # type: ignore[attr-defined]
            message = "an array ends beyond the file"
            raise ValueError(message)
        return found

    return fetch


def _no_arrays(_name: str, _first: int, _shape: list[int]) -> NDArray[Any]:
    message = "a header holds no arrays"
    raise ValueError(message)
