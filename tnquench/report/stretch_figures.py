"""Figures of the stretch study: deviation against stretch, and against time at each stretch."""

from __future__ import annotations

from functools import partial

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import FigureBase
from matplotlib.ticker import FixedLocator, FuncFormatter, NullLocator

from tnquench.conventions import STRETCH_NORMS
from tnquench.report.canvas import FAINT, HEAT, PREDICTION, QUANTUM, Panel, Plate, axes_at
from tnquench.report.scales import decade_label, logarithmic
from tnquench.report.stretch import NORM_NAMES, WHOLE, Stretched
from tnquench.report.wording import capitalised, labelled, plain, typeset

SIZE = (5.6, 3.5)
MARGINS = {"left": 0.78, "right": 0.14, "bottom": 0.5, "top": 0.34}
NORM_STYLES = {"rms": (QUANTUM, "o"), "maximum": (PREDICTION, "s")}
#: Shades of the smallest and the largest stretch.
FIRST_SHADE, LAST_SHADE = 0.72, 0.0
#: Room for the names of the guides right of the largest stretch, as a fraction of the logarithmic axis.
LABEL_ROOM = 0.22
#: The axis ends this far below the smallest deviation: smaller numerical errors are not worth its room.
BELOW_DEVIATION = 30.0


def stretch_plate(studies: list[Stretched]) -> Plate:
    """Return deviation against stretch, and against time at each stretch, of each observable."""
    panels = tuple(
        Panel(f"{study.name}_{name}", f"{said} of the {study.said}", partial(draw, study), *SIZE)
        for study in studies
        for name, said, draw in (
            ("stretch", "Deviation against stretch", _draw_powers),
            ("stretch_times", "Deviation against time at each stretch", _draw_times),
        )
    )
    caption = (
        "Left: over all times after the start; lines are the fits, grey guides fall like 1/stretch and "
        "1/stretch², bars are numerical errors, open markers are left out of the fit. Right: root mean "
        "square at each time, dotted its numerical error."
    )
    return Plate("stretch", "Stretch study", caption, panels, columns=2)


def _draw_powers(study: Stretched, figure: FigureBase) -> None:
    axes = axes_at(figure, SIZE, **MARGINS)
    window = study.windows.index(WHOLE)
    for norm, name in enumerate(STRETCH_NORMS):
        _draw_power(axes, study, norm, window, name)
    values = study.window_deviation[:, :, window]
    shown = values[values > 0]
    low, high = (float(shown.min()), float(shown.max())) if shown.size else (0.1, 1.0)
    rms = STRETCH_NORMS.index("rms")
    for order, label in ((1, "1/stretch"), (2, "1/stretch²")):
        guide = values[rms, 0] * (study.factors / study.factors[0]) ** -order
        axes.plot(study.factors, guide, color=FAINT, lw=0.7, ls=(0, (4, 3)), zorder=0)
        axes.annotate(
            typeset(label), (study.factors[-1], guide[-1]), xytext=(7, 0), textcoords="offset points",
            ha="left", va="center", color=FAINT, fontsize=8.5,
        )  # fmt: skip
        low = min(low, float(guide[-1]))
    axes.set_xscale("log")
    first, last = float(study.factors[0]), float(study.factors[-1])
    axes.set_xlim(first * (first / last) ** 0.08, last * (last / first) ** LABEL_ROOM)
    axes.xaxis.set_major_locator(FixedLocator(study.factors.tolist()))
    axes.xaxis.set_minor_locator(NullLocator())
    axes.xaxis.set_major_formatter(FuncFormatter(decade_label))
    logarithmic(axes, 0.5 * low, 3.0 * high)
    axes.set(title=capitalised(study.said), xlabel="stretch")
    axes.set_ylabel(typeset(labelled("deviation", study.unit)))
    axes.legend(loc="upper right")


def _draw_power(axes: Axes, study: Stretched, norm: int, window: int, name: str) -> None:
    """Draw one norm against stretch with its errors and its fit."""
    colour, marker = NORM_STYLES[name]
    values, errors = study.window_deviation[norm, :, window], study.window_numerical[norm, :, window]
    used = study.used[norm, :, window] == 1
    label = NORM_NAMES[name]
    if study.finding[norm][window] != "unresolved":
        label = f"{label}, p = {study.power(norm, window)}"
        power, logs = float(study.exponent[norm, window]), np.log(study.factors[used])
        height = float(np.mean(np.log(values[used]) + power * logs))
        axes.plot(study.factors, np.exp(height) * study.factors**-power, color=colour, lw=1.2)
    bars = np.array([np.minimum(errors, 0.9 * values), errors])
    axes.errorbar(study.factors, values, yerr=bars, fmt="none", ecolor=colour, elinewidth=1.0, capsize=3.0)
    left_out = ~used
    for chosen, filled in ((used, colour), (left_out, "white")):
        text = label if chosen is used else None
        axes.plot(study.factors[chosen], values[chosen], marker, ms=5.0, label=text, mfc=filled, color=colour)


def _draw_times(study: Stretched, figure: FigureBase) -> None:
    axes = axes_at(figure, SIZE, **MARGINS)
    norm = STRETCH_NORMS.index("rms")
    shades = HEAT(np.linspace(FIRST_SHADE, LAST_SHADE, len(study.factors)))
    later = study.times > 0  # at the start the currents vanish
    values, errors = study.deviation[norm][:, later], study.numerical[norm][:, later]
    for factor, value, error, shade in zip(study.factors, values, errors, shades, strict=True):
        positive = np.where(value > 0, value, np.nan)
        label = f"stretch {plain(float(factor))}"
        axes.plot(study.times[later], positive, color=shade, marker=".", label=label)
        axes.plot(study.times[later], np.where(error > 0, error, np.nan), ":", color=shade, lw=1.0)
    shown = values[values > 0]
    low, high = (float(shown.min()), float(shown.max())) if shown.size else (0.1, 1.0)
    lowest = float(errors[errors > 0].min()) if np.any(errors > 0) else low
    decades = np.log10(high / max(0.5 * min(low, lowest), low / BELOW_DEVIATION))
    logarithmic(axes, high * 10.0**-decades, high * 10.0 ** (0.3 * decades + 0.1))
    axes.set_xlim(0.0, float(study.times[-1]) or 1.0)
    unit = study.units.symbol("1/energy")
    axes.set(title=capitalised(study.said), xlabel=typeset(labelled("t/stretch", unit)))
    axes.set_ylabel(typeset(labelled("rms deviation", study.unit)))
    axes.legend(loc="upper right", ncols=min(len(study.factors), 3))
