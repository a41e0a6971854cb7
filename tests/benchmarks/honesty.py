"""Whether claimed errors are honest: coverage and sharpness on a fixed family of exactly solved cases.

Run: OMP_NUM_THREADS=1 python -m tests.benchmarks.honesty [--into FOLDER] [--only NAME ...] [--fresh]

Simulates what FOLDER (a temporary one if not given) does not hold yet, ten minutes of one core in all, and
prints the tables of DEVELOPERS.md; --details adds every case and observable. With everything at hand it takes
seconds, so that a change of an estimator can be judged at once; --fresh simulates again, for a change of the
engine or of how starts are prepared and judged.
"""

from __future__ import annotations

import argparse
import tempfile
from collections.abc import Iterable, Sequence
from pathlib import Path

from threadpoolctl import threadpool_limits

from tests.benchmarks.honesty_prediction import by_model, equilibrium_scores, prediction_scores
from tests.benchmarks.honesty_runs import Library
from tests.benchmarks.honesty_scores import Score, Summary, pooled_coverage, quantum_scores, summary
from tests.honesty_cases import CASES, HOLD_OUT, START_CASES, Case

#: Sources of the quantum side, as rows of the table.
SOURCES = {
    "total": "all of the quantum side, same chain",
    "infinite": "all with the ends, free chains against longer ones",
    "time_step": "time step",
    "cuts_and_start": "truncation and start",
    "start": "start at t = 0",
    "length": "ends",
}


def main() -> None:
    """Run the study and print its tables."""
    parser = argparse.ArgumentParser(prog="python -m tests.benchmarks.honesty")
    parser.add_argument("--into", type=Path, help="folder that keeps the simulated cases")
    parser.add_argument("--only", nargs="*", default=[], help="names of cases; all of them if not given")
    parser.add_argument("--fresh", action="store_true", help="simulate again what is kept")
    parser.add_argument("--details", action="store_true", help="print every case and observable")
    asked = parser.parse_args()
    folder = asked.into or Path(tempfile.mkdtemp(prefix="honesty-"))
    chosen = [case for case in (*CASES, *START_CASES) if not asked.only or case.name in asked.only]
    with threadpool_limits(1):
        scores = study(Library(folder), chosen, fresh=asked.fresh)
        theory = [] if asked.only else [*prediction_scores(), *by_model(equilibrium_scores())]
    if asked.details:
        print(details([*scores, *theory]))
    print(tables(scores, theory))
    print(f"\nkept in {folder}")


def study(library: Library, cases: Sequence[Case], *, fresh: bool = False) -> list[Score]:
    """Score every case."""
    found: list[Score] = []
    for case in cases:
        solved = library.get(case, fresh=fresh)
        print(f"# {case.name}: {library.seconds(case):.0f} s", flush=True)
        found += quantum_scores(solved)
    return found


def tables(scores: Sequence[Score], theory: Sequence[Score]) -> str:
    """The tables of DEVELOPERS.md: by source, by kind of case, hold-out apart."""
    total = [score for score in scores if score.source == "total"]
    lines = [HEAD]
    for source, words in {**SOURCES, "evolved_start": "start, loose on purpose, evolved"}.items():
        lines += row(words, [score for score in scores if score.source == source])
    for source, words in (("prediction", "prediction, free modes"), ("equilibrium", "equilibrium values")):
        lines += row(words, [score for score in theory if score.source == source])
    lines += ["", HEAD.replace("claimed error", "all of the quantum side")]
    for kind in {score.kind: None for score in total}:
        lines += row(kind, [score for score in total if score.kind == kind])
    lines += row("cases looked at", [score for score in total if score.case not in HOLD_OUT])
    lines += row("hold-out", [score for score in total if score.case in HOLD_OUT])
    return "\n".join(lines)


HEAD = (
    "| claimed error | cases | points | covered | worst case | claimed / true: median, all points, widest |\n"
    "|---|---|---|---|---|---|"
)


def row(words: str, scores: Sequence[Score]) -> list[str]:
    """One row of a table, none without scores."""
    if not scores:
        return []
    found = summary(scores)
    sharpness = "below rounding" if found.sharpness != found.sharpness else sharpness_of(found)
    return [
        f"| {words} | {found.cases} | {found.points} | {100.0 * found.coverage:.2f} % | "
        f"{100.0 * found.worst_coverage:.1f} % ({found.worst_case}) | {sharpness} |"
    ]


def sharpness_of(found: Summary) -> str:
    return f"{found.sharpness:.1f}, {found.pooled:.1f}, {found.largest_sharpness:.0f} ({found.largest_case})"


def details(scores: Iterable[Score]) -> str:
    """Every case, observable and source in a line."""
    return "\n".join(
        f"{each.case:30s} {each.source:15s} {each.observable:25s} {100.0 * pooled_coverage([each]):6.1f} % "
        f"{each.sharpness:9.1f}  true {each.true:.1e}  claimed {each.claimed:.1e}"
        for each in scores
    )


if __name__ == "__main__":
    main()
