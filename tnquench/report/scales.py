"""Axes that carry their power of ten in the unit, and logarithmic axes with plain labels."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from matplotlib.axes import Axes
from matplotlib.axis import Axis
from matplotlib.ticker import FixedLocator, Formatter, FuncFormatter, LogLocator, MaxNLocator, NullLocator

from tnquench.conventions import Reals
from tnquench.report.wording import MINUS, number, plain, power_of_ten, typeset

#: A field that varies by less than this fraction of its size is drawn as flat as it is.
FLAT = 0.02


def span(values: Reals, *, margin: float = 0.0) -> tuple[float, float]:
    """Return limits around all values, `margin` of their range wider and FLAT of their size apart."""
    finite = values[np.isfinite(values)]
    low, high = (float(finite.min()), float(finite.max())) if finite.size else (0.0, 1.0)
    least = FLAT * max(abs(low), abs(high)) or 1.0
    widening = max(margin * (high - low), 0.5 * (least - (high - low)), 0.0)
    return low - widening, high + widening


def reach(positions: Reals) -> tuple[float, float]:
    """Return the limits of an axis over the whole chain, half a lattice spacing beyond its last places."""
    return float(positions[0]) - 0.5, float(positions[-1]) + 0.5


def linear(axis: Axis, size: float, unit: str, *, ticks: int = 6) -> str:
    """Give a linear axis at most `ticks` short labels, and return its unit with the power of ten taken out.

    size : largest absolute value on the axis, in `unit`
    """
    axis.set_major_locator(MaxNLocator(ticks))
    power = int(np.floor(np.log10(size))) if size > 0 else 0
    plainly = -2 <= power <= 3
    axis.set_major_formatter(_Decimals(1.0 if plainly else 10.0**power))
    return typeset(unit if plainly else f"{power_of_ten(power)} {unit}".rstrip())


class _Decimals(Formatter):
    """Labels in units of `factor`, all with as many decimals as the finest of them needs."""

    def __init__(self, factor: float) -> None:
        self.factor = factor

    def __call__(self, value: float, _: int | None = None) -> str:
        return self.format_ticks([value])[0]

    def format_ticks(self, values: Sequence[float]) -> list[str]:
        labels = np.asarray(values, dtype=np.float64) / self.factor
        finest = float(np.min(np.abs(np.diff(labels)), initial=1.0))
        close = (np.abs(labels - labels.round(places)) < 1e-4 * finest for places in range(12))
        decimals = next((places for places, near in enumerate(close) if np.all(near)), 3)
        return [f"{label:.{decimals}f}".replace("-", MINUS) for label in labels]


def logarithmic(axes: Axes, low: float, high: float) -> None:
    """Make the vertical axis logarithmic between two positive values, with labels that are never crowded."""
    axes.set_yscale("log")
    axes.set_ylim(low, high)
    decades = np.log10(high / low)
    subs = (1.0,) if decades > 2.5 else (1.0, 2.0, 5.0) if decades > 0.9 else (1.0, 1.5, 2.0, 3.0, 5.0, 7.0)
    axes.yaxis.set_major_locator(LogLocator(subs=subs, numticks=8))
    axes.yaxis.set_minor_locator(NullLocator())
    axes.yaxis.set_major_formatter(FuncFormatter(decade_label))


def symmetric_decades(axis: Axis, *, threshold: float, largest: float, room: float) -> None:
    """Label a symmetric logarithmic axis at zero and at powers of ten on each side, as many as have room.

    room : height of a label with its margin, as a fraction of the whole axis
    """
    powers = 10.0 ** np.arange(np.ceil(np.log10(threshold) - 1e-9), np.floor(np.log10(largest)) + 1)
    transform = axis.get_transform()
    whole = 2.0 * float(transform.transform(np.array([largest]))[0])
    kept: list[float] = []
    above = whole
    for power in powers[::-1]:
        height = float(transform.transform(np.array([power]))[0])
        if min(above - height, height) >= room * whole:
            kept.append(float(power))
            above = height
    axis.set_major_locator(FixedLocator([*(-power for power in kept), 0.0, *kept[::-1]]))
    axis.set_minor_locator(NullLocator())
    axis.set_major_formatter(FuncFormatter(decade_label))


def decade_label(value: float, _: int | None = None) -> str:
    """Return the label of a tick on a logarithmic axis: a power of ten, or a short number between two."""
    if value == 0:
        return "0"
    if 1 <= value < 1e4:
        return plain(value)
    power = float(np.log10(abs(value)))
    if abs(power - round(power)) > 1e-6:
        return typeset(number(value, digits=1))
    return typeset(f"{MINUS if value < 0 else ''}{power_of_ten(round(power))}")
