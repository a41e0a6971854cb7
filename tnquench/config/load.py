"""Reads a config: TOML in, a checked `Config` or every problem at once out."""

from __future__ import annotations

import re
import tomllib
from collections.abc import Callable, Mapping, Sequence
from functools import partial
from pathlib import Path
from typing import Any

from pydantic import ValidationError
from pydantic_core import ErrorDetails

from tnquench.config.chain_rules import Unusable
from tnquench.config.file_text import UnreadableFileError, read_text
from tnquench.config.hints import nearest
from tnquench.config.messages import problem_lines
from tnquench.config.notation import shortened, shown, shown_section
from tnquench.config.rules import conflicts
from tnquench.config.schema import PROFILES, SECTIONS, Config
from tnquench.config.sweep import first_point
from tnquench.config.table import read_table
from tnquench.errors import InputError

#: Returns the numbers of a table file and what is wrong with it.
TableReader = Callable[[str], tuple[list[float], list[str]]]

#: Parts of a dotted name; no setting has so many, and the TOML parser takes time like their square.
MOST_PARTS = 32
_PART = r"""(?:[A-Za-z0-9_-]++|"[^"\n]*+"|'[^'\n]*+')[ \t]*+"""
_LONG_NAME = re.compile(rf"(?<![A-Za-z0-9_-])(?:{_PART}\.[ \t]*+){{{MOST_PARTS}}}")

#: Settings, and entries of all lists together, in one config: the longest chain and its tables have fewer.
MOST_SETTINGS, MOST_ENTRIES = 10_000, 500_000

_POSITION = re.compile(r" \(at line (\d+), column (\d+)\)$| \(at end of document\)$")


def load_config(path: str | Path, *, allow_outside: bool = False) -> Config:
    """Read the config in a TOML file.

    path : the file; a table that it names is sought beside it or below
    allow_outside : tables may lie anywhere, by absolute paths too; only the user may say so, never the config
    Returns the settings with all defaults filled in; a table file has become its values.
    Raises InputError with one line per problem, all problems at once.
    """
    folder = Path(path).parent
    return read_config(config_text(path), subject=str(path), folder=folder, allow_outside=allow_outside)


def config_text(path: str | Path) -> str:
    """Return the text of a config; raises InputError if the file cannot be read."""
    file = Path(path)
    try:
        return read_text(file)
    except (UnreadableFileError, ValueError) as error:
        raise InputError(str(path), [f"{error}{_neighbour(file)}"]) from error


def read_config(
    text: str, *, subject: str, folder: Path | None = None, allow_outside: bool = False
) -> Config:
    """Read a config from TOML text.

    subject : what messages call it
    folder  : where table files are sought; None refuses them
    allow_outside : whether they may lie outside of it
    Returns and raises as `load_config`. Swept settings have their first values.
    """
    given = first_point(parsed(text, subject=subject))
    return read_tables(given, subject=subject, folder=folder, allow_outside=allow_outside)


def read_tables(
    given: dict[str, Any], *, subject: str, folder: Path | None = None, allow_outside: bool = False
) -> Config:
    """Read a config from the tables of its TOML; arguments, return and errors as `read_config`."""
    read = partial(read_table, folder=folder, allow_outside=allow_outside)
    tables, problems = _with_table_files(given, read)
    errors: Sequence[ErrorDetails] = ()
    try:
        config = Config.model_validate(tables)
    except ValidationError as error:
        errors = [entry for entry in error.errors(include_url=False) if not _is_elsewhere(entry, tables)]
    else:
        if not problems:
            return config
    raise InputError(subject, [*problem_lines(errors), *problems, *conflicts(_usable(tables, errors))])


def parsed(text: str, *, subject: str) -> dict[str, Any]:
    """Return the tables of a TOML text; raises InputError, with line and column, where it is none."""
    if found := _LONG_NAME.search(text):
        line, limit = text.count("\n", 0, found.start()) + 1, f"more than {MOST_PARTS} parts"
        raise InputError(subject, [f"line {line}: a dotted name of {limit}; no setting has so many"])
    try:
        tables = tomllib.loads(text)
        if problem := _excess(tables):
            raise InputError(subject, [problem])
        return tables
    except tomllib.TOMLDecodeError as error:
        problem = _syntax_problem(str(error), text)
    except RecursionError:
        problem = "not a config: brackets nested too deeply"
    except ValueError:  # a number with thousands of digits, a date that does not exist
        problem = "not valid TOML: holds a number or a date that cannot be read"
    raise InputError(subject, [problem])


def _excess(tables: dict[str, Any]) -> str:
    """Return that a config holds more than any config needs, before each part of it is found wrong."""
    settings, entries, left = 0, 0, list[Any]([tables])
    while left:
        part = left.pop()
        if isinstance(part, dict):
            settings += len(part)
            left += [value for value in part.values() if isinstance(value, (dict, list))]
        else:
            entries += len(part)
            left += [value for value in part if isinstance(value, (dict, list))]
    if settings > MOST_SETTINGS:
        return f"{settings} settings; must be at most {MOST_SETTINGS}"
    return f"lists of {entries} entries; must be at most {MOST_ENTRIES}" if entries > MOST_ENTRIES else ""


def _syntax_problem(message: str, text: str) -> str:
    """Return a parser's complaint as line, column, complaint and the line itself."""
    position = _POSITION.search(message)
    complaint = message[: position.start()] if position else message
    complaint = complaint[:1].lower() + complaint[1:]
    if not position or position[1] is None:
        return f"at the end of the file: not valid TOML ({complaint})"
    lines = text.replace("\r\n", "\n").split("\n")
    line = shortened(lines[int(position[1]) - 1].strip())
    advice = '; text needs quotes, as in shape = "step"' if complaint == "invalid value" else ""
    return f"line {position[1]}, column {position[2]}: not valid TOML ({complaint}{advice}): {shown(line)}"


def _with_table_files(tables: dict[str, Any], read: TableReader) -> tuple[dict[str, Any], list[str]]:
    """Put the values of table files in their place; return the tables and what is wrong with the files."""
    filled, problems = dict(tables), list[str]()
    start, chain = tables.get("start"), tables.get("chain")
    if isinstance(start, dict):
        profiles = dict(start)
        for name in PROFILES:
            profiles[name] = _with_values(start.get(name), f"start.{name}", read, problems)
        filled["start"] = {name: profile for name, profile in profiles.items() if name in start}
    if isinstance(chain, dict) and isinstance(chain.get("extra"), list):
        extras = [
            _with_values(extra, f"chain.extra[{index}]", read, problems)
            for index, extra in enumerate(chain["extra"])
        ]
        filled["chain"] = {**chain, "extra": extras}
    return filled, problems


def _with_values(table: Any, section: str, read: TableReader, problems: list[str]) -> Any:
    """Return a table with the values of the file that it names; add to `problems` what is wrong with it."""
    if not _names_file(table):
        return table
    values, complaints = read(table["file"])
    place = f"{shown_section(section)} file = {shown(table['file'])}"
    problems += [f"{place}: {complaint}" for complaint in complaints]
    if complaints:
        return table
    return {**{key: table[key] for key in table if key != "file"}, "values": values}


def _names_file(profile: object) -> bool:
    if not isinstance(profile, dict) or profile.get("shape") != "table":
        return False
    return "values" not in profile and isinstance(profile.get("file"), str)


def _is_elsewhere(error: ErrorDetails, tables: Mapping[str, Any]) -> bool:
    """Whether `conflicts` tells of an error (of the whole config) or `read_table` (of an unread file)."""
    location = error["loc"]
    if not location:
        return True
    is_values = error["type"] == "missing" and location[0] == "start" and location[2:] == ("table", "values")
    return is_values and "file" in tables["start"][location[1]]


def _usable(tables: Mapping[str, Any], errors: Sequence[ErrorDetails]) -> dict[str, Any]:
    """Return every setting by dotted name, with `Unusable` for those that are wrong or missing."""
    wrong = {
        error["loc"][:2]
        for error in errors
        if len(error["loc"]) == 2
        or not (error["loc"][0] == "start" or error["loc"][:2] == ("chain", "extra"))
    }
    settings: dict[str, Any] = {}
    for section, schema in SECTIONS.items():
        table = tables.get(section, {})
        for key, field in schema.model_fields.items():
            if not isinstance(table, Mapping) or (section, key) in wrong:
                value: Any = Unusable()
            elif key in table:
                value = table[key]
            else:
                value = Unusable() if field.is_required() else field.get_default()
            settings[f"{section}.{key}"] = value
    if isinstance(extras := settings["chain.extra"], list):
        settings["chain.extra"] = _usable_extras(extras, errors)
    return settings


def _usable_extras(extras: list[Any], errors: Sequence[ErrorDetails]) -> list[Any]:
    """Return extra terms with `Unusable` for every setting that is wrong by itself."""
    usable = [dict(extra) if isinstance(extra, Mapping) else extra for extra in extras]
    for error in errors:
        match error["loc"]:
            case ("chain", "extra", int(index), _, key, *_):
                usable[index][key] = Unusable()
    return usable


def _neighbour(file: Path) -> str:
    """Return a hint at a config of similar name beside a file that does not exist."""
    try:
        names = [] if file.exists() else [entry.name for entry in file.parent.glob("*.toml")]
    except (OSError, ValueError):
        return ""
    meant = nearest(file.name, names)
    return f"; did you mean {file.parent / meant}?" if meant else ""
