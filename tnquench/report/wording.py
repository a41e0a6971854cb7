"""How numbers and names are written in the report: plain text without markup, so all of it can be escaped."""

from __future__ import annotations

import math
import re

SUPERSCRIPTS = str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹")
MINUS = "\N{MINUS SIGN}"
TIMES = "\N{MULTIPLICATION SIGN}"
NO_BREAK = "\N{NO-BREAK SPACE}"
BREAKABLE = re.compile(r" (?=[×±≤=]|J\b|J²|tₕ)|(?<=[×±≤=]) ")  # noqa: RUF001
DASH = "\N{EN DASH}"

#: What the figures' font lacks, as formulas.
_FORMULA_RUN = re.compile("(?:tₕ|[⁻⁰¹²³⁴⁵⁶⁷⁸⁹]+)+")
_RAISED_RUN = re.compile("[⁻⁰¹²³⁴⁵⁶⁷⁸⁹]+")
_FROM_SUPERSCRIPTS = str.maketrans("⁻⁰¹²³⁴⁵⁶⁷⁸⁹", "-0123456789")

#: Name of each error source in running text.
SOURCE_NAMES: dict[str, str] = {
    "truncation": "truncation",
    "time_step": "time step",
    "preparation": "preparation",
    "length": "chain length",
    "arithmetic": "arithmetic",
    "prediction_grid": "prediction grid",
    "strings": "strings kept",
    "initial_gradient": "initial gradient",
}

LEVEL_NAMES: dict[str, str] = {"euler": "Euler GHD", "diffusive": "diffusive GHD"}


def number(value: float, *, digits: int = 2) -> str:
    """Return a number with `digits` significant digits, as 0.12, 35, or a mantissa times a power of ten.

    value  : the number, any unit
    digits : significant digits kept
    """
    if not math.isfinite(value):
        return "not a number" if math.isnan(value) else "infinite"
    if value == 0:
        return "0"
    mantissa, exponent = f"{abs(value):.{digits - 1}e}".split("e")
    power = int(exponent)
    sign = MINUS if value < 0 else ""
    if -2 <= power < 4:
        return f"{sign}{float(f'{mantissa}e{power}'):.{max(0, digits - 1 - power)}f}"
    return f"{sign}{mantissa} {TIMES} {power_of_ten(power)}"


def typeset(text: str) -> str:
    """Return a text for a figure with raised digits and the hopping as formulas: its font has few of them."""

    def formula(run: re.Match[str]) -> str:
        raised = _RAISED_RUN.sub(
            lambda part: f"^{{{part.group().translate(_FROM_SUPERSCRIPTS)}}}", run.group()
        )
        return f"${raised.replace('tₕ', 't_h')}$"

    return _FORMULA_RUN.sub(formula, text)


def plain(value: float) -> str:
    """Return a setting, time or position as short as it can be: 10, 0.5, 10⁻⁸."""
    mantissa, _, exponent = f"{value:.6g}".replace("-", MINUS).partition("e")
    if not exponent:
        return mantissa
    power = power_of_ten(int(exponent.replace(MINUS, "-")))
    return power if mantissa == "1" else f"{mantissa} {TIMES} {power}"


def power_of_ten(power: int) -> str:
    """Return an integer power of ten: 1, 10, and 10⁻³ or 10² for all others."""
    return ("1", "10")[power] if power in (0, 1) else f"10{str(power).translate(SUPERSCRIPTS)}"


def labelled(said: str, unit: str) -> str:
    """Return the label of an axis, with its unit in brackets where it has one."""
    return f"{said} ({unit})" if unit else said


def percent(share: float) -> str:
    """Return a share as a percentage that says 0% and 100% only where it is exactly so."""
    if 0 < share < 0.01:
        return "under 1%"
    return f"{min(round(100 * share), 99) if share < 1 else 100}%"


def unbroken(text: str) -> str:
    """Return a text whose formulas stay on one line: no break beside a sign or before a unit."""
    return BREAKABLE.sub(NO_BREAK, text)


def capitalised(said: str) -> str:
    """Return a text with its first letter raised, the others as they are."""
    return said[:1].upper() + said[1:]


def measured(value: float, error: float) -> str:
    """Return a value with its error to one figure, as 0.98 ± 0.02.

    value, error : same unit; error must be positive
    """
    decimals = max(0, -math.floor(math.log10(error))) if error > 0 else 2
    return f"{value:.{decimals}f} ± {error:.{decimals}f}".replace("-", MINUS)


def quantity(value: float, unit: str, *, digits: int = 2) -> str:
    """Return a number with its unit, and without a unit where it has none."""
    return f"{number(value, digits=digits)} {unit}".rstrip()


def duration(seconds: float) -> str:
    """Return a duration as 42 s, 3 min 20 s or 5 h 10 min."""
    if not math.isfinite(seconds):
        return "unknown"
    if seconds < 120:
        return f"{seconds:.0f} s" if seconds >= 10 else f"{seconds:.1f} s"
    minutes, rest = divmod(round(seconds), 60)
    if minutes < 120:
        return f"{minutes} min {rest} s"
    hours, minutes = divmod(minutes, 60)
    return f"{hours} h {minutes} min"
