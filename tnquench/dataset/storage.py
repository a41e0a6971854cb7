"""The HDF5 file as a string of bytes: contents to bytes and back. Nothing else here touches HDF5.

Files are written through h5netcdf, so that every netCDF-4 tool opens them. They are made and read in memory:
errors of the disk then reach us as plain OSError, never as a broken state of the HDF5 library.

Behind the HDF5 file proper stands a seal, the SHA-256 of all bytes before it, because the HDF5 library does
not survive every damaged file (a zeroed heap makes it loop for ever): bytes that break their seal never reach
it. HDF5 ignores what follows its end of file, and drops it when another program changes the file. Such a file
has no seal, is read without it, and betrays its change by the digest of its contents.
"""

from __future__ import annotations

import hashlib
import io
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import h5netcdf
import h5py
import numpy as np

from tnquench.dataset.contents import Attribute, Contents, StoredVariable
from tnquench.dataset.variables import FILE_NAME
from tnquench.errors import InputError

#: HDF5 1.10 format: metadata carry checksums, and every netCDF-4 library since 2017 reads it.
LIBRARY_VERSION = ("v110", "v110")

HDF5_SIGNATURE = b"\x89HDF\r\n\x1a\n"

SEAL = b"\nSHA-256 of all bytes before this line: "

#: No deflate stream expands more than this (zlib's documentation); a variable that claims more is damaged.
LARGEST_EXPANSION = 1032

#: Attributes by which HDF5 and netCDF-4 keep their own books.
BOOKKEEPING: frozenset[str] = frozenset(
    {"CLASS", "NAME", "DIMENSION_LIST", "REFERENCE_LIST", "DIMENSION_LABELS"}
    | {"_NCProperties", "_Netcdf4Dimid", "_Netcdf4Coordinates", "_nc3_strict", "_FillValue"}
)


class DamagedFile(Exception):  # noqa: N818 - the file is at fault; always turned into a finding or an InputError
    """The bytes are no HDF5 file, or one that cannot be read to its end; says which in one line."""


def encode(contents: Contents) -> bytes:
    """Return `contents` as the bytes of a netCDF-4 file.

    A variable named as its only dimension becomes a dimension scale. Every group gets plain copies of the
    root's scales that it uses, so that whoever opens one group has its coordinates; copies are no part of
    the contents.
    """
    image = io.BytesIO()
    with h5netcdf.File(image, "w", libver=LIBRARY_VERSION) as file:
        for path, variable in contents.variables.items():
            if _names_itself(path, variable):
                head, _, name = path.rpartition("/")
                _group_at(file, head).dimensions[name] = variable.values.size
        for path, variable in {**contents.variables, **_copies_of_scales(contents)}.items():
            _write_variable(file, path, variable)
        for group, attributes in contents.attributes.items():
            _group_at(file, group).attrs.update(attributes)
    return _sealed(image.getvalue())


def decode(image: bytes) -> Contents:
    """Return the contents of the HDF5 file whose bytes are `image`; raises DamagedFile if that fails."""
    if not image.startswith(HDF5_SIGNATURE):
        message = "not an HDF5 file"
        raise DamagedFile(message)
    body = image[: -len(_sealed(b""))]
    if image.startswith(SEAL, len(body)) and image != _sealed(body):
        message = "damaged file: its bytes differ from their checksum; restore a copy or run again"
        raise DamagedFile(message)
    try:
        with h5py.File(io.BytesIO(image), "r") as file:
            return _read_all(file, size=len(image))
    except DamagedFile:
        raise
    except Exception as error:  # damaged bytes make HDF5 and its readers raise nearly anything
        message = "damaged HDF5 file, cannot be read to its end; restore a copy or run again"
        raise DamagedFile(message) from error


def locate(path: Path) -> Path:
    """Return the dataset meant by `path`, itself or the folder that holds it."""
    return path / FILE_NAME if path.is_dir() else path


def read_bytes(path: Path) -> bytes:
    """Return the bytes of the dataset meant by `path`; raises InputError if it is missing or unreadable."""
    try:
        return locate(path).read_bytes()
    except FileNotFoundError as error:
        problem = "no such dataset; give a folder that holds run.h5, or the file"
        raise InputError(str(locate(path)), [problem], consequence="") from error
    except (OSError, ValueError) as error:  # ValueError: a null byte in the name
        reason = getattr(error, "strerror", None) or str(error)
        raise InputError(str(path), [f"cannot be read: {reason}"], consequence="") from error


def _sealed(body: bytes) -> bytes:
    return body + SEAL + hashlib.sha256(body).hexdigest().encode() + b"\n"


def _names_itself(path: str, variable: StoredVariable) -> bool:
    return variable.dims == (path.rpartition("/")[2],)


def _copies_of_scales(contents: Contents) -> dict[str, StoredVariable]:
    scales = contents.group("")
    used = {
        f"{path.rpartition('/')[0]}/{dim}": scales[dim]
        for path, variable in contents.variables.items()
        for dim in variable.dims
        if "/" in path and dim in scales
    }
    return {path: scale for path, scale in used.items() if path not in contents.variables}


def _group_at(file: Any, path: str) -> Any:
    if path == "":
        return file
    return file[path] if path in file else file.create_group(path)


def _write_variable(file: Any, path: str, variable: StoredVariable) -> None:
    head, _, name = path.rpartition("/")
    owner = _group_at(file, head)
    if variable.values.dtype.kind == "U":
        stored = owner.create_variable(name, variable.dims, dtype=h5py.string_dtype())
        stored[:] = variable.values.astype(object)
    else:
        stored = owner.create_variable(name, variable.dims, data=variable.values)
    stored.attrs.update(variable.attributes)


def _read_all(file: h5py.File, *, size: int) -> Contents:
    variables: dict[str, StoredVariable] = {}
    attributes: dict[str, dict[str, Attribute]] = {}

    def visit(path: str, found: object) -> None:
        if isinstance(found, h5py.Dataset):
            variables[path] = _read_variable(path, found, size=size)
        elif isinstance(found, h5py.Group):
            attributes[path] = _read_attributes(found.attrs)

    visit("", file)
    file.visititems(visit)
    kept = {path: variable for path, variable in variables.items() if not _is_copy(path, variables)}
    return Contents(kept, {group: said for group, said in attributes.items() if said})


def _is_copy(path: str, variables: Mapping[str, StoredVariable]) -> bool:
    """Is this a group's faithful copy of a scale of the root? One that differs is contents, and wrong."""
    head, _, name = path.rpartition("/")
    if head == "" or name not in variables:
        return False
    own, scale = variables[path], variables[name]
    same = own.dims == scale.dims and own.attributes == scale.attributes
    return same and np.array_equal(own.values, scale.values)


def _read_variable(path: str, stored: Any, *, size: int) -> StoredVariable:
    if stored.nbytes > size * (LARGEST_EXPANSION if stored.chunks else 1):
        message = f"damaged HDF5 file: {path} claims {stored.nbytes} bytes, more than the file can hold"
        raise DamagedFile(message)
    if stored.is_scale:
        dims: tuple[str, ...] = (path.rpartition("/")[2],)
    else:
        dims = tuple(axis[0].name.rpartition("/")[2] if len(axis) else "" for axis in stored.dims)
    values = stored.asstr()[()] if h5py.check_string_dtype(stored.dtype) else stored[()]
    values = np.asarray(values)
    if values.dtype.kind == "O":
        values = values.astype(np.str_)
    return StoredVariable(dims, values, _read_attributes(stored.attrs))


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
