"""String tables at rational angles, which angles count as rational, and thermodynamics between them."""

from __future__ import annotations

from fractions import Fraction
from math import gcd

import numpy as np
import pytest

from tests.bethe_cases import rational
from tnquench.bethe import interpolated
from tnquench.bethe.angles import (
    UnsupportedAnisotropy,
    is_rational,
    nearby_anisotropies,
    rational_turn,
    string_count,
)
from tnquench.bethe.equilibrium import KEYS, equilibrium, string_thermodynamics
from tnquench.bethe.model import xxz_model
from tnquench.bethe.strings import string_table

TURNS = [Fraction(p, q) for q in range(2, 24) for p in range(1, q // 2 + 1) if gcd(p, q) == 1]


def rows(turn: Fraction) -> list[tuple[int, int, int]]:
    table = string_table(turn)
    columns = (table.lengths.tolist(), table.parities.tolist(), table.signs.tolist())
    return list(zip(*columns, strict=True))


@pytest.mark.literature
def test_published_tables() -> None:
    """M. Takahashi and M. Suzuki, Prog. Theor. Phys. 48, 2187 (1972): one level; two levels by hand."""
    assert rows(Fraction(1, 4)) == [(1, 1, 1), (2, 1, 1), (3, 1, 1), (1, -1, -1)]
    assert rows(Fraction(2, 5)) == [(1, 1, 1), (1, -1, -1), (3, 1, -1), (2, 1, 1)]
    assert rows(Fraction(3, 7)) == [(1, 1, 1), (1, -1, -1), (3, 1, -1), (5, -1, -1), (2, 1, 1)]


@pytest.mark.literature
@pytest.mark.parametrize("turn", TURNS, ids=str)
def test_strings_are_the_normalisable_ones(turn: Fraction) -> None:
    """A bound state of n magnons of parity v exists if v sin((n - k) g) sin(k g) > 0 for all 0 < k < n.

    Sources: K. Hida, Phys. Lett. A 84, 338 (1981); M. Fowler and X. Zotos, Phys. Rev. B 24, 2634 (1981) (from
    memory). Every string of more than one magnon obeys it, and below the denominator no other length does.
    """
    p, q = turn.numerator, turn.denominator
    bound = set()
    for n in range(2, q):
        products = [np.sin(np.pi * (n - k) * p / q) * np.sin(np.pi * k * p / q) for k in range(1, n)]
        bound |= {(n, v) for v in (1, -1) if all(v * product > 1e-12 for product in products)}
    table = {(n, v) for n, v, _ in rows(turn)}
    assert {each for each in table if each[0] > 1} == bound
    assert table - bound == {(1, 1), (1, -1)}


@pytest.mark.parametrize("turn", TURNS, ids=str)
def test_total_densities_are_positive_without_particles(turn: Fraction) -> None:
    """sigma a_n > 0: the sign of a string is that of its phase space, here in the empty state."""
    table = string_table(turn)
    assert all(sign * r > 0 for sign, r in zip(table.signs.tolist(), table.residues, strict=True))
    assert table.lengths.size == string_count(turn)
    assert table.lengths[-1] + table.lengths[-2] == turn.denominator


def test_simplest_fraction_within_the_tolerance() -> None:
    assert rational_turn(0.5) == Fraction(1, 3)
    assert rational_turn(-0.5 + 5e-10) == Fraction(1, 3)
    assert rational_turn(0.0) == Fraction(1, 2)
    assert rational_turn(rational(29, 70)) == Fraction(29, 70)
    assert rational_turn(rational(3, 8, -1)) == Fraction(3, 8)
    assert not is_rational(0.3)
    assert not is_rational(0.5 + 1e-8)
    assert is_rational(rational(1, 16))
    assert not is_rational(rational(1, 17))


def test_nearby_anisotropies_are_near_and_simple() -> None:
    found = nearby_anisotropies(0.3, strings=5, count=4)
    assert found == sorted(found, key=lambda value: abs(value - 0.3))
    assert found[0] == pytest.approx(rational(2, 5))
    assert all(string_count(rational_turn(value)) <= 5 for value in found)
    around_zero = nearby_anisotropies(0.0, strings=4, count=3)
    assert sorted(around_zero) == [pytest.approx(-rational(2, 5)), 0.0, pytest.approx(rational(2, 5))]


@pytest.mark.parametrize("anisotropy", [0.3, 0.999, -0.7, 0.5001])
def test_no_strings_where_no_fraction_is_near(anisotropy: float) -> None:
    with pytest.raises(UnsupportedAnisotropy, match=r"the nearest are .* \(cos .*pi/\d+\)"):
        xxz_model(anisotropy=anisotropy)


@pytest.mark.parametrize("anisotropy", [float("nan"), np.inf])
def test_meaningless_anisotropies_are_refused(anisotropy: float) -> None:
    with pytest.raises(UnsupportedAnisotropy, match="allowed are -1 < D < 1"):
        rational_turn(anisotropy)


@pytest.mark.parametrize(("beta", "field"), [(0.5, 0.4), (3.0, 0.0)])
def test_interpolation_reproduces_strings(beta: float, field: float) -> None:
    """The polynomial through other anisotropies passes through 3 pi/7, within the error that it claims."""
    truth = string_thermodynamics(anisotropy=rational(3, 7), beta=beta, field=field, coupling=1.0, nodes=96)

    def solve(value: float) -> tuple[dict[str, float], dict[str, float]]:
        if value == 0.0:
            return string_thermodynamics(anisotropy=0.0, beta=beta, field=field, coupling=1.0, nodes=96), zero
        return string_thermodynamics(anisotropy=value, beta=beta, field=field, coupling=1.0, nodes=64), zero

    zero = dict.fromkeys(KEYS, 0.0)
    nodes = [v for v in interpolated.interpolation_nodes(rational(3, 7)) if abs(v - rational(3, 7)) > 1e-9]
    basis = interpolated.lagrange_basis(np.array(nodes), rational(3, 7))
    values = [solve(node)[0] for node in nodes]
    for key in KEYS:
        assert basis @ [each[key] for each in values] == pytest.approx(truth[key], rel=0, abs=1e-9), key


def refined(anisotropy: float, *, beta: float, field: float) -> dict[str, float]:
    """Values with many more nodes, or through other anisotropies with more strings, at J = 1.

    Eight of them: a polynomial through more of these, which lie close together, enlarges rounding.
    """
    if is_rational(anisotropy):
        return string_thermodynamics(anisotropy=anisotropy, beta=beta, field=field, coupling=1.0, nodes=200)
    nodes = nearby_anisotropies(anisotropy, strings=8, count=8)
    basis = interpolated.lagrange_basis(np.array(nodes), anisotropy)
    values = [
        string_thermodynamics(anisotropy=node, beta=beta, field=field, coupling=1.0, nodes=64)
        for node in nodes
    ]
    return {key: float(basis @ [each[key] for each in values]) for key in KEYS}


def test_refinement_confirms_the_claimed_errors() -> None:
    """Random states: finer grids and other anisotropies move 95 % of values by less than claimed."""
    source = np.random.default_rng(20)
    ratios, claims = [], []
    for index in range(18):
        if index % 3 == 0:
            anisotropy, coldest = float(source.uniform(-0.9, 0.9)), 3.0
        else:
            turn = TURNS[int(source.integers(1, 60))]
            anisotropy, coldest = (
                rational(turn.numerator, turn.denominator, int(source.choice([1, -1]))),
                20.0,
            )
        beta, field = (
            float(np.exp(source.uniform(np.log(1e-3), np.log(coldest)))),
            float(source.uniform(0.0, 2.0)),
        )
        if not (string_count_of(anisotropy) <= 8):
            continue
        found = equilibrium(anisotropy=anisotropy, beta=beta, field=field).as_dict()
        finer = refined(anisotropy, beta=beta, field=field)
        ratios += [abs(found[key] - finer[key]) / found[f"{key}_error"] for key in KEYS]
        claims += [found[f"{key}_error"] for key in KEYS]
    assert len(ratios) >= 50
    assert np.mean(np.array(ratios) <= 1.0) >= 0.95
    assert np.median(claims) < 1e-9
    assert max(claims) < 1e-6


@pytest.mark.parametrize(("sign", "beta", "field"), [(1.0, 1.0, 0.0), (1.0, 2.0, 0.5), (-1.0, 0.7, 0.0)])
def test_isotropic_points_are_limits(sign: float, beta: float, field: float) -> None:
    """Extrapolated from below, D = plus or minus 1 has the values of its own equations."""
    below = equilibrium(anisotropy=sign * (1.0 - 1e-12), beta=beta, field=field).as_dict()
    there = equilibrium(anisotropy=sign, beta=beta, field=field).as_dict()
    for key in KEYS:
        assert below[key] == pytest.approx(there[key], rel=0, abs=1e-7), key
        claim = below[f"{key}_error"] + there[f"{key}_error"]
        assert abs(below[key] - there[key]) <= 2.0 * claim + 1e-11, key


def string_count_of(anisotropy: float) -> int:
    return string_count(rational_turn(anisotropy)) if is_rational(anisotropy) else 0
