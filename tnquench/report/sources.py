"""The error budget against time, source by source, and the mismatch that the start brings along."""

from __future__ import annotations

import re
from functools import partial

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import FigureBase

from tnquench.budget.honesty import MEASURED, sentence
from tnquench.conventions import Reals
from tnquench.dataset.reader import Run
from tnquench.report.canvas import FAINT, INK, PREDICTION, QUANTUM, SOURCE_STYLES, Panel, Plate, axes_at
from tnquench.report.comparison import NOTHING_PREDICTED, Comparison, Verdicts, numerical_sources
from tnquench.report.maps import X_LABEL
from tnquench.report.scales import linear, logarithmic, reach, span
from tnquench.report.wording import (
    MINUS,
    SOURCE_NAMES,
    capitalised,
    labelled,
    number,
    plain,
    quantity,
    typeset,
)

WIDE = (5.6, 3.3)
START = (5.6, 2.9)
#: Sources that only a prediction has.
THEORY_SOURCES = ("prediction_grid", "strings")
#: The axis ends this far below the smaller of deviation and summed error; a source below it is negligible.
NEGLIGIBLE = 1e-4
#: A number in the notation of a computer, as the advice has it.
POWER = re.compile(r"\d\.\d+e[+-]\d+")


def advice_of(run: Run) -> str:
    """Return what the dataset says of dominant sources and of what would help; empty where it is silent."""
    advice = run.provenance.get("advice")
    sentences = advice.get("sentences", []) if isinstance(advice, dict) else []
    return POWER.sub(lambda found: number(float(found.group())), " ".join(map(str, sentences)))


def budget_note(fields: list[Comparison]) -> str:
    """Return how far claimed errors may be trusted; empty where no companion runs measured any."""
    if all(field.numerical is None for field in fields):
        return ""
    return f"Are these errors right? {sentence().removesuffix('.')} (measured by {MEASURED.command})."


def budget_plate(fields: list[Comparison], *, advice: str = "") -> Plate:
    """Return each source of error against time, one panel an observable, as norms inside the light cone.

    advice : sentences that end the caption
    """
    panels = tuple(
        Panel(
            f"{field.name}_budget",
            f"Error budget of the {field.said} against time, by source",
            partial(_draw_budget, field),
            *WIDE,
        )
        for field in fields
    )
    cone = any(field.light_cone is not None for field in fields)
    caption = f"Root mean square over the points {'inside the light cone' if cone else 'away from the ends'}"
    if any(field.errors for field in fields):
        caption += ", sources in the order of their size at the end"
    caption += (
        ". Dashed grey: the rigorous bound on what the cuts of the real-time evolution can do, which needs "
        "no estimate (start and step are not in it)"
    )
    if any(field.tighter is not None for field in fields):
        caption += "; dotted grey: the tighter one that counts only what the cuts in reach of a point can do"
    caption += "."
    if any(field.deviation is not None and field.errors for field in fields):
        caption += " Where the black line leaves the shaded sum, it is the theory that fails."
    if advice:
        caption += f" {advice}"
    return Plate("budget", "Error budget", caption, panels, columns=2)


def start_plate(fields: list[Comparison]) -> Plate:
    """Return the mismatch at t = 0 between the true start and the local-density start of the theory."""
    seen = [field for field in fields if _mismatched(field).any()]
    panels = [panel for field in seen for panel in _start_panels(field)]
    caption = (
        "At t = 0 the theory starts from local equilibrium at each place; the chain's true start differs "
        "where the profile varies within a correlation length. This is physics, not numerics: it is part of "
        f"the deviation and never of the numerical error. {_largest_mismatch(seen)}"
    )
    if any(field.numerical is not None for field in seen):
        caption += " Near the open ends the error of the chain's length covers the difference."
    return Plate("start", "Mismatch of the start itself", caption, tuple(panels), columns=2)


def _start_panels(field: Comparison) -> list[Panel]:
    said = field.said
    return [
        Panel(
            f"{field.name}_start",
            f"{capitalised(said)} of the chain and of local equilibrium at t = 0, against position",
            partial(_draw_start, field),
            *START,
        ),
        Panel(
            f"{field.name}_mismatch",
            f"Mismatch of the {said} at t = 0, against position",
            partial(_draw_mismatch, field),
            *START,
        ),
    ]


def start_mismatch(field: Comparison) -> Reals:
    """Return quantum minus prediction at the first time, (place,); zero where either is missing."""
    return np.zeros(field.positions.size) if field.deviation is None else field.deviation[0]


def _mismatched(field: Comparison) -> Verdicts:
    """Where the start differs from local equilibrium beyond the error, as the verdict counts it, (place,)."""
    error = np.zeros(field.positions.size) if field.numerical is None else field.numerical[0]
    threshold = np.maximum(field.resolve_at * error, NOTHING_PREDICTED)
    return np.asarray(field.stretch & (np.abs(start_mismatch(field)) > threshold))


def _largest_mismatch(fields: list[Comparison]) -> str:
    if not fields:
        return "Here no observable shows it."
    parts = []
    for field in fields:
        place = int(np.argmax(np.abs(start_mismatch(field)) * _mismatched(field)))
        size = quantity(abs(float(start_mismatch(field)[place])), field.unit)
        where = plain(float(field.positions[place]))
        parts.append(f"{size} in the {field.said} (x = {where})")
    return f"Largest: {', '.join(parts)}."


def _draw_budget(field: Comparison, figure: FigureBase) -> None:
    axes = axes_at(figure, WIDE, left=0.72, right=1.78, bottom=0.5, top=0.32)
    t = field.times
    norms = {
        source: field.norm(values)
        for source, values in numerical_sources(field.errors).items()
        if field.prediction is not None or source not in THEORY_SOURCES
    }
    bound = None if field.bound is None else field.norm(field.bound)
    tighter = None if field.tighter is None else field.norm(field.tighter)
    low, high = _range([field.deviation_norm, field.numerical_norm], [*norms.values(), bound, tighter])
    if field.deviation_norm is not None:
        axes.plot(t, _above(field.deviation_norm, low), color=INK, lw=2.0, label="deviation")
    if field.numerical_norm is not None:
        axes.fill_between(
            t, low, _above(field.numerical_norm, low), color=QUANTUM, alpha=0.13, lw=0, label="summed error"
        )
    for source, norm in sorted(norms.items(), key=lambda item: -float(item[1][-1])):
        _draw_source(axes, field, source, norm, low)
    if bound is not None:
        axes.plot(t, _above(bound, low), "--", color=FAINT, lw=1.3, label="truncation,\nrigorous bound")
    if tighter is not None:
        axes.plot(t, _above(tighter, low), ":", color=FAINT, lw=1.5, label="cuts in reach,\nrigorous bound")
    said = typeset(labelled("norm", field.unit))
    axes.set(title=capitalised(field.said), xlabel=field.units.time_label, ylabel=said)
    axes.set_xlim(0.0, float(t[-1]) or 1.0)
    logarithmic(axes, low, high)
    axes.legend(loc="center left", bbox_to_anchor=(1.02, 0.5), borderaxespad=0.0)


def _draw_source(axes: Axes, field: Comparison, source: str, norm: Reals, low: float) -> None:
    colour, dashes = SOURCE_STYLES.get(source, (FAINT, "-"))
    name = SOURCE_NAMES.get(source, source)
    if field.kinds.get(source) == "bound":
        name += " (bound)"
    if float(norm.max()) <= low:
        name += ": none" if not norm.any() else ": negligible"
    axes.plot(field.times, _above(norm, low), dashes, color=colour, label=name)


def _above(values: Reals, low: float) -> Reals:
    return np.where(values > low, values, np.nan)


def _range(main: list[Reals | None], others: list[Reals | None]) -> tuple[float, float]:
    """Return the limits of the axis: all of the main curves after the start, and what fits of the others."""

    def sizes(curves: list[Reals | None]) -> Reals:
        later = [curve[1:] if curve.size > 1 else curve for curve in curves if curve is not None]
        values = np.concatenate(later) if later else np.zeros(0)
        return values[values > 0]

    everything = np.concatenate([sizes(main), sizes(others)])
    if everything.size == 0:
        return 1e-16, 1.0
    floor = float(sizes(main).min()) if sizes(main).size else float(everything.min())
    return max(0.5 * float(everything.min()), NEGLIGIBLE * floor), 3.0 * float(everything.max())


def _draw_start(field: Comparison, figure: FigureBase) -> None:
    axes = axes_at(figure, START, left=0.78, right=0.12, bottom=0.5, top=0.34)
    for side, style, colour, label in (
        (field.quantum, "o", QUANTUM, "chain"),
        (field.prediction, "-", PREDICTION, "local equilibrium"),
    ):
        if side is not None:
            axes.plot(field.positions, side[0], style, ms=3.0, color=colour, label=label)
    sides = [side[0, field.framed] for side in (field.quantum, field.prediction) if side is not None]
    low, high = span(np.concatenate(sides), margin=0.06)
    axes.set_ylim(low, high)
    unit = linear(axes.yaxis, max(abs(low), abs(high)), field.unit)
    _finish(axes, field, field.axis_label(unit))


def _draw_mismatch(field: Comparison, figure: FigureBase) -> None:
    axes = axes_at(figure, START, left=0.78, right=0.12, bottom=0.5, top=0.34)
    x, mismatch = field.positions, start_mismatch(field)
    error = np.zeros_like(x) if field.numerical is None else field.numerical[0]
    axes.axhline(0.0, color=FAINT, lw=0.6)
    axes.plot(x, mismatch, color=INK, marker=".", ms=4.0, lw=0.8, label=f"chain {MINUS} local equilibrium")
    if field.numerical is not None:
        axes.fill_between(x, -error, error, color=QUANTUM, alpha=0.25, lw=0, label="± numerical error")
    seen = mismatch[_mismatched(field)]
    low, high = span(np.append(seen, 0.0), margin=0.1)
    axes.set_ylim(low, high)
    unit = linear(axes.yaxis, max(abs(low), abs(high)), field.unit)
    _finish(axes, field, labelled("mismatch", unit))


def _finish(axes: Axes, field: Comparison, label: str) -> None:
    axes.set(title=f"{capitalised(field.said)}, t = 0", xlabel=X_LABEL, ylabel=label)
    axes.set_xlim(*reach(field.positions[field.stretch]))
    axes.legend(loc="lower right", bbox_to_anchor=(1.0, 1.0), ncols=2, fontsize=8.5, borderaxespad=0.1)
