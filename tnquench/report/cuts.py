"""Profile cuts at a few times: values above, deviation and numerical error below."""

from __future__ import annotations

from functools import partial

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import FigureBase

from tnquench.conventions import Integers, Reals
from tnquench.report.canvas import FAINT, INK, PREDICTION, QUANTUM, Panel, Plate, axes_at
from tnquench.report.comparison import Comparison
from tnquench.report.maps import X_LABEL
from tnquench.report.scales import linear, reach, span, symmetric_decades
from tnquench.report.wording import LEVEL_NAMES, TIMES, labelled, plain, typeset

SIZE = (5.6, 4.2)
LEFT, RIGHT, BOTTOM, TOP = 0.78, 0.12, 0.5, 0.34
LOWER, GAP = 1.3, 0.16  # height of the lower axes, and the space above it
#: Cuts are taken nearest to these fractions of the last time; of what is not in the foreground at fewer.
FRACTIONS = (0.1, 0.35, 0.65, 1.0)
FEW_FRACTIONS = (0.35, 1.0)


def cut_times(times: Reals, fractions: tuple[float, ...] = FRACTIONS) -> Integers:
    """Return the indices of the measured times after the start nearest to these fractions of the last one."""
    later = np.flatnonzero(times > 0)
    if later.size == 0:
        return np.arange(times.size, dtype=np.int64)
    nearest = [int(later[np.argmin(np.abs(times[later] - part * times[-1]))]) for part in fractions]
    return np.unique(np.asarray(nearest, dtype=np.int64))


def cut_plate(field: Comparison, fractions: tuple[float, ...] = FRACTIONS) -> Plate:
    """Return the profile cuts of one observable at these fractions of the last time."""
    said = field.said
    instants = [field.units.instant(float(time)) for time in field.times]
    panels = tuple(
        Panel(
            f"{field.name}_cut_{number}",
            f"Profile of the {said} at {instants[index]}, its deviation and error",
            partial(_draw_cut, field, int(index)),
            *SIZE,
        )
        for number, index in enumerate(cut_times(field.times, fractions), start=1)
    )
    return Plate(f"{field.name}_cuts", said, "", panels, columns=2)


def cut_note(field: Comparison) -> str:
    """Return how to read the cuts of a run, the same for all its observables."""
    if field.numerical is None:
        return "No numerical error is drawn: without companion runs it is not estimated."
    said = "Shaded: ± the summed numerical error, around the chain's values above and around zero below."
    if field.deviation is None:
        return said
    return (
        f"{said} Dotted: {plain(field.resolve_at)} times that error; a deviation beyond it is resolved. "
        "The lower scale is logarithmic outside the dotted lines where the deviation dwarfs the error."
    )


def _draw_cut(field: Comparison, index: int, figure: FigureBase) -> None:
    below = field.deviation is not None or field.numerical is not None
    bottom = BOTTOM + (LOWER + GAP if below else 0.0)
    upper = axes_at(figure, SIZE, left=LEFT, right=RIGHT, bottom=bottom, top=TOP)
    _values(upper, field, index)
    upper.set_title(typeset(field.units.instant(float(field.times[index]))))
    handles, names = upper.get_legend_handles_labels()
    if below:
        upper.tick_params(labelbottom=False)
        lower = axes_at(figure, SIZE, left=LEFT, right=RIGHT, bottom=BOTTOM, top=SIZE[1] - BOTTOM - LOWER)
        _difference(lower, field, index)
        lower.set_xlabel(X_LABEL)
        more, more_names = lower.get_legend_handles_labels()
        handles, names = handles + more, names + more_names
    else:
        upper.set_xlabel(X_LABEL)
    upper.legend(
        handles,
        names,
        loc="lower right",
        bbox_to_anchor=(1.0, 1.0),
        ncols=len(names),
        fontsize=8.5,
        columnspacing=1.1,
        handlelength=1.7,
        handletextpad=0.5,
        borderaxespad=0.1,
    )


def _values(axes: Axes, field: Comparison, index: int) -> None:
    """Draw the chain's values with their band, and the prediction as a line."""
    x = field.positions
    if field.quantum is not None:
        values = field.quantum[index]
        axes.plot(x, values, "o", ms=3.0, color=QUANTUM, label="chain", zorder=3)
        if field.numerical is not None:
            error = field.numerical[index]
            axes.fill_between(x, values - error, values + error, color=QUANTUM, alpha=0.25, lw=0, zorder=1)
    if field.prediction is not None:
        theory = LEVEL_NAMES.get(field.level, field.level)
        axes.plot(x, field.prediction[index], color=PREDICTION, label=theory, zorder=2)
    axes.set_xlim(*reach(x[field.stretch]))
    drawn = [each[:, field.framed] for each in (field.quantum, field.prediction) if each is not None]
    low, high = span(np.concatenate(drawn), margin=0.06)
    axes.set_ylim(low, high)
    unit = linear(axes.yaxis, max(abs(low), abs(high)), field.unit)
    axes.set_ylabel(field.axis_label(unit))


def _difference(axes: Axes, field: Comparison, index: int) -> None:
    """Draw the deviation over the band of the numerical error and the threshold of the verdict."""
    x = field.positions
    axes.axhline(0.0, color=FAINT, lw=0.6, zorder=0)
    if field.deviation is not None:
        axes.plot(
            x, field.deviation[index], color=INK, marker=".", ms=4.0, lw=0.8, label="deviation", zorder=3
        )
    if field.numerical is not None:
        error = field.numerical[index]
        axes.fill_between(x, -error, error, color=QUANTUM, alpha=0.25, lw=0, label="± error", zorder=1)
        if field.deviation is not None:
            threshold = field.resolve_at * error
            axes.plot(
                x,
                threshold,
                ":",
                color=QUANTUM,
                lw=1.1,
                label=f"± {plain(field.resolve_at)} {TIMES} error",
                zorder=2,
            )
            axes.plot(x, -threshold, ":", color=QUANTUM, lw=1.1, zorder=2)
    axes.set_xlim(*reach(x[field.stretch]))
    unit = _stretch(axes, field, index)
    axes.set_ylabel(labelled("deviation" if field.deviation is not None else "error", unit))


def _stretch(axes: Axes, field: Comparison, index: int) -> str:
    """Make the scale symmetric, logarithmic where the deviation dwarfs the error; return the printed unit."""
    shown = field.stretch & field.window[index]
    error = 0.0 if field.numerical is None else float(np.max(field.numerical[index, shown]))
    threshold = error * (field.resolve_at if field.deviation is not None else 1.0)
    deviation = 0.0 if field.deviation is None else float(np.max(np.abs(field.deviation[index, shown])))
    largest = max(deviation, threshold, 1e-15)
    if 0 < threshold < largest / 5:
        axes.set_yscale("symlog", linthresh=threshold, linscale=0.8)
        axes.set_ylim(-2.0 * largest, 2.0 * largest)
        symmetric_decades(axes.yaxis, threshold=threshold, largest=2.0 * largest, room=0.14)
        return typeset(field.unit)
    axes.set_ylim(-1.25 * largest, 1.25 * largest)
    return linear(axes.yaxis, largest, field.unit, ticks=5)
