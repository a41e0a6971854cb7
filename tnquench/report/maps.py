"""Light-cone maps: position across, time upwards."""

from __future__ import annotations

from functools import partial

import numpy as np
from matplotlib.axes import Axes
from matplotlib.colors import Colormap, Normalize, SymLogNorm
from matplotlib.figure import FigureBase
from matplotlib.ticker import MaxNLocator

from tnquench.budget.verdict import SHARP_REACH
from tnquench.conventions import Reals
from tnquench.report.canvas import DIVERGING, EDGE, HEAT, INK, UNRESOLVED, Panel, Plate, axes_at
from tnquench.report.comparison import Comparison
from tnquench.report.scales import linear, reach, span, symmetric_decades
from tnquench.report.wording import LEVEL_NAMES, MINUS, plain, typeset

SIZE = (3.72, 3.15)
X_LABEL = "position x (lattice spacings)"


def map_plate(field: Comparison) -> Plate:
    """Return the maps of the quantum side, the prediction and their difference, as far as they exist."""
    said = field.said
    theory = LEVEL_NAMES.get(field.level, field.level)
    sides = {"quantum": field.quantum, "prediction": field.prediction}
    shown = {side: values for side, values in sides.items() if values is not None}
    scale = span(np.concatenate([values[:, field.framed].ravel() for values in shown.values()]))
    titles = {"quantum": f"Quantum chain: {said}", "prediction": f"{theory}: {said}"}
    panels = [
        _panel(field, side, titles[side], partial(_draw_field, field, values, titles[side], scale))
        for side, values in shown.items()
    ]
    if field.deviation is not None:
        title = f"Deviation: quantum {MINUS} {theory}"
        panels.append(
            _panel(field, "deviation", title, partial(_draw_deviation, field, field.deviation, title))
        )
    return Plate(f"{field.name}_maps", said, "", tuple(panels), columns=3)


def map_note(field: Comparison) -> str:
    """Return how to read the maps of a run, the same for all its observables."""
    said = []
    if field.quantum is not None and field.prediction is not None:
        said.append("Chain and prediction share one colour scale.")
    if field.light_cone is not None and np.isfinite(field.reach):
        left, right = (plain(float(f"{velocity:.4g}")) for velocity in field.light_cone)
        unit = f" {field.units.symbol('energy')}".rstrip()
        said.append(f"Dashed: the light cone of the prediction, velocities {left}{unit} and {right}{unit}.")
    if field.resolved is not None:
        said.append(
            f"Grey: unresolved, |deviation| at most {plain(field.resolve_at)} times the numerical error."
        )
    return " ".join(said)


def _panel(field: Comparison, side: str, title: str, draw: partial[None]) -> Panel:
    description = f"Map over position and time. {title}, {field.said}"
    return Panel(f"{field.name}_map_{side}", description, draw, *SIZE)


def _draw_field(
    field: Comparison, values: Reals, title: str, scale: tuple[float, float], figure: FigureBase
) -> None:
    axes = _mesh(figure, field, values, title, HEAT, Normalize(*scale))
    _light_cone(axes, field, EDGE)


def _draw_deviation(field: Comparison, deviation: Reals, title: str, figure: FigureBase) -> None:
    shown = deviation if field.resolved is None else np.where(field.resolved, deviation, np.nan)
    axes = _mesh(figure, field, shown, title, DIVERGING, _deviation_scale(field, deviation))
    axes.set_facecolor(UNRESOLVED)
    _light_cone(axes, field, INK)


def _deviation_scale(field: Comparison, deviation: Reals) -> Normalize:
    """Return a symmetric scale; logarithmic where the deviation spans more than a decade above the noise."""
    largest = float(np.max(np.abs(deviation[field.judged]))) or 1e-16
    noise = 0.0 if field.numerical is None else field.resolve_at * float(np.median(field.numerical))
    threshold = 10.0 ** np.floor(np.log10(np.clip(noise, largest / 300, largest)))
    if threshold > largest / 10:
        return Normalize(-largest, largest)
    return SymLogNorm(threshold, linscale=0.6, vmin=-largest, vmax=largest, base=10)


def _mesh(
    figure: FigureBase, field: Comparison, values: Reals, title: str, colours: Colormap, scale: Normalize
) -> Axes:
    """Draw an array (time, place) as coloured cells with its colour bar, and return the axes."""
    axes = axes_at(figure, SIZE, left=0.55, right=0.78, bottom=0.5, top=0.32)
    image = axes.pcolormesh(
        field.positions, field.times, values, cmap=colours, norm=scale, shading="nearest", rasterized=True
    )
    axes.set(title=title, xlabel=X_LABEL, ylabel=field.units.time_label)
    axes.set_ylim(float(field.times[0]), float(field.times[-1]))
    axes.set_xlim(*reach(field.positions))
    axes.yaxis.set_major_locator(MaxNLocator(6))
    bar_axes = axes_at(figure, SIZE, left=SIZE[0] - 0.7, right=0.59, bottom=0.5, top=0.32)
    lowest, highest = float(scale.vmin or 0.0), float(scale.vmax or 0.0)
    below, above = bool(np.any(values < lowest)), bool(np.any(values > highest))
    beyond = {(False, False): "neither", (True, False): "min", (False, True): "max"}.get(
        (below, above), "both"
    )
    bar = figure.colorbar(image, cax=bar_axes, extend=beyond, extendfrac=0.03)
    bar.outline.set_linewidth(0.5)
    unit = typeset(field.unit)
    if isinstance(scale, SymLogNorm):
        symmetric_decades(bar_axes.yaxis, threshold=float(scale.linthresh), largest=highest, room=0.08)
    else:
        unit = linear(bar_axes.yaxis, max(abs(lowest), abs(highest)), field.unit)
    bar_axes.set_title(unit, fontsize=9, loc="center", pad=5)
    bar_axes.tick_params(labelsize=8.5, direction="out", length=2.5)
    return axes


def _light_cone(axes: Axes, field: Comparison, colour: str) -> None:
    """Draw the edges of the light cone from where the start varies, unless it varies everywhere."""
    if field.light_cone is None or not np.isfinite(field.reach):
        return
    last = float(field.times[-1])
    rim = field.reach - SHARP_REACH
    for velocity, start in zip(field.light_cone, (-rim, rim), strict=True):
        axes.plot([start, start + velocity * last], [0, last], "--", color=colour, lw=1.0)
