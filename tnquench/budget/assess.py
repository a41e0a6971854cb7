"""The budget of a whole run: every observable's sources from the main run, its companions and the
prediction."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np

from tnquench.budget import sources
from tnquench.budget.bounds import layer_bound, light_cone_bound
from tnquench.budget.companions import COARSE, SHORT, CompanionRun, ladder, partner, rung_of
from tnquench.budget.verdict import (
    SHARP_REACH,
    TIGHTER_BOUNDS,
    ObservableBudget,
    judge_observable,
    light_cone_window,
)
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
    shrunk : main step over the step at which the companions measured its error
    unloosened : companions that were main runs themselves: their bond floor is the main run's
    """

    step_ratio: float
    trotter_order: int
    resolve_at: float
    reach: float = SHARP_REACH
    shrunk: float = 1.0
    unloosened: frozenset[str] = frozenset()


def quantum_sources(
    name: str, main: QuantumRecord, companions: Mapping[str, CompanionRun], settings: RunSettings
) -> dict[str, Reals]:
    """Return the sources of error of the quantum side of one observable, each of shape (time, place).

    With no companions at all truncation, step and length cannot be estimated and are nan. Where one is
    missing its source claims more, from what is there.
    """
    values, norm = main.fields[name], main.norms[name]
    found = {
        "preparation": sources.preparation(
            name, start_error=main.start_error, norms=main.norms, shape=values.shape
        ),
        "arithmetic": sources.arithmetic(cuts=main.cuts, norm=norm, shape=values.shape),
    }
    if not companions:
        unknown = np.full(values.shape, np.nan)
        return found | {"truncation": unknown, "time_step": unknown, "length": unknown}
    found["truncation"] = _truncation(name, main, companions, settings)
    if COARSE in companions:
        fine = _beside(COARSE, companions, main).fields[name]
        at_companions = sources.time_step(
            fine=fine,
            coarse=companions[COARSE].fields[name],
            step_ratio=settings.step_ratio,
            order=settings.trotter_order,
            noise=fine - values,
        )
        found["time_step"] = at_companions * settings.shrunk**settings.trotter_order
    else:
        found["time_step"] = sources.unknown(norm=norm, shape=values.shape)
    if SHORT in companions:
        long = _beside(SHORT, companions, main).fields[name]
        cut_alike = companions.get(rung_of(companions, SHORT) or "", main).fields[name]
        noise = sources.WIDENING * sources.local_scale(cut_alike - values) + found["truncation"]
        found["length"] = sources.length(long=long, short=companions[SHORT].fields[name], noise=noise)
    else:
        found["length"] = sources.unknown(norm=norm, shape=values.shape)
    return found


def _beside(
    name: str, companions: Mapping[str, CompanionRun], main: QuantumRecord
) -> CompanionRun | QuantumRecord:
    """Return the run from which a companion differs by its step or length alone.

    Where that is missing it is the main run: the difference then contains truncation and claims more.
    """
    found = partner(companions, name)
    return main if found is None else companions[found]


def _truncation(
    name: str, main: QuantumRecord, companions: Mapping[str, CompanionRun], settings: RunSettings
) -> Reals:
    """Estimate the truncation error from the companions that there are.

    One that was a main run has the same bond floor and is blind to what it hides: the next looser one is
    asked too, and the larger claim counts. Without any that differ by the cuts alone the one with the coarser
    step stands in, whose difference contains the step's error, with the least power of the weight; without
    that the rigorous bound is claimed.
    """
    rungs = [rung for rung in ladder(companions) if np.isfinite(companions[rung].discarded_weight).all()]
    own = _truncated(main, name)
    if not rungs and COARSE in companions:
        stand_in = _truncated(companions[COARSE], name)
        return sources.truncation(main=own, loose=stand_in, power=sources.LEAST_POWER)
    if not rungs:
        bounds = [_angle_bound(name, main), *_tighter_bounds(name, main).values()]
        return np.asarray(np.minimum.reduce(bounds))
    loosened = [index for index, rung in enumerate(rungs) if rung not in settings.unloosened]
    asked = rungs[: loosened[0] + 1] if loosened else rungs
    claims = [sources.truncation(main=own, loose=_truncated(companions[rung], name)) for rung in asked]
    return np.asarray(np.maximum.reduce(claims))


def _truncated(record: CompanionRun | QuantumRecord, name: str) -> sources.TruncatedRun:
    """Return one observable of a run with the weights its cuts have lost."""
    return sources.TruncatedRun(record.fields[name], record.discarded_weight)


def _angle_bound(name: str, main: QuantumRecord) -> Reals:
    """Return the rigorous bound by the sum of all angles, (time, place)."""
    return sources.truncation_bound(
        angle=main.angle, norm=main.norms[name], shape=(len(main.times), main.fields[name].shape[1])
    )


def _tighter_bounds(name: str, main: QuantumRecord) -> dict[str, Reals]:
    """Return the rigorous bounds by layers and by light cones, none where the run has not kept its cuts."""
    if main.trail is None:
        return {}
    samples = len(main.times) - 1
    found = (bound(main.trail, name, samples=samples) for bound in (layer_bound, light_cone_bound))
    return dict(zip(TIGHTER_BOUNDS, found, strict=True))


def quantum_error(
    main: QuantumRecord, companions: Mapping[str, CompanionRun], settings: RunSettings
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
    companions: Mapping[str, CompanionRun],
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
        budget = judge_observable(
            quantum=values,
            sources=quantum_sources(name, main, companions, settings)
            | _prediction_sources(name, values, predicted),
            bound=_angle_bound(name, main),
            predictions={level: found.fields[name] for level, found in predicted.items()},
            window=light_cone_window(times=main.times, positions=place, light_cone=cone, reach=reach),
            positions=place,
            times=main.times,
            resolve_at=settings.resolve_at,
        )
        budgets[name] = replace(budget, tighter=_tighter_bounds(name, main))
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
