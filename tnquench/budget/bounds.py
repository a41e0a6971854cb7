"""Rigorous bounds on what the cuts of the real-time evolution do to an observable.

All hold relative to the evolution of the same prepared start by the same gates without cuts; the start's own
error and the time step are not in them. sigma is a unit vector in the space of operators, O acts on it from
the left, and s denotes the spread of O, its largest minus its least eigenvalue (s <= 2 ||O||).

1. Angles. Unit vectors at an angle a give values of O that differ by at most s sin(a). A cut of weight w
   turns the vector by arcsin sqrt(w), and angles obey the triangle inequality.
2. Layers. A sweep to the right cuts at bonds b_1 < b_2 < ..., each cut a projector P_k on the sites left of
   b_k. What follows in the sweep acts right of b_k or within the range of P_k, so that what P_k removes stays
   orthogonal to all that remains: the losses of one sweep are mutually orthogonal, and the layer turns the
   vector by the angle A with cos(A)^2 = prod (1 - w_k), about sqrt(sum w_k) instead of sum sqrt(w_k). Between
   layers angles add up. (A sweep to the left is the mirror image.)
3. Light cone. By telescoping over cuts, error = sum of the changes of <O_l>, where O_l is O carried back by
   the uncut gates from the sample to the layer l of the cuts. An operator A on the side of the bond on which
   the projector P does not act commutes with it, and then <A> changes only by w (<A> in the kept part -
   <A> in the lost part), hence by at most s w. If all gates on one bond b beyond O are left out, O_l turns
   into such an operator A with the spread of O, and ||O_l - A|| <= (s/2) k_b, where, from the sample back
   layer by layer, k_b grows by (strength of the gate on b) k_(b-1), with k = 1 on the bond before the first
   one that O does not contain: Lieb and Robinson's argument (Commun. Math. Phys. 28, 251, 1972; for a
   constant H it gives k = (g t)^n / n! at the n-th bond, g the spread of a bond term). A group of far cuts
   therefore adds at most s (sum w + k_b sin A), near ones s sin A, with A the angle of the group.
   A projector of Schmidt vectors is one on either side. The default way to cut, by subspaces, keeps a
   projector on one side only: there cuts beyond O on that side count as near.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np

from tnquench.budget.companions import LOOSE
from tnquench.conventions import Integers, Reals
from tnquench.evolution.light_cone import CutTrail, Extents
from tnquench.observables.quench import QuantumRecord

#: Cuts count as far where the operator has arrived with less than this; any value gives a bound.
FAR = 1e-2


def sine_of_layers(trail: CutTrail) -> Reals:
    """Return sin(A) of each layer's angle, shape (layer,)."""
    return _sine(-np.log1p(-np.minimum(trail.weights, 1.0 - 1e-16)).sum(axis=1))


def layer_bound(trail: CutTrail, name: str, *, samples: int) -> Reals:
    """Return the bound on an observable by the angles of layers, shape (time, place).

    samples : number of samples after t = 0, equally many layers between any two
    """
    spread = trail.extents[name].spread
    angles = np.concatenate(([0.0], np.cumsum(np.arcsin(sine_of_layers(trail)))))
    ends = np.arange(samples + 1) * (len(trail.weights) // max(samples, 1))
    return np.asarray(np.sin(np.minimum(angles[ends], 0.5 * np.pi))[:, None] * spread[None, :])


def light_cone_bound(trail: CutTrail, name: str, *, samples: int) -> Reals:
    """Return the bound by cuts in the backward light cone of each point, shape (time, place).

    Never above the bound by layers.
    """
    strengths, extents = trail.strengths, trail.extents[name]
    losses = _Losses.of(trail)
    interval = len(strengths)
    whole = sine_of_layers(trail)
    total = np.zeros((samples + 1, len(extents.spread)))
    for back, cone in enumerate(_cones(strengths, extents, layers=len(trail.weights))):
        ending = np.arange(back // interval + 1, samples + 1)  # samples with more than `back` layers
        layers = ending * interval - 1 - back
        if cone.spans_chain:
            for sample in ending:
                total[sample] += whole[: sample * interval - back].sum()
            break
        total[ending] += np.minimum(losses.change(layers, cone), whole[layers][:, None])
    within = layer_bound(trail, name, samples=samples)
    return np.minimum(total * extents.spread[None, :], within)


def state_numbers(main: QuantumRecord, distance: float) -> dict[str, float]:
    """Return what is known of the last state as a vector; empty where the run has not kept its cuts.

    distance : norm of the difference from the last state of the looser companion
    "state_bound" : rigorous bound on the norm of the difference from the uncut evolution, by the angles of
    layers. "distance_to_weight_30" : the measured distance, exact. It bounds how far the two runs differ in
    any observable, spread times it at most, but it gives no bound on either run's error: the two have starts
    of their own, whose distance is only estimated, and the looser run's bound is the larger one. It shows how
    far bounds lie above what happens.
    """
    if main.trail is None:
        return {}
    angle = float(np.arcsin(sine_of_layers(main.trail)).sum())
    known = {} if np.isnan(distance) else {f"distance_to_{LOOSE}": distance}
    return {"state_bound": 2.0 * float(np.sin(0.5 * min(angle, np.pi)))} | known


@dataclass(frozen=True)
class _Cone:
    """The far cuts on both sides of each operator, each (place,).

    left : bonds below it are far; right : bonds from it on are far
    left_tail, right_tail : k at the nearest far bond
    """

    left: Integers
    right: Integers
    left_tail: Reals
    right_tail: Reals
    bonds: int

    @property
    def spans_chain(self) -> bool:
        """Whether no cut is far from any operator."""
        return bool(np.all(self.left == 0) and np.all(self.right == self.bonds))


@dataclass(frozen=True)
class _Losses:
    """Sums over the bonds below each, (layer, bond + 1): of -ln(1 - w) and of w; and which sides commute."""

    logarithms: Reals
    weights: Reals
    left_far: np.ndarray
    right_far: np.ndarray

    @classmethod
    def of(cls, trail: CutTrail) -> _Losses:
        """Sum the losses of a run."""
        weights = np.minimum(trail.weights, 1.0 - 1e-16)
        both = np.full(len(weights), trail.two_sided)
        return cls(
            logarithms=_sums_below(-np.log1p(-weights)),
            weights=_sums_below(weights),
            left_far=both | trail.rightwards,
            right_far=both | ~trail.rightwards,
        )

    def change(self, layers: Integers, cone: _Cone) -> Reals:
        """Return the largest change by these layers' cuts in units of the spread, shape (layer, place)."""
        rows = layers[:, None]
        low = np.where(self.left_far[layers][:, None], cone.left[None, :], 0)
        high = np.where(self.right_far[layers][:, None], cone.right[None, :], cone.bonds)
        near = self.logarithms[rows, high] - self.logarithms[rows, low]
        right = self.logarithms[rows, cone.bonds] - self.logarithms[rows, high]
        lost = self.weights[rows, low] + self.weights[rows, cone.bonds] - self.weights[rows, high]
        tails = cone.left_tail * _sine(self.logarithms[rows, low]) + cone.right_tail * _sine(right)
        return np.asarray(_sine(near) + lost + tails)


def _sums_below(values: Reals) -> Reals:
    """Return the sums of values (layer, bond) over the bonds below each, (layer, bond + 1)."""
    return np.concatenate([np.zeros((len(values), 1)), np.cumsum(values, axis=1)], axis=1)


def _sine(logarithm: Reals) -> Reals:
    """Return sin(A) from -ln cos(A)^2."""
    return np.asarray(np.sqrt(np.maximum(-np.expm1(-logarithm), 0.0)))


def _cones(strengths: Reals, extents: Extents, *, layers: int) -> Iterator[_Cone]:
    """Yield the far cuts after 0, 1, 2... layers back from a sample, the layers of intervals repeated."""
    bonds = strengths.shape[1]
    mirrored = Extents(bonds - extents.last, bonds - extents.first, extents.spread)
    right, left = Arrival(extents.last, bonds), Arrival(mirrored.last, bonds)
    for back in range(layers):
        (start, right_tail), (mirror, left_tail) = right.edge(), left.edge()
        yield _Cone(bonds - mirror, start, left_tail, right_tail, bonds)
        gates = strengths[len(strengths) - 1 - back % len(strengths)]
        right.pass_layer(gates)
        left.pass_layer(gates[::-1])


class Arrival:
    """How much of each operator has arrived on the bonds right of it, k of shape (place, bond)."""

    def __init__(self, last: Integers, bonds: int) -> None:
        """last : last site of each operator, (place,), before any gate."""
        self.beyond = np.arange(bonds)[None, :] >= last[:, None]
        self.first = np.arange(bonds)[None, :] == last[:, None]
        self.arrived = np.zeros(self.beyond.shape)

    def pass_layer(self, gates: Reals) -> None:
        """Carry the operators back through one layer of gates of these strengths, (bond,)."""
        before = np.pad(self.arrived[:, :-1], ((0, 0), (1, 0)))
        before[self.first] = 1.0
        grown = self.arrived + gates[None, :] * before
        self.arrived = np.where(self.beyond, np.minimum(grown, 2.0), 0.0)

    def edge(self) -> tuple[Integers, Reals]:
        """Return the first far bond of each operator (the number of bonds if there is none) and k there."""
        far = self.beyond & (self.arrived <= FAR)
        bonds = far.shape[1]
        first = np.where(far.any(axis=1), far.argmax(axis=1), bonds)
        tails = np.append(self.arrived, np.zeros((len(far), 1)), axis=1)[np.arange(len(far)), first]
        return first, tails
