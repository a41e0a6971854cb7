"""Ground state of the Hubbard chain without field: Lieb and Wu's equations, solved by quadrature.

E. H. Lieb and F. Y. Wu, Phys. Rev. Lett. 20, 1445 (1968); for the dressed energy e.g. F. H. L. Essler et al.,
The One-Dimensional Hubbard Model (Cambridge, 2005). Hopping 1, u = U/4, H with U (n_up - 1/2)(n_down - 1/2):

    epsilon(k) = -2 cos k - U/2 + |mu| + int_{-Q}^{Q} dk' cos k' R(sin k - sin k') epsilon(k'),  epsilon(Q) =
    0, 2 pi rho(k) = 1 + cos k int_{-Q}^{Q} dk' R(sin k - sin k') 2 pi rho(k'),
    R(x) = int dw/2pi exp(i w x)/(1 + exp(2 u |w|)),

below half filling; above it by the particle-hole map. The velocity of charges is epsilon'(Q)/(2 pi rho(Q)).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.integrate import quad
from scipy.optimize import brentq
from scipy.special import i0, i1, j0, j1

Reals = NDArray[np.float64]

NODES = 40


def half_filled_energy(*, repulsion: float) -> float:
    """Energy per site at half filling: -4 int dw/w J_0 J_1/(1 + exp(w U/2)) - U/4."""

    def integrand(w: float) -> float:
        return j0(w) * j1(w) / (w * (1.0 + np.exp(0.5 * w * repulsion))) if w else 0.25

    value, _ = quad(integrand, 0.0, 100.0 / repulsion, limit=1000, epsabs=1e-13, epsrel=0.0)
    return float(-4.0 * value - 0.25 * repulsion)


def half_filled_spin_velocity(*, repulsion: float) -> float:
    """Velocity 2 I_1(2 pi/U)/I_0(2 pi/U) of spins at half filling.

    Source: A. A. Ovchinnikov, Sov. Phys. JETP 30, 1160 (1970) (from memory).
    """
    return float(2.0 * i1(2.0 * np.pi / repulsion) / i0(2.0 * np.pi / repulsion))


def resolvent(distance: Reals, u: float) -> Reals:
    """R(x), any shape, by Gauss quadrature over the frequencies that count."""
    points, weights = np.polynomial.legendre.leggauss(80)
    top = 38.0 / (2.0 * u)
    frequencies, weights = 0.5 * top * (points + 1.0), 0.5 * top * weights
    damped = weights / (1.0 + np.exp(2.0 * u * frequencies)) / np.pi
    return np.asarray(np.cos(distance[..., None] * frequencies) @ damped)


def grand_potential(*, repulsion: float, mu: float) -> tuple[float, float, float]:
    """Return f = <H - mu (N - L)> per site, n and the velocity of charges, off half filling."""
    u = 0.25 * repulsion
    points, weights = np.polynomial.legendre.leggauss(NODES)

    def solve(edge: float) -> tuple[Reals, Reals, Reals, Reals]:
        momenta = np.append(edge * points, edge)
        weighted = np.append(edge * weights, 0.0)
        kernel = resolvent(np.sin(momenta)[:, None] - np.sin(momenta), u) * weighted
        identity = np.eye(momenta.size)
        bare = -2.0 * np.cos(momenta) - 2.0 * u + abs(mu)
        energy = np.linalg.solve(identity - kernel * np.cos(momenta), bare)
        density = np.linalg.solve(identity - np.cos(momenta)[:, None] * kernel, np.ones(momenta.size))
        return momenta, weighted, energy, density / (2.0 * np.pi)

    edge = brentq(lambda trial: float(solve(trial)[2][-1]), 0.02, np.pi - 0.02, xtol=1e-13)
    momenta, weights, energy, density = solve(edge)
    slope = np.polynomial.Legendre.fit(momenta, energy, deg=30).deriv()(edge)
    particles = float(weights @ density)
    value = float(weights @ energy) / (2.0 * np.pi) + u - abs(mu)
    velocity = float(slope / (2.0 * np.pi * density[-1]))
    return value, 1.0 + np.sign(mu) * (1.0 - particles), velocity
