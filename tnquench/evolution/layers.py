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
from tnquench.evolution.chain_state import ChainState, move_centre
from tnquench.evolution.cutting import GRAM_FLOOR, Cut, CutRule, cut
from tnquench.evolution.gates import Gate, apply_gate


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


def joined_pair(state: ChainState, bond: int) -> Reals:
    """Return the two-site tensor of sites `bond`, `bond + 1`: (middle charge, multiplicity, multiplicity,
    left, right)."""
    a, b = state.tensors[bond], state.tensors[bond + 1]
    pair = np.empty((state.grading.sectors, a.shape[0], b.shape[0], a.shape[1], b.shape[2]))
    for charge, block in enumerate(state.sector_slices(bond + 1)):
        np.matmul(a[:, None, :, block], b[None, :, block, :], out=pair[charge])
    return pair


def _gated_pair(state: ChainState, bond: int, gate: Gate) -> Reals:
    """Join two sites, apply the gate, and make sure that the result is made of numbers."""
    pair = joined_pair(state, bond)
    apply_gate(gate, pair, left_slices=state.sector_slices(bond), right_slices=state.sector_slices(bond + 2))
    if not np.isfinite(float(np.vdot(pair, pair))):
        message = f"the state holds values that are not finite numbers at bond {bond}"
        raise StateError(message)
    return pair


def _cut_rightwards(state: ChainState, bond: int, gate: Gate, rule: CutRule, ledger: CutLedger) -> None:
    """Gate and cut a bond whose left site is the centre; the centre moves to its right site."""
    pair = _gated_pair(state, bond, gate)
    sectors, copies_left, copies_right, left, right = pair.shape
    blocks = [
        pair[charge].transpose(0, 2, 1, 3).reshape(copies_left * left, copies_right * right)
        for charge in range(sectors)
    ]
    old = state.tensors[bond + 1]
    guess = [
        old[:, block, :].transpose(1, 0, 2).reshape(-1, copies_right * right)
        for block in state.sector_slices(bond + 1)
    ]
    result = cut(blocks, rule, guess=guess)
    ledger.enter(bond, result, rule)
    state.tensors[bond] = np.concatenate(
        [part.reshape(copies_left, left, -1) for part in result.left], axis=2
    )
    state.tensors[bond + 1] = np.concatenate(
        [part.reshape(-1, copies_right, right).transpose(1, 0, 2) for part in result.right], axis=1
    )
    state.bonds[bond + 1] = np.array([len(part) for part in result.right], dtype=np.int64)
    state.centre = bond + 1


def _cut_leftwards(state: ChainState, bond: int, gate: Gate, rule: CutRule, ledger: CutLedger) -> None:
    """Gate and cut a bond whose right site is the centre; the centre moves to its left site."""
    pair = _gated_pair(state, bond, gate)
    sectors, copies_left, copies_right, left, right = pair.shape
    blocks = [
        pair[charge].transpose(1, 3, 0, 2).reshape(copies_right * right, copies_left * left)
        for charge in range(sectors)
    ]
    old = state.tensors[bond]
    guess = [
        old[:, :, block].transpose(2, 0, 1).reshape(-1, copies_left * left)
        for block in state.sector_slices(bond + 1)
    ]
    result = cut(blocks, rule, guess=guess)
    ledger.enter(bond, result, rule)
    state.tensors[bond + 1] = np.concatenate(
        [part.reshape(copies_right, right, -1).transpose(0, 2, 1) for part in result.left], axis=1
    )
    state.tensors[bond] = np.concatenate(
        [part.reshape(-1, copies_left, left).transpose(1, 2, 0) for part in result.right], axis=2
    )
    state.bonds[bond + 1] = np.array([len(part) for part in result.right], dtype=np.int64)
    state.centre = bond
