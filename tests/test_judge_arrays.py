"""Whatever a file of arrays holds, it is read or every line says plainly why not; never a traceback."""

from __future__ import annotations

import io
from pathlib import Path

import h5py
import numpy as np
import pytest
import xarray
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from scipy.io import netcdf_file

from tests.command_line import call
from tests.judge_cases import assert_refused_plainly_or_sound, read_or_refused
from tests.synthetic_run import write_synthetic_run
from tnquench.errors import InputError
from tnquench.judge.array_file import ArrayFile, StoredArray, load_classic_netcdf, load_hdf5, points_of
from tnquench.judge.candidate import open_candidate
from tnquench.judge.points import OBSERVABLES, QUANTUM, TABLE

TIMES, PLACES = np.array([0.5, 1.0, 1.5]), np.array([-1.0, 0.0, 1.0, 2.0])
VALUES = np.arange(12.0).reshape(3, 4) / 100
CLOCK, PLACE = (part.ravel() for part in np.meshgrid(TIMES, PLACES, indexing="ij"))


def test_grids_and_columns_of_hdf5_and_netcdf_are_the_same_points(tmp_path: Path) -> None:
    grid, columns, netcdf, classic = (tmp_path / name for name in ("grid.h5", "flat.h5", "x.nc", "old.nc"))
    with h5py.File(grid, "w") as file:
        file["time"], file["x"], file["energy_density"] = TIMES, PLACES, VALUES
    with h5py.File(columns, "w") as file:
        group = file.create_group("mine")
        group["time"], group["x"], group["energy_density"] = CLOCK, PLACE, VALUES.ravel().astype(np.float32)
    data = xarray.Dataset({"energy_density": (("place", "time"), VALUES.T)}, {"time": TIMES, "place": PLACES})
    data.to_netcdf(netcdf, engine="h5netcdf")
    with netcdf_file(classic, "w") as file:
        for name, values in (("time", TIMES), ("x", PLACES)):
            file.createDimension(name, values.size)
            file.createVariable(name, "d", (name,))[:] = values
        file.createVariable("energy_density", "d", ("time", "x"))[:] = VALUES
    for path in (grid, columns, netcdf, classic):
        candidate = open_candidate(path)
        found = candidate.fields["energy_density"]
        order = np.lexsort((found.positions, found.times))
        assert candidate.origin == TABLE
        np.testing.assert_array_equal(found.times[order], CLOCK)
        np.testing.assert_array_equal(found.positions[order], PLACE)
        np.testing.assert_allclose(found.values[order], VALUES.ravel(), rtol=1e-7, atol=0)


def test_dataset_of_our_own_is_recognised_without_its_seal(tmp_path: Path) -> None:
    """Another program's copy has no seal behind the HDF5 data; its contents say what it is."""
    run = write_synthetic_run(tmp_path)
    sealed = run.read_bytes()
    copy = tmp_path / "copy.nc"
    copy.write_bytes(sealed[: sealed.rindex(b"\nSHA-256")])
    assert open_candidate(copy).origin == QUANTUM
    assert open_candidate(run).origin == QUANTUM


def file_of(**arrays: np.ndarray) -> ArrayFile:
    """Arrays without named dimensions, as plain HDF5 has them."""
    return ArrayFile(
        {name: StoredArray(("",) * array.ndim, array.shape, array) for name, array in arrays.items()}
    )


BAD_ARRAYS: dict[str, tuple[ArrayFile, str]] = {
    "nothing": (ArrayFile({}), 'no variable "time"'),
    "no place": (file_of(time=TIMES, energy_density=VALUES), 'no variable "x"'),
    "transposed": (
        file_of(time=TIMES, x=PLACES, energy_density=VALUES.T),
        r"energy_density: shape \(4, 3\); allowed: \(time, x\) = \(3, 4\)",
    ),
    "time in two dimensions": (
        file_of(time=VALUES, x=PLACES, energy_density=VALUES),
        r"time: shape \(3, 4\); must have one dimension",
    ),
    "two groups": (
        ArrayFile({f"{group}/energy_density": StoredArray((), (), None) for group in ("a", "b")}),
        r"several groups \(a, b\)",
    ),
    "text": (
        ArrayFile({**file_of(time=TIMES, x=PLACES).arrays, "energy_density": StoredArray(("",), (3,), None)}),
        "must be numbers in one or two dimensions",
    ),
    "packed": (
        ArrayFile(
            {
                **file_of(time=TIMES, x=PLACES).arrays,
                "energy_density": StoredArray(("", ""), (3, 4), VALUES, packed=True),
            }
        ),
        "packed by scale_factor",
    ),
    "gap": (
        file_of(time=TIMES, x=PLACES, energy_density=np.where(VALUES == 0.05, np.nan, VALUES)),
        "entry 6, energy_density: nan is not a finite number",
    ),
    "repeated time": (
        file_of(time=np.array([1.0, 1.0, 2.0]), x=PLACES, energy_density=VALUES),
        "stands already in entry 1; give each point once .and 3 more",
    ),
    "empty": (file_of(time=TIMES[:0], x=PLACES, energy_density=VALUES[:0]), "holds no values"),
}


@pytest.mark.parametrize("case", BAD_ARRAYS)
def test_problems_of_arrays(case: str) -> None:
    file, said = BAD_ARRAYS[case]
    with pytest.raises(InputError, match=said):
        points_of(file, subject="a.h5")


def test_exotic_hdf5_is_refused_in_one_line(tmp_path: Path) -> None:
    """What the format allows and no table of numbers is: text, compounds, links to nowhere, empty spaces."""
    path = tmp_path / "exotic.h5"
    with h5py.File(path, "w") as file:
        file["time"] = np.array([(1, 2.0)], dtype=[("a", int), ("b", float)])
        file["x"] = h5py.Empty("f8")
        file["energy_density"] = "text"
        file["soft"] = h5py.SoftLink("/nowhere")
        file["outside"] = h5py.ExternalLink("/etc/passwd", "/")
        file["energy_current"] = np.zeros((2, 2, 2))
    answer = call("judge", path, "--against", write_synthetic_run(tmp_path / "run"))
    assert answer.code == 2
    assert "time: shape (1,); must be numbers" in answer.err
    assert "Traceback" not in answer.err


def test_array_that_claims_too_much_is_not_read(tmp_path: Path) -> None:
    path = tmp_path / "bomb.h5"
    with h5py.File(path, "w") as file:
        file.create_dataset("energy_density", shape=(10**6, 10**6), chunks=(1000, 1000), dtype="f8")
        file["time"], file["x"] = TIMES, PLACES
    assert path.stat().st_size < 2**20
    with pytest.raises(InputError, match=r"energy_density: shape \(1000000, 1000000\); must be numbers"):
        open_candidate(path)


@pytest.mark.parametrize("damage", ["cut", "zeroed", "noise"])
def test_damaged_hdf5_is_refused_in_one_line(tmp_path: Path, damage: str) -> None:
    image = io.BytesIO()
    with h5py.File(image, "w") as file:
        file["time"], file["x"], file["energy_density"] = TIMES, PLACES, VALUES
    content = bytearray(image.getvalue())
    if damage == "cut":
        content = content[:900]
    elif damage == "zeroed":
        content[96:1400] = bytes(1304)
    else:
        content[96:1400] = np.random.default_rng(3).bytes(1304)
    path = tmp_path / "damaged.h5"
    path.write_bytes(content)
    assert load_hdf5(path) == "cannot be read to its end as HDF5; the file is damaged or no HDF5 file"
    answer = call("judge", path, "--against", write_synthetic_run(tmp_path / "run"))
    assert (answer.code, len(answer.lines)) == (2, 2)


def test_damaged_netcdf_is_refused_in_one_line() -> None:
    image = io.BytesIO()
    with netcdf_file(image, "w") as file:
        file.createDimension("time", 3)
        file.createVariable("time", "d", ("time",))[:] = TIMES
        file.flush()
        content = image.getvalue()
    assert isinstance(load_classic_netcdf(content), ArrayFile)
    for size in range(4, len(content) - 1, 7):
        assert isinstance(load_classic_netcdf(content[:size]), str)


@st.composite
def array_files(draw: st.DrawFn) -> ArrayFile:
    """Arrays of any small shape under names that may or may not mean something."""
    arrays = {}
    for name in draw(
        st.lists(st.sampled_from(["time", "x", "site", *OBSERVABLES[:2], "g/time"]), unique=True)
    ):
        shape = tuple(draw(st.lists(st.integers(0, 3), min_size=1, max_size=2)))
        size = int(np.prod(shape))
        numbers = draw(st.lists(st.floats(), min_size=size, max_size=size))
        values = np.array(numbers, dtype=np.float64).reshape(shape)
        dims = tuple(draw(st.sampled_from(["", "time", "x", "site"])) for _ in shape)
        arrays[name] = StoredArray(dims, shape, draw(st.sampled_from([values, None])))
    return ArrayFile(arrays)


@given(array_files())
@settings(max_examples=300, deadline=None, derandomize=True, suppress_health_check=[HealthCheck.too_slow])
def test_any_arrays_are_read_or_refused_plainly(file: ArrayFile) -> None:
    fields, refusal = read_or_refused(lambda: points_of(file, subject="a.h5"))
    assert_refused_plainly_or_sound(fields, refusal)
