"""Open whatever is to be judged: a table, a file of arrays, a dataset, or numbers in memory."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path

import numpy as np
import xarray
from numpy.typing import ArrayLike

from tnquench.conventions import OBSERVABLE_PLACES, Reals
from tnquench.dataset.reader import Run, open_run
from tnquench.dataset.storage import HDF5_SIGNATURE
from tnquench.dataset.variables import LEVELS
from tnquench.errors import InputError
from tnquench.judge.array_file import ArrayFile, load_classic_netcdf, load_hdf5, points_of
from tnquench.judge.csv_table import check_names, read_csv
from tnquench.judge.function import Function, NamedFunction, candidate_of_function
from tnquench.judge.points import (
    MOST_BYTES,
    OBSERVABLES,
    QUANTUM,
    TABLE,
    Candidate,
    Complaints,
    Points,
    check_points,
)
from tnquench.judge.reference import prediction_error, quantum_error, values_of
from tnquench.report.question import settings_of

CLASSIC_NETCDF_SIGNATURE = b"CDF"

#: Text beyond ASCII may take four times its size in memory; of that no more is read.
MOST_FOREIGN_BYTES = 32 * 2**20

Source = Path | str | Run | Mapping[str, ArrayLike] | Function


def open_candidate(
    source: Source, *, coordinates: Mapping[str, Reals] | None = None, run_code: bool = False
) -> Candidate:
    """Return the candidate meant by `source`.

    source : a CSV, HDF5 or netCDF file; a dataset, its folder or its file; columns in memory, a mapping
    with the names of a CSV header; a Python function (see `function`), or its name as file.py:function
    coordinates : "time", "site" and "bond" of the reference, on which a function is evaluated
    run_code : whether the user has agreed to run a function named by its file
    Raises InputError with one line a problem.
    """
    if isinstance(source, Run):
        return candidate_of_run(source)
    if isinstance(source, Mapping):
        return _from_columns(source)
    named = NamedFunction.parse(source)
    if named is not None and not run_code:
        named.refuse()
    function = named or source
    if isinstance(function, NamedFunction) or callable(function):
        if coordinates is None:
            problem = "is evaluated on the points of a reference, and there is none"
            raise InputError(str(function), [problem], consequence="nothing was judged")
        return candidate_of_function(function, coordinates)
    path = Path(function)
    if path.is_dir():
        return candidate_of_run(open_run(path))
    image = _bytes_of(path)
    if image.startswith(HDF5_SIGNATURE):
        return _from_hdf5(path)
    if image.startswith(CLASSIC_NETCDF_SIGNATURE):
        return _from_arrays(path, load_classic_netcdf(image))
    if path.suffix == ".py":
        problem = f"is Python code; name a function in it, {path}:NAME"
        raise _refusal(path, problem)
    if len(image) > MOST_FOREIGN_BYTES and not image.isascii():
        allowed = f"allowed: {MOST_FOREIGN_BYTES // 2**20} MB unless it is plain ASCII"
        raise _refusal(path, f"{len(image) / 2**20:.0f} MB of text; {allowed}")
    try:
        text = image.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        problem = f"byte {error.start}: not UTF-8 text, nor HDF5 or netCDF; give one of these"
        raise _refusal(path, problem) from error
    fields, remarks = read_csv(text, subject=str(path))
    return Candidate(_name(path), TABLE, fields, remarks)


def candidate_of_run(run: Run) -> Candidate:
    """Return a dataset as a candidate: its quantum side with its error, else its first prediction."""
    if len(run.quantum):
        origin, dataset = QUANTUM, run.quantum
    else:
        origin = next((level for level in LEVELS if level in run.hydrodynamics), "")
        dataset = run.hydrodynamics.get(origin, xarray.Dataset())
    fields = {
        name: _grid_points(
            np.asarray(run.coordinates["time"].values, dtype=np.float64),
            np.asarray(run.coordinates[place].values, dtype=np.float64),
            values,
            quantum_error(run, name) if origin == QUANTUM else prediction_error(dataset, name),
        )
        for name, place in OBSERVABLE_PLACES.items()
        if (values := values_of(dataset, name)) is not None
    }
    if not fields:
        raise _refusal(run.path, "holds neither a quantum side nor a prediction")
    return Candidate(_name(run.path), origin, fields, settings=settings_of(run))


def _grid_points(times: Reals, positions: Reals, values: Reals, error: Reals | None) -> Points:
    clock, place = np.meshgrid(times, positions, indexing="ij")
    known = np.isfinite(values)
    claimed = np.zeros_like(values) if error is None else np.nan_to_num(error)
    return Points(clock[known], place[known], values[known], claimed[known])


def _bytes_of(path: Path) -> bytes:
    try:
        if path.exists() and not path.is_file():
            raise _refusal(path, "neither a file nor a folder")
        size = path.stat().st_size
        if size > MOST_BYTES:
            allowed = f"allowed: {MOST_BYTES // 2**20} MB; give fewer points"
            raise _refusal(path, f"{size / 2**20:.0f} MB; {allowed}")
        return path.read_bytes()
    except FileNotFoundError as error:
        raise _refusal(path, "no such file; give a CSV, HDF5 or netCDF file, or a dataset") from error
    except (OSError, ValueError) as error:  # ValueError: a null byte in the name
        raise _refusal(path, f"cannot be read: {getattr(error, 'strerror', None) or error}") from error


def _from_hdf5(path: Path) -> Candidate:
    file = load_hdf5(path)
    if isinstance(file, ArrayFile) and file.own:
        return candidate_of_run(open_run(path))
    return _from_arrays(path, file)


def _from_arrays(path: Path, file: ArrayFile | str) -> Candidate:
    if isinstance(file, str):
        raise _refusal(path, file)
    fields, remarks = points_of(file, subject=str(path))
    return Candidate(_name(path), TABLE, fields, remarks)


def _from_columns(columns: Mapping[str, ArrayLike]) -> Candidate:
    complaints, subject = Complaints(), "candidate"
    remarks = check_names([str(name) for name in columns], complaints)
    complaints.raise_if_any(subject)
    try:
        arrays = {
            name: np.asarray(columns[name], dtype=np.float64)
            for name in columns
            if name in (*OBSERVABLES, "time", "x")
        }
    except (TypeError, ValueError) as error:
        raise InputError(subject, [f"not all numbers: {error}"], consequence="nothing was judged") from error
    for name, values in arrays.items():
        if values.ndim != 1 or values.shape != arrays["time"].shape:
            allowed = f"must be columns as long as time, {arrays['time'].shape}"
            complaints.add(f"{name}: shape {values.shape}; {allowed}")
    complaints.raise_if_any(subject)
    fields = {}
    for name in (name for name in OBSERVABLES if name in arrays):
        points = Points(arrays["time"], arrays["x"], arrays[name], np.zeros_like(arrays[name]))
        check_points(name, points, np.arange(float(len(points))), "row", complaints)
        fields[name] = points
    complaints.raise_if_any(subject)
    return Candidate(subject, TABLE, fields, remarks)


def _refusal(path: Path, problem: str) -> InputError:
    return InputError(str(path), [problem], consequence="nothing was judged")


def _name(path: Path) -> str:
    """Return a path as text that can be printed and stored: bytes that are not UTF-8 spelled out."""
    return str(path).encode("utf-8", errors="backslashreplace").decode()
