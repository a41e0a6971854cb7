"""A dataset holds the observables of its model, says which, and a lack of one is noticed."""

from __future__ import annotations

import shutil
from pathlib import Path

import h5py
import pytest

from tests.synthetic_run import write_synthetic_run
from tnquench.dataset.integrity import check_run
from tnquench.dataset.reader import open_run

SITES, TIMES = 8, 5

OF_MODELS = {
    "ising": {"energy_density", "energy_current", "transverse_magnetisation"},
    "hubbard": {
        *("energy_density", "energy_current", "charge_density", "charge_current"),
        *("magnetisation", "spin_current", "double_occupancy"),
    },
}


@pytest.mark.parametrize("model", OF_MODELS)
@pytest.mark.parametrize("prediction", [True, False])
def test_a_run_holds_the_observables_of_its_model(tmp_path: Path, model: str, prediction: bool) -> None:
    path = write_synthetic_run(tmp_path, sites=SITES, times=TIMES, model=model, prediction=prediction)
    assert check_run(path) == []
    run, names = open_run(path), OF_MODELS[model]
    assert set(run.attributes["observables"].split()) == names
    assert set(run.budget) == names
    assert names <= set(run.quantum)
    assert ("total_charge" in run.quantum) == ("charge_density" in names)
    assert ("total_magnetisation" in run.quantum) == ("magnetisation" in names)
    if prediction:
        predicted = names - {"transverse_magnetisation", "double_occupancy"}
        assert predicted <= set(run.hydrodynamics["euler"])
        assert {name for name in names if "euler_deviation" in run.budget[name]} == predicted


LACKS = {
    "observable": ("quantum/magnetisation", "missing variable quantum/magnetisation"),
    "total": ("quantum/total_magnetisation", "missing variable quantum/total_magnetisation"),
    "budget": ("budget/double_occupancy", "missing group budget/double_occupancy"),
    "deviation": (
        "budget/spin_current/euler_deviation",
        "missing variable budget/spin_current/euler_deviation",
    ),
    "prediction": (
        "hydrodynamics/euler/spin_current",
        "missing variable hydrodynamics/euler/spin_current",
    ),
    "error": (
        "hydrodynamics/euler/spin_current_grid_error",
        "missing variable hydrodynamics/euler/spin_current_grid_error",
    ),
    "companion": (
        "companions/weight_10/double_occupancy",
        "missing variable companions/weight_10/double_occupancy",
    ),
}


@pytest.fixture(scope="module")
def hubbard(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("hubbard")
    return write_synthetic_run(folder, sites=SITES, times=TIMES, model="hubbard")


@pytest.mark.parametrize("lack", LACKS)
def test_what_a_model_has_must_be_there(hubbard: Path, tmp_path: Path, lack: str) -> None:
    path, expected = LACKS[lack]
    target = Path(shutil.copy(hubbard, tmp_path / "run.h5"))
    with h5py.File(target, "r+") as file:
        del file[path]
    assert expected in check_run(target)


def test_the_list_of_observables_is_checked(hubbard: Path, tmp_path: Path) -> None:
    target = Path(shutil.copy(hubbard, tmp_path / "run.h5"))
    for listed, expected in (
        ("energy_density energy_current", "observable spin_current is not in the root's list"),
        ("energy_density pressure", "unknown observables in the root's list: pressure"),
        (None, "missing attribute observables of the root"),
    ):
        with h5py.File(target, "r+") as file:
            if listed is None:
                del file.attrs["observables"]
            else:
                file.attrs["observables"] = listed
        assert expected in check_run(target)


def test_a_file_of_the_first_format_is_still_read(tmp_path: Path) -> None:
    """It said nothing of its observables: they are those of the XXZ chain. Only the digest is another."""
    target = write_synthetic_run(tmp_path, sites=SITES, times=TIMES)
    with h5py.File(target, "r+") as file:
        del file.attrs["observables"]
        file["provenance"].attrs["format_version"] = 1
    assert [finding.partition(":")[0] for finding in check_run(target)] == ["altered since it was written"]
    assert "charge_current" in open_run(target, verify=False).quantum
