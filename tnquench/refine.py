"""Add a tighter main run to a finished dataset: the old main run becomes a companion, the old ones follow."""

from __future__ import annotations

import time
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import xarray
from threadpoolctl import threadpool_limits

from tnquench.assemble import budget_settings, build_prediction, build_quench
from tnquench.budget.assess import RunSettings
from tnquench.budget.companions import COARSE, REFINEMENT, SHORT, WEIGHT, CompanionRun, partner
from tnquench.checkpoints import CHECKPOINTS, Store
from tnquench.config.load import read_config
from tnquench.config.schema import Config
from tnquench.config.stretch import Stretch
from tnquench.conventions import OBSERVABLE_PLACES, Reals
from tnquench.dataset.lock import folder_lock
from tnquench.dataset.reader import Run, open_run
from tnquench.dataset.writer import require_writable, write_run
from tnquench.errors import InputError
from tnquench.evolution.threads import threads as engine_threads
from tnquench.observables.quench import Quench
from tnquench.outcome import Pieces, QuantumSide, run_pieces
from tnquench.quantum_of import MAIN, SILENT, Watch, stage_name
from tnquench.report.page import write_report
from tnquench.side_by_side import Task, carry_out
from tnquench.stopping import Stop

#: A new weight must be at most this fraction of the old one: runs at nearly equal weights differ by noise
#: alone, and the budget believes no smaller ratio of lost weights.
LARGEST_FRACTION = 1.0 / 3.0


@dataclass(frozen=True)
class KeptRun:
    """A companion as a dataset has kept it; see `CompanionRun`."""

    fields: dict[str, Reals]
    discarded_weight: Reals
    weight_asked: float
    time_step: float
    seconds: float


def refine(
    folder: Path,
    *,
    weight: float | None = None,
    time_step: float | None = None,
    threads: int = 1,
    watch: Watch = SILENT,
    stop: Stop | None = None,
) -> Path:
    """Run the quench of a dataset again at a smaller weight and judge it by what is there; return the folder.

    folder : of the run, or its run.h5; weight : a tenth of the old one if not given; time_step : kept if not
    given. run.h5 is replaced at the end, whole or not at all. The old main run joins the companions; those it
    had follow, named by their weight over the new one. A stretch study is left out: it was of the old run.
    threads : among which the charges of its bonds are shared
    stop : asked between layers whether to end; the same call goes on later
    Raises InputError if there is no such run, or for a weight or step that refines nothing, Stopped where
    `stop` ends it.
    """
    began, cpu = time.perf_counter(), time.process_time()
    old = open_run(folder)
    config, quench = refined_quench(old, weight=weight, time_step=time_step)
    place = old.path.parent
    require_writable(place)
    with folder_lock(place), threadpool_limits(1), engine_threads(threads):
        watch.stage("prediction", None)
        prediction, absence = build_prediction(config)
        store = Store(place / CHECKPOINTS)
        store.folder.mkdir(exist_ok=True)
        watch.stage(stage_name(store, MAIN, "main run", quench), quench)
        main = carry_out(Task(MAIN, quench, store=store), stop or Stop(), watch.progress)
        watch.stage("budget and dataset", None)
        kept, unloosened = kept_runs(old, weight=quench.discarded_weight)
        side = QuantumSide(
            quench,
            main,
            {},
            kept,
            events=(*_earlier_refinements(old), _event(old, quench)),
            settings=refined_settings(config, quench, kept, unloosened),
        )
        pieces = run_pieces(config, Path(str(old.provenance["config_file"])), side, prediction, absence)
        _add_times(pieces, old, wall=time.perf_counter() - began, cpu=time.process_time() - cpu)
        write_run(place, **pieces.as_arguments())
        store.belongs_to(config)
        watch.stage("report", None)
        write_report(place)
    return place


def refined_quench(old: Run, *, weight: float | None, time_step: float | None) -> tuple[Config, Quench]:
    """Return the config of a dataset with the new weight and step, and its main quench.

    Raises InputError if the dataset holds no run, or the weight or step would refine nothing.
    """
    if not len(old.quantum) or "main_run" not in old.provenance:
        problem = "holds no main run to refine; tnquench run CONFIG makes one"
        raise InputError(str(old.path), [problem])
    had = old.provenance["main_run"]
    new = _rounded(had["discarded_weight"] / REFINEMENT) if weight is None else weight
    step = had["time_step"] if time_step is None else time_step
    problems = []
    if not 0.0 < new <= LARGEST_FRACTION * had["discarded_weight"]:
        allowed = f"more than 0 and at most a third of the run's {had['discarded_weight']:.3g}"
        problems.append(f"--weight {new:.3g}: must be {allowed}")
    if not 0.0 < step <= had["time_step"] * (1.0 + 1e-9):
        problems.append(
            f"--step {step:.3g}: must be more than 0 and at most the run's {had['time_step']:.3g}"
        )
    if problems:
        raise InputError(str(old.path), problems)
    config = read_config(str(old.provenance["config_toml"]), subject=str(old.path))
    if time_step is None and config.evolution.accuracy is None:
        step = config.evolution.time_step or step  # as the config has it, before whole steps fill an interval
    settings = {"discarded_weight": new, "time_step": step, "accuracy": None}
    update = {"evolution": config.evolution.model_copy(update=settings), "stretch": Stretch()}
    config = config.model_copy(update=update)
    return config, build_quench(config, weight=new, time_step=step)


def kept_runs(old: Run, *, weight: float) -> tuple[dict[str, CompanionRun], frozenset[str]]:
    """Return the companions of a main run at `weight` that a dataset provides, and which were main runs.

    The old main run and its looser companions are named by their weight over the new one; the runs with a
    longer step and on a shorter chain keep their names as long as the run that they differ from is there.
    """
    had = old.provenance["main_run"]
    former = KeptRun(
        _fields(old.quantum),
        np.asarray(old.quantum["discarded_weight"].values, dtype=np.float64),
        float(had["discarded_weight"]),
        float(had["time_step"]),
        float(had["seconds"]),
    )
    runs: dict[str, CompanionRun] = {_rung(former, weight): former}
    mains = {_rung(former, weight)}
    for name, group in old.companions.items():
        run = _kept(group)
        new_name = _rung(run, weight) if name.startswith(WEIGHT) else name
        runs[new_name] = run
        mains |= {new_name} if group.attrs.get("former_main") else set()
    for name in (COARSE, SHORT):
        if name in runs and partner(runs, name) is None:
            del runs[name]
    return runs, frozenset(mains)


def refined_settings(
    config: Config, quench: Quench, kept: Mapping[str, CompanionRun], unloosened: frozenset[str]
) -> RunSettings:
    """Return what the budget must know: steps of the companions that measured the step's error."""
    usual = budget_settings(config, quench)
    coarse = kept.get(COARSE)
    beside = kept.get(partner(kept, COARSE) or "") if coarse is not None else None
    if coarse is None or beside is None:
        return RunSettings(
            usual.step_ratio, usual.trotter_order, usual.resolve_at, usual.reach, 1.0, unloosened
        )
    return RunSettings(
        step_ratio=round(coarse.time_step / beside.time_step, 9),
        trotter_order=usual.trotter_order,
        resolve_at=usual.resolve_at,
        reach=usual.reach,
        shrunk=quench.time_step / beside.time_step,
        unloosened=unloosened,
    )


def _rung(run: CompanionRun, weight: float) -> str:
    """Return a looser run's name: its weight over the main run's."""
    return f"{WEIGHT}{_rounded(run.weight_asked / weight, digits=3):.15g}"


def _rounded(value: float, *, digits: int = 12) -> float:
    """Return a number to so many significant digits: a tenth of 1e-9 is to be 1e-10."""
    return float(f"{value:.{digits}g}")


def _fields(group: xarray.Dataset) -> dict[str, Reals]:
    """Return the observables of a group, (time, place) each."""
    return {
        name: np.asarray(group[name].values, dtype=np.float64) for name in OBSERVABLE_PLACES if name in group
    }


def _kept(group: xarray.Dataset) -> KeptRun:
    """Return a companion as the file has it; older files do not say what its cuts lost."""
    lost = group["discarded_weight"].values if "discarded_weight" in group else np.full((1, 1), np.nan)
    said: Mapping[str, Any] = group.attrs
    return KeptRun(
        _fields(group),
        np.asarray(lost, dtype=np.float64),
        float(said["discarded_weight"]),
        float(said["time_step"]),
        float(said["seconds"]),
    )


def _event(old: Run, quench: Quench) -> dict[str, object]:
    """Return the event of this refinement."""
    had = old.provenance["main_run"]
    detail = (
        f"main run refined from weight {had['discarded_weight']:.3g}, time step {had['time_step']:.3g} "
        f"to weight {quench.discarded_weight:.3g}, time step {quench.time_step:.3g}"
    )
    if read_config(str(old.provenance["config_toml"]), subject=str(old.path)).stretch.factors:
        detail += "; the stretch study of the earlier run is left out"
    return {"kind": "refined", "detail": detail}


def _earlier_refinements(old: Run) -> list[dict[str, object]]:
    """Return the events of earlier refinements and of companions that failed."""
    events = old.provenance.get("events") or []
    return [dict(event) for event in events if event.get("kind") in ("refined", "companion_failed")]


def _add_times(pieces: Pieces, old: Run, *, wall: float, cpu: float) -> None:
    """Add this run's times to those that the dataset has taken so far."""
    for name, spent in (("wall_seconds", wall), ("cpu_seconds", cpu)):
        pieces.provenance[name] = float(old.provenance.get(name, 0.0)) + spent
