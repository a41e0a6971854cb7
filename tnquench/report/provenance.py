"""Where a run comes from: machine, times, versions, what was run, and the events on the way."""

from __future__ import annotations

import json
from collections.abc import Mapping
from typing import Any

from tnquench.dataset.reader import Run
from tnquench.report.units import Units
from tnquench.report.wording import DASH, capitalised, duration, plain, unbroken

#: A few events are told beside the verdict, more of them only counted.
FEW = 3

#: Kinds of events that have sentences of their own at the head of the report.
TOLD_ELSEWHERE = ("extra", "no_prediction")

MEGABYTE = 1e6


def provenance_rows(run: Run, units: Units) -> list[tuple[str, list[str]]]:
    """Return pairs of heading and lines of text; what the dataset does not say is left out."""
    said = run.provenance
    spent = (
        f"{_seconds(said, 'wall_seconds')} on the clock, {_seconds(said, 'cpu_seconds')} of processor time"
    )
    memory = said.get("peak_memory_bytes")
    rows = [
        ("Written", [_listed(said.get("created", ""))]),
        ("Machine", [_listed(said.get("machine", ""))]),
        ("Time", [spent]),
        ("Memory", [f"{plain(round(memory / MEGABYTE))} MB"] if isinstance(memory, int | float) else []),
        ("Versions", [_listed(said.get("versions", {}))]),
        ("Preparation", [_listed(said.get("preparation", {}))]),
        ("Main run", [_listed(said.get("main_run", {}))]),
        ("Companion runs", [_companion(companion.attrs, units) for companion in run.companions.values()]),
        ("Config file", [_listed(said.get("config_file", ""))]),
        ("Dataset", [f"{run.path.name}, format {said.get('format_version', DASH)}"]),
        ("SHA-256", [_listed(said.get("digest", ""))]),
    ]
    return [(heading, [unbroken(line) for line in lines]) for heading, lines in rows if any(lines)]


def event_rows(run: Run) -> list[tuple[str, str, str]]:
    """Return time, kind and detail of each event of the run."""
    return [_row(event) for event in _events(run)]


def notices(run: Run) -> list[str]:
    """Return what extra terms of H mean for the verdict, a sentence each."""
    said = [_words(event.get("detail", "")) for event in _events(run) if event.get("kind") == "extra"]
    return [f"{capitalised(sentence).rstrip('.')}." for sentence in said if sentence]


def event_remarks(run: Run) -> list[str]:
    """Return what stands beside the verdict about the events: each of a few, or their number and kinds.

    Extra terms and the absence of a prediction are told elsewhere.
    """
    told = [event for event in _events(run) if event.get("kind") not in TOLD_ELSEWHERE]
    events = [_row(event) for event in told]
    if len(events) <= FEW:
        return [
            f"{kind.capitalize()}: {detail}" if time == DASH else f"{kind.capitalize()}, t = {time}: {detail}"
            for time, kind, detail in events
        ]
    kinds = ", ".join(dict.fromkeys(kind for _, kind, _ in events))
    return [f"The run recorded {len(events)} events ({kinds}), listed below."]


def _events(run: Run) -> list[Mapping[str, Any]]:
    return [event for event in run.provenance.get("events") or [] if isinstance(event, Mapping)]


def _row(event: Mapping[str, Any]) -> tuple[str, str, str]:
    return _moment(event.get("time")), _words(event.get("kind", "")), str(event.get("detail", ""))


def _companion(said: Mapping[str, Any], units: Units) -> str:
    weight = plain(float(said.get("discarded_weight", float("nan"))))
    step = units.duration(float(f"{float(said.get('time_step', float('nan'))):.3g}"))
    return f"weight {weight}, step {step}, {said.get('sites', '?')} sites: {_seconds(said, 'seconds')}"


def _moment(time: object) -> str:
    return plain(float(time)) if isinstance(time, int | float) else DASH


def _seconds(said: Mapping[str, Any], name: str) -> str:
    value = said.get(name)
    return duration(float(value)) if isinstance(value, int | float) else "unknown time"


def _words(name: object) -> str:
    return str(name).replace("_", " ")


def _listed(value: object) -> str:
    """Return a mapping (also one in JSON notation) as a line of names and values, anything else as text."""
    if isinstance(value, str) and value.startswith("{"):
        try:
            value = json.loads(value)
        except json.JSONDecodeError:
            return str(value)
    if isinstance(value, Mapping):
        return ", ".join(f"{_words(name)} {_listed(inner)}" for name, inner in value.items())
    if isinstance(value, list | tuple):
        return ", ".join(_listed(inner) for inner in value)
    if isinstance(value, float):
        return plain(float(f"{value:.3g}"))
    return str(value)
