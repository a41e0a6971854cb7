"""HDF5 files that no honest program writes, each made by one function of an open file."""

from __future__ import annotations

import io
from collections.abc import Callable
from pathlib import Path
from typing import Any

import h5py
import numpy as np

from tests.hostile_cases import zeros_packed

TIMES, PLACES = np.array([0.25, 0.5]), np.array([-1.0, 0.0, 1.0])
VALUES = np.full((2, 3), -0.1)


def good(file: Any) -> None:
    """A candidate that can be judged."""
    file["time"], file["x"], file["energy_density"] = TIMES, PLACES, VALUES


def _without(name: str, make: Callable[[Any], None]) -> Callable[[Any], None]:
    def build(file: Any) -> None:
        good(file)
        del file[name]
        make(file)

    return build


def _density(**choices: Any) -> Callable[[Any], None]:
    return _without("energy_density", lambda file: file.create_dataset("energy_density", **choices))


def _raw_chunk(file: Any) -> None:
    """One chunk that unpacks to 512 MB, of which a single entry is asked for."""
    entries = 2**26
    stored = file.create_dataset(
        "energy_density", shape=(1,), maxshape=(entries,), chunks=(entries,), dtype="f8", compression="gzip"
    )
    stored.id.write_direct_chunk((0,), zeros_packed(8 * entries))


def _packed(file: Any) -> None:
    """A field of 400 MB whose every chunk is packed to almost nothing."""
    shape = (7071, 7071)
    file.create_dataset("energy_density", shape=shape, dtype="f8", chunks=(707, 707), compression="gzip")
    file["energy_density"].id.write_direct_chunk((0, 0), zeros_packed(8 * 707 * 707))


def _virtual(file: Any) -> None:
    layout = h5py.VirtualLayout(shape=(2, 3), dtype="f8")
    layout[:] = h5py.VirtualSource("/etc/passwd", "a", shape=(2, 3))
    file.create_virtual_dataset("energy_density", layout)


def _uneven_texts(file: Any) -> None:
    """Texts of which one is long: as a numpy array of text every entry would take as much, 8 GB together."""
    stored = file.create_dataset("title", shape=(20_000,), dtype=h5py.string_dtype())
    stored[0] = "x" * 100_000


def _objects(file: Any) -> None:
    for index in range(3000):
        file.create_group(f"g{index}")


def _ring(file: Any) -> None:
    file["group/itself"] = file.create_group("group")
    file["again"] = file["/"]


def _references(file: Any) -> None:
    file["energy_density"] = np.array([file["time"].ref, file["x"].ref], dtype=h5py.ref_dtype)


def _false_scales(file: Any) -> None:
    good(file)
    file["energy_density"].attrs["DIMENSION_LIST"] = np.array([1, 2])
    file["time"].attrs["CLASS"] = np.bytes_("DIMENSION_SCALE")
    file["x"].attrs["DIMENSION_LIST"] = "x"


def _scale_of_nothing(file: Any) -> None:
    good(file)
    file["time"].make_scale("time")
    file["energy_density"].dims[0].attach_scale(file["time"])
    del file["time"]


def _names(file: Any) -> None:
    good(file)
    for name in ("../../x", "a\nb", "\x1b[31m", "é" * 400, "x" * 4000, "<script>", " ", "time "):
        file.create_group("g").attrs["a"] = 1 if "g" not in file else 2
        del file["g"]
        file[name] = TIMES


COMPOUND = np.array([(1, 2.0)], dtype=[("a", int), ("b", float)])

MONSTERS: dict[str, Callable[[Any], None]] = {
    "compound": _density(data=COMPOUND),
    "text": _density(data="abc"),
    "texts": _density(data=np.array([b"abc"] * 6).reshape(2, 3)),
    "complex": _density(data=VALUES * 1j),
    "truth values": _density(data=VALUES > 0),
    "half precision": _density(data=VALUES.astype(np.float16)),
    "quadruple precision": _density(data=VALUES.astype(np.longdouble)),
    "big-endian": _density(data=VALUES.astype(">f4")),
    "enumeration": _density(shape=(2, 3), dtype=h5py.enum_dtype({"a": 0}, basetype="i1")),
    "opaque": _density(data=np.zeros((2, 3), dtype="V8")),
    "scalar": _density(data=1.0),
    "nothing": _density(data=h5py.Empty("f8")),
    "no entries": _density(shape=(0, 3), dtype="f8"),
    "wrong shape": _density(data=VALUES.T),
    "three dimensions": _density(data=np.zeros((2, 3, 1))),
    "thirty dimensions": _density(shape=(1,) * 30, dtype="f8"),
    "not numbers": _density(data=VALUES * np.nan),
    "huge numbers": _density(data=np.full((2, 3), 1e300)),
    "gigantic shape": _density(shape=(10**6, 10**6), chunks=(1000, 1000), dtype="f8"),
    "gigantic shape, contiguous": _density(shape=(10**5, 10**3), dtype="f8"),
    "gigantic column": _density(shape=(999_999,), chunks=(10,), dtype="f8"),
    "gigantic chunk": _without("energy_density", _raw_chunk),
    "packed zeros": _without("energy_density", _packed),
    "filtered": _density(data=VALUES, chunks=(2, 3), fletcher32=True, shuffle=True, compression="lzf"),
    "external storage": _density(shape=(2, 3), dtype="f8", external=[("/etc/passwd", 0, 48)]),
    "external device": _density(shape=(2, 3), dtype="f8", external=[("/dev/zero", 0, 48)]),
    "external pipe": _density(shape=(2, 3), dtype="f8", external=[("pipe", 0, 48)]),
    "virtual": _without("energy_density", _virtual),
    "external link": _without(
        "energy_density", lambda file: file.__setitem__("energy_density", h5py.ExternalLink("other.h5", "/a"))
    ),
    "soft link": _without(
        "energy_density", lambda file: file.__setitem__("energy_density", h5py.SoftLink("/nowhere"))
    ),
    "link to itself": lambda file: file.__setitem__("time", h5py.SoftLink("/time")),
    "references": _without("energy_density", _references),
    "uneven texts": _uneven_texts,
    "many objects": _objects,
    "ring of groups": _ring,
    "false scales": _false_scales,
    "scale of nothing": _scale_of_nothing,
    "odd names": _names,
    "named type": lambda file: file.__setitem__("energy_density", np.dtype("f8")),
    "group in place of values": lambda file: file.create_group("energy_density"),
    "large attribute": lambda file: file.create_group("provenance").attrs.__setitem__(
        "format_version", "x" * 60_000
    ),
    "claims to be ours": lambda file: file.create_group("provenance").attrs.__setitem__("format_version", 2),
}


def image_of(make: Callable[[Any], None], folder: Path) -> bytes:
    """Return the bytes of an HDF5 file, made on disk since external storage needs one."""
    path = folder / "made.h5"
    with h5py.File(path, "w") as file:
        make(file)
    image = path.read_bytes()
    path.unlink()
    return image


def plain_image() -> bytes:
    """Return the bytes of a small candidate that can be judged."""
    image = io.BytesIO()
    with h5py.File(image, "w") as file:
        good(file)
    return image.getvalue()
