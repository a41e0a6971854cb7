"""The engine: cuts, gates, Trotter schemes, canonical form and preparation."""

from __future__ import annotations

from math import log10

import numpy as np
import pytest
import scipy.linalg

from tests.oracles.exact_chain import exact_evolution
from tnquench.conventions import Reals, bond_positions
from tnquench.evolution import cutting
from tnquench.evolution.chain_state import ChainState, distance, infinite_temperature, move_centre
from tnquench.evolution.cutting import METHODS, CutRule, cut
from tnquench.evolution.gates import real_time_gate
from tnquench.evolution.layers import CutLedger, apply_layer
from tnquench.evolution.preparation import prepare
from tnquench.evolution.real_time import evolve, steps_between
from tnquench.evolution.trotter import SCHEMES, half_layers
from tnquench.model.chain import Chain, start_terms
from tnquench.model.grading import Grading, derive_grading
from tnquench.model.profiles import step
from tnquench.model.spins import xxz_chain
from tnquench.observables.local import LocalObservables


def decaying_blocks(rows: int, columns: int, *, seed: int = 7) -> Reals:
    """Four matrices whose singular values fall over ten decades, together of norm one."""
    random = np.random.default_rng(seed)
    blocks = []
    for decay in (0.5, 0.55, 0.6, 0.45):
        u, _ = np.linalg.qr(random.standard_normal((rows, rows)))
        v, _ = np.linalg.qr(random.standard_normal((columns, columns)))
        rank = min(rows, columns)
        blocks.append(u[:, :rank] * np.exp(-decay * np.arange(rank)) @ v[:, :rank].T)
    norm = np.sqrt(sum(float((block**2).sum()) for block in blocks))
    return np.asarray(np.array(blocks) / norm)


def guess_for(blocks: Reals, *, held: int = 10, noise: float = 1e-3) -> Reals:
    """Rows near the leading right singular vectors, as the previous step of a run would leave them."""
    random = np.random.default_rng(3)
    guess = []
    for block in blocks:
        _, _, v = np.linalg.svd(block, full_matrices=False)
        guess.append(v[:held] + noise * random.standard_normal((min(held, len(v)), block.shape[1])))
    return np.array(guess)


@pytest.mark.parametrize("shape", [(40, 40), (60, 30), (30, 60)])
@pytest.mark.parametrize("weight", [1e-6, 1e-9, 1e-11])
def test_three_cutting_methods_agree_to_rounding(shape: tuple[int, int], weight: float) -> None:
    """With a warm start that reaches below the target all three keep the same space and lose the same weight.

    Tolerance: weights near the cut are known to the rounding unit of the whole, so directions are to
    rounding/weight.
    """
    tolerance = 100.0 * np.finfo(float).eps / weight
    blocks = decaying_blocks(*shape)
    rule = {method: CutRule(weight, bond_floor=1, method=method) for method in METHODS}
    results = {
        method: cut(blocks, rule[method], guess=guess_for(blocks, held=28, noise=0.0)) for method in METHODS
    }
    reference = results["svd"]
    for method, result in results.items():
        assert [part.shape for part in result.right] == [part.shape for part in reference.right], method
        assert result.discarded_weight == pytest.approx(reference.discarded_weight, rel=tolerance)
        for ours, theirs in zip(result.left, reference.left, strict=True):
            np.testing.assert_allclose(ours.T @ ours, np.eye(ours.shape[1]), atol=1e-12)
            np.testing.assert_allclose(ours @ ours.T, theirs @ theirs.T, atol=tolerance)


@pytest.mark.parametrize("weight", [1e-6, 1e-9, 1e-11])
def test_subspace_from_a_short_warm_start_keeps_hardly_more(weight: float) -> None:
    blocks = decaying_blocks(40, 40)
    sizes = {
        method: sum(
            len(part)
            for part in cut(
                blocks, CutRule(weight, bond_floor=1, method=method), guess=guess_for(blocks)
            ).right
        )
        for method in ("svd", "subspace")
    }
    assert sizes["svd"] <= sizes["subspace"] <= sizes["svd"] + 2


@pytest.mark.parametrize("method", METHODS)
def test_discarded_weight_is_the_true_loss(method: str) -> None:
    blocks = decaying_blocks(50, 50)
    target = 1e-8
    result = cut(blocks, CutRule(target, bond_floor=1, method=method), guess=guess_for(blocks))
    scale = np.sqrt(1.0 - result.discarded_weight)
    missing = sum(
        float(((block - scale * left @ right) ** 2).sum())
        for block, left, right in zip(blocks, result.left, result.right, strict=True)
    )
    assert missing == pytest.approx(result.discarded_weight, rel=1e-6)
    assert 0.2 * target < result.discarded_weight <= target
    assert sum(float((part**2).sum()) for part in result.right) == pytest.approx(1.0, abs=1e-14)


@pytest.mark.parametrize("order", ["descending", "ascending", "mixed"])
def test_directions_left_as_they_are_cost_little_in_any_order(order: str) -> None:
    """The leading part of a warm start is not diagonalised; one in another order must not lose more."""
    blocks = decaying_blocks(80, 80)
    guess = guess_for(blocks, held=22, noise=1e-4)
    if order != "descending":
        places = np.arange(22)[::-1] if order == "ascending" else np.random.default_rng(2).permutation(22)
        guess = guess[:, places]
    result = cut(blocks, CutRule(1e-9, bond_floor=1), guess=guess)
    reference = cut(blocks, CutRule(1e-9, bond_floor=1, method="svd"))
    kept = result.right.shape[1]
    assert kept > int(0.8 * 22), "the leading part alone does not decide"
    assert reference.right.shape[1] <= kept <= reference.right.shape[1] + (1 if order == "descending" else 7)
    scale = np.sqrt(1.0 - result.discarded_weight)
    missing = float(np.square(blocks - scale * result.left @ result.right).sum())
    assert missing == pytest.approx(result.discarded_weight, rel=1e-5)
    assert missing <= 1e-9


def test_subspace_grows_from_a_guess_that_holds_nothing() -> None:
    """Warm starts may be useless after a strong gate; the measured loss must still come under the target."""
    blocks = decaying_blocks(50, 50)
    result = cut(blocks, CutRule(1e-10, bond_floor=1), guess=np.zeros((4, 0, 50)))
    reference = cut(blocks, CutRule(1e-10, bond_floor=1, method="svd"))
    assert result.discarded_weight <= 1e-10
    kept = [sum(part.shape[0] for part in each.right) for each in (result, reference)]
    assert kept[0] <= kept[1] + 2


def test_subspace_stays_orthonormal_where_blocks_hold_nothing() -> None:
    """Zero blocks and blocks of low rank leave only rounding to sample when the bond floor asks for more."""
    random = np.random.default_rng(4)
    low_rank = random.standard_normal((20, 2)) @ random.standard_normal((2, 20))
    blocks = np.zeros((4, 60, 60))
    blocks[0, :20, :20] = low_rank / np.linalg.norm(low_rank)
    blocks[2] = np.eye(60)[:, :3] @ np.eye(3, 60) * 1e-9
    blocks[3] = 1e-9 * random.standard_normal((60, 60))
    guess = np.zeros((4, 3, 60))
    guess[0], guess[2] = random.standard_normal((3, 60)), np.eye(3, 60)
    result = cut(blocks, CutRule(1e-10, bond_floor=32), guess=guess)
    assert result.right.shape == (4, 8, 60)
    for block, left, right in zip(blocks, result.left, result.right, strict=True):
        np.testing.assert_allclose(left.T @ left, np.eye(left.shape[1]), atol=1e-12)
        np.testing.assert_allclose(left @ right, block, atol=2e-8)


def test_bond_ceiling_keeps_the_largest_values_and_reports_the_loss() -> None:
    blocks = decaying_blocks(40, 40)
    values = np.linalg.svd(blocks, compute_uv=False)
    for ceiling, kept in ((10, 2), (8, 2), (3, 1)):
        result = cut(blocks, CutRule(1e-10, bond_ceiling=ceiling, bond_floor=1, method="svd"))
        assert result.right.shape == (4, kept, 40), "equally many of each charge, and one at least"
        assert result.discarded_weight == pytest.approx(float((values[:, kept:] ** 2).sum()), rel=1e-10)


def test_failed_divide_and_conquer_falls_back_and_is_counted(monkeypatch: pytest.MonkeyPatch) -> None:
    genuine = scipy.linalg.svd

    def failing(block: Reals, **options: object) -> object:
        if options.get("lapack_driver") == "gesdd":
            message = "SVD did not converge"
            raise scipy.linalg.LinAlgError(message)
        return genuine(block, **options)

    blocks = decaying_blocks(20, 20)
    expected = cut(blocks, CutRule(1e-8, bond_floor=1, method="svd"))
    monkeypatch.setattr(cutting, "svd", failing)
    result = cut(blocks, CutRule(1e-8, bond_floor=1, method="svd"))
    assert result.fallbacks == len(blocks)
    assert result.discarded_weight == pytest.approx(expected.discarded_weight, rel=1e-8)


@pytest.mark.parametrize("order", [2, 4])
def test_trotter_coefficients_are_symmetric_and_complete(order: int) -> None:
    coefficients = SCHEMES[order].coefficients
    assert coefficients == pytest.approx(coefficients[::-1], abs=1e-15)
    assert sum(coefficients[0::2]) == pytest.approx(1.0, abs=1e-14)
    assert sum(coefficients[1::2]) == pytest.approx(1.0, abs=1e-14)
    assert sum(fraction for _, fraction in half_layers(SCHEMES[order], 3)) == pytest.approx(6.0, abs=1e-13)


@pytest.mark.parametrize("order", [2, 4])
def test_trotter_order_on_dense_matrices(order: int) -> None:
    """Halving the step divides the error of exp(A + B) by 2^order, measured to a tenth of an order."""
    random = np.random.default_rng(5)
    a, b = (0.3 * (m + m.T) for m in random.standard_normal((2, 6, 6)))
    errors = []
    for steps in (8, 16, 32):
        product = np.eye(6, dtype=complex)
        for parity, fraction in half_layers(SCHEMES[order], steps):
            product = scipy.linalg.expm(-1j * fraction / steps * (a, b)[parity]) @ product
        errors.append(float(np.abs(product - scipy.linalg.expm(-1j * (a + b))).max()))
    orders = [log10(errors[i] / errors[i + 1]) / log10(2.0) for i in range(2)]
    assert orders[-1] == pytest.approx(order, abs=0.1)


def prepared(
    sites: int, *, weight: float = 1e-14, left: float = 0.5, right: float = 2.0
) -> tuple[Chain, ChainState]:
    chain = xxz_chain(sites=sites, anisotropy=0.5)
    terms = start_terms(chain, beta=step(bond_positions(sites), left=left, right=right).tolist())
    grading = derive_grading((*chain.bond_terms, *terms))
    start = prepare(terms, sites=sites, grading=grading, distance_target=1e-7, rule=CutRule(weight))
    return chain, start.state


def test_measured_trotter_order_of_the_whole_engine() -> None:
    """Errors of bond energies at L = 6, t = 1 without truncation fall by 2^order when the step is halved."""
    sites = 6
    beta = step(bond_positions(sites), left=0.5, right=2.0)
    exact = exact_evolution(sites=sites, anisotropy=0.5, beta=beta, times=[0.0, 1.0])["energy_density"][1]
    for order, coarse in ((2, 4), (4, 3)):
        errors = []
        for steps in (coarse, 2 * coarse):
            chain, state = prepared(sites, weight=1e-20)
            moments = evolve(
                state, chain.bond_terms, every=1.0, samples=1, time_step=1.0 / steps, scheme=SCHEMES[order],
                rule=CutRule(1e-20),
            )  # fmt: skip
            meter = LocalObservables(chain.observables(), sites=sites, grading=state.grading)
            values = [meter.measure(moment.state)[0]["energy_density"] for moment in moments]
            errors.append(float(np.abs(values[1] - exact).max()))
        assert log10(errors[0] / errors[1]) / log10(2.0) == pytest.approx(order, abs=0.35)


def test_layers_keep_exact_canonical_form_and_unit_norm() -> None:
    chain, state = prepared(10)
    rule, ledger = CutRule(1e-6, bond_floor=1), CutLedger.empty(10)
    for parity in (0, 1, 0):
        gates = {
            bond: real_time_gate(chain.bond_terms[bond], time=0.3, first=bond, grading=state.grading)
            for bond in range(parity, 9, 2)
        }
        apply_layer(state, gates, rule, ledger)
    assert ledger.discarded_weight.max() > 1e-8, "nothing was cut: the test says nothing"
    for site, tensor in enumerate(state.tensors):
        axes = (0, 1) if site < state.centre else (0, 2)
        gram = np.tensordot(tensor, tensor, axes=(axes, axes))
        if site != state.centre:
            # indices of different charge are orthogonal because they hold different local operators
            blocks = state.sector_slices(site + 1 if site < state.centre else site)
            for block in blocks:
                size = block.stop - block.start
                np.testing.assert_allclose(gram[block, block], np.eye(size), atol=1e-12)
    assert float(np.linalg.norm(state.tensors[state.centre])) == pytest.approx(1.0, abs=1e-12)


def test_distance_resolves_what_an_overlap_cannot() -> None:
    _, state = prepared(8)
    other = state.copy()
    move_centre(other, 4)
    assert distance(state, other) < 1e-13, "moving the centre changed the state"
    kick = np.random.default_rng(1).standard_normal(other.tensors[4].shape)
    support = other.tensors[4] != 0.0
    kick *= support
    other.tensors[4] = other.tensors[4] + 1e-10 * kick / np.linalg.norm(kick)
    assert distance(state, other) == pytest.approx(1e-10, rel=1e-3)


def test_distance_of_orthogonal_states_is_root_two() -> None:
    grading: Grading = derive_grading(xxz_chain(sites=4, anisotropy=0.5).bond_terms)
    first, second = infinite_temperature(4, grading), infinite_temperature(4, grading)
    assert distance(first, second) == pytest.approx(0.0, abs=1e-15)
    second.tensors[2] = -second.tensors[2]
    assert distance(first, second) == pytest.approx(2.0, abs=1e-14)


def test_preparation_knows_its_partition_function_and_its_error() -> None:
    sites = 8
    beta = step(bond_positions(sites), left=0.5, right=2.0)
    chain = xxz_chain(sites=sites, anisotropy=0.5)
    terms = start_terms(chain, beta=beta.tolist())
    grading = derive_grading((*chain.bond_terms, *terms))
    exact = exact_evolution(sites=sites, anisotropy=0.5, beta=beta, times=[0.0])
    tight = prepare(terms, sites=sites, grading=grading, distance_target=1e-9, rule=CutRule(1e-22))
    assert tight.log_partition_function == pytest.approx(exact["log_partition_function"], abs=1e-8)
    loose = prepare(terms, sites=sites, grading=grading, distance_target=1e-4, rule=CutRule(1e-22))
    true = distance(loose.state, tight.state)
    assert loose.steps < tight.steps
    assert true <= loose.distance <= 30.0 * true


def test_truncation_bound_covers_the_distance_of_the_states() -> None:
    """sum of arcsin sqrt(w) bounds the angle to the uncut evolution, which a run without cuts provides."""
    runs = {}
    for weight in (1e-6, 1e-24):
        chain, state = prepared(8, weight=1e-22)
        rule = CutRule(weight, bond_floor=1)
        for moment in evolve(
            state, chain.bond_terms, every=2.0, samples=1, time_step=0.25, scheme=SCHEMES[2], rule=rule
        ):
            runs[weight] = (moment.state, moment.cuts.angle.sum())
    (cut_state, angle), (full_state, _) = runs[1e-6], runs[1e-24]
    chord = distance(cut_state, full_state)
    assert 1e-4 < chord <= 2.0 * np.sin(0.5 * angle)


def test_steps_fill_the_sampling_interval() -> None:
    assert steps_between(every=0.5, time_step=0.2) == 3
    assert steps_between(every=0.6, time_step=0.2) == 3
    assert steps_between(every=0.5, time_step=2.0) == 1
