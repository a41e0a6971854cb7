"""The side that judges: a dataset's quantum side and predictions, at any point where they can be defended."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
import xarray

from tnquench.budget.verdict import END_MARGIN, SHORT_CHAIN
from tnquench.conventions import ERROR_SOURCES, OBSERVABLE_PLACES, PHYSICAL_SOURCES, Reals
from tnquench.dataset.reader import Run
from tnquench.dataset.variables import LEVELS
from tnquench.judge.interpolation import Interpolated, interpolate
from tnquench.judge.points import Points
from tnquench.judge.rays import along_rays

#: Sources of error on the side of the theory; the chain's own numbers do not carry them.
THEORY_SOURCES: frozenset[str] = frozenset({"prediction_grid", "strings"})
QUANTUM_SOURCES: frozenset[str] = frozenset(ERROR_SOURCES) - THEORY_SOURCES - PHYSICAL_SOURCES

#: No error is claimed to be smaller: below this a field is rounding.
ROUNDING = 1e-10
#: Where interpolation is less certain than this fraction of the field's whole range, the samples are too far
#: apart to say anything.
COARSE = 0.02
#: Used where the dataset does not say from how many numerical errors on a deviation counts as resolved.
RESOLVE_AT = 3.0

#: Why a point is left out; each point is counted once, under the first that holds.
OUTSIDE_TIMES = "outside the reference's times"
OUTSIDE_PLACES = "beyond the reference's places"
NEAR_ENDS = f"within {END_MARGIN:.0f} spacings of an open end"
AT_START = "at t = 0, where only the start's own mismatch is seen"
TOO_COARSE = "where the reference's samples are too coarse to interpolate"


@dataclass(frozen=True)
class Level:
    """One prediction at the same points: values and the error of its own numbers, both (point,)."""

    values: Reals
    error: Reals


@dataclass(frozen=True)
class Faced:
    """A candidate's points of one observable that can be judged, and the reference there; arrays (point,).

    chain : the quantum side; numerical : its numerical error, rounding at least, None if it was not estimated
    added : error of the interpolation, zero where none was needed; exact : no interpolation needed
    levels : predictions of the reference by level
    left_out : how many points cannot be judged, by reason
    """

    points: Points
    chain: Reals
    numerical: Reals | None
    added: Reals
    exact: np.ndarray
    levels: Mapping[str, Level]
    left_out: Mapping[str, int]

    @property
    def error(self) -> Reals:
        """Everything the difference of candidate and chain is uncertain by, (point,)."""
        own = np.zeros_like(self.chain) if self.numerical is None else self.numerical
        return np.asarray(own + self.added + self.points.error)

    @property
    def deviation(self) -> Reals:
        """Candidate minus chain, (point,)."""
        return np.asarray(self.points.values - self.chain)


def face(run: Run, name: str, points: Points, *, with_start: bool) -> Faced:
    """Return the points of a candidate that the reference can judge, and what it says there.

    with_start : points at t = 0 count too; sensible for a chain, not for a hydrodynamic theory
    """
    times = _reals(run.coordinates, "time")
    positions = _reals(run.coordinates, OBSERVABLE_PLACES[name])
    quantum = values_of(run.quantum, name)
    assert quantum is not None, "the caller asks for observables that the reference holds"
    kept, left_out = _inside(points, times, positions, with_start=with_start)
    points = points.chosen(kept)
    chain = _at(quantum, quantum_error(run, name), times, positions, points)
    coarse = chain.added > np.maximum(chain.error, COARSE * float(np.ptp(quantum)))
    if coarse.any():
        left_out[TOO_COARSE] = int(np.count_nonzero(coarse))
    fine = ~coarse
    points = points.chosen(fine)
    return Faced(
        points=points,
        chain=chain.values[fine],
        numerical=np.maximum(chain.error[fine], ROUNDING) if run.companions else None,
        added=chain.added[fine],
        exact=chain.exact[fine],
        levels=_levels(run, name, times, positions, points),
        left_out=left_out,
    )


def values_of(dataset: xarray.Dataset, name: str) -> Reals | None:
    """Return a variable (time, place) of a dataset, None where it is absent or holds no number."""
    if name not in dataset:
        return None
    values = _reals(dataset, name)
    return values if np.isfinite(values).any() else None


def quantum_error(run: Run, name: str) -> Reals | None:
    """Return the summed numerical error (time, place) of the quantum side alone, None if not estimated."""
    budget = run.budget.get(name)
    if budget is None or "error" not in budget or not run.companions:
        return None
    sources = [str(source) for source in budget["source"].values]
    rows = [row for row, source in enumerate(sources) if source in QUANTUM_SOURCES]
    return np.asarray(_reals(budget, "error")[rows].sum(axis=0))


def prediction_error(theory: xarray.Dataset, name: str) -> Reals | None:
    """Return the numerical error (time, place) of a prediction: of its grids and of the strings kept."""
    parts = [values_of(theory, f"{name}_{kind}_error") for kind in ("grid", "strings")]
    known = [np.abs(part) for part in parts if part is not None]
    return np.asarray(sum(known)) if known else None


def resolve_at(run: Run, name: str) -> float:
    """Return from how many numerical errors on a deviation of the observable counts as resolved."""
    budget = run.budget.get(name, xarray.Dataset())
    stated = float(budget.attrs.get("resolve_at", np.nan))
    return stated if np.isfinite(stated) and stated > 0 else RESOLVE_AT


def _inside(
    points: Points, times: Reals, positions: Reals, *, with_start: bool
) -> tuple[np.ndarray, dict[str, int]]:
    """Return which points the reference covers (point,), and how many of the others there are by reason."""
    close = 1e-9 * max(1.0, float(np.abs(times).max()), float(np.abs(positions).max()))
    depth = float(np.abs(positions).max()) - np.abs(points.positions)
    reasons = {
        OUTSIDE_TIMES: (points.times < times[0] - close) | (points.times > times[-1] + close),
        OUTSIDE_PLACES: (points.positions < positions[0] - close)
        | (points.positions > positions[-1] + close),
        NEAR_ENDS: (depth < END_MARGIN - close) & (positions.size >= SHORT_CHAIN),
        AT_START: (np.abs(points.times) <= close) & (not with_start),
    }
    kept = np.ones(len(points), dtype=np.bool_)
    counts = {}
    for reason, holds in reasons.items():
        if count := int(np.count_nonzero(holds & kept)):
            counts[reason] = count
        kept &= ~holds
    return kept, counts


def _at(field: Reals, error: Reals | None, times: Reals, positions: Reals, points: Points) -> Interpolated:
    return interpolate(
        field,
        error,
        times=times,
        positions=positions,
        at_times=np.clip(points.times, times[0], times[-1]),
        at_positions=np.clip(points.positions, positions[0], positions[-1]),
    )


def _levels(run: Run, name: str, times: Reals, positions: Reals, points: Points) -> dict[str, Level]:
    """Return the predictions at the points; the error of their interpolation is part of their error."""
    found = {}
    for level in LEVELS:
        theory = run.hydrodynamics.get(level)
        values = None if theory is None else values_of(theory, name)
        if theory is None or values is None:
            continue
        at = _at(values, prediction_error(theory, name), times, positions, points)
        by_rays, missed = along_rays(
            values,
            times=times,
            positions=positions,
            at_times=points.times,
            at_positions=points.positions,
        )
        better = missed < at.added
        found[level] = Level(
            np.where(better, by_rays, at.values), at.error + np.where(better, missed, at.added)
        )
    return found


def _reals(dataset: xarray.Dataset, name: str) -> Reals:
    return np.asarray(dataset[name].values, dtype=np.float64)
