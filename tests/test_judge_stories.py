"""Right and wrong candidates as their authors would bring them: who passes, who is caught."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest

from tests.command_line import call
from tests.judge_cases import (
    BARE_VELOCITY,
    EVERY,
    exact_free,
    exact_table,
    grid_columns,
    interacting_dataset,
    noisy_dataset,
    places_of,
    sampled,
    self_similar,
    simulated_free_run,
    table,
)
from tests.synthetic_run import synthetic_pieces, write_synthetic_run
from tnquench import judge
from tnquench.conventions import Reals
from tnquench.dataset.reader import Run, open_run
from tnquench.dataset.writer import write_run
from tnquench.judge.sentence import sentence

OBSERVABLES = ("energy_density", "energy_current", "charge_density", "charge_current")


@pytest.fixture(scope="module")
def free(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A real run at D = 0, where the exact answer is known."""
    return simulated_free_run(tmp_path_factory.mktemp("free"))


@pytest.fixture(scope="module")
def interacting(tmp_path_factory: pytest.TempPathFactory) -> Run:
    """D = 0.5: the real prediction, and a made-up chain at a plausible distance from it."""
    return open_run(interacting_dataset(tmp_path_factory.mktemp("interacting")))


def times_of(dataset: Path) -> Reals:
    return np.asarray(open_run(dataset).coordinates["time"].values)


def test_exact_chain_passes(free: Path, tmp_path: Path) -> None:
    candidate = tmp_path / "exact.csv"
    candidate.write_text(exact_table(times_of(free), *OBSERVABLES))
    answer = call("judge", candidate, "--against", free)
    assert answer.code == 0, answer.out
    assert answer.out.startswith("The candidate agrees with the chain within numerical error in ")
    assert answer.err == ""
    assert call("judge", candidate, "--against", free, "--allow", "1e-4").code == 0


def test_exact_chain_between_samples_passes(free: Path) -> None:
    """The reference is interpolated in time; its claimed error covers the exact values there."""
    times = times_of(free)[1:-1] + 0.37 * EVERY
    exact = exact_free(times)
    for name in ("energy_density", "energy_current"):
        judgement = judge(grid_columns(name, times, places_of(name, 16), exact[name]), free)
        assert judgement.passed, sentence(judgement)
        found = judgement[name]
        assert found.interpolated == found.used > 0
        covered = np.abs(found.faced.deviation) <= found.faced.error
        assert np.mean(covered) >= 0.95


def test_exact_chain_is_closer_than_euler(free: Path, tmp_path: Path) -> None:
    candidate = tmp_path / "exact.csv"
    candidate.write_text(exact_table(times_of(free), "energy_density"))
    answer = call("judge", candidate, "--against", free, "--allow", "euler", "--json")
    assert answer.code == 0
    level = json.loads(answer.out)["observables"]["energy_density"]["levels"]["euler"]
    assert level["rms_deviation"] > 10 * level["candidate_rms_deviation"]
    assert "closer to the chain than Euler GHD by a factor" in level["in_words"]


@pytest.mark.parametrize("later", [0.5 * EVERY, -0.5 * EVERY])
@pytest.mark.parametrize("allow", [(), ("--allow", "1e-3")])
def test_exact_chain_with_a_clock_wrong_by_half_a_sample_is_caught(
    free: Path, tmp_path: Path, later: float, allow: tuple[str, ...]
) -> None:
    candidate = tmp_path / "late.csv"
    candidate.write_text(exact_table(times_of(free)[1:], "energy_density", later=later))
    answer = call("judge", candidate, "--against", free, *allow)
    assert answer.code == 4
    assert answer.lines[0] == f"{candidate}: verdict negative"
    assert "energy density" in answer.lines[1]


def test_euler_prediction_on_points_of_its_own_passes(interacting: Run) -> None:
    """The dataset's own theory, on other times and places: as far from the chain as it is, no farther."""
    times = interacting.coordinates["time"].values[1:-1] + 0.2
    for name in OBSERVABLES[:2]:
        field = self_similar(interacting, name)
        judgement = judge(sampled(name, field, times, np.linspace(-11.7, 11.7, 60)), interacting, "euler")
        assert judgement.passed, sentence(judgement)
        assert "as far from the chain as Euler GHD" in sentence(judgement) or "indist" in sentence(judgement)


def test_euler_prediction_is_not_the_chain(interacting: Run) -> None:
    times, places = interacting.coordinates["time"].values[1:], interacting.coordinates["bond"].values
    field = self_similar(interacting, "energy_density")
    judgement = judge(sampled("energy_density", field, times, places), interacting)
    assert not judgement.passed
    assert judge(sampled("energy_density", field, times, places), interacting, 1e-2).passed


@pytest.mark.parametrize("allow", ["euler", "1e-3", ""])
@pytest.mark.parametrize("between", [False, True])
def test_bare_velocities_are_caught(interacting: Run, tmp_path: Path, allow: str, between: bool) -> None:
    """At D = 0.5 interactions dress velocities; a theory without that has too narrow a light cone."""
    dressed = interacting.hydrodynamics["euler"].attrs["light_cone_right"]
    assert dressed > 1.1 * BARE_VELOCITY
    field = self_similar(interacting, "energy_density", squeezed=dressed / BARE_VELOCITY)
    times, places = interacting.coordinates["time"].values[1:-1], interacting.coordinates["bond"].values
    if between:
        times, places = times + 0.2, np.linspace(-11.7, 11.7, 60)
    candidate = tmp_path / "bare.csv"
    candidate.write_text(table([sampled("energy_density", field, times, places)]))
    words = ("--allow", allow) if allow else ()
    answer = call("judge", candidate, "--against", interacting.path, *words)
    assert answer.code == 4
    assert answer.out.startswith("The candidate ")


def test_euler_prediction_with_a_clock_wrong_by_half_a_sample_is_caught(interacting: Run) -> None:
    field = self_similar(interacting, "energy_density", later=0.5 * EVERY)
    times, places = interacting.coordinates["time"].values[1:], interacting.coordinates["bond"].values
    judgement = judge(sampled("energy_density", field, times, places), interacting, "euler")
    assert not judgement.passed
    assert sentence(judgement).startswith(
        "The candidate is farther from the chain than Euler GHD: its energy"
    )


@pytest.mark.parametrize(("size", "passes"), [(1.0, True), (30.0, False)])
def test_second_dataset_is_judged_with_its_own_error(tmp_path: Path, size: float, passes: bool) -> None:
    reference = write_synthetic_run(tmp_path / "one")
    other = noisy_dataset(tmp_path / "two", size)
    answer = call("judge", other, "--against", reference)
    assert answer.code == (0 if passes else 4)
    assert "its own numerical error counts too" in answer.out
    assert call("judge", tmp_path / "two", "--against", tmp_path / "one").out.count("\n") > 10


def test_datasets_of_different_chains_are_told_apart(tmp_path: Path) -> None:
    reference = write_synthetic_run(tmp_path / "one")
    pieces = synthetic_pieces(sites=24)
    text = pieces["provenance"]["config_toml"].replace("anisotropy = 0.5", "anisotropy = 1.0")
    pieces["provenance"]["config_toml"] = text
    judgement = judge(write_run(tmp_path / "two", **pieces), reference)
    remarks = "\n".join(judgement.remarks)
    assert "differ in chain.anisotropy: 1 in the candidate, 0.5 in the reference" in remarks
    assert "differ in chain.sites: 24 in the candidate, 32 in the reference" in remarks


def test_prediction_alone_is_judged_as_a_theory(interacting: Run, tmp_path: Path) -> None:
    pieces = synthetic_pieces(sites=40, times=13)
    pieces["groups"] = {"hydrodynamics/euler": pieces["groups"]["hydrodynamics/euler"]}
    pieces["attributes"] = {"hydrodynamics/euler": pieces["attributes"]["hydrodynamics/euler"]}
    for name in OBSERVABLES:
        for suffix in ("", "_grid_error"):
            values = interacting.hydrodynamics["euler"][f"{name}{suffix}"].values
            pieces["groups"]["hydrodynamics/euler"][f"{name}{suffix}"] = values
    judgement = judge(write_run(tmp_path / "alone", **pieces), interacting, "euler")
    assert judgement.passed
    assert judgement.candidate.origin == "euler"
    assert all(each.found.levels["euler"].indistinguishable for each in judgement.observables)
    assert all("at t = 0" in " ".join(each.faced.left_out) for each in judgement.observables)
