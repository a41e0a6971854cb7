"""Closed forms of the XXZ chain at D = 0: free fermions of energy J cos k - h.

Sources: E. Lieb, T. Schultz and D. Mattis, Ann. Phys. 16, 407 (1961); S. Katsura, Phys. Rev. 127, 1508
(1962).
"""

from __future__ import annotations

import numpy as np

from tnquench.conventions import Reals


def free_thermodynamics(*, beta: float, field: float, coupling: float, momenta: int) -> dict[str, float]:
    """Return thermodynamic functions per site of exp[-beta (H - h S^z)] at D = 0.

    momenta : number of equidistant k of the trapezoidal sum, which converges exponentially
    Keys: free_energy, energy (of H), entropy, magnetisation, specific_heat (at fixed field), susceptibility.
    """
    wave = coupling * np.cos(2.0 * np.pi * (np.arange(momenta) + 0.5) / momenta)
    half = 0.5 * beta * (wave - field)
    log_partition = float(np.mean(np.logaddexp(half, -half)))
    occupation = -0.5 * np.tanh(half)  # of S^z per mode
    variance = _fermi_variance(half)
    energy, magnetisation = float(np.mean(wave * occupation)), float(np.mean(occupation))
    return {
        "free_energy": -log_partition / beta,
        "energy": energy,
        "entropy": float(np.mean(np.logaddexp(half, -half) - half * np.tanh(half))),
        "magnetisation": magnetisation,
        "specific_heat": float(np.mean((2.0 * half) ** 2 * variance)),
        "susceptibility": float(beta * np.mean(variance)),
    }


def _fermi_variance(half: Reals) -> Reals:
    """Return 1/(4 cosh^2), any shape, without overflow."""
    return np.asarray(np.exp(-2.0 * np.logaddexp(half, -half)))
