"""Candidates and datasets for the tests of `judge`: exact, self-similar and made-up ones, and how they are
written."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
from scipy.interpolate import PchipInterpolator

from tests.oracles.free_fermions import free_evolution
from tests.synthetic_run import budget, synthetic_pieces, wiggle
from tnquench.assemble import build_prediction
from tnquench.config.load import read_config
from tnquench.conventions import OBSERVABLE_PLACES, Reals, bond_positions, site_positions
from tnquench.dataset.writer import write_run
from tnquench.errors import InputError
from tnquench.judge.points import OBSERVABLES, Points
from tnquench.outcome import run_pieces
from tnquench.quantum_of import SILENT, quantum_side

Columns = dict[str, Reals]
Field = Callable[[Reals, Reals], Reals]

FREE_SITES, EVERY, HOT, COLD = 16, 0.5, 0.5, 2.0
FREE_TOML = f"""\
title = "Free fermions, hot and cold"
[chain]
model = "xxz"
sites = {FREE_SITES}
anisotropy = 0.0
[start.beta]
shape = "step"
left = {HOT}
right = {COLD}
[evolution]
until = 2.5
every = {EVERY}
discarded_weight = 1e-6
time_step = 0.25
"""

#: Velocity of a single flipped spin, energy J cos k, whatever the anisotropy: the bare light cone.
BARE_VELOCITY = 1.0


def places_of(name: str, sites: int) -> Reals:
    return bond_positions(sites) if OBSERVABLE_PLACES[name] == "bond" else site_positions(sites)


def simulated_free_run(folder: Path) -> Path:
    """Simulate a short chain at D = 0 with its companions and write its dataset, without a report."""
    config = read_config(FREE_TOML, subject="free.toml")
    prediction, absence = build_prediction(config)
    quantum = quantum_side(config, threads=1, watch=SILENT)
    pieces = run_pieces(config, Path("free.toml"), quantum, prediction, absence)
    pieces.provenance.update({"wall_seconds": 1.0, "cpu_seconds": 1.0})
    return write_run(folder, **pieces.as_arguments())


def exact_free(times: Reals, *, later: float = 0.0) -> dict[str, Reals]:
    """The exact chain of `simulated_free_run` at times + later, each observable (time, place)."""
    bonds = bond_positions(FREE_SITES)
    beta = np.where(bonds < 0, HOT, COLD)
    beta[bonds == 0] = 0.5 * (HOT + COLD)
    return free_evolution(sites=FREE_SITES, beta=beta, times=times + later)


def grid_columns(name: str, times: Reals, positions: Reals, values: Reals) -> Columns:
    clock, place = np.meshgrid(times, positions, indexing="ij")
    return {"time": clock.ravel(), "x": place.ravel(), name: values.ravel()}


def table(parts: list[Columns]) -> str:
    """Join columns of several observables to one CSV text, cells empty where an observable is not given."""
    names = list(dict.fromkeys(name for part in parts for name in part if name not in ("time", "x")))
    lines = [f"# {len(parts)} tables joined", ",".join(["time", "x", *names])]
    for part in parts:
        for row in range(part["time"].size):
            cells = [f"{part[name][row]:.17g}" if name in part else "" for name in names]
            lines.append(",".join([f"{part['time'][row]:.12g}", f"{part['x'][row]:.12g}", *cells]))
    return "\n".join(lines) + "\n"


def exact_table(times: Reals, *names: str, later: float = 0.0) -> str:
    """The exact free chain as a CSV text; with `later` its clock is wrong by that much."""
    exact = exact_free(times, later=later)
    return table([grid_columns(name, times, places_of(name, FREE_SITES), exact[name]) for name in names])


def interacting_dataset(folder: Path, *, sites: int = 40, samples: int = 13) -> Path:
    """A dataset at D = 0.5 whose prediction is real; its "chain" is the prediction plus a MADE-UP deviation
    of the size found in real chains, with a made-up error."""
    pieces = synthetic_pieces(sites=sites, times=samples)
    text = pieces["provenance"]["config_toml"].replace("until = 10.0", f"until = {0.5 * (samples - 1)}")
    pieces["provenance"]["config_toml"] = text
    prediction, absence = build_prediction(read_config(text, subject="synthetic"))
    assert prediction is not None, absence
    time = pieces["coordinates"]["time"]
    for name, values in prediction.fields.items():
        chain = values + 0.15 * wiggle(name, time, places_of(name, sites))
        pieces["groups"]["quantum"][name] = chain
        theory = pieces["groups"]["hydrodynamics/euler"]
        theory |= {name: values, f"{name}_grid_error": prediction.grid_error[name]}
        pieces["groups"][f"budget/{name}"] = budget(chain - values, time)
    edges = dict(zip(("light_cone_left", "light_cone_right"), prediction.light_cone, strict=True))
    pieces["attributes"]["hydrodynamics/euler"] |= edges
    return write_run(folder, **pieces)


def self_similar(run: Any, name: str, *, squeezed: float = 1.0, later: float = 0.0) -> Field:
    """The dataset's Euler prediction at any point, from its last profile alone, as a function of (time, x).

    squeezed : rays are longer by this factor, as if all velocities were smaller by it
    """
    theory = run.hydrodynamics["euler"]
    times, places = theory["time"].values, theory[OBSERVABLE_PLACES[name]].values
    profile = PchipInterpolator(places / times[-1], theory[name].values[-1])
    edge = float(places[-1] / times[-1])

    def field(time: Reals, x: Reals) -> Reals:
        return np.asarray(profile(np.clip(squeezed * x / (time + later), -edge, edge)))

    return field


def sampled(name: str, field: Field, times: Reals, positions: Reals) -> Columns:
    clock, place = np.meshgrid(times, positions, indexing="ij")
    return grid_columns(name, times, positions, field(clock, place))


def noisy_dataset(folder: Path, size: float, **choices: Any) -> Path:
    """A synthetic dataset with the same "chain" plus irregular noise of `size` times its claimed error."""
    pieces = synthetic_pieces(**choices)
    generator = np.random.default_rng(5)
    for name in OBSERVABLE_PLACES:
        if name in pieces["groups"]["quantum"]:
            claimed = pieces["groups"][f"budget/{name}"]["numerical"]
            pieces["groups"]["quantum"][name] += size * claimed * generator.uniform(-1, 1, claimed.shape)
    return write_run(folder, **pieces)


def read_or_refused(
    read: Callable[[], tuple[dict[str, Points], tuple[str, ...]]],
) -> tuple[dict[str, Points], InputError | None]:
    try:
        return read()[0], None
    except InputError as error:
        return {}, error


def assert_refused_plainly_or_sound(fields: dict[str, Points], refusal: InputError | None) -> None:
    """Either some finite points of known observables, or exit code 2 with short printable lines."""
    if refusal is not None:
        assert refusal.exit_code == 2
        assert all(0 < len(problem) < 400 and problem.isprintable() for problem in refusal.problems)
        return
    assert fields
    for name, points in fields.items():
        assert name in OBSERVABLES
        assert len(points) > 0
        assert points.times.shape == points.positions.shape == points.values.shape == points.error.shape
        assert all(np.all(np.isfinite(part)) for part in (points.times, points.positions, points.values))
