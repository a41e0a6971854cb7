"""The middle of long uniform chains, prepared by imaginary time, against the Bethe ansatz and free modes.

Neither side knows of the other: Trotter steps and cuts here, strings and integral equations there.
Error of the chain: that of its preparation, and what its two ends leave in the middle.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pytest

from tnquench.bethe.thermo import thermo
from tnquench.conventions import Reals
from tnquench.model.chain import Chain, start_terms
from tnquench.model.fermions import fermion_chain, hubbard_chain
from tnquench.model.spins import ising_chain, xxz_chain
from tnquench.observables.quench import PREPARATION_SHARE, QuantumRecord, Quench, simulate

#: From the observable of a chain to the name of its thermodynamic function.
SPINS = {"energy_density": "energy", "charge_density": "magnetisation"}
FERMIONS = {"energy_density": "energy", "charge_density": "density"}
ISING = {"energy_density": "energy", "transverse_magnetisation": "magnetisation"}
HUBBARD = {**FERMIONS, "magnetisation": "magnetisation", "double_occupancy": "double_occupancy"}

#: <n> at which the charge density is zero.
EMPTY = {"fermion": 0.5, "hubbard": 1.0}


@dataclass(frozen=True)
class Case:
    """A uniform chain and the same state in thermodynamic terms.

    potentials : h or mu by the name of the charge; settings : the rest of `thermo`
    weight : discarded weight of the run whose start this is
    sharp : the largest deviation that would still be a success of both sides
    """

    model: str
    chain: Chain
    beta: float
    potentials: dict[str, float]
    settings: dict[str, float]
    names: dict[str, str]
    weight: float = 1e-8
    sharp: float = 1e-7


def spins(anisotropy: float, *, sites: int = 24) -> Case:
    settings = {"anisotropy": anisotropy, "field": 0.4, "coupling": 1.1}
    chain = xxz_chain(sites=sites, anisotropy=anisotropy, coupling=1.1)
    return Case("xxz", chain, 1.0, {"charge_density": 0.4}, settings, SPINS)


CASES = {
    "xxz, D = 0.5": spins(0.5),
    "xxz, D = 1": spins(1.0),
    "xxz, D = 2": spins(2.0, sites=40),
    "fermion": Case(
        "fermion",
        fermion_chain(sites=24, repulsion=1.2, hopping=0.6),
        1.0,
        {"charge_density": 0.5},
        {"repulsion": 1.2, "hopping": 0.6, "mu": 0.5},
        FERMIONS,
    ),
    "ising": Case(
        "ising", ising_chain(sites=24, transverse_field=0.7), 1.0, {}, {"transverse_field": 0.7}, ISING
    ),
    "hubbard": Case(
        "hubbard",
        hubbard_chain(sites=14, repulsion=4.0),
        0.5,  # the bandwidth is four times that of xxz, and correlations fall sixtyfold a site
        {"charge_density": 0.4, "magnetisation": 0.3},
        {"repulsion": 4.0, "mu": 0.4, "field": 0.3},
        HUBBARD,
        weight=1e-6,
        sharp=2e-6,
    ),
}


def prepared(case: Case) -> QuantumRecord:
    """A run of the uniform chain that stops at its start."""
    sites = case.chain.sites
    products = {name: [case.beta * value] * sites for name, value in case.potentials.items()}
    terms = start_terms(case.chain, beta=[case.beta] * (sites - 1), potentials=products)
    return simulate(
        Quench(
            chain=case.chain,
            start_terms=terms,
            every=1.0,
            samples=0,
            steps=1,
            trotter_order=4,
            discarded_weight=case.weight,
            preparation_weight=PREPARATION_SHARE * case.weight,
            preparation_distance=0.1 * np.sqrt(case.weight),
        )
    )


def left_by_the_ends(values: Reals) -> float:
    """What both ends leave in the middle of a row of values.

    Deviations fall exponentially with the distance from an end: those a quarter of the way go on to fall as
    they did from an eighth of it, and there are two ends.
    """
    middle = values.size // 2
    eighth, quarter, nearest = values.size // 8, values.size // 4, values.size - 1 - middle
    earlier, later = (abs(values[place] - values[middle]) for place in (eighth, quarter))
    lengths = (nearest - quarter) / (quarter - eighth)
    return float(2.0 * later * min(later / earlier, 1.0) ** lengths)


@pytest.mark.parametrize("name", CASES)
def test_middle_of_a_uniform_chain_is_the_infinite_one(name: str) -> None:
    """Energy a bond, charge, magnetisation and double occupancy within both error bars.

    The chain's bar: 2 ||O|| times the distance that the preparation claims for its state (unit vectors), and
    the ends. Beyond the bars, the deviation itself must be small; chains of one qubit a site keep even the
    much narrower error that a run states for the observables of its start.
    """
    case = CASES[name]
    record = prepared(case)
    exact = thermo(case.model, beta=case.beta, **case.settings)
    for observable, function in case.names.items():
        values = record.fields[observable][0]
        expected = exact.values[function]
        if observable == "charge_density":
            expected -= EMPTY.get(case.model, 0.0)
        deviation = abs(values[values.size // 2] - expected)
        others = left_by_the_ends(values) + exact.errors[function]
        bound = 2.0 * record.norms[observable] * record.start_distance
        assert deviation <= bound + others, observable
        assert deviation <= case.sharp, observable
        if case.model != "hubbard":
            assert deviation <= record.start_error[observable] + others, observable
