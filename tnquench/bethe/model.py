"""The XXZ chain of Bethe ansatz: strings, rapidity nodes, bare functions and scattering kernel as arrays.

H = J sum [SxSx + SySy + D SzSz], D = plus or minus cos(pi p/q); energies are counted from the ferromagnet
with all spins up, of energy J D / 4 and magnetisation 1/2 a site.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from fractions import Fraction
from functools import lru_cache

import numpy as np

from tnquench.bethe.angles import anisotropy_of, rational_turn
from tnquench.bethe.grid import rapidity_grid
from tnquench.bethe.kernel import scattering_kernel
from tnquench.bethe.strings import StringTable, phase_curvature, phase_derivative, string_table
from tnquench.conventions import Integers, Reals


@dataclass(frozen=True, eq=False)
class BetheModel:
    """Strings and rapidity grid of an XXZ chain; `kernel` includes the quadrature, all else is per node.

    anisotropy, coupling  : D and J
    table                 : the strings, with lengths n, parities v, signs sigma, and the angle g = pi p/q
    rapidities, weights   : (node,) lambda and the weight of the integral over lambda, ascending and symmetric
    energy, energy_derivative : (string, node) bare energy e above the ferromagnet and its rapidity derivative
    momentum_derivative   : (string, node) bare p' = 2 pi a_n
    charge                : (string, node) magnetisation removed, the length n
    kernel                : (string, node, string, node); kernel[a, i, b, :] @ f[b] is the convolution
                            integral of T_ab(lambda_i - mu) f_b(mu) over mu
    """

    anisotropy: float
    coupling: float
    table: StringTable
    rapidities: Reals
    weights: Reals
    energy: Reals
    energy_derivative: Reals
    momentum_derivative: Reals
    charge: Reals
    kernel: Reals

    @property
    def lengths(self) -> Integers:
        """Lengths n of the strings, (string,)."""
        return self.table.lengths

    @property
    def signs(self) -> Integers:
        """Signs sigma of the strings, (string,)."""
        return self.table.signs

    @property
    def strings(self) -> int:
        """Number of strings."""
        return int(self.lengths.size)

    @property
    def nodes(self) -> int:
        """Number of rapidity nodes of each string."""
        return int(self.rapidities.size)


def xxz_model(*, anisotropy: float, coupling: float = 1.0, nodes: int = 64) -> BetheModel:
    """Return the model at D = plus or minus cos(pi p/q) with `nodes` rapidities a string.

    A negative anisotropy has the strings of |D| and the opposite energy (rotate every second spin about z).
    Raises UnsupportedAnisotropy (a ValueError) elsewhere. Cached: the arrays are read-only.
    """
    return _build(rational_turn(anisotropy), anisotropy < 0.0, float(coupling), int(nodes))


@lru_cache(maxsize=16)
def _build(turn: Fraction, negative: bool, coupling: float, nodes: int) -> BetheModel:
    table = string_table(turn)
    grid = rapidity_grid(table.state_angle, nodes)
    anisotropy = anisotropy_of(turn, negative=negative)
    slopes = bare_functions(phase_derivative, table, grid.rapidities)
    curvatures = bare_functions(phase_curvature, table, grid.rapidities)
    scale = np.pi * coupling * np.sin(table.angle) * (1.0 if anisotropy < 0.0 else -1.0)
    arrays = {
        "rapidities": grid.rapidities,
        "weights": grid.weights,
        "energy": scale * slopes,
        "energy_derivative": scale * curvatures,
        "momentum_derivative": 2.0 * np.pi * slopes,
        "charge": np.repeat(table.lengths[:, None].astype(np.float64), nodes, axis=1),
        "kernel": scattering_kernel(turn, nodes),
    }
    for array in arrays.values():
        array.flags.writeable = False
    return BetheModel(anisotropy, coupling, table, **arrays)


def bare_functions(function: Callable[..., Reals], table: StringTable, rapidities: Reals) -> Reals:
    """Return `function` (phase_derivative or phase_curvature) of each string, (string, rapidity)."""
    angles = (np.pi * r / table.turn.denominator for r in table.residues)
    return np.array([function(rapidities, angle=angle) for angle in angles])
