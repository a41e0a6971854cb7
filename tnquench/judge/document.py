"""A judgement as plain numbers, for JSON."""

from __future__ import annotations

from dataclasses import asdict
from math import isfinite
from typing import Any

from tnquench.judge.conservation import Check, Conservation
from tnquench.judge.deviations import Window
from tnquench.judge.judgement import Judgement, ObservableJudgement
from tnquench.judge.sentence import sentence, standing


def as_dict(judgement: Judgement) -> dict[str, Any]:
    """Return everything a judgement says as nested mappings and lists; what is not known is None."""
    allowance = judgement.allowance
    document = {
        "verdict": "passed" if judgement.passed else "failed",
        "sentence": sentence(judgement),
        "candidate": judgement.candidate.name,
        "candidate_is": judgement.candidate.origin,
        "against": str(judgement.against),
        "allowed": {"excess_rms": allowance.excess, "level": allowance.level or None},
        "observables": {each.name: _observable(each) for each in judgement.observables},
        "conservation": {each.name: _conservation(each) for each in judgement.conservation},
        "remarks": list(judgement.remarks),
    }
    known: dict[str, Any] = _finite(document)
    return known


def _observable(observable: ObservableJudgement) -> dict[str, Any]:
    found = observable.found
    return {
        "passed": observable.passed,
        "points": observable.used,
        "left_out": dict(observable.faced.left_out),
        "interpolated_points": observable.interpolated,
        "points_where_interpolation_dominates": observable.coarse,
        "reduced_chi_square": found.chi_square,
        "rms_deviation": found.rms,
        "largest_deviation": found.largest,
        "rms_error": found.error,
        "rms_beyond_error": found.excess,
        "resolve_at": observable.resolve_at,
        "wrong_points": found.wrong_count,
        "first_wrong_time": observable.first_wrong,
        "worst": [asdict(point) for point in found.worst],
        "windows": [_window(window) for window in found.windows],
        "levels": {
            level: {
                "points": comparison.points,
                "rms_deviation": comparison.level_rms,
                "candidate_rms_deviation": comparison.rms,
                "rms_error": comparison.error,
                "slack": comparison.slack,
                "rms_distance_from_candidate": comparison.apart,
                "indistinguishable": comparison.indistinguishable,
                "no_farther": comparison.no_farther,
                "in_words": standing(comparison, level),
            }
            for level, comparison in found.levels.items()
        },
    }


def _window(window: Window) -> dict[str, Any]:
    return {
        "from": window.start,
        "to": window.end,
        "points": window.points,
        "rms_deviation": window.rms,
        "largest_deviation": window.largest,
        "rms_error": window.error,
        "wrong_points": window.wrong,
        "rms_deviation_of_levels": window.levels,
    }


def _conservation(found: Conservation) -> dict[str, Any]:
    return {
        "total": _check(found.total),
        "continuity_equation": _check(found.local),
        "not_checked": found.reason or None,
    }


def _check(check: Check | None) -> dict[str, Any] | None:
    return None if check is None else {**asdict(check), "holds": check.holds}


def _finite(value: Any) -> Any:
    """Return nested values with None for numbers that are not finite."""
    if isinstance(value, dict):
        return {key: _finite(entry) for key, entry in value.items()}
    if isinstance(value, list):
        return [_finite(entry) for entry in value]
    return None if isinstance(value, float) and not isfinite(value) else value
