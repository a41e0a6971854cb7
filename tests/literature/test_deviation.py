"""The verdict on real physics: how Euler hydrodynamics fails at the joint of two temperatures, and by how
much."""

from __future__ import annotations

import numpy as np
import pytest

from tnquench.dataset.reader import Run, open_run
from tnquench.run import run

CONFIG = """
title = "Two temperatures joined"
[chain]
model = "xxz"
sites = 56
anisotropy = 0.5
[start]
joint = "separate"
[start.beta]
shape = "step"
left = 0.5
right = 2.0
[evolution]
until = 10.0
every = 1.0
discarded_weight = 1e-8
time_step = 0.25
"""


@pytest.fixture(scope="module")
def two_temperatures(tmp_path_factory: pytest.TempPathFactory) -> Run:
    folder = tmp_path_factory.mktemp("two_temperatures")
    config = folder / "config.toml"
    config.write_text(CONFIG)
    return open_run(run(config, into=folder / "out", threads=2))


@pytest.mark.literature
def test_energy_at_the_joint_approaches_the_euler_value_like_one_over_time(two_temperatures: Run) -> None:
    """The halves are joined without the bond between them; its missing energy is an excess that spreads
    ballistically.

    Source: B. Bertini, M. Collura, J. De Nardis, M. Fagotti, Phys. Rev. Lett. 117, 207201 (2016), and O. A.
    Castro-Alvaredo, B. Doyon, T. Yoshimura, Phys. Rev. X 6, 041065 (2016): the ray profile is reached at
    large times; an initial excess of finite energy on a ray that carries quasiparticles then decays like 1/t.
    Size near 6e-3 J at t = 10: our own measurement, no published source.
    Regime: D = 0.5, beta 0.5 | 2, the light cone (velocities up to 1.2 J) stays inside 56 sites until t = 10.
    Tolerance: coarse, 0.15 in the power and 15 % in size, for a fit from t = 5 to 10.
    """
    assert two_temperatures.hydrodynamics["euler"].attrs["light_cone_right"] * 10.0 < 28.0
    joint = two_temperatures.budget["energy_density"].sel(bond=0.0)
    deviation = joint["euler_deviation"].sel(time=slice(5.0, 10.0))
    slope, _ = np.polyfit(np.log(deviation["time"]), np.log(np.abs(deviation)), 1)
    assert slope == pytest.approx(-1.0, abs=0.15)
    assert float(deviation.sel(time=10.0)) == pytest.approx(6e-3, rel=0.15)


@pytest.mark.literature
def test_weight_1e_8_resolves_the_deviation(two_temperatures: Run) -> None:
    """The numerical error at t = 10 is well below the deviation, which therefore counts as resolved.

    Source: common practice, no source, for the weight; the error is the run's own, checked in
    tests/test_budget.py.
    """
    joint = two_temperatures.budget["energy_density"].sel(bond=0.0, time=10.0)
    assert int(joint["euler_resolved"]) == 1
    assert float(joint["numerical"]) < 1e-3
    assert float(joint["numerical"]) < abs(float(joint["euler_deviation"])) / 3.0
    assert two_temperatures.budget["energy_density"].attrs["first_resolved_time"] <= 1.0
