"""Curves against time: the error budget, growth of the state, conservation; and the mismatch at the start."""

from __future__ import annotations

from collections.abc import Callable
from functools import partial

import numpy as np
import xarray
from matplotlib.axes import Axes
from matplotlib.figure import FigureBase

from tnquench.conventions import Reals
from tnquench.dataset.variables import TOTALS
from tnquench.report.canvas import FAINT, INK, PREDICTION, QUANTUM, Panel, Plate, axes_at
from tnquench.report.comparison import NOTHING
from tnquench.report.models import ModelWords
from tnquench.report.scales import linear, logarithmic
from tnquench.report.units import Units
from tnquench.report.wording import capitalised, labelled, quantity, typeset

SMALL = (3.72, 2.9)
WIDE = (5.6, 3.0)


def growth_plate(quantum: xarray.Dataset, units: Units) -> Plate:
    """Return bond dimension, operator entanglement and discarded weight against time."""
    drawers: dict[str, Callable[[xarray.Dataset, Units, FigureBase], None]] = {
        "bond_dimension": _draw_bond_dimension,
        "operator_entanglement": _draw_entanglement,
        "discarded_weight": _draw_discarded,
    }
    panels = tuple(
        Panel(
            name, f"{capitalised(name.replace('_', ' '))} against time", partial(draw, quantum, units), *SMALL
        )
        for name, draw in drawers.items()
        if name in quantum
    )
    caption = (
        "Entanglement is the von Neumann entropy of the unit vector that represents the square root of the "
        "density "
        "matrix. Discarded weight is summed since the start."
    )
    return Plate("growth", "Cost of the state", caption, panels, columns=3)


def conservation_plate(quantum: xarray.Dataset, units: Units, words: ModelWords) -> Plate:
    """Return the drift of each conserved total."""
    panels = tuple(
        Panel(
            f"{name}_drift",
            f"Drift of the {words.name(name)} against time",
            partial(_draw_drift, quantum[name], words.name(name), units),
            *WIDE,
        )
        for name in TOTALS
        if name in quantum and float(np.max(np.abs(quantum[name].values))) > NOTHING
    )
    caption = (
        "The exact dynamics conserves the totals; their drift checks the numerics without any estimate. "
        "A total that is zero by symmetry is not drawn."
    )
    return Plate("conservation", "Conservation", caption, panels, columns=2)


def _draw_bond_dimension(quantum: xarray.Dataset, units: Units, figure: FigureBase) -> None:
    values = np.asarray(quantum["bond_dimension"].values, dtype=np.float64)
    axes = _against_time(figure, quantum, units, values, labelled("bond dimension", ""))
    middle = values[:, int(np.argmin(np.abs(quantum["bond"].values)))]
    logarithmic(axes, max(0.8, 0.7 * float(middle.min())), 1.5 * float(values.max()))
    axes.legend(loc="best")


def _draw_entanglement(quantum: xarray.Dataset, units: Units, figure: FigureBase) -> None:
    values = np.asarray(quantum["operator_entanglement"].values, dtype=np.float64)
    axes = _against_time(figure, quantum, units, values, labelled("operator entanglement", "nats"))
    axes.set_ylim(bottom=0.0)
    axes.legend(loc="best")


def _draw_discarded(quantum: xarray.Dataset, units: Units, figure: FigureBase) -> None:
    values = np.asarray(quantum["discarded_weight"].values, dtype=np.float64)
    axes = _against_time(figure, quantum, units, np.where(values > 0, values, np.nan), "discarded weight")
    total = values.sum(axis=1)
    axes.plot(
        quantum["time"].values, np.where(total > 0, total, np.nan), ":", color=INK, label="all bonds together"
    )
    largest = values.max(axis=1)
    if np.any(largest > 0):
        highest = float(total.max())
        logarithmic(axes, max(0.5 * float(largest[largest > 0].min()), 1e-6 * highest), 3 * highest)
    axes.legend(loc="best")


def _against_time(
    figure: FigureBase, quantum: xarray.Dataset, units: Units, values: Reals, label: str
) -> Axes:
    """Draw the middle bond and the largest bond of an array (time, bond)."""
    axes = axes_at(figure, SMALL, left=0.62, right=0.12, bottom=0.5, top=0.32)
    times = quantum["time"].values
    middle = int(np.argmin(np.abs(quantum["bond"].values)))
    largest = np.max(np.where(np.isnan(values), -np.inf, values), axis=1)
    axes.plot(times, np.where(np.isfinite(largest), largest, np.nan), color=PREDICTION, label="largest bond")
    axes.plot(times, values[:, middle], "--", color=QUANTUM, label="middle bond")
    axes.set(title=capitalised(label.partition(" (")[0]), xlabel=units.time_label, ylabel=label)
    axes.set_xlim(0.0, float(times[-1]) or 1.0)
    return axes


def _draw_drift(total: xarray.DataArray, said: str, units: Units, figure: FigureBase) -> None:
    axes = axes_at(figure, WIDE, left=0.85, right=0.12, bottom=0.5, top=0.32)
    values = np.asarray(total.values, dtype=np.float64)
    times = total["time"].values
    unit = units.symbol(str(total.attrs.get("units")))
    drift = values - values[0]
    size = max(float(np.max(np.abs(drift))), 1e-15)
    axes.axhline(0.0, color=FAINT, lw=0.6)
    axes.plot(times, drift, color=QUANTUM, marker=".", ms=4.0)
    axes.set_ylim(min(0.0, float(drift.min())) - 0.1 * size, max(0.0, float(drift.max())) + 0.1 * size)
    axes.set_ylabel(labelled("drift since t = 0", linear(axes.yaxis, size, unit)))
    start = quantity(float(values[0]), unit, digits=6)
    axes.set(title=typeset(f"{capitalised(said)}, {start} at t = 0"), xlabel=units.time_label)
    axes.set_xlim(0.0, float(times[-1]) or 1.0)
