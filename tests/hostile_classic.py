"""netCDF files of the classic kind: a good one, and heads that claim what is not there."""

from __future__ import annotations

import io
import struct

from scipy.io import netcdf_file

from tests.hostile_arrays import PLACES, TIMES, VALUES

DIMENSION, VARIABLE, ATTRIBUTE, DOUBLE = 10, 11, 12, 6


def classic_image() -> bytes:
    """Return the bytes of a small candidate that can be judged."""
    image = io.BytesIO()
    with netcdf_file(image, "w") as file:
        for name, values in (("time", TIMES), ("x", PLACES)):
            file.createDimension(name, values.size)
            file.createVariable(name, "d", (name,))[:] = values
        file.createVariable("energy_density", "d", ("time", "x"))[:] = VALUES
        file.flush()
        return image.getvalue()


def _name(name: str) -> bytes:
    said = name.encode()
    return struct.pack(">i", len(said)) + said + bytes(-len(said) % 4)


def _variable(name: str, begin: int) -> bytes:
    head = _name(name) + struct.pack(">iiii", 1, 0, 0, 0)
    return head + struct.pack(">iii", DOUBLE, 8, begin)


def _head(dimensions: bytes, attributes: bytes, variables: bytes) -> bytes:
    return b"CDF\x01" + struct.pack(">i", 0) + dimensions + attributes + variables


def _shared(copies: int, entries: int) -> bytes:
    """Many variables that all lie in the same bytes: each would be a copy."""
    dimensions = struct.pack(">ii", DIMENSION, 1) + _name("time") + struct.pack(">i", entries)
    rows = b"".join(_variable(f"v{index}", 64) for index in range(copies))
    head = _head(dimensions, bytes(8), struct.pack(">ii", VARIABLE, copies) + rows)
    return head + bytes(8 * entries)


def _steering() -> bytes:
    """Global attributes with the names of the reader's own parts."""
    names = ("fp", "close", "variables", "dimensions", "_recs", "__class__", "flush", "use_mmap")
    rows = b"".join(_name(name) + struct.pack(">ii", 2, 4) + b"abcd" for name in names)
    attributes = struct.pack(">ii", ATTRIBUTE, len(names)) + rows
    return _head(bytes(8), attributes, bytes(8))


def classic_monsters() -> list[bytes]:
    """Return files whose heads lie."""
    endless = struct.pack(">ii", DIMENSION, 2**31 - 1)
    many = struct.pack(">ii", ATTRIBUTE, 300_000) + (_name("a") + struct.pack(">ii", 2, 0)) * 300_000
    return [
        _shared(3000, 100_000),
        _shared(10, 2**20),
        _steering(),
        _head(endless, b"", b""),
        _head(bytes(8), many, bytes(8)),
        _head(struct.pack(">ii", DIMENSION, -1), bytes(8), bytes(8)),
        b"CDF\x01",
        b"CDF\x02" + bytes(60),
        b"CDF\x05" + bytes(60),
        b"CDF\x01" + bytes(60),
    ]
