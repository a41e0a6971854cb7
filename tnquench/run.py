"""What the commands do, one function each: run, hydro, forecast. `run` reads like the flow line of the
design."""

from __future__ import annotations

import time
from dataclasses import dataclass, field
from pathlib import Path

from threadpoolctl import threadpool_limits

from tnquench.assemble import build_prediction, build_quench
from tnquench.budget.companions import SHORT, WITHOUT
from tnquench.budget.pilot import Forecast, forecast_quench
from tnquench.checkpoints import open_store, require_reachable
from tnquench.config.load import load_config
from tnquench.config.schema import Config
from tnquench.config.sweep import refuse_sweep
from tnquench.dataset.lock import LONE_LOCK, folder_lock, lock_holder
from tnquench.dataset.writer import clear_leftovers, require_writable, write_run
from tnquench.errors import InputError
from tnquench.evolution.threads import threads as engine_threads
from tnquench.observables.quench import Quench
from tnquench.outcome import Pieces, prediction_pieces, run_pieces
from tnquench.quantum_of import (
    MAIN,
    SILENT,
    Watch,
    all_quenches,
    chosen_settings,
    planned_companions,
    quantum_side,
    stage_name,
)
from tnquench.report.page import write_report
from tnquench.side_by_side import Task, carry_out, start_of_task
from tnquench.stopping import Stop
from tnquench.stretch_of import add_study, other_factors, stretched_config, stretched_folder

#: Where results go unless told otherwise, below the working directory.
DEFAULT_FOLDER = Path("results")


@dataclass(frozen=True)
class Continuation:
    """How a run goes on from what is kept, and when it ends before its time.

    stop : asked between layers whether to end; checkpoint_every : least seconds between two checkpoints of a
    quench, None for the default; fresh : forget the checkpoints that are there
    """

    stop: Stop = field(default_factory=Stop)
    checkpoint_every: float | None = None
    fresh: bool = False


def run(
    config_file: Path,
    *,
    into: Path | None = None,
    threads: int = 1,
    watch: Watch = SILENT,
    continuation: Continuation | None = None,
    allow_outside: bool = False,
) -> Path:
    """Simulate a config with its companions, predict, judge, and write dataset and report; return the folder.

    into : folder of the results, results/<name of the config> if not given; threads : processes used at most.
    Results do not depend on it: each simulation runs on one core. With a stretch study the stretched runs
    follow, each a dataset of its own in FOLDER/stretch_<factor>, and the study joins the dataset of the run.
    What the folder's checkpoints hold is not computed again. allow_outside : as of `load_config`.
    Raises InputError for a config or folder that cannot be used, Stopped where the continuation ends the run.
    """
    how = continuation or Continuation()
    config = load_config(config_file, allow_outside=allow_outside)
    refuse_sweep(config.sweep, str(config_file))
    folder = into or DEFAULT_FOLDER / config_file.stem
    factors = other_factors(config)
    for place in (folder, *(folder / stretched_folder(factor) for factor in factors)):
        require_writable(place)
    with folder_lock(folder), threadpool_limits(1):
        for place in (folder, *(folder / stretched_folder(factor) for factor in factors)):
            require_no_lone_quench(place)
            clear_leftovers(place)
        pieces = judged_run(config, config_file, folder, threads=threads, watch=watch, how=how)
        write_run(folder, **pieces.as_arguments())
        if factors:
            family = {1.0: pieces}
            for factor in factors:
                told, place = _telling(watch, f"stretch {factor:g}"), folder / stretched_folder(factor)
                other = stretched_config(config, factor)
                family[factor] = judged_run(other, config_file, place, threads=threads, watch=told, how=how)
                write_run(place, **family[factor].as_arguments())
            add_study(pieces, config, family)
            write_run(folder, **pieces.as_arguments())
        watch.stage("report", None)
        write_report(folder)
    return folder


def run_one(
    config_file: Path,
    name: str,
    *,
    into: Path | None = None,
    threads: int = 1,
    watch: Watch = SILENT,
    continuation: Continuation | None = None,
    allow_outside: bool = False,
) -> Path:
    """Carry out one quench of a run alone and keep it for the run that puts all together; return the folder.

    name : main, the name of a companion, or that of a stretched run's quench, as in stretch_2/main
    threads : among which the charges of its bonds are shared
    Raises InputError for a name that the run does not have, and for a config that leaves its weight open.
    """
    how = continuation or Continuation()
    config = load_config(config_file, allow_outside=allow_outside)
    refuse_sweep(config.sweep, str(config_file))
    top = into or DEFAULT_FOLDER / config_file.stem
    if how.fresh:
        problem = "--fresh is for whole runs: delete the checkpoints of this quench in place of it"
        raise InputError(str(config_file), [problem])
    if config.evolution.accuracy is not None:
        problem = "--only needs [evolution] discarded_weight: with accuracy the whole run chooses it"
        raise InputError(str(config_file), [problem])
    runs = {"": (config, top)} | {
        f"{stretched_folder(factor)}/": (stretched_config(config, factor), top / stretched_folder(factor))
        for factor in other_factors(config)
    }
    quenches = {
        prefix + own: (own, quench, *found)
        for prefix, found in runs.items()
        for own, quench in all_quenches(found[0]).items()
    }
    if name not in quenches:
        raise InputError(
            str(config_file), [f'--only "{name}": no such quench; there are {", ".join(quenches)}']
        )
    own, quench, config, folder = quenches[name]
    require_writable(folder)
    with folder_lock(folder, name=f"{LONE_LOCK}{own}"), threadpool_limits(1), engine_threads(threads):
        if (holder := lock_holder(top)) is not None:  # looked at under our own lock, which a run looks at
            problem = f"a whole run is under way here: process {holder.pid} on {holder.host}"
            raise InputError(str(top), [problem])
        store = open_store(folder, config, interval=how.checkpoint_every, fresh=False)
        require_reachable(store, {own: quench})
        watch.stage(stage_name(store, own, name, quench), quench)
        task = Task(own, quench, store=store)
        main = Task(MAIN, all_quenches(config)[MAIN], store=store)
        if own not in (MAIN, SHORT) and store.start_path(MAIN, main.quench).exists():
            task = task.with_start(start_of_task(main, how.stop))
        carry_out(task, how.stop, watch.progress)
    return folder


def require_no_lone_quench(folder: Path) -> None:
    """Raise InputError if a single quench of a run in this folder is under way elsewhere."""
    for name in (MAIN, *WITHOUT):
        if (holder := lock_holder(folder, name=f"{LONE_LOCK}{name}")) is not None:
            problem = f"its quench {name} is under way (process {holder.pid} on {holder.host})"
            raise InputError(str(folder), [f"{problem}; wait for it, or end it"])


def judged_run(
    config: Config, config_file: Path, folder: Path, *, threads: int, watch: Watch, how: Continuation
) -> Pieces:
    """Predict and simulate one config, and judge the one by the other; return the pieces of the dataset.

    folder : keeps the checkpoints
    Raises InputError for a stretch study without a prediction, Stopped where the continuation ends the run.
    """
    began, cpu = time.perf_counter(), time.process_time()
    store = open_store(folder, config, interval=how.checkpoint_every, fresh=how.fresh)
    watch.stage("prediction", None)
    prediction, absence = build_prediction(config)
    if prediction is None:
        if config.stretch.factors:
            raise InputError(str(config_file), [f"[stretch] needs a prediction to be studied: {absence}"])
        watch.stage(f"no prediction: {absence}", None)
    quantum = quantum_side(config, threads=threads, watch=watch, store=store, stop=how.stop)
    watch.stage("budget and dataset", None)
    pieces = run_pieces(config, config_file, quantum, prediction, absence)
    spent = {
        "wall_seconds": time.perf_counter() - began,
        "cpu_seconds": time.process_time() - cpu + quantum.cpu_elsewhere,
    }
    pieces.provenance.update(spent)
    if not quantum.failures and config.evolution.accuracy is None:  # else earlier repeats are met again
        store.tidy({MAIN: quantum.quench, **quantum.companion_quenches})
    return pieces


def _telling(watch: Watch, said: str) -> Watch:
    """Return a watch whose stages begin with these words."""
    return Watch(stage=lambda name, quench: watch.stage(f"{said}, {name}", quench), progress=watch.progress)


def hydro(config_file: Path, *, into: Path | None = None, allow_outside: bool = False) -> Path:
    """Write the prediction of a config alone as a dataset; return the folder, results/<name>-hydro if not
    given.

    Raises InputError if the config cannot be used or has no prediction.
    """
    began, cpu = time.perf_counter(), time.process_time()
    config = load_config(config_file, allow_outside=allow_outside)
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


def forecast(config_file: Path, *, allow_outside: bool = False) -> tuple[Config, Quench, Forecast]:
    """Estimate what a config will cost from short pilot runs, its stretch study left out; nothing is written.

    With an accuracy in place of a weight the pilots that choose the weight are run too.
    """
    return _forecast(load_config(config_file, allow_outside=allow_outside))


def forecast_stretched(config: Config) -> dict[float, tuple[Config, Quench, Forecast]]:
    """Estimate what each stretched run of a config's study will cost, by factor; empty without a study."""
    return {factor: _forecast(stretched_config(config, factor)) for factor in other_factors(config)}


def _forecast(config: Config) -> tuple[Config, Quench, Forecast]:
    with threadpool_limits(1):
        weight, time_step = chosen_settings(config)
        quench = build_quench(config, weight=weight, time_step=time_step)
        return config, quench, forecast_quench(quench, companions=planned_companions(config, quench))
