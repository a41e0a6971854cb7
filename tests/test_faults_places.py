"""Runs on full, read-only and vanishing disks, with damaged files, rivals, jumping clocks and faulty memory.

A try of each fault; `python -m tests.benchmarks.faults` makes many, with companions, and prints a table.
"""

from __future__ import annotations

from pathlib import Path
from random import Random

import pytest

import tests.fault_places as places
import tests.fault_scenarios as faults
from tests.fault_cases import Case, undisturbed


@pytest.fixture(scope="module")
def case(tmp_path_factory: pytest.TempPathFactory) -> Case:
    return undisturbed(tmp_path_factory.mktemp("undisturbed"), until=0.25, companions="none")


SCENARIOS = {
    "file longer than allowed": places.file_too_long,
    "folder gone meanwhile": places.vanished_folder,
    "file in the place of the folder": places.file_in_the_way,
    "checkpoint damaged": places.damaged_checkpoint,
    "two runs in one folder": places.two_runs_in_one_folder,
    "clock jumps": places.clock_jumps,
    "state is not numbers": places.numbers_that_are_none,
    "norm drifts": places.norm_drift,
}


@pytest.mark.parametrize("fault", SCENARIOS)
def test_run_comes_through(case: Case, tmp_path: Path, fault: str) -> None:
    comes_through(SCENARIOS[fault], case, tmp_path)


DISKS = {"disk full": places.disk_full, "disk read-only meanwhile": places.read_only_meanwhile}


@pytest.mark.parametrize("fault", DISKS)
def test_run_comes_through_on_a_small_disk(case: Case, tmp_path: Path, fault: str) -> None:
    try:
        comes_through(DISKS[fault], case, tmp_path)
    except PermissionError:
        pytest.skip("only root may mount a small disk; a limit on the length of files is tried above")


def comes_through(scenario: faults.Scenario, case: Case, folder: Path) -> None:
    """Carry out one try that hits the run."""
    moments = Random(1)
    for chance in range(10):
        try:
            scenario(case, folder / str(chance), moments)
        except faults.NotHit:
            continue
        return
    pytest.fail("the fault came too late ten times")
