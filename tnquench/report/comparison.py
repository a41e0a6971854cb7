"""One observable of a run as plain arrays: quantum side, prediction, deviation, errors and verdict."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
import xarray
from numpy.typing import NDArray

from tnquench.budget.verdict import SHARP_REACH, interior, light_cone_window, window_norm
from tnquench.conventions import OBSERVABLE_PLACES, PHYSICAL_SOURCES, Reals
from tnquench.dataset.reader import Run
from tnquench.dataset.variables import LEVELS
from tnquench.report.models import words_of
from tnquench.report.question import is_step, settings_of
from tnquench.report.units import Units, units_of
from tnquench.report.wording import labelled, typeset

Verdicts = NDArray[np.bool_]

#: A field of the chain that stays below this everywhere vanishes by symmetry: it is rounding. A prediction
#: carries the errors of its grids, so that more is allowed there.
NOTHING, NOTHING_PREDICTED = 1e-10, 1e-8
#: A place where the field moves by less than this fraction of its whole range is left out of profiles.
STILL = 2e-3


@dataclass(frozen=True)
class Comparison:
    """Everything known about one observable; what the run did not compute is None.

    said : its name in running text; formula : what it is where the name does not say
    times (time,) and positions (place,) in lattice spacings span the arrays below, all of shape
    (time, place) and in `unit` unless said otherwise.
    deviation : quantum minus prediction; resolved : the verdict on it
    numerical : summed numerical error, None where no companion runs measured it; errors : the same by source,
    each an estimate or a bound as kinds says
    bound : rigorous, on truncation alone; tighter : another one, by the cuts in reach of each point
    deviation_norm, numerical_norm (time,) : norms over the light-cone window; dominant : one source a time
    light_cone : leftmost and rightmost velocity of the prediction; reach : how far from x = 0 the start
    varies; joined : the start joins halves at x = 0
    """

    name: str
    said: str
    formula: str
    unit: str
    units: Units
    level: str
    times: Reals
    positions: Reals
    quantum: Reals | None
    prediction: Reals | None
    deviation: Reals | None
    numerical: Reals | None
    bound: Reals | None
    resolved: Verdicts | None
    errors: Mapping[str, Reals]
    kinds: Mapping[str, str]
    deviation_norm: Reals | None
    numerical_norm: Reals | None
    dominant: tuple[str, ...]
    resolve_at: float
    light_cone: tuple[float, float] | None
    reach: float
    joined: bool
    tighter: Reals | None = None

    def axis_label(self, unit: str) -> str:
        """Return the label of an axis of a figure with values of the observable in `unit`."""
        return typeset(labelled(f"{self.said} {self.formula}".rstrip(), unit))

    @property
    def known(self) -> Reals:
        """The quantum values, or the prediction where it stands alone."""
        values = self.quantum if self.quantum is not None else self.prediction
        return values if values is not None else np.zeros((self.times.size, self.positions.size))

    @property
    def vanishes(self) -> bool:
        """Whether the field is zero by symmetry in the chain and in the prediction."""
        limits = ((self.quantum, NOTHING), (self.prediction, NOTHING_PREDICTED))
        return all(side is None or float(np.max(np.abs(side))) < limit for side, limit in limits)

    @property
    def stretch(self) -> Verdicts:
        """Places where anything moves, with a margin, (place,); all of them where nothing does."""
        inner = interior(self.positions)
        moved = np.max(np.abs(self.known - self.known[0]), axis=0)
        x = self.positions[(moved > STILL * float(np.ptp(self.known[:, inner]))) & inner]
        if x.size == 0:
            return np.ones(self.positions.size, dtype=np.bool_)
        margin = 2.0 + 0.1 * float(np.ptp(x))
        return np.asarray((self.positions >= x[0] - margin) & (self.positions <= x[-1] + margin))

    @property
    def framed(self) -> Verdicts:
        """Places whose values set the scale of a picture, (place,): those where anything moves but the ends,
        whose bonds hold whole terms of the end sites."""
        return np.asarray(self.stretch & interior(self.positions))

    @property
    def window(self) -> Verdicts:
        """Points inside the light cone, all but the ends where no cone is known, (time, place)."""
        cone, reach = (self.light_cone, self.reach) if self.light_cone else ((0.0, 0.0), float("inf"))
        return np.asarray(
            light_cone_window(times=self.times, positions=self.positions, light_cone=cone, reach=reach),
            dtype=np.bool_,
        )

    @property
    def judged(self) -> Verdicts:
        """Points the verdict is about: inside the light cone and after the start, (time, place).

        A cone without any point says nothing; all points count then.
        """
        later = self.times > 0
        chosen = self.window & later[:, None] if later.any() else self.window
        return chosen if chosen.any() else np.ones_like(chosen)

    def norm(self, values: Reals) -> Reals:
        """Return the root mean square over the light-cone window, (time,), of an array (time, place)."""
        return window_norm(values, self.window)


def compare(run: Run, name: str) -> Comparison:
    """Return the comparison of observable `name`, a key of OBSERVABLE_PLACES, with the first prediction."""
    level = next((level for level in LEVELS if level in run.hydrodynamics), "")
    theory = run.hydrodynamics.get(level, xarray.Dataset())
    budget = run.budget.get(name, xarray.Dataset())
    estimated = bool(run.companions)
    settings = settings_of(run)
    units, words = units_of(settings), words_of(settings)
    cone = (theory.attrs.get("light_cone_left"), theory.attrs.get("light_cone_right"))
    field = run.quantum if name in run.quantum else theory
    return Comparison(
        name=name,
        said=words.name(name),
        formula=words.formulas.get(name, ""),
        unit=units.symbol(str(field[name].attrs.get("units"))) if name in field else "",
        units=units,
        level=level,
        times=_reals(run.coordinates, "time"),
        positions=_reals(run.coordinates, OBSERVABLE_PLACES[name]),
        quantum=_values(run.quantum, name),
        prediction=_values(theory, name),
        deviation=_values(budget, f"{level}_deviation"),
        numerical=_values(budget, "numerical") if estimated else None,
        bound=_values(budget, "bound"),
        resolved=_verdicts(budget, f"{level}_resolved") if estimated else None,
        errors=_errors(budget) if estimated else {},
        kinds={str(key)[5:]: str(kind) for key, kind in budget.attrs.items() if str(key).startswith("kind_")},
        deviation_norm=_values(budget, f"{level}_deviation_norm"),
        numerical_norm=_values(budget, "numerical_norm") if estimated else None,
        dominant=_dominant(budget) if estimated else (),
        resolve_at=float(budget.attrs.get("resolve_at", np.nan)),
        light_cone=(float(cone[0]), float(cone[1])) if cone[0] is not None and cone[1] is not None else None,
        reach=float(theory.attrs.get("light_cone_reach", SHARP_REACH)),
        joined=is_step(settings),
        tighter=_values(budget, "light_cone_bound"),
    )


def numerical_sources(errors: Mapping[str, Reals]) -> dict[str, Reals]:
    """Return the sources that count as numerics, the physical ones left out."""
    return {source: values for source, values in errors.items() if source not in PHYSICAL_SOURCES}


def _reals(dataset: xarray.Dataset, name: str) -> Reals:
    return np.asarray(dataset[name].values, dtype=np.float64)


def _values(dataset: xarray.Dataset, name: str) -> Reals | None:
    if name not in dataset:
        return None
    values = _reals(dataset, name)
    return values if np.isfinite(values).any() else None


def _verdicts(budget: xarray.Dataset, name: str) -> Verdicts | None:
    return np.asarray(budget[name].values == 1) if name in budget else None


def _errors(budget: xarray.Dataset) -> dict[str, Reals]:
    if "error" not in budget:
        return {}
    sources = [str(source) for source in budget["source"].values]
    return dict(zip(sources, _reals(budget, "error"), strict=True))


def _dominant(budget: xarray.Dataset) -> tuple[str, ...]:
    if "dominant_source" not in budget:
        return ()
    sources = [str(source) for source in budget["source"].values]
    return tuple(sources[int(index)] for index in budget["dominant_source"].values)
