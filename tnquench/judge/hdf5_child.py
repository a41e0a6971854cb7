"""Reads the arrays of an HDF5 file in a process of its own; run as a script, it imports nothing of ours.

A damaged file can make the HDF5 library loop for ever or crash: neither must happen to the program that asks.
Written to standard output: a numpy archive of the arrays, with a table of contents as JSON under the name
"contents".
"""

from __future__ import annotations

import io
import json
import math
import sys
from typing import Any

import h5py
import numpy as np

#: Objects looked at; a file with more is no table of numbers.
MOST_OBJECTS = 2000
#: All arrays together may have this many times the entries of the largest one.
MOST_ARRAYS = 20
#: Entries that are read and unpacked at once; a file that packs more into one piece is no table of numbers.
LARGEST_CHUNK = 16 * 2**20
#: Memory that this process may take beyond the libraries, in bytes.
SPARE = 1024 * 2**20


def entry_of(path: str, stored: Any) -> dict[str, Any]:
    """Return what the table of contents says of one dataset."""
    if stored.is_scale:
        dims = [path.rpartition("/")[2]]
    else:
        dims = [axis[0].name.rpartition("/")[2] if len(axis) else "" for axis in stored.dims]
    chunk = math.prod(stored.chunks) if stored.chunks else 0
    inside = not (stored.is_virtual or stored.external)  # what lies in other files is never opened
    numeric = stored.dtype.kind in "fiu" and stored.shape is not None and inside and chunk <= LARGEST_CHUNK
    packed = any(name in stored.attrs for name in ("scale_factor", "add_offset"))
    shape = list(stored.shape) if stored.shape is not None else None
    return {"path": path, "shape": shape, "dims": dims, "numeric": numeric, "packed": packed}


def _wanted(entry: dict[str, Any], most_values: int) -> bool:
    shape = entry["shape"]
    return bool(entry["numeric"] and len(shape) in (1, 2) and math.prod(shape) <= most_values)


def _limit_memory() -> None:
    """Let this process take `SPARE` more bytes than it has, where the system knows such limits."""
    try:
        import resource  # absent on Windows

        with open("/proc/self/statm") as stream:  # noqa: PTH123 - no pathlib needed in a script
            taken = int(stream.read().split()[0]) * resource.getpagesize()
        resource.setrlimit(resource.RLIMIT_AS, (taken + SPARE, taken + SPARE))
    except (ImportError, OSError, ValueError):
        return


def main(path: str, most_values: int) -> None:
    """Write the numeric arrays of the file, of at most `most_values` entries each, to standard output."""
    entries: list[dict[str, Any]] = []
    arrays: dict[str, np.ndarray] = {}
    own = False

    def visit(name: str, found: object) -> bool | None:
        nonlocal own
        own = own or (name == "provenance" and "format_version" in getattr(found, "attrs", {}))
        if isinstance(found, h5py.Dataset):
            entry = entry_of(name, found)
            read = sum(array.size for array in arrays.values())
            if _wanted(entry, most_values) and read + found.size <= MOST_ARRAYS * most_values:
                arrays[f"a{len(entries)}"] = np.asarray(found[()], dtype=np.float64)
            entries.append(entry)
        return True if len(entries) >= MOST_OBJECTS else None

    with h5py.File(path, "r") as file:
        file.visititems(visit)
    answer = io.BytesIO()
    contents = np.array(json.dumps({"entries": entries, "own": own}))
    np.savez(answer, contents=contents, **arrays)  # type: ignore[arg-type]  # names are a0, a1, ...
    sys.stdout.buffer.write(answer.getvalue())


if __name__ == "__main__":
    _limit_memory()
    main(sys.argv[1], int(sys.argv[2]))
