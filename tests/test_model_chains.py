"""Every model's operators: closed forms and continuity equations as operator identities."""

from __future__ import annotations

import numpy as np
import pytest

from tnquench.conventions import CURRENTS
from tnquench.model.catalogue import MODELS, build_chain
from tnquench.model.chain import Chain, start_terms
from tnquench.model.extras import ExtraTerm, disorder
from tnquench.model.grading import derive_grading
from tnquench.model.pauli import Operator, X, Y, Z, add, commutator, multiply, scale, string, support

SITES = 7
PARAMETERS: dict[str, dict[str, float]] = {
    "xxz": {"coupling": 1.3, "anisotropy": -0.7},
    "ising": {"coupling": 0.8, "transverse_field": 0.5},
    "fermion": {"hopping": 1.2, "repulsion": 0.9},
    "hubbard": {"hopping": 0.7, "repulsion": 4.0},
}
EXTRAS = (
    ExtraTerm("staggered_field", strength=0.3),
    ExtraTerm("uniform_field", strength=-0.4),
    ExtraTerm("longitudinal_field", strength=0.6),
    ExtraTerm("next_nearest", strength=0.35, anisotropy=0.2),
    ExtraTerm("bond_alternation", strength=0.25),
    ExtraTerm("bond_disorder", strength=0.5, seed=3),
    ExtraTerm("site_disorder", strength=0.7, seed=4),
    ExtraTerm("potential", strength=0.2, shape="harmonic"),
    ExtraTerm("potential", strength=0.2, shape="linear"),
    ExtraTerm("potential", strength=2.0, shape="box", width=4.0),
    ExtraTerm("potential", shape="table", values=(0.1, -0.2, 0.3, 0.5, -0.7, 1.1, 1.3)),
)
CASES = [(model, None) for model in MODELS] + [
    (model, extra) for model, entry in MODELS.items() for extra in EXTRAS if entry.has_extra(extra.kind)
]


def case_name(case: object) -> str:
    return f"{case.kind}-{case.shape}" if isinstance(case, ExtraTerm) else str(case)


def chain_of(model: str, extra: ExtraTerm | None) -> Chain:
    extras = () if extra is None else (extra,)
    return build_chain(model, sites=SITES, parameters=PARAMETERS[model], extras=extras)[0]


def size(operator: Operator) -> float:
    return max((abs(value) for value in operator.values()), default=0.0)


@pytest.mark.parametrize(("model", "extra"), CASES, ids=case_name)
def test_every_density_obeys_its_continuity_equation(model: str, extra: ExtraTerm | None) -> None:
    """dq_i/dt = i[H, q_i] = J_{i-1} - J_i and dh_j/dt = K_j - K_{j+1}, at every place of the chain."""
    chain = chain_of(model, extra)
    hamiltonian, observables = add(*chain.bond_terms), chain.observables()
    for name in ("energy_density", *chain.charges):
        currents = observables[CURRENTS[name]]
        padded = currents if name == "energy_density" else ({}, *currents, {})
        for place, density in enumerate(observables[name]):
            change = scale(commutator(hamiltonian, density), 1j)
            flow = add(padded[place], scale(padded[place + 1], -1.0))
            assert size(add(change, scale(flow, -1.0))) < 1e-14


@pytest.mark.parametrize(("model", "extra"), CASES, ids=case_name)
def test_observables_are_hermitian_and_local(model: str, extra: ExtraTerm | None) -> None:
    chain = chain_of(model, extra)
    for operators in chain.observables().values():
        for operator in operators:
            assert all(np.imag(value) == 0.0 for value in operator.values())
            for term in operator:
                first, last = support({term: 1.0})
                assert last - first < 5 * chain.qubits_per_site


def test_currents_at_the_ends_vanish() -> None:
    for model in MODELS:
        current = chain_of(model, None).observables()["energy_current"]
        assert current[0] == current[-1] == {}
        assert all(current[1:-1])


def fermions(site_of: int) -> tuple[Operator, Operator]:
    """Return c and c+ of one level, with the string of signs (-1)^n = -Z of all levels before it."""
    tail = [(qubit, Z) for qubit in range(site_of)]
    half = 0.5 * (-1.0) ** site_of
    # c = (X - iY)/2 lowers |up> (occupied) to |down>
    real, imaginary = string(*tail, (site_of, X)), string(*tail, (site_of, Y))
    return {real: half, imaginary: -1j * half}, {real: half, imaginary: 1j * half}


def test_fermion_terms_are_those_of_anticommuting_levels() -> None:
    """The bond terms, and the particle current -i t_h (c+_j c_{j+1} - h.c.)."""
    chain = chain_of("fermion", None)
    hopping, repulsion = PARAMETERS["fermion"]["hopping"], PARAMETERS["fermion"]["repulsion"]
    levels = [fermions(site) for site in range(SITES)]
    assert size(add(multiply(*levels[2]), multiply(*levels[2][::-1]), {string(): -1.0})) == 0.0
    assert add(multiply(levels[1][0], levels[3][1]), multiply(levels[3][1], levels[1][0])) == {}
    for bond in range(SITES - 1):
        (c, c_dagger), (d, d_dagger) = levels[bond], levels[bond + 1]
        hop = add(multiply(c_dagger, d), multiply(d_dagger, c))
        density = [add(multiply(b, a), {string(): -0.5}) for a, b in (levels[bond], levels[bond + 1])]
        expected = add(scale(hop, -hopping), scale(multiply(*density), repulsion))
        assert size(add(chain.bond_terms[bond], scale(expected, -1.0))) < 1e-15
        current = scale(add(multiply(c_dagger, d), scale(multiply(d_dagger, c), -1.0)), -1j * hopping)
        found = chain.observables()["charge_current"][bond]
        assert size(add(found, scale(current, -1.0))) < 1e-15


def test_hubbard_sites_hold_two_levels() -> None:
    chain = chain_of("hubbard", None)
    up, down = {string((4, Z)): 0.5, string(): 0.5}, {string((5, Z)): 0.5, string(): 0.5}
    observables = chain.observables()
    assert size(add(observables["double_occupancy"][2], scale(multiply(up, down), -1.0))) < 1e-15
    assert size(add(observables["charge_density"][2], scale(add(up, down, {string(): -1.0}), -1.0))) < 1e-15
    spin = scale(add(up, scale(down, -1.0)), 0.5)
    assert size(add(observables["magnetisation"][2], scale(spin, -1.0))) < 1e-15
    repulsion = multiply(add(up, {string(): -0.5}), add(down, {string(): -0.5}))
    assert chain.bond_terms[2][string((4, Z), (5, Z))] == pytest.approx(
        0.5 * PARAMETERS["hubbard"]["repulsion"] * repulsion[string((4, Z), (5, Z))]
    )


def test_gradings_follow_from_the_terms() -> None:
    found = {
        model: derive_grading(chain.bond_terms, qubits_per_site=chain.qubits_per_site)
        for model in MODELS
        for chain in (chain_of(model, None),)
    }
    # transverse-field Ising keeps the parity sigma^z alone; hubbard loses one of four signs to Z Z on a site
    sectors = {model: (grading.sectors, grading.multiplicity) for model, grading in found.items()}
    assert sectors == {"xxz": (4, 1), "ising": (2, 2), "fermion": (4, 1), "hubbard": (8, 2)}
    assert {model: grading.qubits_per_site for model, grading in found.items()} == {
        "xxz": 1, "ising": 1, "fermion": 1, "hubbard": 2,
    }  # fmt: skip


def test_disorder_comes_from_its_seed_alone() -> None:
    np.testing.assert_array_equal(disorder(9, 5), disorder(9, 5))
    assert not np.array_equal(disorder(9, 5), disorder(9, 6))
    assert np.abs(disorder(1000, 1)).max() <= 1.0
    assert abs(disorder(1000, 1).mean()) < 0.1


@pytest.mark.parametrize(
    "extra", [each for each in EXTRAS if each.kind != "longitudinal_field"], ids=case_name
)
def test_a_shorter_chain_is_the_middle_of_the_longer_one(extra: ExtraTerm) -> None:
    """Signs, disorder and tables belong to the sites of the longer chain; only shares at the ends differ."""
    shorter = build_chain(
        "xxz", sites=SITES - 2, parameters=PARAMETERS["xxz"], extras=[extra], full_sites=SITES
    )[0]
    whole = chain_of("xxz", extra)
    for bond in range(1, SITES - 4):
        moved = {
            tuple((qubit + 1, letter) for qubit, letter in term): value
            for term, value in shorter.bond_terms[bond].items()
        }
        assert size(add(whole.bond_terms[bond + 1], scale(moved, -1.0))) < 1e-14


def test_an_extra_may_stay_out_of_the_start() -> None:
    extra = ExtraTerm("staggered_field", strength=0.3, in_start=False)
    chain, energy = build_chain("xxz", sites=SITES, parameters=PARAMETERS["xxz"], extras=[extra])
    parent = build_chain("xxz", sites=SITES, parameters=PARAMETERS["xxz"])[0]
    assert energy == parent.bond_terms
    assert chain.bond_terms != parent.bond_terms
    (first, *_) = start_terms(chain, beta=[2.0] * (SITES - 1), energy=energy)
    assert first == scale(parent.bond_terms[0], 2.0)


def test_what_a_model_lacks_is_refused() -> None:
    for model, kind in (("hubbard", "next_nearest"), ("xxz", "longitudinal_field")):
        with pytest.raises(ValueError, match=kind):
            build_chain(model, sites=4, parameters=PARAMETERS[model], extras=[ExtraTerm(kind, strength=1.0)])
    with pytest.raises(ValueError, match="nonsense"):
        build_chain("xxz", sites=4, parameters=PARAMETERS["xxz"], extras=[ExtraTerm("nonsense")])
