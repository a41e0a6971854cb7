"""How the units of a run are written: J where the coupling is 1, none where the user has units of his own."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from tnquench.report.wording import labelled, plain

#: Units of the dataset as a physicist writes them where J = 1.
SYMBOLS: dict[str, str] = {"energy": "J", "energy^2": "J²", "1/energy": "1/J", "nats": "nats"}


@dataclass(frozen=True)
class Units:
    """The units of one run. Where J = 1, energies are multiples of J; else J is a number like others."""

    coupling: float = 1.0

    @property
    def natural(self) -> bool:
        """Whether the coupling is the unit of energy."""
        return self.coupling == 1.0

    @property
    def time_label(self) -> str:
        """Label of a time axis."""
        return labelled("time t", self.symbol("1/energy"))

    def symbol(self, unit: str) -> str:
        """Return how a unit of the dataset is written, nothing for pure numbers."""
        return SYMBOLS.get(unit, "") if self.natural or unit == "nats" else ""

    def duration(self, time: float) -> str:
        """Return a span of time with its unit, such as 0.2/J."""
        return f"{plain(time)}/J" if self.natural else plain(time)

    def instant(self, time: float) -> str:
        """Return a point in time with its unit, such as t = 10/J."""
        return f"t = {self.duration(time)}"


def units_of(settings: Mapping[str, Any]) -> Units:
    """Return the units of a run from its effective config as nested tables."""
    coupling = settings.get("chain", {}).get("coupling", 1.0)
    return Units(float(coupling))
