"""Simulates the cases of the honesty study once and keeps what the error budget needs of them.

FOLDER/NAME.npz holds the fields and what the budget takes of main run and companions, with the truth;
FOLDER/cases.json, by case, its settings, the digest of these numbers and the processor time. A case whose
settings have not changed is not simulated again, so that the estimators can be judged anew in seconds.
"""

from __future__ import annotations

import hashlib
import json
import time
from collections.abc import Mapping
from dataclasses import asdict, dataclass, field, replace
from pathlib import Path
from typing import Any, cast

import numpy as np

from tests.benchmarks.honesty_free import Fields
from tests.benchmarks.honesty_truth import truth_of
from tests.honesty_cases import Case
from tnquench.assemble import budget_settings, build_quench, build_shorter
from tnquench.budget.assess import RunSettings, quantum_sources
from tnquench.budget.companions import SHORT, companion_quenches
from tnquench.conventions import Reals
from tnquench.observables.quench import QuantumRecord, Quench, simulate, start_of_quench

RECORDS = "cases.json"


@dataclass(frozen=True)
class StoredRun:
    """What the budget takes of a run; the main run alone has the numbers below `seconds`."""

    fields: Fields
    discarded_weight: Reals
    weight_asked: float
    time_step: float
    seconds: float
    times: Reals = field(default_factory=lambda: np.zeros(0))
    cuts: Reals = field(default_factory=lambda: np.zeros(0))
    angle: Reals = field(default_factory=lambda: np.zeros(0))
    norms: Mapping[str, float] = field(default_factory=dict)
    start_error: Mapping[str, float] = field(default_factory=dict)
    trail: None = None


@dataclass(frozen=True)
class Solved:
    """A case with its runs and its truth."""

    case: Case
    main: StoredRun
    companions: Mapping[str, StoredRun]
    truth: Mapping[str, Fields]

    @property
    def settings(self) -> RunSettings:
        """What the budget must know of the main run."""
        return budget_settings(self.case.config(), quench_of(self.case))

    def sources(self, name: str) -> dict[str, Reals]:
        """The claimed errors of one observable by source."""
        return quantum_sources(name, cast("QuantumRecord", self.main), self.companions, self.settings)


def quench_of(case: Case) -> Quench:
    """The main run as the program builds it, with a start of its own where the case asks for one."""
    quench = build_quench(case.config(), weight=case.weight, time_step=case.time_step)
    if not case.start_distance:
        return quench
    return replace(
        quench, preparation_weight=case.start_distance**2, preparation_distance=case.start_distance
    )


def simulated(case: Case) -> Solved:
    """Run a case with its companions, which share its start, and solve it exactly.

    The shorter companion is left out where no longer chain can say whether its claim is right.
    """
    truth, quench = truth_of(case), quench_of(case)
    shorter = None
    if "longer" in truth and not case.start_distance:
        shorter = build_shorter(case.config(), weight=case.weight, time_step=case.time_step)
    start = start_of_quench(quench)
    main = simulate(quench, start=start)
    companions = {
        name: _companion(simulate(each, start=None if name == SHORT else start))
        for name, each in companion_quenches(quench, shorter=shorter).items()
    }
    return Solved(case, _main(main), companions, truth)


def _companion(record: QuantumRecord) -> StoredRun:
    return StoredRun(
        record.fields, record.discarded_weight, record.weight_asked, record.time_step, record.seconds
    )


def _main(record: QuantumRecord) -> StoredRun:
    return replace(
        _companion(record),
        times=record.times,
        cuts=record.cuts,
        angle=record.angle,
        norms=record.norms,
        start_error=record.start_error,
    )


class Library:
    """The solved cases of a folder."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        folder.mkdir(parents=True, exist_ok=True)
        self.path = folder / RECORDS
        self.known: dict[str, Any] = json.loads(self.path.read_text()) if self.path.exists() else {}

    def get(self, case: Case, *, fresh: bool = False) -> Solved:
        """Return a case as kept, or run it if it is missing, changed, damaged, or to be run again."""
        entry, file = self.known.get(case.name), self.folder / f"{case.name.replace(' ', '_')}.npz"
        settings = json.loads(json.dumps(asdict(case)))
        if entry and not fresh and entry["settings"] == settings and file.exists():
            with np.load(file) as arrays:
                flat = dict(arrays)
            if digest_of(flat) == entry["digest"]:
                return _unpacked(case, flat)
        began = time.process_time()
        solved = simulated(case)
        flat = _packed(solved)
        np.savez_compressed(file, **cast("Any", flat))
        seconds = time.process_time() - began
        self.known[case.name] = {"settings": settings, "digest": digest_of(flat), "seconds": seconds}
        self.path.write_text(json.dumps(self.known, indent=1))
        return solved

    def seconds(self, case: Case) -> float:
        """Processor time that a case took."""
        return float(self.known[case.name]["seconds"])


def digest_of(flat: Mapping[str, Reals]) -> str:
    """Digest of all numbers of a case: equal runs have equal digests."""
    found = hashlib.sha256()
    for name in sorted(flat):
        found.update(name.encode())
        found.update(np.ascontiguousarray(flat[name]).tobytes())
    return found.hexdigest()[:16]


SCALARS = ("weight_asked", "time_step")


def _packed(solved: Solved) -> dict[str, Reals]:
    """All arrays by a path of names."""
    flat: dict[str, Reals] = {}
    for run, record in {"main": solved.main, **solved.companions}.items():
        flat |= {f"run/{run}/fields/{name}": values for name, values in record.fields.items()}
        flat[f"run/{run}/discarded_weight"] = record.discarded_weight
        flat[f"run/{run}/scalars"] = np.array([getattr(record, name) for name in SCALARS])
    main = solved.main
    flat |= {f"main/{name}": getattr(main, name) for name in ("times", "cuts", "angle")}
    flat |= {f"main/norms/{name}": np.array(value) for name, value in main.norms.items()}
    flat |= {f"main/start_error/{name}": np.array(value) for name, value in main.start_error.items()}
    for kind, fields in solved.truth.items():
        flat |= {f"truth/{kind}/{name}": values for name, values in fields.items()}
    return flat


def _below(flat: Mapping[str, Reals], start: str) -> dict[str, Reals]:
    return {name.removeprefix(start): values for name, values in flat.items() if name.startswith(start)}


def _unpacked(case: Case, flat: Mapping[str, Reals]) -> Solved:
    runs = {}
    for run in {name.split("/")[0]: None for name in _below(flat, "run/")}:
        scalars = dict(zip(SCALARS, flat[f"run/{run}/scalars"].tolist(), strict=True))
        fields = _below(flat, f"run/{run}/fields/")
        runs[run] = StoredRun(fields, flat[f"run/{run}/discarded_weight"], seconds=np.nan, **scalars)
    norms, start_error = (
        {name: float(value) for name, value in _below(flat, f"main/{group}/").items()}
        for group in ("norms", "start_error")
    )
    main = replace(
        runs.pop("main"),
        times=flat["main/times"],
        cuts=flat["main/cuts"],
        angle=flat["main/angle"],
        norms=norms,
        start_error=start_error,
    )
    kinds = {name.split("/")[0]: None for name in _below(flat, "truth/")}
    return Solved(case, main, runs, {kind: _below(flat, f"truth/{kind}/") for kind in kinds})
