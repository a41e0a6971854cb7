"""The exponent of Euler hydrodynamics where the chain is solved exactly: free modes, corrections of second
order (M. Fagotti, Phys. Rev. B 96, 220302, 2017)."""

from __future__ import annotations

import numpy as np
import pytest

from tests.oracles.free_fermions import free_evolution
from tests.oracles.free_models import ising_quench
from tnquench.assemble import build_prediction, sample_times
from tnquench.budget.stretch import RescaledWindow, StretchedField, study_observable, time_windows
from tnquench.budget.verdict import interior
from tnquench.config.load import read_config
from tnquench.conventions import OBSERVABLE_PLACES, bond_positions, site_positions
from tnquench.start_of import start_profiles, start_reach
from tnquench.stretch_of import stretched_config

FACTORS = (1.0, 2.0, 4.0)

BUMP = """
[chain]
{chain}
sites = {sites}
[start.beta]
shape = "bump"
base = {base}
height = -0.2
width = {width}
[evolution]
until = {until}
every = {every}
discarded_weight = 1e-9
[stretch]
factors = [1, 2, 4]
"""


def exact_free(config, beta):
    return free_evolution(sites=config.chain.sites, beta=beta, times=sample_times(config))


def exact_ising(config, beta):
    field = config.chain.transverse_field
    times = sample_times(config).tolist()
    return ising_quench(sites=config.chain.sites, transverse_field=field, beta=beta, times=times)


@pytest.mark.parametrize(
    ("chain", "numbers", "exact"),
    [
        (
            'model = "xxz"\nanisotropy = 0.0',
            {"sites": 24, "base": 1.0, "width": 2.0, "until": 2.0},
            exact_free,
        ),
        (
            'model = "ising"\ntransverse_field = 1.5',
            {"sites": 40, "base": 0.4, "width": 4.0, "until": 2.0},
            exact_ising,
        ),
    ],
    ids=["xxz", "ising"],
)
def test_free_modes_have_corrections_of_second_order(chain, numbers, exact):
    text = BUMP.format(chain=chain, every=numbers["until"] / 6, **numbers)
    config = read_config(text, subject="bump")
    fields: dict[str, list[StretchedField]] = {"energy_density": [], "energy_current": []}
    light_cone = (0.0, 0.0)
    for factor in FACTORS:
        stretched = stretched_config(config, factor)
        prediction, absence = build_prediction(stretched)
        assert prediction is not None, absence
        beta, _ = start_profiles(stretched, sites=stretched.chain.sites)
        light_cone = prediction.light_cone
        quantum = exact(stretched, beta)
        for name, family in fields.items():
            numerical = prediction.grid_error[name] + prediction.strings_error[name] + 1e-12
            deviation = quantum[name] - prediction.fields[name]
            place = positions(name, stretched.chain.sites)
            family.append(StretchedField(factor, sample_times(stretched), place, deviation, numerical))
    for name, family in fields.items():
        place = positions(name, config.chain.sites)
        edge = float(np.abs(place[interior(place)]).max())
        window = RescaledWindow(light_cone, start_reach(config), edge)
        study = study_observable(family, window=window, windows=time_windows(7), resolve_at=3)
        for found in np.ravel(np.array(study.exponents, dtype=object)):
            assert abs(found.value - 2.0) <= found.uncertainty
            assert abs(found.value - 2.0) < 0.12
            assert found.finding == "second_order"


def positions(name, sites):
    return {"bond": bond_positions, "site": site_positions}[OBSERVABLE_PLACES[name]](sites)
