"""What is done inside a process before it carries out a command line, as small objects that can be sent.

A fault of the layers of gates counts them from the begin of the evolution in real time.
"""

from __future__ import annotations

import math
import os
import random
import resource
import signal
import sys
import time
from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace
from itertools import count
from pathlib import Path
from typing import Any, ClassVar

import numpy as np

Sabotage = Callable[[], None]


def module(name: str) -> Any:
    """Return a loaded module, to be patched."""
    return sys.modules[f"tnquench.{name}"]


@dataclass(frozen=True)
class Busy:
    """Write a checkpoint after every layer, whatever it costs; leave out the report and the findings, which
    take longer than all else; then do `more`."""

    more: Sabotage | None = None

    def __call__(self) -> None:
        module("run").write_report = module("terminal.running").show_findings = lambda _folder: None
        module("checkpoints").LARGEST_SHARE = math.inf
        if self.more is not None:
            self.more()


#: Calls to the file system by which files are written.
FILE_CALLS = {"fsync": os, "link": os, "replace": Path, "unlink": Path}


@dataclass(frozen=True)
class KillInWriting:
    """Kill the process at a call to the file system for a file whose path holds `name`.

    number : which of these calls; share : before it is synced, the file is cut to this share of its length,
    as if the process had been killed in the middle of writing it
    """

    name: str
    number: int
    share: float = 1.0

    def __call__(self) -> None:
        calls = count()

        def killing(name: str, call: Callable[..., Any]) -> Callable[..., Any]:
            def wrapped(target: Any, *more: Any, **options: Any) -> Any:
                if self.name in str(_path_of(target)) and next(calls) == self.number:
                    if name == "fsync" and self.share < 1.0 and Path(_path_of(target)).is_file():
                        os.truncate(_path_of(target), int(os.fstat(target).st_size * self.share))
                    os.kill(os.getpid(), signal.SIGKILL)
                return call(target, *more, **options)

            return wrapped

        for name, owner in FILE_CALLS.items():
            setattr(owner, name, killing(name, getattr(owner, name)))


def _path_of(target: Any) -> Any:
    """Return the path behind a descriptor, or the path itself."""
    return Path(f"/proc/self/fd/{target}").readlink() if isinstance(target, int) else target


@dataclass(frozen=True)
class LongestFile:
    """Let no file grow beyond so many bytes: for a process, a disk that is full."""

    bytes: int

    def __call__(self) -> None:
        resource.setrlimit(resource.RLIMIT_FSIZE, (self.bytes, resource.RLIM_INFINITY))


@dataclass(frozen=True)
class ClockJumps:
    """Let the date jump by up to ten days each time it is asked for, or stand still for every third seed."""

    seed: int

    def __call__(self) -> None:
        jumps, real, frozen = random.Random(self.seed), time.time, time.time()
        if self.seed % 3 == 0:
            time.time = lambda: frozen
        else:
            time.time = lambda: real() + jumps.uniform(-864_000.0, 864_000.0)


@dataclass(frozen=True)
class AtLayers:
    """Do something at each layer of gates of the evolution in real time, beginning with layer `first`.

    change : (gates, number of the layer) -> gates
    """

    first: int = 0

    def __call__(self) -> None:
        evolution, layers = module("evolution.real_time"), count()
        apply_layer = evolution.apply_layer

        def changed(state: Any, gates: Mapping[int, Any], *more: Any) -> None:
            number = next(layers)
            apply_layer(state, gates if number < self.first else self.change(gates, number), *more)

        evolution.apply_layer = changed

    def change(self, gates: Mapping[int, Any], _number: int) -> Mapping[int, Any]:
        """Return the gates to be applied in place of these."""
        raise NotImplementedError


@dataclass(frozen=True)
class SlowLayers(AtLayers):
    """Take so many seconds more for each layer, and say so."""

    seconds: float = 1.0
    said: ClassVar[str] = "slow layer"

    def change(self, gates: Mapping[int, Any], _number: int) -> Mapping[int, Any]:
        sys.stderr.write(f"{self.said}\n")
        end = time.monotonic() + self.seconds
        while time.monotonic() < end:  # a signal may wake a sleeper
            time.sleep(0.01)
        return gates


@dataclass(frozen=True)
class GrowingMemory(AtLayers):
    """Take so many bytes more at each layer, and keep them."""

    bytes: int = 8_000_000

    def change(self, gates: Mapping[int, Any], _number: int) -> Mapping[int, Any]:
        KEPT.append(np.ones(self.bytes // 8))
        return gates


KEPT: list[Any] = []


@dataclass(frozen=True)
class SpoiledGates(AtLayers):
    """Multiply the gates of one layer by a factor: nan for numbers that are none, 1.001 for a drift."""

    factor: float = np.nan

    def change(self, gates: Mapping[int, Any], _number: int) -> Mapping[int, Any]:
        if _number > self.first:
            return gates
        spoiled = {}
        for bond, gate in gates.items():
            spoiled[bond] = replace(gate, blocks=gate.blocks * self.factor)
        return spoiled
