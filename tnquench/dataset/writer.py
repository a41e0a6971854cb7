"""Write the dataset of a run, whole or not at all."""

from __future__ import annotations

import contextlib
import json
import os
from collections.abc import Iterable, Iterator, Mapping
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from tnquench.dataset.contents import Attribute, Contents, StoredVariable, digest_of_contents
from tnquench.dataset.storage import encode
from tnquench.dataset.variables import (
    COORDINATES,
    FILE_NAME,
    JSON_ATTRIBUTES,
    OBSERVABLES,
    OWN_COORDINATES,
    PLAIN_VERSION,
    SINCE,
    Variable,
    variables_of,
)
from tnquench.errors import InputError


def write_run(
    folder: Path | str,
    *,
    coordinates: Mapping[str, ArrayLike],
    groups: Mapping[str, Mapping[str, ArrayLike]],
    attributes: Mapping[str, Mapping[str, object]],
    provenance: Mapping[str, object],
) -> Path:
    """Write `folder`/run.h5 and return its path; an earlier run.h5 is replaced only by a complete new one.

    folder      : made if missing
    coordinates : "time" (time,) in 1/energy, "site" (site,) and "bond" (bond,) in lattice spacings,
                  "source" (source,) as text
    groups      : variables by group, such as "quantum" or "budget/energy_density"; names, shapes and units
                  as in tnquench/dataset/variables.py. A companion on a chain of another length adds its
                  positions "site_length" and "bond_length" to its group.
    attributes  : attributes by group, "" for the root; lists and mappings are stored as JSON text
    provenance  : attributes of /provenance; format version and digest are added here
    Without "quantum" the file is marked as a prediction alone, otherwise as a run. The root's attribute
    "observables" lists those of "quantum", or of the prediction.
    Raises InputError if the file cannot be written, ValueError for names, shapes or types the layout lacks.
    """
    contents = assemble_contents(
        coordinates=coordinates, groups=groups, attributes=attributes, provenance=provenance
    )
    path = Path(folder) / FILE_NAME
    image = encode(contents)
    with _refusing(path):
        path.parent.mkdir(parents=True, exist_ok=True)
        _replace(path, image)
    return path


def require_writable(folder: Path | str) -> None:
    """Make `folder` and try a file in it, so that a run is refused at its start and not at its end.

    Raises InputError if run.h5 could not be written there.
    """
    path = Path(folder) / FILE_NAME
    with _refusing(path):
        if path.is_dir():
            raise IsADirectoryError(0, "is a folder")
        path.parent.mkdir(parents=True, exist_ok=True)
        probe = _beside(path)
        probe.touch()
        probe.unlink()


def clear_leftovers(folder: Path | str) -> None:
    """Remove datasets that killed runs left half-written; the caller holds the lock on `folder`."""
    for partial in Path(folder).glob(f".{FILE_NAME}.*.partial"):
        partial.unlink(missing_ok=True)


def assemble_contents(
    *,
    coordinates: Mapping[str, ArrayLike],
    groups: Mapping[str, Mapping[str, ArrayLike]],
    attributes: Mapping[str, Mapping[str, object]],
    provenance: Mapping[str, object],
) -> Contents:
    """Return what `write_run` stores, digest included; raises ValueError where the layout is not met."""
    _require_known("coordinate", coordinates, COORDINATES)
    for group in attributes:
        if group not in {"", *groups}:
            message = f"attributes for a group without variables: {group!r}"
            raise ValueError(message)
    scales = {name: _stored(name, COORDINATES[name], values) for name, values in coordinates.items()}
    variables = dict(scales)
    for group, arrays in groups.items():
        variables |= _group_variables(group, arrays, scales)
    said = {group: _plain_attributes(values) for group, values in attributes.items() if values}
    said[""] = {
        **said.get("", {}),
        "content": "run" if "quantum" in groups else "prediction",
        "observables": " ".join(_observables(groups)),
    }
    said["provenance"] = {**_plain_attributes(provenance), "format_version": _version_of(groups)}
    digest = digest_of_contents(Contents(variables=variables, attributes=said))
    said["provenance"] = {**said["provenance"], "digest": digest}
    return Contents(variables=variables, attributes=said)


def _version_of(groups: Iterable[str]) -> int:
    """Return the first version of the layout that has all groups: older programs read what they can."""
    return max((SINCE.get(group, PLAIN_VERSION) for group in groups), default=PLAIN_VERSION)


def _observables(groups: Mapping[str, Mapping[str, ArrayLike]]) -> list[str]:
    """Return the observables of a run, or of its predictions where they stand alone."""
    predictions = [group for group in groups if group.startswith("hydrodynamics/")]
    told = ["quantum"] if "quantum" in groups else predictions
    return [name for name in OBSERVABLES if any(name in groups[group] for group in told)]


def _group_variables(
    group: str, arrays: Mapping[str, ArrayLike], scales: Mapping[str, StoredVariable]
) -> dict[str, StoredVariable]:
    """Return the variables of one group by path; each must have the shape that its dimensions say."""
    own = any(name in arrays for name in OWN_COORDINATES)
    table = variables_of(group, own_places=own)
    _require_known(f"variable of {group}", arrays, table)
    stored = {
        name: _stored(f"{group}/{name}", table[name], values, sources=scales.get("source"))
        for name, values in arrays.items()
    }
    sizes = {name: variable.values.size for name, variable in {**scales, **stored}.items()}
    for name, variable in stored.items():
        expected = tuple(sizes.get(dim) for dim in variable.dims)
        if variable.values.shape != expected:
            message = f"{group}/{name} has shape {variable.values.shape}, its dimensions say {expected}"
            raise ValueError(message)
    return {f"{group}/{name}": variable for name, variable in stored.items()}


def _stored(
    path: str, row: Variable, values: ArrayLike, *, sources: StoredVariable | None = None
) -> StoredVariable:
    """Return `values` as row `row` of the table describes them; an index of sources gets their names."""
    given: NDArray[Any] = np.asarray(values)
    target = np.dtype(row.dtype)
    if given.ndim != len(row.dims) or (given.size and not np.can_cast(given.dtype, target, "same_kind")):
        message = f"{path} must be {row.dtype} over {row.dims}, not {given.dtype} of shape {given.shape}"
        raise ValueError(message)
    attributes: dict[str, Attribute] = {"units": row.units, "long_name": row.long_name}
    flags = row.flags
    if path.endswith("/dominant_source") and sources is not None:
        flags = tuple(sources.values.tolist())
    if flags:
        attributes["flag_values"] = list(range(len(flags)))
        attributes["flag_meanings"] = " ".join(flags)
    return StoredVariable(row.dims, given.astype(target, copy=False), attributes)


def _require_known(kind: str, names: Mapping[str, object], table: Mapping[str, object]) -> None:
    if unknown := sorted(set(names) - set(table)):
        message = f"no such {kind}: {', '.join(unknown)}; known are {', '.join(table)}"
        raise ValueError(message)


def _plain_attributes(attributes: Mapping[str, object]) -> dict[str, Attribute]:
    return {name: _plain(name, value) for name, value in attributes.items()}


def _plain(name: str, value: object) -> Attribute:
    """Return `value` as text or a number; lists and mappings become JSON text."""
    if name in JSON_ATTRIBUTES:
        return _json_text(name, value)
    if isinstance(value, np.generic):
        value = value.item()
    if isinstance(value, str):
        return _writable_text(value)
    if isinstance(value, (bool, int)):
        return int(value)
    if isinstance(value, float):
        return value
    if isinstance(value, os.PathLike):
        return _writable_text(str(value))
    if isinstance(value, (list, tuple, Mapping)):
        return _json_text(name, value)
    message = f"attribute {name} cannot be stored: {value!r}"
    raise ValueError(message)


def _json_text(name: str, value: object) -> str:
    """Return `value` as JSON text; a text must be JSON already."""
    if not isinstance(value, str):
        return json.dumps(value, default=_json_entry)
    try:
        json.loads(value)
    except json.JSONDecodeError as error:
        message = f"attribute {name} must be JSON text, a list or a mapping, not {value!r}"
        raise ValueError(message) from error
    return value


def _json_entry(value: object) -> object:
    if isinstance(value, (np.generic, np.ndarray)):
        return value.tolist()
    if isinstance(value, os.PathLike):
        return str(value)
    message = f"cannot be written as JSON: {value!r}"
    raise ValueError(message)


def _writable_text(text: str) -> str:
    """Return `text` with what UTF-8 cannot carry or HDF5 would cut off (a null) spelled out."""
    return text.encode("utf-8", errors="backslashreplace").decode().replace("\x00", "\\x00")


@contextlib.contextmanager
def _refusing(path: Path) -> Iterator[None]:
    """Turn errors of the file system into one line for the user."""
    try:
        yield
    except (OSError, ValueError) as error:  # ValueError: a null byte in the name
        reason = getattr(error, "strerror", None) or str(error)
        if isinstance(error, FileExistsError | NotADirectoryError):
            reason = f"{_file_in_the_way(path.parent)} is a file, not a folder; name another place"
        raise InputError(str(path), [f"cannot be written: {reason}"], consequence="") from error


def _file_in_the_way(folder: Path) -> Path:
    """Return the part of a path that should be a folder and is not."""
    return next((part for part in (folder, *folder.parents) if part.exists() and not part.is_dir()), folder)


def _beside(path: Path) -> Path:
    return path.with_name(f".{path.name}.{os.getpid()}.partial")


def _replace(path: Path, image: bytes) -> None:
    """Put `image` at `path` in one step, so that a crash leaves either the old file or the new one."""
    partial = _beside(path)
    try:
        with partial.open("wb") as stream:
            stream.write(image)
            stream.flush()
            os.fsync(stream.fileno())
        partial.replace(path)
    except BaseException:
        partial.unlink(missing_ok=True)
        raise
    with contextlib.suppress(OSError):  # some network file systems refuse; the file itself is complete
        _sync_folder(path.parent)


def _sync_folder(folder: Path) -> None:
    descriptor = os.open(folder, os.O_RDONLY)
    try:
        os.fsync(descriptor)
    finally:
        os.close(descriptor)
