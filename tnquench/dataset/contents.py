"""What a dataset says, apart from how it is stored: variables, attributes, and their digest."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from typing import Any

from numpy.typing import NDArray

#: Value of an attribute: netCDF knows text, numbers and lists of either.
Attribute = str | int | float | list[str] | list[int] | list[float]


@dataclass(frozen=True)
class StoredVariable:
    """An array with its dimension names and attributes; text arrays have a numpy text type."""

    dims: tuple[str, ...]
    values: NDArray[Any]
    attributes: Mapping[str, Attribute]


@dataclass(frozen=True)
class Contents:
    """Variables by path ("time", "quantum/energy_density") and attributes by group ("" is the root)."""

    variables: Mapping[str, StoredVariable]
    attributes: Mapping[str, Mapping[str, Attribute]]

    def group(self, path: str) -> dict[str, StoredVariable]:
        """Return the variables that lie directly in group `path`, by name."""
        split = (full.rpartition("/") for full in self.variables)
        return {name: self.variables[f"{head}{bar}{name}"] for head, bar, name in split if head == path}

    def groups(self) -> list[str]:
        """Return the groups that hold variables or attributes, the root left out, in sorted order."""
        heads = {full.rpartition("/")[0] for full in self.variables} | set(self.attributes)
        return sorted(heads - {""})


def digest_of_contents(contents: Contents) -> str:
    """Return the SHA-256 of everything said in `contents` except the digest itself, as hexadecimal text.

    Variables enter by name, dimensions, type, shape, bytes and attributes, groups by their attributes, all in
    sorted order. Each part is preceded by its length: no two contents run together to the same stream.
    """
    stream = hashlib.sha256()
    for part in _parts(contents):
        stream.update(len(part).to_bytes(8, "little"))
        stream.update(part)
    return stream.hexdigest()


def _parts(contents: Contents) -> Iterator[bytes]:
    for path, variable in sorted(contents.variables.items()):
        header = (path, variable.dims, _type_name(variable.values), variable.values.shape)
        yield json.dumps(header).encode()
        yield _bytes_of(variable.values)
        yield from _attribute_parts(path, variable.attributes)
    for group, attributes in sorted(contents.attributes.items()):
        left_out = "digest" if group == "provenance" else None
        said = {name: value for name, value in attributes.items() if name != left_out}
        yield from _attribute_parts(f"{group}/", said)


def _attribute_parts(owner: str, attributes: Mapping[str, Attribute]) -> Iterator[bytes]:
    for name, value in sorted(attributes.items()):
        entries = value if isinstance(value, list) else [value]
        # hexadecimal text of a float is exact, and tells 1.0 from 1
        written = [entry.hex() if isinstance(entry, float) else entry for entry in entries]
        yield json.dumps((owner, name, [type(entry).__name__ for entry in entries], written)).encode()


def _type_name(values: NDArray[Any]) -> str:
    return "str" if values.dtype.kind == "U" else values.dtype.newbyteorder("<").str


def _bytes_of(values: NDArray[Any]) -> bytes:
    if values.dtype.kind == "U":
        return json.dumps(values.tolist()).encode()
    return values.astype(values.dtype.newbyteorder("<"), copy=False).tobytes()
