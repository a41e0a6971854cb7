"""Seconds, bytes and settings as a person reads them."""

from __future__ import annotations

_SECOND, _MINUTE, _HOUR, _DAY = 1.0, 60.0, 3600.0, 86400.0

#: Pairs of units: a duration below `limit` is written in `whole` and `rest`, in seconds with their names.
_PAIRS = (
    (_HOUR, _MINUTE, "min", _SECOND, "s"),
    (_DAY, _HOUR, "h", _MINUTE, "min"),
    (float("inf"), _DAY, "d", _HOUR, "h"),
)

_BYTE_UNITS = ("B", "kB", "MB", "GB", "TB")
_THOUSAND = 1000.0


def duration(seconds: float) -> str:
    """Return a duration in two units at most: 42 ms, 0.42 s, 12 s, 3 min 20 s, 2 h 5 min, 3 d 4 h."""
    if seconds < 0.0995:
        return f"{1000.0 * seconds:.2g} ms"
    if seconds < _MINUTE - 0.5:
        return f"{seconds:.0f} s" if seconds >= 9.95 else f"{seconds:.2g} s"
    # rounded before it is compared, so that nothing lasts 60 min
    pair = next(pair for pair in _PAIRS if round(seconds / pair[3]) * pair[3] < pair[0])
    _, whole, whole_name, rest, rest_name = pair
    wholes, rests = divmod(round(seconds / rest), round(whole / rest))
    return f"{wholes} {whole_name} {rests} {rest_name}" if rests else f"{wholes} {whole_name}"


def size(count: float) -> str:
    """Return a number of bytes in the largest unit that keeps it above one: 350 kB, 2.1 GB."""
    for unit in _BYTE_UNITS:
        if count < 0.9995 * _THOUSAND or unit == _BYTE_UNITS[-1]:
            break
        count /= _THOUSAND
    return f"{count:.3g} {unit}" if unit != "B" else f"{count:.0f} B"


def plain(value: float) -> str:
    """Return a setting as short as it can be: 10, 0.5, 1e-8."""
    mantissa, _, exponent = f"{value:.4g}".partition("e")
    return f"{mantissa}e{int(exponent)}" if exponent else mantissa
