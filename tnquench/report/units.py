"""How the units of a run are written: J or t_h where that is 1, none where the user has units of his own."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from tnquench.report.models import words_of
from tnquench.report.wording import labelled, plain, typeset

#: Powers of the unit of energy by the dataset's units.
POWERS: dict[str, str] = {"energy": "{}", "energy^2": "{}²", "1/energy": "1/{}"}


@dataclass(frozen=True)
class Units:
    """The units of one run. Where the coupling (or hopping) is 1, energies are multiples of it; else it is a
    number like others.

    scale : the coupling or the hopping; energy : its symbol
    """

    scale: float = 1.0
    energy: str = "J"

    @property
    def natural(self) -> bool:
        """Whether the coupling or hopping is the unit of energy."""
        return self.scale == 1.0

    @property
    def time_label(self) -> str:
        """Label of a time axis in a figure."""
        return typeset(labelled("time t", self.symbol("1/energy")))

    def symbol(self, unit: str) -> str:
        """Return how a unit of the dataset is written, nothing for pure numbers."""
        if unit == "nats":
            return unit
        return POWERS.get(unit, "").format(self.energy) if self.natural else ""

    def duration(self, time: float) -> str:
        """Return a span of time with its unit, such as 0.2/J."""
        return f"{plain(time)}/{self.energy}" if self.natural and time else plain(time)

    def instant(self, time: float) -> str:
        """Return a point in time with its unit, such as t = 10/J."""
        return f"t = {self.duration(time)}"


def units_of(settings: Mapping[str, Any]) -> Units:
    """Return the units of a run from its effective config as nested tables."""
    words = words_of(settings)
    return Units(float(settings.get("chain", {}).get(words.unit, 1.0)), words.symbol)
