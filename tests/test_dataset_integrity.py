"""Damage and change of a dataset never go unnoticed, and never end in a breakdown."""

from __future__ import annotations

import random
import shutil
from collections.abc import Callable
from pathlib import Path
from typing import Any

import h5py
import numpy as np
import pytest
import xarray

from tests.synthetic_run import synthetic_pieces, write_synthetic_run
from tnquench.dataset.integrity import check_run, digest_of
from tnquench.dataset.reader import open_run
from tnquench.dataset.writer import write_run
from tnquench.errors import InputError

SITES, TIMES = 8, 5


@pytest.fixture(scope="module")
def sound(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return write_synthetic_run(tmp_path_factory.mktemp("sound"), sites=SITES, times=TIMES)


@pytest.fixture
def copy(sound: Path, tmp_path: Path) -> Path:
    """A file that a test may damage."""
    return Path(shutil.copy(sound, tmp_path / "run.h5"))


def test_a_sound_run_has_no_findings(sound: Path) -> None:
    assert check_run(sound) == []
    assert check_run(sound.parent) == []


@pytest.mark.parametrize("companions", [True, False])
@pytest.mark.parametrize("prediction", [True, False])
def test_a_run_may_lack_companions_or_prediction(tmp_path: Path, companions: bool, prediction: bool) -> None:
    path = write_synthetic_run(tmp_path, sites=6, times=3, companions=companions, prediction=prediction)
    assert check_run(path) == []
    run = open_run(path)
    assert bool(run.companions) == companions
    assert bool(run.hydrodynamics) == prediction
    assert ("error" in run.budget["energy_density"]) == companions
    assert ("euler_deviation" in run.budget["energy_density"]) == prediction


def test_the_digest_depends_on_the_contents_alone(tmp_path: Path) -> None:
    """The same contents stored by another program, in another order, compressed, keep their digest."""
    pieces = synthetic_pieces(sites=SITES, times=TIMES)
    path = write_run(tmp_path, **pieces)
    backwards = {key: dict(reversed(list(pieces[key].items()))) for key in pieces}
    assert digest_of(write_run(tmp_path / "again", **backwards)) == digest_of(path)
    before = digest_of(path)
    with h5py.File(path, "r+") as file:
        values = file["quantum/bond_dimension"][()].astype(">i8")
        replace_by("quantum/bond_dimension", values, "time", "bond", compression="gzip")(file)
    assert digest_of(path) == before
    assert check_run(path) == []


@pytest.mark.parametrize("engine", ["h5netcdf", "netcdf4"])
def test_a_copy_made_by_xarray_is_still_sound(sound: Path, tmp_path: Path, engine: Any) -> None:
    with xarray.open_datatree(sound, engine=engine) as tree:
        tree.to_netcdf(tmp_path / "copy.h5", engine=engine)
    assert check_run(tmp_path / "copy.h5") == []
    assert digest_of(tmp_path / "copy.h5") == digest_of(sound)


def flip_a_number(file: h5py.File) -> None:
    file["quantum/energy_density"][1, 2] = np.nextafter(file["quantum/energy_density"][1, 2], np.inf)


def change_an_attribute(file: h5py.File) -> None:
    file["budget/energy_density"].attrs["resolve_at"] = 2.0


def change_the_config(file: h5py.File) -> None:
    file["provenance"].attrs["config_toml"] = "title = 'forged'"


def swap_two_variables(file: h5py.File) -> None:
    for name, other in (
        ("energy_density", "held"),
        ("charge_current", "energy_density"),
        ("held", "charge_current"),
    ):
        file.move(f"quantum/{name}", f"quantum/{other}")


@pytest.mark.parametrize(
    "change", [flip_a_number, change_an_attribute, change_the_config, swap_two_variables]
)
def test_a_change_shows_in_the_digest(copy: Path, change: Callable[[h5py.File], None]) -> None:
    with h5py.File(copy, "r+") as file:
        change(file)
    assert check_run(copy)[0].startswith("altered since it was written: digest ")
    with pytest.raises(InputError, match="altered since it was written"):
        open_run(copy)
    assert open_run(copy, verify=False).quantum["energy_density"].shape == (TIMES, SITES - 1)


def put(path: str, values: object) -> Callable[[h5py.File], None]:
    """Overwrite a whole variable of the same shape in place."""

    def change(file: h5py.File) -> None:
        file[path][...] = values

    return change


def delete(path: str) -> Callable[[h5py.File], None]:
    def change(file: h5py.File) -> None:
        del file[path]

    return change


def set_attribute(path: str, name: str, value: object) -> Callable[[h5py.File], None]:
    def change(file: h5py.File) -> None:
        file[path].attrs[name] = value

    return change


def drop_attribute(path: str, name: str) -> Callable[[h5py.File], None]:
    def change(file: h5py.File) -> None:
        del file[path].attrs[name]

    return change


def replace_by(path: str, values: object, *dims: str, **storage: str) -> Callable[[h5py.File], None]:
    """Put another array in the place of a variable, on the named scales of the root."""

    def change(file: h5py.File) -> None:
        kept = {name: file[path].attrs[name] for name in ("units", "long_name")}
        del file[path]
        new = file.create_dataset(path, data=values, **storage)
        new.attrs.update(kept)
        for axis, name in enumerate(dims):
            new.dims[axis].attach_scale(file[name])

    return change


FAULTS: dict[str, tuple[Callable[[h5py.File], None], str]] = {
    "variable": (delete("quantum/energy_current"), "missing variable quantum/energy_current"),
    "budget variable": (
        delete("budget/energy_density/euler_resolved"),
        "missing variable budget/energy_density/euler_resolved",
    ),
    "group": (delete("budget/charge_current"), "missing group budget/charge_current"),
    "quantum": (delete("quantum"), "missing group quantum"),
    "companions": (delete("companions"), "missing group companions, from which"),
    "measured": (delete("budget/energy_density/error"), "missing variable budget/energy_density/error"),
    "prediction": (delete("hydrodynamics"), "missing group hydrodynamics/euler"),
    "attribute": (drop_attribute("provenance", "machine"), "missing attribute machine of provenance"),
    "kind": (
        drop_attribute("budget/energy_density", "kind_length"),
        "missing attribute kind_length of budget/energy_density",
    ),
    "digest": (drop_attribute("provenance", "digest"), "no digest in /provenance"),
    "JSON": (set_attribute("provenance", "events", "[1,"), "attribute events of provenance is not JSON text"),
    "not a number": (
        put("quantum/energy_density", np.nan),
        f"quantum/energy_density holds {TIMES * (SITES - 1)} values that are not finite numbers",
    ),
    "infinite": (put("budget/energy_density/bound", np.inf), "budget/energy_density/bound holds 35 values"),
    "time": (put("time", np.arange(TIMES)[::-1]), "time does not increase everywhere"),
    "time not a number": (put("time", np.nan), "time does not increase everywhere"),
    "copy": (put("quantum/time", np.arange(TIMES) + 7.0), "quantum/time differs from the scale time"),
    "source": (put("source", "truncation"), "source repeats a value"),
    "verdict": (
        put("budget/energy_density/euler_resolved", 2),
        "budget/energy_density/euler_resolved holds values outside 0..1",
    ),
    "units": (
        set_attribute("quantum/energy_current", "units", "energy"),
        "quantum/energy_current has units 'energy', expected 'energy^2'",
    ),
    "dimensions": (
        replace_by("quantum/energy_density", np.zeros((TIMES, SITES)), "time", "site"),
        "quantum/energy_density has dimensions (time, site), expected (time, bond)",
    ),
    "no dimensions": (
        replace_by("quantum/energy_density", np.zeros((TIMES, SITES - 1))),
        "quantum/energy_density has dimensions (, ), expected (time, bond)",
    ),
    "shape": (
        replace_by("quantum/energy_density", np.zeros((TIMES, SITES + 3)), "time", "bond"),
        "quantum/energy_density has shape (5, 11), its dimensions have sizes (5, 7)",
    ),
    "type": (
        replace_by("quantum/energy_density", np.zeros((TIMES, SITES - 1), np.int64), "time", "bond"),
        "quantum/energy_density holds int64, expected float64",
    ),
    "text": (
        replace_by("quantum/total_energy", np.array([b"a"] * TIMES), "time"),
        "quantum/total_energy holds",
    ),
    "compound": (
        replace_by("quantum/total_energy", np.zeros(TIMES, [("a", "f8"), ("b", "i4")]), "time"),
        "quantum/total_energy holds",
    ),
    "scalar": (replace_by("time", np.float64(1.0)), "time has dimensions (), expected (time)"),
    "stranger": (lambda file: file["quantum"].create_dataset("x", data=1.0), "unknown variable quantum/x"),
    "strange group": (lambda file: file.create_dataset("other/x", data=1.0), "unknown group other"),
    "strange root": (lambda file: file.create_dataset("x", data=1.0), "unknown variable x"),
    "reference": (
        lambda file: file["quantum"].attrs.create("x", file["time"].ref, dtype=h5py.ref_dtype),
        "altered since it was written",
    ),
}


@pytest.mark.parametrize("fault", FAULTS)
def test_a_fault_is_named_in_one_plain_line(copy: Path, fault: str) -> None:
    change, expected = FAULTS[fault]
    with h5py.File(copy, "r+") as file:
        change(file)
    findings = check_run(copy)
    assert any(finding.startswith(expected) for finding in findings), findings
    assert all("\n" not in finding for finding in findings)
    with pytest.raises(InputError):
        open_run(copy)


def test_a_newer_format_is_refused_by_name(copy: Path) -> None:
    with h5py.File(copy, "r+") as file:
        file["provenance"].attrs["format_version"] = 99
    expected = "format version 99 is newer than 3, the newest this program reads"
    assert check_run(copy) == [expected]
    with pytest.raises(InputError, match=expected):
        open_run(copy, verify=False)


@pytest.mark.parametrize("version", ["one", 0, 1.5])
def test_a_senseless_format_version_is_refused(copy: Path, version: object) -> None:
    with h5py.File(copy, "r+") as file:
        file["provenance"].attrs["format_version"] = version
    (finding,) = check_run(copy)
    assert finding.endswith("is not a positive integer")
    with pytest.raises(InputError, match="is not a positive integer"):
        open_run(copy)


def test_contradicting_dimensions_are_refused_even_unverified(copy: Path) -> None:
    with h5py.File(copy, "r+") as file:
        replace_by("quantum/energy_density", np.zeros((TIMES, SITES + 3)), "time", "bond")(file)
    with pytest.raises(InputError, match="damaged dataset"):
        open_run(copy, verify=False)


def test_other_hdf5_files_are_not_taken_for_a_run(tmp_path: Path) -> None:
    path = tmp_path / "other.h5"
    with h5py.File(path, "w") as file:
        file["numbers"] = np.arange(3)
    assert check_run(path) == ["no format version in /provenance: not a dataset of this program"]
    with pytest.raises(InputError, match="not a dataset of this program"):
        open_run(path)


def test_what_is_missing_or_no_file_is_refused(tmp_path: Path) -> None:
    (tmp_path / "folder" / "run.h5").mkdir(parents=True)
    (tmp_path / "taken").write_text("a file, no folder")
    for path, message in (
        (tmp_path / "nowhere", "no such dataset; give a folder that holds run.h5, or the file"),
        (tmp_path, "no such dataset"),
        (tmp_path / "taken" / "deeper", "cannot be read: Not a directory"),
        (tmp_path / "null\0byte", "cannot be read: embedded null byte|no such dataset"),
        (tmp_path / "folder", "cannot be read: Is a directory"),
    ):
        for act in (check_run, open_run, digest_of):
            with pytest.raises(InputError, match=message) as caught:
                act(path)
            assert len(caught.value.problems) == 1


# Damage: a finding and an InputError, never a traceback -----------------------------------------------------


def refused(path: Path, image: bytes) -> bool:
    """Put `image` at `path`; check and open must agree whether it is sound, and neither may break down."""
    path.write_bytes(image)
    findings = check_run(path)
    assert all("\n" not in finding for finding in findings)
    if findings:
        with pytest.raises(InputError) as caught:
            open_run(path)
        assert len(caught.value.problems) == 1
        return True
    open_run(path)
    return False


def unsealed(image: bytes) -> bytes:
    """A file as another program leaves it: without the line that guards its bytes."""
    return image[: image.rindex(b"\nSHA-256")]


def test_every_flipped_byte_is_noticed(sound: Path, tmp_path: Path) -> None:
    good = sound.read_bytes()
    chance = random.Random(20_260_101)
    guarded = len(unsealed(good))
    for _ in range(150):
        image = bytearray(good)
        image[chance.randrange(guarded)] ^= chance.randrange(1, 256)
        assert refused(tmp_path / "run.h5", bytes(image))


def test_truncated_files_are_noticed(sound: Path, tmp_path: Path) -> None:
    good = sound.read_bytes()
    lengths = [0, 1, 8, 48, 100, *range(500, len(unsealed(good)), 7001), len(unsealed(good)) - 1]
    for length in lengths:
        assert refused(tmp_path / "run.h5", good[:length])


def test_zeroed_and_scribbled_blocks_are_noticed(sound: Path, tmp_path: Path) -> None:
    """Among them the zeroed heaps on which the HDF5 library would loop for ever."""
    good = sound.read_bytes()
    chance = random.Random(7)
    for start in range(0, len(unsealed(good)) - 512, 9001):
        for block in (bytes(512), chance.randbytes(512)):
            image = good[:start] + block + good[start + 512 :]
            assert refused(tmp_path / "run.h5", image) == (image != good)


def test_random_bytes_are_no_dataset(sound: Path, tmp_path: Path) -> None:
    chance = random.Random(5)
    signature = sound.read_bytes()[:8]
    for size in range(0, 4000, 200):
        assert refused(tmp_path / "run.h5", chance.randbytes(size))
        assert refused(tmp_path / "run.h5", signature + chance.randbytes(size))


def test_flips_in_a_file_without_its_seal_never_break_down(sound: Path, tmp_path: Path) -> None:
    """Flips in space that nobody reads leave the file sound; HDF5 or the digest notice all others."""
    good = unsealed(sound.read_bytes())
    assert not refused(tmp_path / "run.h5", good)
    chance = random.Random(3)
    noticed = 0
    for _ in range(40):
        image = bytearray(good)
        image[chance.randrange(len(good))] ^= 1 << chance.randrange(8)
        noticed += refused(tmp_path / "run.h5", bytes(image))
    assert noticed > 20


def test_a_claim_beyond_the_file_is_refused(copy: Path) -> None:
    """A shape that would need more memory than any file of this size can hold."""
    with h5py.File(copy, "r+") as file:
        file.create_dataset("quantum/x", shape=(10**9, 10**3), dtype="f8", chunks=(1000, 1000))
    (finding,) = check_run(copy)
    assert finding == "damaged HDF5 file: quantum/x claims 8000000000000 bytes, more than the file can hold"
