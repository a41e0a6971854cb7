"""Real runs of a small chain as processes of their own, and whether they end as an undisturbed one.

Processes are forked from one that has loaded the program, so that a run begins at once. Sabotage is done
inside the process before the command line is carried out: what no signal from outside could hit in time.
"""

from __future__ import annotations

import json
import math
import multiprocessing
import os
import re
import sys
import time
from collections.abc import Sequence
from contextlib import suppress
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from tests.fault_sabotage import Busy, Sabotage
from tnquench import cli
from tnquench.dataset.contents import Contents
from tnquench.dataset.integrity import check_run, read_contents

SMALL = """
title = "A chain of eight sites, to be interrupted"
[chain]
model = "xxz"
sites = 8
anisotropy = 0.0
[start]
joint = "coupled"
[start.beta]
shape = "step"
left = 0.5
right = 2.0
[evolution]
until = {until}
every = 0.25
discarded_weight = 1e-8
time_step = 0.125
[budget]
companions = "{companions}"
"""

#: Facts of a run that differ whenever it is done again: dates, times, memory, and the digest over them.
OF_THE_DAY = re.compile(r"created|digest|peak_memory_bytes|(.*_)?seconds(_.*)?")

#: Exit codes.
DONE, DEFECT, BAD_INPUT, STOPPED, NEGATIVE, INTERRUPTED = 0, 1, 2, 3, 4, 130

#: Seconds after which a run counts as hanging.
PATIENCE = 300.0


@dataclass
class Outcome:
    """How a process ended.

    code : exit code, negative for a signal; seconds : wall time; cpu : processor time; peak : largest
    resident memory in bytes
    """

    code: int
    out: str
    err: str
    seconds: float
    cpu: float
    peak: int


class Started:
    """A command line under way in a process of its own, at the head of its own group."""

    def __init__(self, words: Sequence[object], sabotage: Sabotage | None = None) -> None:
        self.began = time.monotonic()
        self.texts = [os.memfd_create(name) for name in ("out", "err")]
        paths = [f"/proc/{os.getpid()}/fd/{text}" for text in self.texts]
        self.process = _processes().Process(
            target=_child, args=([str(word) for word in words], paths, sabotage)
        )
        self.process.start()
        assert self.process.pid is not None
        self.pid: int = self.process.pid
        self.cpu, self.peak = 0.0, 0

    def alive(self) -> bool:
        """Tell whether it is still under way, and look at its time and memory."""
        with suppress(OSError):
            ticks = Path(f"/proc/{self.pid}/stat").read_text().rpartition(")")[2].split()[11:13]
            self.cpu = sum(map(int, ticks)) / os.sysconf("SC_CLK_TCK")
            found = re.search(r"VmHWM:\s*(\d+) kB", Path(f"/proc/{self.pid}/status").read_text())
            self.peak = self.peak if found is None else int(found[1]) * 1024
        return self.process.is_alive()

    def send(self, number: int) -> None:
        """Send a signal, if it is still there."""
        if self.process.is_alive():
            os.kill(self.pid, number)

    def until(self, *, cpu: float = math.inf, seconds: float = math.inf) -> bool:
        """Wait until it has used so much processor time, or for so long; tell if it is under way then."""
        while self.alive() and self.cpu < cpu and time.monotonic() < self.began + seconds:
            time.sleep(0.002)
        return self.process.is_alive()

    def err(self) -> str:
        """Return what it has said so far."""
        return os.pread(self.texts[1], 1 << 20, 0).decode()

    def once(self, said: str) -> bool:
        """Wait until it says something; False if it ends without."""
        while said not in self.err():
            if not self.alive():
                return said in self.err()
            assert time.monotonic() < self.began + PATIENCE, "hangs"
            time.sleep(0.005)
        return True

    def end(self) -> Outcome:
        """Wait for its end."""
        self.until(seconds=PATIENCE)
        hangs = self.process.is_alive()
        if hangs:
            self.process.kill()
        self.process.join()
        seconds = time.monotonic() - self.began
        out, err = (os.pread(text, 1 << 20, 0).decode() for text in self.texts)
        for text in self.texts:
            os.close(text)
        assert not hangs, f"hangs; it said:\n{err}"
        return Outcome(int(self.process.exitcode or 0), out, err, seconds, self.cpu, self.peak)


def _processes() -> multiprocessing.context.ForkServerContext:
    context = multiprocessing.get_context("forkserver")
    context.set_forkserver_preload(["tnquench.cli", "dask.array", "tests.fault_places"])
    return context


def _child(words: list[str], paths: list[str], sabotage: Sabotage | None) -> None:
    """Be the command `tnquench`."""
    os.setsid()
    for number, path in enumerate(paths, start=1):
        descriptor = os.open(path, os.O_WRONLY)
        os.dup2(descriptor, number)
        os.close(descriptor)
    sys.stdout, sys.stderr = (os.fdopen(number, "w", buffering=1) for number in (1, 2))
    sys.argv = ["tnquench", *words]
    if sabotage is not None:
        sabotage()
    cli.main()


@dataclass(frozen=True)
class Case:
    """A config and what an undisturbed run of it gave.

    dataset : its contents; cpu : processor time that it took
    """

    config: Path
    dataset: Contents
    cpu: float

    def start(self, folder: Path, *more: object, sabotage: Sabotage | None = None) -> Started:
        """Start a run of the config in a folder, in one process unless told otherwise."""
        words = ["run", self.config, "--into", folder, "--checkpoint-every", 0, "--threads", 1, *more]
        return Started(words, Busy(sabotage))

    def run(self, folder: Path, *more: object, sabotage: Sabotage | None = None) -> Outcome:
        """Carry out a run, or what is left of one."""
        return self.start(folder, *more, sabotage=sabotage).end()

    def completes(self, folder: Path, *more: object, sabotage: Sabotage | None = None) -> Outcome:
        """Carry out the rest of a run and make sure that it ends with the dataset of the undisturbed one."""
        outcome = self.run(folder, *more, sabotage=sabotage)
        assert outcome.code == DONE, f"exit code {outcome.code}:\n{outcome.err}"
        self.same_in(folder)
        return outcome

    def same_in(self, folder: Path) -> None:
        """Make sure that a folder holds the dataset of the undisturbed run, and no debris."""
        assert check_run(folder) == []
        assert differences(read_contents(folder), self.dataset) == []
        debris = [file for file in folder.rglob(".*") if not file.name.startswith(".lock.")]
        assert debris == [], "left lying about"


def undisturbed(folder: Path, *, until: float = 1.0, companions: str = "full") -> Case:
    """Write a config to a folder, run it once, and return both."""
    config = folder / "small.toml"
    config.write_text(SMALL.format(until=until, companions=companions))
    Started(["--version"]).end()  # the program is loaded before times are taken
    words = ["run", config, "--into", folder / "undisturbed", "--threads", 1, "--checkpoint-every", 0]
    outcome = Started(words, Busy()).end()
    assert outcome.code == DONE, outcome.err
    return Case(config, read_contents(folder / "undisturbed"), outcome.cpu)


def differences(found: Contents, expected: Contents) -> list[str]:
    """Return the names of variables and attributes that are not the same to the last bit."""
    wrong = sorted(found.variables.keys() ^ expected.variables.keys())
    for path in found.variables.keys() & expected.variables.keys():
        one, other = found.variables[path], expected.variables[path]
        same = one.dims == other.dims and one.values.dtype == other.values.dtype
        same &= dict(one.attributes) == dict(other.attributes)
        same &= one.values.shape == other.values.shape and _bits(one.values) == _bits(other.values)
        wrong += [] if same else [path]
    for group in found.attributes.keys() | expected.attributes.keys():
        one_said, other_said = found.attributes.get(group, {}), expected.attributes.get(group, {})
        wrong += [
            f"{group}.{name}"
            for name in sorted(one_said.keys() | other_said.keys())
            if not OF_THE_DAY.fullmatch(name)
            and _lasting(one_said.get(name)) != _lasting(other_said.get(name))
        ]
    return wrong


def _lasting(said: object) -> str:
    """Return an attribute as text, without what its JSON text says of times."""
    if not isinstance(said, str) or not said.startswith(("{", "[")):
        return repr(said)
    return json.dumps(json.loads(said, object_pairs_hook=_without_times))


def _without_times(pairs: list[tuple[str, object]]) -> dict[str, object]:
    return {name: value for name, value in pairs if not OF_THE_DAY.fullmatch(name)}


def _bits(values: np.ndarray) -> object:
    return values.tolist() if values.dtype.kind in "UO" else values.tobytes()
