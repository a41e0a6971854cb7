"""The quantum side of a run: its main quench and its companions, at a weight that may have to be chosen."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace

from tnquench.assemble import budget_settings, build_quench, build_shorter, default_step
from tnquench.budget.assess import quantum_error
from tnquench.budget.companions import SHORT, companion_quenches
from tnquench.budget.pilot import choose_settings
from tnquench.checkpoints import Store, require_reachable
from tnquench.config.schema import Config
from tnquench.evolution.threads import threads as engine_threads
from tnquench.observables.quench import Progress, QuantumRecord, Quench
from tnquench.outcome import QuantumSide
from tnquench.side_by_side import (
    SURVIVABLE,
    Task,
    background,
    carry_out,
    failure_event,
    fetched,
    start_of_task,
    state_distance,
)
from tnquench.stopping import Stop

#: Name of a run's main quench.
MAIN = "main"

#: How often a run that missed its accuracy is repeated with a tighter weight, and by how much tighter each
#: time.
REPEATS, TIGHTENING = 2, 10.0


@dataclass(frozen=True)
class Watch:
    """Where a run tells how it goes.

    stage : called when a stage begins, with its name and the quench it is about (None where there is none)
    progress : called after each half layer of the present stage's quench
    """

    stage: Callable[[str, Quench | None], None]
    progress: Callable[[Progress], None]


SILENT = Watch(stage=lambda _name, _quench: None, progress=lambda _progress: None)


def all_quenches(config: Config) -> dict[str, Quench]:
    """Return the main quench and the companions of a config with a weight of its own, by name."""
    quench = build_quench(config, weight=chosen_settings(config)[0], time_step=default_step(config))
    return {MAIN: quench, **planned_companions(config, quench)}


def chosen_settings(config: Config) -> tuple[float, float]:
    """Return discarded weight and time step: the config's own, or those that its accuracy asks for."""
    evolution, step = config.evolution, default_step(config)
    if evolution.accuracy is None:
        return evolution.discarded_weight or 0.0, step
    return choose_settings(
        lambda weight, time_step: build_quench(config, weight=weight, time_step=time_step),
        accuracy=evolution.accuracy,
        time_step=step,
        fixed_step=evolution.time_step is not None,
    )


def planned_companions(config: Config, quench: Quench) -> dict[str, Quench]:
    """Return the companions that the budget needs, none if the config wants none."""
    if config.budget.companions == "none":
        return {}
    shorter = build_shorter(config, weight=quench.discarded_weight, time_step=quench.time_step)
    return companion_quenches(quench, shorter=shorter)


def quantum_side(
    config: Config, *, threads: int, watch: Watch, store: Store | None = None, stop: Stop | None = None
) -> QuantumSide:
    """Run the main quench and its companions; with an accuracy, tighten the weight until the budget confirms
    it.

    store : where the quenches are kept; stop : asked between layers whether to end
    """
    accuracy, stop = config.evolution.accuracy, stop or Stop()
    if accuracy is not None:
        watch.stage("pilot runs", None)
    weight, time_step = chosen_settings(config)
    for _ in range(REPEATS + 1):
        quench = build_quench(config, weight=weight, time_step=time_step)
        companions = planned_companions(config, quench)
        side = simulate_all(quench, companions, threads=threads, watch=watch, store=store, stop=stop)
        if accuracy is None:
            break
        error, source = quantum_error(side.main, side.companions, budget_settings(config, quench))
        kind = "accuracy_reached" if error <= accuracy else "accuracy_missed"
        chosen = f"weight {quench.discarded_weight:.1e}, time step {quench.time_step:.3g}"
        largest = f"mostly {source.replace('_', ' ')}"
        detail = f"{chosen}: numerical error {error:.1e} at most ({largest}), {accuracy:.1e} asked"
        side = replace(side, events=({"kind": kind, "detail": detail},))
        step_is_fixed = source == "time_step" and config.evolution.time_step is not None
        if error <= accuracy or step_is_fixed or side.failures:  # no repeat mends a missing companion
            break
        if source == "time_step":
            time_step = quench.time_step / 2.0
        else:
            weight = quench.discarded_weight / TIGHTENING
    return side


def simulate_all(
    quench: Quench,
    companions: Mapping[str, Quench],
    *,
    threads: int,
    watch: Watch,
    store: Store | None = None,
    stop: Stop | None = None,
) -> QuantumSide:
    """Run a main quench and its companions, the companions in processes of their own if there is more than
    one thread; those that start like the main run wait for its start and share it.

    Threads that no companion occupies share the charges of the quench in this process, which takes companions
    over that have not begun when its main run has ended. Results are the same either way. A companion that
    fails is left out, and an event says so.
    """
    stop, failures, records = stop or Stop(), list[dict[str, object]](), dict[str, QuantumRecord]()
    tasks = {name: Task(name, companion, store=store) for name, companion in companions.items()}
    main_task = Task(MAIN, quench, store=store)
    if store is not None:
        require_reachable(store, {MAIN: quench, **companions})
    said = {
        name: stage_name(store, name, f"companion {name}", each) for name, each in companions.items()
    }  # before the processes begin
    workers = min(threads - 1, len(tasks))
    with background(stop, workers=workers) as running, engine_threads(threads) as crew:

        def progress(made: Progress) -> None:
            crew.at_work = max(1, threads - running.busy)
            watch.progress(made)

        if SHORT in tasks:
            running.begin(tasks[SHORT])
            crew.at_work = max(1, threads - running.busy)
        watch.stage(stage_name(store, MAIN, "main run", quench), quench)
        if _start_wanted(store, quench):
            start = start_of_task(main_task, stop)
            tasks = {name: task if name == SHORT else task.with_start(start) for name, task in tasks.items()}
            main_task = replace(main_task, start=start)
        for name in (name for name in tasks if name != SHORT):
            running.begin(tasks[name])
        main = carry_out(main_task, stop, progress, keeps_state=True)
        for name, task in tasks.items():
            here = running.taken_back(name)
            watch.stage(said[name], task.quench if here else None)
            try:
                records[name] = carry_out(task, stop, progress) if here else fetched(task, running, stop)
            except tuple(SURVIVABLE) as error:
                failures.append(failure_event(name, error))
                watch.stage(str(failures[-1]["detail"]), None)
    return QuantumSide(
        quench,
        replace(main, last_state=None),
        {name: companions[name] for name in records},
        {name: replace(record, last_state=None) for name, record in records.items()},
        in_processes=bool(running.pending),
        failures=tuple(failures),
        state_distance=state_distance(main, records),
    )


def _start_wanted(store: Store | None, quench: Quench) -> bool:
    """Whether a run may still need its main quench's start, and can have it without spoiling what is kept."""
    if store is None or store.start_path(MAIN, quench).exists():
        return True
    header = store.header(MAIN, quench)
    return header is None or header["stage"] == "start"


def stage_name(store: Store | None, name: str, said: str, quench: Quench) -> str:
    """Return the words for the stage of a quench, with how far it has come already."""
    standing = "" if store is None else store.standing(name, quench)
    return f"{said}, {standing}" if standing else said
