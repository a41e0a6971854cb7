"""Floating-point operations that a layer needs, counted part by part while it runs, and the time of each.

The linear algebra that the engine calls is wrapped where its callers look it up; the wrappers read shapes.
Per charge of the middle bond, with m = multiplicity x left and n = multiplicity x right (exchanged in
leftward sweeps), b inner indices before the cut, p sampled directions, of which s enter the eigenproblem, and
`kept` after the cut:

    pair          2 m b n
    gate          2 x nonzero entries x columns they act on
    sample        2 m n p                       the blocks applied to warm start and random directions
    QR            2 m p^2 + p^3/3               one pass of Cholesky's method: Gram matrix (by half), factor,
                                                triangular solve; Householder's takes twice as much
    image         2 m n p
    more          2 m n x + 2 p x (m + n) + QR  a further portion of x directions, where the loss demands it
    eigenproblem  s^2 n + 14/3 s^3              Gram matrix (by half); tridiagonal form 4/3, its solution by
                                                division 4/3, vectors back 2
    rotation      2 (m + n) s (kept - p + s)    of those directions that are not kept as they are
    move          QR of (m, b) + b^2 n          the triangle times the next site's tensor (by half)

Products with a symmetric result or a triangular factor count by half; norms, copies, second passes of
orthogonalisation and random numbers do not count. Where a subspace would be no smaller than the whole, the
Gram matrix of the block itself is decomposed, which is counted alike.
Sources: G. H. Golub and C. F. Van Loan, Matrix Computations, chapters 4, 5 and 8; for the eigenproblem J. W.
Demmel, Applied Numerical Linear Algebra (SIAM 1997), section 5.3 (both from memory).
"""

from __future__ import annotations

import time
from collections import defaultdict
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from typing import Any
from unittest import mock

import numpy as np

from tnquench.conventions import Reals
from tnquench.evolution import chain_state, cutting, layers

PARTS = ("pair", "gate", "sample", "QR", "image", "more", "eigenproblem", "rotation", "move", "rest")


@dataclass
class Count:
    """What was counted: floating-point operations and seconds (time of the process) of each part."""

    flops: dict[str, float] = field(default_factory=lambda: defaultdict(float))
    seconds: dict[str, float] = field(default_factory=lambda: defaultdict(float))

    @property
    def total(self) -> float:
        """All operations."""
        return sum(self.flops.values())

    @property
    def total_seconds(self) -> float:
        """All time."""
        return sum(self.seconds.values())


def product_flops(first: Reals, second: Reals, **_: object) -> float:
    """A matrix product of each charge; a matrix times its own transpose by half."""
    charges, rows, inner = map(int, first.shape)
    own = first.ctypes.data == second.ctypes.data and first.strides == second.swapaxes(1, 2).strides
    columns = int(second.shape[2])
    return charges * rows * inner * columns * (1.0 if own and rows == columns else 2.0)


def triangle_flops(first: Reals, second: Reals) -> float:
    """The same where one of both is a triangle."""
    return 0.5 * product_flops(first, second)


def basis_flops(vectors: Reals) -> float:
    """Orthonormal rows, the least that any way takes."""
    charges, count, length = map(int, vectors.shape)
    count = min(count, length)
    return charges * (2.0 * length * count**2 + count**3 / 3.0)


def eigen_flops(matrices: Reals) -> float:
    """All eigenvalues and eigenvectors of symmetric matrices."""
    charges, size, _ = map(int, matrices.shape)
    return 14.0 / 3.0 * charges * size**3


def gate_flops(gate: Any, pair: Reals) -> float:
    """A gate; each charge of both sites together has as many columns as pairs of outer indices that differ by
    it."""
    sectors, _, left, _, right = map(int, pair.shape)
    return 2.0 * int(np.count_nonzero(gate.blocks)) * left * right / sectors


def portion_flops(blocks: Reals, basis: Reals, _: Reals, probes: Reals) -> float:
    """A further portion of directions, made orthogonal to the basis."""
    charges, rows, columns = map(int, blocks.shape)
    x, held = int(probes.shape[1]), int(basis.shape[1])
    return (
        product_flops(probes, blocks.swapaxes(1, 2))
        + 2.0 * charges * held * x * (rows + columns)
        + basis_flops(np.empty((charges, x, rows)))
    )


@dataclass(frozen=True)
class Hook:
    """A function that is wrapped.

    where, name : module or class, and attribute
    part : to which its time and operations go; None for that of the function around it
    after : the part of what comes after the first orthonormal basis inside, if another
    flops : from its arguments; whole : nothing inside is counted apart
    """

    where: Any
    name: str
    part: str | None
    after: str | None = None
    flops: Callable[..., float] | None = None
    whole: bool = False


HOOKS = (
    Hook(layers, "product", "pair", flops=product_flops),
    Hook(layers, "apply_gate", "gate", flops=gate_flops),
    Hook(cutting, "_by_subspace", "sample", after="image"),
    Hook(cutting, "_outside", "more", flops=portion_flops, whole=True),
    Hook(cutting, "_by_gram", "eigenproblem"),
    Hook(cutting, "_rotated", "eigenproblem"),
    Hook(cutting._Spectrum, "largest", "rotation"),
    Hook(cutting, "orthonormal", "QR", flops=basis_flops),
    Hook(cutting, "eigensystems", "eigenproblem", flops=eigen_flops),
    Hook(cutting, "product", None, flops=product_flops),
    Hook(chain_state, "_step_right", "move"),
    Hook(chain_state, "_step_left", "move"),
    Hook(chain_state, "orthonormal_and_factor", "move", flops=basis_flops),
    Hook(chain_state, "product", "move", flops=triangle_flops),
)


@dataclass
class _Frame:
    """A wrapped function under way: the part that its own time goes to, now and later."""

    part: str
    after: str
    whole: bool = False


class _Watch:
    """Gives every stretch of time, and what is counted, to the part that is under way."""

    def __init__(self, count: Count) -> None:
        self.count = count
        self.frames = [_Frame("rest", "rest")]
        self.since = time.process_time()

    def close_stretch(self) -> None:
        """Enter the time since the last call."""
        now = time.process_time()
        self.count.seconds[self.frames[-1].part] += now - self.since
        self.since = now

    def wrapped(self, hook: Hook) -> Callable[..., Any]:
        """The function of a hook, watched."""
        function = getattr(hook.where, hook.name)

        def watched(*arguments: Any, **options: Any) -> Any:
            self.close_stretch()
            around = self.frames[-1]
            part = hook.part if hook.part and not around.whole else around.part
            if hook.flops and not around.whole:
                self.count.flops[part] += hook.flops(*arguments, **options)
            self.frames.append(_Frame(part, hook.after or part, hook.whole or around.whole))
            self.since = time.process_time()  # counting takes no part in what is timed
            try:
                return function(*arguments, **options)
            finally:
                self.close_stretch()
                self.frames.pop()
                if hook.part == "QR":
                    around.part = around.after

        return watched


@contextmanager
def watching() -> Iterator[Count]:
    """Count what the engine does inside the block."""
    count = Count()
    watch = _Watch(count)
    patches = [mock.patch.object(hook.where, hook.name, watch.wrapped(hook)) for hook in HOOKS]
    for patch in patches:
        patch.start()
    watch.since = time.process_time()
    try:
        yield count
        watch.close_stretch()
    finally:
        for patch in patches:
            patch.stop()
