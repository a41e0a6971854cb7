"""Functions on the whole line as rational functions, and the shifts into the complex plane they allow.

With x = L tan(theta/2) a function that tends to the same constant at both ends is a Fourier series in theta,
f = sum_n c_n w(x)^n, w(x) = exp(i theta) = (L + i x)/(L - i x): the basis of J. P. Boyd, J. Comput. Phys. 70,
63 (1987) and J. A. C. Weideman, Math. Comp. 64, 745 (1995) (references from memory). Powers n > 0 are
analytic above the real axis, hence hold the positive frequencies only, and the factor exp(-a omega) of a
positive frequency is the shift f(x + i a). Every kernel of the Hubbard chain has a Fourier transform
t^p/(1 + t), t = exp(-2 |omega|), whose expansion in powers of t is a sum of such shifts: convolutions are
exact up to the Fourier series itself, however far out on the line.

All functions here obey f(-x) = f(x)*, so that the c_n are real and half of the line suffices. Their values
are kept as real vectors: the real parts at the nodes x >= 0, then the imaginary parts at the nodes x > 0.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from tnquench.conventions import Reals

Complexes = NDArray[np.complex128]

#: Shifts that replace 1/(1 + t): their error is below (3 + sqrt 8)^(-terms) = 4e-17.
SHIFT_TERMS = 22


def alternating_weights(terms: int) -> Reals:
    """Return weights p_m, shape (terms,), with 1/(1 + t) = sum_m p_m t^m for 0 <= t <= 1.

    The error is below 2 (3 + sqrt 8)^(-terms) on the whole interval and |p_m| <= 1.
    Source: H. Cohen, F. Rodriguez Villegas and D. Zagier, Experiment. Math. 9, 3 (2000), algorithm 1 (from
    memory; the error is tested).
    """
    scale = np.cosh(terms * np.log(3.0 + np.sqrt(8.0)))
    step, partial = -1.0, -scale
    weights = np.empty(terms)
    for m in range(terms):
        partial = step - partial
        weights[m] = partial / scale
        step *= (m + terms) * (m - terms) / ((m + 0.5) * (m + 1.0))
    return weights


@dataclass(frozen=True)
class SpectralLine:
    """An odd number of `nodes` x = scale tan(theta/2) at equidistant theta; infinity lies between two."""

    nodes: int
    scale: float

    @property
    def half(self) -> int:
        """Number of positive nodes, and the highest power of w."""
        return (self.nodes - 1) // 2

    @cached_property
    def angles(self) -> Reals:
        """Angles theta of the nodes x >= 0, shape (half + 1,)."""
        return 2.0 * np.pi * np.arange(self.half + 1) / self.nodes

    @cached_property
    def positions(self) -> Reals:
        """Nodes x >= 0, shape (half + 1,)."""
        return np.asarray(self.scale * np.tan(0.5 * self.angles))

    @cached_property
    def powers(self) -> Reals:
        """Powers n of w, ascending, shape (nodes,)."""
        return np.arange(-self.half, self.half + 1, dtype=float)

    @cached_property
    def coefficients(self) -> Reals:
        """Matrix (power, value) that turns a vector of values into the c_n."""
        waves = np.outer(self.powers, self.angles)
        even, odd = np.cos(waves), np.sin(waves[:, 1:])
        even[:, 1:] *= 2.0
        return np.hstack([even, 2.0 * odd]) / self.nodes

    def evaluation(self, points: Reals) -> Complexes:
        """Return the matrix (point, power) that evaluates a series at real x `points` (point,)."""
        angles = 2.0 * np.arctan(points / self.scale)
        return np.asarray(np.exp(1j * np.outer(angles, self.powers)))

    def shifts(self, points: Reals, *, above: float, below: float, slope: bool = False) -> Complexes:
        """Return the matrix (point, power) of a convolution, applied to a series, at real x `points`.

        Its Fourier transform is exp(-above omega)/(1 + t) at omega > 0 and exp(-below |omega|)/(1 + t) at
        omega < 0, t = exp(-2 |omega|) and above, below >= 0. With `slope`, of its derivative in x.
        """
        upper = self._shifted_powers(points, above, slope=slope)
        lower = np.conj(self._shifted_powers(points, below, slope=slope))
        middle = np.full((points.size, 1), 0.0 if slope else 0.5)
        return np.hstack([lower[:, ::-1], middle, upper])

    def _shifted_powers(self, points: Reals, first: float, *, slope: bool) -> Complexes:
        """Return sum_m p_m w(x + i first + 2 i m)^n, or its derivative, shape (point, n = 1..half)."""
        weights = alternating_weights(SHIFT_TERMS)
        shifted = points[:, None] + 1j * (first + 2.0 * np.arange(SHIFT_TERMS))
        base = (self.scale + 1j * shifted) / (self.scale - 1j * shifted)
        derivative = 2j * self.scale / (self.scale - 1j * shifted) ** 2
        power = derivative if slope else base
        result = np.empty((points.size, self.half), dtype=complex)
        for n in range(1, self.half + 1):
            result[:, n - 1] = (n if slope else 1.0) * (power @ weights)
            power = power * base
        return result

    def to_complex(self, values: Reals) -> Complexes:
        """Return the complex values at the nodes x >= 0, (..., half + 1), of real vectors (..., nodes)."""
        result = values[..., : self.half + 1].astype(complex)
        result[..., 1:] += 1j * values[..., self.half + 1 :]
        return np.asarray(result)

    def to_real(self, values: Complexes) -> Reals:
        """Return the real vectors (..., nodes) of complex values (..., half + 1); undoes `to_complex`."""
        return np.concatenate([values.real, values.imag[..., 1:]], axis=-1)

    @cached_property
    def ones(self) -> Reals:
        """The constant function 1, shape (nodes,)."""
        return np.concatenate([np.ones(self.half + 1), np.zeros(self.half)])
