"""The numbers of a judgement against numbers worked out by hand, and what is said and written of them."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest

from tests.command_line import call
from tests.judge_cases import grid_columns, table
from tests.report_cases import Page
from tests.synthetic_run import RESOLVE_AT, synthetic_pieces, write_synthetic_run
from tnquench import judge
from tnquench.conventions import ERROR_SOURCES, Reals
from tnquench.dataset.reader import Run, open_run
from tnquench.dataset.writer import write_run
from tnquench.errors import InputError
from tnquench.judge.allowance import Allowance
from tnquench.judge.document import as_dict
from tnquench.judge.judgement import Judgement
from tnquench.judge.page import write_page
from tnquench.judge.sentence import sentence, standing
from tnquench.terminal.judging import judgement_text

THEORY = [ERROR_SOURCES.index(name) for name in ("prediction_grid", "strings", "initial_gradient")]


@pytest.fixture(scope="module")
def run(tmp_path_factory: pytest.TempPathFactory) -> Run:
    return open_run(write_synthetic_run(tmp_path_factory.mktemp("run")))


def chain_of(run: Run) -> tuple[Reals, Reals, Reals, Reals]:
    """Times, places, the energy density, and the error of the quantum side alone, summed here by hand."""
    budget = run.budget["energy_density"]
    error = np.delete(budget["error"].values, THEORY, axis=0).sum(axis=0)
    coordinates = run.coordinates
    values = run.quantum["energy_density"].values
    return coordinates["time"].values, coordinates["bond"].values, values, error


def off_by(run: Run, errors: float) -> Judgement:
    """Judge the chain's own values, off by so many numerical errors everywhere."""
    times, places, values, error = chain_of(run)
    return judge(grid_columns("energy_density", times, places, values + errors * error), run)


def test_norms_and_chi_square_by_hand(run: Run) -> None:
    times, places, _, error = chain_of(run)
    found = off_by(run, 2.0)["energy_density"]
    inner = error[
        np.ix_(times > 0, np.abs(places) <= 11.0)
    ]  # 15 is the last bond, four spacings are left out
    assert (found.used, found.interpolated) == (inner.size, 0)
    assert found.faced.left_out == {
        "within 4 spacings of an open end": 8 * times.size,
        "at t = 0, where only the start's own mismatch is seen": 23,
    }
    assert found.found.rms == pytest.approx(2.0 * np.sqrt(np.mean(inner**2)), rel=1e-9)
    assert found.found.largest == pytest.approx(2.0 * inner.max(), rel=1e-9)
    assert found.found.excess == pytest.approx(np.sqrt(np.mean(inner**2)), rel=1e-6)
    assert found.found.chi_square == pytest.approx(4.0, rel=1e-3)  # the smallest errors are rounding


@pytest.mark.parametrize(("errors", "wrong", "passes"), [(0.9, 0, True), (2.0, 0, False), (3.1, 460, False)])
def test_wrong_means_beyond_the_threshold(run: Run, errors: float, wrong: int, passes: bool) -> None:
    judgement = off_by(run, errors)
    found = judgement["energy_density"]
    assert found.resolve_at == RESOLVE_AT
    assert found.found.wrong_count == wrong
    assert judgement.passed is passes
    said = {
        0.9: "agrees with",
        2.0: "no single point is wrong",
        3.1: "at 460 of 460 points, first at t = 0.5/J",
    }
    assert said[errors] in sentence(judgement)


def test_one_wrong_place_is_found_and_named(run: Run) -> None:
    times, places, values, _ = chain_of(run)
    spoiled = values.copy()
    spoiled[14, 13] += 0.01
    judgement = judge(grid_columns("energy_density", times, places, spoiled), run)
    worst = judgement["energy_density"].found.worst
    assert [(point.time, point.position) for point in worst] == [(times[14], places[13])]
    assert judgement["energy_density"].first_wrong == times[14]
    windows = judgement["energy_density"].found.windows
    assert [window.wrong for window in windows] == [0, 0, 1, 0]
    assert [window.points for window in windows] == [115] * 4
    assert windows[2].largest == pytest.approx(0.01)
    assert windows[2].rms == pytest.approx(0.01 / np.sqrt(115))
    assert not judgement.passed, "chi-square tells that one point is hundreds of errors away"


def test_points_that_cannot_be_defended_are_left_out(run: Run) -> None:
    times, places, values, _ = chain_of(run)
    columns = grid_columns("energy_density", times, places, values)
    outside = {"time": [-1.0, 11.0, 5.0, 5.0], "x": [0.0, 0.0, 99.0, -14.5], "energy_density": [0.0] * 4}
    both = {name: np.concatenate([columns[name], outside[name]]) for name in columns}
    judgement = judge(both, run)
    assert judgement.passed
    left_out = judgement["energy_density"].faced.left_out
    assert left_out["outside the reference's times"] == 2
    assert left_out["beyond the reference's places"] == 1
    assert left_out["within 4 spacings of an open end"] == 169
    with pytest.raises(InputError, match="no point can be judged, 2 outside the reference's times; 1 beyond"):
        judge(outside, run)


def test_interpolation_is_refused_where_samples_are_too_coarse(tmp_path: Path) -> None:
    """A field that alternates from place to place says nothing of what lies between."""
    pieces = synthetic_pieces()
    places = pieces["coordinates"]["bond"]
    pieces["groups"]["quantum"]["energy_density"] += 0.05 * np.cos(np.pi * places)
    reference = write_run(tmp_path, **pieces)
    times = pieces["coordinates"]["time"][1:]
    between = grid_columns("energy_density", times, places[8:20] + 0.5, np.zeros((times.size, 12)))
    with pytest.raises(InputError, match="240 where the reference's samples are too coarse"):
        judge(between, reference)


def test_interpolation_error_is_a_source_of_its_own(run: Run) -> None:
    times, places, values, _ = chain_of(run)
    middle = 0.5 * (places[9:20] + places[10:21])
    straight = 0.5 * (values[1:, 9:20] + values[1:, 10:21])
    found = judge(grid_columns("energy_density", times[1:], middle, straight), run)["energy_density"]
    assert found.interpolated == found.used
    assert found.coarse > 0
    assert np.all(found.faced.added > 0)
    assert found.faced.numerical is not None
    np.testing.assert_array_equal(found.faced.error, found.faced.numerical + found.faced.added)


def test_levels_are_compared_on_the_same_points(run: Run) -> None:
    times, places, chain, _ = chain_of(run)
    euler = run.hydrodynamics["euler"]["energy_density"].values
    for share, said in (
        (0.0, "indistinguishable from Euler GHD"),
        (0.02, "as far from the chain as Euler GHD"),
        (0.5, "closer to the chain than Euler GHD by a factor 2.0"),
        (-1.0, "farther from the chain than Euler GHD by a factor 2.0"),
    ):
        mixed = euler + share * (chain - euler)
        judgement = judge(grid_columns("energy_density", times, places, mixed), run, "euler")
        comparison = judgement["energy_density"].found.levels["euler"]
        assert comparison.rms == pytest.approx(abs(1 - share) * comparison.level_rms, rel=1e-6)
        assert standing(comparison, "euler") == said
        assert judgement.passed is (share >= 0)
        assert judgement["energy_density"].found.windows[0].levels["euler"] > 0


def test_allowance() -> None:
    assert Allowance.parse(None) == Allowance()
    assert Allowance.parse(" Euler ") == Allowance(level="euler")
    assert Allowance.parse("1e-3") == Allowance.parse(1e-3) == Allowance(excess=1e-3)
    for bad in ("eulr", "-1", "nan", "inf", -1.0, ""):
        with pytest.raises(InputError, match="allowed: a number such as 1e-3, or euler or diffusive"):
            Allowance.parse(bad)


def test_allowed_number_is_the_root_mean_square_beyond_the_error(run: Run) -> None:
    times, places, values, error = chain_of(run)
    off = grid_columns("energy_density", times, places, values + error + 0.002)
    assert judge(off, run, 2.01e-3).passed
    assert not judge(off, run, 1.99e-3).passed
    assert "misses the allowed 0.00199" in sentence(judge(off, run, 1.99e-3))


def test_reference_without_companions_needs_an_allowance(tmp_path: Path) -> None:
    reference = write_synthetic_run(tmp_path, companions=False)
    run = open_run(reference)
    values = run.quantum["energy_density"].values
    columns = grid_columns(
        "energy_density", run.coordinates["time"].values, run.coordinates["bond"].values, values
    )
    with pytest.raises(InputError, match=r"error was not estimated.*--allow 1e-3"):
        judge(columns, reference)
    judgement = judge(columns, reference, 1e-6)
    assert judgement.passed
    assert judgement["energy_density"].found.chi_square is None
    assert any("not estimated" in remark for remark in judgement.remarks)


def test_unsuitable_references_are_refused(tmp_path: Path, run: Run) -> None:
    columns = {"time": [1.0], "x": [0.0], "energy_density": [0.0]}
    lonely = synthetic_pieces()
    lonely["groups"] = {"hydrodynamics/euler": lonely["groups"]["hydrodynamics/euler"]}
    lonely["attributes"] = {"hydrodynamics/euler": lonely["attributes"]["hydrodynamics/euler"]}
    for reference, allow, said in (
        (write_run(tmp_path / "alone", **lonely), None, "holds no quantum side to judge against"),
        (run, "diffusive", r"no diffusive prediction in it \(found: euler\)"),
        (tmp_path / "none", None, "no such dataset"),
    ):
        with pytest.raises(InputError, match=said):
            judge(columns, reference, allow)
    with pytest.raises(InputError, match="gives double_occupancy; the reference holds energy_density"):
        judge({"time": [1.0], "x": [0.0], "double_occupancy": [0.0]}, run)


def test_coarse_rounding_is_pointed_out(run: Run) -> None:
    times, places, values, _ = chain_of(run)
    for decimals, said in ((3, True), (12, False)):
        columns = grid_columns("energy_density", times, places, values.round(decimals))
        remarks = " ".join(judge(columns, run).remarks)
        assert (f"energy_density is given to {decimals} decimals" in remarks) is said


def test_observables_without_a_prediction_are_not_judged_by_it(tmp_path: Path) -> None:
    run = open_run(write_synthetic_run(tmp_path, model="hubbard", times=5))
    judgement = judge(run, run, "euler")
    assert judgement.passed
    verdicts = {each.name: each.passed for each in judgement.observables}
    assert verdicts.pop("double_occupancy") is None
    assert set(verdicts.values()) == {True}
    assert {each.name for each in judgement.conservation} == {
        "energy_density",
        "charge_density",
        "magnetisation",
    }


# --- what is said and written


def test_json_is_complete_and_finite(run: Run) -> None:
    numbers = json.loads(json.dumps(as_dict(off_by(run, 3.1)), allow_nan=False))
    assert numbers["verdict"] == "failed"
    observable = numbers["observables"]["energy_density"]
    assert observable["wrong_points"] == 460
    assert len(observable["worst"]) == 5
    assert set(observable["left_out"]) == set(off_by(run, 3.1)["energy_density"].faced.left_out)


def test_page_says_what_the_terminal_says_and_escapes_the_candidate(run: Run, tmp_path: Path) -> None:
    times, places, values, error = chain_of(run)
    evil = "<script>alert(1)</script>"
    candidate = tmp_path / "a&b<i>.csv"
    comment, header, *rows = table(
        [grid_columns("energy_density", times, places, values + 4 * error)]
    ).splitlines()
    candidate.write_text("\n".join([comment, f"{header},{evil}", *(f"{row},1" for row in rows)]))
    answer = call("judge", candidate, "--against", run.path, "--into", tmp_path / "out", "--html",
                  tmp_path / "page.html")  # fmt: skip
    assert answer.code == 4, answer.err
    markup = (tmp_path / "page.html").read_text(encoding="utf-8")
    page = Page(markup)
    assert evil not in markup
    assert "<i>" not in markup
    assert "&lt;script&gt;" in markup
    assert answer.out.splitlines()[0] in page.texts["verdict"]
    assert len(page.pictures) == 4
    assert all(picture.startswith("data:image/svg+xml;base64,") for picture in page.pictures)
    assert page.sections == ["question", "verdict", "summary", "observables", "conservation"]
    written = sorted(path.name for path in (tmp_path / "out").iterdir())
    assert written == ["figures", "judgement.html", "judgement.json"]
    assert len(list((tmp_path / "out" / "figures").iterdir())) == 8


def test_scattered_points_are_drawn_too(run: Run, tmp_path: Path) -> None:
    generator = np.random.default_rng(2)
    times, places = generator.uniform(1, 10, 300), generator.uniform(-9, 9, 300)
    judgement = judge({"time": times, "x": places, "energy_density": np.full(300, -0.2)}, run, 1.0)
    page = Page(write_page(judgement, tmp_path / "page.html").read_text(encoding="utf-8"))
    assert len(page.pictures) == 2


@pytest.mark.parametrize(("companions", "prediction", "allow"), [(False, True, 1e-3), (True, False, None)])
def test_what_a_dataset_lacks_is_not_missed(
    tmp_path: Path, companions: bool, prediction: bool, allow: float | None
) -> None:
    """The chain's own values, and one point far off, judged without error bars or without a prediction."""
    reference = open_run(write_synthetic_run(tmp_path, companions=companions, prediction=prediction, times=4))
    coordinates, values = reference.coordinates, reference.quantum["energy_density"].values
    own = grid_columns("energy_density", coordinates["time"].values, coordinates["bond"].values, values)
    point = {"time": [1.0], "x": [0.0], "energy_density": [0.3]}
    for candidate, passes in ((own, True), (point, False)):
        judgement = judge(candidate, reference, allow)
        assert judgement.passed is passes
        assert sentence(judgement) in judgement_text(judgement)
        assert Page(write_page(judgement, tmp_path / "page.html").read_text(encoding="utf-8")).pictures


def test_page_that_cannot_be_written_is_said(run: Run, tmp_path: Path) -> None:
    with pytest.raises(InputError, match="the judgement cannot be written"):
        write_page(off_by(run, 0.5), tmp_path / "missing" / "page.html")
