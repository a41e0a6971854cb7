"""The budget of a whole run: every observable's sources from the main run, its companions and the
prediction."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from tnquench.budget import sources
from tnquench.budget.companions import COARSE, LOOSE, LOOSER, SHORT
from tnquench.budget.verdict import SHARP_REACH, ObservableBudget, judge_observable, light_cone_window
from tnquench.conventions import OBSERVABLE_PLACES, Reals
from tnquench.observables.quench import QuantumRecord


@dataclass(frozen=True)
class PredictedLevel:
    """A prediction as the budget needs it: values, its own errors, and the light cone for the windows.

    It may lack some of the run's observables, or all of them.
    """

    fields: Mapping[str, Reals]
    grid_error: Mapping[str, Reals]
    strings_error: Mapping[str, Reals]
    light_cone: tuple[float, float]


@dataclass(frozen=True)
class RunSettings:
    """What the budget must know of the main run.

    step_ratio : the coarser companion's step over the main one; trotter_order : of both
    resolve_at : k of the verdict; reach : how far from x = 0 the start varies
    """

    step_ratio: float
    trotter_order: int
    resolve_at: float
    reach: float = SHARP_REACH


def quantum_sources(
    name: str, main: QuantumRecord, companions: Mapping[str, QuantumRecord], settings: RunSettings
) -> dict[str, Reals]:
    """Return the sources of error of the quantum side of one observable, each of shape (time, place).

    With no companions at all truncation, step and length cannot be estimated and are nan.
    """
    values = main.fields[name]
    found = {
        "preparation": sources.preparation(start_error=main.start_error[name], shape=values.shape),
        "arithmetic": sources.arithmetic(cuts=main.cuts, norm=main.norms[name], shape=values.shape),
    }
    if not companions:
        unknown = np.full(values.shape, np.nan)
        return found | {"truncation": unknown, "time_step": unknown, "length": unknown}
    loose = companions[LOOSE].fields[name]
    found["truncation"] = sources.truncation(
        main=_truncated(main, name),
        loose=_truncated(companions[LOOSE], name),
        looser=_truncated(companions[LOOSER], name),
    )
    found["time_step"] = sources.time_step(
        fine=loose,
        coarse=companions[COARSE].fields[name],
        step_ratio=settings.step_ratio,
        order=settings.trotter_order,
    )
    if SHORT not in companions:
        found["length"] = sources.length_unknown(norm=main.norms[name], shape=values.shape)
    else:
        noise = sources.WIDENING * sources.local_scale(loose - values) + found["truncation"]
        found["length"] = sources.length(long=loose, short=companions[SHORT].fields[name], noise=noise)
    return found


def _truncated(record: QuantumRecord, name: str) -> sources.TruncatedRun:
    """Return one observable of a run with the weights its cuts have lost."""
    return sources.TruncatedRun(record.fields[name], record.discarded_weight)


def quantum_error(
    main: QuantumRecord, companions: Mapping[str, QuantumRecord], settings: RunSettings
) -> tuple[float, str]:
    """Return the largest error that weight, step, start and rounding leave anywhere, and its largest source.

    The influence of the ends is left out: no weight or step can reduce it.
    """
    worst, named = 0.0, "truncation"
    for name in main.fields:
        found = quantum_sources(name, main, companions, settings)
        found.pop("length")
        total = np.sum(list(found.values()), axis=0)
        place = np.unravel_index(int(total.argmax()), total.shape)
        if total[place] > worst:
            worst = float(total[place])
            named = max((float(values[place]), source) for source, values in found.items())[1]
    return worst, named


def assess(
    main: QuantumRecord,
    companions: Mapping[str, QuantumRecord],
    predictions: Mapping[str, PredictedLevel],
    *,
    positions: Mapping[str, Reals],
    settings: RunSettings,
) -> dict[str, ObservableBudget]:
    """Return the budget of every observable that the run holds.

    predictions : by level; positions : of the "site"s and "bond"s. Where several levels are judged the larger
    error of the predictions counts; an observable that no level predicts has no deviation. Without any
    prediction the window is the whole chain but its ends.
    """
    cones = [level.light_cone for level in predictions.values()]
    cone = (min(c[0] for c in cones), max(c[1] for c in cones)) if cones else (0.0, 0.0)
    reach = settings.reach if cones else float("inf")
    budgets = {}
    for name in (name for name in OBSERVABLE_PLACES if name in main.fields):
        place = positions[OBSERVABLE_PLACES[name]]
        values = main.fields[name]
        predicted = {level: found for level, found in predictions.items() if name in found.fields}
        budgets[name] = judge_observable(
            quantum=values,
            sources=quantum_sources(name, main, companions, settings)
            | _prediction_sources(name, values, predicted),
            bound=sources.truncation_bound(angle=main.angle, norm=main.norms[name], shape=values.shape),
            predictions={level: found.fields[name] for level, found in predicted.items()},
            window=light_cone_window(times=main.times, positions=place, light_cone=cone, reach=reach),
            positions=place,
            times=main.times,
            resolve_at=settings.resolve_at,
        )
    return budgets


def _prediction_sources(
    name: str, quantum: Reals, predicted: Mapping[str, PredictedLevel]
) -> dict[str, Reals]:
    """Return the sources on the theory's side, the larger one of several theories, each (time, place)."""
    found: dict[str, Reals] = {}
    for level in predicted.values():
        start = np.abs(quantum[0] - level.fields[name][0])
        errors = {
            "prediction_grid": level.grid_error[name],
            "strings": level.strings_error[name],
            "initial_gradient": np.broadcast_to(start, quantum.shape),
        }
        found = {source: np.maximum(found.get(source, 0.0), error) for source, error in errors.items()}
    return found
