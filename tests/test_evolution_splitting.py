"""Splitting a chain's terms into groups of gates, layers of gates, and Trotter schemes for several groups."""

from __future__ import annotations

import re
from math import log10

import numpy as np
import pytest
import scipy.linalg

from tnquench.evolution.gates import Gate, real_time_gate
from tnquench.evolution.splitting import Action, LayerGates, plan, split
from tnquench.evolution.trotter import SCHEMES, half_layers
from tnquench.model.grading import derive_grading
from tnquench.model.pauli import Operator, PauliString, add
from tnquench.model.spins import xxz_chain


@pytest.mark.parametrize("groups", [3, 4])
@pytest.mark.parametrize("order", [2, 4])
def test_trotter_order_for_more_groups(order: int, groups: int) -> None:
    """The same coefficients keep their order when the terms fall into three or four groups."""
    random = np.random.default_rng(8)
    parts = [0.2 * (m + m.T) for m in random.standard_normal((groups, 6, 6))]
    errors = []
    for steps in (8, 16, 32):
        layers = half_layers(SCHEMES[order], steps, groups=groups)
        assert len(layers) == steps * (len(SCHEMES[order].coefficients) - 1) * (groups - 1) + 1
        product = np.eye(6, dtype=complex)
        for group, fraction in layers:
            product = scipy.linalg.expm(-1j * fraction / steps * parts[group]) @ product
        errors.append(float(np.abs(product - scipy.linalg.expm(-1j * sum(parts))).max()))
    orders = [log10(errors[i] / errors[i + 1]) / log10(2.0) for i in range(2)]
    assert orders[-1] == pytest.approx(order, abs=0.1)


def test_composition_coefficients_fulfil_the_order_conditions() -> None:
    """chi(h) = exp(h Y1 + h^2 Y2 + h^3 Y3 + ...) has the adjoint exp(h Y1 - h^2 Y2 + h^3 Y3 - ...).

    By the Baker-Campbell-Hausdorff formula a palindrome of both is of order 4 if the factors of Y1, Y2, Y3
    and [Y1, Y2] in the exponent are 1, 0, 0, 0: four sums over the coefficients alpha, read off a middle
    group.
    """
    layers = half_layers(SCHEMES[4], 1, groups=3)
    alpha = np.array([fraction for group, fraction in layers if group == 1])
    sign = (-1.0) ** np.arange(len(alpha))
    squares = sign * alpha**2
    before = np.cumsum(alpha) - alpha
    after = np.cumsum(alpha[::-1])[::-1] - alpha
    assert len(alpha) == 10
    assert alpha == pytest.approx(alpha[::-1], abs=1e-14)
    assert alpha.sum() == pytest.approx(1.0, abs=1e-14)
    assert squares.sum() == pytest.approx(0.0, abs=1e-14)
    assert (alpha**3).sum() == pytest.approx(0.0, abs=1e-14)
    assert 0.5 * (squares * (before - after)).sum() == pytest.approx(0.0, abs=1e-14)


def test_neighbour_terms_make_two_groups_of_untouched_terms() -> None:
    bonds = [{((j, 1), (j + 1, 1)): 0.25 + j, ((j, 3),): 0.5} for j in range(5)]
    even, odd = split(bonds, sites=6)
    assert not even.swaps
    assert not odd.swaps
    assert even.terms == {0: bonds[0], 2: bonds[2], 4: bonds[4]}
    assert odd.terms == {1: bonds[1], 3: bonds[3]}
    layers = plan((even, odd), SCHEMES[4], 2)
    assert [(action.group, action.fraction) for (action,) in layers] == half_layers(SCHEMES[4], 2)


def moved(factors: PauliString, swaps: tuple[int, ...]) -> PauliString:
    """A string after the exchange of the sites of some bonds."""
    place = {site: site for site in range(20)}
    for bond in swaps:
        place[bond], place[bond + 1] = bond + 1, bond
    return tuple(sorted((place[qubit], letter) for qubit, letter in factors))


@pytest.mark.parametrize("sites", [3, 4, 5, 6, 7, 8, 9])
def test_terms_beyond_neighbours_are_all_there_once_the_swaps_are_undone(sites: int) -> None:
    """Strings handed over with any bond end up once, on separate bonds, where the exchanges bring them."""
    strings: list[PauliString] = [((site, 3),) for site in range(sites)]
    strings += [((site, 1), (site + 1, 2)) for site in range(sites - 1)]
    strings += [((site, 1), (site + 2, 3)) for site in range(sites - 2)]
    bonds: list[dict[PauliString, complex]] = [{} for _ in range(sites - 1)]
    for number, factors in enumerate(strings):
        bonds[(3 * number) % (sites - 1)][factors] = 1.0 + number
    groups = split(bonds, sites=sites)
    assert len(groups) == (3 if sites <= 4 else 4)
    back: list[dict[PauliString, complex]] = []
    for group in groups:
        assert len({bond % 2 for bond in group.terms}) == 1
        assert all(bond % 2 == 1 for bond in group.swaps)
        for bond, term in group.terms.items():
            assert all(qubit in (bond, bond + 1) for factors in term for qubit, _ in factors)
            back.append({moved(factors, group.swaps): value for factors, value in term.items()})
    assert add(*back) == pytest.approx(add(*bonds))


def test_layers_alternate_and_end_without_exchanges() -> None:
    """With terms beyond neighbours a step of order 2 takes eight sweeps: odd bonds take up exchanges."""
    bonds: list[dict[PauliString, complex]] = [{((j, 1), (j + 1, 1)): 1.0} for j in range(7)]
    bonds[2] |= {((2, 1), (4, 1)): 1.0}
    bonds[3] |= {((3, 1), (5, 1)): 1.0, ((4, 1), (6, 1)): 1.0}
    groups = split(bonds, sites=8)
    layers = plan(groups, SCHEMES[2], 3)
    assert len(layers) == 3 * 8 + 1
    assert layers[0] == layers[-1] == (Action(0, 0.5),)
    exchanged = [0] * len(groups)
    for layer in layers:
        for action in layer:
            if action.fraction is None:
                exchanged[action.group] ^= 1
            else:  # a group acts when its own exchanges are made and no others on its bonds
                assert exchanged[action.group] == (1 if groups[action.group].swaps else 0)
    assert exchanged == [0] * len(groups)


@pytest.mark.parametrize("factors", [((0, 1), (3, 1)), ((0, 1), (1, 3), (2, 1)), ((4, 1), (6, 1)), ((7, 3),)])
def test_terms_without_a_gate_are_named(factors: PauliString) -> None:
    bonds: list[dict[PauliString, complex]] = [{}, {factors: 1.0}, {}, {}, {}]
    with pytest.raises(ValueError, match=re.escape(str(factors))):
        split(bonds, sites=6)


def test_a_bond_term_is_missing() -> None:
    with pytest.raises(ValueError, match="4 bond terms for 6 sites"):
        split([{}] * 4, sites=6)


@pytest.mark.parametrize(
    ("term", "complaint"),
    [
        ({((0, 1), (1, 1)): 1.0}, "acts outside sites 2, 3"),
        ({((2, 1), (3, 1)): 1.0j}, "not Hermitian"),
        ({((2, 1), (3, 3)): 1.0}, "breaks the grading"),
    ],
)
def test_gates_refuse_wrong_terms(term: Operator, complaint: str) -> None:
    grading = derive_grading(xxz_chain(sites=4, anisotropy=0.5).bond_terms)
    with pytest.raises(ValueError, match=complaint):
        real_time_gate(term, time=0.1, first=2, grading=grading)


def test_bonds_with_the_same_term_share_a_gate() -> None:
    chain = xxz_chain(sites=9, anisotropy=0.5)
    grading = derive_grading(chain.bond_terms)
    built: list[float] = []

    def exponential(term: Operator, fraction: float) -> Gate:
        built.append(fraction)
        return real_time_gate(term, time=fraction, first=0, grading=grading)

    groups = split(chain.bond_terms, sites=9)
    gates = LayerGates(groups, grading, exponential)
    for layer in plan(groups, SCHEMES[2], 5):
        assert set(gates.of(layer)) == set(range(layer[0].group, 8, 2))
    assert built == [0.5, 1.0], "half steps of even bonds at both ends, whole steps of both parities between"
