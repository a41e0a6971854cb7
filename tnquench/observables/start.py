"""The start of a quench with its own error: prepared once, and shared by runs that would prepare the same."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np

from tnquench.conventions import CURRENTS
from tnquench.evolution.chain_state import ChainState
from tnquench.evolution.cutting import CutRule
from tnquench.evolution.preparation import Attempt, Preparation, prepare
from tnquench.model.grading import Grading
from tnquench.model.pauli import Operator
from tnquench.observables.local import LocalObservables

#: The two states whose difference measures the start's error share part of their cuts: for loosely prepared
#: Hubbard starts the difference was found up to 1.5 times too small.
START_SAFETY = 3.0


@dataclass(frozen=True)
class StartFacts:
    """What is known of a prepared start.

    distance : estimated norm of its error, asked : the one allowed; error : of each observable
    steps : imaginary-time steps; log_partition_function : logarithm of Tr exp(-K)
    largest_bond : largest bond dimension on the way to it; bound : the bond ceiling has bound some cut there
    """

    distance: float
    asked: float
    error: dict[str, float]
    steps: int
    log_partition_function: float
    largest_bond: int
    bound: bool

    def events(self) -> list[dict[str, object]]:
        """Return the event of a start that is not as near to the exact one as asked."""
        if self.distance <= self.asked:
            return []
        detail = f"state within {self.distance:.1e} of the exact start, {self.asked:.1e} asked"
        return [{"kind": "preparation", "detail": detail}]


@dataclass(frozen=True)
class Start:
    """A prepared start; state : a unit vector, which whoever evolves it copies first."""

    state: ChainState
    facts: StartFacts

    def serves(self, bond_ceiling: int) -> bool:
        """Whether a run with this ceiling would prepare the same state, all else being equal."""
        return not self.facts.bound and self.facts.largest_bond <= bond_ceiling


def prepare_start(
    terms: Sequence[Operator],
    meter: LocalObservables,
    *,
    sites: int,
    grading: Grading,
    distance_target: float,
    rule: CutRule,
    after_layer: Callable[[Attempt], None] | None,
    resumed: Attempt | None,
) -> Start:
    """Prepare a start and estimate its errors; see `prepare` for the arguments.

    meter : of the observables whose errors are asked for
    """
    found = prepare(
        terms,
        sites=sites,
        grading=grading,
        distance_target=distance_target,
        rule=rule,
        after_layer=after_layer,
        resumed=resumed,
    )
    return Start(
        found.state,
        StartFacts(
            distance=found.distance,
            asked=distance_target,
            error=_start_error(meter, found),
            steps=found.steps,
            log_partition_function=found.log_partition_function,
            largest_bond=found.largest_bond,
            bound=found.bound,
        ),
    )


def _start_error(meter: LocalObservables, start: Preparation) -> dict[str, float]:
    """Estimate each observable's error in the start from the state one refinement earlier.

    A current vanishes at t = 0 by symmetry but inherits the error of its density later, so both share the
    larger one; what no current carries stands alone.
    """
    fine, _ = meter.measure(start.state)
    coarse, _ = meter.measure(start.coarser)
    change = {
        name: START_SAFETY * start.error_share * float(np.abs(fine[name] - coarse[name]).max())
        for name in fine
    }
    pairs = [pair for pair in CURRENTS.items() if change.keys() >= set(pair)]
    return change | {name: max(change[each] for each in pair) for pair in pairs for name in pair}
