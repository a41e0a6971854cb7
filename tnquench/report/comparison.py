"""One observable of a run as plain arrays: quantum side, prediction, deviation, errors and verdict."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
import xarray
from numpy.typing import NDArray

from tnquench.budget.verdict import light_cone_window, window_norm
from tnquench.conventions import OBSERVABLE_PLACES, PHYSICAL_SOURCES, Reals
from tnquench.dataset.reader import Run
from tnquench.dataset.variables import LEVELS
from tnquench.report.question import is_step, settings_of

Verdicts = NDArray[np.bool_]

#: A field that stays below this everywhere, in units of the coupling, vanishes by symmetry: it is rounding.
NOTHING = 1e-10

#: Units of the dataset as a physicist writes them.
UNITS: dict[str, str] = {"coupling": "J", "coupling^2": "J²", "1/coupling": "1/J", "1": "", "nats": "nats"}


@dataclass(frozen=True)
class Comparison:
    """Everything known about one observable; what the run did not compute is None.

    times (time,) in 1/J and positions (place,) in lattice spacings span the arrays below, all of shape
    (time, place) and in `unit` unless said otherwise.
    deviation : quantum minus prediction; resolved : the verdict on it
    numerical : summed numerical error, None where no companion runs measured it; errors : the same by source
    bound : rigorous, on truncation alone
    deviation_norm, numerical_norm (time,) : norms over the light-cone window; dominant : one source a time
    light_cone : leftmost and rightmost velocity of the prediction; joined : the start joins halves at x = 0
    """

    name: str
    unit: str
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
    deviation_norm: Reals | None
    numerical_norm: Reals | None
    dominant: tuple[str, ...]
    resolve_at: float
    light_cone: tuple[float, float] | None
    joined: bool

    @property
    def known(self) -> Reals:
        """The quantum values, or the prediction where it stands alone."""
        values = self.quantum if self.quantum is not None else self.prediction
        return values if values is not None else np.zeros((self.times.size, self.positions.size))

    @property
    def vanishes(self) -> bool:
        """Whether the field is zero by symmetry in the chain and in the prediction."""
        sides = [side for side in (self.quantum, self.prediction) if side is not None]
        return all(float(np.max(np.abs(side), initial=0.0)) < NOTHING for side in sides)

    @property
    def window(self) -> Verdicts:
        """Points inside the light cone at each time (all points where no cone is known), (time, place)."""
        if self.light_cone is None:
            return np.ones((self.times.size, self.positions.size), dtype=np.bool_)
        return np.asarray(
            light_cone_window(times=self.times, positions=self.positions, light_cone=self.light_cone),
            dtype=np.bool_,
        )

    @property
    def judged(self) -> Verdicts:
        """Points the verdict is about: inside the light cone and after the start, (time, place)."""
        return self.window & (self.times[:, None] > 0)

    def norm(self, values: Reals) -> Reals:
        """Return the root mean square over the light-cone window, (time,), of an array (time, place)."""
        return window_norm(values, self.window)


def compare(run: Run, name: str) -> Comparison:
    """Return the comparison of observable `name`, a key of OBSERVABLE_PLACES, with the first prediction."""
    level = next((level for level in LEVELS if level in run.hydrodynamics), "")
    theory = run.hydrodynamics.get(level, xarray.Dataset())
    budget = run.budget.get(name, xarray.Dataset())
    estimated = bool(run.companions)
    cone = (theory.attrs.get("light_cone_left"), theory.attrs.get("light_cone_right"))
    field = run.quantum if name in run.quantum else theory
    return Comparison(
        name=name,
        unit=UNITS.get(str(field[name].attrs.get("units")), "") if name in field else "",
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
        deviation_norm=_values(budget, f"{level}_deviation_norm"),
        numerical_norm=_values(budget, "numerical_norm") if estimated else None,
        dominant=_dominant(budget) if estimated else (),
        resolve_at=float(budget.attrs.get("resolve_at", np.nan)),
        light_cone=(float(cone[0]), float(cone[1])) if cone[0] is not None and cone[1] is not None else None,
        joined=is_step(settings_of(run)),
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
