"""Free energy of the infinite XXZ chain, |D| < 1, from the quantum transfer matrix, without strings.

A. Kluemper, Z. Phys. B 91, 507 (1993); with one closed contour as in F. Goehmann, A. Kluemper, A. Seel,
J. Phys. A 37, 7625 (2004). Equations from memory; their signs and the contour were settled by the checks in
tests/test_oracles.py (free fermions at D = 0, exact moments of short chains, independence of the contour).

With D = cos g, eta = i g, and exp[-beta (H - h Sz)], H = J sum_j [SxSx + SySy + D SzSz]:
  ln a(w) = -beta h - (beta J / 2) sinh(eta) e(w) - int dv/(2 pi i) K(w - v) ln(1 + a(v)),
  e(w) = sinh(eta) / [sinh(w) sinh(w + eta)],   K(w) = sinh(2 eta) / [sinh(w + eta) sinh(w - eta)],
  f = -h/2 + J D/4 - (1/beta) int dv/(2 pi i) e(v) ln(1 + a(v)),
both integrals once around the Bethe roots, which gather at the essential singularity at 0, and around nothing
else: the next poles are at w = -eta and, on the contour itself, at w - v = +-eta modulo i pi.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Complexes = NDArray[np.complex128]


def ellipse(*, half_length: float, half_height: float, nodes: int) -> tuple[Complexes, Complexes]:
    """Points and weights dv/(2 pi i) of the trapezoidal rule, exponentially accurate if analytic."""
    angles = 2.0 * np.pi * (np.arange(nodes) + 0.5) / nodes
    points = half_length * np.cos(angles) + 1j * half_height * np.sin(angles)
    tangents = -half_length * np.sin(angles) + 1j * half_height * np.cos(angles)
    return points, tangents / (1j * nodes)


def log_one_plus(log_a: Complexes) -> Complexes:
    """ln(1 + a) on the contour, its phase followed continuously from the right end, where it is small.

    Raises ArithmeticError if the phase does not return to itself: then the contour encloses a wrong number
    of zeros of 1 + a, and the equation does not hold on it.
    """
    shift = np.maximum(log_a.real, 0.0)
    principal = shift + np.log(np.exp(-shift) + np.exp(log_a - shift))
    phase = np.unwrap(np.append(principal.imag, principal.imag[0]))
    if abs(phase[-1] - phase[0]) > 1.0:
        message = "the phase of 1 + a winds around the contour; change its height or its length"
        raise ArithmeticError(message)
    return np.asarray(principal.real + 1j * phase[:-1])


def free_energy(
    *,
    anisotropy: float,
    beta: float,
    field: float,
    coupling: float = 1.0,
    height: float = 0.43,
    stretch: float = 1.0,
    nodes: int = 384,
) -> float:
    """Free energy per site of exp[-beta (H - h Sz)], -1 < anisotropy < 1.

    height  : imaginary half axis of the contour as a fraction of min(g, pi - g); below 1/2
    stretch : lengthens the contour; the result must not depend on height, stretch and nodes
    Solved by Newton's method, the temperature lowered in steps so that the phases stay on their branch.
    Raises ArithmeticError if it fails to converge or if the contour is unsuitable (beta above about 10).
    """
    angle = np.arccos(anisotropy)
    eta = 1j * angle
    narrow = min(angle, np.pi - angle)
    reach = np.arcsinh(np.sin(angle) * np.sqrt(0.5 * beta * coupling))  # the driving term is of order 1 there
    points, weights = ellipse(
        half_length=stretch * max(float(reach), 0.5 * narrow), half_height=height * narrow, nodes=nodes
    )
    distances = points[:, None] - points[None, :]
    kernel = weights * np.sinh(2.0 * eta) / (np.sinh(distances + eta) * np.sinh(distances - eta))
    bare = np.sinh(eta) / (np.sinh(points) * np.sinh(points + eta))
    driving = -beta * field - 0.5 * beta * coupling * np.sinh(eta) * bare

    log_a = np.zeros(nodes, dtype=np.complex128)
    for fraction in np.linspace(0.0, 1.0, 1 + int(np.ceil(0.5 * beta)))[1:]:
        for _ in range(12):
            residual = log_a - fraction * driving + kernel @ log_one_plus(log_a)
            slope = np.eye(nodes) + kernel / (1.0 + np.exp(-log_a))
            change = np.linalg.solve(slope, residual)
            log_a = log_a - change
            if np.abs(change).max() < 1e-11 * max(1.0, np.abs(log_a).max()):
                break
        else:
            message = f"Newton's method did not converge at beta = {fraction * beta}"
            raise ArithmeticError(message)
    integral = np.sum(weights * bare * log_one_plus(log_a))
    return float((-0.5 * field + 0.25 * coupling * anisotropy - integral / beta).real)
