"""The start sigma = sqrt(rho_0) by imaginary-time evolution from the identity, with its own error.

rho_0 = exp(-K)/Z, so sigma is proportional to exp(-K/2), reached by exp(-K/4) on each side of the identity.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from math import ceil, log, sqrt

import numpy as np

from tnquench.evolution.chain_state import ChainState, distance, infinite_temperature
from tnquench.evolution.cutting import CutRule
from tnquench.evolution.gates import imaginary_time_gate
from tnquench.evolution.layers import CutLedger, apply_layer
from tnquench.evolution.splitting import LayerGates, plan, split
from tnquench.evolution.trotter import SCHEMES
from tnquench.model.grading import Grading
from tnquench.model.pauli import Operator

SCHEME = SCHEMES[4]

#: The first attempt takes at least this many steps, and so many that no step multiplies a bond's weights by
#: more than exp(2 LONGEST_STEP): longer ones say nothing of the error of shorter ones.
FEWEST_STEPS, LONGEST_STEP = 2, 0.8

#: Each refinement halves the step; more than this many are not worth their cost.
MOST_REFINEMENTS = 7

#: Error of a state's step as a fraction of its distance from the coarser one, in the limit of short steps;
#: what it is multiplied by for safety; and the fraction taken while only one distance is known.
LIMIT_SHARE, SAFETY, SHARE_AT_FIRST = 1.0 / (2**SCHEME.order - 1), 1.5, 0.3

#: Error of a state's cuts in units of the root of their summed weights, to which errors of different cuts add
#: up if they are orthogonal. Measured against nearly uncut states (xxz at D = 0.5 and 1, beta 4 and 10, 12
#: and 16 sites, weights 1e-9 to 1e-15): 0.3 to 1.4 where the weight decides, 2.1 where the bond floor does.
CUT_SHARE = 2.0

#: Refinements in a row that may fail to halve the distance before the start is given up.
MOST_IN_VAIN = 1

#: Distances below this are rounding.
NEGLIGIBLE = 1e-15

#: Part of the allowed error that the cuts may use, and most by which a refinement divides their weight if
#: they use more.
CUTS_PART, MOST_TIGHTENING, TIGHTEST_WEIGHT = 0.35, 1e4, 1e-22

#: The same division where most bonds are at their floor: the loss there hardly follows the weight.
TIGHTENING_AT_FLOOR = 100.0


#: The state that tells what cuts do to observables may lose so many times more a cut, but no more than this.
LOOSENING, LOOSEST_WEIGHT = 100.0, 1e-3


@dataclass(frozen=True)
class Preparation:
    """The start and what is known of it.

    state : unit vector proportional to exp(-K/2); coarser : the same, one refinement earlier
    step_share : estimated error of the state's step as a fraction of its difference from the coarser one
    distance : estimated norm of its difference from the exact start; an expectation value moves by at most
               2 distance times the operator's norm, now and at any later time
    steps : imaginary-time steps taken; weight_target, cuts : of the final preparation, and its ledger
    log_partition_function : logarithm of Tr exp(-K)
    reached : whether the distance is under the one asked for
    largest_bond, bound : largest bond dimension on the way, and whether the bond ceiling has bound any cut
    """

    state: ChainState
    coarser: ChainState
    step_share: float
    distance: float
    steps: int
    weight_target: float
    cuts: CutLedger
    log_partition_function: float
    reached: bool
    largest_bond: int
    bound: bool


@dataclass
class Attempt:
    """Where a preparation stands: one imaginary-time evolution under way, and what came before it.

    steps, weight_target : of this attempt; layers : those of its layers that are applied
    state, ledger : the chain so far, and what its cuts have cost in this attempt
    coarser : the state of the attempt before, None in the first; previous : distance of the two before
    (infinite until there are two); in_vain : refinements in a row that have not halved the distance
    largest_bond, bound : largest bond dimension after any layer of all attempts so far, and whether the bond
    ceiling has bound any cut
    """

    steps: int
    weight_target: float
    state: ChainState
    ledger: CutLedger
    layers: int = 0
    coarser: ChainState | None = None
    previous: float = float("inf")
    in_vain: int = 0
    largest_bond: int = 1
    bound: bool = False


def prepare(
    terms: Sequence[Operator],
    *,
    sites: int,
    grading: Grading,
    distance_target: float,
    rule: CutRule,
    after_layer: Callable[[Attempt], None] | None = None,
    resumed: Attempt | None = None,
) -> Preparation:
    """Prepare the start, refining it until the state is within `distance_target` of the exact one.

    terms : k_j with sum_j k_j = K, one operator a bond, on one site, two neighbours, or sites i and i + 2
    distance_target : norm of the state's allowed error; rule : how bonds are cut at first
    after_layer : called after each layer with where the preparation stands; resumed : where to go on
    Each refinement halves the step and, where they lose too much, tightens the cuts. The distance of the last
    two states measures the coarser one's error; the finer one's follows from the ratio of the last two
    distances, but no less than the scheme promises, and the cuts' own error is added. If refining no longer
    helps, which is what a bond ceiling that binds looks like, the last state is returned with `reached`
    false.
    """
    at_first = _steps_at_first(terms)
    attempt = resumed or _begun(at_first, rule.weight_target, sites, grading)
    while True:
        rule = replace(rule, weight_target=attempt.weight_target)
        _finish(attempt, terms, rule, after_layer)
        if attempt.coarser is not None:
            apart = distance(attempt.coarser, attempt.state)
            step_error, cut_error = _share(apart / attempt.previous) * apart, _cut_error(attempt.ledger)
            attempt.in_vain = attempt.in_vain + 1 if apart > 0.5 * attempt.previous else 0
            if step_error + cut_error <= distance_target or _hopeless(
                attempt, step_error, cut_error, most_steps=at_first * 2**MOST_REFINEMENTS
            ):
                return _prepared(attempt, apart, step_error, cut_error, distance_target)
            attempt.previous = max(apart, NEGLIGIBLE)
        attempt = _refined(attempt, rule, distance_target)


def _begun(steps: int, weight_target: float, sites: int, grading: Grading) -> Attempt:
    """Return an attempt of which no layer is applied."""
    return Attempt(steps, weight_target, infinite_temperature(sites, grading), CutLedger.empty(sites))


def _refined(attempt: Attempt, rule: CutRule, distance_target: float) -> Attempt:
    """Return the next attempt: half the step, and cuts as tight as it needs."""
    expected = 0.0 if attempt.previous == float("inf") else LIMIT_SHARE**2 * attempt.previous
    tighter = _tightened(rule, attempt.state, attempt.ledger, goal=max(distance_target, expected))
    begun = _begun(2 * attempt.steps, tighter.weight_target, attempt.state.sites, attempt.state.grading)
    return replace(
        begun,
        coarser=attempt.state,
        previous=attempt.previous,
        in_vain=attempt.in_vain,
        largest_bond=attempt.largest_bond,
        bound=attempt.bound,
    )


def _hopeless(attempt: Attempt, step_error: float, cut_error: float, *, most_steps: int) -> bool:
    """Whether another refinement would not help."""
    hopeless = attempt.in_vain > MOST_IN_VAIN or 2 * attempt.steps > most_steps
    if attempt.ledger.ceiling_cuts.any():  # shorter steps only mean more cuts
        hopeless = hopeless or attempt.in_vain > 0 or step_error < cut_error
    return hopeless


def loosely_cut(
    terms: Sequence[Operator], start: Preparation, *, rule: CutRule
) -> tuple[ChainState, CutLedger]:
    """Return the coarser state of a preparation once more, with cuts that lose far more, and their ledger.

    rule : the one with which the preparation began; floor and ceiling are halved, as they may bind
    """
    looser = replace(
        rule,
        weight_target=min(LOOSENING * start.weight_target, LOOSEST_WEIGHT),
        bond_floor=max(1, rule.bond_floor // 2),
        bond_ceiling=max(1, rule.bond_ceiling // 2),
    )
    attempt = _begun(start.steps // 2, looser.weight_target, start.state.sites, start.state.grading)
    _finish(attempt, terms, looser, None)
    return attempt.state, attempt.ledger


def _prepared(
    attempt: Attempt, apart: float, step_error: float, cut_error: float, distance_target: float
) -> Preparation:
    """Return the finished preparation; apart : distance of its last two states; errors : of the last."""
    state, ledger, coarser = attempt.state, attempt.ledger, attempt.coarser
    error = step_error + cut_error
    assert coarser is not None, "a start is judged by the one before"
    return Preparation(
        state=state,
        coarser=coarser,
        step_share=step_error / apart if apart > 0.0 else 1.0,
        distance=error,
        steps=attempt.steps,
        weight_target=attempt.weight_target,
        cuts=ledger,
        log_partition_function=2.0 * ledger.log_norm + state.sites * state.grading.qubits_per_site * log(2.0),
        reached=error <= distance_target,
        largest_bond=attempt.largest_bond,
        bound=attempt.bound,
    )


def _steps_at_first(terms: Sequence[Operator]) -> int:
    """Return the number of steps of the first attempt, from a bound on the norm of the strongest term."""
    strongest = max((sum(map(abs, term.values())) for term in terms), default=0.0)
    return max(FEWEST_STEPS, ceil(0.25 * strongest / LONGEST_STEP))


def _share(ratio: float) -> float:
    """Return the step's error in units of the last distance, from the ratio of the last two (0: but one)."""
    return min(SAFETY * max(LIMIT_SHARE, ratio), 1.0) if ratio > 0.0 else SHARE_AT_FIRST


def _cut_error(ledger: CutLedger) -> float:
    """Return the estimated norm of the error that the cuts have left in the state.

    Cuts at a ceiling lose nearly the same again and again: their errors add up like the angles of the bound.
    """
    if ledger.ceiling_cuts.any():
        return min(float(ledger.angle.sum()), sqrt(2.0))
    return CUT_SHARE * sqrt(float(ledger.discarded_weight.sum()))


def _tightened(rule: CutRule, state: ChainState, ledger: CutLedger, *, goal: float) -> CutRule:
    """Return the rule for twice as many cuts whose error is to be a part of `goal`, never a looser one.

    state, ledger : the state cut under `rule`, and what the cuts have cost
    """
    tightening = 2.0 * (_cut_error(ledger) / (CUTS_PART * goal)) ** 2
    if tightening <= 1.0:
        return rule
    if np.median(state.bond_dimensions) <= rule.bond_floor:
        tightening = max(tightening, TIGHTENING_AT_FLOOR)
    weight = rule.weight_target / min(tightening, MOST_TIGHTENING)
    return replace(rule, weight_target=max(weight, TIGHTEST_WEIGHT))


def _finish(
    attempt: Attempt,
    terms: Sequence[Operator],
    rule: CutRule,
    after_layer: Callable[[Attempt], None] | None,
) -> None:
    """Apply the layers that an attempt still lacks: its state becomes exp(-K/2) normalised, and its ledger
    holds the logarithm of the norm relative to the identity's."""
    grading = attempt.state.grading
    groups = split(terms, sites=attempt.state.sites, qubits_per_site=grading.qubits_per_site)
    gates = LayerGates(
        groups,
        grading,
        lambda term, fraction: imaginary_time_gate(
            term, beta=0.25 * fraction / attempt.steps, first=0, grading=grading
        ),
    )
    for layer in plan(groups, SCHEME, attempt.steps)[attempt.layers :]:
        apply_layer(attempt.state, gates.of(layer), rule, attempt.ledger)
        attempt.layers += 1
        attempt.largest_bond = max(attempt.largest_bond, int(attempt.state.bond_dimensions.max(initial=1)))
        attempt.bound = attempt.bound or bool(attempt.ledger.ceiling_cuts.any())
        if after_layer is not None:
            after_layer(attempt)
