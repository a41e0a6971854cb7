"""A second solution of the dressing equations at D > 1, for fillings that jump: all strings coupled.

Written from M. Takahashi, Thermodynamics of One-Dimensional Solvable Models (Cambridge University Press,
1999): no decoupling, no tail, no interpolation; panels of Gauss-Legendre nodes that end at every cut.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from tnquench.conventions import Reals


@dataclass(frozen=True)
class CoupledSolution:
    """The equations with all strings coupled, written apart: a_n and T_nm as sums, no tail, no s.

    Valid with a field that makes long strings rare. Nodes: Gauss-Legendre panels that end at every cut.
    """

    eta: float
    points: list[Reals]
    weights: list[Reals]
    fillings: list[Reals]

    def kernel(self, n: int, x: Reals) -> Reals:
        if n == 0:
            return np.zeros_like(x)
        return np.asarray(np.sinh(n * self.eta) / (np.cosh(n * self.eta) - np.cos(2.0 * x)) / np.pi)

    def scattering(self, n: int, m: int, x: Reals) -> Reals:
        low, high = abs(n - m), n + m
        inner = sum((2.0 * self.kernel(k, x) for k in range(low + 2, high, 2)), np.zeros_like(x))
        return self.kernel(low, x) + inner + self.kernel(high, x)

    def dressed(self) -> tuple[list[Reals], list[Reals]]:
        """Dressed e' and p' per string at J = 1."""
        count = len(self.points)
        blocks = [
            [
                self.scattering(n + 1, m + 1, self.points[n][:, None] - self.points[m][None])
                * (self.weights[m] * self.fillings[m])
                for m in range(count)
            ]
            for n in range(count)
        ]
        matrix = np.block(blocks)
        matrix.flat[:: matrix.shape[0] + 1] += 1.0
        bare = []
        for n, x in enumerate(self.points, start=1):
            size = np.cosh(n * self.eta) - np.cos(2.0 * x)
            slope = -2.0 * np.sinh(n * self.eta) * np.sin(2.0 * x) / size**2 / np.pi
            bare.append(
                np.stack([-np.pi * np.sinh(self.eta) * slope, 2.0 * np.pi * self.kernel(n, x)], axis=1)
            )
        solved = np.linalg.solve(matrix, np.concatenate(bare))
        cuts = np.cumsum([x.size for x in self.points])[:-1]
        energy, momentum = (np.split(column, cuts) for column in solved.T)
        return energy, momentum

    def averages(self) -> Reals:
        energy, momentum = self.dressed()
        result = np.array([0.25 * np.cosh(self.eta), 0.5, 0.0, 0.0])
        for n, (x, w, theta) in enumerate(
            zip(self.points, self.weights, self.fillings, strict=True), start=1
        ):
            value = -np.pi * np.sinh(self.eta) * self.kernel(n, x)
            flow, density = (w * theta * each[n - 1] / (2.0 * np.pi) for each in (energy, momentum))
            result += [value @ density, -n * density.sum(), value @ flow, -n * flow.sum()]
        return result


def panels(cuts: Reals) -> tuple[Reals, Reals]:
    edges = np.unique(np.concatenate([np.linspace(-0.5 * np.pi, 0.5 * np.pi, 7), cuts]))
    nodes, weights = np.polynomial.legendre.leggauss(12)
    half = 0.5 * np.diff(edges)[:, None]
    return (edges[:-1, None] + half * (1.0 + nodes)).ravel(), (half * weights).ravel()
