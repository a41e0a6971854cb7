"""Real-time evolution by TEBD, as a generator of the states at the requested times.

TEBD: G. Vidal, Phys. Rev. Lett. 93, 040502 (2004).
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from math import ceil

from tnquench.evolution.chain_state import ChainState
from tnquench.evolution.cutting import CutRule
from tnquench.evolution.gates import Gate, real_time_gate
from tnquench.evolution.layers import CutLedger, apply_layer
from tnquench.evolution.splitting import LayerGates, plan, split
from tnquench.evolution.trotter import TrotterScheme
from tnquench.model.grading import Grading
from tnquench.model.pauli import Operator


@dataclass(frozen=True)
class Moment:
    """The state at one requested time.

    state : the evolving chain itself, not a copy: valid until the generator goes on; observers may move its
    centre
    cuts  : ledger since the start of the real-time evolution
    """

    time: float
    state: ChainState
    cuts: CutLedger


def steps_between(*, every: float, time_step: float) -> int:
    """Return how many equal steps of at most `time_step` fill the interval `every`."""
    return max(1, ceil(every / time_step - 1e-9))


def evolve(
    state: ChainState,
    terms: Sequence[Operator],
    *,
    every: float,
    samples: int,
    time_step: float,
    scheme: TrotterScheme,
    rule: CutRule,
    after_layer: Callable[[float, ChainState, CutLedger], None] | None = None,
) -> Iterator[Moment]:
    """Yield the state at times 0, every, ..., samples * every; it is evolved in place.

    terms : bond terms h_j of H, on one site, two neighbours, or sites i and i + 2; time_step : largest step,
    shortened so that whole steps fill `every`
    after_layer : called after each layer of gates with the time reached, counting all layers of a sampling
    interval as equally long, the state and the ledger
    Raises StateError if the state no longer holds finite numbers, ValueError for terms on other sites.
    """
    ledger = CutLedger.empty(state.sites)
    yield Moment(0.0, state, ledger)
    steps = steps_between(every=every, time_step=time_step)
    groups = split(terms, sites=state.sites, qubits_per_site=state.grading.qubits_per_site)
    layers = plan(groups, scheme, steps)
    gates = LayerGates(groups, state.grading, _exponential(state.grading, every / steps))
    for sample in range(samples):
        for done, layer in enumerate(layers, start=1):
            apply_layer(state, gates.of(layer), rule, ledger)
            if after_layer is not None:
                after_layer((sample + done / len(layers)) * every, state, ledger)
        yield Moment((sample + 1) * every, state, ledger)


def _exponential(grading: Grading, step: float) -> Callable[[Operator, int, float], Gate]:
    """Return the function (term, first site, fraction of a step) -> real-time gate."""
    return lambda term, first, fraction: real_time_gate(
        term, time=fraction * step, first=first, grading=grading
    )
