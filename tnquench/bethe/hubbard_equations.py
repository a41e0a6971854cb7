"""Integral equations of the Hubbard chain in equilibrium, closed without strings, as matrices.

M. Takahashi, Prog. Theor. Phys. 47, 69 (1972) and Thermodynamics of One-Dimensional Solvable Models
(Cambridge, 1999); F. H. L. Essler et al., The One-Dimensional Hubbard Model (Cambridge, 2005), chapter 5.
At hopping 1, with u = U/4 and rapidities in units of u, zeta(k) belongs to unbound charges, eta_n to strings
of n spin rapidities, eta'_n to strings of 2 n charges and n spin rapidities (from memory, and checked against
exact diagonalisation):

    ln zeta  = beta kappa + s * ln[(1 + eta'_1)/(1 + eta_1)]              taken at sin(k)/u
    ln eta_1 = s * ln(1 + eta_2) + d,          d = -int dk cos(k) s(x - sin(k)/u)/u ln(1 + 1/zeta)
    ln eta'_1 = s * ln(1 + eta'_2) + d',       d' the same with ln(1 + zeta)
    ln eta_n = s * ln[(1 + eta_(n-1))(1 + eta_(n+1))], likewise eta'_n,   n > 1
    lim ln(eta_n)/n = beta h,  lim ln(eta'_n)/n = 2 beta |mu|,            s(x) = 1/(4 cosh(pi x/2)).

Each of the two infinite towers is summed exactly by two functions b and b_bar, whose fusion hierarchy it is:
J. Suzuki, J. Phys. A 32, 2341 (1999); for other auxiliary functions of the Hubbard chain see G. Juettner,
A. Kluemper and J. Suzuki, Nucl. Phys. B 522, 471 (1998). With B = 1 + b, B_bar = 1 + b_bar,

    1 + eta_1 = B B_bar,
    ln b     =  beta h/2 + d + K * ln B - X * ln B_bar,
    ln b_bar = -beta h/2 + d + K * ln B_bar - X~ * ln B,

and 2 mu in place of h for the tower of pairs. In Fourier space, t = exp(-2 |omega|), s is sqrt(t)/(1 + t)
and K is t/(1 + t); X = K exp(-2 omega), a shift by 2 i, is t^2/(1 + t) at omega > 0 and 1/(1 + t) at
omega < 0; X~ is its mirror image. (Derived from ln b and ln B being analytic between the shifts, and compared
with the towers themselves in the tests.)
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from tnquench.bethe.hubbard_line import SHIFT_TERMS, SpectralLine, alternating_weights
from tnquench.conventions import Reals


@dataclass(frozen=True, eq=False)
class HubbardEquations:
    """unknowns = driving + matrix @ logarithms, hopping 1, at a repulsion 4 u > 0.

    unknowns   : ln b, ln b_bar of spins, the same of pairs, each (node,) on `line`; then ln zeta (momentum,)
    logarithms : the four ln(1 + b), then ln(1 + 1/zeta) and ln(1 + zeta) at the momenta
    momenta    : equidistant k between 0 and pi; all functions are even in k
    A name that ends in `_slope` is the derivative with respect to u at fixed nodes.
    """

    u: float
    line: SpectralLine
    momenta: Reals

    @property
    def towers(self) -> int:
        """Length of the part of the unknowns that lies on the line."""
        return 4 * self.line.nodes

    @property
    def size(self) -> int:
        """Number of unknowns."""
        return self.towers + self.momenta.size

    @cached_property
    def points(self) -> Reals:
        """Rapidities sin(k)/u of the momenta, shape (momentum,)."""
        return np.asarray(np.sin(self.momenta) / self.u)

    @cached_property
    def bare(self) -> tuple[Reals, Reals]:
        """kappa(k), shape (momentum,), and its slope.

        kappa = -2 cos k - 2 u - 4 int_0^inf dw/w J_1(w) cos(w sin k)/(1 + exp(2 u w)), in closed form for
        each power of exp(-2 u w): int_0^inf dw/w J_1(w) exp(-a w) = sqrt(1 + a^2) - a.
        """
        shifts, distance = self._bare_shifts()
        root = np.sqrt(1.0 + distance**2)
        weights = alternating_weights(SHIFT_TERMS)
        sums = (1.0 / (root + distance)).real @ weights
        slopes = (shifts * (distance / root - 1.0).real) @ weights
        return -2.0 * np.cos(self.momenta) - 2.0 * self.u - 4.0 * sums, -2.0 - 4.0 * slopes

    @cached_property
    def filled_density(self) -> tuple[Reals, Reals]:
        """2 pi times the density of momenta of the ground state at half filling, (momentum,), and its slope.

        1 + 2 cos k int_0^inf dw J_0(w) cos(w sin k)/(1 + exp(2 u w)).
        Source: E. H. Lieb and F. Y. Wu, Phys. Rev. Lett. 20, 1445 (1968).
        """
        shifts, distance = self._bare_shifts()
        square = 1.0 + distance**2
        weights, cosine = alternating_weights(SHIFT_TERMS), 2.0 * np.cos(self.momenta)
        sums = (1.0 / np.sqrt(square)).real @ weights
        slopes = (shifts * (-distance / square**1.5).real) @ weights
        return 1.0 + cosine * sums, cosine * slopes

    def _bare_shifts(self) -> tuple[Reals, np.ndarray]:
        """Return 2 m, m = 1, 2..., (term,) and the distances 2 m u - i sin k, (momentum, term)."""
        shifts = 2.0 * np.arange(1.0, SHIFT_TERMS + 1.0)
        return shifts, self.u * shifts - 1j * np.sin(self.momenta)[:, None]

    @cached_property
    def ground_energy(self) -> tuple[float, float]:
        """Energy per site of the ground state at half filling (Lieb and Wu), and its slope."""
        (density, change), hopping = self.filled_density, -2.0 * np.cos(self.momenta)
        return float(np.mean(density * hopping)) - self.u, float(np.mean(change * hopping)) - 1.0

    @cached_property
    def charge_on_line(self) -> tuple[Reals, Reals]:
        """Matrix (node, momentum) that turns ln(1 + 1/zeta) into d, and its slope."""
        values, slopes = self.momentum_kernel
        cosine = -np.cos(self.momenta)
        padding = np.zeros((self.line.half, self.momenta.size))
        return np.vstack([values * cosine, padding]), np.vstack([slopes * cosine, padding])

    @cached_property
    def momentum_kernel(self) -> tuple[Reals, Reals]:
        """Matrix (node x >= 0, momentum) of the integral over all k of s(x - sin(k)/u)/u, and its slope."""
        minus, plus = (self.line.positions[:, None] + sign * self.points for sign in (-1.0, 1.0))
        weight = np.pi / (self.momenta.size * self.u)
        values = weight * (_sech(minus) + _sech(plus))
        slopes = weight * self.points / self.u * (_sech_slope(minus) - _sech_slope(plus))
        return values, slopes - values / self.u

    @cached_property
    def line_on_charge(self) -> tuple[Reals, Reals]:
        """Matrix (momentum, value) of s * f at sin(k)/u for one function f on the line, and its slope."""
        value, derivative = (
            (self.line.shifts(self.points, above=1.0, below=1.0, slope=slope).real @ self.line.coefficients)
            for slope in (False, True)
        )
        return value, derivative * (-self.points / self.u)[:, None]

    @cached_property
    def tower_matrix(self) -> Reals:
        """The tower's own convolutions: ln b and ln b_bar from ln B and ln B_bar, (2 nodes, 2 nodes)."""

        def convolution(above: float, below: float) -> Reals:
            values = self.line.shifts(self.line.positions, above=above, below=below)
            return self.line.to_real(values.T).T @ self.line.coefficients

        same, other, mirrored = convolution(2.0, 2.0), convolution(4.0, 0.0), convolution(0.0, 4.0)
        return np.block([[same, -other], [-mirrored, same]])

    @cached_property
    def matrix(self) -> Reals:
        """The matrix of the equations, (size, size + momentum)."""
        return self.assemble(self.tower_matrix, self.charge_on_line[0], self.line_on_charge[0])

    @cached_property
    def matrix_slope(self) -> Reals:
        """Derivative of `matrix` with respect to u."""
        return self.assemble(np.zeros_like(self.tower_matrix), self.charge_on_line[1], self.line_on_charge[1])

    def assemble(self, tower: Reals, charge_on_line: Reals, line_on_charge: Reals) -> Reals:
        """Return the whole matrix from the blocks of one tower, charges on the line, and line on charges."""
        nodes, momenta = self.line.nodes, self.momenta.size
        matrix = np.zeros((self.size, self.size + momenta))
        for which, sign in ((0, -1.0), (1, 1.0)):
            rows = slice(2 * which * nodes, 2 * (which + 1) * nodes)
            columns = slice(self.towers + which * momenta, self.towers + (which + 1) * momenta)
            matrix[rows, rows] = tower
            matrix[rows, columns] = np.vstack([charge_on_line, charge_on_line])
            matrix[self.towers :, rows] = sign * np.hstack([line_on_charge, line_on_charge])
        return matrix

    @cached_property
    def weights(self) -> tuple[Reals, Reals]:
        """Vector (size + momentum,) whose product with the logarithms is ln Z + beta e_0, and its slope."""
        return self._weights(0), self._weights(1)

    def _weights(self, which: int) -> Reals:
        momenta, nodes = self.momenta.size, self.line.nodes
        spins = np.mean(self.line_on_charge[which], axis=0)
        idle = np.zeros(2 * nodes + momenta)
        return np.concatenate([spins, spins, idle, self.filled_density[which] / momenta])


def hubbard_equations(u: float, *, nodes: int) -> HubbardEquations:
    """Return the equations at u = U/4 > 0 (hopping 1) with an odd number of `nodes` and as many momenta."""
    momenta = (np.arange(nodes) + 0.5) * np.pi / nodes
    return HubbardEquations(u, SpectralLine(nodes, 1.0 + 1.0 / u), momenta)


def _sech(x: Reals) -> Reals:
    """Return s(x) = 1/(4 cosh(pi x/2)), any shape, without overflow."""
    decay = np.exp(-0.5 * np.pi * np.abs(x))
    return np.asarray(0.5 * decay / (1.0 + decay**2))


def _sech_slope(x: Reals) -> Reals:
    """Return the derivative of s(x), any shape."""
    return np.asarray(-0.5 * np.pi * np.tanh(0.5 * np.pi * x) * _sech(x))
