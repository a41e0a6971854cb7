"""Layers of gates applied by a sweep of the orthogonality centre, and the ledger of what the cuts cost.

The chain is in exact mixed canonical form at every cut, so each discarded weight is the true loss of squared
norm and the angles arcsin sqrt(w) add up to a rigorous bound on the distance from the uncut state. What the
cuts of one sweep lose is mutually orthogonal, so that a whole layer turns the state by less than the sum of
its angles: the ledger keeps the weights of every layer apart.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np

from tnquench.conventions import Reals
from tnquench.errors import StateError
from tnquench.evolution.chain_state import (
    ChainState,
    by_left_charge,
    by_right_charge,
    from_left_charge,
    from_right_charge,
    move_centre,
)
from tnquench.evolution.cutting import GRAM_FLOOR, Cut, CutRule, cut
from tnquench.evolution.gates import Gate, apply_gate
from tnquench.evolution.threads import product


@dataclass
class CutLedger:
    """What the cuts have cost since the start.

    discarded_weight : sum of discarded weights of each bond, shape (bond,)
    angle            : sum of arcsin sqrt(w) of each bond, w with its rounding, shape (bond,)
    ceiling_cuts     : cuts of each bond at which the bond ceiling kept the weight above its target, shape
    (bond,)
    fallbacks        : singular value decompositions that needed the slower driver
    log_norm         : logarithm of the norm removed by non-unitary gates
    layers           : for each layer the direction of its sweep (True: rightwards) and its weights (bond,)
    two_sided        : all cuts kept Schmidt vectors (up to rounding), so that each is the image of a
    projector on the sites of either side of its bond. The subspace method's is one on the side that the sweep
    has passed
    """

    discarded_weight: Reals
    angle: Reals
    ceiling_cuts: Reals
    fallbacks: int = 0
    log_norm: float = 0.0
    cuts: int = 0
    layers: list[tuple[bool, Reals]] = field(default_factory=list)
    two_sided: bool = True

    @classmethod
    def empty(cls, sites: int) -> CutLedger:
        """Return a ledger without entries for a chain of so many sites."""
        return cls(np.zeros(sites - 1), np.zeros(sites - 1), np.zeros(sites - 1))

    def open_layer(self, *, rightwards: bool) -> None:
        """Begin a sweep, to whose layer the following cuts belong."""
        self.layers.append((rightwards, np.zeros_like(self.discarded_weight)))

    def enter(self, bond: int, result: Cut, rule: CutRule) -> None:
        """Add one cut."""
        self.layers[-1][1][bond] = min(result.discarded_weight + result.uncertainty, 1.0)
        self.two_sided &= rule.method != "subspace" or rule.weight_target < GRAM_FLOOR
        self.discarded_weight[bond] += result.discarded_weight
        self.angle[bond] += np.arcsin(np.sqrt(min(result.discarded_weight + result.uncertainty, 1.0)))
        self.ceiling_cuts[bond] += (
            result.discarded_weight > rule.weight_target * (1.0 + 1e-9) + result.uncertainty
        )
        self.fallbacks += result.fallbacks
        self.log_norm += float(np.log(result.norm))
        self.cuts += 1


def apply_layer(state: ChainState, gates: Mapping[int, Gate], rule: CutRule, ledger: CutLedger) -> None:
    """Apply gates on non-overlapping bonds in one sweep, from the end nearer to the centre to the other end.

    gates : bond -> gate, on even bonds alone or odd bonds alone. The centre ends at the far end of the sweep.
    Raises StateError if the state no longer holds finite numbers.
    """
    last = state.sites - 1
    rightwards = 2 * state.centre <= last
    ledger.open_layer(rightwards=rightwards)
    if rightwards:
        move_centre(state, 0)
        for bond in sorted(gates):
            move_centre(state, bond)
            _cut_rightwards(state, bond, gates[bond], rule, ledger)
        move_centre(state, last)
    else:
        move_centre(state, last)
        for bond in sorted(gates, reverse=True):
            move_centre(state, bond + 1)
            _cut_leftwards(state, bond, gates[bond], rule, ledger)
        move_centre(state, 0)


def _gated(pair: Reals, gate: Gate, *, sizes: tuple[int, int], copies: int, bond: int) -> float:
    """Apply a gate to two joined sites in place, make sure that the result is made of numbers, and return its
    squared norm.

    pair : one matrix a charge of the middle bond, (charge, multiplicity x left, multiplicity x right)
    sizes : of the outer bonds left and right
    """
    apply_gate(gate, pair.reshape(len(pair), copies, sizes[0], copies, sizes[1]))
    squared_norm = float(np.vdot(pair, pair))
    if not np.isfinite(squared_norm):
        message = f"the state holds values that are not finite numbers at bond {bond}"
        raise StateError(message)
    return squared_norm


def _cut_rightwards(state: ChainState, bond: int, gate: Gate, rule: CutRule, ledger: CutLedger) -> None:
    """Gate and cut a bond whose left site is the centre; the centre moves to its right site."""
    sectors, copies = state.grading.sectors, state.grading.multiplicity
    left, right = state.tensors[bond], state.tensors[bond + 1]
    guess = by_left_charge(right, sectors)
    pair = product(by_right_charge(left, sectors), guess)
    total = _gated(pair, gate, sizes=(left.shape[1], right.shape[2]), copies=copies, bond=bond)
    result = cut(pair, rule, guess=guess, squared_norm=total)
    ledger.enter(bond, result, rule)
    state.tensors[bond] = from_right_charge(result.left, copies)
    state.tensors[bond + 1] = from_left_charge(result.right, copies)
    state.set_size(bond + 1, result.right.shape[1])
    state.centre = bond + 1


def _cut_leftwards(state: ChainState, bond: int, gate: Gate, rule: CutRule, ledger: CutLedger) -> None:
    """Gate and cut a bond whose right site is the centre; the centre moves to its left site.

    Everything is done on the mirror image, so that the matrices lie in memory as they do rightwards.
    """
    sectors, copies = state.grading.sectors, state.grading.multiplicity
    left, right = state.tensors[bond], state.tensors[bond + 1]
    guess = by_right_charge(left, sectors).swapaxes(1, 2)
    pair = product(by_left_charge(right, sectors).swapaxes(1, 2), guess)
    total = _gated(pair, gate.mirrored, sizes=(right.shape[2], left.shape[1]), copies=copies, bond=bond)
    result = cut(pair, rule, guess=guess, squared_norm=total)
    ledger.enter(bond, result, rule)
    state.tensors[bond + 1] = from_left_charge(result.left.swapaxes(1, 2), copies)
    state.tensors[bond] = from_right_charge(result.right.swapaxes(1, 2), copies)
    state.set_size(bond + 1, result.right.shape[1])
    state.centre = bond
