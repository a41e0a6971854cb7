"""Numbers in aligned columns of plain text."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from math import floor, log10
from typing import Protocol

#: Units of the equilibrium quantities, `{}` being the unit in which the coupling is given; others have none.
EQUILIBRIUM_UNITS = {
    "free_energy": "{}",
    "energy": "{}",
    "susceptibility": "1/{}",
    "compressibility": "1/{}",
    "light_cone": "{}",
    "energy_variance": "{}^2",
    "energy_spin_covariance": "{}",
    "energy_particle_covariance": "{}",
    "energy_drude_weight": "{}^4",
    "energy_spin_drude_weight": "{}^3",
    "energy_particle_drude_weight": "{}^3",
    "spin_drude_weight": "{}^2",
    "particle_drude_weight": "{}^2",
    "spin_particle_drude_weight": "{}^2",
}

#: Most decimals shown: no double has more to tell.
MOST_DECIMALS = 16


def aligned(rows: Sequence[Sequence[str]]) -> str:
    """Return rows of cells as lines of text with all columns aligned to the left."""
    widths = [max(len(row[column]) for row in rows) for column in range(len(rows[0]))]
    lines = ("  ".join(cell.ljust(width) for cell, width in zip(row, widths, strict=True)) for row in rows)
    return "\n".join(line.rstrip() for line in lines)


class Tabled(Protocol):
    """Equilibrium quantities of one state, whatever its model: each `<key>` with its `<key>_error`."""

    def as_dict(self) -> Mapping[str, float]:
        """Return the quantities by name."""
        ...


def equilibrium_rows(state: Tabled, *, heading: str, unit: str = "J") -> list[tuple[str, ...]]:
    """Return the equilibrium quantities as rows of name, value, error and unit, under a row of headings.

    unit : symbol of the unit of energy
    """
    numbers = state.as_dict()
    rows: list[tuple[str, ...]] = [(heading, " value", "error", "unit")]
    for key in (key for key in numbers if f"{key}_error" in numbers):
        value, error = numbers[key], numbers[f"{key}_error"]
        in_units = EQUILIBRIUM_UNITS.get(key, "1").format(unit)
        rows.append((key.replace("_", " "), with_digits(value, error), f"{error:.1e}", in_units))
    return rows


def with_digits(value: float, error: float) -> str:
    """Return a value with all digits that its error leaves and one more; a minus sign or a blank in front."""
    if not 0.0 < error < 1.0:
        return f"{value: .15g}"
    decimals = min(MOST_DECIMALS, 1 - floor(log10(error)))
    return f"{round(value, decimals) + 0.0: .{decimals}f}"  # adding zero takes the sign from a zero
