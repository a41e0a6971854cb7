"""Pictures of a judgement: where the candidate is wrong, how far against time, and profiles at some times."""

from __future__ import annotations

from functools import partial

import numpy as np
from matplotlib.axes import Axes
from matplotlib.cm import ScalarMappable
from matplotlib.colors import ListedColormap, Normalize, SymLogNorm
from matplotlib.figure import FigureBase

from tnquench.conventions import Reals
from tnquench.judge.deviations import rms
from tnquench.judge.judgement import Judgement, ObservableJudgement
from tnquench.judge.sentence import name_of
from tnquench.report.canvas import (
    DIVERGING,
    FAINT,
    INK,
    PREDICTION,
    QUANTUM,
    UNRESOLVED,
    Panel,
    Plate,
    axes_at,
)
from tnquench.report.cuts import BOTTOM, GAP, LEFT, LOWER, RIGHT, TOP, cut_times
from tnquench.report.maps import X_LABEL
from tnquench.report.scales import linear, logarithmic, span, symmetric_decades
from tnquench.report.units import Units
from tnquench.report.wording import MINUS, TIMES, labelled, plain, typeset

CUT_SIZE = (5.6, 4.2)
MAP_SIZE = (5.6, 3.5)
CANDIDATE = "#7a2a63"
LEVEL_STYLES = {"euler": "-", "diffusive": "--"}

#: A profile is drawn at a time only if the candidate has this many places there.
FEWEST_PLACES = 5
CUT_FRACTIONS = (0.35, 1.0)
#: Points that make up this part of a grid are drawn as its cells.
FILLED = 0.4
#: A line is broken where the next point is farther away than this many usual spacings.
GAP_FACTOR = 2.5
#: Curves against time have at most this many points; more times are put together.
MOST_BINS = 120
#: The logarithmic axis of norms spans at most this factor.
NORM_SPAN = 1e6


def plate(judgement: Judgement, observable: ObservableJudgement) -> Plate:
    """Return all pictures of one observable."""
    said, units = observable.said, judgement.units
    panels = [
        Panel(
            f"{observable.name}_map",
            f"Map over position and time: candidate minus chain, {said}",
            partial(_draw_map, observable, units),
            *MAP_SIZE,
        ),
        Panel(
            f"{observable.name}_norms",
            f"Root mean square deviation of candidate and predictions against time, {said}",
            partial(_draw_norms, observable, units),
            *MAP_SIZE,
        ),
    ]
    for number, time in enumerate(profile_times(observable), start=1):
        panels.append(
            Panel(
                f"{observable.name}_profile_{number}",
                f"Profile of the {said} at {units.instant(time)}: candidate, chain, difference and error",
                partial(_draw_profile, observable, units, time),
                *CUT_SIZE,
            )
        )
    return Plate(observable.name, said, "", tuple(panels), columns=2)


def note(judgement: Judgement) -> str:
    """Return how to read the pictures, the same for all observables."""
    threshold = plain(judgement.observables[0].resolve_at)
    if judgement.observables[0].faced.numerical is None:
        return (
            "The reference's numerical error was not estimated: no point is called wrong, and no band drawn."
        )
    return (
        f"Maps show candidate {MINUS} chain where it exceeds {threshold} times the error, grey elsewhere. "
        "Shaded: ± the error of the difference (the chain's numbers, interpolation, and what the candidate "
        f"claims itself); dotted: {threshold} times that."
    )


def profile_times(observable: ObservableJudgement) -> list[float]:
    """Return the candidate's times nearest to some fractions of its last one, where it has enough places."""
    times, counts = np.unique(observable.faced.points.times, return_counts=True)
    rich = times[counts >= FEWEST_PLACES]
    return [float(rich[index]) for index in cut_times(rich, CUT_FRACTIONS)] if rich.size else []


def _draw_map(observable: ObservableJudgement, units: Units, figure: FigureBase) -> None:
    points, deviation = observable.faced.points, observable.faced.deviation
    wrong = (
        observable.found.wrong if observable.faced.numerical is not None else np.ones_like(deviation, bool)
    )
    axes = axes_at(figure, MAP_SIZE, left=LEFT, right=1.0, bottom=0.5, top=0.34)
    axes.set_facecolor("white")
    scale = _scale(observable)
    image = _cells(axes, points.times, points.positions, np.where(wrong, deviation, np.nan), scale)
    axes.set(title=f"Candidate {MINUS} chain", xlabel=X_LABEL, ylabel=units.time_label)
    bar_axes = axes_at(figure, MAP_SIZE, left=MAP_SIZE[0] - 0.92, right=0.8, bottom=0.5, top=0.34)
    bar = figure.colorbar(image, cax=bar_axes)
    bar.outline.set_linewidth(0.5)
    largest = float(scale.vmax or 0.0)
    if isinstance(scale, SymLogNorm):
        symmetric_decades(bar_axes.yaxis, threshold=float(scale.linthresh), largest=largest, room=0.08)
        unit = typeset(observable.unit)
    else:
        unit = linear(bar_axes.yaxis, largest, observable.unit)
    bar_axes.set_title(unit, fontsize=9, loc="center", pad=5)
    bar_axes.tick_params(labelsize=8.5, direction="out", length=2.5)


def _scale(observable: ObservableJudgement) -> Normalize:
    """Return a symmetric scale, logarithmic where the deviation spans more than a decade above the error."""
    largest = observable.found.largest or 1e-16
    noise = observable.resolve_at * float(np.median(observable.faced.error))
    threshold = 10.0 ** np.floor(np.log10(np.clip(noise, largest / 300, largest)))
    if threshold > largest / 10:
        return Normalize(-largest, largest)
    return SymLogNorm(threshold, linscale=0.6, vmin=-largest, vmax=largest, base=10)


def _cells(axes: Axes, times: Reals, positions: Reals, values: Reals, scale: Normalize) -> ScalarMappable:
    """Draw values as coloured cells where the points make up most of a grid, else as squares; grey where a
    value is not a number."""
    rows, row = np.unique(times, return_inverse=True)
    columns, column = np.unique(positions, return_inverse=True)
    if min(rows.size, columns.size) > 1 and times.size >= FILLED * rows.size * columns.size:
        known, cells = np.full((2, rows.size, columns.size), np.nan)
        known[row, column], cells[row, column] = 0.0, values
        grey = ListedColormap([UNRESOLVED])
        axes.pcolormesh(columns, rows, known, cmap=grey, shading="nearest", rasterized=True)
        return axes.pcolormesh(
            columns, rows, cells, cmap=DIVERGING, norm=scale, shading="nearest", rasterized=True
        )
    size = float(np.clip(72.0 * MAP_SIZE[1] / np.sqrt(times.size + 1.0), 2.0, 10.0)) ** 2
    shown = np.isfinite(values)
    axes.scatter(positions[~shown], times[~shown], c=UNRESOLVED, marker="s", s=size, lw=0, rasterized=True)
    return axes.scatter(
        positions[shown], times[shown], c=values[shown], cmap=DIVERGING, norm=scale,
        marker="s", s=size, lw=0, rasterized=True,
    )  # fmt: skip


def _draw_norms(observable: ObservableJudgement, units: Units, figure: FigureBase) -> None:
    """Draw root mean squares against time: candidate, predictions, and the error."""
    axes = axes_at(figure, MAP_SIZE, left=LEFT, right=RIGHT, bottom=0.5, top=0.34)
    faced = observable.faced
    times = faced.points.times
    bins, where = _bins(times)
    curves = {"candidate": (faced.deviation, CANDIDATE, "-")}
    for level, theory in faced.levels.items():
        curves[name_of(level)] = (theory.values - faced.chain, PREDICTION, LEVEL_STYLES.get(level, ":"))
    if faced.numerical is not None:
        curves["error"] = (faced.error, QUANTUM, ":")
    drawn = []
    for label, (values, colour, style) in curves.items():
        heights = np.array([rms(values[(where == row) & np.isfinite(values)]) for row in range(bins.size)])
        drawn.append(heights[heights > 0])
        axes.plot(
            bins, np.where(heights > 0, heights, np.nan), style, color=colour, label=label,
            marker="." if bins.size < 40 else None, ms=4.0, zorder=3 if label == "candidate" else 2,
        )  # fmt: skip
    everything = np.concatenate(drawn)
    if everything.size:
        high = 2.0 * float(everything.max())
        logarithmic(axes, max(0.5 * float(everything.min()), high / NORM_SPAN), high)
    axes.set(xlabel=units.time_label, ylabel=labelled("root mean square", typeset(observable.unit)))
    _legend(axes)


def _bins(times: Reals) -> tuple[Reals, np.ndarray]:
    """Return the times of the curves and to which of them each point belongs."""
    distinct, where = np.unique(times, return_inverse=True)
    if distinct.size <= MOST_BINS:
        return distinct, where
    edges = np.linspace(times.min(), times.max(), MOST_BINS // 3 + 1)
    number = np.clip(np.searchsorted(edges, times, side="right") - 1, 0, edges.size - 2)
    return 0.5 * (edges[1:] + edges[:-1]), number


def _draw_profile(observable: ObservableJudgement, units: Units, time: float, figure: FigureBase) -> None:
    upper = axes_at(figure, CUT_SIZE, left=LEFT, right=RIGHT, bottom=BOTTOM + LOWER + GAP, top=TOP)
    lower = axes_at(figure, CUT_SIZE, left=LEFT, right=RIGHT, bottom=BOTTOM, top=CUT_SIZE[1] - BOTTOM - LOWER)
    faced = observable.faced
    chosen = np.flatnonzero(faced.points.times == time)
    chosen = chosen[np.argsort(faced.points.positions[chosen])]
    x, error = faced.points.positions[chosen], faced.error[chosen]
    values, chain = faced.points.values[chosen], faced.chain[chosen]
    dense = x.size > 150
    gaps = _gaps(x)
    x, error, values, chain = (np.insert(part, gaps, np.nan) for part in (x, error, values, chain))
    upper.plot(x, chain, "-" if dense else "o", ms=3.4, color=QUANTUM, label="chain", zorder=2)
    upper.plot(
        x, values, color=CANDIDATE, marker=None if dense else ".", ms=4.0, lw=1.0, label="candidate", zorder=3
    )
    for level, at in faced.levels.items():
        style = LEVEL_STYLES.get(level, ":")
        upper.plot(
            x,
            np.insert(at.values[chosen], gaps, np.nan),
            style,
            color=PREDICTION,
            lw=1.0,
            label=name_of(level),
            zorder=1,
        )
    low, high = span(np.concatenate([values, chain]), margin=0.06)
    upper.set_ylim(low, high)
    unit = linear(upper.yaxis, max(abs(low), abs(high)), observable.unit)
    upper.set_ylabel(typeset(labelled(observable.said, unit)))
    upper.set_title(typeset(units.instant(time)))
    upper.tick_params(labelbottom=False)
    _legend(upper)
    _difference(lower, observable, x, values - chain, error)
    for axes in (upper, lower):
        axes.set_xlim(float(x[0]) - 0.5, float(x[-1]) + 0.5)


def _gaps(x: Reals) -> np.ndarray:
    """Return before which points a line is broken: places were left out there."""
    steps = np.diff(x)
    return np.flatnonzero(steps > GAP_FACTOR * np.median(steps)) + 1


def _difference(
    axes: Axes, observable: ObservableJudgement, x: Reals, deviation: Reals, error: Reals
) -> None:
    axes.axhline(0.0, color=FAINT, lw=0.6, zorder=0)
    axes.plot(x, deviation, color=INK, marker="." if x.size <= 150 else None, ms=4.0, lw=0.8, zorder=3)
    largest = float(np.nanmax(np.abs(deviation)))
    if observable.faced.numerical is not None:
        threshold = observable.resolve_at * error
        axes.fill_between(x, -error, error, color=QUANTUM, alpha=0.25, lw=0, label="± error", zorder=1)
        label = f"± {plain(observable.resolve_at)} {TIMES} error"
        axes.plot(x, threshold, ":", color=QUANTUM, lw=1.1, label=label, zorder=2)
        axes.plot(x, -threshold, ":", color=QUANTUM, lw=1.1, zorder=2)
        largest = max(largest, 1.2 * float(np.nanmedian(threshold)))
    largest = 1.15 * largest or 1e-15
    axes.set_ylim(-largest, largest)
    unit = linear(axes.yaxis, largest, observable.unit, ticks=4)
    axes.set_ylabel(labelled("difference", unit))
    axes.set_xlabel(X_LABEL)


def _legend(axes: Axes) -> None:
    axes.legend(
        loc="lower right", bbox_to_anchor=(1.0, 1.0), ncols=4, fontsize=8.5, columnspacing=1.1,
        handlelength=1.7, handletextpad=0.5, borderaxespad=0.1,
    )  # fmt: skip
