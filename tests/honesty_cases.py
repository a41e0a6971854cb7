"""Exactly solvable runs on which the error budget is measured: what each simulates, as its config says it.

Every second case of each kind is a hold-out: the constants of the estimators were chosen without it.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from tests.config_cases import toml
from tnquench.config.load import read_config
from tnquench.config.schema import Config
from tnquench.conventions import Reals

Profile = Mapping[str, Any]


def value_of(profile: Profile, x: Reals) -> Reals:
    """A profile at positions x, from the definitions in the settings' documentation."""
    shape = profile["shape"]
    if shape == "uniform":
        return np.full(x.shape, profile["value"])
    if shape == "step":
        width = profile.get("width", 0.0)
        rise = np.tanh(x / width) if width else np.sign(x)
        return np.asarray(profile["left"] + 0.5 * (profile["right"] - profile["left"]) * (1.0 + rise))
    if shape == "bump":
        return np.asarray(profile["base"] + profile["height"] * np.exp(-0.5 * (x / profile["width"]) ** 2))
    return np.asarray(profile["base"] + profile["height"] * np.cos(2.0 * np.pi * x / profile["length"]))


@dataclass(frozen=True)
class Case:
    """One run: chain, start, evolution; `kind` groups the table.

    fields : profile of the start beside beta -> shape; extra : the one extra term of H
    start_distance : allowed norm of the start's error, where it is not the program's own choice
    """

    name: str
    kind: str
    model: str
    sites: int
    parameters: Mapping[str, float]
    beta: Profile
    weight: float
    until: float = 4.0
    every: float = 0.5
    time_step: float = 0.2
    order: int = 4
    fields: Mapping[str, Profile] = field(default_factory=dict)
    extra: Mapping[str, Any] = field(default_factory=dict)
    joint: str = "coupled"
    start_distance: float = 0.0

    def config(self) -> Config:
        """The case as the program reads it."""
        chain = {"model": self.model, "sites": self.sites, **self.parameters}
        tables = {
            "chain": chain | ({"extra": [dict(self.extra)]} if self.extra else {}),
            "start": {"joint": self.joint, "beta": dict(self.beta)}
            | {name: dict(profile) for name, profile in self.fields.items()},
            "evolution": {
                "until": self.until,
                "every": self.every,
                "discarded_weight": self.weight,
                "time_step": self.time_step,
                "trotter_order": self.order,
            },
        }
        return read_config(toml(tables), subject=self.name)

    @property
    def times(self) -> Reals:
        return self.every * np.arange(round(self.until / self.every) + 1, dtype=np.float64)


def step(left: float, right: float, width: float = 0.0) -> Profile:
    return {"shape": "step", "left": left, "right": right, "width": width}


def bump(base: float, height: float, width: float) -> Profile:
    return {"shape": "bump", "base": base, "height": height, "width": width}


def wave(base: float, height: float, length: float) -> Profile:
    return {"shape": "wave", "base": base, "height": height, "length": length}


def uniform(value: float) -> Profile:
    return {"shape": "uniform", "value": value}


def _xx(name: str, sites: int, beta: Profile, weight: float, **more: Any) -> Case:
    return Case(name, "xxz, D = 0", "xxz", sites, {"anisotropy": 0.0}, beta, weight, **more)


def _ising(name: str, sites: int, ratio: float, beta: Profile, weight: float, **more: Any) -> Case:
    chosen: dict[str, Any] = {"until": 2.0, "time_step": 0.1} | more
    return Case(name, "ising", "ising", sites, {"transverse_field": ratio}, beta, weight, **chosen)


def _fermion(name: str, sites: int, beta: Profile, weight: float, **more: Any) -> Case:
    chosen: dict[str, Any] = {"until": 1.5, "time_step": 0.1} | more
    return Case(name, "fermion, V = 0", "fermion", sites, {"repulsion": 0.0}, beta, weight, **chosen)


def _short(name: str, anisotropy: float, beta: Profile, weight: float, **more: Any) -> Case:
    chosen: dict[str, Any] = {"sites": 10} | more
    kind = "extra terms" if "extra" in more else "xxz, short"
    return Case(name, kind, "xxz", parameters={"anisotropy": anisotropy}, beta=beta, weight=weight, **chosen)


def _hubbard(name: str, repulsion: float, beta: Profile, weight: float, **more: Any) -> Case:
    chosen: dict[str, Any] = {"sites": 5, "until": 1.5, "time_step": 0.1} | more
    chosen.setdefault("fields", {"beta_mu": step(0.5, -0.3), "beta_field": step(-0.4, 0.2)})
    return Case(
        name, "hubbard", "hubbard", parameters={"repulsion": repulsion}, beta=beta, weight=weight, **chosen
    )


TWO, FIELDS = step(0.5, 2.0), {"beta_field": step(0.4, -0.4)}

CASES: tuple[Case, ...] = (
    _xx("xx step loose", 64, TWO, 1e-6),
    _xx("xx step", 64, TWO, 1e-8, until=3.0),
    _xx("xx step tight", 64, TWO, 1e-10, until=3.0),
    _xx("xx separate, order 2", 96, TWO, 1e-7, joint="separate", order=2, time_step=0.05, until=1.5),
    _xx("xx step with fields", 64, TWO, 1e-7, fields={"beta_field": step(0.6, -0.4)}, until=3.0),
    _xx("xx bump", 64, bump(1.0, -0.6, 5.0), 1e-8, until=3.0),
    _xx(
        "xx wave with wave of field",
        65,
        wave(1.0, 0.4, 16.0),
        1e-7,
        fields={"beta_field": wave(0.0, 0.5, 13.0)},
    ),
    _xx(
        "xx smooth step, bump of field",
        64,
        step(0.3, 1.2, 3.0),
        1e-9,
        fields={"beta_field": bump(0.0, 0.6, 4.0)},
        until=1.5,
    ),
    _xx("xx long chain, long steps", 128, step(0.4, 1.0), 1e-8, time_step=1.0, every=2.0),
    _xx("xx order 2, long steps", 64, TWO, 1e-9, order=2, time_step=0.25, until=2.0),
    _xx("xx step of field alone", 80, uniform(0.7), 1e-8, fields={"beta_field": step(0.8, -0.8)}, until=2.0),
    _xx("xx cold", 64, step(1.0, 5.0), 1e-8, until=2.0),
    _ising("ising ordered", 64, 0.5, step(0.2, 0.8), 1e-7),
    _ising("ising critical bump", 64, 1.0, bump(0.5, -0.3, 4.0), 1e-8, until=1.5),
    _ising("ising disordered, separate", 96, 2.0, step(0.2, 0.7), 1e-6, joint="separate"),
    _ising("ising order 2", 64, 1.0, step(0.3, 0.9), 1e-8, order=2, time_step=0.05, until=1.0),
    _ising("ising wave", 72, 0.7, wave(0.5, 0.2, 20.0), 1e-9, until=1.5),
    _ising("ising long steps", 64, 1.5, step(0.2, 0.6), 1e-10, time_step=0.25, until=1.0),
    _fermion("fermion step", 128, step(0.3, 1.0), 1e-7, fields={"beta_mu": step(0.4, -0.4)}),
    _fermion(
        "fermion staggered", 64, step(0.3, 1.0), 1e-8, extra={"kind": "staggered_field", "strength": 0.5}
    ),
    _fermion(
        "fermion in a trap",
        64,
        uniform(0.8),
        1e-7,
        fields={"beta_mu": step(0.5, -0.2)},
        extra={"kind": "potential", "shape": "harmonic", "strength": 0.004},
    ),
    _fermion("fermion order 2", 64, step(0.3, 1.2), 1e-9, order=2, time_step=0.1, until=1.5),
    _fermion("fermion bump of mu", 96, bump(0.6, 0.3, 8.0), 1e-6, fields={"beta_mu": bump(0.0, 0.8, 6.0)}),
    _fermion("fermion tight", 64, step(0.2, 0.6), 1e-10, until=1.5),
    _short("D = 0.5 loose", 0.5, step(0.3, 1.5), 1e-6, fields=FIELDS),
    _short("D = 0.5 bump", 0.5, bump(1.0, -0.6, 1.5), 1e-8),
    _short("D = 0.5 twelve sites", 0.5, step(0.3, 1.5), 1e-7, sites=12, until=3.0, every=1.0),
    _short("D = 0.5 long steps", 0.5, step(0.3, 1.5), 1e-9, fields=FIELDS, time_step=1.0, every=1.0),
    _short("D = 1", 1.0, step(0.3, 1.5), 1e-7, fields=FIELDS),
    _short("D = 1 tight", 1.0, step(0.5, 2.0), 1e-10, until=2.0),
    _short("D = 1 wave", 1.0, wave(0.8, 0.4, 7.0), 1e-8),
    _short("D = 2", 2.0, step(0.3, 1.5), 1e-8, fields=FIELDS, time_step=0.1),
    _short("D = 2 order 2", 2.0, step(0.2, 0.8), 1e-9, order=2, time_step=0.1, until=3.0),
    _short("D = -0.5", -0.5, step(0.3, 1.5), 1e-7, fields=FIELDS),
    _short("D = -1.3 separate", -1.3, step(0.3, 1.2), 1e-8, joint="separate"),
    _short("staggered field", 0.5, step(0.3, 1.5), 1e-7, extra={"kind": "staggered_field", "strength": 0.4}),
    _short(
        "next nearest",
        1.0,
        step(0.3, 1.2),
        1e-7,
        fields=FIELDS,
        extra={"kind": "next_nearest", "strength": 0.3},
    ),
    _short(
        "alternating bonds", 0.5, step(0.3, 1.2), 1e-8, extra={"kind": "bond_alternation", "strength": 0.3}
    ),
    _short(
        "harmonic trap",
        2.0,
        step(0.3, 1.0),
        1e-8,
        fields=FIELDS,
        time_step=0.1,
        until=2.0,
        extra={"kind": "potential", "shape": "harmonic", "strength": 0.1},
    ),
    Case(
        "ising longitudinal",
        "extra terms",
        "ising",
        10,
        {"transverse_field": 0.7},
        step(0.3, 1.0),
        1e-7,
        until=2.0,
        time_step=0.1,
        extra={"kind": "longitudinal_field", "strength": 0.3},
    ),
    Case(
        "ising next nearest",
        "extra terms",
        "ising",
        10,
        {"transverse_field": 0.7},
        step(0.3, 1.0),
        1e-8,
        until=1.0,
        time_step=0.1,
        extra={"kind": "next_nearest", "strength": 0.3},
    ),
    Case(
        "fermion linear potential",
        "extra terms",
        "fermion",
        10,
        {"repulsion": 0.8, "hopping": 0.5},
        step(0.3, 1.2),
        1e-7,
        fields={"beta_mu": step(0.6, -0.4)},
        extra={"kind": "potential", "shape": "linear", "strength": 0.2},
    ),
    Case(
        "fermion next nearest",
        "extra terms",
        "fermion",
        10,
        {"repulsion": 0.8, "hopping": 0.5},
        step(0.3, 1.2),
        1e-8,
        until=1.5,
        extra={"kind": "next_nearest", "strength": 0.6},
    ),
    _hubbard("hubbard loose", 4.0, step(0.2, 1.0), 1e-6),
    _hubbard("hubbard", 4.0, step(0.2, 1.0), 1e-8, every=0.25, until=0.75),
    _hubbard("hubbard attractive", -3.0, step(0.2, 0.8), 1e-7),
    _hubbard("hubbard order 2", 8.0, step(0.1, 0.5), 1e-7, order=2, time_step=0.05, until=1.0),
    _hubbard(
        "hubbard staggered field",
        2.0,
        step(0.3, 0.9),
        1e-7,
        until=1.0,
        extra={"kind": "staggered_field", "strength": 0.4},
    ),
    _hubbard("hubbard long steps", 4.0, step(0.2, 0.8), 1e-8, time_step=0.3, every=0.6, until=1.2),
    _hubbard("hubbard without interaction", 0.0, step(0.1, 0.4), 1e-6, sites=16, until=1.0),
)

HOLD_OUT = frozenset(
    case.name
    for kind in {case.kind: None for case in CASES}
    for case in [each for each in CASES if each.kind == kind][1::2]
)

#: Runs with a start so loose, and cuts so tight, that the start's error alone is left.
START_CASES: tuple[Case, ...] = (
    _short("start D = 1", 1.0, step(0.5, 3.0), 1e-10, start_distance=1e-3, until=1.0),
    _short("start D = 2", 2.0, step(0.3, 1.5), 1e-10, start_distance=1e-3, until=1.0, time_step=0.1),
    _hubbard("start hubbard", 4.0, step(0.2, 1.0), 1e-9, start_distance=1e-3, until=1.0),
    _hubbard("start hubbard attractive", -3.0, step(0.2, 0.8), 1e-8, start_distance=3e-4, until=0.5),
)
