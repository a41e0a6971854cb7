"""Layers of gates at a given bond dimension, with the warm starts that an evolution gives them.

A chain is evolved until its bonds reach the dimension asked for, in a mean in which each counts by its cube,
as it does in the cost of a layer. The state there and the two layers that come next are what is timed, again
and again from the same state.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from functools import cache

import numpy as np

from tests.benchmarks.speed_cases import Problem, two_temperatures
from tnquench.evolution.chain_state import ChainState
from tnquench.evolution.cutting import CutRule
from tnquench.evolution.gates import Gate, real_time_gate
from tnquench.evolution.layers import CutLedger, apply_layer
from tnquench.evolution.splitting import LayerGates, plan, split
from tnquench.evolution.trotter import SCHEMES

#: Near the ends bonds are as large as the operator space allows (4, 16, 64, 256): what so short a chain costs
#: is decided by its large bonds, and they grow within a minute.
SITES = 16

#: Small enough that bonds grow within minutes, large enough for the subspace method.
WEIGHT, TIME_STEP = 1e-11, 0.2


@dataclass(frozen=True)
class Grown:
    """A state on its way, and the gates of the two layers that come next."""

    state: ChainState
    gates: tuple[Mapping[int, Gate], ...]
    weight: float
    time: float

    def run(self, bond_floor: int = 1) -> tuple[float, float, ChainState]:
        """Apply both layers to a copy; return wall seconds, processor seconds, and the state."""
        state, rule = self.state.copy(), CutRule(self.weight, bond_floor=bond_floor)
        ledger = CutLedger.empty(state.sites)
        began, worked = time.perf_counter(), time.process_time()
        for gates in self.gates:
            apply_layer(state, gates, rule, ledger)
        return time.perf_counter() - began, time.process_time() - worked, state


def typical_bond(state: ChainState) -> float:
    """The mean bond dimension, each bond weighted by its cube."""
    sizes = state.bond_dimensions.astype(np.float64)
    return float((sizes**4).sum() / (sizes**3).sum())


@cache
def grown(bonds: tuple[int, ...], sites: int = SITES, weight: float = WEIGHT) -> dict[int, Grown]:
    """The chain when its typical bond first reaches each of these dimensions, in ascending order."""
    problem = two_temperatures(sites)
    state = problem.prepared(distance=1e-6, weight=1e-3 * weight)
    gates = step_of(problem, TIME_STEP)
    rule, ledger = CutRule(weight, bond_floor=1), CutLedger.empty(sites)
    found: dict[int, Grown] = {}
    steps = 0
    while len(found) < len(bonds):
        for layer in gates:
            apply_layer(state, layer, rule, ledger)
        steps += 1
        while len(found) < len(bonds) and typical_bond(state) >= bonds[len(found)]:
            found[bonds[len(found)]] = Grown(state.copy(), gates, weight, steps * TIME_STEP)
    return found


def step_of(problem: Problem, time_step: float) -> tuple[dict[int, Gate], ...]:
    """The gates of the odd and of the even bonds of a whole step: order 2, whose half layers merge."""
    groups = split(problem.chain.bond_terms, sites=problem.chain.sites)
    gates = LayerGates(
        groups,
        problem.grading,
        lambda term, fraction: real_time_gate(
            term, time=fraction * time_step, first=0, grading=problem.grading
        ),
    )
    inside = plan(groups, SCHEMES[2], steps=2)[1:3]
    return tuple(gates.of(layer) for layer in inside)


def best_of(work: Callable[[], tuple[float, float, ChainState]], repetitions: int) -> tuple[float, float]:
    """The least wall time and the least processor time of several repetitions."""
    seconds = [work()[:2] for _ in range(repetitions)]
    return min(wall for wall, _ in seconds), min(cpu for _, cpu in seconds)


def described(sample: Grown) -> str:
    """The case in words."""
    typical, largest = typical_bond(sample.state), sample.state.bond_dimensions.max()
    return f"bond dimension {typical:.0f} (largest {largest}), {sample.state.sites} sites"
