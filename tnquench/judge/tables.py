"""The numbers of a judgement as tables of text, the same on a terminal and on the page."""

from __future__ import annotations

from tnquench.judge.judgement import Judgement, ObservableJudgement
from tnquench.judge.sentence import name_of, short
from tnquench.report.wording import DASH, capitalised, number, quantity

Rows = list[tuple[str, ...]]

VERDICTS = {True: "passed", False: "failed", None: "not judged"}


def summary_rows(judgement: Judgement) -> Rows:
    """Return one row an observable under a row of headings."""
    levels = _levels(judgement)
    head = (
        "Observable",
        "Points",
        "Left out",
        "Deviation, rms",
        "Largest",
        "Error, rms",
        "Chi-square",
        "Wrong",
    )
    rows: Rows = [(*head, *(f"{name_of(level)}, rms" for level in levels), "Verdict")]
    for each in judgement.observables:
        found = each.found
        measured = each.faced.numerical is not None
        rows.append(
            (
                capitalised(each.said),
                str(each.used),
                str(each.left_out),
                _in(each, found.rms),
                _in(each, found.largest),
                _in(each, found.error, digits=1) if measured else DASH,
                number(found.chi_square) if found.chi_square is not None else DASH,
                str(found.wrong_count) if measured else DASH,
                *(
                    _in(each, found.levels[level].level_rms) if level in found.levels else DASH
                    for level in levels
                ),
                VERDICTS[each.passed],
            )
        )
    return rows


def window_rows(judgement: Judgement, observable: ObservableJudgement) -> Rows:
    """Return one row a window of time of one observable under a row of headings."""
    levels = [level for level in _levels(judgement) if level in observable.found.levels]
    unit = judgement.units.symbol("1/energy")
    head = (
        f"Times ({unit})" if unit else "Times",
        "Points",
        "Deviation, rms",
        "Largest",
        "Error, rms",
        "Wrong",
    )
    rows: Rows = [(*head, *(f"{name_of(level)}, rms" for level in levels))]
    measured = observable.faced.numerical is not None
    rows += [
        (
            f"{short(window.start)} to {short(window.end)}",
            str(window.points),
            _in(observable, window.rms),
            _in(observable, window.largest),
            _in(observable, window.error, digits=1) if measured else DASH,
            str(window.wrong) if measured else DASH,
            *(_in(observable, window.levels[level]) if level in window.levels else DASH for level in levels),
        )
        for window in observable.found.windows
    ]
    return rows


def worst_rows(observable: ObservableJudgement) -> Rows:
    """Return the points where the candidate is most wrong, the worst first, under a row of headings."""
    rows: Rows = [("Time", "Place", "Candidate", "Chain", "Difference", "Error of it")]
    rows += [
        (
            short(point.time),
            short(point.position),
            _in(observable, point.value, digits=4),
            _in(observable, point.chain, digits=4),
            _in(observable, point.value - point.chain),
            _in(observable, point.error, digits=1),
        )
        for point in observable.found.worst
    ]
    return rows


def _levels(judgement: Judgement) -> list[str]:
    found = (level for each in judgement.observables for level in each.found.levels)
    return list(dict.fromkeys(found))


def _in(observable: ObservableJudgement, value: float, *, digits: int = 2) -> str:
    return quantity(value, observable.unit, digits=digits)
