"""Malformed and malicious input at every reader: at least 2000 commands, none of which may break down.

    python -m tests.benchmarks.hostile [SHARE]

Prints a table (input, command, cases, exit codes, slowest, survived); SHARE below 1 runs a part of the cases.
Survived means: exit code 0, 2 or 4, a clean message with 2 and 4, no traceback, less than a minute, less than
1.5 GB of memory more than before in the program itself and in each process that it starts.
"""

from __future__ import annotations

import os
import sys
from collections import Counter
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from pathlib import Path
from tempfile import TemporaryDirectory

import h5py
from hypothesis import HealthCheck, Phase, given, settings
from hypothesis import strategies as st

from tests.command_line import call, config_file
from tests.hostile_arrays import MONSTERS, VALUES, image_of, plain_image
from tests.hostile_cases import Watched, candidate_tables, configs, mutated, watched
from tests.hostile_classic import classic_image, classic_monsters
from tests.hostile_datasets import datasets, told_otherwise
from tests.hostile_functions import FUNCTIONS

GOOD_TABLE = b"time,x,energy_density\n0.5,-0.5,-0.1\n0.5,0.5,-0.1\n0.25,1,-0.2\n"


@dataclass
class Row:
    """What happened to the cases of one kind of input."""

    kind: str
    cases: int = 0
    codes: Counter[int] = field(default_factory=Counter)
    slowest: float = 0.0
    faults: list[str] = field(default_factory=list)

    def add(self, found: Watched) -> None:
        self.cases += 1
        self.codes[found.answer.code] += 1
        self.slowest = max(self.slowest, found.seconds)
        self.faults += [" ".join(fault.split()) for fault in found.faults[:1]]

    def __str__(self) -> str:
        codes = ", ".join(f"{code}: {count}" for code, count in sorted(self.codes.items()))
        survived = self.cases - len(self.faults)
        return f"| {self.kind} | {self.cases} | {codes} | {self.slowest:.1f} s | {survived} |"


def survey(kind: str, cases: st.SearchStrategy[bytes], count: int, act: Callable[[bytes], Watched]) -> Row:
    """Throw `count` different contents at one command."""
    row = Row(kind)

    @settings(
        max_examples=max(count, 1), deadline=None, derandomize=True, database=None, phases=[Phase.generate],
        suppress_health_check=list(HealthCheck),
    )  # fmt: skip
    @given(cases)
    def each(content: bytes) -> None:
        row.add(act(content))

    each()
    return row


def surveyed(folder: Path, share: float) -> Iterator[Row]:
    """Yield one row a kind of input."""
    call("run", config_file(folder), "--into", folder / "base", "--threads", "1")
    sound = (folder / "base" / "run.h5").read_bytes()

    def at(name: str, *words: object) -> Callable[[bytes], Watched]:
        path = folder / name
        path.parent.mkdir(exist_ok=True)

        def act(content: bytes) -> Watched:
            path.write_bytes(content)
            return watched(*(path if word == "IT" else word for word in words))

        return act

    def whole(count: int) -> int:
        return max(1, round(count * share))

    good = folder / "good.csv"
    good.write_bytes(GOOD_TABLE)
    against = ("--against", folder / "base")
    yield survey("config, `check`", configs(), whole(700), at("a.toml", "check", "IT"))
    yield survey(
        "CSV, `judge`", candidate_tables(GOOD_TABLE), whole(400), at("c.csv", "judge", "IT", *against)
    )
    arrays = mutated(plain_image())
    yield survey("HDF5, spoiled bytes, `judge`", arrays, whole(200), at("c.h5", "judge", "IT", *against))
    yield every("HDF5, odd contents, `judge`", _monsters(folder), at("c.h5", "judge", "IT", *against))
    yield every("HDF5, odd contents, `check`", _monsters(folder), at("c.h5", "check", "IT"))
    classic = mutated(classic_image())
    yield survey("netCDF-3, spoiled bytes, `judge`", classic, whole(250), at("c.nc", "judge", "IT", *against))
    yield every("netCDF-3, odd heads, `judge`", classic_monsters(), at("c.nc", "judge", "IT", *against))
    codes = [code.encode() for code in FUNCTIONS.values()]
    consent = (f"{folder / 'f.py'}:f", *against, "--run-code")
    yield every("functions, `judge --run-code`", codes, at("f.py", "judge", *consent))
    dataset = at("d/run.h5", "check", "IT")
    yield survey("dataset, `check`", datasets(sound), whole(250), dataset)
    opened = ("judge", good, "--against", "IT")
    yield survey("dataset, `judge --against`", datasets(sound), whole(120), at("d/run.h5", *opened))
    yield survey("dataset, `report`", mutated(sound), whole(40), at("d/run.h5", "report", "IT"))
    unsound = unsound_only(told_otherwise(sound), dataset)
    yield survey("dataset, another digest, `refine`", unsound, whole(30), at("d/run.h5", "refine", "IT"))
    told = told_otherwise(sound)
    yield survey("dataset, another digest, `report`", told, whole(25), at("d/run.h5", "report", "IT"))


def unsound_only(
    cases: st.SearchStrategy[bytes], check: Callable[[bytes], Watched]
) -> st.SearchStrategy[bytes]:
    """Only datasets that `check` finds fault with: a sound one would be simulated again."""
    return cases.filter(lambda content: check(content).answer.code != 0)


def every(kind: str, cases: list[bytes], act: Callable[[bytes], Watched]) -> Row:
    row = Row(kind)
    for content in cases:
        row.add(act(content))
    return row


def _monsters(folder: Path) -> list[bytes]:
    """Odd HDF5 files, beside what they point at."""
    with h5py.File(folder / "other.h5", "w") as file:
        file["a"] = VALUES
    if not (folder / "pipe").exists():
        os.mkfifo(folder / "pipe")
    os.chdir(folder)
    return [image_of(make, folder) for make in MONSTERS.values()]


def main() -> int:
    """Print the table and every fault; return 1 if there was one."""
    share = float(sys.argv[1]) if len(sys.argv) > 1 else 1.0
    print("| input, command | cases | exit codes | slowest | survived |\n|---|---|---|---|---|", flush=True)
    rows: list[Row] = []
    with TemporaryDirectory() as folder:
        for row in surveyed(Path(folder), share):
            rows.append(row)
            print(row, *(f"    FAULT {fault}" for fault in row.faults), sep="\n", flush=True)
        os.chdir("/")
    cases = sum(row.cases for row in rows)
    faults = sum(len(row.faults) for row in rows)
    print(f"| together | {cases} | | {max(row.slowest for row in rows):.1f} s | {cases - faults} |")
    return int(faults > 0)


if __name__ == "__main__":
    sys.exit(main())
