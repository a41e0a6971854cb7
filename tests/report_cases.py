"""Synthetic datasets for the tests of the report, and a reader of its pages."""

from __future__ import annotations

import re
from collections.abc import Callable
from html.parser import HTMLParser
from pathlib import Path
from typing import Any

import numpy as np

from tests.synthetic_run import NAMES, synthetic_pieces
from tnquench.dataset.reader import Run
from tnquench.dataset.writer import write_run
from tnquench.report.page import write_report

SITES, TIMES = 32, 21

Change = Callable[[dict[str, Any]], None]


class Page(HTMLParser):
    """What a reader meets: tags with their attributes, ids, and the text of each section."""

    def __init__(self, markup: str) -> None:
        super().__init__()
        self.tags: list[tuple[str, dict[str, str | None]]] = []
        self.sections: list[str] = []
        self.texts: dict[str, str] = {}
        self.feed(markup)

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append((tag, dict(attrs)))
        if tag in ("section", "header") and (name := dict(attrs).get("id")):
            self.sections.append(name)
            self.texts[name] = ""

    def handle_data(self, data: str) -> None:
        if self.sections:
            self.texts[self.sections[-1]] += data.replace("\N{NO-BREAK SPACE}", " ")

    @property
    def pictures(self) -> list[str]:
        return [attrs["src"] or "" for tag, attrs in self.tags if tag == "img"]


def written(folder: Path, *changes: Change, **choices: Any) -> Path:
    """Write a synthetic dataset after some changes to its pieces; choices as of `synthetic_pieces`."""
    pieces = synthetic_pieces(**{"sites": SITES, "times": TIMES, **choices})
    for change in changes:
        change(pieces)
    folder.mkdir(exist_ok=True)
    write_run(folder, **pieces)
    return folder


def page_of(folder: Path) -> Page:
    return Page(write_report(folder).read_text(encoding="utf-8"))


def mismatched_start(pieces: dict[str, Any]) -> None:
    extra = 0.01 * np.exp(-(pieces["coordinates"]["bond"] ** 2))
    pieces["groups"]["quantum"]["energy_density"][0] += extra
    pieces["groups"]["budget/energy_density"]["euler_deviation"][0] += extra


def no_magnetisation(pieces: dict[str, Any]) -> None:
    for name in ("charge_density", "charge_current"):
        for group in {"quantum", "hydrodynamics/euler"} & set(pieces["groups"]):
            pieces["groups"][group][name] = np.zeros_like(pieces["groups"][group][name])
    if "quantum" in pieces["groups"]:
        pieces["groups"]["quantum"]["total_charge"] = np.zeros(TIMES)


def nothing_resolved(pieces: dict[str, Any]) -> None:
    for name in NAMES:
        budget = pieces["groups"][f"budget/{name}"]
        budget["numerical"] = budget["numerical"] + 0.5 * np.abs(budget["euler_deviation"])
        budget["euler_resolved"] = np.zeros_like(budget["euler_resolved"])


def no_prediction(pieces: dict[str, Any]) -> None:
    del pieces["groups"]["hydrodynamics/euler"]
    del pieces["attributes"]["hydrodynamics/euler"]
    for name in NAMES:
        budget = pieces["groups"][f"budget/{name}"]
        pieces["groups"][f"budget/{name}"] = {
            key: rows for key, rows in budget.items() if not key.startswith("euler_")
        }


def prediction_alone(pieces: dict[str, Any]) -> None:
    pieces["groups"] = {"hydrodynamics/euler": pieces["groups"]["hydrodynamics/euler"]}
    pieces["attributes"] = {"hydrodynamics/euler": pieces["attributes"]["hydrodynamics/euler"]}


def window(run: Run, place: str) -> np.ndarray:
    """Points of the verdict, (time, place)."""
    theory = run.hydrodynamics["euler"]
    t, x = run.coordinates["time"].values[:, None], run.coordinates[place].values[None, :]
    edges = theory.attrs["light_cone_left"] * t - 1.5, theory.attrs["light_cone_right"] * t + 1.5
    interior = np.abs(x).max() - np.abs(x) >= 4.0
    return np.asarray((x >= edges[0]) & (x <= edges[1]) & (t > 0) & interior)


def numbers_in(text: str) -> list[float]:
    """Read back every number of a text, powers of ten included."""
    raised = str.maketrans("⁻⁰¹²³⁴⁵⁶⁷⁸⁹", "-0123456789")
    text = text.replace("\N{MINUS SIGN}", "-").replace("\N{NO-BREAK SPACE}", " ")
    found = re.finditer(r"-?\d+(?:\.\d+)?(?: × 10([⁻⁰¹²³⁴⁵⁶⁷⁸⁹]+))?", text)  # noqa: RUF001
    return [
        float(match[0].split(" ")[0]) * 10.0 ** int((match[1] or "⁰").translate(raised)) for match in found
    ]
