"""The budget of one observable: all sources, their sum, the deviation from each prediction and the
verdict."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np

from tnquench.conventions import ERROR_SOURCES, PHYSICAL_SOURCES, Reals

#: Kind of each source: an estimate from companions or refinement, or a bound that holds without them.
SOURCE_KINDS: dict[str, str] = {
    "truncation": "estimate",
    "time_step": "estimate",
    "preparation": "estimate",
    "length": "estimate",
    "arithmetic": "estimate",
    "prediction_grid": "estimate",
    "strings": "estimate",
    "initial_gradient": "physics",
}


#: Names of the rigorous bounds on truncation beside the sum of all angles.
TIGHTER_BOUNDS = ("layer_bound", "light_cone_bound")

#: Reach of a sharp step: the points next to the joint, so that no window is empty.
SHARP_REACH = 1.5

#: Spacings next to an open end, where the chain feels its end already at t = 0.
END_MARGIN = 4.0

#: A chain of fewer places has no interior to speak of.
SHORT_CHAIN = 12


@dataclass(frozen=True)
class LevelVerdict:
    """The comparison with one hydrodynamic level.

    deviation (time, place) : quantum minus prediction
    resolved (time, place) : where it exceeds the numerical error, away from the open ends
    deviation_norm (time,) : root mean square over the light-cone window
    resolved_share (time,) : share of the window's points
    first_resolved_time : first sample after the start with a resolved point in the window, nan if there is
    none; at t = 0 only the start's own mismatch is resolved
    """

    deviation: Reals
    resolved: np.ndarray
    deviation_norm: Reals
    resolved_share: Reals
    first_resolved_time: float


@dataclass(frozen=True)
class ObservableBudget:
    """Errors of one observable and the verdict on each level.

    error (source, time, place) : by source; numerical (time, place) : sum of all but the physical ones
    bound (time, place) : rigorous bound on the real-time truncation; tighter (time, place) : further ones by
    name, where the run kept what they need
    numerical_norm (time,) : root mean square over the light-cone window
    dominant_source (time,) : index of the largest source there; source_norms (source, time) : of all
    levels : verdict by hydrodynamic level
    """

    error: Reals
    numerical: Reals
    bound: Reals
    numerical_norm: Reals
    dominant_source: np.ndarray
    levels: dict[str, LevelVerdict]
    tighter: dict[str, Reals] = field(default_factory=dict)
    source_norms: Reals = field(default_factory=lambda: np.zeros((len(ERROR_SOURCES), 0)))


def light_cone_window(
    *, times: Reals, positions: Reals, light_cone: tuple[float, float], reach: float = SHARP_REACH
) -> np.ndarray:
    """Return which points (time, place) the fastest excitations from the middle have reached.

    light_cone : leftmost and rightmost velocity
    reach : distance from x = 0 up to which the start itself varies; infinite where it varies everywhere
    The last END_MARGIN spacings before each open end are left out.
    """
    left, right = light_cone
    clock, place = times[:, None], positions[None, :]
    inside = (place >= left * clock - reach) & (place <= right * clock + reach)
    return np.asarray(inside & interior(positions)[None, :])


def interior(positions: Reals) -> np.ndarray:
    """Return which places (place,) lie more than END_MARGIN from the open ends; all of them in a short
    chain."""
    depth = np.abs(positions).max() - np.abs(positions)
    return np.asarray((depth >= END_MARGIN) | (len(positions) < SHORT_CHAIN))


def window_norm(values: Reals, window: np.ndarray) -> Reals:
    """Return the root mean square of values (time, place) over each time's window, shape (time,)."""
    return np.asarray(np.sqrt((np.square(values) * window).sum(axis=1) / np.maximum(window.sum(axis=1), 1)))


def judge_observable(
    *,
    quantum: Reals,
    sources: Mapping[str, Reals],
    bound: Reals,
    predictions: Mapping[str, Reals],
    window: np.ndarray,
    positions: Reals,
    times: Reals,
    resolve_at: float,
) -> ObservableBudget:
    """Sum the sources of one observable and give the verdict on each prediction.

    quantum, every source, bound, every prediction : (time, place); sources missing from the mapping count as
    zero
    window : (time, place) of bool; positions : (place,); resolve_at : k, a deviation counts as resolved
    beyond k times the numerical error
    """
    error = np.stack([np.broadcast_to(sources.get(name, 0.0), quantum.shape) for name in ERROR_SOURCES])
    numerical_rows = [index for index, name in enumerate(ERROR_SOURCES) if name not in PHYSICAL_SOURCES]
    numerical = error[numerical_rows].sum(axis=0)
    norms = np.stack([window_norm(row, window) for row in error])
    return ObservableBudget(
        error=error,
        numerical=numerical,
        bound=bound,
        numerical_norm=window_norm(numerical, window),
        dominant_source=np.array(numerical_rows)[norms[numerical_rows].argmax(axis=0)],
        source_norms=norms,
        levels={
            level: _level_verdict(
                quantum - prediction, resolve_at * numerical, window, interior(positions), times
            )
            for level, prediction in predictions.items()
        },
    )


def _level_verdict(
    deviation: Reals, threshold: Reals, window: np.ndarray, judgeable: np.ndarray, times: Reals
) -> LevelVerdict:
    """Compare a deviation with k times the numerical error, point by point, away from the open ends."""
    resolved = (np.abs(deviation) > threshold) & judgeable[None, :]
    inside = resolved & window
    seen = inside.any(axis=1) & (times > 0.0)
    return LevelVerdict(
        deviation=deviation,
        resolved=resolved,
        deviation_norm=window_norm(deviation, window),
        resolved_share=inside.sum(axis=1) / np.maximum(window.sum(axis=1), 1),
        first_resolved_time=float(times[seen.argmax()]) if seen.any() else float("nan"),
    )
