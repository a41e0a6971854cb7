"""The stretch study of a config: its stretched form, and what the runs of the family say together."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np

from tnquench.budget.stretch import (
    RescaledWindow,
    StretchedField,
    StretchStudy,
    study_observable,
    time_windows,
)
from tnquench.budget.verdict import interior
from tnquench.config.schema import Config
from tnquench.config.stretch import LENGTHS, STRENGTH_POWERS, Stretch, stretched_sites
from tnquench.conventions import OBSERVABLE_PLACES, STRETCH_FINDINGS, STRETCH_NORMS, Reals
from tnquench.dataset.variables import LEVELS
from tnquench.outcome import Pieces
from tnquench.start_of import start_reach

#: Longest part of a title that a stretched run repeats.
LONGEST_TITLE = 160


def other_factors(config: Config) -> tuple[float, ...]:
    """Return the factors of a config's stretch study but 1, increasing; none without a study."""
    return tuple(sorted(factor for factor in config.stretch.factors or () if factor != 1.0))


def stretched_folder(factor: float) -> str:
    """Return the name of the folder of a stretched run, within that of the run itself."""
    return f"stretch_{factor:g}"


def stretched_config(config: Config, factor: float) -> Config:
    """Return a config whose profiles vary `factor` times as slowly, on as many times the sites and times.

    What is no length or time stays as it is: weight, step, local terms of H. The result has no study of its
    own. Tables and random terms never get here: a config with a study that has them is refused.
    """
    start, evolution = config.start, config.evolution
    profiles = {
        name: _stretched_profile(profile, factor)
        for name in ("beta", "beta_field", "beta_mu")
        if (profile := getattr(start, name)) is not None
    }
    extras = tuple(_stretched_extra(extra, factor) for extra in config.chain.extra)
    sites = stretched_sites(config.chain.sites, factor)
    return config.model_copy(
        update={
            "title": f"{config.title[:LONGEST_TITLE]}, stretched by {factor:g}",
            "chain": config.chain.model_copy(update={"sites": sites, "extra": extras}),
            "start": start.model_copy(update=profiles),
            "evolution": evolution.model_copy(
                update={"until": factor * evolution.until, "every": factor * evolution.every}
            ),
            "stretch": Stretch(),
        }
    )


def _stretched_profile(profile: Any, factor: float) -> Any:
    """Return f(x/factor) for a profile f; a sharp step has no width and stays sharp."""
    key = LENGTHS.get(profile.shape)
    return profile if key is None else profile.model_copy(update={key: factor * getattr(profile, key)})


def _stretched_extra(extra: Any, factor: float) -> Any:
    """Return the extra term with V(x/factor) for a potential V; other terms are the same everywhere."""
    if extra.kind != "potential":
        return extra
    update = {"strength": extra.strength * factor ** STRENGTH_POWERS[extra.shape]}
    if extra.shape == "box":
        update["width"] = factor * extra.width
    return extra.model_copy(update=update)


def add_study(pieces: Pieces, config: Config, family: Mapping[float, Pieces]) -> None:
    """Add the group of the stretch study to the pieces of the run itself.

    family : pieces of every run by factor, those of factor 1 among them; what a level does not predict in all
    of them is left out
    """
    ordered = dict(sorted(family.items()))
    windows = time_windows(len(pieces.coordinates["time"]))
    times = np.asarray(pieces.coordinates["time"], dtype=np.float64)
    group: dict[str, Any] = {
        "factor": np.array(list(ordered), dtype=np.float64),
        "norm": list(STRETCH_NORMS),
        "window": list(windows),
        "window_start": times[[part.start for part in windows.values()]],
        "window_end": times[[part.stop - 1 for part in windows.values()]],
        "sites": np.array([len(run.coordinates["site"]) for run in ordered.values()], dtype=np.int64),
        "wall_seconds": np.array([float(run.provenance["wall_seconds"]) for run in ordered.values()]),
    }
    for level in LEVELS:
        for name in OBSERVABLE_PLACES:
            if all(_has(run, name, level) for run in ordered.values()):
                window = _window(pieces, config, name, level)
                study = study_observable(
                    [_field(run, factor, name, level) for factor, run in ordered.items()],
                    window=window,
                    windows=windows,
                    resolve_at=config.budget.resolve_at,
                )
                group |= _rows(f"{name}_{level}", study)
    pieces.groups["stretch"] = group
    pieces.attributes["stretch"] = {"resolve_at": config.budget.resolve_at, "reach": start_reach(config)}


def _has(run: Pieces, name: str, level: str) -> bool:
    budget = run.groups.get(f"budget/{name}", {})
    return "numerical" in budget and f"{level}_deviation" in budget


def _window(pieces: Pieces, config: Config, name: str, level: str) -> RescaledWindow:
    """Return the window of the run itself for one observable."""
    theory = pieces.attributes[f"hydrodynamics/{level}"]
    positions = _positions(pieces, name)
    return RescaledWindow(
        light_cone=(float(theory["light_cone_left"]), float(theory["light_cone_right"])),
        reach=start_reach(config),
        edge=float(np.abs(positions[interior(positions)]).max()),
    )


def _positions(pieces: Pieces, name: str) -> Reals:
    return np.asarray(pieces.coordinates[OBSERVABLE_PLACES[name]], dtype=np.float64)


def _field(run: Pieces, factor: float, name: str, level: str) -> StretchedField:
    """Return one observable of one run as the study takes it."""
    budget = run.groups[f"budget/{name}"]
    return StretchedField(
        factor=factor,
        times=np.asarray(run.coordinates["time"], dtype=np.float64),
        positions=_positions(run, name),
        deviation=budget[f"{level}_deviation"],
        numerical=budget["numerical"],
    )


def _rows(prefix: str, study: StretchStudy) -> dict[str, Any]:
    """Return the study of one observable as variables of the group."""
    of = study.exponents
    return {
        f"{prefix}_deviation": study.deviation,
        f"{prefix}_numerical": study.numerical,
        f"{prefix}_window_deviation": study.window_deviation,
        f"{prefix}_window_numerical": study.window_numerical,
        f"{prefix}_exponent": np.array([[found.value for found in row] for row in of]),
        f"{prefix}_uncertainty": np.array([[found.uncertainty for found in row] for row in of]),
        f"{prefix}_numerical_uncertainty": np.array([[found.numerical for found in row] for row in of]),
        f"{prefix}_change": np.array([[found.change for found in row] for row in of]),
        f"{prefix}_used": np.moveaxis(
            np.array([[found.used for found in row] for row in of], dtype=np.int8), 2, 1
        ),
        f"{prefix}_finding": np.array(
            [[STRETCH_FINDINGS.index(found.finding) for found in row] for row in of], dtype=np.int8
        ),
    }
