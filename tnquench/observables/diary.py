"""The diary of a quench: what is measured at each sample, and what happened to its cuts until then."""

from __future__ import annotations

from typing import Any

import numpy as np

from tnquench.conventions import Reals
from tnquench.evolution.real_time import Moment
from tnquench.observables.local import LocalObservables


class Diary:
    """Collects what is measured at each moment.

    rows : observables, cuts and the state's size by name, one array a moment; events : what the user must
    know; peak_bytes : of the state so far
    """

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

    def table(self) -> dict[str, Reals]:
        """Return every row as one array over the moments, (time, ...)."""
        return {name: np.array(rows) for name, rows in self.rows.items()}

    def content(self) -> dict[str, Any]:
        """Return the diary as plain arrays and numbers, for a checkpoint."""
        return {"rows": self.table(), "events": self.events, "peak_bytes": self.peak_bytes}

    def resume(self, content: dict[str, Any]) -> None:
        """Take over the entries of an earlier diary."""
        self.rows = {name: list(rows) for name, rows in content["rows"].items()}
        self.events = content["events"]
        self.peak_bytes = content["peak_bytes"]
