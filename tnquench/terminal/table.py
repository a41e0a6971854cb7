"""Numbers in aligned columns of plain text."""

from __future__ import annotations

from collections.abc import Sequence
from math import floor, log10

from tnquench.bethe.equilibrium import KEYS, Equilibrium

#: Units of the equilibrium quantities, J being the unit in which the coupling is given.
EQUILIBRIUM_UNITS = {
    "free_energy": "J",
    "energy": "J",
    "entropy": "1",
    "magnetisation": "1",
    "specific_heat": "1",
    "susceptibility": "1/J",
}

#: Most decimals shown: no double has more to tell.
MOST_DECIMALS = 16


def aligned(rows: Sequence[Sequence[str]]) -> str:
    """Return rows of cells as lines of text with all columns aligned to the left."""
    widths = [max(len(row[column]) for row in rows) for column in range(len(rows[0]))]
    lines = ("  ".join(cell.ljust(width) for cell, width in zip(row, widths, strict=True)) for row in rows)
    return "\n".join(line.rstrip() for line in lines)


def equilibrium_rows(state: Equilibrium, *, heading: str) -> list[tuple[str, ...]]:
    """Return the equilibrium quantities as rows of name, value, error and unit, under a row of headings."""
    numbers = state.as_dict()
    rows: list[tuple[str, ...]] = [(heading, " value", "error", "unit")]
    for key in KEYS:
        value, error = numbers[key], numbers[f"{key}_error"]
        digits = with_digits(value, error)
        rows.append((key.replace("_", " "), digits, f"{error:.1e}", EQUILIBRIUM_UNITS[key]))
    return rows


def with_digits(value: float, error: float) -> str:
    """Return a value with all digits that its error leaves and one more; a minus sign or a blank in front."""
    if not 0.0 < error < 1.0:
        return f"{value: .15g}"
    return f"{value: .{min(MOST_DECIMALS, 1 - floor(log10(error)))}f}"
