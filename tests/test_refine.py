"""A refined dataset is that of a fresh run at the tighter weight, judged by the runs that were there."""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path

import numpy as np
import pytest

from tests.command_line import call, config_file
from tests.oracles.exact_chain import exact_evolution
from tests.synthetic_run import write_synthetic_run
from tnquench import open_run, refine, run
from tnquench.budget.companions import COARSE, LOOSE, SHORT
from tnquench.conventions import ERROR_SOURCES
from tnquench.dataset.integrity import check_run
from tnquench.dataset.reader import Run

WEIGHT = 1e-9


@pytest.fixture(scope="module")
def patched() -> Iterator[pytest.MonkeyPatch]:
    with pytest.MonkeyPatch.context() as patch:
        for module in (run, refine):
            patch.setattr(module, "write_report", lambda _folder: None)  # seconds, and not in question
        yield patch


@pytest.fixture(scope="module")
def first(tmp_path_factory: pytest.TempPathFactory, patched: pytest.MonkeyPatch) -> Path:
    """A run of 8 sites up to t = 1.5 at weight 1e-9, whose bonds outgrow their floor of 32."""
    assert patched is not None
    folder = tmp_path_factory.mktemp("first")
    config = config_file(folder, until=1.5, discarded_weight=WEIGHT)
    return run.run(config, into=folder / "results")


@pytest.fixture(scope="module")
def refined(first: Path, tmp_path_factory: pytest.TempPathFactory) -> tuple[Run, Run]:
    """The run before and after it was refined to 1e-10."""
    folder = tmp_path_factory.mktemp("refined")
    (folder / "run.h5").write_bytes((first / "run.h5").read_bytes())
    before = open_run(folder)
    assert refine.refine(folder / "run.h5") == folder
    assert check_run(folder) == []
    return before, open_run(folder)


def test_quantum_side_is_that_of_a_fresh_run_bit_for_bit(
    refined: tuple[Run, Run], tmp_path: Path, patched: pytest.MonkeyPatch
) -> None:
    assert patched is not None
    fresh = open_run(
        run.run(config_file(tmp_path, until=1.5, discarded_weight=1e-10), into=tmp_path / "fresh")
    )
    _, after = refined
    assert set(after.quantum) == set(fresh.quantum)
    for name in fresh.quantum:
        np.testing.assert_array_equal(after.quantum[name], fresh.quantum[name], err_msg=str(name))
    for level, theory in fresh.hydrodynamics.items():
        for name in theory:
            np.testing.assert_array_equal(after.hydrodynamics[level][name], theory[name])
    for name in ("bound", "layer_bound", "light_cone_bound"):
        np.testing.assert_array_equal(
            after.budget["energy_density"][name], fresh.budget["energy_density"][name]
        )
    assert after.provenance["config_toml"] == fresh.provenance["config_toml"]
    assert after.provenance["main_run"]["discarded_weight"] == 1e-10


def test_old_runs_become_companions_named_by_their_weight(refined: tuple[Run, Run]) -> None:
    before, after = refined
    assert sorted(after.companions) == sorted(["weight_10", "weight_300", COARSE, SHORT])
    weights = {name: group.attrs["discarded_weight"] for name, group in after.companions.items()}
    expected = {"weight_10": 1e-9, "weight_300": 3e-8, COARSE: 3e-8, SHORT: 3e-8}
    assert weights == pytest.approx(expected)
    pairs = {name: before.companions[name] for name in (COARSE, SHORT)} | {
        "weight_10": before.quantum,
        "weight_300": before.companions[LOOSE],
    }
    for name, group in pairs.items():
        for field in ("energy_density", "energy_current", "discarded_weight"):
            np.testing.assert_array_equal(after.companions[name][field], group[field])
    assert [event["kind"] for event in after.provenance["events"]] == ["refined"]
    assert after.provenance["wall_seconds"] > before.provenance["wall_seconds"]


def test_refined_error_is_smaller_and_still_covers(refined: tuple[Run, Run]) -> None:
    """Against exact diagonalisation: 95 % of all points within the claim that leaves out the open ends."""
    before, after = refined
    bonds = np.arange(7) - 3.0
    beta = np.where(bonds < 0, 0.5, np.where(bonds > 0, 2.0, 1.25))
    times = after.quantum["time"].values
    exact = exact_evolution(
        sites=8, anisotropy=0.5, beta=beta, beta_field=np.zeros(8), times=times, entanglement=False
    )
    covered = []
    for name in ("energy_density", "energy_current"):
        errors = [found.budget[name]["error"].values for found in (before, after)]
        truncation = [error[ERROR_SOURCES.index("truncation"), 1:].mean() for error in errors]
        assert 0.0 < truncation[1] < 0.9 * truncation[0], name
        claim = after.budget[name]["numerical"].values - errors[1][ERROR_SOURCES.index("length")]
        covered.append(np.abs(after.quantum[name].values - exact[name]) <= claim)
    assert np.mean(np.concatenate([each.ravel() for each in covered])) >= 0.95


def test_refined_again_with_a_smaller_step(refined: tuple[Run, Run], tmp_path: Path) -> None:
    """The step's error is carried on from the companions by the order of the scheme; the pairs stay pairs.

    What the cuts do in the pair is told from the new main run, whose own cuts do a little less.
    """
    _, once = refined
    (tmp_path / "run.h5").write_bytes(once.path.read_bytes())
    step = once.provenance["main_run"]["time_step"]
    refine.refine(tmp_path, weight=2e-11, time_step=0.5 * step)
    twice = open_run(tmp_path)
    assert sorted(twice.companions) == sorted(["weight_5", "weight_50", "weight_1500", COARSE, SHORT])
    row = ERROR_SOURCES.index("time_step")
    old, new = (found.budget["energy_density"]["error"].values[row] for found in (once, twice))
    np.testing.assert_allclose(new, old / 16.0, rtol=1e-2)
    assert [event["kind"] for event in twice.provenance["events"]] == ["refined", "refined"]
    assert check_run(tmp_path) == []


@pytest.mark.parametrize(
    ("options", "problem"),
    [
        (("--weight", "5e-10"), "--weight 5e-10: must be more than 0 and at most a third of the run's 1e-09"),
        (("--weight", "0"), "--weight 0: must be more than 0"),
        (("--step", "0.4"), "--step 0.4: must be more than 0 and at most the run's 0.167"),
    ],
)
def test_what_refines_nothing_is_refused(first: Path, options: tuple[str, str], problem: str) -> None:
    before = (first / "run.h5").read_bytes()
    answer = call("refine", first, *options)
    assert (answer.code, answer.out) == (2, "")
    assert problem in answer.err
    assert (first / "run.h5").read_bytes() == before


def test_dataset_without_a_main_run_is_refused(tmp_path: Path) -> None:
    write_synthetic_run(tmp_path, sites=8, times=4)
    assert "holds no main run to refine" in call("refine", tmp_path).err
    assert call("refine", tmp_path / "nowhere").code == 2


def test_refine_prints_the_folder_alone(first: Path, tmp_path: Path) -> None:
    (tmp_path / "run.h5").write_bytes((first / "run.h5").read_bytes())
    answer = call("refine", tmp_path, "--weight", "1e-10")
    assert (answer.code, answer.out) == (0, f"{tmp_path}\n"), answer.err
    assert any(line.startswith("main run: 8 sites") for line in answer.lines)
