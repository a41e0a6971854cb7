"""The start of a quench with its own error: prepared once, and shared by runs that would prepare the same."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from math import sqrt

import numpy as np

from tnquench.conventions import CURRENTS
from tnquench.evolution.chain_state import ChainState
from tnquench.evolution.cutting import CutRule
from tnquench.evolution.preparation import Attempt, Preparation, loosely_cut, prepare
from tnquench.model.grading import Grading
from tnquench.model.pauli import Operator
from tnquench.observables.local import LocalObservables

#: What the cuts have done to an observable, in units of what looser ones do times the root of the ratio of
#: the lost weights. States cut at two weights share part of their errors: for loosely prepared Hubbard starts
#: (distance 1e-3) the product alone was found 5 to 8 times too small.
CUT_SAFETY = 8.0


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
            error=_start_error(meter, found, terms, rule),
            steps=found.steps,
            log_partition_function=found.log_partition_function,
            largest_bond=found.largest_bond,
            bound=found.bound,
        ),
    )


def _start_error(
    meter: LocalObservables, start: Preparation, terms: Sequence[Operator], rule: CutRule
) -> dict[str, float]:
    """Estimate each observable's error in the start, its step and its cuts apart.

    The step's follows from the state with the step doubled. Its cuts are measured by cutting that state more:
    an error falls with the lost weight at least like its root.
    A current vanishes at t = 0 by symmetry but inherits the error of its density later, so both share the
    larger one; what no current carries stands alone.
    """
    looser, ledger = loosely_cut(terms, start, rule=rule)
    fine, coarse, loose = (meter.measure(state)[0] for state in (start.state, start.coarser, looser))
    lost, more = (float(cuts.discarded_weight.sum()) for cuts in (start.cuts, ledger))
    cut_share = CUT_SAFETY * sqrt(min(1.0, lost / more)) if more > 0.0 else 0.0
    change = {
        name: start.step_share * float(np.abs(fine[name] - coarse[name]).max())
        + cut_share * float(np.abs(loose[name] - coarse[name]).max())
        for name in fine
    }
    pairs = [pair for pair in CURRENTS.items() if change.keys() >= set(pair)]
    return change | {name: max(change[each] for each in pair) for pair in pairs for name in pair}
