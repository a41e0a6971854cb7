"""Predictions of fermion, ising and hubbard, and what they make of extra terms."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest

from tests.assemble_cases import FOUR, predicted
from tests.oracles import exact_models
from tests.oracles.exact_quench import expectation
from tests.oracles.free_fermions import infinite_chain
from tests.oracles.free_models import ising_quench
from tnquench.assemble import build_prediction, extra_events, no_prediction, start_reach
from tnquench.config.load import read_config
from tnquench.config.notation import written
from tnquench.config.schema import Config
from tnquench.conventions import Reals, bond_positions, site_positions
from tnquench.hydro.prediction import Prediction
from tnquench.prediction_of import with_site_energy

STEP = {"shape": "step", "left": 0.3, "right": 1.1}
FIELD_STEP = {"shape": "step", "left": 0.8, "right": -0.3}
BUMP = {"shape": "bump", "base": 1.0, "height": -0.5, "width": 3.0}
FIELD_BUMP = {"shape": "bump", "base": 0.2, "height": 0.5, "width": 4.0}
UNIFORM = {"shape": "uniform", "value": 0.9}


def config_of(
    extra: Any = (), *, start: dict[str, Any], sites: int = 24, until: float = 2.0, **chain: Any
) -> Config:
    tables = {
        "chain": {"sites": sites, **chain, "extra": list(extra)},
        "start": start,
        "evolution": {"until": until, "every": until, "discarded_weight": 1e-8},
    }
    text = "".join(f"{key} = {written(table)}\n" for key, table in tables.items())
    return read_config(text, subject="test")


@pytest.mark.parametrize(("beta", "product"), [(STEP, FIELD_STEP), (BUMP, FIELD_BUMP)])
def test_fermions_are_predicted_as_the_chain_of_spins(beta: Any, product: Any) -> None:
    """J = 2 t_h, D = V/(2 t_h), and S^z in the place of n - 1/2: Jordan-Wigner."""
    spins = config_of(start={"beta": beta, "beta_field": product}, coupling=1.4, anisotropy=0.5)
    fermions = config_of(
        start={"beta": beta, "beta_mu": product}, model="fermion", hopping=0.7, repulsion=0.7
    )
    one, other = predicted(spins), predicted(fermions)
    assert one.light_cone == pytest.approx(other.light_cone, rel=1e-12)
    for name in FOUR:
        np.testing.assert_allclose(one.fields[name], other.fields[name], rtol=0, atol=1e-12)


def ising(extra: Any = (), *, start: dict[str, Any], **more: Any) -> Config:
    return config_of(extra, start=start, model="ising", **({"coupling": 1.7, "transverse_field": 1.2} | more))


def test_ising_prediction_is_that_of_the_chain() -> None:
    """A smooth profile against the exact chain, away from its ends: gradients make the difference."""
    sites, until = 64, 3.0
    config = ising(start={"beta": {**BUMP, "width": 8.0}}, sites=sites, until=until)
    prediction, inner = predicted(config), slice(16, -16)
    beta = 1.0 - 0.5 * np.exp(-0.5 * (bond_positions(sites) / 8.0) ** 2)
    exact = ising_quench(sites=sites, coupling=1.7, transverse_field=1.2, beta=beta, times=[0.0, until])
    for name in ("energy_density", "energy_current", "transverse_magnetisation"):
        expected = exact[name][:, inner]
        tolerance = 0.01 * np.abs(exact["energy_density"]).max()
        np.testing.assert_allclose(prediction.fields[name][:, inner], expected, rtol=0, atol=tolerance)
    current = exact["energy_current"]
    assert np.abs(current).max() > 0.05, "something flows"


@pytest.mark.parametrize("joint", ["coupled", "separate"])
def test_ising_halves_at_the_joint(joint: str) -> None:
    """At t = 0 each half is thermal; between them the mean of both sides, or nothing at all."""
    prediction = predicted(ising(start={"beta": STEP, "joint": joint}))
    energies = prediction.fields["energy_density"][0]
    for place, beta in ((0, 0.3), (11, 0.0 if joint == "separate" else 0.7), (22, 1.1)):
        uniform = predicted(ising(start={"beta": {"shape": "uniform", "value": beta}}))
        assert energies[place] == pytest.approx(uniform.fields["energy_density"][0, place], abs=1e-9)


def test_a_uniform_field_on_ising_shifts_the_transverse_field() -> None:
    field = [{"kind": "uniform_field", "strength": 0.4}]
    one = predicted(ising(field, start={"beta": STEP}))
    other = predicted(ising(start={"beta": STEP}, transverse_field=1.6))
    for name, values in one.fields.items():
        np.testing.assert_allclose(values, other.fields[name], rtol=0, atol=1e-12)
    later = predicted(ising([{**field[0], "in_start": False}], start={"beta": STEP}))
    parent = predicted(ising(start={"beta": STEP}))
    np.testing.assert_array_equal(later.fields["energy_density"], parent.fields["energy_density"])


def test_hubbard_stands_alone() -> None:
    config = config_of(start={"beta": STEP}, model="hubbard", repulsion=4.0, sites=8)
    assert build_prediction(config) == (None, no_prediction(config))
    assert "no hydrodynamic prediction for the Hubbard chain" in no_prediction(config)


def synthetic(sites: int) -> Prediction:
    """Arbitrary fields."""
    random = np.random.default_rng(1)
    sizes = dict(zip(FOUR, (sites - 1, sites, sites, sites - 1), strict=True))

    def table() -> dict[str, Reals]:
        return {name: random.normal(size=(1, size)) for name, size in sizes.items()}

    return Prediction(table(), table(), table(), (-1.0, 1.0), "characteristics", ())


def test_energies_of_a_charge_belong_to_bonds_as_in_the_chain() -> None:
    """Operators of the exact chain with a potential less those without: density and current of the energy."""
    potential, sites = np.array([0.3, -0.7, 0.2, 0.9, -0.4]), 5
    bare = exact_models.xxz(sites=sites, anisotropy=0.5).observables()
    full = exact_models.xxz(sites=sites, anisotropy=0.5, potential=potential).observables()
    random = np.random.default_rng(0)
    vector = random.normal(size=2**sites) + 1j * random.normal(size=2**sites)
    vector /= np.linalg.norm(vector)
    state = np.outer(vector, vector.conj())

    def fields(operators: dict[str, Any]) -> dict[str, Reals]:
        return {
            name: np.array([[expectation(state, operator) for operator in operators[name]]]) for name in FOUR
        }

    nothing = {name: np.zeros_like(values) for name, values in fields(bare).items()}
    prediction = Prediction(fields(bare), nothing, nothing, (-1.0, 1.0), "characteristics", ())
    found = with_site_energy(prediction, potential).fields
    for name, values in fields(full).items():
        np.testing.assert_allclose(found[name], values, rtol=0, atol=1e-13, err_msg=name)


def test_errors_of_the_charge_become_errors_of_the_energy() -> None:
    prediction = synthetic(6)
    found = with_site_energy(prediction, np.full(6, -2.0))
    charge = prediction.grid_error["charge_density"][0]
    added = found.grid_error["energy_density"][0] - prediction.grid_error["energy_density"][0]
    assert added[0] == pytest.approx(2.0 * charge[0] + charge[1])
    assert added[2] == pytest.approx(charge[2] + charge[3])
    np.testing.assert_array_equal(found.fields["charge_density"], prediction.fields["charge_density"])
    assert with_site_energy(prediction, np.zeros(6)) is prediction


@pytest.mark.parametrize(("model", "name"), [("xxz", "beta_field"), ("fermion", "beta_mu")])
@pytest.mark.parametrize("in_start", [True, False])
@pytest.mark.parametrize("sharp", [True, False])
def test_a_uniform_field_is_predicted_exactly(model: str, name: str, in_start: bool, sharp: bool) -> None:
    """At t = 0 and D = 0: thermal states of exp(-beta (H - h q) + b q), energies of H - h q."""
    chain: dict[str, Any] = {"anisotropy": 0.0} if model == "xxz" else {"repulsion": 0.0, "hopping": 0.5}
    beta = STEP if sharp else {**STEP, "width": 1.5}
    field = {"kind": "uniform_field", "strength": 0.6, "in_start": in_start}
    start = {"beta": beta, name: {"shape": "uniform", "value": 0.2}}
    prediction = predicted(config_of([field], start=start, model=model, **chain))
    for place, inverse in ((1, 0.3), (-2, 1.1)):
        state = infinite_chain(beta=inverse, field=0.2 / inverse + (0.6 if in_start else 0.0))
        energy = state["energy"] - 0.6 * state["magnetisation"]
        fields = {each: float(values[0, place]) for each, values in prediction.fields.items()}
        assert fields["charge_density"] == pytest.approx(state["magnetisation"], abs=1e-5)
        assert fields["energy_density"] == pytest.approx(energy, abs=1e-5)


@pytest.mark.parametrize("in_start", [True, False])
def test_a_trap_shapes_the_local_state(in_start: bool) -> None:
    """At t = 0 and D = 0: local equilibrium with V as minus the local field; energies hold V q."""
    trap = {"kind": "potential", "shape": "harmonic", "strength": 0.02, "in_start": in_start}
    start = {"beta": UNIFORM, "beta_field": FIELD_BUMP}
    prediction, x = predicted(config_of([trap], start=start, anisotropy=0.0)), site_positions(24)
    assert prediction.method == "characteristics"
    product = 0.2 + 0.5 * np.exp(-(x**2) / 32.0) - (0.9 * 0.01 * x**2 if in_start else 0.0)
    states = [infinite_chain(beta=0.9, field=each / 0.9) for each in product]
    density = np.array([state["magnetisation"] for state in states])
    np.testing.assert_allclose(prediction.fields["charge_density"][0], density, rtol=0, atol=1e-5)
    places = bond_positions(24)
    product = 0.2 + 0.5 * np.exp(-(places**2) / 32.0) - (0.9 * 0.01 * places**2 if in_start else 0.0)
    energy = np.array([infinite_chain(beta=0.9, field=each / 0.9)["energy"] for each in product])
    energy[1:-1] += 0.005 * (x[1:-2] ** 2 * density[1:-2] + x[2:-1] ** 2 * density[2:-1])
    np.testing.assert_allclose(prediction.fields["energy_density"][0, 1:-1], energy[1:-1], rtol=0, atol=1e-5)


def test_what_breaks_integrability_leaves_the_parent() -> None:
    extra = [{"kind": "staggered_field", "strength": 0.3}, {"kind": "next_nearest", "strength": 0.1}]
    start = {"beta": BUMP}
    one, other = (predicted(config_of(terms, start=start, anisotropy=0.5)) for terms in (extra, []))
    for name, values in one.fields.items():
        np.testing.assert_array_equal(values, other.fields[name])


XXZ: dict[str, Any] = {"anisotropy": 0.5}
ISING: dict[str, Any] = {"model": "ising", "transverse_field": 1.0}
SENTENCES = [
    ({"kind": "next_nearest", "strength": 0.2}, XXZ,
     "a next-nearest-neighbour coupling breaks integrability; the prediction is that of the xxz "
     "chain without it"),
    ({"kind": "staggered_field", "strength": 0.2, "in_start": False}, XXZ,
     "a staggered field, absent from the start, breaks integrability; the prediction is that of the "
     "xxz chain "
     "without it"),
    ({"kind": "uniform_field", "strength": 0.2}, XXZ,
     "a uniform field commutes with the rest of the Hamiltonian and by itself breaks nothing; the "
     "prediction contains "
     "it exactly"),
    ({"kind": "potential", "shape": "harmonic", "strength": 0.2}, XXZ,
     "a harmonic potential breaks integrability; the prediction is that of the xxz chain without "
     "it, save that it is part of the energy and of the local state at t = 0; the force on the "
     "quasiparticles is left out"),
    ({"kind": "potential", "shape": "box", "strength": 0.2, "width": 4.0}, {"anisotropy": 0.0},
     "a box potential by itself leaves a chain of free fermions, but not a uniform one; the prediction is "
     "that of the xxz chain without it"),
    ({"kind": "next_nearest", "strength": 0.2}, {"anisotropy": 0.0},
     "a next-nearest-neighbour coupling breaks integrability; the prediction is that of the xxz "
     "chain without it"),
    ({"kind": "site_disorder", "strength": 0.2}, ISING,
     "disorder on the sites by itself leaves a chain of free fermions, but not a uniform one; the "
     "prediction is that "
     "of the ising chain without it"),
    ({"kind": "longitudinal_field", "strength": 0.2}, ISING,
     "a field along x breaks integrability; the prediction is that of the ising chain without "
     "it"),
    ({"kind": "uniform_field", "strength": 0.2}, ISING,
     "a uniform field only shifts the transverse field; the prediction contains it exactly"),
    ({"kind": "uniform_field", "strength": 0.0}, XXZ,
     "a uniform field changes nothing, for its strength is zero; the prediction contains it exactly"),
    ({"kind": "bond_disorder", "strength": 0.2}, {"model": "hubbard", "repulsion": 4.0},
     "disorder of the bonds breaks integrability"),
]  # fmt: skip


@pytest.mark.parametrize(("extra", "chain", "sentence"), SENTENCES)
def test_every_extra_is_an_event_in_a_plain_sentence(extra: Any, chain: Any, sentence: str) -> None:
    events = extra_events(config_of([extra], start={"beta": BUMP}, **chain))
    assert events == [{"kind": "extra", "detail": sentence}]


@pytest.mark.parametrize(
    ("extra", "chain", "reach"),
    [
        ({"kind": "staggered_field", "strength": 0.2}, XXZ, 1.5),
        ({"kind": "staggered_field", "strength": 0.2, "in_start": False}, XXZ, np.inf),
        ({"kind": "uniform_field", "strength": 0.2, "in_start": False}, XXZ, 1.5),
        ({"kind": "uniform_field", "strength": 0.2, "in_start": False}, ISING, np.inf),
        ({"kind": "potential", "shape": "harmonic", "strength": 0.2}, XXZ, np.inf),
    ],
)
def test_an_extra_that_the_start_does_not_know_moves_the_whole_chain(
    extra: Any, chain: Any, reach: float
) -> None:
    assert start_reach(config_of([extra], start={"beta": STEP}, **chain)) == reach
