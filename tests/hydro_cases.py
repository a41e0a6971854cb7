"""A second solution of the dressing equations, for fillings that jump: panels of Gauss-Legendre nodes.

Written from the formulas of M. Takahashi and M. Suzuki, Prog. Theor. Phys. 48, 2187 (1972), at D = cos g,
g = pi p/q: no window, no interpolation, no iteration; between nodes the integral equation itself is used.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from fractions import Fraction

import numpy as np

from tnquench.conventions import OBSERVABLE_PLACES, Reals
from tnquench.hydro.mesh import OBSERVABLES

#: Where the predicted observables live.
PLACES = {name: OBSERVABLE_PLACES[name] for name in OBSERVABLES}

#: (length, parity, sign) of all strings at p/q, by hand; at 1/nu the sign of a string is its parity.
STRINGS: dict[Fraction, list[tuple[int, int, int]]] = {
    **{Fraction(1, nu): [*((n, 1, 1) for n in range(1, nu)), (1, -1, -1)] for nu in range(3, 9)},
    Fraction(2, 5): [(1, 1, 1), (1, -1, -1), (3, 1, -1), (2, 1, 1)],
    Fraction(3, 7): [(1, 1, 1), (1, -1, -1), (3, 1, -1), (5, -1, -1), (2, 1, 1)],
}


def lorentzian(x: Reals, *, n: int, v: int, turn: Fraction) -> Reals:
    """a_n^v(x) = (v/pi) sin(n g)/(cosh 2x - v cos n g), zero where n g is a multiple of pi."""
    if n % turn.denominator == 0:
        return np.zeros_like(x)
    angle = n * np.pi * float(turn)
    return np.asarray(v * np.sin(angle) / (np.cosh(2.0 * x) - v * np.cos(angle)) / np.pi)


def lorentzian_slope(x: Reals, *, n: int, v: int, turn: Fraction) -> Reals:
    """Derivative of a_n^v."""
    angle = n * np.pi * float(turn)
    denominator = np.cosh(2.0 * x) - v * np.cos(angle)
    return np.asarray(-2.0 * v * np.sin(angle) * np.sinh(2.0 * x) / denominator**2 / np.pi)


def panels(cuts: Reals, *, count: int = 52) -> tuple[Reals, Reals]:
    """Gauss-Legendre rapidities and weights on panels that end at every cut."""
    edges = np.unique(np.concatenate([np.linspace(-13.0, 13.0, count + 1), cuts]))
    nodes, weights = np.polynomial.legendre.leggauss(8)
    half = 0.5 * np.diff(edges)[:, None]
    return (edges[:-1, None] + half * (1.0 + nodes)).ravel(), (half * weights).ravel()


@dataclass(frozen=True)
class PanelState:
    """Fillings on one grid of rapidities a string; `sign` is that of D."""

    turn: Fraction
    sign: int
    grids: Sequence[tuple[Reals, Reals]]
    fillings: Sequence[Reals]

    @property
    def strings(self) -> list[tuple[int, int, int]]:
        """Lengths, parities and signs."""
        return STRINGS[self.turn]

    @property
    def angle(self) -> float:
        """g."""
        return float(np.pi * self.turn)

    def kernel(self, row: int, x: Reals, column: int) -> Reals:
        """T_row,column(x - mu) times weight, sign and filling at mu: shape (x, mu)."""
        (n, v, _), (m, w, sign) = self.strings[row], self.strings[column]
        mu, weights = self.grids[column]
        terms = [(abs(n - m), n != m), (n + m, 1)] + [(k, 2) for k in range(abs(n - m) + 2, n + m, 2)]
        distance = x[:, None] - mu
        total = sum(count * lorentzian(distance, n=k, v=v * w, turn=self.turn) for k, count in terms)
        return np.asarray(total * weights * sign * self.fillings[column])

    def bare(self, row: int, x: Reals) -> Reals:
        """e' and p' of a string, (2, x), at J = 1."""
        n, v, _ = self.strings[row]
        energy = -self.sign * np.pi * np.sin(self.angle) * lorentzian_slope(x, n=n, v=v, turn=self.turn)
        return np.stack([energy, 2.0 * np.pi * lorentzian(x, n=n, v=v, turn=self.turn)])

    def dressed(self) -> list[Reals]:
        """Dressed e' and p' on each string's grid, (2, rapidity)."""
        size = len(self.strings)
        blocks = [[self.kernel(a, self.grids[a][0], b) for b in range(size)] for a in range(size)]
        bare = np.concatenate([self.bare(a, self.grids[a][0]) for a in range(size)], axis=1)
        solution = np.linalg.solve(np.eye(bare.shape[1]) + np.block(blocks), bare.T).T
        return np.split(solution, np.cumsum([x.size for x, _ in self.grids])[:-1], axis=1)

    def velocities(self, dressed: Sequence[Reals], row: int, x: Reals) -> Reals:
        """v_eff of a string at any rapidities."""
        energy, momentum = self.bare(row, x) - sum(
            dressed[b] @ self.kernel(row, x, b).T for b in range(len(self.strings))
        )
        return np.asarray(energy / momentum)

    def averages(self, dressed: Sequence[Reals]) -> Reals:
        """Energy density, charge density, energy current, charge current."""
        totals = np.array([0.25 * self.sign * np.cos(self.angle), 0.5, 0.0, 0.0])
        for row, (x, weights) in enumerate(self.grids):
            n, v, sign = self.strings[row]
            energy = -self.sign * np.pi * np.sin(self.angle) * lorentzian(x, n=n, v=v, turn=self.turn)
            flow, density = sign * self.fillings[row] * weights * dressed[row] / (2.0 * np.pi)
            totals += [energy @ density, -n * density.sum(), energy @ flow, -n * flow.sum()]
        return totals
