"""How strongly each gate of a layer can spread an operator, from which light cones of the circuit follow.

A gate u = exp(-i theta h) changes no operator A by more than ||[u, A]|| <= |theta| (spread of h) ||A||, the
spread of h being its largest minus its least eigenvalue, for [h, A] = [h - c, A] with c in their middle.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from tnquench.conventions import Integers, Reals
from tnquench.evolution.layers import CutLedger
from tnquench.evolution.splitting import plan, split
from tnquench.evolution.trotter import TrotterScheme
from tnquench.model.chain import Chain
from tnquench.model.pauli import Operator, dense, support

#: No unitary gate changes an operator by more than twice its norm; an exchange of two sites does.
STRONGEST = 2.0


@dataclass(frozen=True)
class Extents:
    """Where the operators of an observable act and how far apart their eigenvalues lie, each (place,).

    first, last : sites; spread : largest minus least eigenvalue, 0 where the operator vanishes
    """

    first: Integers
    last: Integers
    spread: Reals


@dataclass(frozen=True)
class CutTrail:
    """What each real-time cut has lost, layer by layer, and how far it can be felt.

    weights : discarded weight with its rounding, 0 where nothing was cut, shape (layer, bond)
    rightwards : direction of the layer's sweep, shape (layer,) of bool. A cut on the way to the right keeps
    the image of a projector on the sites left of its bond, one on the way to the left on those right of it
    two_sided : each cut is the image of a projector on either side
    strengths : see `layer_strengths`, shape (layer of a sampling interval, bond)
    extents : where each observable's operators act
    """

    weights: Reals
    rightwards: np.ndarray
    two_sided: bool
    strengths: Reals
    extents: dict[str, Extents]


def spread_of(operator: Operator) -> float:
    """Return the largest minus the least eigenvalue of a Hermitian operator of a few qubits."""
    if not operator:
        return 0.0
    first, last = support(operator)
    values = np.linalg.eigvalsh(dense(operator, first=first, qubits=last - first + 1))
    return float(values[-1] - values[0])


def extents_of(operators: Sequence[Operator], *, qubits_per_site: int) -> Extents:
    """Return the extents of an observable's operators, one a place."""
    ends = np.array([support(operator) for operator in operators], dtype=np.int64) // qubits_per_site
    spreads = [spread_of(operator) for operator in operators]
    return Extents(ends[:, 0], ends[:, 1], np.array(spreads))


def trail_of(
    cuts: CutLedger,
    chain: Chain,
    operators: Mapping[str, Sequence[Operator]],
    *,
    every: float,
    steps: int,
    scheme: TrotterScheme,
) -> CutTrail:
    """Return what each cut of a real-time evolution lost and how far it can be felt by the observables.

    operators : by observable, one a place; every, steps : length of a sampling interval and time steps in it
    """
    return CutTrail(
        weights=np.array([weights for _, weights in cuts.layers]).reshape(-1, chain.sites - 1),
        rightwards=np.array([rightwards for rightwards, _ in cuts.layers], dtype=np.bool_),
        two_sided=cuts.two_sided,
        strengths=layer_strengths(
            chain.bond_terms,
            sites=chain.sites,
            qubits_per_site=chain.qubits_per_site,
            every=every,
            steps=steps,
            scheme=scheme,
        ),
        extents={
            name: extents_of(members, qubits_per_site=chain.qubits_per_site)
            for name, members in operators.items()
        },
    )


def layer_strengths(
    terms: Sequence[Operator],
    *,
    sites: int,
    qubits_per_site: int,
    every: float,
    steps: int,
    scheme: TrotterScheme,
) -> Reals:
    """Return |theta| times the spread of h for each gate exp(-i theta h) of a sampling interval, at most 2.

    terms : bond terms of H; every, steps : length of the interval and time steps in it
    Shape (layer, bond), zero where a layer has no gate.
    """
    groups = split(terms, sites=sites, qubits_per_site=qubits_per_site)
    spreads = [{bond: spread_of(term) for bond, term in group.terms.items()} for group in groups]
    layers = plan(groups, scheme, steps)
    strengths = np.zeros((len(layers), sites - 1))
    for row, layer in zip(strengths, layers, strict=True):
        for action in layer:
            if action.fraction is None:
                row[list(groups[action.group].swaps)] = STRONGEST
                continue
            for bond, spread in spreads[action.group].items():
                row[bond] += abs(action.fraction) * every / steps * spread
    return np.minimum(strengths, STRONGEST)
