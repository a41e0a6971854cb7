"""Free energy of the infinite XXZ chain, D >= 1, from the quantum transfer matrix, without strings.

The equation of tests/oracles/transfer_matrix.py with real eta = arcosh(D) (A. Kluemper, Z. Phys. B 91, 507
(1993); F. Goehmann, A. Kluemper, A. Seel, J. Phys. A 37, 7625 (2004); from memory, settled by the checks in
the tests). The Bethe roots now lie along the imaginary axis, periodic with i pi, between kernel poles at real
distance eta; at D = 1 all hyperbolic functions become their arguments (w in units of eta). Written out:
  ln a(w) = -beta h - (beta J / 2) sinh(eta) e(w) - int dv/(2 pi i) K(w - v) ln(1 + a(v)),
  e(w) = sinh(eta) / [sinh(w) sinh(w + eta)],   K(w) = sinh(2 eta) / [sinh(w + eta) sinh(w - eta)],
  f = -h/2 + J D/4 - (1/beta) int dv/(2 pi i) e(v) ln(1 + a(v)).
A negative coupling is the chain at -D.
"""

from __future__ import annotations

import numpy as np

from tests.oracles.transfer_matrix import Complexes, ellipse, log_one_plus


def _functions(anisotropy: float, points: Complexes) -> tuple[Complexes, Complexes, float]:
    """Bare function e, kernel K between all points, and the unit of the driving term."""
    distances = points[:, None] - points[None, :]
    if anisotropy == 1.0:
        return 1.0 / (points * (points + 1.0)), 2.0 / ((distances + 1.0) * (distances - 1.0)), 1.0
    eta = np.arccosh(anisotropy)
    bare = np.sinh(eta) / (np.sinh(points) * np.sinh(points + eta))
    kernel = np.sinh(2.0 * eta) / (np.sinh(distances + eta) * np.sinh(distances - eta))
    return bare, kernel, float(np.sinh(eta))


def free_energy(
    *,
    anisotropy: float,
    beta: float,
    field: float,
    coupling: float = 1.0,
    width: float = 0.43,
    stretch: float = 1.0,
    nodes: int = 384,
) -> float:
    """Free energy per site of exp[-beta (H - h Sz)], anisotropy >= 1.

    width   : real half axis of the elliptic contour as a fraction of eta; below 1/2
    stretch : lengthens the contour along the imaginary axis; the result must not depend on it
    Raises ArithmeticError if Newton's method fails or the contour would exceed a period.
    """
    eta = np.arccosh(anisotropy) if anisotropy > 1.0 else 1.0
    strength = np.sinh(eta) if anisotropy > 1.0 else 1.0
    reach = strength * np.sqrt(0.5 * beta * abs(coupling))
    if anisotropy > 1.0:
        reach = float(np.arcsin(min(1.0, reach)))
    length = stretch * max(float(reach), 0.5 * eta)
    if anisotropy > 1.0 and length > 1.5:
        message = f"the contour's half length {length:.3f} comes too near half the period"
        raise ArithmeticError(message)
    turned, turned_weights = ellipse(half_length=length, half_height=width * eta, nodes=nodes)
    points, weights = 1j * turned, 1j * turned_weights
    bare, kernel, unit = _functions(anisotropy, points)
    kernel = kernel * weights
    driving = -beta * field - 0.5 * beta * coupling * unit * bare

    log_a = np.zeros(nodes, dtype=np.complex128)
    for fraction in np.linspace(0.0, 1.0, 1 + int(np.ceil(beta)))[1:]:
        for _ in range(14):
            residual = log_a - fraction * driving + kernel @ log_one_plus(log_a)
            change = np.linalg.solve(np.eye(nodes) + kernel / (1.0 + np.exp(-log_a)), residual)
            log_a = log_a - change
            if np.abs(change).max() < 1e-11 * max(1.0, np.abs(log_a).max()):
                break
        else:
            message = f"Newton's method did not converge at beta = {fraction * beta}"
            raise ArithmeticError(message)
    integral = np.sum(weights * bare * log_one_plus(log_a))
    return float((-0.5 * field + 0.25 * coupling * anisotropy - integral / beta).real)
