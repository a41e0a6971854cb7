"""The benchmark of speed: operations are counted right, watching changes nothing, and every row runs."""

from __future__ import annotations

import time
from collections.abc import Callable, Iterator

import numpy as np
import pytest

from tests.benchmarks import speed, speed_memory, speed_single
from tests.benchmarks.speed_cases import Line, cores_gain, matmul_peak, two_fields
from tests.benchmarks.speed_error import error_lines
from tests.benchmarks.speed_flops import basis_flops, gate_flops, product_flops, watching
from tests.benchmarks.speed_layers import grown, step_of
from tests.benchmarks.speed_quimb import quimb_lines
from tests.benchmarks.speed_reach import reach_lines
from tests.benchmarks.speed_single import large_lines, profile_lines, small_lines, thread_lines
from tnquench.conventions import Reals
from tnquench.evolution import cutting, layers
from tnquench.evolution.chain_state import move_centre
from tnquench.evolution.gates import apply_gate
from tnquench.observables.quench import Quench

#: The bond dimension that a short chain reaches at once.
TINY = 12
BONDS, SITES, WEIGHT = (TINY,), 8, 1e-8


def cholesky_orthonormalisation(count: int, length: int) -> int:
    """Additions, multiplications, divisions and roots of the textbook's loops, one by one."""
    operations = 0
    for row in range(count):
        for _ in range(row + 1):
            operations += 2 * length - 1  # an entry of the Gram matrix
    for column in range(count):
        operations += 2 * column + 1  # the root on the diagonal
        for _ in range(column + 1, count):
            operations += 2 * column + 1  # an entry below it
    for row in range(count):
        operations += length * (2 * row + 1)  # a solved vector, entry by entry
    return operations


@pytest.mark.parametrize(("count", "length"), [(120, 300), (150, 150), (200, 150)])
def test_orthonormalisation_takes_what_its_loops_take(count: int, length: int) -> None:
    found = basis_flops(np.empty((3, count, length)))
    assert found == pytest.approx(3 * cholesky_orthonormalisation(min(count, length), length), rel=0.01)


def test_product_with_its_own_transpose_counts_by_half() -> None:
    first, second = np.ones((2, 5, 7)), np.ones((2, 7, 5))
    assert product_flops(first, second) == 2 * 2 * 5 * 7 * 5
    assert product_flops(first, first.swapaxes(1, 2)) == 2 * 5 * 7 * 5
    part = first[:, 2:]
    assert product_flops(part, part.swapaxes(1, 2)) == 2 * 3 * 7 * 3
    assert product_flops(part, first.swapaxes(1, 2)) == 2 * 2 * 3 * 7 * 5


def test_peak_is_a_rate_of_this_machine() -> None:
    assert 1e8 < matmul_peak(sizes=(64, 128), repetitions=2) < 1e13
    assert 0.0 < cores_gain(size=64, products=8) < 10.0


def low_rank(rank: int, *, charges: int, rows: int, columns: int) -> tuple[Reals, Reals]:
    """Blocks of a rank with equal singular values, and their right singular vectors in rows."""
    random = np.random.default_rng(1)
    left, right = (np.linalg.qr(random.standard_normal((charges, size, rank)))[0] for size in (rows, columns))
    return left @ right.swapaxes(1, 2), right.swapaxes(1, 2)


def test_a_cut_counts_by_the_formula() -> None:
    """A warm start that holds everything: one portion, and the rank is kept."""
    charges, m, n, held = 3, 80, 90, 20
    blocks, guess = low_rank(held, charges=charges, rows=m, columns=n)
    p = held + max(cutting.EXTRA_DIRECTIONS, int(cutting.EXTRA_FRACTION * held))
    s = p - int(cutting.LEADING_FRACTION * held)
    with watching() as count:
        result = cutting.cut(blocks, cutting.CutRule(1e-10, bond_floor=1), guess=guess)
    kept = result.right.shape[1]
    assert kept == held
    assert count.flops["sample"] == count.flops["image"] == charges * 2 * m * n * p
    assert count.flops["QR"] == pytest.approx(charges * (2 * m * p**2 + p**3 / 3))
    assert count.flops["eigenproblem"] == pytest.approx(charges * (s**2 * n + 14 / 3 * s**3))
    assert count.flops["rotation"] == charges * 2 * (m + n) * s * (kept - p + s)
    assert count.flops["more"] == 0.0


def test_a_portion_more_is_counted_and_its_second_passes_are_not() -> None:
    charges, m, n, held, known = 2, 120, 130, 40, 20
    blocks, guess = low_rank(held, charges=charges, rows=m, columns=n)
    extra = max(cutting.EXTRA_DIRECTIONS, int(cutting.EXTRA_FRACTION * known))
    with watching() as count:
        cutting.cut(blocks, cutting.CutRule(1e-10, bond_floor=1), guess=guess[:, :known])
    expected, found, x = 0.0, known + extra, extra
    while found < held:
        expected += 2 * m * n * x + 2 * found * x * (m + n) + 2 * m * x**2 + x**3 / 3
        found, x = found + x, 2 * x
    assert expected > 0.0
    assert count.flops["more"] == pytest.approx(charges * expected)


def test_a_layer_is_counted_whole_and_watching_changes_nothing() -> None:
    sample = grown(BONDS, SITES, WEIGHT)[TINY]
    _, _, plain = sample.run()
    began = time.process_time()
    with watching() as count:
        _, _, watched = sample.run()
    spent = time.process_time() - began
    assert all(np.array_equal(a, b) for a, b in zip(plain.tensors, watched.tensors, strict=True))
    assert all(count.flops[part] > 0.0 for part in ("pair", "gate", "eigenproblem", "rotation", "move"))
    assert 0.3 * spent < count.total_seconds <= spent
    assert vars(layers)["apply_gate"] is apply_gate, "everything is unwrapped again"


def test_joining_and_gating_count_by_the_formula() -> None:
    """One gate in the middle: bonds b around, all charges alike."""
    sample = grown(BONDS, SITES, WEIGHT)[TINY]
    state, gate = sample.state.copy(), sample.gates[1][4]
    for end in (SITES - 1, 0):  # no bond is larger than what its sides hold
        move_centre(state, end)
    left, inner, right = (int(state.bonds[bond].sum()) for bond in (4, 5, 6))
    with watching() as count:
        layers.apply_layer(state, {4: gate}, cutting.CutRule(WEIGHT), layers.CutLedger.empty(SITES))
    sectors = state.grading.sectors
    assert count.flops["pair"] == 2.0 * left * inner * right
    nonzero = np.count_nonzero(gate.blocks)
    assert count.flops["gate"] == 2.0 * nonzero * left * right / sectors
    pair = np.empty((sectors, 1, left, 1, right))
    assert gate_flops(gate, pair) == count.flops["gate"]


ROWS: dict[str, Callable[[], Iterator[Line]]] = {
    "quimb": lambda: quimb_lines(sites=6, until=1),
    "error": lambda: error_lines(sites=6, until=1, targets=(1e-2, 1e-3)),
    "small": lambda: small_lines(sites=8, steps=2),
    "large": lambda: large_lines(TINY, BONDS, SITES, WEIGHT),
    "threads": lambda: thread_lines(BONDS, BONDS, SITES, WEIGHT),
    "memory": lambda: speed_memory.memory_lines(sites=8, until=0.5, weight=1e-6),
    "reach": lambda: reach_lines(sites=8, until=1, weight=1e-6),
    "profile": lambda: profile_lines(BONDS, BONDS, SITES, WEIGHT),
}


def here(measure: str, sites: int, until: float, weight: float) -> dict[str, float]:
    """What a process of its own would measure."""
    quench: Quench = speed_memory.quench_of(sites, until, weight)
    return speed_memory.MEASURES[measure](quench)


@pytest.mark.parametrize("row", speed.ROWS)
def test_every_row_runs(
    row: str, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    monkeypatch.setattr(speed_memory, "_in_a_process", here)
    monkeypatch.setattr(speed_single, "matmul_peak", lambda: 1e10)
    monkeypatch.setattr(speed_single, "cores_gain", lambda: 2.0)
    monkeypatch.setitem(speed.ROWS, row, ROWS[row])
    speed.main([row])
    table = capsys.readouterr().out.splitlines()
    assert table[0].split() == ["row", "target", "measured"]
    assert table[1].startswith(row)
    if row == "quimb":
        energies = [line for line in table if "energy of the middle bond" in line]
        assert len(energies) == 3
        assert all(line.endswith("pass") for line in energies)
    if row == "error":
        assert sum("times" in line for line in table) == 2
    if row == "threads":
        assert any("same bits" in line and line.endswith("pass") for line in table)


def test_rows_are_chosen_by_words() -> None:
    assert speed.chosen([]) == [row for row in speed.ROWS if row not in ("reach", "profile")]
    assert speed.chosen(["all"]) == [row for row in speed.ROWS if row != "profile"]
    assert speed.chosen(["profile", "small"]) == ["small", "profile"]
    with pytest.raises(SystemExit, match="no row fast"):
        speed.chosen(["fast"])


def test_a_step_has_an_odd_and_an_even_layer() -> None:
    problem = two_fields(6)
    odd, even = step_of(problem, 0.1)
    assert sorted(even) == [0, 2, 4]
    assert sorted(odd) == [1, 3]
