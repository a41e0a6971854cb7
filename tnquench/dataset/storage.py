"""The HDF5 file as a string of bytes: contents to bytes and back.

Files are written through h5netcdf, so that every netCDF-4 tool opens them. They are made and read in memory:
errors of the disk then reach us as plain OSError, never as a broken state of the HDF5 library.

Behind the HDF5 file proper stands a seal, the SHA-256 of all bytes before it, because the HDF5 library does
not survive every damaged file (a zeroed heap makes it loop for ever): bytes that break their seal never reach
it. HDF5 ignores what follows its end of file, and drops it when another program changes the file. Such a file
has no seal, is read without it, and betrays its change by the digest of its contents.

A seal guards against accidents, not against malice. Bytes that this process did not make are therefore read
by a process of its own first; only if that ends well are they read here.
"""

from __future__ import annotations

import hashlib
import io
from collections.abc import Mapping
from pathlib import Path
from stat import S_ISDIR, S_ISREG
from typing import Any

import h5netcdf
import h5py
import numpy as np

from tnquench.dataset.contents import Contents, StoredVariable
from tnquench.dataset.hdf5_image import DamagedFile, read_image, trial_complaint
from tnquench.dataset.variables import FILE_NAME
from tnquench.errors import InputError

#: HDF5 1.10 format: metadata carry checksums, and every netCDF-4 library since 2017 reads it.
LIBRARY_VERSION = ("v110", "v110")

HDF5_SIGNATURE = b"\x89HDF\r\n\x1a\n"

SEAL = b"\nSHA-256 of all bytes before this line: "
SEAL_LENGTH = len(SEAL) + 65

#: A larger file is no dataset of this program and is refused before it is read, in bytes.
LARGEST_FILE = 4 * 2**30

#: What a trial said of files by their SHA-256; nothing of those that can be read, or that this process made.
_TRIED: dict[bytes, str] = {}


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
    seal, length = image[-SEAL_LENGTH:], len(image) - SEAL_LENGTH
    if seal.startswith(SEAL) and seal != _seal(memoryview(image)[:length]):
        message = "damaged file: its bytes differ from their checksum; restore a copy or run again"
        raise DamagedFile(message)
    _try(image)
    variables, attributes = read_image(image)
    found = {path: StoredVariable(*variable) for path, variable in variables.items()}
    kept = {path: variable for path, variable in found.items() if not _is_copy(path, found)}
    return Contents(kept, {group: said for group, said in attributes.items() if said})


def locate(path: Path) -> Path:
    """Return the dataset meant by `path`, itself or the folder that holds it."""
    return path / FILE_NAME if path.is_dir() else path


def read_bytes(path: Path) -> bytes:
    """Return the bytes of the dataset meant by `path`.

    Raises InputError if it is missing, unreadable, no regular file (a pipe might never end) or larger than
    `LARGEST_FILE`.
    """
    file = locate(path)
    try:
        status = file.stat()
        if not (S_ISREG(status.st_mode) or S_ISDIR(status.st_mode)):
            raise _unreadable(file, "no regular file; give a folder that holds run.h5, or the file")
        if status.st_size > LARGEST_FILE:
            size = f"{status.st_size / 2**30:.0f} GB, at most {LARGEST_FILE // 2**30} GB are read"
            raise _unreadable(file, f"{size}; no dataset of this program is so large")
        return file.read_bytes()
    except FileNotFoundError as error:
        problem = "no such dataset; give a folder that holds run.h5, or the file"
        raise InputError(str(file), [problem], consequence="") from error
    except (OSError, ValueError) as error:  # ValueError: a null byte in the name
        raise _unreadable(path, getattr(error, "strerror", None) or str(error)) from error


def _unreadable(path: Path, reason: str) -> InputError:
    return InputError(str(path), [f"cannot be read: {reason}"], consequence="")


def _try(image: bytes) -> None:
    """Let a process of its own read bytes that this one did not make; raise DamagedFile if it fails."""
    digest = hashlib.sha256(image).digest()
    if digest not in _TRIED:
        _TRIED[digest] = trial_complaint(image)
    if complaint := _TRIED[digest]:
        raise DamagedFile(complaint)


def _sealed(body: bytes) -> bytes:
    image = body + _seal(body)
    _TRIED[hashlib.sha256(image).digest()] = ""
    return image


def _seal(body: bytes | memoryview) -> bytes:
    return SEAL + hashlib.sha256(body).hexdigest().encode() + b"\n"


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


def _is_copy(path: str, variables: Mapping[str, StoredVariable]) -> bool:
    """Is this a group's faithful copy of a scale of the root? One that differs is contents, and wrong."""
    head, _, name = path.rpartition("/")
    if head == "" or name not in variables:
        return False
    own, scale = variables[path], variables[name]
    same = own.dims == scale.dims and own.attributes == scale.attributes
    return same and np.array_equal(own.values, scale.values)
