"""The command `judge`, and a judgement on a terminal: the verdict in one sentence, then the numbers."""

from __future__ import annotations

import json
from collections.abc import Iterator
from pathlib import Path
from typing import Annotated

import typer

from tnquench.errors import VerdictNegative
from tnquench.judge.document import as_dict
from tnquench.judge.judgement import Judgement, ObservableJudgement, judge
from tnquench.judge.page import write_judgement, write_page
from tnquench.judge.sentence import (
    allowed_in_words,
    conservation_lines,
    finding,
    points_line,
    sentence,
    standing,
)
from tnquench.judge.tables import Rows, summary_rows, window_rows, worst_rows
from tnquench.report.wording import capitalised
from tnquench.terminal.table import aligned


def judge_command(
    candidate: Annotated[
        Path,
        typer.Argument(
            metavar="CANDIDATE", help="CSV, HDF5 or netCDF file, second dataset, or file.py:function."
        ),
    ],
    against: Annotated[
        Path, typer.Option(metavar="DATASET", help="The dataset that judges, its folder or its run.h5.")
    ],
    allow: Annotated[
        str | None, typer.Option(metavar="X", help="What is tolerated: a number, euler or diffusive.")
    ] = None,
    run_code: Annotated[
        bool, typer.Option("--run-code", help="Run the Python code of CANDIDATE, with all your rights.")
    ] = False,
    as_json: Annotated[bool, typer.Option("--json", help="Print JSON.")] = False,
    html: Annotated[Path | None, typer.Option(metavar="FILE", help="Write a page with figures.")] = None,
    into: Annotated[
        Path | None, typer.Option(metavar="FOLDER", help="Write page, numbers and figures there.")
    ] = None,
) -> None:
    """Judge somebody else's hydrodynamic result against a dataset.

    CANDIDATE has a header time,x,energy_density[,energy_current,...] and one row a point, or arrays under
    these names. Without --allow it must agree with the chain within its numerical error. A number is the
    largest root mean square deviation beyond that error, in each observable; euler means no farther from the
    chain than the dataset's own Euler prediction. Exit code 4 where it fails.

    A function, path/to/file.py:name, takes times and positions (by "site" and "bond") and returns a mapping
    from observables to arrays (time, place). Its code runs only with --run-code.
    """
    judgement = judge(candidate, against, allow, run_code=run_code)
    if html is not None:
        write_page(judgement, html)
    if into is not None:
        write_judgement(judgement, into)
    numbers = json.dumps(as_dict(judgement), indent=2, allow_nan=False) if as_json else ""
    typer.echo(numbers or judgement_text(judgement))
    if not judgement.passed:
        failed = [each for each in judgement.observables if each.passed is False]
        raise VerdictNegative(_printable(str(candidate)), [finding(each, judgement) for each in failed])


def judgement_text(judgement: Judgement) -> str:
    """Return a judgement as text: the verdict, its table, then details of each observable."""
    blocks = [sentence(judgement), _about(judgement), _table(summary_rows(judgement))]
    blocks += [block for each in judgement.observables for block in _details(judgement, each)]
    if judgement.conservation:
        blocks.append("\n".join(["Conservation of the candidate", *_indented(conservation_lines(judgement))]))
    return "\n\n".join(blocks)


def _about(judgement: Judgement) -> str:
    lines = [
        f"Candidate: {_printable(judgement.candidate.name)}",
        f"Against: {_printable(str(judgement.against))} ({_printable(judgement.title)})",
        f"Allowed: {allowed_in_words(judgement)}",
        *(f"Note: {_printable(remark)}" for remark in judgement.remarks),
    ]
    return "\n".join(lines)


def _details(judgement: Judgement, observable: ObservableJudgement) -> Iterator[str]:
    lines = [capitalised(points_line(observable))]
    said = [standing(found, level) for level, found in observable.found.levels.items()]
    lines += _indented(said)
    yield "\n".join([*lines, *_indented(_table(window_rows(judgement, observable)).splitlines())])
    if observable.found.worst:
        worst = _table(worst_rows(observable)).splitlines()
        yield "\n".join([f"  {capitalised(observable.said)}, the worst points", *_indented(worst)])


def _table(rows: Rows) -> str:
    return aligned(rows)


def _indented(lines: list[str]) -> list[str]:
    return [f"  {line}" for line in lines]


def _printable(text: str) -> str:
    """Return a text of the candidate without anything that a terminal would obey."""
    return "".join(letter if letter.isprintable() else "?" for letter in text)
