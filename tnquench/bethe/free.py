"""Closed forms of chains of free fermions: XXZ at D = 0, and Ising in a transverse field.

Sources: E. Lieb, T. Schultz and D. Mattis, Ann. Phys. 16, 407 (1961); S. Katsura, Phys. Rev. 127, 1508
(1962); P. Pfeuty, Ann. Phys. 57, 79 (1970).
"""

from __future__ import annotations

import numpy as np

from tnquench.conventions import Reals

#: Below this tanh is its own first terms.
SMALL = 1e-3


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


def ising_modes(*, transverse_field: float, coupling: float, momenta: int) -> tuple[Reals, Reals]:
    """Return energies and velocities of equidistant modes, each (momenta,); the sign of g does not matter.

    epsilon = 2 sqrt(J^2 + g^2 + 2 J |g| cos k), v = d epsilon/dk; a negative g only moves the momenta by pi.
    """
    wave, product = _waves(momenta), coupling * abs(transverse_field)
    # J^2 + g^2 + 2 J g cos k without cancellation where the gap closes
    square = (coupling - abs(transverse_field)) ** 2 + 2.0 * product * (1.0 + wave)
    energy = 2.0 * np.sqrt(square)
    return energy, -4.0 * product * np.sin(2.0 * np.pi * (np.arange(momenta) + 0.5) / momenta) / energy


def _waves(momenta: int) -> Reals:
    """Return cos k at equidistant k that avoid 0 and pi."""
    return np.asarray(np.cos(2.0 * np.pi * (np.arange(momenta) + 0.5) / momenta))


def ising_thermodynamics(
    *, beta: float, transverse_field: float, coupling: float, momenta: int
) -> dict[str, float]:
    """Return thermodynamic functions per site of exp(-beta H), H = -J sum sigma^x sigma^x - g sum sigma^z.

    Modes of energy epsilon = 2 sqrt(J^2 + g^2 + 2 J g cos k). Keys: free_energy, energy, entropy,
    magnetisation <sigma^z>, specific_heat (at fixed g), susceptibility d <sigma^z>/dg (at fixed beta).
    momenta : number of equidistant k; every integrand is analytic in epsilon^2, so that convergence is
    exponential even where the gap closes
    """
    energies, _ = ising_modes(transverse_field=transverse_field, coupling=coupling, momenta=momenta)
    half = 0.5 * beta * energies
    slope = abs(transverse_field) + coupling * _waves(momenta)
    log_partition = float(np.mean(np.logaddexp(half, -half)))
    energy = -float(np.mean(half * np.tanh(half))) / beta
    aligned = beta * float(np.mean(slope * _tanh_ratio(half)))
    response = beta * np.mean(_tanh_ratio(half) + (beta * slope) ** 2 * _tanh_ratio_slope(half))
    return {
        "free_energy": -log_partition / beta,
        "energy": energy,
        "entropy": log_partition + beta * energy,
        "magnetisation": float(np.copysign(1.0, transverse_field)) * aligned,
        "specific_heat": float(np.mean(4.0 * half**2 * _fermi_variance(half))),
        "susceptibility": float(response),
    }


def _tanh_ratio(x: Reals) -> Reals:
    """Return tanh(x)/x for x >= 0, any shape."""
    return np.asarray(np.where(x < SMALL, 1.0 - x**2 / 3.0, np.tanh(x) / np.maximum(x, SMALL)))


def _tanh_ratio_slope(x: Reals) -> Reals:
    """Return the derivative of tanh(x)/x, divided by x, for x >= 0, any shape."""
    large = np.maximum(x, SMALL)
    value = (4.0 * large * _fermi_variance(large) - np.tanh(large)) / large**3
    return np.asarray(np.where(x < SMALL, -2.0 / 3.0 + 8.0 * x**2 / 15.0, value))


def _fermi_variance(half: Reals) -> Reals:
    """Return 1/(4 cosh^2), any shape, without overflow."""
    return np.asarray(np.exp(-2.0 * np.logaddexp(half, -half)))
