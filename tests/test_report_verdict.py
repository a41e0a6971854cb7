"""The verdict is a sentence whose numbers are those of the arrays, whatever the run has resolved.

Expected numbers are recomputed here from the dataset with numpy alone; the window of the verdict is written
out in `report_cases` from its definition: the light cone, one and a half spacings wider on either side,
without the four spacings next to each end.
"""

from __future__ import annotations

import re
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from tests.report_cases import SITES, no_magnetisation, nothing_resolved, numbers_in, page_of, window, written
from tnquench.conventions import Reals
from tnquench.dataset.reader import open_run
from tnquench.report.comparison import compare
from tnquench.report.figures import comparisons
from tnquench.report.question import settings_of, subject
from tnquench.report.verdict import headline, power_law
from tnquench.report.wording import duration, measured, number, percent, plain


def test_verdict_agrees_with_the_arrays(tmp_path: Path) -> None:
    run = open_run(written(tmp_path))
    budget, x, t = (
        run.budget["energy_density"],
        run.coordinates["bond"].values,
        run.coordinates["time"].values,
    )
    deviation: Reals = budget["euler_deviation"].values
    inside = window(run, "bond")
    worst = int(np.argmax(np.abs(deviation[-1]) * inside[-1]))
    resolved = (budget["euler_resolved"].values == 1) & inside
    sentence = headline(comparisons(run)[0])
    assert "Euler GHD misses the energy density" in sentence
    said = numbers_in(sentence.partition("; the deviation")[0])
    assert said[0] == pytest.approx(abs(deviation[-1, worst]), rel=0.02)  # two digits are shown
    assert said[1] == pytest.approx(float(budget["numerical"].values[-1, worst]), rel=0.35)  # one digit
    assert said[2] == t[-1]
    first = float(t[np.flatnonzero(resolved.any(axis=1))[0]])
    assert numbers_in(sentence.partition("resolved from t = ")[2])[0] == first
    outermost = float(np.abs(x[resolved[-1]]).max())
    assert numbers_in(sentence.partition("|x| ≤ ")[2])[0] == outermost
    share = resolved[-1].sum() / np.count_nonzero(np.abs(x) <= outermost)
    assert numbers_in(sentence.partition(": at ")[2])[0] == pytest.approx(100 * share, abs=0.51)
    late = t >= 0.3 * t[-1]
    norm = np.sqrt((deviation**2 * inside).sum(axis=1) / np.maximum(inside.sum(axis=1), 1))
    slope = np.polyfit(np.log(t[late]), np.log(norm[late]), 1)[0]
    assert "falls like" in sentence
    assert numbers_in(sentence.partition("p = ")[2])[0] == pytest.approx(-slope, abs=0.06)


def test_nothing_resolved_is_said_with_what_is_excluded(tmp_path: Path) -> None:
    folder = written(tmp_path, nothing_resolved, no_magnetisation)
    run, sentence = open_run(folder), page_of(folder).texts["verdict"]
    budget = run.budget["energy_density"]
    size = np.abs(budget["euler_deviation"].values) + 3.0 * budget["numerical"].values
    assert "No deviation is resolved" in sentence
    assert numbers_in(sentence.partition("larger than")[2])[0] == pytest.approx(
        size[window(run, "bond")].max(), rel=0.06
    )


def test_other_couplings_are_not_called_units(tmp_path: Path) -> None:
    def stronger(pieces: dict[str, Any]) -> None:
        config = pieces["provenance"]["config_toml"]
        pieces["provenance"]["config_toml"] = config.replace("sites =", "coupling = 2.0\nsites =")

    run = open_run(written(tmp_path, stronger))
    sentence = headline(comparisons(run)[0])
    assert "t = 10;" in sentence
    assert "J" not in sentence
    assert compare(run, "energy_density").unit == ""


def test_smooth_start_is_judged_where_the_deviation_is_largest(tmp_path: Path) -> None:
    def bump(pieces: dict[str, Any]) -> None:
        config = pieces["provenance"]["config_toml"]
        smooth = 'shape = "bump"\nbase = 1.0\nheight = 0.5\nwidth = 4.0'
        pieces["provenance"]["config_toml"] = re.sub(r'shape = "step"\nleft = .*\nright = .*', smooth, config)
        x = pieces["coordinates"]["bond"]
        pieces["groups"]["budget/energy_density"]["euler_deviation"][-1] = 0.1 * np.exp(-((x - 3.0) ** 2))

    sentence = headline(comparisons(open_run(written(tmp_path, bump)))[0])
    assert "misses the energy density by 0.10 J" in sentence
    assert "at x = 3 and t = 10/J" in sentence
    assert "joint" not in sentence


def test_field_step_is_about_the_magnetisation(tmp_path: Path) -> None:
    def field_step(pieces: dict[str, Any]) -> None:
        config = pieces["provenance"]["config_toml"]
        field = '[start.beta]\nshape = "uniform"\nvalue = 1.0\n[start.beta_field]\nshape = "step"'
        pieces["provenance"]["config_toml"] = config.replace('[start.beta]\nshape = "step"', field)

    run = open_run(written(tmp_path, field_step))
    sentence = headline(comparisons(run)[0], about=subject(settings_of(run)))
    deviation = run.budget["charge_density"]["euler_deviation"].values
    place = int(np.argmax(np.abs(deviation[-1]) * window(run, "site")[-1]))
    assert "misses the magnetisation by" in sentence
    assert numbers_in(sentence)[0] == pytest.approx(abs(deviation[-1, place]), rel=0.02)


def test_the_verdict_speaks_of_the_largest_resolved_deviation(tmp_path: Path) -> None:
    def blind_at_the_joint(pieces: dict[str, Any]) -> None:
        budget = pieces["groups"]["budget/energy_density"]
        budget["numerical"][:, SITES // 2 - 1] += 0.1
        budget["euler_resolved"][:, SITES // 2 - 1] = 0

    sentence = headline(comparisons(open_run(written(tmp_path, blind_at_the_joint)))[0])
    assert "Euler GHD misses the energy density by" in sentence
    assert "at the joint" not in sentence


def test_power_law_finds_a_known_exponent() -> None:
    times = np.linspace(0.0, 12.0, 25)
    values = -3.0 * np.divide(1.0, times, out=np.zeros(25), where=times > 0) ** 0.75
    law = power_law(times, values, np.ones(25, dtype=np.bool_))
    assert law is not None
    assert law.exponent == pytest.approx(0.75, abs=1e-12)
    assert law.error < 1e-12
    assert (law.first, law.last) == (4.0, 12.0)
    assert power_law(times, values, times > 11.0) is None


def test_power_law_error_is_the_standard_error_of_the_slope() -> None:
    rng = np.random.default_rng(1)
    times = np.linspace(1.0, 20.0, 40)
    slopes, errors = [], []
    for _ in range(400):
        law = power_law(
            times, times**-1.0 * np.exp(0.1 * rng.standard_normal(40)), np.ones(40, dtype=np.bool_)
        )
        assert law is not None
        slopes.append(law.exponent)
        errors.append(law.error)
    assert np.std(slopes) == pytest.approx(
        np.mean(errors), rel=0.12
    )  # 400 samples: the deviation is known to 4 %


@pytest.mark.parametrize(
    ("value", "said"),
    [
        (0.0, "0"),
        (0.0059, "5.9 × 10⁻³"),  # noqa: RUF001
        (-3.04e-5, "\N{MINUS SIGN}3.0 × 10⁻⁵"),  # noqa: RUF001
        (0.0999, "0.10"),
        (0.00996, "0.010"),
        (12.34, "12"),
        (2.5e7, "2.5 × 10⁷"),  # noqa: RUF001
        (float("nan"), "not a number"),
    ],
)
def test_numbers_are_written_as_in_print(value: float, said: str) -> None:
    assert number(value) == said


def test_small_words() -> None:
    assert [plain(1e-8), plain(-7.5), plain(10.0)] == ["10⁻⁸", "\N{MINUS SIGN}7.5", "10"]
    assert measured(0.9812, 0.0234) == "0.98 ± 0.02"
    assert [percent(1.0), percent(0.999), percent(0.001), percent(0.0)] == ["100%", "99%", "under 1%", "0%"]
    assert [duration(4.2), duration(200.0), duration(18_600.0)] == ["4.2 s", "3 min 20 s", "5 h 10 min"]


def test_power_law_admits_a_bent_curve() -> None:
    """A fall that levels off fits some line in the logarithms; the two halves of the fit betray it."""
    times = np.linspace(0.0, 12.0, 25)
    values = np.divide(1.0, np.minimum(times, 7.0), out=np.zeros(25), where=times > 0)
    law = power_law(times, values, np.ones(25, dtype=np.bool_))
    assert law is not None
    assert law.spread > 0.25
