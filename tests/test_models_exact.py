"""Every model against exact diagonalisation, its symmetries, and a model that the program does not know."""

from __future__ import annotations

from collections.abc import Mapping
from functools import cache

import numpy as np
import pytest

from tests.exact_cases import CASES, compare, compare_whole_quench, quench
from tests.oracles import exact_models
from tests.oracles.exact_models import ExactChain
from tests.oracles.exact_quench import exact_quench
from tnquench.conventions import Reals, bond_positions, site_positions
from tnquench.model.catalogue import build_chain
from tnquench.model.chain import Chain, start_terms
from tnquench.model.pauli import X, Y, add, string
from tnquench.model.profiles import step
from tnquench.observables.quench import QuantumRecord, simulate


@pytest.mark.parametrize("name", [name for name, case in CASES.items() if case.extra is None])
def test_short_quench_agrees_with_exact_diagonalisation(name: str) -> None:
    """Every observable to 1e-7 at discarded weight 1e-14, t up to 2."""
    compare_whole_quench(CASES[name])


@cache
def hubbard_run(*, repulsion: float, mu: float, field: float) -> QuantumRecord:
    """Four sites, two temperatures, a step of beta mu and a slope of beta h."""
    chain, _ = build_chain("hubbard", sites=4, parameters={"hopping": 1.0, "repulsion": repulsion})
    potentials = {
        "charge_density": [mu, mu, -0.5 * mu, -0.5 * mu],
        "magnetisation": [field, 0.5 * field, 0.25 * field, -field],
    }
    terms = start_terms(chain, beta=[0.3, 0.6, 1.0], potentials=potentials)
    return simulate(quench(chain, terms, weight=1e-12, samples=2, steps=5))


def test_hubbard_is_symmetric_under_particle_hole_exchange() -> None:
    """c -> (-1)^i c+ keeps H: beta mu and beta h change sign, so do charge and magnetisation; to 1e-10."""
    one = hubbard_run(repulsion=4.0, mu=0.6, field=0.8).fields
    other = hubbard_run(repulsion=4.0, mu=-0.6, field=-0.8).fields
    odd = {"charge_density", "charge_current", "magnetisation", "spin_current"}
    expected = {name: -values if name in odd else values for name, values in one.items()}
    expected["double_occupancy"] = one["double_occupancy"] - one["charge_density"]
    for name, values in expected.items():
        np.testing.assert_allclose(other[name], values, rtol=0, atol=1e-10, err_msg=name)
    assert np.abs(one["charge_current"]).max() > 1e-2


def test_hubbard_is_symmetric_under_spin_exchange() -> None:
    """Up and down change places: beta h, magnetisation and spin current change sign alone; to 1e-10."""
    one = hubbard_run(repulsion=4.0, mu=0.6, field=0.8).fields
    other = hubbard_run(repulsion=4.0, mu=0.6, field=-0.8).fields
    odd = {"magnetisation", "spin_current"}
    for name, values in one.items():
        expected = -values if name in odd else values
        np.testing.assert_allclose(other[name], expected, rtol=0, atol=1e-10, err_msg=name)
    assert np.abs(one["spin_current"]).max() > 1e-2


@pytest.mark.literature
def test_hubbard_of_the_other_sign_exchanges_charge_and_spin() -> None:
    """Particle-hole exchange of one species: U -> -U, n - 1 <-> 2 Sz; to 1e-10.

    Source: H. Shiba, Prog. Theor. Phys. 48, 2171 (1972), reference from memory. The fields' profiles belong
    to the sites, so that they are exchanged as well: equal shapes for both are needed here.
    """
    profile = [0.7, 0.4, -0.2, -0.6]

    def run(*, repulsion: float, mu: float, field: float) -> Mapping[str, Reals]:
        chain, _ = build_chain("hubbard", sites=4, parameters={"hopping": 1.0, "repulsion": repulsion})
        potentials = {
            "charge_density": [mu * value for value in profile],
            "magnetisation": [field * value for value in profile],
        }
        terms = start_terms(chain, beta=[0.3, 0.6, 1.0], potentials=potentials)
        return simulate(quench(chain, terms, weight=1e-12, samples=2, steps=5)).fields

    one, other = run(repulsion=3.0, mu=0.6, field=0.8), run(repulsion=-3.0, mu=0.4, field=1.2)
    expected = {
        "energy_density": one["energy_density"],
        "energy_current": one["energy_current"],
        "charge_density": 2.0 * one["magnetisation"],
        "charge_current": 2.0 * one["spin_current"],
        "magnetisation": 0.5 * one["charge_density"],
        "spin_current": 0.5 * one["charge_current"],
        "double_occupancy": 0.5 * (1.0 + one["charge_density"])
        + one["magnetisation"]
        - one["double_occupancy"],
    }
    assert expected.keys() == one.keys()
    for name, values in expected.items():
        np.testing.assert_allclose(other[name], values, rtol=0, atol=1e-10, err_msg=name)


def test_fermions_are_the_xxz_chain() -> None:
    """J = 2 t_h, D = V/(2 t_h): every observable of equal runs to 1e-12.

    The sign of the hopping is removed by rotating every second site, which no cut sees. What is left is
    rounding; a large weight would amplify it where a cut falls between two singular values almost equal.
    """
    sites, hopping, repulsion = 8, 0.7, 1.1
    beta = step(bond_positions(sites), left=0.4, right=1.6).tolist()
    field = step(site_positions(sites), left=0.5, right=-0.5).tolist()
    parameters = {
        "fermion": {"hopping": hopping, "repulsion": repulsion},
        "xxz": {"coupling": 2.0 * hopping, "anisotropy": repulsion / (2.0 * hopping)},
    }
    runs = {}
    for model, named in parameters.items():
        chain, _ = build_chain(model, sites=sites, parameters=named)
        terms = start_terms(chain, beta=beta, potentials={"charge_density": field})
        runs[model] = simulate(quench(chain, terms, weight=1e-22, samples=2, steps=3))
    assert runs["fermion"].fields.keys() == runs["xxz"].fields.keys()
    for name, values in runs["fermion"].fields.items():
        np.testing.assert_allclose(values, runs["xxz"].fields[name], rtol=0, atol=1e-12, err_msg=name)
    assert np.abs(runs["xxz"].fields["charge_current"]).max() > 1e-2


def anisotropic_chain(*, sites: int, coupling: float, gamma: float) -> Chain:
    """h_j = J [(1 + gamma) SxSx + (1 - gamma) SySy]: a model is its bond terms, here without any charge."""
    quarter = 0.25 * coupling
    return Chain(
        sites=sites,
        bond_terms=tuple(
            add(
                {string((j, X), (j + 1, X)): quarter * (1.0 + gamma)},
                {string((j, Y), (j + 1, Y)): quarter * (1.0 - gamma)},
            )
            for j in range(sites - 1)
        ),
    )


def test_a_model_is_one_small_function() -> None:
    """The XY chain with anisotropy, of which the program knows nothing, against exact diagonalisation."""
    sites, coupling, gamma = 8, 1.2, 0.4
    beta = step(bond_positions(sites), left=0.5, right=2.0)
    chain = anisotropic_chain(sites=sites, coupling=coupling, gamma=gamma)
    record = simulate(quench(chain, start_terms(chain, beta=beta.tolist())))
    x, y = exact_models.spins(sites, "x"), exact_models.spins(sites, "y")
    pairs = [
        coupling * ((1.0 + gamma) * x[j] @ x[j + 1] + (1.0 - gamma) * (y[j] @ y[j + 1]).real)
        for j in range(sites - 1)
    ]
    exact = exact_quench(ExactChain(sites, tuple(pairs)), beta=beta, times=record.times.tolist())
    compare(record, exact)
    assert set(record.fields) == {"energy_density", "energy_current"}
