"""Judge somebody else's result against a dataset: one function, and what it returns."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from tnquench.conventions import Reals
from tnquench.dataset.reader import Run, open_run
from tnquench.errors import InputError
from tnquench.judge.allowance import Allowance
from tnquench.judge.candidate import Source, open_candidate
from tnquench.judge.conservation import Conservation, check_conservation
from tnquench.judge.deviations import Deviations, measure
from tnquench.judge.function import NamedFunction
from tnquench.judge.points import OBSERVABLES, QUANTUM, TABLE, Candidate
from tnquench.judge.reference import Faced, face, resolve_at, values_of
from tnquench.report.models import ModelWords, words_of
from tnquench.report.question import settings_of, subject
from tnquench.report.units import Units, units_of
from tnquench.report.wording import number, plain

#: Rounding to this many decimals is no rounding.
MOST_DECIMALS = 12


@dataclass(frozen=True)
class ObservableJudgement:
    """One observable of a candidate against the chain.

    said, unit : how it and its unit are written; resolve_at : k, wrong means beyond k times the error
    faced  : the points that count, the reference there, and how many points were left out and why
    found  : norms of the deviation
    passed : whether it keeps within what was allowed; None where the reference cannot tell
    """

    name: str
    said: str
    unit: str
    resolve_at: float
    faced: Faced
    found: Deviations
    passed: bool | None

    @property
    def used(self) -> int:
        """Number of points that count."""
        return len(self.faced.points)

    @property
    def left_out(self) -> int:
        """Number of points that do not count."""
        return sum(self.faced.left_out.values())

    @property
    def interpolated(self) -> int:
        """Number of points between samples of the reference."""
        return int(np.count_nonzero(~self.faced.exact))

    @property
    def coarse(self) -> int:
        """Number of points where interpolation is less certain than the reference's own numbers."""
        own = 0.0 if self.faced.numerical is None else self.faced.numerical
        return int(np.count_nonzero(self.faced.added > own))

    @property
    def first_wrong(self) -> float | None:
        """First time with a wrong point, None where there is none."""
        wrong = self.found.wrong
        return float(self.faced.points.times[wrong].min()) if wrong.any() else None


@dataclass(frozen=True)
class Judgement:
    """The verdict on a candidate.

    candidate : what was judged; against : path of the reference; title : the reference's own
    allowance : what was allowed; about : the observable the reference is about
    observables, conservation : one entry an observable, one a density
    remarks : what the reader must know beside, one sentence each
    """

    candidate: Candidate
    against: Path
    title: str
    units: Units
    words: ModelWords
    allowance: Allowance
    about: str
    observables: tuple[ObservableJudgement, ...]
    conservation: tuple[Conservation, ...]
    remarks: tuple[str, ...]

    @property
    def passed(self) -> bool:
        """Whether every observable that can be judged keeps within what was allowed."""
        return all(observable.passed is not False for observable in self.observables)

    def __getitem__(self, name: str) -> ObservableJudgement:
        for observable in self.observables:
            if observable.name == name:
                return observable
        message = f"{name!r} was not judged; there are: {', '.join(each.name for each in self.observables)}"
        raise KeyError(message)


def judge(
    candidate: Source,
    against: Path | str | Run,
    allow: float | str | None = None,
    *,
    run_code: bool = False,
) -> Judgement:
    """Judge a result against the quantum side of a dataset.

    candidate : a CSV file with the header time,x,energy_density[,...], an HDF5 or netCDF file with the same
    names, columns in memory under these names, or a second dataset (its quantum side is judged with its own
    error, or its prediction where it holds nothing else); or a Python function of times and positions (see
    `tnquench.judge.function`), or the name of one, "path/to/file.py:function"
    against   : the dataset that judges, its folder or its file
    allow     : a number, the largest root mean square deviation beyond numerical error of each observable;
    "euler" (or "diffusive"), no farther from the chain than that prediction of the dataset; or nothing, the
    candidate must agree with the chain within its numerical error
    run_code  : run the file of a function that is named; without it that is refused
    Returns norms, wrong points and verdict of each observable that both sides hold. The reference is
    interpolated where needed, with the error of that as a part of the total error.
    Raises InputError if either side cannot be used, or no point of the candidate can be judged.
    """
    allowance = Allowance.parse(allow)
    if not run_code and (named := NamedFunction.parse(candidate)):
        named.refuse()
    run = against if isinstance(against, Run) else open_run(against)
    _check_reference(run, allowance)
    opened = open_candidate(candidate, coordinates=_coordinates(run), run_code=run_code)
    settings = settings_of(run)
    words, units = words_of(settings), units_of(settings)
    faced = _faced(run, opened, allowance)
    return Judgement(
        candidate=opened,
        against=run.path,
        title=str(run.provenance.get("title") or "Untitled"),
        units=units,
        words=words,
        allowance=allowance,
        about=subject(settings),
        observables=tuple(
            _judged(run, name, points, allowance, words, units) for name, points in faced.items()
        ),
        conservation=check_conservation(opened.fields),
        remarks=tuple(_remarks(run, opened, faced, settings)),
    )


def _coordinates(run: Run) -> dict[str, Reals]:
    names = ("time", "site", "bond")
    return {name: np.asarray(run.coordinates[name].values, dtype=np.float64) for name in names}


def _judged(
    run: Run, name: str, faced: Faced, allowance: Allowance, words: ModelWords, units: Units
) -> ObservableJudgement:
    threshold = resolve_at(run, name)
    found = measure(faced, resolve_at=threshold)
    unit = units.symbol(str(run.quantum[name].attrs.get("units")))
    return ObservableJudgement(
        name, words.name(name), unit, threshold, faced, found, allowance.kept_by(found)
    )


def _check_reference(run: Run, allowance: Allowance) -> None:
    if not any(values_of(run.quantum, name) is not None for name in OBSERVABLES):
        raise _refusal(run, "holds no quantum side to judge against; give the dataset of `tnquench run`")
    if allowance.level and allowance.level not in run.hydrodynamics:
        found = ", ".join(run.hydrodynamics) or "none"
        raise _refusal(run, f"no {allowance.level} prediction in it (found: {found}); allow a number instead")
    if allowance == Allowance() and not run.companions:
        remedy = 'say what is allowed, such as --allow 1e-3, or run with companions = "full"'
        raise _refusal(run, f"its numerical error was not estimated, for want of companion runs; {remedy}")


def _faced(run: Run, candidate: Candidate, allowance: Allowance) -> dict[str, Faced]:
    """Return each observable that both sides hold, where the reference can judge points of it."""
    held = [name for name in OBSERVABLES if values_of(run.quantum, name) is not None]
    common = [name for name in held if name in candidate.fields]
    if not common:
        given = ", ".join(candidate.fields)
        raise _unusable(candidate, f"gives {given}; the reference holds {', '.join(held)}")
    from_start = candidate.origin == QUANTUM
    faced = {name: face(run, name, candidate.fields[name], with_start=from_start) for name in common}
    usable = {name: found for name, found in faced.items() if len(found.points)}
    if not usable:
        raise _unusable(
            candidate,
            *(f"{name}: no point can be judged, {left_out_in_words(found)}" for name, found in faced.items()),
        )
    if allowance.level and not any(allowance.level in found.levels for found in usable.values()):
        raise _refusal(run, f"no {allowance.level} prediction of {', '.join(usable)}; allow a number instead")
    return usable


def left_out_in_words(faced: Faced) -> str:
    """Return how many points are left out and why, such as "32 at t = 0, ...; 4 beyond ..."."""
    return "; ".join(f"{count} {reason}" for reason, count in faced.left_out.items())


def _remarks(
    run: Run, candidate: Candidate, faced: Mapping[str, Faced], settings: Mapping[str, Any]
) -> Iterator[str]:
    if candidate.origin == QUANTUM:
        claims = any(points.error.any() for points in candidate.fields.values())
        own = "its own numerical error counts too" if claims else "it claims no error of its own"
        yield f"the candidate is the quantum side of a dataset; {own}"
    elif candidate.origin != TABLE:
        yield f"the candidate is the {candidate.origin} prediction of a dataset; its own error counts too"
    yield from candidate.remarks
    if candidate.settings:
        yield from _differences(candidate.settings, settings)
    yield from _rounded(faced)
    if not run.companions:
        yield "the reference's numerical error was not estimated: the deviations are counted whole"
    absent = [name for name in candidate.fields if name not in run.quantum]
    if absent:
        yield f"not in the reference, left aside: {', '.join(absent)}"
    empty = [name for name in candidate.fields if name in run.quantum and name not in faced]
    if empty:
        yield f"no point of {', '.join(empty)} can be judged"


def _rounded(faced: Mapping[str, Faced]) -> Iterator[str]:
    """Say where a candidate's numbers are rounded more coarsely than the reference is certain."""
    for name, found in faced.items():
        values, certain = found.points.values, float(np.median(found.error))
        decimals = next((count for count in range(MOST_DECIMALS) if _has_decimals(values, count)), None)
        if decimals is not None and 0.5 * 10.0**-decimals > certain > 0 and np.ptp(values) > 0:
            said = f"{name} is given to {decimals} decimals, more coarsely than the reference is certain"
            yield f"{said} (typical error {number(certain, digits=1)})"


def _has_decimals(values: Reals, count: int) -> bool:
    scaled = values * 10.0**count
    return bool(np.all(np.abs(scaled - np.round(scaled)) <= 1e-9 * np.maximum(np.abs(scaled), 1.0)))


def _differences(mine: Mapping[str, Any], theirs: Mapping[str, Any]) -> Iterator[str]:
    """Say in which settings of chain and start two datasets differ: they answer different questions then."""
    one, other = ({**_flat(side.get("chain", {}), "chain"), **_flat(side.get("start", {}), "start")}
                  for side in (mine, theirs))  # fmt: skip
    for key in sorted({*one, *other}):
        if one.get(key) != other.get(key):
            pair = f"{_said(one.get(key))} in the candidate, {_said(other.get(key))} in the reference"
            yield f"the two datasets differ in {key}: {pair}"


def _flat(table: Mapping[str, Any], path: str) -> dict[str, Any]:
    flat: dict[str, Any] = {}
    for key, value in table.items():
        flat |= _flat(value, f"{path}.{key}") if isinstance(value, Mapping) else {f"{path}.{key}": value}
    return flat


def _said(value: object) -> str:
    if value is None:
        return "not set"
    if isinstance(value, list):
        return f"{len(value)} entries"
    return plain(value) if isinstance(value, float) else str(value)


def _refusal(run: Run, problem: str) -> InputError:
    return InputError(str(run.path), [problem], consequence="nothing was judged")


def _unusable(candidate: Candidate, *problems: str) -> InputError:
    return InputError(candidate.name, problems, consequence="nothing was judged")
