"""Malformed and malicious input for every reader, as bytes, and how a command that meets it is watched."""

from __future__ import annotations

import contextlib
import resource
import signal
import time
import zlib
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from functools import cache
from pathlib import Path
from typing import Any

from hypothesis import strategies as st

from tests.command_line import Answer, call
from tests.config_cases import CONFIGS, good_configs, toml
from tnquench.judge.points import OBSERVABLES

#: A single command may take so long, in seconds, and so much more memory than before, in bytes; so may each
#: of the processes that it starts.
TIME_LIMIT, MEMORY_LIMIT = 60.0, 1536 * 2**20

#: Exit codes of a command that understood its input (0), refused it (2) or judged it negatively (4).
FORESEEN = frozenset({0, 2, 4})


class Overtime(BaseException):
    """A command took too long; no `except Exception` may hide it."""


@dataclass(frozen=True)
class Watched:
    """What a command did, how long it took and what it cost; faults : what must never happen."""

    answer: Answer
    seconds: float
    faults: tuple[str, ...]


def watched(*words: object, codes: frozenset[int] = FORESEEN) -> Watched:
    """Carry out a command line in this process under the limits of time and memory."""
    began, before, largest = time.monotonic(), _memory("VmRSS"), _largest_child()
    with contextlib.suppress(OSError):
        Path("/proc/self/clear_refs").write_text("5")  # the high-water mark starts anew
    try:
        with _time_limit():
            answer = call(*words)
    except Overtime:
        answer = Answer(-1, "", "")
    seconds = time.monotonic() - began
    grown = _memory("VmHWM") - before
    children = _largest_child() if _largest_child() > largest else 0
    return Watched(answer, seconds, tuple(_faults(answer, codes, grown, children)))


def _faults(answer: Answer, codes: frozenset[int], grown: int, children: int) -> Iterator[str]:
    if answer.code not in codes:
        yield f"exit code {answer.code}: {answer.err[-300:]}"
    if "Traceback" in answer.err + answer.out:
        yield f"traceback: {answer.err[-300:]}"
    if answer.code and not answer.err.strip():
        yield "no message"
    yield from (
        f"line not clean: {line[:100]!r}"
        for line in answer.lines
        if not line.isprintable() or len(line) > 900
    )
    if len(answer.lines) > 150:
        yield f"{len(answer.lines)} lines of messages"
    try:
        answer.out.encode()  # standard error spells out what it cannot print
    except UnicodeEncodeError:
        yield "a text that no terminal can print"
    if grown > MEMORY_LIMIT:
        yield f"{grown / 2**20:.0f} MB taken"
    if children > MEMORY_LIMIT:
        yield f"{children / 2**20:.0f} MB taken by a process of its own"


def _largest_child() -> int:
    return resource.getrusage(resource.RUSAGE_CHILDREN).ru_maxrss * 1024


def _memory(what: str) -> int:
    for line in Path("/proc/self/status").read_text().splitlines():
        if line.startswith(what):
            return int(line.split()[1]) * 1024
    return 0


@contextlib.contextmanager
def _time_limit() -> Iterator[None]:
    def end(*_: object) -> None:
        raise Overtime

    previous = signal.signal(signal.SIGALRM, end)
    signal.setitimer(signal.ITIMER_REAL, TIME_LIMIT)
    try:
        yield
    finally:
        signal.setitimer(signal.ITIMER_REAL, 0.0)
        signal.signal(signal.SIGALRM, previous)


# Any file: bytes flipped, struck out, doubled, cut off ------------------------------------------------------


@st.composite
def mutated(draw: st.DrawFn, image: bytes, *, scratches: int = 8) -> bytes:
    """The bytes of a good file with a few places spoiled."""
    content = bytearray(image)
    for _ in range(draw(st.integers(1, scratches))):
        place = draw(st.integers(0, max(len(content) - 1, 0)))
        match draw(st.sampled_from(["flip", "cut", "zero", "noise", "strike out", "double"])):
            case "flip" if content:
                content[place] ^= draw(st.integers(1, 255))
            case "cut":
                content = content[: max(place, 1)]
            case "zero":
                length = draw(st.sampled_from([4, 64, 512]))
                content[place : place + length] = bytes(len(content[place : place + length]))
            case "noise":
                content[place : place + 8] = draw(st.binary(max_size=8))
            case "strike out":
                del content[place : place + draw(st.integers(1, 64))]
            case _:
                content[place:place] = content[place : place + draw(st.integers(1, 64))]
    return bytes(content)


# Configs ----------------------------------------------------------------------------------------------------

TOKENS = (
    *(
        "=",
        ".",
        ",",
        "[",
        "]",
        "[[",
        "]]",
        "{",
        "}",
        '"',
        "'",
        '"""',
        "'''",
        "#",
        "\n",
        "\r\n",
        " ",
        "\\u0000",
    ),
    *(
        "chain",
        "start",
        "beta",
        "evolution",
        "sweep",
        "cluster",
        "stretch",
        "hydrodynamics",
        "budget",
        "extra",
    ),
    *(
        "shape",
        '"table"',
        '"step"',
        "file",
        '"/etc/passwd"',
        '"../../b.csv"',
        '"/dev/zero"',
        "values",
        "sites",
    ),
    *(
        "1e999",
        "-0",
        "nan",
        "inf",
        "0x" + "f" * 40,
        "9" * 5000,
        "1979-05-27T07:32:00Z",
        "07:60:99",
        "true",
        "1_0",
    ),
    *("\0", "\x1b[31m", "\u202e", "é", "until", "every", "discarded_weight", "accuracy", "model", '"xxz"'),
)

MONSTERS: tuple[Callable[[int], str], ...] = (
    lambda size: "a = " + "[" * size + "]" * size,
    lambda size: "a = " + "{b=" * size + "1" + "}" * size,
    lambda size: ".".join("a" * size) + " = 1",
    lambda size: "[" + ".".join("a" * size) + "]",
    lambda size: ".".join('"x"' for _ in range(size)) + " = 1",
    lambda size: "chain.sites = " + "9" * size,
    lambda size: "chain.sites = 0x" + "f" * size,
    lambda size: "start.beta = {shape = 'step', left = 1" + "0" * size + ", right = 1e" + "9" * size + "}",
    lambda size: "k" * size + " = 1",
    lambda size: f'"{"é" * size}" = 1',
    lambda size: "\n".join(f"a{index} = {index}" for index in range(size)),
    lambda size: "\n".join(f"[a{index}]" for index in range(size)),
    lambda size: "[[chain.extra]]\n" * size,
    lambda size: "title = 'x'\n" * size,
    lambda size: "start.beta.values = [" + "nan, " * size + "]",
    lambda size: f"title = '{'t' * size}'",
    lambda size: "[hydrodynamics]\nlevels = [" + "'euler', " * size + "]",
    lambda size: "[stretch]\nfactors = [" + ", ".join(map(str, range(1, size))) + "]",
    lambda size: "\r" * size,
    lambda size: "#" * size,
)

odd_values = st.one_of(
    st.integers(-(2**70), 2**70),
    st.floats(),
    st.booleans(),
    st.text(max_size=8),
    st.dates(),
    st.lists(st.integers() | st.text(max_size=3), max_size=4),
    st.dictionaries(st.text("abcL.", min_size=1, max_size=4), st.integers() | st.floats(), max_size=3),
    st.sampled_from(["table", "/etc/passwd", "../x", "/dev/zero", "euler", "", "x" * 3000]),
)


@st.composite
def spoiled_config(draw: st.DrawFn) -> bytes:
    """Good settings, some of them of another kind, in another place, or called otherwise."""
    tables = draw(good_configs())
    for _ in range(draw(st.integers(1, 4))):
        table: Any = tables
        deeper = draw(st.booleans())
        while deeper and (inner := [value for value in table.values() if isinstance(value, dict)]):
            table = draw(st.sampled_from(inner))
            deeper = draw(st.booleans())
        key = draw(st.sampled_from(sorted(table) or ["a"]))
        match draw(st.sampled_from(["replace", "remove", "rename", "table"])):
            case "remove":
                table.pop(key, None)
            case "rename":
                table[draw(st.text(min_size=1, max_size=12))] = table.pop(key, 1)
            case "table":
                table[key] = {"shape": "table", "file": draw(st.text(max_size=12) | st.just("/etc/passwd"))}
            case _:
                table[key] = draw(odd_values)
    return toml(tables).encode("utf-8", errors="surrogatepass")


def configs() -> st.SearchStrategy[bytes]:
    demo = (CONFIGS / "demo.toml").read_bytes()
    soup = st.lists(st.sampled_from(TOKENS), max_size=40).map(lambda parts: "".join(parts).encode())
    sizes = st.sampled_from([1, 30, 500, 3000, 20_000])
    monsters = st.tuples(st.sampled_from(MONSTERS), sizes).map(lambda pair: pair[0](pair[1]).encode())
    return st.one_of(spoiled_config(), mutated(demo), soup, monsters, st.binary(max_size=200))


# Tables of numbers ------------------------------------------------------------------------------------------

HEADERS = ("time,x,energy_density", "time,x,energy_density,energy_current", "x,time,charge_density")
CELLS = (
    *(
        "0.5",
        "1",
        "-1.5",
        "0",
        "",
        " ",
        "nan",
        "inf",
        "-inf",
        "1e999",
        "1e300",
        "9" * 400,
        "0x10",
        "1_0",
        "1d-3",
    ),
    *('"', "'", '"0.5"', "\0", "\x1b[2J", "٣", "½", "#", "=1+1", "time", "TRUE", "NULL", "x" * 200_000),
)


@st.composite
def tables(draw: st.DrawFn) -> bytes:
    """Tables of candidates: good heads over bad rows, bad heads, odd separators, line ends and encodings."""
    names = st.sampled_from(
        ["time", "x", *OBSERVABLES, "t", "", "energy_densty", "é", "time ", "\0", "x" * 500]
    )
    head = draw(st.sampled_from(HEADERS) | st.lists(names, max_size=6).map(",".join))
    width = head.count(",") + draw(st.sampled_from([1, 1, 1, 0, 2]))
    cells = st.lists(st.sampled_from(CELLS) | st.floats().map(repr), min_size=width, max_size=width)
    mark = draw(st.sampled_from([",", ",", ",", ";", "\t", " "]))
    end = draw(st.sampled_from(["\n", "\n", "\r\n", "\r", "\n\n", "\u2028", ""]))
    text = end.join([head, *(mark.join(row) for row in draw(st.lists(cells, max_size=6)))])
    codec = draw(st.sampled_from(["utf-8", "utf-8", "utf-8-sig", "utf-16", "utf-32"]))
    return text.encode(codec, errors="replace")


def candidate_tables(good: bytes) -> st.SearchStrategy[bytes]:
    wide = st.integers(1, 30_000).map(lambda count: ("time,x" + ",energy_densty" * count).encode())
    long = st.integers(1, 300_000).map(lambda count: b"time,x,energy_density\n" + b"#\n" * count)
    return st.one_of(tables(), mutated(good), wide, long, st.binary(max_size=300))


# Bombs ------------------------------------------------------------------------------------------------------


@cache
def zeros_packed(size: int) -> bytes:
    """A deflate stream of `size` zeros: a thousandth of them in bytes."""
    return zlib.compress(bytes(size), 9)


def hostile_text(place: str) -> str:
    """Text that would be markup, script, formula or terminal control if anybody took it for such."""
    return f"<script>alert('{place}')</script><img src=x onerror=y>&\"'{{{{7*7}}}}$x_{{$ \x1b[31m\u202e-->]]>"
