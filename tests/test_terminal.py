"""Progress as it is shown, the time that is left, and numbers with units."""

from __future__ import annotations

import io
import re
import time

import numpy as np
import pytest

from tests.config_cases import CONFIGS
from tnquench.assemble import build_quench
from tnquench.config.load import load_config
from tnquench.observables.quench import Progress, Quench
from tnquench.terminal import display
from tnquench.terminal.display import watching
from tnquench.terminal.pace import MOST_ENTRIES, Pace
from tnquench.terminal.table import aligned, with_digits
from tnquench.terminal.units import duration, plain, size

UNTIL = 10.0


def layers(count: int, *, until: float = UNTIL) -> list[Progress]:
    """Half layers of a made-up run: one bond of dimension (3 + 0.5 t)^3, costs (80^3 + cube) nanoseconds."""
    times = until * np.arange(1, count + 1) / count
    bonds = np.round((3.0 + 0.5 * times) ** 3).astype(np.int64)
    seconds = 1e-9 * (80.0**3 + bonds.astype(float) ** 3)
    rows = zip(times.tolist(), bonds, seconds.tolist(), strict=True)
    return [Progress(time, np.array([bond]), cost) for time, bond, cost in rows]


def paced(progress: list[Progress], *, until: float = UNTIL, bond_ceiling: int = 10**6) -> Pace:
    pace = Pace(until, bond_ceiling)
    for layer in progress:
        pace.record(layer)
    return pace


@pytest.mark.parametrize("share", [0.3, 0.5, 0.7, 0.9])
def test_time_left_follows_the_growth_of_the_cost(share: float) -> None:
    """Where the growth law holds the rest is foretold closely; the present cost alone falls short of it."""
    run = layers(1000)
    reached = round(share * len(run))
    rest = sum(layer.layer_seconds for layer in run[reached:])
    pace = paced(run[:reached])
    assert pace.seconds_left() == pytest.approx(rest, rel=0.12)
    if share <= 0.7:
        assert pace.seconds_a_time() * UNTIL * (1.0 - share) < 0.75 * rest


def test_time_left_does_not_grow_past_the_ceiling() -> None:
    run = layers(1000)[:500]
    ceiling = int(run[-1].bond_dimensions.max())
    pace = paced(run, bond_ceiling=ceiling)
    assert pace.seconds_left() == pytest.approx(1e-9 * (80.0**3 + ceiling**3) * 500, rel=0.15)


def test_nothing_is_foretold_from_too_little() -> None:
    run = layers(1000)
    assert paced(run[:7]).seconds_left() is None
    assert paced(run[:30]).seconds_left() is None
    assert paced(run).seconds_left() == pytest.approx(0.0, abs=1e-9)


def test_merged_entries_keep_the_time_spent() -> None:
    run = layers(5 * MOST_ENTRIES + 3)
    pace = paced(run)
    assert len(pace.times) <= MOST_ENTRIES
    assert pace.times[-1] == UNTIL
    assert sum(pace.seconds) == pytest.approx(sum(layer.layer_seconds for layer in run), rel=1e-12)
    assert pace.seconds_a_time() == pytest.approx(paced(run[-MOST_ENTRIES:]).seconds_a_time(), rel=0.1)


# --- the display


class Terminal(io.StringIO):
    """A stream that says it is a terminal."""

    def isatty(self) -> bool:
        return True


@pytest.fixture
def quench() -> Quench:
    config = load_config(CONFIGS / "demo.toml")
    return build_quench(config, weight=1e-8, time_step=0.25)


def show(stream: io.StringIO, quench: Quench, *, pause: float = 0.0, interrupt: bool = False) -> str:
    """Show a run of three stages, the first with a pause at its end; return what was written."""
    with watching(stream) as watch:
        watch.stage("main run", quench)
        for layer in layers(100, until=quench.every * quench.samples):
            watch.progress(layer)
        time.sleep(pause)
        if interrupt:
            raise KeyboardInterrupt
        watch.stage("companion weight_10", None)
        watch.stage("prediction", None)
    return stream.getvalue()


def test_log_has_one_line_a_stage(quench: Quench) -> None:
    plan = "main run: 32 sites, t up to 5, discarded weight 1e-8, step 0.25"
    assert show(io.StringIO(), quench).splitlines() == [plan, "companion weight_10", "prediction"]


def test_log_says_how_a_long_stage_goes(quench: Quench, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(display, "LINE_INTERVAL", 0.0)
    lines = show(io.StringIO(), quench).splitlines()[1:-2]
    assert [line.split(",")[0] for line in lines] == [f"main run: t {t}.00 of 5" for t in (1, 2, 3, 4, 5)]
    standing = r"main run: t 3.00 of 5, bond 91, [\d.]+ m?s a step, [\d.]+ m?s left"
    assert re.fullmatch(standing, lines[2]), lines[2]


def test_log_waits_between_two_lines(quench: Quench, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(display, "LINE_INTERVAL", 3600.0)
    assert len(show(io.StringIO(), quench).splitlines()) == 3


def test_terminal_gets_a_bar_and_keeps_a_line_a_stage(
    quench: Quench, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setenv("TERM", "xterm")
    monkeypatch.setenv("COLUMNS", "80")
    monkeypatch.setattr(display, "BAR_INTERVAL", 0.0)
    shown = re.sub(r"\x1b\[[0-9;?]*[A-Za-z]", "", show(Terminal(), quench, pause=0.6))
    lines = [line.strip() for line in re.split(r"[\r\n]+", shown)]
    assert any(re.fullmatch(r"main run [━╸╺]+ t 5.00 of 5, bond 166, .*", line) for line in lines), lines
    assert any(re.fullmatch(r"main run: [\d.]+ s, bond 166", line) for line in lines)
    assert "companion weight_10: done" in lines
    assert "prediction: done" in lines
    assert max(map(len, lines)) <= 80


def test_terminal_is_left_in_order_when_a_run_is_interrupted(
    quench: Quench, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setenv("TERM", "xterm")
    stream = Terminal()
    with pytest.raises(KeyboardInterrupt):
        show(stream, quench, interrupt=True)
    hidden, shown = (stream.getvalue().rindex(f"\x1b[?25{switch}") for switch in "lh")
    assert shown > hidden, "the cursor stays hidden"


def test_dumb_terminal_gets_lines(quench: Quench, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("TERM", "dumb")
    assert show(Terminal(), quench).splitlines()[-1] == "prediction"


# --- numbers with units


@pytest.mark.parametrize(
    ("seconds", "text"),
    [
        (0.0, "0 ms"),
        (0.0042, "4.2 ms"),
        (0.0994, "99 ms"),
        (0.0996, "0.1 s"),
        (0.42, "0.42 s"),
        (9.94, "9.9 s"),
        (9.96, "10 s"),
        (59.4, "59 s"),
        (59.6, "1 min"),
        (200.0, "3 min 20 s"),
        (3599.4, "59 min 59 s"),
        (3599.6, "1 h"),
        (7500.0, "2 h 5 min"),
        (86399.0, "1 d"),
        (273600.0, "3 d 4 h"),
    ],
)
def test_duration(seconds: float, text: str) -> None:
    assert duration(seconds) == text


@pytest.mark.parametrize(
    ("count", "text"),
    [(12, "12 B"), (999.4, "999 B"), (999.6, "1 kB"), (350e3, "350 kB"), (2.1e9, "2.1 GB"), (5e14, "500 TB")],
)
def test_size(count: float, text: str) -> None:
    assert size(count) == text


@pytest.mark.parametrize(("value", "text"), [(10.0, "10"), (0.5, "0.5"), (1e-8, "1e-8"), (1 / 6, "0.1667")])
def test_plain(value: float, text: str) -> None:
    assert plain(value) == text


@pytest.mark.parametrize(
    ("value", "error", "text"),
    [(0.123456, 2e-3, " 0.1235"), (-1.5, 0.3, "-1.50"), (2.0, 0.0, " 2"), (1 / 3, 5e-9, " 0.3333333333")],
)
def test_value_with_the_digits_that_its_error_leaves(value: float, error: float, text: str) -> None:
    assert with_digits(value, error) == text


def test_columns_are_aligned() -> None:
    assert aligned([("a", "bb"), ("ccc", "d")]) == "a    bb\nccc  d"
