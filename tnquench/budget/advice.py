"""Advice in words: which source limits a run in each part of its time, what would help, and at what cost.

Predictions are forecasts, not measurements: the truncation error falls with the power of the weight that the
budget itself assumes, the step's with the order of the scheme, and the cost follows the growth law of the
pilot runs (the cube root of each bond dimension grows linearly with the logarithm of the weight).
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from itertools import groupby, pairwise
from typing import Any

import numpy as np
from scipy.optimize import nnls

from tnquench.budget import sources
from tnquench.budget.companions import REFINEMENT, WEIGHT_RATIO, CompanionRun, ladder
from tnquench.budget.verdict import ObservableBudget
from tnquench.conventions import ERROR_SOURCES, PHYSICAL_SOURCES, Reals
from tnquench.observables.quench import QuantumRecord, Quench

#: Parts of the time of which the dominant source is told.
PARTS = 3

#: A source with less than this share of the summed error does not limit a run.
MINOR = 0.2

#: A deviation so many times the numerical error needs no smaller error.
AMPLE = 30.0

#: Power of the weight with which the start's error falls: its allowed distance is a share of sqrt(weight).
START_POWER = 0.5

WORDS = {
    "truncation": "truncation",
    "time_step": "the time step",
    "preparation": "the preparation of the start",
    "length": "the open ends",
    "arithmetic": "rounding",
    "prediction_grid": "the grids of the prediction",
    "strings": "the strings kept in the prediction",
}


@dataclass(frozen=True)
class Remedy:
    """What would make the error smaller: what to do, and the forecast of the error and of the cost.

    action : "weight", "step", "sites" or "" where nothing helps; error : root mean square afterwards, nan
    where it cannot be foretold; cost_factor : time of the new main run over the old one's
    """

    action: str
    error: float
    cost_factor: float


def advise(
    main: QuantumRecord,
    companions: Mapping[str, CompanionRun],
    budgets: Mapping[str, ObservableBudget],
    quench: Quench,
) -> dict[str, Any]:
    """Return the advice as plain numbers and sentences; empty where nothing measured the errors.

    "observable" : the one of the largest error beside its norm, of which the rest speaks
    "windows" : parts of the time with their dominant source, its share and the error; "dominant" : the
    sources of these parts for every observable
    "action", "error", "error_then", "cost_factor", "seconds_then" : see `Remedy`; "sentences" : in words
    """
    judged = {
        name: budget
        for name, budget in budgets.items()
        if np.isfinite(budget.numerical).all() and budget.source_norms.any() and main.norms[name] > 0.0
    }
    if not companions or not judged or len(main.times) < 2:
        return {}
    name = max(judged, key=lambda each: judged[each].numerical_norm.max() / main.norms[each])
    parts = _parts(len(main.times))
    windows = [_window(judged[name], main.times, part) for part in parts]
    remedy = _remedy(windows[-1], parts[-1], main, companions, judged[name], quench)
    return {
        "observable": name,
        "windows": windows,
        "dominant": {
            each: [_window(budget, main.times, part)["dominant"] for part in parts]
            for each, budget in judged.items()
        },
        "action": remedy.action,
        "error": windows[-1]["error"],
        "error_then": remedy.error if np.isfinite(remedy.error) else None,
        "cost_factor": remedy.cost_factor,
        "seconds_then": remedy.cost_factor * main.seconds,
        "sentences": [_dominance(name, windows), _sentence(remedy, windows[-1], judged[name], parts[-1])],
    }


def _parts(moments: int) -> list[slice]:
    """Return the samples after the start in up to PARTS parts."""
    edges = np.linspace(1, moments, min(PARTS, moments - 1) + 1).round().astype(int)
    return [slice(int(a), int(b)) for a, b in pairwise(edges)]


def _window(budget: ObservableBudget, times: Reals, part: slice) -> dict[str, Any]:
    """Return the dominant source of one part of the time, the shares of all, and the error."""
    norms = _norms(budget, part)
    total = max(sum(norms.values()), np.finfo(np.float64).tiny)
    dominant = max(norms, key=lambda source: norms[source])
    return {
        "from": float(times[part.start]),
        "until": float(times[part.stop - 1]),
        "dominant": dominant,
        "share": norms[dominant] / total,
        "shares": {source: norm / total for source, norm in norms.items()},
        "error": _mean(budget.numerical_norm[part]),
    }


def _norms(budget: ObservableBudget, part: slice) -> dict[str, float]:
    """Return each numerical source's root mean square over one part of the time."""
    return {
        source: _mean(row[part])
        for source, row in zip(ERROR_SOURCES, budget.source_norms, strict=True)
        if source not in PHYSICAL_SOURCES
    }


def _mean(values: Reals) -> float:
    return float(np.sqrt(np.mean(np.square(values))))


def _remedy(
    window: Mapping[str, Any],
    part: slice,
    main: QuantumRecord,
    companions: Mapping[str, CompanionRun],
    budget: ObservableBudget,
    quench: Quench,
) -> Remedy:
    """Return what helps against the dominant source of a part of the time."""
    norms, error = _norms(budget, part), float(window["error"])
    if window["dominant"] in ("truncation", "preparation"):
        gained = norms["truncation"] * (1.0 - REFINEMENT**-sources.TYPICAL_POWER)
        gained += norms["preparation"] * (1.0 - REFINEMENT**-START_POWER)
        return Remedy("weight", max(error - gained, 0.0), tighter_cost(main, companions, quench))
    if window["dominant"] == "time_step":
        gained = norms["time_step"] * (1.0 - 0.5**quench.trotter_order)
        return Remedy("step", max(error - gained, 0.0), 2.0)
    if window["dominant"] == "length":
        return Remedy("sites", float("nan"), 1.5)
    return Remedy("", error, 1.0)


def tighter_cost(main: QuantumRecord, companions: Mapping[str, CompanionRun], quench: Quench) -> float:
    """Return the time of a main run at a tenth of the weight over the present one's.

    Seconds = cuts * overhead + constant * sum of the cubes of the bonds, fitted to the main run and its
    companions, with bonds foretold from two weights. Where a companion's bonds are not known its seconds
    beside the main run's are continued.
    """
    rungs = ladder(companions)
    if not rungs:
        return float(np.sqrt(REFINEMENT))
    loose = companions[rungs[0]]
    further = float(np.log(REFINEMENT) / np.log(_looser_by(loose, quench)))
    if not isinstance(loose, QuantumRecord):
        return float(max(1.0, main.seconds / max(loose.seconds, 1e-9)) ** further)
    runs = [main, *(run for run in (companions[rung] for rung in rungs) if isinstance(run, QuantumRecord))]
    work = np.array([_work(run.cuts[-1], run.bond_dimension) for run in runs])
    scale = np.maximum(work[0], 1.0)
    costs, _ = nnls(work / scale, np.array([run.cpu_seconds for run in runs]))
    roots = np.cbrt(main.bond_dimension)
    grown = (roots + further * np.maximum(roots - np.cbrt(loose.bond_dimension), 0.0)) ** 3
    bonds = np.where(main.bond_dimension > quench.bond_floor, grown, main.bond_dimension)
    sites = np.arange(1, bonds.shape[1] + 1)
    depth = np.minimum(np.minimum(sites, sites[::-1]), 15)
    full = np.power(4.0**quench.chain.qubits_per_site, depth)
    bonds = np.minimum(np.minimum(bonds, full), max(quench.bond_ceiling, int(main.bond_dimension.max())))
    then = _work(main.cuts[-1], bonds) / scale
    return float(max(1.0, then @ costs / max(main.cpu_seconds, 1e-9)))


def _looser_by(loose: CompanionRun, quench: Quench) -> float:
    """Return how many times the main run's weight a companion has; where it does not say, the usual ratio."""
    ratio = loose.weight_asked / quench.discarded_weight
    return float(ratio) if np.isfinite(ratio) and ratio > 1.0 else WEIGHT_RATIO


def _work(cuts: float, bonds: Reals) -> Reals:
    """Return the number of cuts and of bonds cubed that they cut, (2,); bonds : (time, bond)."""
    middle = 0.5 * (bonds[1:] + bonds[:-1])
    return np.array([cuts, cuts * float((middle**3).mean())])


def _dominance(name: str, windows: list[dict[str, Any]]) -> str:
    """Say which source dominates in each part of the time, parts with the same one together."""
    said = name.replace("_", " ")
    spans = [list(span) for _, span in groupby(windows, key=lambda window: window["dominant"])]
    told = [
        f"{WORDS[span[0]['dominant']]} up to t = {span[-1]['until']:g} ({_share(span)})" for span in spans
    ]
    if len(spans) == 1:
        named = WORDS[windows[0]["dominant"]]
        return f"The error of the {said} comes mostly from {named} at all times ({_share(windows)} of it)."
    return f"The error of the {said} comes mostly from {', then from '.join(told)}."


def _share(windows: list[dict[str, Any]]) -> str:
    """Say the shares of the dominant source in some parts of the time."""
    shares = sorted(round(100 * window["share"]) for window in windows)
    return f"{shares[0]} to {shares[-1]} %" if shares[0] < shares[-1] else f"{shares[0]} %"


def _sentence(remedy: Remedy, window: Mapping[str, Any], budget: ObservableBudget, part: slice) -> str:
    """Say what would help and what it costs, or that nothing needs to."""
    minor = [
        f"{WORDS[source]}"
        for source in ("truncation", "time_step", "length")
        if window["shares"][source] < MINOR and source != window["dominant"]
    ]
    spared = (
        f"; {' and '.join(minor)} {'is' if len(minor) == 1 else 'are'} not what limits you" if minor else ""
    )
    now = f"{window['error']:.1e}"
    gain = f"would bring the error from {now} to {remedy.error:.1e}"
    cost = f"costs about {remedy.cost_factor:.1f} times the time of the main run"
    advice = {
        "weight": f"A tenfold smaller weight (tnquench refine) {cost} and {gain} (forecast){spared}.",
        "step": f"Half the time step {cost} and {gain} (forecast){spared}.",
        "sites": f"A longer chain or an earlier end would help: half as many sites again {cost} (forecast)"
        f"{spared}.",
        "": f"No weight, step or length of the chain makes the error of {now} smaller.",
    }[remedy.action]
    ample = [
        f"The deviation from {level} hydrodynamics is {ratio:.0f} times this error: enough to judge it."
        for level, verdict in budget.levels.items()
        if (ratio := _mean(verdict.deviation_norm[part]) / max(window["error"], 1e-300)) >= AMPLE
    ]
    return " ".join([*ample, advice])
