"""Reads the values of a table profile from a CSV file beside the config."""

from __future__ import annotations

import math
import re
from pathlib import Path

from tnquench.config.file_text import UnreadableFileError, read_text
from tnquench.config.notation import shown

_HEADING = re.compile(r"[A-Za-z_][A-Za-z0-9_ ()/*.-]*")
_MOST_PROBLEMS = 3


def read_table(
    file: str, *, folder: Path | None, allow_outside: bool = False
) -> tuple[list[float], list[str]]:
    """Return the numbers of a CSV file, one a line, and what is wrong with it.

    file   : path relative to `folder`, which it may not leave
    folder : folder of the config; None where there is none, so that no file may be read
    allow_outside : the user has said on the command line that `file` may lie anywhere
    Blank lines, lines that begin with # and a heading before the first number are skipped.
    """
    try:
        text = read_text(_confined(file, folder=folder, allow_outside=allow_outside))
    except UnreadableFileError as error:
        return [], [str(error)]
    values: list[float] = []
    problems: list[str] = []
    heading_allowed = True
    for number, line in enumerate(text.splitlines(), start=1):
        content = line.strip()
        if not content or content.startswith("#"):
            continue
        if heading_allowed and _is_heading(content):
            heading_allowed = False
            continue
        heading_allowed = False
        value, complaint = _number(content)
        values.append(value)
        if complaint:
            problems.append(f"line {number}: {complaint}")
    if not values:
        problems.append("holds no numbers; must have one a line")
    left_out = len(problems) - _MOST_PROBLEMS
    return values, [*problems[:_MOST_PROBLEMS], *([f"{left_out} more such lines"] if left_out > 0 else [])]


def _confined(file: str, *, folder: Path | None, allow_outside: bool) -> Path:
    """Resolve `file` below `folder`; links that lead out of it are followed and refused."""
    if folder is None:
        reason = "can be read only for a config that is a file itself; give values in its place"
        raise UnreadableFileError(reason)
    if "\0" in file or not file:
        reason = "is not the name of a file"
        raise UnreadableFileError(reason)
    home = folder.resolve()
    try:
        path = (home / file).resolve()
    except (OSError, RuntimeError) as error:  # a ring of links
        reason = "cannot be followed to a file"
        raise UnreadableFileError(reason) from error
    if not allow_outside and (Path(file).is_absolute() or not path.is_relative_to(home)):
        reason = "lies outside the folder of the config; must be in it or below, by a relative path"
        raise UnreadableFileError(reason)
    return path


def _is_heading(content: str) -> bool:
    return _HEADING.fullmatch(content) is not None and _number(content)[1].endswith("is not a number")


def _number(content: str) -> tuple[float, str]:
    """Return the number on a line and, where there is none to use, a complaint."""
    columns = len(re.split(r"[,;\t]", content))
    if columns > 1:
        return math.nan, f"{columns} columns; must be one number a line, with a decimal point"
    try:
        value = float(content)
    except ValueError:
        return math.nan, f"{shown(content)} is not a number"
    return value, "" if math.isfinite(value) else f"{content} is not a finite number"
