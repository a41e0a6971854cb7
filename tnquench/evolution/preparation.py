"""The start sigma = sqrt(rho_0) by imaginary-time evolution from the identity, with its own error.

rho_0 = exp(-K)/Z, so sigma is proportional to exp(-K/2), reached by exp(-K/4) on each side of the identity.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from tnquench.evolution.chain_state import ChainState, distance, infinite_temperature
from tnquench.evolution.cutting import CutRule
from tnquench.evolution.gates import Gate, imaginary_time_gate
from tnquench.evolution.layers import CutLedger, apply_layer
from tnquench.evolution.trotter import SCHEMES, half_layers
from tnquench.model.grading import Grading
from tnquench.model.pauli import Operator

SCHEME = SCHEMES[4]
FEWEST_STEPS, MOST_STEPS = 2, 512


@dataclass(frozen=True)
class Preparation:
    """The start and what is known of it.

    state : unit vector proportional to exp(-K/2)
    distance : estimated norm of its difference from the exact start; an expectation value moves by at most
               2 distance times the operator's norm, now and at any later time
    steps : imaginary-time steps taken; cuts : ledger of the final preparation
    log_partition_function : logarithm of Tr exp(-K)
    reached : whether the distance is under the one asked for
    """

    state: ChainState
    distance: float
    steps: int
    cuts: CutLedger
    log_partition_function: float
    reached: bool


def prepare(terms: Sequence[Operator], *, sites: int, grading: Grading, distance_target: float, rule: CutRule) -> Preparation:
    """Prepare the start, halving the step until the state is within `distance_target` of the exact one.

    terms : k_j with sum_j k_j = K, one operator a bond; distance_target : norm of the state's allowed error
    rule  : how bonds are cut on the way
    The distance of the last two states measures the coarser one's error; the finer one's own Trotter error is smaller
    by 2^order, but errors of the cuts do not shrink, so the estimate never falls below what the last halving changed
    divided by 4. If halving no longer helps, the best state is returned with `reached` false.
    """
    steps = FEWEST_STEPS
    state, ledger, log_norm = _imaginary_evolution(terms, sites, grading, steps, rule)
    previous = float("inf")
    while True:
        steps *= 2
        finer, ledger, log_norm = _imaginary_evolution(terms, sites, grading, steps, rule)
        apart = distance(state, finer)
        estimate = apart / 4.0 if apart > previous / 2**SCHEME.order * 2.0 else apart / (2**SCHEME.order - 1)
        state = finer
        stalled = apart > 0.5 * previous
        if estimate <= distance_target or stalled or 2 * steps > MOST_STEPS:
            break
        previous = apart
    log_partition = 2.0 * log_norm + sites * _LOG_TWO
    return Preparation(state, estimate, steps, ledger, log_partition, estimate <= distance_target)


_LOG_TWO = 0.6931471805599453


def _imaginary_evolution(
    terms: Sequence[Operator], sites: int, grading: Grading, steps: int, rule: CutRule
) -> tuple[ChainState, CutLedger, float]:
    """Return exp(-K/2) normalised, its ledger, and the logarithm of its norm relative to the identity's."""
    state = infinite_temperature(sites, grading)
    ledger = CutLedger.empty(sites)
    known: dict[tuple[int, float], dict[int, Gate]] = {}
    for parity, fraction in half_layers(SCHEME, steps):
        key = (parity, round(fraction, 14))
        if key not in known:
            known[key] = {
                bond: imaginary_time_gate(terms[bond], beta=0.25 * fraction / steps, first=bond, grading=grading)
                for bond in range(parity, sites - 1, 2)
            }
        apply_layer(state, known[key], rule, ledger)
    return state, ledger, ledger.log_norm
