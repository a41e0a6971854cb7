"""The folders that are the state of a sweep, and its index."""

from __future__ import annotations

import csv
import os
from pathlib import Path

import pytest

from tests.sweep_cases import Rehearsal, four_points, write_dataset
from tnquench.cluster.status import standing
from tnquench.config.points import load_sweep
from tnquench.dataset.reader import open_run


def rehearse(folder: Path, plan: dict[str, list[dict[str, object]]], **options: object) -> Rehearsal:
    return Rehearsal(folder, four_points(folder), plan, **{"jobs": 2, "threads": 1, **options})


def test_a_run_without_dataset_is_no_success(tmp_path):
    stage = rehearse(tmp_path, {})
    name = stage.names[0]
    (stage.home / "datasets" / name / "run.h5").unlink()
    assert stage.run()[name] == "failed", "the stand-in cannot copy what is not there"
    folder = stage.sweep.folder / name
    (folder / "log.txt").write_text("== 2026-01-01 00:00:00Z ends: exit code 0 (done), 1.0 s\n")
    stands = standing(stage.sweep.points[0], folder, known=None, queued=False)
    assert (stands.state, stands.detail) == ("failed", "ended as done but left no run.h5")


def test_the_run_of_another_config_is_refused(tmp_path):
    stage = rehearse(tmp_path, {})
    first, second = stage.sweep.points[:2]
    write_dataset(stage.sweep.folder / first.name, second)
    (stands, *_) = stage.sweep.standings()
    assert stands.state == "failed"
    assert stands.detail == ("run.h5 is of another config: chain.anisotropy: 0.5 now, 0.3 in the folder")
    assert stage.run()[first.name] == "failed"
    assert not stage.tries(first.name), "nothing runs where another run's results are"


def test_a_longer_run_goes_on(tmp_path):
    short = load_sweep(
        four_points(tmp_path, evolution={"until": 0.5, "every": 0.5, "discarded_weight": 1e-8})
    )
    stage = rehearse(tmp_path, {})
    for point in short.points:
        write_dataset(stage.sweep.folder / point.name, point)
    assert set(stage.states().values()) == {"waiting"}
    assert set(stage.run().values()) == {"done"}
    longer = Rehearsal(tmp_path / "b", tmp_path / "small.toml", {})
    longer.sweep = type(longer.sweep)(short.points, stage.sweep.folder, stage.sweep.cluster)
    (stands, *_) = longer.sweep.standings()
    assert "evolution.until: 0.5 now, but the folder's run goes to 1.0" in stands.detail


def test_a_damaged_dataset_is_no_result(tmp_path):
    stage = rehearse(tmp_path, {})
    stage.run()
    file = stage.sweep.folder / stage.names[0] / "run.h5"
    image = bytearray(file.read_bytes())
    image[len(image) // 2] ^= 0xFF
    file.write_bytes(image)
    (stands, *others) = stage.sweep.standings()
    assert (stands.state, {each.state for each in others}) == ("failed", {"done"})
    assert stands.detail.startswith("run.h5: damaged file")
    assert set(stage.run(retry=True).values()) == {"done"}


def test_the_index_can_be_read_and_spares_reading_datasets(tmp_path, monkeypatch):
    stage = rehearse(tmp_path, {})
    stage.run()
    with (stage.sweep.folder / "index.csv").open() as stream:
        rows = list(csv.DictReader(stream))
    assert [row["point"] for row in rows] == stage.names
    assert [float(row["start.beta.right"]) for row in rows] == [1.0, 1.0, 1.5, 1.5]
    assert {row["state"] for row in rows} == {"done"}
    assert {float(row["wall_seconds"]) for row in rows} == {12.5}
    assert {row["largest_numerical_error"] for row in rows} == {""}, "no companions, no claim"

    def refuse(*_: object) -> None:
        message = "a dataset was read"
        raise AssertionError(message)

    monkeypatch.setattr("tnquench.cluster.status.open_run", refuse)
    assert [stands.numbers["wall_seconds"] for stands in stage.sweep.standings()] == [12.5] * 4
    os.utime(stage.sweep.folder / stage.names[0] / "run.h5", (0, 0))
    with pytest.raises(AssertionError, match="a dataset was read"):
        stage.sweep.standings()


def test_the_index_has_the_numbers_of_the_dataset(tmp_path):
    (point, *_) = load_sweep(four_points(tmp_path)).points
    write_dataset(tmp_path / "p", point, whole=True)
    (tmp_path / "p" / "report.html").touch()
    numbers = standing(point, tmp_path / "p", known=None, queued=False).numbers
    budget = open_run(tmp_path / "p").budget
    assert numbers["largest_numerical_error"] == max(float(each.numerical.max()) for each in budget.values())
    assert numbers["first_resolved_time"] == min(
        each.attrs["first_resolved_time"] for each in budget.values()
    )


def test_an_index_of_rubbish_is_no_harm(tmp_path):
    stage = rehearse(tmp_path, {})
    stage.run()
    for text in ("", "point,state\n\0", f"point,state,modified\n{stage.names[0]},done,1\n", "\xff\xfe", '"'):
        (stage.sweep.folder / "index.csv").write_text(text)
        assert stage.states() == dict.fromkeys(stage.names, "done")
