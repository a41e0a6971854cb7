"""Random states of all four models: doubled grids and strings move 95 % of values by less than claimed."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence

import numpy as np
import pytest

from tests.bethe_cases import rational
from tnquench.bethe import equilibrium as gapless
from tnquench.bethe import gapped, hubbard, interpolated
from tnquench.bethe import thermo as by_name
from tnquench.bethe.functions import ThermodynamicFunctions, refined_functions
from tnquench.bethe.gapped_thermal import GappedThermal, gapped_thermal
from tnquench.bethe.thermo import thermo
from tnquench.bethe.thermodynamics import KEYS

#: Angles g/pi of one string to seven.
TURNS = ((1, 2), (1, 3), (1, 4), (2, 5), (3, 7), (3, 8), (1, 6), (2, 9), (5, 12))

#: More anisotropies, with more strings, than interpolation in D takes by itself.
MORE_ANISOTROPIES, MORE_STRINGS = 14, 8

REFINED = gapped._Task.refined

Settings = dict[str, float]


def doubled(
    solve: Callable[[int], dict[str, float]],
    ladder: Sequence[int],
    size: Callable[[str, float], float],
    **options: float,
) -> ThermodynamicFunctions:
    """Like `refined_functions`, but the values are those of twice the resolution that it stops at."""
    used = []

    def noted(resolution: int) -> dict[str, float]:
        used.append(resolution)
        return solve(resolution)

    found = refined_functions(noted, ladder, size, **options)
    return ThermodynamicFunctions(solve(2 * used[-1] + used[-1] % 2), found.errors)


def doubled_gapped(task: gapped._Task, monkeypatch: pytest.MonkeyPatch) -> gapped.Values:
    """Values of a state at |D| >= 1 with twice the strings and twice the rapidities that it stops at."""
    used: list[tuple[int, int]] = []

    def noted(*, strings: int, nodes: int, **state: float) -> GappedThermal:
        used.append((strings, nodes))
        return gapped_thermal(strings=strings, nodes=nodes, **state)

    with monkeypatch.context() as patch:
        patch.setattr(gapped, "gapped_thermal", noted)
        REFINED(task)
        strings, nodes = used[-1]
        patch.setattr(gapped, "STRINGS", (2 * strings,))
        patch.setattr(gapped, "NODES", (2 * nodes,))
        return task.values(0, 0)


def finer(model: str, settings: Settings, monkeypatch: pytest.MonkeyPatch) -> ThermodynamicFunctions:
    """What `thermo` answers with grids, strings, and anisotropies to interpolate between, doubled."""
    with monkeypatch.context() as patch:
        for module in (gapless, hubbard, by_name):
            patch.setattr(module, "refined_functions", doubled)
        patch.setattr(
            gapped._Task,
            "refined",
            lambda task: (doubled_gapped(task, monkeypatch), dict.fromkeys(KEYS, 0.0), 0.0),
        )
        patch.setattr(interpolated, "MOST", MORE_ANISOTROPIES)
        patch.setattr(interpolated, "STRINGS", MORE_STRINGS)
        patch.setattr(gapless, "INTERPOLATION_TARGET", 1e-16)
        return thermo(model, **settings)


def hot_or_cold(random: np.random.Generator, *, coldest: float = 20.0) -> float:
    """An inverse temperature between 1e-3 and `coldest`, uniform in its logarithm."""
    return float(np.exp(random.uniform(np.log(1e-3), np.log(coldest))))


def xxz_states(random: np.random.Generator) -> Iterator[Settings]:
    """Rational angles, |D| > 1, |D| = 1, and one irrational angle."""
    for kind in ("rational", "gapped") * 5 + ("isotropic",) * 2 + ("irrational",):
        size = {
            "rational": abs(rational(*TURNS[int(random.integers(len(TURNS)))])),
            "gapped": 1.0 + random.uniform(0.0, 1.5) ** 2,
            "isotropic": 1.0,
            "irrational": random.uniform(0.1, 0.9),
        }[kind]
        yield {
            "anisotropy": float(random.choice([-1.0, 1.0]) * size),
            "beta": hot_or_cold(random, coldest=5.0 if kind == "irrational" else 20.0),
            "field": float(random.normal()),
        }


def ising_states(random: np.random.Generator) -> Iterator[Settings]:
    for _ in range(12):
        yield {
            "transverse_field": float(random.normal()),
            "coupling": float(random.uniform(0.5, 2.0)),
            "beta": hot_or_cold(random),
        }


def fermion_states(random: np.random.Generator) -> Iterator[Settings]:
    """Gapped V of either sign, |V| > 2 t_h; D = V/(2 t_h) = 1/2 and 0; one irrational angle."""
    for ratio in (*random.uniform(1.0, 3.0, size=4), *random.uniform(-3.0, -1.0, size=3), 0.5, 0.0, 0.7):
        yield {
            "repulsion": 2.6 * float(ratio),
            "hopping": 1.3,
            "beta": hot_or_cold(random, coldest=3.0),
            "mu": float(random.normal()),
        }


def hubbard_states(random: np.random.Generator) -> Iterator[Settings]:
    for _ in range(10):
        yield {
            "repulsion": float(
                random.choice([-1.0, 1.0]) * np.exp(random.uniform(np.log(0.7), np.log(20.0)))
            ),
            "beta": hot_or_cold(random),
            "mu": float(random.normal()),
            "field": float(random.normal()),
        }


@pytest.mark.parametrize(
    ("model", "states"),
    [
        ("xxz", xxz_states),
        ("ising", ising_states),
        ("fermion", fermion_states),
        ("hubbard", hubbard_states),
    ],
)
def test_refinement_confirms_the_claimed_errors(
    model: str,
    states: Callable[[np.random.Generator], Iterator[Settings]],
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    """Every value that `thermo` gives, pooled; and the claims are small enough to be useful."""
    ratios, claims = [], []
    for settings in states(np.random.default_rng(7)):
        found, truth = thermo(model, **settings), finer(model, settings, monkeypatch)
        ratios += [abs(found.values[key] - truth.values[key]) / found.errors[key] for key in found.values]
        claims += list(found.errors.values())
    assert len(ratios) >= 50
    assert np.mean(np.array(ratios) <= 1.0) >= 0.95
    assert np.median(claims) < 1e-10
    assert max(claims) < 1e-7
