"""The start sigma = sqrt(rho_0) by imaginary-time evolution from the identity, with its own error.

rho_0 = exp(-K)/Z, so sigma is proportional to exp(-K/2), reached by exp(-K/4) on each side of the identity.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from math import log

from tnquench.evolution.chain_state import ChainState, distance, infinite_temperature
from tnquench.evolution.cutting import CutRule
from tnquench.evolution.gates import Gate, imaginary_time_gate
from tnquench.evolution.layers import CutLedger, apply_layer
from tnquench.evolution.trotter import SCHEMES, half_layers
from tnquench.model.grading import Grading
from tnquench.model.pauli import Operator

SCHEME = SCHEMES[4]
FEWEST_STEPS, MOST_STEPS = 2, 512

#: Each refinement halves the step and divides the weight of the cuts by this, so that both errors shrink.
TIGHTENING = 100.0
TIGHTEST_WEIGHT = 1e-22

#: Error of a state as a fraction of its distance from the coarser one: in the limit 1/(2^order - 1) for the
#: step and 1/sqrt(TIGHTENING) for the cuts, here with room to spare, and more while only one distance is
#: known.
LEAST_SHARE, SHARE_AT_FIRST = 2.0 / (2**SCHEME.order - 1), 0.3


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

    terms : k_j with sum_j k_j = K, one operator a bond; distance_target : norm of the state's allowed error
    rule  : how bonds are cut at first
    Each refinement halves the step and tightens the cuts. The distance of the last two states measures the
    coarser one's error; the finer one's is taken as the ratio of the last two distances, but no less than the
    scheme and the cuts promise. If refining no longer helps, which is what a bond ceiling that binds looks
    like, the last state is returned with `reached` false.
    """
    steps, previous = FEWEST_STEPS, float("inf")
    state, ledger = _imaginary_evolution(terms, sites, grading, steps, rule)
    while True:
        steps *= 2
        rule = replace(rule, weight_target=max(rule.weight_target / TIGHTENING, TIGHTEST_WEIGHT))
        coarser, (state, ledger) = state, _imaginary_evolution(terms, sites, grading, steps, rule)
        apart = distance(coarser, state)
        share = SHARE_AT_FIRST if previous == float("inf") else min(max(LEAST_SHARE, apart / previous), 1.0)
        reached = share * apart <= distance_target
        if reached or apart > 0.5 * previous or 2 * steps > MOST_STEPS:
            break
        previous = apart
    log_partition = 2.0 * ledger.log_norm + sites * log(2.0)
    return Preparation(state, coarser, share, share * apart, steps, ledger, log_partition, reached)


def _imaginary_evolution(
    terms: Sequence[Operator], sites: int, grading: Grading, steps: int, rule: CutRule
) -> tuple[ChainState, CutLedger]:
    """Return exp(-K/2) normalised, and its ledger with the logarithm of its norm relative to the
    identity's."""
    state = infinite_temperature(sites, grading)
    ledger = CutLedger.empty(sites)
    known: dict[tuple[int, float], dict[int, Gate]] = {}
    for parity, fraction in half_layers(SCHEME, steps):
        key = (parity, round(fraction, 14))
        if key not in known:
            known[key] = {
                bond: imaginary_time_gate(
                    terms[bond], beta=0.25 * fraction / steps, first=bond, grading=grading
                )
                for bond in range(parity, sites - 1, 2)
            }
        apply_layer(state, known[key], rule, ledger)
    return state, ledger
