"""From the text of a config to its prediction, for xxz; and the reasons why there is none."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
import pytest

from tests.assemble_cases import (
    BUMP,
    COUPLING,
    EVOLUTION,
    FOUR,
    SHARP_BETA,
    SHARP_FIELD,
    config_of,
    places,
    predicted,
)
from tests.oracles.free_fermions import infinite_chain, joined_halves
from tnquench.assemble import build_prediction, no_prediction
from tnquench.conventions import Reals

LATER = "until = 6.0\nevery = 1.5\ndiscarded_weight = 1e-9"


@pytest.mark.parametrize("joint", ["coupled", "separate"])
def test_step_prediction_is_that_of_free_fermions(joint: str) -> None:
    """D = 0, J = 1.7, a step in beta and one in beta h: T. Antal et al. (1999), Y. Ogata (2002), as in the
    oracle; at t = 0 the thermal states of both halves, between them that of the bond at x = 0."""
    sites, times = 32, np.array([0.0, 1.5, 3.0, 4.5, 6.0])
    config = config_of(
        beta=SHARP_BETA, beta_field=SHARP_FIELD, sites=sites, anisotropy=0.0, evolution=LATER, joint=joint
    )
    prediction = predicted(config)
    assert prediction.method.startswith("joined halves")
    assert prediction.light_cone == pytest.approx((-COUPLING, COUPLING), abs=1e-6)
    left, right = (0.3, 0.8), (1.1, -0.3)
    for name in FOUR:
        x = places(name, sites)
        inner = slice(1, -1) if name == "energy_current" else slice(None)
        for index, time in enumerate(times[1:], start=1):
            exact = joined_halves(x / time, left=left, right=right, coupling=COUPLING)[name]
            np.testing.assert_allclose(
                prediction.fields[name][index, inner], exact[inner], rtol=0, atol=1e-7, err_msg=name
            )
    start = prediction.fields["energy_density"][0]
    middle = (0.0 if joint == "separate" else 0.7, 0.25)
    for position, (beta, field) in ((0, left), (sites // 2 - 1, middle), (sites - 2, right)):
        assert start[position] == pytest.approx(energy_of(beta, field), abs=1e-7)


def energy_of(beta: float, field: float) -> float:
    """Energy a site in equilibrium at D = 0; zero where beta is."""
    if beta == 0.0:
        return 0.0
    return infinite_chain(beta=beta, field=field / beta, coupling=COUPLING)["energy"]


Profile = Callable[[Reals], Reals]


def streamed(x: Reals, time: float, *, beta: Profile, beta_field: Profile) -> dict[str, Reals]:
    """D = 0: mode k has energy J cos k, moves at -J sin k and keeps the occupation of where it began."""
    momenta = 2.0 * np.pi * (np.arange(8000) + 0.5) / 8000
    energy, velocity = COUPLING * np.cos(momenta), -COUPLING * np.sin(momenta)
    origin = x[:, None] - velocity * time
    occupied = 1.0 / (1.0 + np.exp(beta(origin) * energy - beta_field(origin)))
    return {
        "energy_density": np.mean(energy * occupied, axis=1),
        "energy_current": np.mean(velocity * energy * occupied, axis=1),
        "charge_density": np.mean(occupied - 0.5, axis=1),
        "charge_current": np.mean(velocity * occupied, axis=1),
    }


RAMP_SITES = 24
BETA_RAMP = [round(0.8 + 0.02 * (j - 11), 9) for j in range(RAMP_SITES - 1)]
FIELD_RAMP = [round(0.3 - 0.04 * (i - 11.5), 9) for i in range(RAMP_SITES)]

SMOOTH: dict[str, tuple[int, str, str, Profile, Profile]] = {
    "bumps": (
        24,
        '{shape="bump", base=1.2, height=-0.8, width=2.5}',
        '{shape="bump", base=0.2, height=0.9, width=2.0}',
        lambda x: 1.2 - 0.8 * np.exp(-(x**2) / 12.5),
        lambda x: 0.2 + 0.9 * np.exp(-(x**2) / 8.0),
    ),
    "step with a width in a uniform field": (
        24,
        '{shape="step", left=0.3, right=1.1, width=2.0}',
        '{shape="uniform", value=-0.7}',
        lambda x: 0.7 + 0.4 * np.tanh(x / 2.0),
        lambda x: np.full_like(x, -0.7),
    ),
    "wave without a field": (
        24,
        '{shape="wave", base=0.8, height=0.4, length=12.0}',
        "",
        lambda x: 0.8 + 0.4 * np.cos(2.0 * np.pi * x / 12.0),
        np.zeros_like,
    ),
    # piecewise cubics through points on a line are that line
    "tables on a line": (
        RAMP_SITES,
        f'{{shape="table", values={BETA_RAMP}}}',
        f'{{shape="table", values={FIELD_RAMP}}}',
        lambda x: 0.8 + 0.02 * x,
        lambda x: 0.3 - 0.04 * x,
    ),
}


@pytest.mark.parametrize("name", SMOOTH)
def test_smooth_prediction_is_free_streaming(name: str) -> None:
    """D = 0, J = 1.7, where no end has been felt: the integral over modes. Source: common practice, no
    source. Tolerance: the prediction's own error."""
    sites, beta, beta_field, bond_value, site_value = SMOOTH[name]
    config = config_of(
        beta=beta,
        beta_field=beta_field,
        sites=sites,
        anisotropy=0.0,
        evolution="until = 3.0\nevery = 3.0\ndiscarded_weight = 1e-9",
    )
    tolerance = 2e-4 if "tables" in name else 1e-7  # a table has kinks at the ends, where it goes on flat
    prediction = predicted(config)
    assert prediction.method == "characteristics"
    for observable in FOUR:
        x = places(observable, sites)
        inside = np.abs(x) < 0.5 * (sites - 2) - 3.0 * COUPLING
        for index, time in enumerate((0.0, 3.0)):
            exact = streamed(x[inside], time, beta=bond_value, beta_field=site_value)[observable]
            error = np.abs(prediction.fields[observable][index, inside] - exact)
            claimed = prediction.grid_error[observable][index, inside]
            assert np.all(error <= claimed + 1e-7), observable
            assert error.max() < tolerance, observable


def test_a_step_in_the_field_alone_joins_halves() -> None:
    uniform = '{shape="uniform", value=0.4}'
    prediction = predicted(config_of(beta=uniform, beta_field=SHARP_FIELD, sites=16))
    assert prediction.method.startswith("joined halves")


def test_a_table_goes_on_flat_beyond_its_ends() -> None:
    """The end sites lie half a spacing outside the bonds: beta there is that of the last bond."""
    _, beta, beta_field, _, _ = SMOOTH["tables on a line"]
    prediction = predicted(
        config_of(beta=beta, beta_field=beta_field, sites=RAMP_SITES, anisotropy=0.0, evolution=EVOLUTION)
    )
    for end in (0, -1):
        exact = infinite_chain(
            beta=BETA_RAMP[end], field=FIELD_RAMP[end] / BETA_RAMP[end], coupling=COUPLING
        )["magnetisation"]
        assert prediction.fields["charge_density"][0, end] == pytest.approx(exact, abs=1e-7)


@pytest.mark.parametrize(
    ("changes", "reason"),
    [
        ({"levels": "[]"}, "no hydrodynamic level"),
        ({"sites": 3}, "3 sites are no hydrodynamic system"),
        ({"beta_field": BUMP}, "sharp step beside a smooth profile"),
        ({"beta": BUMP, "beta_field": SHARP_FIELD}, "sharp step beside a smooth profile"),
        ({"beta_field": '{shape="step", left=0.0, right=1.0, width=2.0}'}, "sharp step beside a smooth"),
    ],
    ids=str,
)
def test_reasons_against_a_prediction(changes: dict[str, Any], reason: str) -> None:
    config = config_of(**({"beta": SHARP_BETA} | changes))
    assert reason in no_prediction(config)
    assert build_prediction(config) == (None, no_prediction(config))


@pytest.mark.parametrize(
    ("beta", "beta_field"),
    [
        (SHARP_BETA, ""),
        (SHARP_BETA, '{shape="uniform", value=0.4}'),
        ('{shape="uniform", value=0.4}', SHARP_FIELD),
        (BUMP, '{shape="step", left=0.4, right=0.4}'),
        (BUMP, BUMP),
    ],
)
def test_nothing_against_a_prediction(beta: str, beta_field: str) -> None:
    assert no_prediction(config_of(beta=beta, beta_field=beta_field)) == ""


@pytest.mark.parametrize(
    ("beta", "until", "reason"),
    [(SHARP_BETA, 4.0, "reaches the ends"), ('{shape="bump", base=1, height=1, width=0.01}', 1.0, "changes")],
)
def test_what_the_theory_refuses_is_a_reason(beta: str, until: float, reason: str) -> None:
    config = config_of(beta=beta, evolution=f"until = {until}\nevery = 1.0\ndiscarded_weight = 1e-9")
    assert no_prediction(config) == ""
    prediction, absence = build_prediction(config)
    assert prediction is None
    assert reason in absence
