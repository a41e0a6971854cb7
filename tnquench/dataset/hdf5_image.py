"""Reads every variable and attribute of an HDF5 file held in memory; imports nothing of ours.

Run as a script it is a trial: it reads the file given on standard input under a limit of memory and ends with
exit code 0 if that can be done. Bytes of unknown origin can make the HDF5 library loop for ever, crash or ask
for any amount of memory, which must not happen to the program that asks.
"""

from __future__ import annotations

import io
import math
import os
import subprocess
import sys
from collections.abc import Mapping
from typing import Any

import h5py
import numpy as np
from numpy.typing import NDArray

#: Value of an attribute: netCDF knows text, numbers and lists of either.
Attribute = str | int | float | list[str] | list[int] | list[float]
#: Dimension names, values and attributes of a variable.
Variable = tuple[tuple[str, ...], NDArray[Any], dict[str, Attribute]]

#: No deflate stream expands more than this (zlib's documentation); a variable that claims more is damaged.
LARGEST_EXPANSION = 1032
#: All variables together may be this many times larger than the file (noise in numbers does not compress that
#: much), or as large as a small file may always be, in bytes.
LARGEST_RATIO, ALWAYS_ALLOWED = 16, 64 * 2**20
#: Groups and variables in a file; a run has about a hundred.
MOST_OBJECTS = 10_000
#: Memory that a trial may take beyond the file, its variables and the libraries, in bytes.
SPARE = 512 * 2**20
#: Longest time that a trial may take, in seconds.
PATIENCE = 120.0

#: Attributes by which HDF5 and netCDF-4 keep their own books.
BOOKKEEPING: frozenset[str] = frozenset(
    {"CLASS", "NAME", "DIMENSION_LIST", "REFERENCE_LIST", "DIMENSION_LABELS"}
    | {"_NCProperties", "_Netcdf4Dimid", "_Netcdf4Coordinates", "_nc3_strict", "_FillValue"}
)


UNREADABLE = "damaged HDF5 file, cannot be read to its end; restore a copy or run again"


class DamagedFile(Exception):  # noqa: N818 - the file is at fault; always turned into a finding or an InputError
    """The bytes are no HDF5 file, or one that cannot be read to its end; says which in one line."""


def trial_complaint(image: bytes) -> str:
    """Return why the bytes of an HDF5 file must not be read by this process, or nothing.

    Unless they are cut off, a process of its own reads them first, within `SPARE` memory and `PATIENCE`.
    """
    if len(image) < stated_size(image):
        return UNREADABLE
    command = [sys.executable, "-P", __file__]
    environment = {**os.environ, "HDF5_PLUGIN_PRELOAD": "::"}  # no filters from shared libraries
    try:
        child = subprocess.run(
            command, input=image, capture_output=True, timeout=PATIENCE, check=False, env=environment
        )
    except subprocess.TimeoutExpired:
        return f"damaged HDF5 file, not read within {PATIENCE:.0f} s; restore a copy or run again"
    if child.returncode == 0:
        return ""
    said = child.stdout.decode(errors="replace").strip()
    return said or UNREADABLE


def stated_size(image: bytes) -> int:
    """Return how long an HDF5 file says it is; more than any file's size where its head makes no sense.

    From the description of the format's superblock: versions 0 to 3 differ in where the end is written.
    """
    head = image[:52]
    place = {0: 40, 1: 44, 2: 28, 3: 28}.get(head[8] if len(head) > 8 else -1)
    if place is None or len(head) < place + 8:
        return sys.maxsize
    address_size = head[9 if head[8] >= 2 else 13]
    return int.from_bytes(head[place : place + 8], "little") if address_size == 8 else 0


def read_image(image: bytes) -> tuple[dict[str, Variable], dict[str, dict[str, Attribute]]]:
    """Return the variables by path and the attributes by group ("" is the root) of an HDF5 file in memory.

    Nothing outside the file is opened: links to other files are not followed, variables whose numbers lie in
    other files are refused. Raises DamagedFile if the file cannot be read to its end or claims too much.
    """
    try:
        with h5py.File(io.BytesIO(image), "r") as file:
            return _read_all(file, size=len(image))
    except DamagedFile:
        raise
    except Exception as error:  # damaged bytes make HDF5 and its readers raise nearly anything
        raise DamagedFile(UNREADABLE) from error


def elsewhere(stored: Any) -> str:
    """Return where the numbers of an HDF5 dataset lie if that is not in its own file, else nothing."""
    if stored.is_virtual:
        return "a virtual dataset, put together from other files"
    return "numbers kept in another file" if stored.external else ""


def chunk_bytes(stored: Any) -> int:
    """Return how much memory the HDF5 library takes to read a single entry."""
    return math.prod(stored.chunks) * stored.dtype.itemsize if stored.chunks else 0


def limit_memory(spare: int) -> None:
    """Let this process take `spare` more bytes of memory than it has, where the system knows such limits."""
    try:
        import resource  # absent on Windows

        with open("/proc/self/statm") as stream:  # noqa: PTH123 - no pathlib needed in a script
            taken = int(stream.read().split()[0]) * resource.getpagesize()
        resource.setrlimit(resource.RLIMIT_AS, (taken + spare, taken + spare))
    except (ImportError, OSError, ValueError):
        return


def _read_all(file: h5py.File, *, size: int) -> tuple[dict[str, Variable], dict[str, dict[str, Attribute]]]:
    variables: dict[str, Variable] = {}
    attributes: dict[str, dict[str, Attribute]] = {}
    left = _most_bytes(size)

    def visit(path: str, found: object) -> None:
        nonlocal left
        if len(variables) + len(attributes) >= MOST_OBJECTS:
            message = f"damaged HDF5 file: more than {MOST_OBJECTS} groups and variables"
            raise DamagedFile(message)
        if isinstance(found, h5py.Dataset):
            _check_claims(path, found, size=size, left=left)
            left -= found.nbytes
            variables[path] = _read_variable(path, found)
        elif isinstance(found, h5py.Group):
            attributes[path] = _read_attributes(found.attrs)

    visit("", file)
    file.visititems(visit)
    return variables, attributes


def _most_bytes(size: int) -> int:
    return max(ALWAYS_ALLOWED, LARGEST_RATIO * size)


def _check_claims(path: str, stored: Any, *, size: int, left: int) -> None:
    if place := elsewhere(stored):
        message = f"damaged HDF5 file: {path} is {place}; a dataset holds all of its numbers itself"
        raise DamagedFile(message)
    if stored.nbytes > size * (LARGEST_EXPANSION if stored.chunks else 1):
        message = f"damaged HDF5 file: {path} claims {stored.nbytes} bytes, more than the file can hold"
        raise DamagedFile(message)
    if max(stored.nbytes, chunk_bytes(stored)) > left:
        message = f"damaged HDF5 file: {path} and those before it claim {LARGEST_RATIO} times the file's size"
        raise DamagedFile(message)


def _read_variable(path: str, stored: Any) -> Variable:
    if stored.is_scale:
        dims: tuple[str, ...] = (path.rpartition("/")[2],)
    else:
        dims = tuple(axis[0].name.rpartition("/")[2] if len(axis) else "" for axis in stored.dims)
    values = stored.asstr()[()] if h5py.check_string_dtype(stored.dtype) else stored[()]
    values = np.asarray(values)
    if values.dtype.kind == "O":
        values = values.astype(np.str_)
    return dims, values, _read_attributes(stored.attrs)


def _read_attributes(stored: Mapping[str, Any]) -> dict[str, Attribute]:
    return {name: _plain(stored[name]) for name in stored if name not in BOOKKEEPING}


def _plain(value: Any) -> Attribute:
    """Return an attribute as plain Python values; netCDF does not tell a list of one from its entry."""
    if isinstance(value, h5py.Empty):
        return ""
    entries = [_plain_entry(entry) for entry in np.ravel(value).tolist()]
    return entries[0] if len(entries) == 1 else entries


def _plain_entry(entry: object) -> Any:
    """Return one entry of an attribute; kinds that we never write (references, complex numbers) as text."""
    if isinstance(entry, bytes):
        return entry.decode()
    return entry if isinstance(entry, (str, int, float)) else repr(entry)


def main() -> int:
    """Read the file on standard input; say on standard output why that fails, and return an exit code."""
    image = sys.stdin.buffer.read()
    limit_memory(SPARE + _most_bytes(len(image)))
    try:
        read_image(image)
    except DamagedFile as damage:
        sys.stdout.buffer.write(str(damage).encode(errors="backslashreplace"))
        return 2
    return 0


if __name__ == "__main__":
    sys.exit(main())
