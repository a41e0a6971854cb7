"""What the commands do, one function each: run, hydro, forecast. `run` reads like the flow line of the
design."""

from __future__ import annotations

import time
from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace
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
from tnquench.outcome import Pieces, QuantumSide, prediction_pieces, run_pieces
from tnquench.report.page import write_report
from tnquench.side_by_side import (
    SURVIVABLE,
    background,
    companion_record,
    failure_event,
    fetched,
    state_distance,
)
from tnquench.stretch_of import add_study, other_factors, stretched_config, stretched_folder

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
    Results do not depend on it: each simulation runs on one core. With a stretch study the stretched runs
    follow, each a dataset of its own in FOLDER/stretch_<factor>, and the study joins the dataset of the run.
    Raises InputError for a config or folder that cannot be used.
    """
    config = load_config(config_file)
    folder = into or DEFAULT_FOLDER / config_file.stem
    factors = other_factors(config)
    for place in (folder, *(folder / stretched_folder(factor) for factor in factors)):
        require_writable(place)
    with threadpool_limits(1):
        pieces = judged_run(config, config_file, threads=threads, watch=watch)
        write_run(folder, **pieces.as_arguments())
        if factors:
            family = {1.0: pieces} | stretched_runs(config, config_file, folder, threads=threads, watch=watch)
            add_study(pieces, config, family)
            write_run(folder, **pieces.as_arguments())
    watch.stage("report", None)
    write_report(folder)
    return folder


def judged_run(config: Config, config_file: Path, *, threads: int, watch: Watch) -> Pieces:
    """Predict and simulate one config, and judge the one by the other; return the pieces of the dataset.

    Raises InputError for a stretch study without a prediction.
    """
    began, cpu = time.perf_counter(), time.process_time()
    watch.stage("prediction", None)
    prediction, absence = build_prediction(config)
    if prediction is None:
        if config.stretch.factors:
            raise InputError(str(config_file), [f"[stretch] needs a prediction to be studied: {absence}"])
        watch.stage(f"no prediction: {absence}", None)
    quantum = quantum_side(config, threads=threads, watch=watch)
    watch.stage("budget and dataset", None)
    pieces = run_pieces(config, config_file, quantum, prediction, absence)
    spent = {
        "wall_seconds": time.perf_counter() - began,
        "cpu_seconds": time.process_time() - cpu + quantum.cpu_elsewhere,
    }
    pieces.provenance.update(spent)
    return pieces


def stretched_runs(
    config: Config, config_file: Path, folder: Path, *, threads: int, watch: Watch
) -> dict[float, Pieces]:
    """Run a config stretched by each factor of its study but 1, write the datasets, and return their pieces
    by factor."""
    family = {}
    for factor in other_factors(config):
        told = _telling(watch, f"stretch {factor:g}")
        family[factor] = judged_run(
            stretched_config(config, factor), config_file, threads=threads, watch=told
        )
        write_run(folder / stretched_folder(factor), **family[factor].as_arguments())
    return family


def _telling(watch: Watch, said: str) -> Watch:
    """Return a watch whose stages begin with these words."""
    return Watch(stage=lambda name, quench: watch.stage(f"{said}, {name}", quench), progress=watch.progress)


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
    """Estimate what a config will cost from short pilot runs, its stretch study left out; nothing is written.

    With an accuracy in place of a weight the pilots that choose the weight are run too.
    """
    return _forecast(load_config(config_file))


def forecast_stretched(config: Config) -> dict[float, tuple[Config, Quench, Forecast]]:
    """Estimate what each stretched run of a config's study will cost, by factor; empty without a study."""
    return {factor: _forecast(stretched_config(config, factor)) for factor in other_factors(config)}


def _forecast(config: Config) -> tuple[Config, Quench, Forecast]:
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
        if error <= accuracy or step_is_fixed or side.failures:  # no repeat mends a missing companion
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

    Results are the same either way. A companion that fails is left out, and an event says so.
    """
    failures: list[dict[str, object]] = []
    with background(companions, workers=threads - 1) as pending:
        watch.stage("main run", quench)
        main = simulate(quench, report=watch.progress)
        records: dict[str, QuantumRecord] = {}
        for name, companion in companions.items():
            watch.stage(f"companion {name}", None if pending else companion)
            try:
                records[name] = (
                    fetched(name, companion, pending[name])
                    if pending
                    else companion_record(name, companion, watch.progress)
                )
            except tuple(SURVIVABLE) as error:
                failures.append(failure_event(name, error))
                watch.stage(str(failures[-1]["detail"]), None)
    return QuantumSide(
        quench,
        replace(main, last_state=None),
        {name: companions[name] for name in records},
        {name: replace(record, last_state=None) for name, record in records.items()},
        in_processes=bool(pending),
        failures=tuple(failures),
        state_distance=state_distance(main, records),
    )
