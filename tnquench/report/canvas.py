"""Look and bookkeeping of the figures: one style, panels of fixed size, plates of panels with one caption."""

from __future__ import annotations

import io
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import matplotlib as mpl
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.colors import LinearSegmentedColormap
from matplotlib.figure import Figure, FigureBase

INK = "#22262b"
FAINT = "#8b9097"
QUANTUM = "#0b4f7d"
PREDICTION = "#cf5c1a"
EDGE = "#f2542d"
UNRESOLVED = "#d3d5d6"

#: Colour and line style of each error source; both differ, so that no reader depends on colour alone.
SOURCE_STYLES: dict[str, tuple[str, str]] = {
    "truncation": ("#0072b2", "-"),
    "time_step": ("#d98200", "-"),
    "preparation": ("#009e73", "--"),
    "length": ("#b8578f", "-."),
    "arithmetic": ("#8b9097", ":"),
    "prediction_grid": ("#56a5d8", "--"),
    "strings": ("#8c6d31", ":"),
    "initial_gradient": ("#5d4a86", "-."),
}

#: Both maps keep their order in lightness alone: readable in greyscale and with any colour vision.
HEAT = LinearSegmentedColormap.from_list(
    "heat", ["#14213d", "#1f4a6f", "#3f7f93", "#86b3a0", "#d9d6a3", "#f6edcf"]
)
DIVERGING = LinearSegmentedColormap.from_list(
    "diverging", ["#0a3356", "#2a6f9e", "#8fb9d1", "#fbfaf7", "#eaa981", "#c2571f", "#6d2508"]
)

STYLE: dict[Any, Any] = {
    "font.family": "STIXGeneral",
    "mathtext.fontset": "stix",
    "font.size": 10.0,
    "axes.labelsize": 10.0,
    "axes.titlesize": 10.5,
    "axes.titlelocation": "left",
    "axes.edgecolor": INK,
    "axes.labelcolor": INK,
    "axes.linewidth": 0.6,
    "axes.unicode_minus": True,
    "text.color": INK,
    "xtick.labelsize": 9.0,
    "ytick.labelsize": 9.0,
    "xtick.color": INK,
    "ytick.color": INK,
    "xtick.direction": "in",
    "ytick.direction": "in",
    "xtick.major.width": 0.6,
    "ytick.major.width": 0.6,
    "legend.fontsize": 9.0,
    "legend.frameon": False,
    "legend.handlelength": 2.2,
    "lines.linewidth": 1.4,
    "hatch.linewidth": 0.4,
    "hatch.color": FAINT,
    "svg.fonttype": "path",
    "svg.hashsalt": "tnquench",
    "pdf.fonttype": 42,
    "savefig.dpi": 192.0,
}


@dataclass(frozen=True)
class Panel:
    """One picture: file name, size in inches, description for readers without sight, and how to draw it."""

    name: str
    description: str
    draw: Callable[[FigureBase], None]
    width: float
    height: float


@dataclass(frozen=True)
class Plate:
    """Panels that belong together under one caption, laid out in at most `columns` columns."""

    name: str
    heading: str
    caption: str
    panels: tuple[Panel, ...]
    columns: int

    def figure(self) -> Figure:
        """Return all panels as one matplotlib figure without global state, for a notebook or a talk."""
        columns = min(self.columns, len(self.panels))
        rows = -(-len(self.panels) // columns)
        first = self.panels[0]
        with mpl.rc_context(STYLE):
            figure = Figure(figsize=(columns * first.width, rows * first.height))
            FigureCanvasAgg(figure)
            cells = figure.subfigures(rows, columns, squeeze=False).ravel()
            for cell, panel in zip(cells, self.panels, strict=False):
                panel.draw(cell)
        return figure


def axes_at(
    figure: FigureBase,
    panel_size: tuple[float, float],
    *,
    left: float,
    right: float,
    bottom: float,
    top: float,
) -> Axes:
    """Return axes with fixed margins, so that panels of a plate line up.

    figure     : the panel, a whole figure or a part of one
    panel_size : width and height of the panel in inches
    left, right, bottom, top : margins in inches
    """
    width, height = panel_size
    box = (left / width, bottom / height, (width - left - right) / width, (height - bottom - top) / height)
    axes = figure.add_axes(box)
    axes.tick_params(which="both", top=False, right=False)
    return axes


def render(panel: Panel, folder: Path) -> bytes:
    """Draw a panel, store it as FOLDER/NAME.svg and NAME.png (192 dots an inch), and return the SVG."""
    with mpl.rc_context(STYLE):
        figure = Figure(figsize=(panel.width, panel.height), facecolor="none")
        FigureCanvasAgg(figure)
        panel.draw(figure)
        picture = io.BytesIO()
        figure.savefig(picture, format="svg", metadata={"Date": None})
        figure.savefig(folder / f"{panel.name}.png", facecolor="white")
    (folder / f"{panel.name}.svg").write_bytes(picture.getvalue())
    return picture.getvalue()
