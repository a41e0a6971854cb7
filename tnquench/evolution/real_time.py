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
from tnquench.evolution.trotter import TrotterScheme, half_layers
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

    terms : bond terms h_j of H; time_step : largest step, shortened so that whole steps fill `every`
    after_layer : called after each half layer with the share of time passed, the state and the ledger
    Raises StateError if the state no longer holds finite numbers.
    """
    ledger = CutLedger.empty(state.sites)
    yield Moment(0.0, state, ledger)
    steps = steps_between(every=every, time_step=time_step)
    layers = half_layers(scheme, steps)
    known: dict[tuple[int, float], dict[int, Gate]] = {}
    for sample in range(samples):
        for done, (parity, fraction) in enumerate(layers, start=1):
            key = (parity, round(fraction, 14))
            if key not in known:
                known[key] = _layer_gates(terms, parity, fraction * every / steps, state)
            apply_layer(state, known[key], rule, ledger)
            if after_layer is not None:
                after_layer((sample + done / len(layers)) * every, state, ledger)
        yield Moment((sample + 1) * every, state, ledger)


def _layer_gates(terms: Sequence[Operator], parity: int, time: float, state: ChainState) -> dict[int, Gate]:
    """Return the gates of one half layer."""
    return {
        bond: real_time_gate(terms[bond], time=time, first=bond, grading=state.grading)
        for bond in range(parity, state.sites - 1, 2)
    }
