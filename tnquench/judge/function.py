"""Candidates as Python functions, which run only with the user's explicit consent.

The contract: `function(times, positions)` is called once, with `times`, (time,), those of the reference after
the start, and `positions`, a mapping with the places of "site" and of "bond", each (place,), counted from the
middle of the chain. Units are the reference's. It returns a mapping from names of observables, such as
"energy_density", to arrays (time, place): densities and currents on the sites or bonds on which the reference
has them (`conventions.OBSERVABLE_PLACES`).
"""

from __future__ import annotations

import re
import sys
import traceback
from collections.abc import Callable, Iterator, Mapping
from contextlib import contextmanager, redirect_stdout
from dataclasses import dataclass
from hashlib import sha256
from pathlib import Path
from types import ModuleType
from typing import Any

import numpy as np

from tnquench.conventions import OBSERVABLE_PLACES, Reals
from tnquench.errors import InputError
from tnquench.judge.csv_table import check_names
from tnquench.judge.points import (
    COORDINATES,
    LARGEST_VALUE,
    OBSERVABLES,
    TABLE,
    Candidate,
    Complaints,
    Points,
)

#: Largest file of a function, in bytes.
LARGEST_SOURCE = 10_000_000
#: What the user must say for a function to be run.
CONSENT = "--run-code"

_NAMED = re.compile(r"(?P<file>.+\.py):(?P<name>[^\W\d]\w*)", re.DOTALL)
_MODULE = "candidate_of_tnquench"

Function = Callable[[Reals, Mapping[str, Reals]], Mapping[str, Any]]


@dataclass(frozen=True)
class NamedFunction:
    """A function by the file that holds it and its name there; nothing is read or run yet."""

    file: Path
    name: str

    @classmethod
    def parse(cls, source: object) -> NamedFunction | None:
        """Return what `path/to/file.py:function` means; None for anything else, also a file of that name."""
        found = _NAMED.fullmatch(str(source)) if isinstance(source, str | Path) else None
        if found is None or "\0" in found[0] or Path(found[0]).exists():
            return None
        return cls(Path(found["file"]), found["name"])

    def __str__(self) -> str:
        return f"{self.file}:{self.name}"

    def refuse(self) -> None:
        """Raise InputError: the user has not agreed to run this file."""
        problem = f"is Python code, which is not run unless you say so; if you trust it, add {CONSENT}"
        raise InputError(str(self), [problem], consequence="nothing was judged or imported")


def candidate_of_function(function: NamedFunction | Function, coordinates: Mapping[str, Reals]) -> Candidate:
    """Run a function on the reference's own points and return what it gives as a candidate.

    function    : one that is at hand, or one to be loaded from its file, WHICH RUNS THE FILE
    coordinates : "time", "site" and "bond" of the reference
    Raises InputError with one line a problem: the file cannot be loaded, the function fails, or what it
    returns is not finite numbers of the right shapes. What it prints goes to standard error.
    """
    subject = str(function) if isinstance(function, NamedFunction) else _name_of(function)
    times = coordinates["time"][coordinates["time"] > 0.0]
    positions = {place: coordinates[place].copy() for place in ("site", "bond")}
    file = function.file if isinstance(function, NamedFunction) else None
    remarks: tuple[str, ...] = ()
    with _told(subject, file), redirect_stdout(sys.stderr):
        if isinstance(function, NamedFunction):
            source = _source(function)
            remarks = (f"computed by the code of {function.file}, SHA-256 {sha256(source).hexdigest()[:12]}",)
            with _module(function.file, source) as module:
                answer = _called(getattr(module, function.name, None), function, times, positions)
        else:
            answer = function(times.copy(), positions)
        given = _as_mapping(answer, subject)
    return Candidate(subject, TABLE, _fields(given, coordinates, times, subject), remarks)


def _fields(
    given: Mapping[str, Any], coordinates: Mapping[str, Reals], times: Reals, subject: str
) -> dict[str, Points]:
    complaints = Complaints()
    check_names([*COORDINATES, *given], complaints, what="observable")
    fields = {}
    for name in (name for name in given if name in OBSERVABLES):
        places = coordinates[OBSERVABLE_PLACES[name]]
        values = _checked(name, given[name], times, places, complaints)
        if values is not None:
            clock, place = np.meshgrid(times, places, indexing="ij")
            fields[name] = Points(clock.ravel(), place.ravel(), values.ravel(), np.zeros(values.size))
    complaints.raise_if_any(subject)
    return fields


def _checked(name: str, given: Any, times: Reals, places: Reals, complaints: Complaints) -> Reals | None:
    """Return what was given as numbers (time, place); None, and a complaint, where that cannot be used."""
    try:
        found = np.asarray(given)
    except Exception:  # an object that is not numbers may raise anything
        found = np.array(None)
    if found.dtype.kind not in "fiu":
        complaints.add(f"{name}: is {type(given).__name__} of {found.dtype}; return an array of real numbers")
        return None
    if found.shape != (times.size, places.size):
        allowed = f"allowed: (time, {OBSERVABLE_PLACES[name]}) = ({times.size}, {places.size})"
        complaints.add(f"{name}: shape {found.shape}; {allowed}")
        return None
    values = np.asarray(found, dtype=np.float64)
    bad = ~(np.abs(values) <= LARGEST_VALUE)
    if count := int(np.count_nonzero(bad)):
        row, column = np.argwhere(bad)[0]
        where = f"{name} at t = {times[row]:g}, x = {places[column]:g}"
        problem = f"{values[row, column]:g} is not a finite number up to {LARGEST_VALUE:g}"
        complaints.add(f"{where}: {problem}", name, "not finite", count=count)
    return values


def _source(function: NamedFunction) -> bytes:
    if not function.file.is_file():
        problem = "is not a regular file" if function.file.exists() else "no such file"
        raise _refusal(str(function), problem)
    if function.file.stat().st_size > LARGEST_SOURCE:
        raise _refusal(str(function), f"larger than {LARGEST_SOURCE // 1_000_000} MB; no code is so long")
    return function.file.read_bytes()


@contextmanager
def _module(file: Path, source: bytes) -> Iterator[ModuleType]:
    """Run a file as a module, with its folder importable as for a script; leave nothing behind on disk."""
    module = ModuleType(_MODULE)
    module.__file__ = str(file)
    path, modules = list(sys.path), set(sys.modules)
    sys.path.insert(0, str(file.parent.resolve()))
    sys.modules[_MODULE] = module
    writes, sys.dont_write_bytecode = sys.dont_write_bytecode, True
    try:
        exec(compile(source, str(file), "exec"), module.__dict__)  # the user has agreed
        yield module
    finally:
        sys.path[:] = path
        sys.dont_write_bytecode = writes
        for name in set(sys.modules) - modules:
            if _is_beside(sys.modules[name], file):
                del sys.modules[name]


def _is_beside(module: object, file: Path) -> bool:
    """Whether a module is the file itself or one of its neighbours; another candidate may have its own."""
    found = getattr(module, "__file__", None)
    return isinstance(found, str) and Path(found).resolve().is_relative_to(file.parent.resolve())


def _called(found: Any, function: NamedFunction, times: Reals, positions: Mapping[str, Reals]) -> Any:
    if not callable(found):
        problem = f"holds no function {function.name}" if found is None else f"{function.name} is no function"
        raise _refusal(str(function), problem)
    return found(times.copy(), positions)


def _as_mapping(answer: Any, subject: str) -> dict[str, Any]:
    if not isinstance(answer, Mapping) or not all(isinstance(name, str) for name in answer):
        wanted = "return a mapping from names of observables to arrays (time, place)"
        raise _refusal(subject, f"returned {type(answer).__name__}; {wanted}")
    return dict(answer)


@contextmanager
def _told(subject: str, file: Path | None) -> Iterator[None]:
    """Turn whatever foreign code raises into one line that names its file and line."""
    try:
        yield
    except InputError:
        raise
    except (Exception, SystemExit) as error:
        said = "".join(letter if letter.isprintable() else " " for letter in str(error)[:200]).strip()
        problem = f"{_place(error, file)}: {type(error).__name__}: {said or 'no message'}"
        raise _refusal(subject, problem) from error


def _place(error: BaseException, file: Path | None) -> str:
    """Return where an error arose: the last line of the user's own file that led to it."""
    if isinstance(error, SyntaxError) and error.lineno and (file is None or error.filename == str(file)):
        return f"{error.filename}, line {error.lineno}"
    frames = [frame for frame in traceback.extract_tb(error.__traceback__) if frame.filename != __file__]
    own = [frame for frame in frames if file is None or frame.filename == str(file)]
    if not (frames := own or frames):
        return str(file or "the function")
    return f"{frames[-1].filename}, line {frames[-1].lineno}, in {frames[-1].name}"


def _name_of(function: Function) -> str:
    return f"function {getattr(function, '__name__', type(function).__name__)}"


def _refusal(subject: str, problem: str) -> InputError:
    return InputError(subject, [problem], consequence="nothing was judged")
