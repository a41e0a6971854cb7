"""One quench from its start to its last sample: prepare, evolve, measure; the quantum side of every run."""

from __future__ import annotations

import time
from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import asdict, dataclass
from typing import Any, Protocol

from tnquench.conventions import Integers, Reals
from tnquench.evolution.chain_state import ChainState
from tnquench.evolution.cutting import BOND_FLOOR, CutRule
from tnquench.evolution.layers import CutLedger
from tnquench.evolution.light_cone import CutTrail, trail_of
from tnquench.evolution.real_time import Reached, evolve
from tnquench.evolution.trotter import SCHEMES
from tnquench.model.chain import Chain
from tnquench.model.grading import Grading, derive_grading
from tnquench.model.pauli import Operator, operator_norm
from tnquench.observables.diary import Diary
from tnquench.observables.local import LocalObservables
from tnquench.observables.snapshot import (
    Content,
    of_attempt,
    of_evolution,
    of_start,
    to_attempt,
    to_evolution,
    to_start,
)
from tnquench.observables.start import Start, StartFacts, prepare_start

#: The start is cut at this fraction of the real-time weight, so that its own error stays in the background.
PREPARATION_SHARE = 1e-4


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


class Keeper(Protocol):
    """Keeps what a quench needs to go on after an interruption, as plain arrays, numbers and text."""

    def load(self) -> Content | None:
        """Return the content last saved, None if there is none."""

    def load_start(self) -> Content | None:
        """Return the finished start, None if it is not kept."""

    def save_start(self, content: Content) -> None:
        """Save the finished start."""

    def after_layer(self, header: Mapping[str, Any], content: Callable[[], Content]) -> None:
        """Save the content if it is time to; may raise to end the quench."""

    def save(self, header: Mapping[str, Any], content: Content) -> None:
        """Save the content of the finished quench."""


class _Tools:
    """What a quench is simulated with: charges, what is measured, how bonds are cut."""

    def __init__(self, quench: Quench) -> None:
        chain = quench.chain
        self.grading: Grading = derive_grading(
            (*chain.bond_terms, *quench.start_terms), qubits_per_site=chain.qubits_per_site
        )
        self.operators = chain.observables()
        self.meter = LocalObservables(self.operators, sites=chain.sites, grading=self.grading)
        self.rule = CutRule(
            quench.discarded_weight,
            bond_ceiling=quench.bond_ceiling,
            bond_floor=quench.bond_floor,
            method=quench.cutting,
        )


class _Clock:
    """Wall and processor time of a quench, with what earlier parts of it have taken."""

    def __init__(self, saved: Content | None) -> None:
        self.began, self.cpu = time.perf_counter(), time.process_time()
        self.before = (0.0, 0.0) if saved is None else (saved["seconds"], saved["cpu_seconds"])

    def spent(self) -> dict[str, float]:
        """Return the times so far."""
        return {
            "seconds": self.before[0] + time.perf_counter() - self.began,
            "cpu_seconds": self.before[1] + time.process_time() - self.cpu,
        }


def start_of_quench(quench: Quench, *, keeper: Keeper | None = None) -> Start:
    """Prepare the start of a quench, or take up the preparation where the keeper has it."""
    tools = _Tools(quench)
    if keeper is not None and (kept := keeper.load_start()) is not None:
        return to_start(kept, tools.grading)
    rule = CutRule(quench.preparation_weight, bond_ceiling=quench.bond_ceiling, method=quench.cutting)
    saved = None if keeper is None else keeper.load()
    clock = _Clock(saved)
    begun = None if saved is None else saved.get("attempt")
    start = prepare_start(
        quench.start_terms,
        tools.meter,
        sites=quench.chain.sites,
        grading=tools.grading,
        distance_target=quench.preparation_distance,
        rule=rule,
        after_layer=None
        if keeper is None
        else lambda attempt: keeper.after_layer(
            {"stage": "start", "time": 0.0}, lambda: {"attempt": of_attempt(attempt, rule), **clock.spent()}
        ),
        resumed=None if begun is None else to_attempt(begun, tools.grading, rule),
    )
    if keeper is not None:
        keeper.save_start(of_start(start))
    return start


def simulate(
    quench: Quench,
    *,
    report: Callable[[Progress], None] | None = None,
    keeper: Keeper | None = None,
    start: Start | None = None,
) -> QuantumRecord:
    """Prepare, evolve and measure one quench.

    report : called after each half layer with the progress made
    keeper : keeps the quench, which goes on from what is kept and may go on later to more samples
    start : used instead of preparing one, for a run that would prepare the same
    Raises StateError if the state no longer holds finite numbers, and what the keeper raises.
    """
    tools = _Tools(quench)
    saved = None if keeper is None else keeper.load()
    clock, diary = _Clock(saved), Diary(tools.meter)
    if saved is None or "evolution" not in saved:
        start = start or start_of_quench(quench, keeper=keeper)
        facts, reached = (
            start.facts,
            Reached(0.0, 0, 0, start.state.copy(), CutLedger.empty(quench.chain.sites)),
        )
        resumed = None
    else:
        facts = StartFacts(**saved["start"])
        reached = resumed = to_evolution(saved["evolution"], tools.grading, tools.rule)
        diary.resume(saved["diary"])

    def content(reached: Reached) -> Content:
        return {
            "start": asdict(facts),
            "evolution": of_evolution(reached, tools.rule),
            "diary": diary.content(),
            **clock.spent(),
        }

    last = reached
    for moment in evolve(
        reached.state,
        quench.chain.bond_terms,
        every=quench.every,
        samples=quench.samples,
        time_step=quench.time_step,
        scheme=SCHEMES[quench.trotter_order],
        rule=tools.rule,
        after_layer=_after_layer(report, keeper, content),
        resumed=resumed,
    ):
        diary.write(moment)
        last = Reached(moment.time, len(diary.rows["time"]) - 1, 0, moment.state, moment.cuts)
    record = _record(quench, tools, diary, facts, last, clock)
    if keeper is not None and resumed is not last:
        keeper.save({"stage": "evolution", "time": last.time}, content(last))
    return record


def _record(
    quench: Quench, tools: _Tools, diary: Diary, facts: StartFacts, last: Reached, clock: _Clock
) -> QuantumRecord:
    """Return everything measured along a quench that has come to its end."""
    table, chain = diary.table(), quench.chain
    fields = {name: table[name] for name in tools.meter.shapes}
    return QuantumRecord(
        times=table["time"],
        fields=fields,
        bond_dimension=table["bond_dimension"],
        operator_entanglement=table["operator_entanglement"],
        discarded_weight=table["discarded_weight"],
        angle=table["angle"],
        norms={name: largest_norm(members) for name, members in tools.operators.items()},
        start_distance=facts.distance,
        start_error=facts.error,
        start_steps=facts.steps,
        log_partition_function=facts.log_partition_function,
        totals=conserved_totals(fields, tuple(chain.charges)),
        events=(*facts.events(), *diary.events),
        **clock.spent(),
        cuts=table["cuts"],
        peak_state_bytes=diary.peak_bytes,
        weight_asked=quench.discarded_weight,
        time_step=quench.time_step,
        trail=trail_of(
            last.cuts,
            chain,
            tools.operators,
            every=quench.every,
            steps=quench.steps,
            scheme=SCHEMES[quench.trotter_order],
        ),
        last_state=last.state,
    )


def _after_layer(
    report: Callable[[Progress], None] | None,
    keeper: Keeper | None,
    content: Callable[[Reached], Content],
) -> Callable[[Reached], None]:
    """Return an after-layer hook that times the layers, passes the progress on, and lets the keeper save."""
    last = time.perf_counter()

    def after_layer(reached: Reached) -> None:
        nonlocal last
        now = time.perf_counter()
        if report is not None:
            report(Progress(reached.time, reached.state.bond_dimensions, now - last))
        if keeper is not None:
            keeper.after_layer({"stage": "evolution", "time": reached.time}, lambda: content(reached))
        last = time.perf_counter()

    return after_layer


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
