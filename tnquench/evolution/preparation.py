"""The start sigma = sqrt(rho_0) by imaginary-time evolution from the identity, with its own error.

rho_0 = exp(-K)/Z, so sigma is proportional to exp(-K/2), reached by exp(-K/4) on each side of the identity.
"""

from __future__ import annotations

from collections.abc import Sequence
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


@dataclass(frozen=True)
class Preparation:
    """The start and what is known of it.

    state : unit vector proportional to exp(-K/2); coarser : the same, one refinement earlier
    error_share : estimated error of the state as a fraction of its difference from the coarser one
    distance : estimated norm of its difference from the exact start; an expectation value moves by at most
               2 distance times the operator's norm, now and at any later time
    steps : imaginary-time steps taken; cuts : ledger of the final preparation
    log_partition_function : logarithm of Tr exp(-K)
    reached : whether the distance is under the one asked for
    """

    state: ChainState
    coarser: ChainState
    error_share: float
    distance: float
    steps: int
    cuts: CutLedger
    log_partition_function: float
    reached: bool


def prepare(
    terms: Sequence[Operator], *, sites: int, grading: Grading, distance_target: float, rule: CutRule
) -> Preparation:
    """Prepare the start, refining it until the state is within `distance_target` of the exact one.

    terms : k_j with sum_j k_j = K, one operator a bond, on one site, two neighbours, or sites i and i + 2
    distance_target : norm of the state's allowed error; rule : how bonds are cut at first
    Each refinement halves the step and, where they lose too much, tightens the cuts. The distance of the last
    two states measures the coarser one's error; the finer one's follows from the ratio of the last two
    distances, but no less than the scheme promises, and the cuts' own error is added. If refining no longer
    helps, which is what a bond ceiling that binds looks like, the last state is returned with `reached`
    false.
    """
    steps, previous, in_vain = _steps_at_first(terms), float("inf"), 0
    most_steps = steps * 2**MOST_REFINEMENTS
    state, ledger = _imaginary_evolution(terms, sites, grading, steps, rule)
    while True:
        steps *= 2
        expected = 0.0 if previous == float("inf") else LIMIT_SHARE**2 * previous
        rule = _tightened(rule, state, ledger, goal=max(distance_target, expected))
        coarser, (state, ledger) = state, _imaginary_evolution(terms, sites, grading, steps, rule)
        apart = distance(coarser, state)
        step_error, cut_error = _share(apart / previous) * apart, _cut_error(ledger)
        error = step_error + cut_error
        in_vain = in_vain + 1 if apart > 0.5 * previous else 0
        hopeless = in_vain > MOST_IN_VAIN or 2 * steps > most_steps
        if ledger.ceiling_cuts.any():  # shorter steps only mean more cuts
            hopeless = hopeless or in_vain > 0 or step_error < cut_error
        if error <= distance_target or hopeless:
            break
        previous = max(apart, NEGLIGIBLE)
    return Preparation(
        state=state,
        coarser=coarser,
        error_share=error / apart if apart > 0.0 else 1.0,
        distance=error,
        steps=steps,
        cuts=ledger,
        log_partition_function=2.0 * ledger.log_norm + sites * grading.qubits_per_site * log(2.0),
        reached=error <= distance_target,
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


def _imaginary_evolution(
    terms: Sequence[Operator], sites: int, grading: Grading, steps: int, rule: CutRule
) -> tuple[ChainState, CutLedger]:
    """Return exp(-K/2) normalised, and its ledger with the logarithm of its norm relative to the
    identity's."""
    state = infinite_temperature(sites, grading)
    ledger = CutLedger.empty(sites)
    groups = split(terms, sites=sites, qubits_per_site=grading.qubits_per_site)
    gates = LayerGates(
        groups,
        grading,
        lambda term, first, fraction: imaginary_time_gate(
            term, beta=0.25 * fraction / steps, first=first, grading=grading
        ),
    )
    for layer in plan(groups, SCHEME, steps):
        apply_layer(state, gates.of(layer), rule, ledger)
    return state, ledger
