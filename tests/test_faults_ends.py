"""Runs that are killed, asked to end, or limited, end later with the dataset of an undisturbed run.

A try of each fault; `python -m tests.benchmarks.faults` makes many, with companions, and prints a table.
"""

from __future__ import annotations

import os
from pathlib import Path
from random import Random
from signal import SIGINT, SIGTERM, SIGUSR1, Signals

import pytest

import tests.fault_scenarios as faults
from tests.fault_cases import Case, Started, differences, undisturbed
from tnquench.dataset.contents import Contents, StoredVariable


@pytest.fixture(scope="module")
def case(tmp_path_factory: pytest.TempPathFactory) -> Case:
    return undisturbed(tmp_path_factory.mktemp("undisturbed"), until=0.25, companions="none")


def test_killed_at_a_random_moment(case: Case, tmp_path: Path) -> None:
    """The moment is drawn in processor time, which varies: one beyond the run's end is drawn again."""
    for seed in range(6):
        try:
            faults.killed_at_a_random_moment(case, tmp_path / f"run{seed}", Random(seed))
        except faults.NotHit:
            continue
        return
    pytest.fail("no moment fell into a run")


def test_killed_while_writing_a_checkpoint(case: Case, tmp_path: Path) -> None:
    faults.killed_while_writing_a_checkpoint(case, tmp_path / "run", Random(11), calls=60)


def test_killed_while_writing_the_dataset(case: Case, tmp_path: Path) -> None:
    faults.killed_while_writing_the_dataset(case, tmp_path / "run", Random(3))


@pytest.mark.parametrize("number", [SIGTERM, SIGUSR1, SIGINT], ids=lambda number: number.name)
def test_asked_to_end(case: Case, tmp_path: Path, number: Signals) -> None:
    faults.asked_to_end(number, 1, case, tmp_path / "run", Random(7))


def test_interrupted_twice(case: Case, tmp_path: Path) -> None:
    faults.interrupted_twice(case, tmp_path / "run", Random(5))


def test_memory_limit(case: Case, tmp_path: Path) -> None:
    faults.memory_limit(case, tmp_path / "run", Random(1))


def test_time_limit(case: Case, tmp_path: Path) -> None:
    faults.time_limits(case, tmp_path / "run", Random(1), layer_seconds=0.2)


def test_the_comparison_finds_a_difference_in_the_last_bit(case: Case) -> None:
    """The verdict of all these tests rests on it."""
    dataset = case.dataset
    assert differences(dataset, dataset) == []
    path = "quantum/energy_density"
    variable = dataset.variables[path]
    values = variable.values.copy()
    values.flat[-1] = values.flat[-1] + abs(values.flat[-1]) * 2.0**-52
    changed = StoredVariable(variable.dims, values, variable.attributes)
    found = Contents({**dataset.variables, path: changed}, dataset.attributes)
    assert differences(found, dataset) == [path]
    provenance = {**dataset.attributes["provenance"], "title": "another", "wall_seconds": 0.0}
    found = Contents(dataset.variables, {**dataset.attributes, "provenance": provenance})
    assert differences(found, dataset) == ["provenance.title"]
    without = {name: each for name, each in dataset.variables.items() if name != path}
    assert differences(Contents(without, dataset.attributes), dataset) == [path]


def test_a_process_is_watched_from_outside() -> None:
    outcome = Started(["--version"]).end()
    assert outcome.out.startswith("tnquench ")
    assert outcome.code == 0
    assert outcome.peak > 20e6
    assert outcome.cpu < 20.0
    assert os.getpid() not in [process.pid for process in faults.members(1 << 30)]
