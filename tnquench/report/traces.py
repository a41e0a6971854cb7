"""Curves against time: the error budget, growth of the state, conservation; and the mismatch at the start."""

from __future__ import annotations

from collections.abc import Callable
from functools import partial

import numpy as np
import xarray
from matplotlib.axes import Axes
from matplotlib.figure import FigureBase

from tnquench.conventions import Reals
from tnquench.report.canvas import FAINT, INK, PREDICTION, QUANTUM, Panel, Plate, axes_at
from tnquench.report.maps import T_LABEL
from tnquench.report.scales import linear, logarithmic, typeset
from tnquench.report.wording import capitalised, labelled, quantity

SMALL = (3.72, 2.9)
WIDE = (5.6, 3.0)


def growth_plate(quantum: xarray.Dataset) -> Plate:
    """Return bond dimension, operator entanglement and discarded weight against time."""
    drawers: dict[str, Callable[[xarray.Dataset, FigureBase], None]] = {
        "bond_dimension": _draw_bond_dimension,
        "operator_entanglement": _draw_entanglement,
        "discarded_weight": _draw_discarded,
    }
    panels = tuple(
        Panel(name, f"{capitalised(name.replace('_', ' '))} against time", partial(draw, quantum), *SMALL)
        for name, draw in drawers.items()
        if name in quantum
    )
    caption = (
        "Entanglement is the von Neumann entropy of the unit vector that represents the square root of the "
        "density "
        "matrix. Discarded weight is summed since the start."
    )
    return Plate("growth", "Cost of the state", caption, panels, columns=3)


def conservation_plate(quantum: xarray.Dataset) -> Plate:
    """Return the drift of total energy and total charge."""
    said = {"total_energy": ("total energy", "J"), "total_charge": ("total magnetisation", "")}
    panels = tuple(
        Panel(
            f"{name}_drift",
            f"Drift of the {words} against time",
            partial(_draw_drift, quantum, name, words, unit),
            *WIDE,
        )
        for name, (words, unit) in said.items()
        if name in quantum
    )
    caption = (
        "The exact dynamics conserves both. Their drift is a check of the numerics that needs no estimate."
    )
    return Plate("conservation", "Conservation", caption, panels, columns=2)


def _draw_bond_dimension(quantum: xarray.Dataset, figure: FigureBase) -> None:
    values = np.asarray(quantum["bond_dimension"].values, dtype=np.float64)
    axes = _against_time(figure, quantum, values, labelled("bond dimension", ""))
    logarithmic(axes, max(0.8, 0.8 * float(values.min())), 1.5 * float(values.max()))
    axes.legend(loc="best")


def _draw_entanglement(quantum: xarray.Dataset, figure: FigureBase) -> None:
    values = np.asarray(quantum["operator_entanglement"].values, dtype=np.float64)
    axes = _against_time(figure, quantum, values, labelled("operator entanglement", "nats"))
    axes.set_ylim(bottom=0.0)
    axes.legend(loc="best")


def _draw_discarded(quantum: xarray.Dataset, figure: FigureBase) -> None:
    values = np.asarray(quantum["discarded_weight"].values, dtype=np.float64)
    axes = _against_time(figure, quantum, np.where(values > 0, values, np.nan), "discarded weight")
    total = values.sum(axis=1)
    axes.plot(
        quantum["time"].values, np.where(total > 0, total, np.nan), ":", color=INK, label="all bonds together"
    )
    positive = values[values > 0]
    if positive.size:
        highest = float(total.max())
        logarithmic(
            axes,
            max(0.5 * float(values.max(axis=1)[values.max(axis=1) > 0].min()), 1e-6 * highest),
            3 * highest,
        )
    axes.legend(loc="best")


def _against_time(figure: FigureBase, quantum: xarray.Dataset, values: Reals, label: str) -> Axes:
    """Draw the middle bond and the largest bond of an array (time, bond)."""
    axes = axes_at(figure, SMALL, left=0.62, right=0.12, bottom=0.5, top=0.32)
    times = quantum["time"].values
    middle = int(np.argmin(np.abs(quantum["bond"].values)))
    largest = np.max(np.where(np.isnan(values), -np.inf, values), axis=1)
    axes.plot(times, np.where(np.isfinite(largest), largest, np.nan), color=PREDICTION, label="largest bond")
    axes.plot(times, values[:, middle], "--", color=QUANTUM, label="middle bond")
    axes.set(title=capitalised(label.partition(" (")[0]), xlabel=T_LABEL, ylabel=label)
    axes.set_xlim(0.0, float(times[-1]) or 1.0)
    return axes


def _draw_drift(quantum: xarray.Dataset, name: str, said: str, unit: str, figure: FigureBase) -> None:
    axes = axes_at(figure, WIDE, left=0.85, right=0.12, bottom=0.5, top=0.32)
    values = np.asarray(quantum[name].values, dtype=np.float64)
    drift = values - values[0]
    size = max(float(np.max(np.abs(drift))), 1e-15)
    axes.axhline(0.0, color=FAINT, lw=0.6)
    axes.plot(quantum["time"].values, drift, color=QUANTUM, marker=".", ms=4.0)
    axes.set_ylim(min(0.0, float(drift.min())) - 0.1 * size, max(0.0, float(drift.max())) + 0.1 * size)
    axes.set_ylabel(labelled("drift since t = 0", linear(axes.yaxis, size, unit)))
    start = quantity(float(values[0]), unit, digits=6)
    axes.set(title=typeset(f"{capitalised(said)}, {start} at t = 0"), xlabel=T_LABEL)
    axes.set_xlim(0.0, float(quantum["time"].values[-1]) or 1.0)
