"""Hubbard chain from Takahashi's strings themselves: both towers to a finite height, simple iteration.

M. Takahashi, Prog. Theor. Phys. 47, 69 (1972), decoupled form (from memory). Hopping 1, u = U/4, s(x) =
1/(4 u cosh(pi x/2u)):

    ln eta_1  = s * ln(1 + eta_2)  - int dk cos k s(x - sin k) ln(1 + 1/zeta)
    ln eta'_1 = s * ln(1 + eta'_2) - int dk cos k s(x - sin k) ln(1 + zeta)
    ln eta_n  = s * ln[(1 + eta_(n-1))(1 + eta_(n+1))]
    ln zeta   = beta kappa + (s * ln[(1 + eta'_1)/(1 + eta_1)])(sin k)
    ln Z/L    = -beta e_0 + int dk rho_0 ln(1 + zeta) + int dk/2pi (s * ln(1 + eta_1))(sin k)

with lim ln(eta_n)/n = beta h, lim ln(eta'_n)/n = 2 beta mu. A tower is cut at height N by the asymptotic form
sqrt(1 + eta_(N+1)) = X cosh a + sqrt(1 + X^2 sinh^2 a), X = sqrt(1 + eta_N), a = beta h/2 or beta mu.
Bessel integrals by quadrature, convolutions on splines over a stretched line: nothing in common with the
package's way of solving.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.integrate import quad
from scipy.interpolate import make_interp_spline
from scipy.special import j0, j1

Reals = NDArray[np.float64]

POINTS = 120
FARTHEST = 14.0  # of arsinh(x/u)
MOMENTA = 64
SPLINE_DEGREE = 7
TARGET = 1e-12


class Convolution:
    """s * f for even f given at stretched nodes x >= 0, constant beyond the last."""

    def __init__(self, u: float) -> None:
        stretched = np.linspace(0.0, FARTHEST, POINTS)
        self.u, self.nodes = u, u * np.sinh(stretched)
        both = np.concatenate([-stretched[:0:-1], stretched])
        mirror = np.vstack([np.eye(POINTS)[:0:-1], np.eye(POINTS)])
        self.spline = make_interp_spline(both, mirror, k=SPLINE_DEGREE)
        self.on_nodes = self.at(self.nodes)

    def at(self, places: Reals) -> Reals:
        """Matrix (place, node) of s * f: trapezoidal sum over the width of s, exponentially accurate."""
        steps = np.linspace(-26.0, 26.0, 261) * self.u
        weights = (steps[1] - steps[0]) / (4.0 * self.u * np.cosh(0.5 * np.pi * steps / self.u))
        matrix = np.zeros((places.size, POINTS))
        for step, weight in zip(steps, weights, strict=True):
            stretched = np.arcsinh((places + step) / self.u)
            matrix += weight * self.spline(np.clip(stretched, -FARTHEST, FARTHEST))
        return matrix


def bare(momenta: Reals, u: float) -> tuple[Reals, Reals]:
    """Return kappa(k) and the ground state's density rho_0(k) at half filling, by quadrature."""

    def integral(function, sine: float) -> float:
        def integrand(w: float) -> float:
            return float(function(w) * np.cos(w * sine) / (1.0 + np.exp(2.0 * u * w)))

        return float(quad(integrand, 0.0, 40.0 / u, limit=400, epsabs=1e-13, epsrel=0.0)[0])

    sines = np.sin(momenta)
    kappa = [integral(lambda w: j1(w) / w if w else 0.5, sine) for sine in sines]
    density = [integral(j0, sine) for sine in sines]
    cosine = np.cos(momenta)
    return (
        -2.0 * cosine - 2.0 * u - 4.0 * np.array(kappa),
        (1.0 + 2.0 * cosine * np.array(density)) / (2.0 * np.pi),
    )


def sweep(tower: Reals, driving: Reals, convolve: Reals, half_field: float) -> Reals:
    """Return ln(1 + eta_n), (string, node), after one pass from the lowest string to the highest."""
    tower = tower.copy()
    for n in range(len(tower)):
        below = tower[n - 1] if n else 0.0
        root = np.exp(0.5 * tower[n])
        highest = root * np.cosh(half_field) + np.sqrt(1.0 + (root * np.sinh(half_field)) ** 2)
        above = tower[n + 1] if n + 1 < len(tower) else 2.0 * np.log(highest)
        tower[n] = np.logaddexp(0.0, convolve @ (below + above) + (driving if n == 0 else 0.0))
    return tower


def constant_tower(strings: int, half_field: float) -> Reals:
    """Return ln(1 + eta_n), (string, 1), without driving: eta_n + 1 = [sinh((n + 1) a)/sinh(a)]^2."""
    multiples = np.arange(2.0, strings + 2.0)
    ratio = np.sinh(multiples * half_field) / np.sinh(half_field) if half_field else multiples
    return np.asarray(2.0 * np.log(ratio)[:, None])


def log_partition(*, repulsion: float, beta: float, mu: float, field: float, strings: int) -> float:
    """Return ln Z per site of exp[-beta (H - h S^z - mu (N - L))] with `strings` of each kind, hopping 1."""
    u = 0.25 * repulsion
    line = Convolution(u)
    momenta = (np.arange(MOMENTA) + 0.5) * np.pi / MOMENTA
    weight = np.pi / MOMENTA
    kappa, density = bare(momenta, u)
    at_charges = line.at(np.sin(momenta))
    distances = np.abs(line.nodes[:, None] - np.sin(momenta)), np.abs(line.nodes[:, None] + np.sin(momenta))
    kernel = sum(
        1.0 / (2.0 * u) * np.exp(-0.5 * np.pi * d / u) / (1.0 + np.exp(-np.pi * d / u)) for d in distances
    )
    onto_line = -weight * np.cos(momenta) * kernel
    halves = 0.5 * beta * abs(field), beta * abs(mu)
    spins, pairs = (constant_tower(strings, half) * np.ones(POINTS) for half in halves)
    before, zeta = np.inf, beta * kappa
    for _ in range(4000):
        zeta = beta * kappa + at_charges @ (pairs[0] - spins[0])
        spins = sweep(spins, onto_line @ np.logaddexp(0.0, -zeta), line.on_nodes, halves[0])
        pairs = sweep(pairs, onto_line @ np.logaddexp(0.0, zeta), line.on_nodes, halves[1])
        charges = 2.0 * weight * density @ np.logaddexp(0.0, zeta)
        result = float(charges + weight / np.pi * np.sum(at_charges @ spins[0]))
        if abs(result - before) < TARGET:
            break
        before = result
    ground = float(2.0 * weight * density @ (-2.0 * np.cos(momenta))) - u
    return result - beta * ground
