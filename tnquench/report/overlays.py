"""Profiles of an observable without a prediction: several times in one picture, and the error at each."""

from __future__ import annotations

from functools import partial

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import FigureBase

from tnquench.budget.verdict import interior
from tnquench.report.canvas import HEAT, Panel, Plate, axes_at
from tnquench.report.comparison import Comparison
from tnquench.report.cuts import BOTTOM, GAP, LEFT, LOWER, RIGHT, SIZE, TOP, cut_times
from tnquench.report.maps import X_LABEL
from tnquench.report.scales import linear, logarithmic, reach, span
from tnquench.report.wording import capitalised, labelled, typeset

#: Part of the colour map from the first to the last time: its light end is too faint for a line.
FIRST_SHADE, LAST_SHADE = 0.72, 0.0
#: The error's axis spans at most this factor: what lies farther below the largest is left out.
ERROR_SPAN = 1e4


def overlay_plate(field: Comparison) -> Plate:
    """Return the profiles of one observable at up to five times in one panel."""
    panel = Panel(
        f"{field.name}_profiles",
        f"Profiles of the {field.said} at several times, and their numerical error",
        partial(_draw, field),
        *SIZE,
    )
    return Plate(f"{field.name}_cuts", field.said, "", (panel,), columns=2)


def overlay_note(field: Comparison) -> str:
    """Return how to read the profiles of a run, the same for all its observables."""
    said = "Above, the chain's values at several times, the start among them."
    if field.numerical is None:
        return f"{said} Without companion runs no numerical error is estimated."
    return f"{said} Below, their summed numerical error, on a logarithmic scale."


def _draw(field: Comparison, figure: FigureBase) -> None:
    below = field.numerical is not None
    bottom = BOTTOM + (LOWER + GAP if below else 0.0)
    upper = axes_at(figure, SIZE, left=LEFT, right=RIGHT, bottom=bottom, top=TOP + 0.22)
    indices = np.unique(np.concatenate([[0], cut_times(field.times)])).tolist()
    shades = HEAT(np.linspace(FIRST_SHADE, LAST_SHADE, len(indices)))
    for index, shade in zip(indices, shades, strict=True):
        label = typeset(field.units.instant(float(field.times[index])))
        upper.plot(field.positions, field.known[index], color=shade, marker="o", ms=2.4, lw=1.0, label=label)
    upper.set_xlim(*reach(field.positions))
    low, high = span(field.known[:, interior(field.positions)], margin=0.06)
    upper.set_ylim(low, high)
    unit = linear(upper.yaxis, max(abs(low), abs(high)), field.unit)
    upper.set_ylabel(field.axis_label(unit))
    upper.set_title(capitalised(field.said), pad=20)
    upper.legend(
        loc="lower left",
        bbox_to_anchor=(-0.01, 1.0),
        ncols=len(indices),
        fontsize=8.5,
        columnspacing=1.1,
        handlelength=1.4,
        handletextpad=0.5,
        borderaxespad=0.1,
    )
    if not below:
        upper.set_xlabel(X_LABEL)
        return
    upper.tick_params(labelbottom=False)
    lower = axes_at(figure, SIZE, left=LEFT, right=RIGHT, bottom=BOTTOM, top=SIZE[1] - BOTTOM - LOWER)
    _errors(lower, field, list(zip(indices, shades, strict=True)))


def _errors(axes: Axes, field: Comparison, shaded: list[tuple[int, object]]) -> None:
    """Draw the summed error of each time shown."""
    assert field.numerical is not None
    for index, shade in shaded:
        error = field.numerical[index]
        axes.plot(field.positions, np.where(error > 0, error, np.nan), color=shade, lw=1.2)
    shown = field.numerical[[index for index, _ in shaded]]
    highest = float(shown.max()) or 1e-16
    lowest = float(shown[shown > 0].min()) if np.any(shown > 0) else 0.1 * highest
    logarithmic(axes, max(0.5 * lowest, highest / ERROR_SPAN), 2.0 * highest)
    axes.set_xlim(*reach(field.positions))
    axes.set(xlabel=X_LABEL, ylabel=typeset(labelled("error", field.unit)))
