"""The XXZ chain of Bethe ansatz: strings, rapidity nodes, bare functions and scattering kernel as arrays.

H = J sum [SxSx + SySy + D SzSz], D = plus or minus cos(pi/nu); energies are counted from the ferromagnet with
all spins up, of energy J D / 4 and magnetisation 1/2 a site.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import lru_cache

import numpy as np

from tnquench.bethe.grid import rapidity_grid
from tnquench.bethe.kernel import scattering_kernel
from tnquench.bethe.strings import StringTable, phase_curvature, phase_derivative, string_table, supported_nu
from tnquench.conventions import Integers, Reals


@dataclass(frozen=True, eq=False)
class BetheModel:
    """Strings and rapidity grid of an XXZ chain; `kernel` includes the quadrature, all else is per node.

    anisotropy, coupling  : D and J
    lengths, parities, signs : (string,) Takahashi-Suzuki labels n, v, sigma
    rapidities, weights   : (node,) lambda and the weight of the integral over lambda, ascending and symmetric
    energy, energy_derivative : (string, node) bare energy e above the ferromagnet and its rapidity derivative
    momentum_derivative   : (string, node) bare p' = 2 pi a_n
    charge                : (string, node) magnetisation removed, the length n
    kernel                : (string, node, string, node); kernel[a, i, b, :] @ f[b] is the convolution
                            integral of T_ab(lambda_i - mu) f_b(mu) over mu
    """

    anisotropy: float
    coupling: float
    lengths: Integers
    parities: Integers
    signs: Integers
    rapidities: Reals
    weights: Reals
    energy: Reals
    energy_derivative: Reals
    momentum_derivative: Reals
    charge: Reals
    kernel: Reals

    @property
    def strings(self) -> int:
        """Number of strings, nu."""
        return int(self.lengths.size)

    @property
    def nodes(self) -> int:
        """Number of rapidity nodes of each string."""
        return int(self.rapidities.size)


def xxz_model(*, anisotropy: float, coupling: float = 1.0, nodes: int = 64) -> BetheModel:
    """Return the model at D = plus or minus cos(pi/nu), nu = 2..8, with `nodes` rapidities a string.

    A negative anisotropy has the strings of |D| and the opposite energy (rotate every second spin about z).
    Raises UnsupportedAnisotropy (a ValueError) elsewhere. Cached: the arrays are read-only.
    """
    nu = supported_nu(anisotropy)
    return _build(nu, nu > 2 and anisotropy < 0.0, float(coupling), int(nodes))


@lru_cache(maxsize=16)
def _build(nu: int, negative: bool, coupling: float, nodes: int) -> BetheModel:
    table, grid = string_table(nu), rapidity_grid(nu, nodes)
    slopes = _bare(phase_derivative, table, grid.rapidities)
    curvatures = _bare(phase_curvature, table, grid.rapidities)
    scale = np.pi * coupling * np.sin(table.angle) * (1.0 if negative else -1.0)
    arrays = {
        "rapidities": grid.rapidities,
        "weights": grid.weights,
        "energy": scale * slopes,
        "energy_derivative": scale * curvatures,
        "momentum_derivative": 2.0 * np.pi * slopes,
        "charge": np.repeat(table.lengths[:, None].astype(np.float64), nodes, axis=1),
        "kernel": scattering_kernel(nu, nodes),
    }
    for array in arrays.values():
        array.flags.writeable = False
    magnitude = 0.0 if nu == 2 else float(np.cos(table.angle))
    anisotropy = -magnitude if negative else magnitude
    return BetheModel(anisotropy, coupling, table.lengths, table.parities, table.signs, **arrays)


def _bare(function: Callable[..., Reals], table: StringTable, rapidities: Reals) -> Reals:
    strings = zip(table.lengths.tolist(), table.parities.tolist(), strict=True)
    return np.array([function(rapidities, length=n, parity=v, nu=table.nu) for n, v in strings])
