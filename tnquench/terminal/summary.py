"""What a finished run found, in the sentences with which its report begins."""

from __future__ import annotations

import shutil
import sys
import textwrap
from pathlib import Path

from tnquench.dataset.reader import open_run
from tnquench.report.figures import comparisons
from tnquench.report.provenance import event_remarks, notices
from tnquench.report.question import absence, settings_of, subject
from tnquench.report.stretch import stretch_sentence
from tnquench.report.verdict import headline


def show_findings(folder: Path) -> None:
    """Write the verdict on the dataset in `folder` to standard error, wrapped on a terminal."""
    width = shutil.get_terminal_size().columns if sys.stderr.isatty() else None
    for line in findings(folder):
        sys.stderr.write(f"{line if width is None else textwrap.fill(line, width)}\n")


def findings(folder: Path) -> list[str]:
    """Return the verdict of the dataset in `folder`, its extra terms and its events, one sentence each."""
    run = open_run(folder)
    drawn, _ = comparisons(run)
    about = subject(settings_of(run))
    study = stretch_sentence(run, drawn, about=about)
    verdict = headline(drawn, about=about, absence=absence(run))
    return [verdict, *([study] if study else []), *notices(run), *event_remarks(run)]
