"""Configs for the tests of assembly: starts as a config writes them, and the same as formulas of position."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from math import cos, exp, pi, tanh

from tests.oracles.exact_chain import exact_evolution
from tnquench.assemble import build_prediction, no_prediction
from tnquench.config.load import read_config
from tnquench.config.schema import Config
from tnquench.conventions import OBSERVABLE_PLACES, Reals, bond_positions, site_positions
from tnquench.hydro.prediction import Prediction

#: What xxz and fermion chains are measured for.
FOUR = ("energy_density", "energy_current", "charge_density", "charge_current")

COUPLING = 1.7
#: Tables without any symmetry.
BETA_TABLE = (0.3, 0.9, 0.5, 1.1, 0.7, 0.2, 0.6)
FIELD_TABLE = (0.4, -0.2, 0.7, 0.1, -0.5, 0.3, 0.9, -0.1)

EVOLUTION = "until = 0.4\nevery = 0.2\ndiscarded_weight = 1e-12\ntime_step = 0.05"


@dataclass(frozen=True)
class Case:
    """A start as a config writes it, and the same as formulas of position x (a table: of the index j)."""

    sites: int
    beta: str
    beta_field: str
    bond_value: Callable[[float], float]
    site_value: Callable[[float], float]
    joint: str = "coupled"


def by_index(values: tuple[float, ...], *, of: int) -> Callable[[float], float]:
    """The value whose place lies at x, in a row of values centred at 0."""
    return lambda x: values[round(x + 0.5 * (of - 1))]


def jump(x: float, left: float, right: float) -> float:
    return left if x < 0 else right if x > 0 else 0.5 * (left + right)


SHARP_BETA, SHARP_FIELD = '{shape="step", left=0.3, right=1.1}', '{shape="step", left=0.8, right=-0.3}'

CASES = {
    "sharp, bond at the joint": Case(
        8, SHARP_BETA, SHARP_FIELD, lambda x: jump(x, 0.3, 1.1), lambda x: jump(x, 0.8, -0.3)
    ),
    "sharp, site at the joint": Case(
        7, SHARP_BETA, SHARP_FIELD, lambda x: jump(x, 0.3, 1.1), lambda x: jump(x, 0.8, -0.3)
    ),
    "separate": Case(
        8,
        SHARP_BETA,
        SHARP_FIELD,
        lambda x: 0.0 if x == 0 else jump(x, 0.3, 1.1),
        lambda x: jump(x, 0.8, -0.3),
        joint="separate",
    ),
    "step with a width": Case(
        8,
        '{shape="step", left=1.2, right=0.4, width=1.5}',
        '{shape="step", left=-0.5, right=0.7, width=2.5}',
        lambda x: 0.8 - 0.4 * tanh(x / 1.5),
        lambda x: 0.1 + 0.6 * tanh(x / 2.5),
    ),
    "bump over a wave": Case(
        7,
        '{shape="bump", base=1.0, height=-0.7, width=1.3}',
        '{shape="wave", base=0.3, height=0.6, length=5.0}',
        lambda x: 1.0 - 0.7 * exp(-x * x / 3.38),
        lambda x: 0.3 + 0.6 * cos(2 * pi * x / 5.0),
    ),
    "wave, uniform field": Case(
        8,
        '{shape="wave", base=0.8, height=0.5, length=7.0}',
        '{shape="uniform", value=0.6}',
        lambda x: 0.8 + 0.5 * cos(2 * pi * x / 7.0),
        lambda _: 0.6,
    ),
    "tables": Case(
        8,
        f'{{shape="table", values={list(BETA_TABLE)}}}',
        f'{{shape="table", values={list(FIELD_TABLE)}}}',
        by_index(BETA_TABLE, of=7),
        by_index(FIELD_TABLE, of=8),
    ),
    "uniform, no field": Case(7, '{shape="uniform", value=0.9}', "", lambda _: 0.9, lambda _: 0.0),
}


def config_of(
    *,
    beta: str,
    beta_field: str = "",
    sites: int = 8,
    anisotropy: float = 0.5,
    evolution: str = EVOLUTION,
    joint: str = "coupled",
    levels: str = '["euler"]',
) -> Config:
    return read_config(
        text_of(
            beta=beta,
            beta_field=beta_field,
            sites=sites,
            anisotropy=anisotropy,
            evolution=evolution,
            joint=joint,
            levels=levels,
        ),
        subject="test",
    )


def text_of(
    *, beta: str, beta_field: str, sites: int, anisotropy: float, evolution: str, joint: str, levels: str
) -> str:
    field = f"beta_field = {beta_field}" if beta_field else ""
    return f"""
[chain]
sites = {sites}
coupling = {COUPLING}
anisotropy = {anisotropy}
[start]
joint = "{joint}"
beta = {beta}
{field}
[evolution]
{evolution}
[hydrodynamics]
levels = {levels}
"""


def case_config(case: Case, *, evolution: str = EVOLUTION) -> Config:
    return config_of(
        beta=case.beta, beta_field=case.beta_field, sites=case.sites, evolution=evolution, joint=case.joint
    )


def exact_of(case: Case, times: Reals) -> dict[str, Reals]:
    return exact_evolution(
        sites=case.sites,
        anisotropy=0.5,
        coupling=COUPLING,
        beta=[case.bond_value(j + 0.5 - 0.5 * (case.sites - 1)) for j in range(case.sites - 1)],
        beta_field=[case.site_value(i - 0.5 * (case.sites - 1)) for i in range(case.sites)],
        times=times,
    )


def predicted(config: Config) -> Prediction:
    assert no_prediction(config) == ""
    prediction, absence = build_prediction(config)
    assert prediction is not None, absence
    return prediction


def places(name: str, sites: int) -> Reals:
    return site_positions(sites) if OBSERVABLE_PLACES[name] == "site" else bond_positions(sites)


BUMP = '{shape="bump", base=1.0, height=-0.5, width=2.0}'
