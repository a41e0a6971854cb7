"""Candidates as arrays: HDF5 and netCDF files with the same names as the columns of a table."""

from __future__ import annotations

import io
import json
import os
import subprocess
import sys
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from tnquench.conventions import Reals
from tnquench.judge import hdf5_child
from tnquench.judge.classic_netcdf import read_classic_netcdf
from tnquench.judge.csv_table import check_names
from tnquench.judge.points import COORDINATES, MOST_POINTS, OBSERVABLES, Complaints, Points, check_points

#: Longest time that reading a file may take, in seconds.
PATIENCE = 120.0

#: The HDF5 library loads no filters from shared libraries.
WITHOUT_PLUGINS = {"HDF5_PLUGIN_PRELOAD": "::"}

DAMAGED = "cannot be read to its end as HDF5; the file is damaged or no HDF5 file"


@dataclass(frozen=True)
class StoredArray:
    """An array of a file: its dimensions' names (empty where they have none) and its values.

    values : None where they are no numbers, or too many
    """

    dims: tuple[str, ...]
    shape: tuple[int, ...]
    values: Reals | None
    packed: bool = False


@dataclass(frozen=True)
class ArrayFile:
    """The arrays of a file by their path; own : it says of itself to be a dataset of this program."""

    arrays: Mapping[str, StoredArray]
    own: bool = False


def load_hdf5(path: Path) -> ArrayFile | str:
    """Return the arrays of an HDF5 file, read by a process of its own, or why it cannot be read."""
    command = [sys.executable, "-P", hdf5_child.__file__, str(path), str(MOST_POINTS)]
    try:
        child = subprocess.run(
            command, capture_output=True, timeout=PATIENCE, check=False, env=os.environ | WITHOUT_PLUGINS
        )
    except subprocess.TimeoutExpired:
        return f"not read within {PATIENCE:.0f} s; the file is damaged"
    if child.returncode != 0:
        return DAMAGED
    with np.load(io.BytesIO(child.stdout), allow_pickle=False) as answer:
        contents = json.loads(str(answer["contents"]))
        arrays = {
            entry["path"]: StoredArray(
                tuple(entry["dims"]),
                tuple(entry["shape"] or ()),
                answer.get(f"a{index}"),
                entry["packed"],
            )
            for index, entry in enumerate(contents["entries"])
        }
    return ArrayFile(arrays, contents["own"])


def load_classic_netcdf(image: bytes) -> ArrayFile | str:
    """Return the arrays of a netCDF file of the classic kind (before netCDF-4), or why it cannot be read."""
    try:
        arrays = {
            name: StoredArray(
                dims,
                values.shape,
                np.array(values, dtype=np.float64) if _is_plain(values) else None,
                packed,
            )
            for name, (dims, values, packed) in read_classic_netcdf(image).items()
        }
    except Exception:  # damaged bytes make the reader raise nearly anything
        return "cannot be read to its end as netCDF; the file is damaged"
    return ArrayFile(arrays)


def points_of(file: ArrayFile, *, subject: str) -> tuple[dict[str, Points], tuple[str, ...]]:
    """Return the points of each observable of a file, and what was left aside.

    Either `time`, `x` and each observable are columns of equal length, or the observables are grids (time, x)
    over 1-d `time` and `x`; a grid may have a dimension of its own instead of x, such as site or bond.
    Raises InputError with one line a problem.
    """
    complaints = Complaints()
    arrays, remark = _one_group(file.arrays, complaints)
    complaints.raise_if_any(subject)
    scales = {dim for array in arrays.values() for dim in array.dims} - {*COORDINATES, *OBSERVABLES}
    held = [name for name in OBSERVABLES if name in arrays]
    placed = {_place_of(arrays[name], arrays) for name in held}
    names = [name for name in arrays if name not in scales]
    implied = [] if "x" in names or "x" in placed or not held else ["x"]
    remarks = check_names([*names, *implied], complaints, what="variable")
    fields = {}
    for name in held:
        points = _points(name, arrays, complaints) if not complaints.lines else None
        if points is not None and len(points):
            check_points(name, points, np.arange(1.0, len(points) + 1.0), "entry", complaints)
            fields[name] = points
    if not fields and not complaints.lines:
        complaints.add("holds no values")
    complaints.raise_if_any(subject)
    return fields, remark + remarks


def _is_plain(values: NDArray[np.generic]) -> bool:
    return values.dtype.kind in "fiu" and 1 <= values.ndim <= 2 and values.size <= MOST_POINTS


def _one_group(
    arrays: Mapping[str, StoredArray], complaints: Complaints
) -> tuple[dict[str, StoredArray], tuple[str, ...]]:
    """Return the arrays of the one group that holds observables, with the root's coordinates."""
    root = {path: array for path, array in arrays.items() if "/" not in path}
    heads = {path.rpartition("/")[0] for path in arrays if path.rpartition("/")[2] in OBSERVABLES}
    if len(heads) > 1:
        found = ", ".join(sorted(head or "the root" for head in heads))
        complaints.add(f"observables stand in several groups ({found}); a candidate is one of them")
        return {}, ()
    head = heads.pop() if heads else ""
    if not head:
        return root, ()
    inside = {
        path.rpartition("/")[2]: array for path, array in arrays.items() if path.rpartition("/")[0] == head
    }
    coordinates = {name: array for name, array in root.items() if name not in OBSERVABLES}
    return coordinates | inside, (f"read from the group {head}",)


def _place_of(array: StoredArray, arrays: Mapping[str, StoredArray]) -> str:
    """Return the name of an observable's places: x, or a grid's own dimension if the file holds it."""
    own = [dim for dim in array.dims if dim in arrays and dim not in COORDINATES]
    return own[0] if len(array.dims) == 2 and own else "x"


def _points(name: str, arrays: Mapping[str, StoredArray], complaints: Complaints) -> Points | None:
    """Return the points of one observable; None, and a complaint, where its shape makes no sense."""
    array = arrays[name]
    place = _place_of(array, arrays)
    needed = {key: arrays[key] for key in ("time", place, name)}
    for key, found in needed.items():
        if found.packed:
            complaints.add(f"{key}: packed by scale_factor or add_offset; store plain numbers")
        if found.values is None:
            wanted = f"must be numbers in one or two dimensions, at most {MOST_POINTS}, all in this file"
            complaints.add(f"{key}: shape {found.shape}; {wanted}")
        elif key != name and found.values.ndim != 1:
            complaints.add(f"{key}: shape {found.shape}; must have one dimension")
    time, x, values = (needed[key].values for key in ("time", place, name))
    if complaints.lines or time is None or x is None or values is None:
        return None
    if values.ndim == 2 and array.dims[1] == "time" and array.dims[0] != "time":
        values = values.T  # dimensions are named, so that their order does not matter
    if values.ndim == 1 and time.shape == x.shape == values.shape:
        return Points(time, x, values, np.zeros_like(values))
    if values.shape != (time.size, x.size):
        allowed = f"(time, x) = ({time.size}, {x.size}), or all three columns of equal length"
        complaints.add(f"{name}: shape {values.shape}; allowed: {allowed}")
        return None
    times, positions = np.meshgrid(time, x, indexing="ij")
    return Points(times.ravel(), positions.ravel(), values.ravel(), np.zeros(values.size))
