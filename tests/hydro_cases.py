"""A second solution of the dressing equations, for fillings that jump: panels of Gauss-Legendre nodes.

Written from the formulas of M. Takahashi and M. Suzuki, Prog. Theor. Phys. 48, 2187 (1972), at D = cos g,
g = pi/nu: no window, no interpolation, no iteration; between nodes the integral equation itself is used.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from tnquench.conventions import Reals


def lorentzian(x: Reals, *, n: int, v: int, nu: int) -> Reals:
    """a_n^v(x) = (v/pi) sin(n g)/(cosh 2x - v cos n g), zero where n is a multiple of nu."""
    if n % nu == 0:
        return np.zeros_like(x)
    angle = n * np.pi / nu
    return np.asarray(v * np.sin(angle) / (np.cosh(2.0 * x) - v * np.cos(angle)) / np.pi)


def lorentzian_slope(x: Reals, *, n: int, v: int, nu: int) -> Reals:
    """Derivative of a_n^v."""
    angle = n * np.pi / nu
    denominator = np.cosh(2.0 * x) - v * np.cos(angle)
    return np.asarray(-2.0 * v * np.sin(angle) * np.sinh(2.0 * x) / denominator**2 / np.pi)


def panels(cuts: Reals) -> tuple[Reals, Reals]:
    """Gauss-Legendre rapidities and weights on panels that end at every cut."""
    edges = np.unique(np.concatenate([np.linspace(-13.0, 13.0, 53), cuts]))
    nodes, weights = np.polynomial.legendre.leggauss(8)
    half = 0.5 * np.diff(edges)[:, None]
    return (edges[:-1, None] + half * (1.0 + nodes)).ravel(), (half * weights).ravel()


@dataclass(frozen=True)
class PanelState:
    """Fillings on one grid of rapidities a string; `sign` is that of D."""

    nu: int
    sign: int
    grids: Sequence[tuple[Reals, Reals]]
    fillings: Sequence[Reals]

    def string(self, index: int) -> tuple[int, int]:
        """Length and parity; the sign of a string equals its parity."""
        return (1, -1) if index == self.nu - 1 else (index + 1, 1)

    def kernel(self, row: int, x: Reals, column: int) -> Reals:
        """T_row,column(x - mu) times weight, sign and filling at mu: shape (x, mu)."""
        (n, v), (m, w) = self.string(row), self.string(column)
        mu, weights = self.grids[column]
        terms = [(abs(n - m), n != m), (n + m, 1)] + [(k, 2) for k in range(abs(n - m) + 2, n + m, 2)]
        distance = x[:, None] - mu
        total = sum(count * lorentzian(distance, n=k, v=v * w, nu=self.nu) for k, count in terms)
        return np.asarray(total * weights * w * self.fillings[column])

    def bare(self, row: int, x: Reals) -> Reals:
        """e' and p' of a string, (2, x), at J = 1."""
        n, v = self.string(row)
        energy = -self.sign * np.pi * np.sin(np.pi / self.nu) * lorentzian_slope(x, n=n, v=v, nu=self.nu)
        return np.stack([energy, 2.0 * np.pi * lorentzian(x, n=n, v=v, nu=self.nu)])

    def dressed(self) -> list[Reals]:
        """Dressed e' and p' on each string's grid, (2, rapidity)."""
        blocks = [[self.kernel(a, self.grids[a][0], b) for b in range(self.nu)] for a in range(self.nu)]
        bare = np.concatenate([self.bare(a, self.grids[a][0]) for a in range(self.nu)], axis=1)
        solution = np.linalg.solve(np.eye(bare.shape[1]) + np.block(blocks), bare.T).T
        return np.split(solution, np.cumsum([x.size for x, _ in self.grids])[:-1], axis=1)

    def velocities(self, dressed: Sequence[Reals], row: int, x: Reals) -> Reals:
        """v_eff of a string at any rapidities."""
        energy, momentum = self.bare(row, x) - sum(
            dressed[b] @ self.kernel(row, x, b).T for b in range(self.nu)
        )
        return np.asarray(energy / momentum)

    def averages(self, dressed: Sequence[Reals]) -> Reals:
        """Energy density, charge density, energy current, charge current."""
        totals = np.array([0.25 * self.sign * np.cos(np.pi / self.nu), 0.5, 0.0, 0.0])
        for row, (x, weights) in enumerate(self.grids):
            n, v = self.string(row)
            energy = -self.sign * np.pi * np.sin(np.pi / self.nu) * lorentzian(x, n=n, v=v, nu=self.nu)
            flow, density = v * self.fillings[row] * weights * dressed[row] / (2.0 * np.pi)
            totals += [energy @ density, -n * density.sum(), energy @ flow, -n * flow.sum()]
        return totals
