"""What the commands do, one function each: run, hydro, forecast. `run` reads like the flow line of the
design."""

from __future__ import annotations

import signal
import threading
import time
from collections.abc import Callable, Iterator, Mapping
from concurrent.futures import Future, ProcessPoolExecutor
from contextlib import contextmanager
from dataclasses import dataclass, replace
from multiprocessing import active_children, get_context
from pathlib import Path

from threadpoolctl import threadpool_limits

from tnquench.assemble import budget_settings, build_prediction, build_quench, build_shorter, default_step
from tnquench.budget.assess import quantum_error
from tnquench.budget.companions import companion_quenches
from tnquench.budget.pilot import Forecast, choose_settings, forecast_quench
from tnquench.config.load import load_config
from tnquench.config.schema import Config
from tnquench.dataset.writer import require_writable, write_run
from tnquench.errors import InputError
from tnquench.observables.quench import Progress, QuantumRecord, Quench, simulate
from tnquench.outcome import QuantumSide, prediction_pieces, run_pieces
from tnquench.report.page import write_report

#: Where results go unless told otherwise, below the working directory.
DEFAULT_FOLDER = Path("results")

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


def run(config_file: Path, *, into: Path | None = None, threads: int = 1, watch: Watch = SILENT) -> Path:
    """Simulate a config with its companions, predict, judge, and write dataset and report; return the folder.

    into : folder of the results, results/<name of the config> if not given; threads : processes used at most.
    Results do not depend on it: each simulation runs on one core.
    Raises InputError for a config or folder that cannot be used.
    """
    began, cpu = time.perf_counter(), time.process_time()
    config = load_config(config_file)
    folder = into or DEFAULT_FOLDER / config_file.stem
    require_writable(folder)
    with threadpool_limits(1):
        watch.stage("prediction", None)
        prediction, absence = build_prediction(config)
        if prediction is None:
            watch.stage(f"no prediction: {absence}", None)
        quantum = quantum_side(config, threads=threads, watch=watch)
        watch.stage("budget, dataset and report", None)
        pieces = run_pieces(config, config_file, quantum, prediction, absence)
    spent = {
        "wall_seconds": time.perf_counter() - began,
        "cpu_seconds": time.process_time() - cpu + quantum.cpu_elsewhere,
    }
    pieces.provenance.update(spent)
    write_run(folder, **pieces.as_arguments())
    write_report(folder)
    return folder


def hydro(config_file: Path, *, into: Path | None = None) -> Path:
    """Write the prediction of a config alone as a dataset; return the folder, results/<name>-hydro if not
    given.

    Raises InputError if the config cannot be used or has no prediction.
    """
    began, cpu = time.perf_counter(), time.process_time()
    config = load_config(config_file)
    folder = into or DEFAULT_FOLDER / f"{config_file.stem}-hydro"
    with threadpool_limits(1):
        prediction, absence = build_prediction(config)
    if prediction is None:
        raise InputError(str(config_file), [absence])
    require_writable(folder)
    pieces = prediction_pieces(config, config_file, prediction)
    pieces.provenance.update(
        {"wall_seconds": time.perf_counter() - began, "cpu_seconds": time.process_time() - cpu}
    )
    write_run(folder, **pieces.as_arguments())
    return folder


def forecast(config_file: Path) -> tuple[Config, Quench, Forecast]:
    """Estimate what a config will cost from short pilot runs; nothing is written.

    With an accuracy in place of a weight the pilots that choose the weight are run too.
    """
    config = load_config(config_file)
    with threadpool_limits(1):
        weight, time_step = chosen_settings(config)
        quench = build_quench(config, weight=weight, time_step=time_step)
        return config, quench, forecast_quench(quench, companions=planned_companions(config, quench))


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


def quantum_side(config: Config, *, threads: int, watch: Watch) -> QuantumSide:
    """Run the main quench and its companions; with an accuracy, tighten the weight until the budget confirms
    it."""
    accuracy = config.evolution.accuracy
    if accuracy is not None:
        watch.stage("pilot runs", None)
    weight, time_step = chosen_settings(config)
    for _ in range(REPEATS + 1):
        quench = build_quench(config, weight=weight, time_step=time_step)
        side = simulate_all(quench, planned_companions(config, quench), threads=threads, watch=watch)
        if accuracy is None:
            break
        error, source = quantum_error(side.main, side.companions, budget_settings(config, quench))
        kind = "accuracy_reached" if error <= accuracy else "accuracy_missed"
        chosen = f"weight {quench.discarded_weight:.1e}, time step {quench.time_step:.3g}"
        largest = f"mostly {source.replace('_', ' ')}"
        detail = f"{chosen}: numerical error {error:.1e} at most ({largest}), {accuracy:.1e} asked"
        side = replace(side, events=({"kind": kind, "detail": detail},))
        step_is_fixed = source == "time_step" and config.evolution.time_step is not None
        if error <= accuracy or step_is_fixed:
            break
        if source == "time_step":
            time_step = quench.time_step / 2.0
        else:
            weight = quench.discarded_weight / TIGHTENING
    return side


def simulate_all(
    quench: Quench, companions: Mapping[str, Quench], *, threads: int, watch: Watch
) -> QuantumSide:
    """Run a main quench and its companions, the companions in processes of their own if there is more than
    one thread.

    Results are the same either way.
    """
    with _background(companions, workers=threads - 1) as pending:
        watch.stage("main run", quench)
        main = simulate(quench, report=watch.progress)
        records: dict[str, QuantumRecord] = {}
        for name, companion in companions.items():
            watch.stage(f"companion {name}", None if pending else companion)
            records[name] = pending[name].result() if pending else simulate(companion, report=watch.progress)
    return QuantumSide(quench, main, dict(companions), records, in_processes=bool(pending))


@contextmanager
def _background(
    quenches: Mapping[str, Quench], *, workers: int
) -> Iterator[dict[str, Future[QuantumRecord]]]:
    """Start quenches in processes of their own; yield their futures by name, none without workers.

    On any exception the processes are ended: nobody will fetch their results.
    """
    if workers < 1 or not quenches:
        yield {}
        return
    others = set(active_children())
    with ProcessPoolExecutor(
        min(workers, len(quenches)), mp_context=get_context("spawn"), initializer=_one_core
    ) as pool:
        try:
            with _interrupts_ignored():
                pending = {name: pool.submit(simulate, quench) for name, quench in quenches.items()}
            yield pending
        except BaseException:
            pool.shutdown(wait=False, cancel_futures=True)
            for worker in set(active_children()) - others:
                worker.terminate()
            raise


@contextmanager
def _interrupts_ignored() -> Iterator[None]:
    """Ignore Ctrl-C while processes start: they inherit it, so that only this process answers to it later."""
    if threading.current_thread() is not threading.main_thread():
        yield
        return
    previous = signal.signal(signal.SIGINT, signal.SIG_IGN)
    try:
        yield
    finally:
        signal.signal(signal.SIGINT, previous)


def _one_core() -> None:
    """Keep a worker's linear algebra on one core."""
    threadpool_limits(1)
