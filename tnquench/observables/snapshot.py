"""A running quench as plain arrays, numbers and text, from which it goes on exactly as if never interrupted.

A preparation under way is its present attempt; an evolution is the chain, its ledger and the diary. Both need
the state of the random directions that the cuts draw.
"""

from __future__ import annotations

import json
from dataclasses import asdict
from typing import Any

import numpy as np

from tnquench.evolution.chain_state import ChainState
from tnquench.evolution.cutting import CutRule
from tnquench.evolution.layers import CutLedger
from tnquench.evolution.preparation import Attempt
from tnquench.evolution.real_time import Reached
from tnquench.model.grading import Grading
from tnquench.observables.start import Start, StartFacts

Content = dict[str, Any]


def of_attempt(attempt: Attempt, rule: CutRule) -> Content:
    """Return a preparation under way."""
    return {
        "steps": attempt.steps,
        "weight_target": attempt.weight_target,
        "state": _of_state(attempt.state),
        "ledger": _of_ledger(attempt.ledger),
        "layers": attempt.layers,
        "coarser": None if attempt.coarser is None else _of_state(attempt.coarser),
        "previous": attempt.previous,
        "in_vain": attempt.in_vain,
        "largest_bond": attempt.largest_bond,
        "bound": attempt.bound,
        "random": _of_random(rule),
    }


def to_attempt(content: Content, grading: Grading, rule: CutRule) -> Attempt:
    """Return the preparation that a content holds, and set the random directions of `rule`."""
    _set_random(rule, content["random"])
    return Attempt(
        steps=content["steps"],
        weight_target=content["weight_target"],
        state=_to_state(content["state"], grading),
        ledger=_to_ledger(content["ledger"]),
        layers=content["layers"],
        coarser=None if content["coarser"] is None else _to_state(content["coarser"], grading),
        previous=content["previous"],
        in_vain=content["in_vain"],
        largest_bond=content["largest_bond"],
        bound=content["bound"],
    )


def of_start(start: Start) -> Content:
    """Return a finished start."""
    return {"state": _of_state(start.state), "facts": asdict(start.facts)}


def to_start(content: Content, grading: Grading) -> Start:
    """Return the start that a content holds."""
    return Start(_to_state(content["state"], grading), StartFacts(**content["facts"]))


def of_evolution(reached: Reached, rule: CutRule) -> Content:
    """Return an evolution under way, without its diary."""
    return {
        "time": reached.time,
        "samples": reached.samples,
        "layers": reached.layers,
        "state": _of_state(reached.state),
        "ledger": _of_ledger(reached.cuts),
        "random": _of_random(rule),
    }


def to_evolution(content: Content, grading: Grading, rule: CutRule) -> Reached:
    """Return where the evolution stands that a content holds, and set the random directions of `rule`."""
    _set_random(rule, content["random"])
    return Reached(
        time=content["time"],
        samples=content["samples"],
        layers=content["layers"],
        state=_to_state(content["state"], grading),
        cuts=_to_ledger(content["ledger"]),
    )


def _of_state(state: ChainState) -> Content:
    return {"tensors": list(state.tensors), "bonds": np.array(state.bonds), "centre": state.centre}


def _to_state(content: Content, grading: Grading) -> ChainState:
    return ChainState(grading, list(content["tensors"]), list(content["bonds"]), content["centre"])


def _of_ledger(ledger: CutLedger) -> Content:
    bonds = len(ledger.discarded_weight)
    return {
        "discarded_weight": ledger.discarded_weight,
        "angle": ledger.angle,
        "ceiling_cuts": ledger.ceiling_cuts,
        "fallbacks": ledger.fallbacks,
        "log_norm": ledger.log_norm,
        "cuts": ledger.cuts,
        "rightwards": np.array([rightwards for rightwards, _ in ledger.layers], dtype=np.bool_),
        "weights": np.array([weights for _, weights in ledger.layers]).reshape(-1, bonds),
        "two_sided": ledger.two_sided,
    }


def _to_ledger(content: Content) -> CutLedger:
    return CutLedger(
        discarded_weight=content["discarded_weight"],
        angle=content["angle"],
        ceiling_cuts=content["ceiling_cuts"],
        fallbacks=content["fallbacks"],
        log_norm=content["log_norm"],
        cuts=content["cuts"],
        layers=list(zip(content["rightwards"].tolist(), content["weights"], strict=True)),
        two_sided=content["two_sided"],
    )


def _of_random(rule: CutRule) -> str:
    """Return the state of the random directions as JSON text: it holds integers of 128 bits."""
    return json.dumps(rule.random.bit_generator.state)


def _set_random(rule: CutRule, text: str) -> None:
    rule.random.bit_generator.state = json.loads(text)
