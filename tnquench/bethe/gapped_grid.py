"""Rapidity nodes and convolutions of the XXZ chain at |D| >= 1, with spectral accuracy.

With |D| = cosh(eta) rapidities are x = eta u, x periodic in (-pi/2, pi/2]; at |D| = 1 u covers the line.
Nodes are equidistant in an angle phi with tan(x) = c tan(phi) (u = c tan(phi) at |D| = 1). This map takes
the upper half of the complex x plane to that of phi, so every kernel a_n stays a Poisson kernel, and
functions analytic at infinity stay periodic and analytic. Where eta is not small, c = 1 and the nodes are
equidistant in x.
Kernels as in M. Takahashi, Thermodynamics of One-Dimensional Solvable Models (Cambridge University Press,
1999): a_n has the Fourier coefficients exp(-n eta |k|), s has 1/(2 cosh(eta k)), both for exp(2 i k x).
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np

from tnquench.conventions import Reals

#: From this eta on nodes are equidistant in x.
EQUIDISTANT_FROM = 0.8

#: The map's scale c in units of u; a string of length n varies over a width n/2 in u.
MAP_SCALE = 3.0

#: Trapezoidal rule for s in u: spacing and half width; s falls like exp(-pi |u|).
QUADRATURE_SPACING = 0.04
QUADRATURE_REACH = 13.0

#: Periodic images of sech(pi u) that are summed, and where exponentials are cut to avoid overflow.
IMAGES = 16
LARGEST_EXPONENT = 600.0


@dataclass(frozen=True, eq=False)
class GappedGrid:
    """Nodes u > 0 in ascending order; functions of either parity are known by their values there.

    eta        : arcosh |D|, zero at |D| = 1
    angles     : (node,) phi; rapidities : (node,) u
    weights    : (node,) sum w f is the integral of an even f over the whole period of u
    source     : (node,) s per unit of u, with the integral 1/2
    smoothing  : (2, node, node) convolution with s, of even [0] and odd [1] functions
    poisson    : (2, node, node) convolution with a_1
    """

    eta: float
    angles: Reals
    rapidities: Reals
    weights: Reals
    source: Reals
    smoothing: Reals
    poisson: Reals

    @property
    def nodes(self) -> int:
        """Number of nodes u > 0."""
        return int(self.angles.size)

    @property
    def energy_scale(self) -> float:
        """sinh(eta)/eta: the driving term of the first string is -pi J times this times `source`."""
        return float(np.sinh(self.eta) / self.eta) if self.eta else 1.0


@lru_cache(maxsize=32)
def gapped_grid(eta: float, nodes: int) -> GappedGrid:
    """Return the grid with `nodes` positive rapidities at |D| = cosh(eta); cached and read-only."""
    angles = (np.arange(nodes) + 0.5) * np.pi / (2 * nodes)
    scale = map_scale(eta)
    bend = np.cos(angles) ** 2 + scale**2 * np.sin(angles) ** 2 if eta else np.cos(angles) ** 2
    rapidities = _rapidity(eta, angles)
    slopes = scale / bend / (eta if eta else 1.0)
    arrays = {
        "angles": angles,
        "rapidities": rapidities,
        "weights": slopes * np.pi / nodes,
        "source": source(eta, rapidities),
        "smoothing": _smoothing(eta, angles),
        "poisson": _poisson(eta, angles),
    }
    for array in arrays.values():
        array.flags.writeable = False
    return GappedGrid(eta, **arrays)


def map_scale(eta: float) -> float:
    """Return c of tan(x) = c tan(phi), or of u = c tan(phi) at eta = 0."""
    if eta >= EQUIDISTANT_FROM:
        return 1.0
    return float(np.tanh(MAP_SCALE * eta)) if eta else MAP_SCALE


def _rapidity(eta: float, angles: Reals) -> Reals:
    scale = map_scale(eta)
    if not eta:
        return np.asarray(scale * np.tan(angles))
    return np.asarray(np.arctan2(scale * np.sin(angles), np.cos(angles)) / eta)


def angle(eta: float, rapidities: Reals) -> Reals:
    """Return the angle phi (modulo pi) of rapidities u, any shape."""
    scale = map_scale(eta)
    if not eta:
        return np.asarray(np.arctan(rapidities / scale))
    return np.asarray(np.arctan2(np.sin(eta * rapidities), scale * np.cos(eta * rapidities)))


def source(eta: float, rapidities: Reals) -> Reals:
    """Return s per unit of u: sech(pi u)/2, summed over periods pi/eta; any shape."""
    if eta >= EQUIDISTANT_FROM:
        order = np.arange(1.0, LARGEST_EXPONENT / eta)
        waves = np.cos(2.0 * eta * np.multiply.outer(rapidities, order))
        return np.asarray(eta / np.pi * (0.5 + waves @ (1.0 / np.cosh(eta * order))))
    shifts = np.arange(-IMAGES, IMAGES + 1) * np.pi / eta if eta else np.zeros(1)
    distance = np.abs(np.subtract.outer(rapidities, shifts))
    return np.asarray((np.exp(-np.pi * distance) / (1.0 + np.exp(-2.0 * np.pi * distance))).sum(axis=-1))


def to_modes(angles: Reals) -> tuple[Reals, Reals]:
    """Return (mode, node) matrices to coefficients of cos(2 k phi), k = 0.., and of sin(2 k phi), k = 1.."""
    nodes = angles.size
    order = np.arange(nodes)[:, None]
    even = 2.0 / nodes * np.cos(2.0 * order * angles)
    odd = 2.0 / nodes * np.sin(2.0 * (order + 1) * angles)
    even[0] *= 0.5
    odd[-1] *= 0.5
    return even, odd


def _smoothing(eta: float, angles: Reals) -> Reals:
    """Return the convolution with s as node matrices for both parities."""
    even, odd = to_modes(angles)
    nodes = angles.size
    if eta >= EQUIDISTANT_FROM:
        order = np.arange(nodes + 1)
        transfer = np.exp(-eta * order) / (1.0 + np.exp(-2.0 * eta * order))
        cosine, sine = (wave(np.multiply.outer(angles, 2.0 * order)) * transfer for wave in (np.cos, np.sin))
        return np.stack([cosine[:, :-1] @ even, sine[:, 1:] @ odd])
    steps = np.arange(-QUADRATURE_REACH, QUADRATURE_REACH + 1e-9, QUADRATURE_SPACING)
    weights = 0.5 * QUADRATURE_SPACING / np.cosh(np.pi * steps)
    wave = np.exp(2j * angle(eta, np.add.outer(_rapidity(eta, angles), steps)))
    powers = np.empty((nodes + 1, nodes), dtype=np.complex128)
    power = np.ones_like(wave)
    for row in powers:
        row[:] = power @ weights
        power *= wave
    return np.stack([powers[:-1].real.T @ even, powers[1:].imag.T @ odd])


def _poisson(eta: float, angles: Reals) -> Reals:
    """Return the convolution with a_1: a function analytic in the upper half-plane moves up by eta/2.

    exp(2 i phi) is one, and so are its powers; real and imaginary parts give cosines and sines.
    """
    even, odd = to_modes(angles)
    raised = _rapidity(eta, angles) + 0.5j
    tangent = (np.tan(eta * raised) if eta else raised) / map_scale(eta)
    wave = (1.0 + 1j * tangent) / (1.0 - 1j * tangent)
    powers = wave[:, None] ** np.arange(angles.size + 1)
    return np.stack([powers[:, :-1].real @ even, powers[:, 1:].imag @ odd])
