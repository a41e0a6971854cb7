"""Orthonormal rows and gates of large bonds: every way gives what the definition asks for."""

from __future__ import annotations

import numpy as np
import pytest

from tnquench.conventions import Reals
from tnquench.evolution import gates, orthogonal
from tnquench.evolution.gates import apply_gate, real_time_gate
from tnquench.evolution.orthogonal import orthonormal, orthonormal_and_factor, orthonormal_beside
from tnquench.model.fermions import hubbard_chain
from tnquench.model.grading import Grading, derive_grading
from tnquench.model.pauli import Operator
from tnquench.model.spins import ising_chain, xxz_chain

COUNT, LENGTH = 40, 100


def rotated(seed: int = 1) -> Reals:
    random = np.random.default_rng(seed)
    return np.linalg.qr(random.standard_normal((2, LENGTH, COUNT)))[0].swapaxes(1, 2)


#: Vectors of very different lengths, nearly parallel ones, ones that depend on each other, more than fit.
VECTORS = {
    "graded": np.geomspace(1.0, 1e-12, COUNT)[:, None] * rotated(),
    "nearly parallel": rotated()[:, :1] + 1e-7 * rotated(2),
    "dependent": np.concatenate([rotated()[:, :30], rotated()[:, :10]], axis=1),
    "with zeros": np.concatenate([rotated()[:, :30], np.zeros((2, 10, LENGTH))], axis=1),
    "too many": np.random.default_rng(3).standard_normal((2, 60, 30)),
    "few": rotated()[:, :5] * np.geomspace(1.0, 1e-3, 5)[:, None],
}


@pytest.mark.parametrize("name", VECTORS)
def test_rows_are_orthonormal_and_give_the_vectors_back(name: str) -> None:
    vectors = VECTORS[name]
    basis, factor = orthonormal_and_factor(vectors.copy())
    np.testing.assert_allclose(
        basis @ basis.swapaxes(1, 2), np.eye(basis.shape[1])[None].repeat(2, 0), atol=3e-14
    )
    np.testing.assert_allclose(factor @ basis, vectors, atol=1e-14 * np.abs(vectors).max() * COUNT)
    np.testing.assert_array_equal(factor, np.tril(factor))
    alone = orthonormal(vectors.copy())
    np.testing.assert_allclose(
        alone @ alone.swapaxes(1, 2), np.eye(alone.shape[1])[None].repeat(2, 0), atol=1e-13
    )


def test_small_vectors_keep_their_directions() -> None:
    """Cholesky's method works on unit vectors: one of length 1e-12 is as accurate as one of length 1."""
    basis, factor = orthonormal_and_factor(VECTORS["graded"].copy())
    expected = np.linalg.qr(rotated().swapaxes(1, 2))[0].swapaxes(1, 2)
    signs = np.sign((basis * expected).sum(axis=2, keepdims=True))
    np.testing.assert_allclose(signs * basis, expected, atol=1e-13)
    assert np.abs(factor[:, -1, -1] / 1e-12).max() == pytest.approx(1.0, rel=1e-10)


@pytest.mark.parametrize(
    ("name", "used"), [("graded", True), ("nearly parallel", False), ("dependent", False)]
)
def test_the_gram_matrix_is_trusted_where_it_is_accurate_alone(name: str, used: bool) -> None:
    assert (orthogonal._by_cholesky(VECTORS[name].copy()) is not None) == used


def test_rows_beside_a_basis_are_orthogonal_to_it() -> None:
    basis = rotated()
    vectors = rotated()[:, :30] + 1e-6 * np.random.default_rng(5).standard_normal((2, 30, LENGTH))
    new = orthonormal_beside(basis, vectors)
    assert np.abs(new @ basis.swapaxes(1, 2)).max() < 1e-14
    np.testing.assert_allclose(new @ new.swapaxes(1, 2), np.eye(30)[None].repeat(2, 0), atol=1e-13)


def explicit(term: Operator, grading: Grading, pair: Reals) -> Reals:
    """A gate applied entry by entry: its blocks written out on (left operator, right operator)."""
    gate = real_time_gate(term, time=0.3, first=0, grading=grading)
    sectors, copies, left, _, right = pair.shape
    result = pair.copy()
    size = {"left": left // sectors, "right": right // sectors}
    for row in range(left):
        for column in range(right):
            total = (row // size["left"]) ^ (column // size["right"])
            if total not in gate.charges:
                continue
            block = gate.blocks[gate.charges.tolist().index(total)]
            # operators of the left site in the order of its charge, which is left XOR middle
            order = [(row // size["left"]) ^ charge for charge in range(sectors)]
            column_of = pair[order, :, row, :, column].reshape(-1)
            result[order, :, row, :, column] = (block @ column_of).reshape(sectors, copies, copies)
    return result


@pytest.mark.parametrize("threshold", [0, 10**9], ids=["in portions", "at once"])
@pytest.mark.parametrize("model", ["xxz", "ising", "hubbard"])
def test_gates_act_alike_on_a_tensor_and_on_its_mirror_image(
    model: str, threshold: int, monkeypatch: pytest.MonkeyPatch
) -> None:
    chains = {
        "xxz": xxz_chain(sites=4, anisotropy=0.5),
        "ising": ising_chain(sites=4, transverse_field=0.7),
        "hubbard": hubbard_chain(sites=4, repulsion=3.0),
    }
    terms = chains[model].bond_terms
    grading = derive_grading(terms, qubits_per_site=2 if model == "hubbard" else 1)
    monkeypatch.setattr(gates, "IN_PORTIONS_FROM", threshold)
    monkeypatch.setattr(gates, "PORTION", 200)
    sectors, copies = grading.sectors, grading.multiplicity
    pair = np.random.default_rng(2).standard_normal((sectors, copies, 3 * sectors, copies, 2 * sectors))
    expected = explicit(terms[0], grading, pair)
    assert np.abs(expected - pair).max() > 0.1
    gate = real_time_gate(terms[0], time=0.3, first=0, grading=grading)
    found = pair.copy()
    apply_gate(gate, found)
    np.testing.assert_allclose(found, expected, atol=1e-13)
    image = np.ascontiguousarray(pair.transpose(0, 3, 4, 1, 2))
    apply_gate(gate.mirrored, image)
    np.testing.assert_allclose(image.transpose(0, 3, 4, 1, 2), expected, atol=1e-13)
