"""How values are written: in full as TOML, and shortened inside a message."""

from __future__ import annotations

import json
import re
from collections.abc import Mapping
from datetime import date, time
from typing import Any

_BARE_KEY = re.compile(r"[A-Za-z0-9_-]+")
_ENTRY = re.compile(r"(.+)\[(\d+)\]")
_LONGEST_SHOWN = 60
_MOST_SHOWN = 4
_MILLION = 1e6
_LARGEST_SHOWN = 10**18


def written(value: object) -> str:
    """Return `value` in TOML notation: text, truth value, number, date, list or inline table."""
    if isinstance(value, str):
        return written_text(value)
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, float):
        return _unpadded(repr(value))
    if isinstance(value, (date, time)):
        return value.isoformat()
    if isinstance(value, Mapping):
        pairs = ", ".join(f"{written_key(key)} = {written(inner)}" for key, inner in value.items())
        return f"{{ {pairs} }}" if pairs else "{}"
    if isinstance(value, (list, tuple)):
        return f"[{', '.join(written(inner) for inner in value)}]"
    return repr(value)


def written_text(text: str) -> str:
    """Return `text` as a basic TOML string on one line, control characters escaped."""
    return json.dumps(text, ensure_ascii=False).replace("\x7f", "\\u007f")


def written_key(key: str) -> str:
    """Return `key` bare where TOML allows it, in quotes otherwise."""
    return key if _BARE_KEY.fullmatch(key) else written_text(key)


def shown(value: object) -> str:
    """Return `value` as a message shows it: TOML notation on one line, long values shortened."""
    if isinstance(value, Mapping):
        return "{...}" if value else "{}"
    if isinstance(value, (list, tuple)):
        return _shown_list(value)
    if isinstance(value, int) and abs(value) > _LARGEST_SHOWN:
        return f"{'-' if value < 0 else ''}(a number of about {int(value.bit_length() * 0.30103) + 1} digits)"
    return shortened(_printable(written(value)))


def shown_key(key: str) -> str:
    """Return `key` as a message shows it: on one line, shortened where it is long."""
    return shortened(_printable(written_key(key)))


def shown_section(section: str) -> str:
    """Return a section as a config heads it: [start.beta]; an entry of a list, chain.extra[1], as
    [[chain.extra]] #2."""
    entry = _ENTRY.fullmatch(section)
    return f"[[{entry[1]}]] #{int(entry[2]) + 1}" if entry else f"[{section}]"


def shortened(text: str) -> str:
    """Return the first characters of a long text, followed by dots."""
    return text if len(text) <= _LONGEST_SHOWN else f"{text[:_LONGEST_SHOWN]}..."


def quantity(number: float) -> str:
    """Return a number as messages write it: to ten digits, in powers of ten from a million on."""
    return _unpadded(format(number, ".10g" if abs(number) < _MILLION else ".6g"))


def _unpadded(number: str) -> str:
    """Write exponents without plus sign and padding zeros."""
    return re.sub(r"e([+-])0*(\d)", r"e\1\2", number).replace("e+", "e")


def _shown_list(values: list[Any] | tuple[Any, ...]) -> str:
    nested = (list, tuple, Mapping)
    parts = ["[...]" if isinstance(value, nested) else shown(value) for value in values[:_MOST_SHOWN]]
    return f"[{', '.join([*parts, '...'] if len(values) > _MOST_SHOWN else parts)}]"


def _printable(text: str) -> str:
    """Escape what would break a line or steer a terminal (line separators, direction marks)."""
    return "".join(char if char.isprintable() else f"\\u{ord(char):04x}" for char in text)
