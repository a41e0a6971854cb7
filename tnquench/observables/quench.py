"""One quench from its start to its last sample: prepare, evolve, measure; the quantum side of every run."""

from __future__ import annotations

import time
from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np

from tnquench.conventions import CURRENTS, Integers, Reals
from tnquench.evolution.chain_state import ChainState
from tnquench.evolution.cutting import BOND_FLOOR, CutRule
from tnquench.evolution.layers import CutLedger
from tnquench.evolution.light_cone import CutTrail, trail_of
from tnquench.evolution.preparation import Preparation, prepare
from tnquench.evolution.real_time import Moment, evolve
from tnquench.evolution.trotter import SCHEMES
from tnquench.model.chain import Chain
from tnquench.model.grading import derive_grading
from tnquench.model.pauli import Operator, operator_norm
from tnquench.observables.local import LocalObservables

#: The start is cut at this fraction of the real-time weight, so that its own error stays in the background.
PREPARATION_SHARE = 1e-4

#: The two states whose difference measures the start's error share part of their cuts: for loosely prepared
#: Hubbard starts the difference was found up to 1.5 times too small.
START_SAFETY = 3.0


@dataclass(frozen=True)
class Quench:
    """What to simulate, in numbers.

    chain, start_terms : bond terms of H and of the start's exponent K (rho_0 = exp(-K)/Z)
    every, samples : sampling interval and number of samples after t = 0; steps : time steps in each interval
    discarded_weight, bond_ceiling, bond_floor, cutting : how bonds are cut; preparation_weight : the same for
    the start
    preparation_distance : allowed norm of the start's error
    """

    chain: Chain
    start_terms: tuple[Operator, ...]
    every: float
    samples: int
    steps: int
    trotter_order: int
    discarded_weight: float
    preparation_weight: float
    preparation_distance: float
    bond_ceiling: int = 2**31
    bond_floor: int = BOND_FLOOR
    cutting: str = "subspace"

    @property
    def time_step(self) -> float:
        """Length of one time step."""
        return self.every / self.steps


@dataclass(frozen=True)
class Progress:
    """Where a running quench stands: time reached, dimension of each bond (bond,), seconds of the last half
    layer."""

    time: float
    bond_dimensions: Integers
    layer_seconds: float


@dataclass(frozen=True)
class QuantumRecord:
    """Everything measured along one quench.

    times (time,); fields : observable -> (time, place); bond_dimension, operator_entanglement,
    discarded_weight (time, bond), the last summed since t = 0; angle (time,) : sum of arcsin sqrt(w) over all
    cuts so far
    norms : largest operator norm of each observable; start_distance : estimated norm of the start's error;
    start_error : estimated error of each observable in the start
    totals : each conserved total (time,), by name: see `conserved_totals`; events : what the user must know,
    with its time; seconds, cpu_seconds : wall and processor time; cuts (time,) : real-time cuts made so far
    weight_asked, time_step : settings of the run, nan where they are not known
    trail : what each cut lost, and how far it can be felt; last_state : at the last sample; both None where
    they were not kept
    """

    times: Reals
    fields: dict[str, Reals]
    bond_dimension: Reals
    operator_entanglement: Reals
    discarded_weight: Reals
    angle: Reals
    norms: dict[str, float]
    start_distance: float
    start_error: dict[str, float]
    start_steps: int
    log_partition_function: float
    totals: dict[str, Reals]
    events: tuple[dict[str, object], ...]
    seconds: float
    cpu_seconds: float
    cuts: Reals
    peak_state_bytes: int
    weight_asked: float = float("nan")
    time_step: float = float("nan")
    trail: CutTrail | None = None
    last_state: ChainState | None = None


def simulate(quench: Quench, *, report: Callable[[Progress], None] | None = None) -> QuantumRecord:
    """Prepare, evolve and measure one quench.

    report : called after each half layer with the progress made
    Raises StateError if the state no longer holds finite numbers.
    """
    began, cpu = time.perf_counter(), time.process_time()
    chain = quench.chain
    grading = derive_grading((*chain.bond_terms, *quench.start_terms), qubits_per_site=chain.qubits_per_site)
    start = prepare(
        quench.start_terms,
        sites=chain.sites,
        grading=grading,
        distance_target=quench.preparation_distance,
        rule=CutRule(quench.preparation_weight, bond_ceiling=quench.bond_ceiling, method=quench.cutting),
    )
    operators = chain.observables()
    meter = LocalObservables(operators, sites=chain.sites, grading=grading)
    start_error = _start_error(meter, start)
    diary = _Diary(meter)
    rule = CutRule(
        quench.discarded_weight,
        bond_ceiling=quench.bond_ceiling,
        bond_floor=quench.bond_floor,
        method=quench.cutting,
    )
    moment = None
    for moment in evolve(
        start.state,
        chain.bond_terms,
        every=quench.every,
        samples=quench.samples,
        time_step=quench.time_step,
        scheme=SCHEMES[quench.trotter_order],
        rule=rule,
        after_layer=_progress_reporter(report),
    ):
        diary.write(moment)
    assert moment is not None, "the start is a moment"
    record = diary.record(
        charges=tuple(chain.charges),
        norms={name: largest_norm(members) for name, members in operators.items()},
        start=start,
        start_error=start_error,
        events=(*_start_events(start, quench), *diary.events),
        seconds=time.perf_counter() - began,
        cpu_seconds=time.process_time() - cpu,
    )
    return replace(
        record,
        weight_asked=quench.discarded_weight,
        time_step=quench.time_step,
        trail=trail_of(
            moment.cuts,
            chain,
            operators,
            every=quench.every,
            steps=quench.steps,
            scheme=SCHEMES[quench.trotter_order],
        ),
        last_state=moment.state,
    )


def _start_events(start: Preparation, quench: Quench) -> list[dict[str, object]]:
    """Return the event of a start that is not as near to the exact one as asked."""
    if start.reached:
        return []
    detail = f"state within {start.distance:.1e} of the exact start, {quench.preparation_distance:.1e} asked"
    return [{"kind": "preparation", "detail": detail}]


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


def conserved_totals(fields: Mapping[str, Reals], charges: Iterable[str]) -> dict[str, Reals]:
    """Return the total energy and the total of each charge, (time,), by name.

    fields : observable -> (time, place); charges : the conserved densities among them beside the energy's
    The name is that of the density: total_energy, total_charge, total_magnetisation.
    """
    return {
        f"total_{name.removesuffix('_density')}": fields[name].sum(axis=1)
        for name in ("energy_density", *charges)
    }


def largest_norm(operators: Sequence[Operator]) -> float:
    """Return the largest operator norm of an observable's operators, 0 if none acts anywhere."""
    return max((operator_norm(operator) for operator in operators if operator), default=0.0)


def _progress_reporter(
    report: Callable[[Progress], None] | None,
) -> Callable[[float, ChainState, CutLedger], None] | None:
    """Return an after-layer hook that times the layers and passes the progress on."""
    if report is None:
        return None
    last = time.perf_counter()

    def after_layer(reached: float, state: ChainState, _ledger: CutLedger) -> None:
        nonlocal last
        now = time.perf_counter()
        report(Progress(reached, state.bond_dimensions, now - last))
        last = now

    return after_layer


class _Diary:
    """Collects what is measured at each moment."""

    def __init__(self, meter: LocalObservables) -> None:
        self.meter = meter
        self.rows: dict[str, list[Reals]] = {}
        self.events: list[dict[str, object]] = []
        self.peak_bytes = 0

    def write(self, moment: Moment) -> None:
        """Measure the state and note what happened to its cuts."""
        values, entropies = self.meter.measure(moment.state)
        cuts = moment.cuts
        row = {
            **values,
            "time": np.array(moment.time),
            "operator_entanglement": entropies,
            "bond_dimension": moment.state.bond_dimensions.astype(np.float64),
            "discarded_weight": cuts.discarded_weight.copy(),
            "angle": np.array(cuts.angle.sum()),
            "cuts": np.array(float(cuts.cuts)),
        }
        for name, value in row.items():
            self.rows.setdefault(name, []).append(value)
        self.peak_bytes = max(self.peak_bytes, moment.state.bytes)
        self._note(
            moment, "bond_ceiling", int(cuts.ceiling_cuts.sum()), "cuts lost more than the weight asked for"
        )
        self._note(
            moment, "svd_fallback", cuts.fallbacks, "singular value decompositions needed the slower driver"
        )

    def _note(self, moment: Moment, kind: str, count: int, meaning: str) -> None:
        """Enter an event when its count has grown since the last entry."""
        before = sum(int(str(event["count"])) for event in self.events if event["kind"] == kind)
        if count > before:
            detail = f"{count - before} {meaning} up to t = {moment.time:g}"
            self.events.append({"time": moment.time, "kind": kind, "count": count - before, "detail": detail})

    def record(
        self,
        *,
        charges: Sequence[str],
        norms: dict[str, float],
        start: Preparation,
        start_error: dict[str, float],
        events: tuple[dict[str, object], ...],
        seconds: float,
        cpu_seconds: float,
    ) -> QuantumRecord:
        """Return all rows as arrays; charges : names of the conserved densities beside the energy's."""
        table = {name: np.array(rows) for name, rows in self.rows.items()}
        fields = {name: table[name] for name in self.meter.shapes}
        return QuantumRecord(
            times=table["time"],
            fields=fields,
            bond_dimension=table["bond_dimension"],
            operator_entanglement=table["operator_entanglement"],
            discarded_weight=table["discarded_weight"],
            angle=table["angle"],
            norms=norms,
            start_distance=start.distance,
            start_error=start_error,
            start_steps=start.steps,
            log_partition_function=start.log_partition_function,
            totals=conserved_totals(fields, charges),
            events=events,
            seconds=seconds,
            cpu_seconds=cpu_seconds,
            cuts=table["cuts"],
            peak_state_bytes=self.peak_bytes,
        )
