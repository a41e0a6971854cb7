"""The checkpoints of a run: one file a quench in FOLDER/checkpoints, and the config that they belong to."""

from __future__ import annotations

import hashlib
import os
import shutil
import time
from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from tnquench.config.changes import changes, forbidden
from tnquench.config.document import effective_toml
from tnquench.config.load import read_config
from tnquench.config.schema import Config
from tnquench.dataset.checkpoint import load_checkpoint, read_header, save_checkpoint
from tnquench.errors import InputError, Stopped
from tnquench.observables.quench import Quench
from tnquench.observables.snapshot import Content
from tnquench.stopping import Stop

CHECKPOINTS, CONFIG_NAME = "checkpoints", "config.toml"

#: Checkpoints may take this share of the time, and are at least so many seconds apart unless told otherwise.
LARGEST_SHARE, LEAST_INTERVAL = 0.03, 30.0

#: A changed layout of the content makes old checkpoints another quench's.
FORMAT = 2


@dataclass(frozen=True)
class Store:
    """Where the quenches of a run are kept.

    folder : FOLDER/checkpoints; interval : least seconds between two checkpoints of a quench
    """

    folder: Path
    interval: float = LEAST_INTERVAL

    def path(self, name: str, quench: Quench) -> Path:
        """Return the file of a quench of this name."""
        return self.folder / f"{name}-{fingerprint(quench)}.h5"

    def start_path(self, name: str, quench: Quench) -> Path:
        """Return the file of the finished start of a quench: one a name, so that none has two writers."""
        return self.folder / f"start-{start_fingerprint(quench)}-{name}.h5"

    def header(self, name: str, quench: Quench) -> dict[str, Any] | None:
        """Return what is known of a quench that is kept, None if it is not."""
        return read_header(self.path(name, quench))

    def standing(self, name: str, quench: Quench) -> str:
        """Return in words how far a kept quench has come; empty if it is not kept."""
        header = self.header(name, quench)
        if header is None:
            return ""
        if header["stage"] == "start":
            return "goes on with its start"
        if header["time"] >= quench.every * quench.samples * (1.0 - 1e-12):
            return "finished before"
        return f"goes on from t = {header['time']:.4g}"

    def belongs_to(self, config: Config) -> None:
        """Note the config that the checkpoints belong to; several processes may do so at once."""
        kept, text = self.folder / CONFIG_NAME, effective_toml(config)
        if kept.exists() and kept.read_text(encoding="utf-8") == text:
            return
        partial = kept.with_name(f".{CONFIG_NAME}.{os.getpid()}.partial")
        partial.write_text(text, encoding="utf-8")
        partial.replace(kept)

    def tidy(self, quenches: Mapping[str, Quench]) -> None:
        """Remove all but the newest checkpoints of these finished quenches."""
        keep = {self.path(name, quench) for name, quench in quenches.items()}
        for file in self.folder.glob("*.h5"):
            if file not in keep:
                file.unlink(missing_ok=True)


class QuenchKeeper:
    """Keeps one quench; see `Keeper`. Ends it where `stop` has a reason, with a checkpoint."""

    def __init__(self, store: Store, name: str, quench: Quench, stop: Stop) -> None:
        self.stop = stop
        self.interval = store.interval
        self.path, self.start_path = store.path(name, quench), store.start_path(name, quench)
        self.header = {
            "quench": name,
            "fingerprint": fingerprint(quench),
            "until": quench.every * quench.samples,
            "format": FORMAT,
        }
        self.saved = self.last_layer = time.monotonic()
        self.layer_seconds = self.save_seconds = 0.0

    def load(self) -> Content | None:
        """Return the content last saved, None if there is none."""
        return load_checkpoint(self.path)

    def load_start(self) -> Content | None:
        """Return the finished start, None if it is not kept."""
        return load_checkpoint(self.start_path)

    def save_start(self, content: Content) -> None:
        """Save the finished start."""
        header = {**self.header, "stage": "start", "time": 0.0, "finished": True}
        save_checkpoint(self.start_path, {**content, "header": header})

    def after_layer(self, header: Mapping[str, Any], content: Callable[[], Content]) -> None:
        """Save the content if it is time to; raises Stopped after saving it if there is a reason to end."""
        now = time.monotonic()
        self.layer_seconds = max(self.layer_seconds, now - self.last_layer)
        why = self.stop.reason(layer_seconds=self.layer_seconds, checkpoint_seconds=self.save_seconds)
        if why or now - self.saved >= max(self.interval, self.save_seconds / LARGEST_SHARE):
            self._save(header, content, finished=False)
        self.last_layer = time.monotonic()
        if why:
            raise Stopped(why)

    def save(self, header: Mapping[str, Any], content: Content) -> None:
        """Save the content of the finished quench."""
        self._save(header, lambda: content, finished=True)

    def _save(self, header: Mapping[str, Any], content: Callable[[], Content], *, finished: bool) -> None:
        began = time.monotonic()
        save_checkpoint(self.path, {**content(), "header": {**self.header, **header, "finished": finished}})
        self.saved = time.monotonic()
        self.save_seconds = max(self.save_seconds, self.saved - began)


def open_store(folder: Path, config: Config, *, interval: float | None, fresh: bool) -> Store:
    """Return the store of a run in `folder`, made for this config or a config that it may go on with.

    interval : seconds between two checkpoints, None for the default; fresh : forget what is there
    Raises InputError, with the keys that differ, if another config's checkpoints are there.
    """
    store = Store(folder / CHECKPOINTS, LEAST_INTERVAL if interval is None else interval)
    if fresh and store.folder.exists():
        shutil.rmtree(store.folder)
    try:
        store.folder.mkdir(parents=True, exist_ok=True)
    except (FileExistsError, NotADirectoryError) as error:
        problem = "is a file, not a folder; move it away or name another place with --into"
        raise InputError(str(store.folder), [problem]) from error
    kept = store.folder / CONFIG_NAME
    if kept.exists() and any(store.folder.glob("*.h5")):
        earlier = read_config(kept.read_text(encoding="utf-8"), subject=str(kept))
        if problems := forbidden(changes(earlier, config)):
            advice = "name another folder with --into, or start afresh with --fresh"
            raise InputError(str(folder), [*problems, f"the folder holds a run of another config: {advice}"])
    store.belongs_to(config)
    return store


def require_reachable(store: Store, quenches: Mapping[str, Quench]) -> None:
    """Raise InputError if a kept quench has gone beyond the last sample that is wanted now."""
    for name, quench in quenches.items():
        header, until = store.header(name, quench), quench.every * quench.samples
        if header is not None and header["time"] > until * (1.0 + 1e-12):
            problem = f"[evolution] until = {until:g}: {name} has been at t = {header['time']:.4g} already"
            advice = "a run can grow, not shrink: name another folder, or start afresh with --fresh"
            raise InputError(str(store.folder.parent), [f"{problem}; {advice}"])


def fingerprint(quench: Quench) -> str:
    """Return a digest of everything that a quench does, but how long it goes on."""
    return _digest(
        [
            *_start_settings(quench),
            *(sorted(members.items()) for members in (quench.chain.charges, quench.chain.densities)),
            quench.every,
            quench.steps,
            quench.trotter_order,
            quench.discarded_weight,
            quench.bond_floor,
        ]
    )


def start_fingerprint(quench: Quench) -> str:
    """Return a digest of everything that a quench's start and its error depend on."""
    return _digest(_start_settings(quench))


def _start_settings(quench: Quench) -> list[object]:
    chain = quench.chain
    return [
        FORMAT,
        chain.sites,
        chain.bond_terms,
        chain.qubits_per_site,
        quench.start_terms,
        quench.preparation_weight,
        quench.preparation_distance,
        quench.bond_ceiling,
        quench.cutting,
    ]


def _digest(settings: Iterable[object]) -> str:
    return hashlib.sha256(repr(list(settings)).encode()).hexdigest()[:16]
