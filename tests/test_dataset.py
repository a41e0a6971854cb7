"""The dataset's file: written whole or not at all, opened by every netCDF tool, damage never unnoticed."""

from __future__ import annotations

import json
import os
from collections.abc import Callable
from pathlib import Path
from typing import Any

import h5netcdf
import h5py
import netCDF4
import numpy as np
import pytest
import xarray

from tests.synthetic_run import NAMES, config_toml, synthetic_pieces, write_synthetic_run
from tnquench.conventions import ERROR_SOURCES
from tnquench.dataset.integrity import check_run, digest_of
from tnquench.dataset.reader import open_run
from tnquench.dataset.variables import COORDINATES, OWN_COORDINATES, variables_of
from tnquench.dataset.writer import write_run

SITES, TIMES = 8, 5


@pytest.fixture(scope="module")
def pieces() -> dict[str, Any]:
    return synthetic_pieces(sites=SITES, times=TIMES)


@pytest.fixture(scope="module")
def sound(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return write_synthetic_run(tmp_path_factory.mktemp("sound"), sites=SITES, times=TIMES)


def all_arrays(pieces: dict[str, Any]) -> dict[str, Any]:
    """Every array given to the writer, by its path in the file."""
    arrays = dict(pieces["coordinates"])
    for group, found in pieces["groups"].items():
        arrays |= {f"{group}/{name}": values for name, values in found.items()}
    return arrays


# What other programs see ------------------------------------------------------------------------------------


def dims_by_h5py(variable: Any, name: str) -> tuple[str, ...]:
    return (
        (name.rpartition("/")[2],)
        if variable.is_scale
        else tuple(axis[0].name.rpartition("/")[2] for axis in variable.dims)
    )


def by_h5py(path: Path, name: str) -> tuple[Any, tuple[str, ...], dict[str, Any]]:
    with h5py.File(path) as file:
        found = file[name]
        values = found.asstr()[()] if h5py.check_string_dtype(found.dtype) else found[()]
        return values, dims_by_h5py(found, name), dict(found.attrs)


def by_h5netcdf(path: Path, name: str) -> tuple[Any, tuple[str, ...], dict[str, Any]]:
    with h5netcdf.File(path, "r") as file:
        found = file[name]
        values = found[()] if name != "source" else [text.decode() for text in found[()]]
        return values, found.dimensions, dict(found.attrs)


def by_netcdf4(path: Path, name: str) -> tuple[Any, tuple[str, ...], dict[str, Any]]:
    with netCDF4.Dataset(path) as file:
        found = file[name]
        return found[:], found.dimensions, {key: found.getncattr(key) for key in found.ncattrs()}


def by_xarray(engine: str) -> Callable[[Path, str], tuple[Any, tuple[str, ...], dict[str, Any]]]:
    def read(path: Path, name: str) -> tuple[Any, tuple[str, ...], dict[str, Any]]:
        group, _, last = name.rpartition("/")
        with xarray.open_dataset(path, group=group or None, engine=engine) as file:
            return file[last].values, tuple(map(str, file[last].dims)), dict(file[last].attrs)

    return read


READERS = {
    "h5py": by_h5py,
    "h5netcdf": by_h5netcdf,
    "netCDF4": by_netcdf4,
    "xarray-h5netcdf": by_xarray("h5netcdf"),
    "xarray-netcdf4": by_xarray("netcdf4"),
}
SAMPLES = (
    "time",
    "site",
    "bond",
    "source",
    "quantum/energy_current",
    "quantum/bond_dimension",
    "quantum/total_energy",
    "hydrodynamics/euler/charge_density_grid_error",
    "budget/energy_density/error",
    "budget/charge_density/euler_resolved",
    "budget/charge_density/dominant_source",
    "companions/weight_10/energy_density",
    "companions/length/charge_density",
    "companions/length/site_length",
)


def row_of(path: str) -> Any:
    """The table's row for a variable of the synthetic run."""
    group, _, name = path.rpartition("/")
    table = variables_of(group, own_places=group == "companions/length") if group else COORDINATES
    return table[name]


@pytest.mark.parametrize("reader", READERS)
@pytest.mark.parametrize("name", SAMPLES)
def test_every_tool_reads_what_was_written(
    sound: Path, pieces: dict[str, Any], reader: str, name: str
) -> None:
    values, dims, attributes = READERS[reader](sound, name)
    expected = np.asarray(all_arrays(pieces)[name])
    assert np.array_equal(np.asarray(values), expected)
    assert dims == row_of(name).dims
    assert attributes["units"] == row_of(name).units
    assert attributes["long_name"] == row_of(name).long_name


@pytest.mark.parametrize("engine", ["h5netcdf", "netcdf4"])
def test_xarray_opens_the_whole_tree(sound: Path, pieces: dict[str, Any], engine: str) -> None:
    with xarray.open_datatree(sound, engine=engine) as tree:
        assert set(tree.coords) == {"time", "site", "bond", "source"}
        assert tree.coords["source"].values.tolist() == list(ERROR_SOURCES)
        for path, expected in all_arrays(pieces).items():
            group, _, name = path.rpartition("/")
            found = tree[f"/{group}"].coords if name in tree[f"/{group}"].coords else tree[f"/{group}"]
            assert np.array_equal(np.asarray(found[name]), np.asarray(expected)), path
        assert tree["provenance"].attrs["config_toml"] == config_toml(sites=SITES)


@pytest.mark.parametrize("engine", ["h5netcdf", "netcdf4"])
def test_a_group_opened_alone_has_its_coordinates(sound: Path, engine: str) -> None:
    with xarray.open_dataset(sound, group="budget/energy_density", engine=engine) as budget:
        assert set(budget.coords) == {"time", "bond", "source"}
        truncation = budget["error"].sel(source="truncation").sel(bond=0.0, time=1.0)
        assert truncation.shape == ()


def test_scales_live_in_the_root_and_the_shorter_chain_has_its_own(sound: Path) -> None:
    with h5py.File(sound) as file:
        assert {name for name in file if isinstance(file[name], h5py.Dataset)} == set(COORDINATES)
        assert all(file[name].is_scale for name in COORDINATES)
        assert file["quantum/energy_density"].dims[1][0].name == "/bond"
        assert all(file[f"companions/length/{name}"].is_scale for name in OWN_COORDINATES)
        assert not file["quantum/time"].is_scale


def test_every_variable_has_units_and_a_meaning(sound: Path) -> None:
    with h5py.File(sound) as file:
        silent: list[str] = []
        file.visititems(
            lambda path, found: (
                silent.append(path)
                if isinstance(found, h5py.Dataset) and not (found.attrs["units"] and found.attrs["long_name"])
                else None
            )
        )
    assert silent == []


def test_the_meaning_of_the_charge_holds_for_every_model(tmp_path: Path) -> None:
    path = write_synthetic_run(tmp_path, sites=6, times=3, model="hubbard")
    with h5py.File(path) as file:
        said = {name: file[f"quantum/{name}"].attrs["long_name"] for name in file["quantum"]}
        units = {name: file[f"quantum/{name}"].attrs["units"] for name in file["quantum"]}
    for words in ("S^z (xxz)", "n - 1/2 (fermion)", "n - 1 (hubbard)"):
        assert words in said["charge_density"]
    assert units["magnetisation"] == units["double_occupancy"] == units["total_magnetisation"] == "1"
    assert units["spin_current"] == units["charge_current"] == "energy"


def test_flags_are_spelled_out(sound: Path) -> None:
    budget = open_run(sound).budget["energy_density"]
    assert budget["euler_resolved"].attrs["flag_meanings"] == "unresolved resolved"
    assert budget["dominant_source"].attrs["flag_meanings"].split() == list(ERROR_SOURCES)


# Opening a run ----------------------------------------------------------------------------------------------


def test_open_run_returns_everything_with_coordinates(sound: Path, pieces: dict[str, Any]) -> None:
    run = open_run(sound.parent)
    groups = {"quantum": run.quantum}
    groups |= {f"hydrodynamics/{level}": found for level, found in run.hydrodynamics.items()}
    groups |= {f"budget/{name}": found for name, found in run.budget.items()}
    groups |= {f"companions/{name}": found for name, found in run.companions.items()}
    assert set(groups) == set(pieces["groups"])
    for group, arrays in pieces["groups"].items():
        for name, values in arrays.items():
            assert np.array_equal(groups[group][name].values, values), f"{group}/{name}"
            assert set(groups[group][name].dims) <= set(groups[group].coords)
    assert set(run.budget) == set(NAMES)
    assert list(run.coordinates.coords) == ["time", "site", "bond", "source"]
    assert run.companions["length"].sizes == {"time": TIMES, "bond_length": 5, "site_length": 6}


def test_open_run_decodes_provenance_and_attributes(sound: Path, pieces: dict[str, Any]) -> None:
    run = open_run(sound)
    for name, value in pieces["provenance"].items():
        assert run.provenance[name] == value
    assert run.provenance["digest"] == digest_of(sound)
    assert run.provenance["format_version"] == 2
    assert run.hydrodynamics["euler"].attrs["references"] == ["castro_alvaredo_2016", "bertini_2016"]
    assert run.hydrodynamics["euler"].attrs["light_cone_left"] == -1.2
    assert run.companions["length"].attrs["sites"] == 6
    assert "Synthetic numbers" in repr(run)
    assert "euler" in repr(run)


def test_awkward_attributes_survive(tmp_path: Path, pieces: dict[str, Any]) -> None:
    awkward = {
        "title": "Zwei Temperaturen, β = ½ | 2",
        "config_file": os.fsdecode(b"caf\xe9.toml"),
        "machine": "",
        "config_toml": "# long\n" * 20_000,
        "wall_seconds": np.float64(1.5),
        "cpu_seconds": np.int64(3),
        "events": [],
        "preparation": json.dumps({"error": 1e-9}),
        "versions": {"numpy": np.str_("2"), "sizes": np.arange(2), "nothing": None, "file": Path("a")},
    }
    provenance = pieces["provenance"] | awkward
    attributes = pieces["attributes"] | {"": {"remark": "made up"}}
    attributes["budget/charge_density"] = attributes["budget/charge_density"] | {
        "first_resolved_time": np.nan
    }
    path = write_run(tmp_path, **(pieces | {"provenance": provenance, "attributes": attributes}))
    assert check_run(path) == []
    run = open_run(path)
    assert run.provenance["title"] == awkward["title"]
    assert run.provenance["config_file"] == "caf\\udce9.toml"
    assert run.provenance["machine"] == ""
    assert run.provenance["config_toml"] == awkward["config_toml"]
    assert (run.provenance["wall_seconds"], run.provenance["cpu_seconds"]) == (1.5, 3)
    assert run.provenance["events"] == []
    assert run.provenance["preparation"] == {"error": 1e-9}
    assert run.provenance["versions"]["sizes"] == [0, 1]
    assert np.isnan(run.budget["charge_density"].attrs["first_resolved_time"])
    assert run.attributes["remark"] == "made up"


def test_a_prediction_alone_is_a_sound_dataset(tmp_path: Path, pieces: dict[str, Any]) -> None:
    group = "hydrodynamics/euler"
    path = write_run(
        tmp_path,
        coordinates={name: pieces["coordinates"][name] for name in ("time", "site", "bond")},
        groups={group: pieces["groups"][group]},
        attributes={group: pieces["attributes"][group]},
        provenance=pieces["provenance"],
    )
    assert check_run(path) == []
    run = open_run(path)
    assert run.attributes["content"] == "prediction"
    assert run.budget == {}
    assert len(run.quantum) == 0
    assert run.hydrodynamics["euler"]["energy_density"].shape == (TIMES, SITES - 1)
