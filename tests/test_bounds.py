"""Rigorous bounds on truncation: they hold at every point, and each step of their proof holds by itself."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.linalg import expm

from tests.budget_cases import SETTINGS, free_quench, positions_of
from tests.oracles.free_fermions import free_evolution
from tnquench.budget.assess import assess
from tnquench.budget.bounds import Arrival, layer_bound, light_cone_bound, sine_of_layers, state_numbers
from tnquench.budget.sources import truncation_bound
from tnquench.conventions import Reals, bond_positions, site_positions
from tnquench.evolution.chain_state import ChainState, distance
from tnquench.evolution.cutting import CutRule
from tnquench.evolution.gates import Gate, real_time_gate
from tnquench.evolution.layers import CutLedger, apply_layer
from tnquench.evolution.light_cone import Extents, extents_of, layer_strengths, spread_of
from tnquench.evolution.preparation import prepare
from tnquench.evolution.trotter import SCHEMES
from tnquench.model.catalogue import build_chain
from tnquench.model.chain import Chain, start_terms
from tnquench.model.extras import ExtraTerm
from tnquench.model.fermions import hubbard_chain
from tnquench.model.grading import derive_grading
from tnquench.model.pauli import dense
from tnquench.model.spins import xxz_chain
from tnquench.observables.local import LocalObservables
from tnquench.observables.quench import QuantumRecord, Quench, simulate

#: What the reference may itself lose: the same steps almost without cuts.
UNCUT = 1e-12


def quench_of(chain: Chain, *, cutting: str = "subspace", weight: float = 1e-5) -> Quench:
    """One unit of time from two temperatures, cut hard."""
    beta = np.where(bond_positions(chain.sites) < 0.0, 0.4, 1.6)
    terms = start_terms(chain, beta=beta.tolist(), potentials={})
    base = free_quench(chain.sites)
    return replace(base, chain=chain, start_terms=terms, discarded_weight=weight, samples=2, cutting=cutting)


def far_terms() -> Chain:
    """A chain of 7 sites with terms on sites i and i + 2, whose layers contain exchanges of sites."""
    extra = ExtraTerm(kind="next_nearest", strength=0.3)
    parameters = {"anisotropy": 0.5, "coupling": 1.0}
    return build_chain("xxz", sites=7, parameters=parameters, extras=(extra,), full_sites=7)[0]


CASES = {
    "D = 0.5, subspace": quench_of(xxz_chain(sites=8, anisotropy=0.5)),
    "D = 2, svd": quench_of(xxz_chain(sites=8, anisotropy=2.0), cutting="svd"),
    "D = 1, gram": quench_of(xxz_chain(sites=8, anisotropy=1.0), cutting="gram", weight=1e-4),
    "hubbard": quench_of(hubbard_chain(sites=4, repulsion=4.0), weight=1e-4),
    "next-nearest": quench_of(far_terms(), weight=1e-4),
}


def bounds_of(record: QuantumRecord, name: str) -> list[Reals]:
    """By all angles, by layers, by light cones."""
    assert record.trail is not None
    samples = len(record.times) - 1
    shape = record.fields[name].shape
    return [
        truncation_bound(angle=record.angle, norm=record.norms[name], shape=(shape[0], shape[1])),
        layer_bound(record.trail, name, samples=samples),
        light_cone_bound(record.trail, name, samples=samples),
    ]


@pytest.mark.parametrize("case", CASES)
def test_true_error_is_below_every_bound_at_every_point(case: str) -> None:
    quench = CASES[case]
    cut, uncut = simulate(quench), simulate(replace(quench, discarded_weight=UNCUT, cutting="subspace"))
    assert cut.trail is not None
    assert uncut.trail is not None
    for name, spread in ((name, extent.spread) for name, extent in cut.trail.extents.items()):
        true = np.abs(cut.fields[name] - uncut.fields[name])
        left_over = sine_of_layers(uncut.trail).sum() * spread[None, :] + 1e-12
        angles, layers, cones = bounds_of(cut, name)
        assert np.all(true <= cones + left_over), name
        assert np.all(cones <= layers + 1e-15), name
        assert np.all(layers <= angles + 1e-15), name
        assert np.all(layers[1] < angles[1] + 1e-15), name
        if name == "energy_density":
            assert true[-1].max() > 1e-3 * cones[-1].max(), "the bound is no vacuous number"


def test_bound_holds_against_free_fermions_and_is_a_multiple_tighter() -> None:
    """Twenty-four sites: the exact solution contains no cut; start and step are finer than the bound."""
    sites = 24
    quench = replace(free_quench(sites), discarded_weight=1e-7, samples=3, bond_floor=4)
    record = simulate(quench)
    exact = free_evolution(
        sites=sites,
        beta=np.where(bond_positions(sites) < 0.0, 0.5, 2.0),
        beta_field=np.where(site_positions(sites) < 0.0, 0.8, -0.3),
        times=record.times,
    )
    for name in ("energy_density", "charge_density", "energy_current"):
        angles, layers, cones = bounds_of(record, name)
        true = np.abs(record.fields[name] - exact[name])
        assert np.all(true[1:] <= cones[1:]), name
        assert layers[-1].max() < 0.7 * angles[-1].max(), name
        assert cones[1].max() < 0.97 * layers[1].max(), "early on most cuts are out of reach"


# Each step of the proof.


def prepared(sites: int) -> tuple[Quench, ChainState]:
    quench = free_quench(sites)
    grading = derive_grading((*quench.chain.bond_terms, *quench.start_terms))
    start = prepare(
        quench.start_terms, sites=sites, grading=grading, distance_target=1e-6, rule=CutRule(1e-13)
    )
    return quench, start.state


def layer_gates(quench: Quench, state: ChainState, parity: int) -> dict[int, Gate]:
    return {
        bond: real_time_gate(quench.chain.bond_terms[bond], time=0.4, first=bond, grading=state.grading)
        for bond in range(parity, quench.chain.sites - 1, 2)
    }


@pytest.mark.parametrize("method", ["svd", "gram", "subspace"])
@pytest.mark.parametrize("rightwards", [True, False])
def test_losses_of_one_sweep_are_orthogonal(method: str, rightwards: bool) -> None:
    """Cut and uncut layer stand at the angle arccos sqrt(prod (1 - w)), far below the sum of angles."""
    quench, uncut = prepared(10)
    for parity in (0, 1, 0):  # correlations first
        apply_layer(uncut, layer_gates(quench, uncut, parity), CutRule(1e-14), CutLedger.empty(10))
    if (2 * uncut.centre <= 9) != rightwards:
        apply_layer(uncut, {}, CutRule(1e-14), CutLedger.empty(10))
    cut, ledger = uncut.copy(), CutLedger.empty(10)
    apply_layer(uncut, layer_gates(quench, uncut, 1), CutRule(1e-15), CutLedger.empty(10))
    apply_layer(cut, layer_gates(quench, cut, 1), CutRule(1e-3, bond_floor=1, method=method), ledger)
    ((direction, weights),) = ledger.layers
    assert direction is rightwards
    assert np.count_nonzero(weights > 1e-6) >= 3
    sine = np.sqrt(1.0 - np.prod(1.0 - weights))
    chord = distance(uncut, cut)
    assert chord == pytest.approx(2.0 * np.sin(0.5 * np.arcsin(sine)), rel=1e-4)
    assert chord < 0.8 * ledger.angle.sum()


def test_cut_changes_what_lies_beyond_it_by_its_weight_alone() -> None:
    """A Schmidt cut of weight w turns the state by sqrt(w), yet moves observables of either side by w."""
    quench, state = prepared(10)
    for parity in (0, 1, 0, 1):
        apply_layer(state, layer_gates(quench, state, parity), CutRule(1e-14), CutLedger.empty(10))
    meter = LocalObservables(quench.chain.observables(), sites=10, grading=state.grading)
    before, _ = meter.measure(state)
    one = {4: real_time_gate({}, time=0.0, first=4, grading=state.grading)}
    ledger = CutLedger.empty(10)
    apply_layer(state, one, CutRule(1e-2, bond_floor=1, method="svd"), ledger)
    after, _ = meter.measure(state)
    weight = ledger.discarded_weight[4]
    assert 1e-6 < weight <= 1e-2
    change = np.abs(after["energy_density"] - before["energy_density"])  # spread 1 at D = 0
    assert np.all(np.delete(change, 4) <= weight)
    assert change[4] > 3.0 * weight, "the bond that straddles the cut moves more"


def test_operator_without_the_gates_of_a_bond_is_as_near_as_claimed() -> None:
    """Dense matrices: O carried back through a circuit, with and without the gates on one bond."""
    sites, layers = 7, 6
    chain = xxz_chain(sites=sites, anisotropy=0.5)
    spread, theta = spread_of(chain.bond_terms[0]), 0.23
    first = dense({((0, 3),): 0.5}, first=0, qubits=sites)  # S^z of the first site, spread 1
    without: list[NDArray[np.complex128]] = [first] * sites
    arrival = Arrival(np.array([0]), sites - 1)
    ratios = []
    for layer in range(layers):
        gates = np.zeros(sites - 1)
        gates[layer % 2 :: 2] = theta * spread
        arrival.pass_layer(gates)
        for removed in range(sites):  # `sites - 1` means that nothing is removed
            unitary = np.eye(2**sites, dtype=np.complex128)
            for bond in range(layer % 2, sites - 1, 2):
                if bond != removed:
                    matrix = dense(chain.bond_terms[bond], first=0, qubits=sites)
                    unitary = expm(-1j * theta * matrix) @ unitary
            without[removed] = unitary.conj().T @ without[removed] @ unitary
        for bond in range(sites - 1):
            true = np.linalg.norm(without[-1] - without[bond], ord=2)
            claimed = 0.5 * arrival.arrived[0, bond]
            assert true <= claimed + 1e-12, (layer, bond)
            if claimed > 1e-9:
                ratios.append(true / claimed)
    assert np.max(ratios) > 0.5, "the first arrival is known to better than a factor 2"


def test_strengths_of_a_step_add_up_to_its_fractions() -> None:
    """Each bond is acted on for the whole interval; the spread by hand at D = 0.5: 3/8 + 5/8."""
    chain = xxz_chain(sites=6, anisotropy=0.5)
    assert spread_of(chain.bond_terms[2]) == pytest.approx(1.0)
    found = layer_strengths(
        chain.bond_terms, sites=6, qubits_per_site=1, every=0.3, steps=2, scheme=SCHEMES[2]
    )
    np.testing.assert_allclose(found.sum(axis=0), 0.3)
    assert not np.any((found[:, :-1] > 0) & (found[:, 1:] > 0)), "neighbouring bonds never act together"


def test_extents_count_sites_of_two_qubits() -> None:
    found = extents_of([{((2, 3), (3, 3)): 1.0}, {}, {((5, 3),): -0.5}], qubits_per_site=2)
    assert isinstance(found, Extents)
    assert (found.first.tolist(), found.last.tolist()) == ([1, 0, 2], [1, 0, 2])
    np.testing.assert_allclose(found.spread, [2.0, 0.0, 1.0])


def test_budget_holds_the_tighter_bounds_and_the_state_its_own() -> None:
    quench = CASES["D = 0.5, subspace"]
    record = simulate(quench)
    budgets = assess(record, {}, {}, positions=positions_of(8), settings=SETTINGS)
    for name in record.fields:
        _, layers, cones = bounds_of(record, name)
        np.testing.assert_array_equal(budgets[name].tighter["layer_bound"], layers)
        np.testing.assert_array_equal(budgets[name].tighter["light_cone_bound"], cones)
    uncut = simulate(replace(quench, discarded_weight=UNCUT))
    assert record.last_state is not None
    assert uncut.last_state is not None
    apart = distance(record.last_state, uncut.last_state)
    known = state_numbers(record, apart)
    assert known["distance_to_weight_30"] == apart
    assert 0.02 * known["state_bound"] < apart <= known["state_bound"] + 1e-6
    assert not state_numbers(replace(record, trail=None), apart)
