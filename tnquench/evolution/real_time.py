"""Real-time evolution by TEBD, as a generator of the states at the requested times.

TEBD: G. Vidal, Phys. Rev. Lett. 93, 040502 (2004).
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from math import ceil

from tnquench.errors import StateError
from tnquench.evolution.chain_state import ChainState
from tnquench.evolution.cutting import CutRule
from tnquench.evolution.gates import Gate, real_time_gate
from tnquench.evolution.layers import CutLedger, apply_layer
from tnquench.evolution.splitting import LayerGates, plan, split
from tnquench.evolution.trotter import TrotterScheme
from tnquench.model.grading import Grading
from tnquench.model.pauli import Operator

#: Most by which one layer of orthogonal gates may change the logarithm of the norm: far above its rounding.
NORM_DRIFT = 1e-9


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


@dataclass(frozen=True)
class Reached:
    """Where an evolution stands between two layers of gates.

    time : counting all layers of a sampling interval as equally long
    samples, layers : sampling intervals that are complete, and layers applied of the one under way
    state, cuts : the evolving chain itself and its ledger, not copies
    """

    time: float
    samples: int
    layers: int
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
    after_layer: Callable[[Reached], None] | None = None,
    resumed: Reached | None = None,
) -> Iterator[Moment]:
    """Yield the state at times 0, every, ..., samples * every; it is evolved in place.

    terms : bond terms h_j of H, on one site, two neighbours, or sites i and i + 2; time_step : largest step,
    shortened so that whole steps fill `every`
    after_layer : called after each layer of gates with where the evolution stands
    resumed : where to go on, in place of `state` at time 0; moments that were yielded before are not again
    Raises StateError if the state no longer holds finite numbers, ValueError for terms on other sites.
    """
    reached = resumed or Reached(0.0, 0, 0, state, CutLedger.empty(state.sites))
    state, ledger, first = reached.state, reached.cuts, reached.layers
    if resumed is None:
        yield Moment(0.0, state, ledger)
    steps = steps_between(every=every, time_step=time_step)
    groups = split(terms, sites=state.sites, qubits_per_site=state.grading.qubits_per_site)
    layers = plan(groups, scheme, steps)
    gates = LayerGates(groups, state.grading, _exponential(state.grading, every / steps))
    for sample in range(reached.samples, samples):
        for done, layer in enumerate(layers[first:], start=first + 1):
            before = ledger.log_norm
            apply_layer(state, gates.of(layer), rule, ledger)
            if not abs(ledger.log_norm - before) < NORM_DRIFT:
                raise StateError(_drifted(ledger.log_norm - before, (sample + done / len(layers)) * every))
            if after_layer is not None:
                time = (sample + done / len(layers)) * every
                after_layer(Reached(time, sample, done, state, ledger))
        first = 0
        yield Moment((sample + 1) * every, state, ledger)


def _drifted(change: float, time: float) -> str:
    """Return the diagnosis of a state whose norm has changed."""
    return (
        f"one layer of gates changed the logarithm of the state's norm by {change:.1e} at t = {time:.4g}, "
        "which exact gates cannot: memory or a library is faulty"
    )


def _exponential(grading: Grading, step: float) -> Callable[[Operator, float], Gate]:
    """Return the function (term on the first two sites, fraction of a step) -> real-time gate."""
    return lambda term, fraction: real_time_gate(term, time=fraction * step, first=0, grading=grading)
