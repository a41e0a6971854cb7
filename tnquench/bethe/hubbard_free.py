"""The Hubbard chain without repulsion: two species of free fermions of energy -2 t_h cos k."""

from __future__ import annotations

import numpy as np

from tnquench.conventions import Reals


def free_hubbard(*, beta: float, mu: float, field: float, momenta: int) -> dict[str, float]:
    """Return thermodynamic functions per site at U = 0 and hopping 1; keys as in `HubbardEquilibrium`.

    momenta : number of equidistant k of the trapezoidal sum, which converges exponentially
    A spin up has energy -2 cos k - mu - h/2, a spin down -2 cos k - mu + h/2, the empty site +mu.
    """
    hopping = -2.0 * np.cos(np.pi * (np.arange(momenta) + 0.5) / momenta)
    potential = mu + 0.5 * field * np.array([[1.0], [-1.0]])
    half = 0.5 * beta * (hopping - potential)  # (species, momentum)
    logarithm = np.logaddexp(half, -half)
    occupation = np.exp(-half - logarithm)
    excess = -0.5 * np.tanh(half)
    up, down = np.mean(excess, axis=1)
    hopping_energy = 2.0 * float(np.mean(occupation * hopping))
    variance = _species_means(np.exp(-2.0 * logarithm))
    log_partition = float(np.sum(np.mean(logarithm - beta * hopping / 2.0, axis=1)))
    return {
        "free_energy": -log_partition / beta,
        "energy": hopping_energy,
        "entropy": float(np.sum(np.mean(logarithm - half * np.tanh(half), axis=1))),
        "density": 1.0 + float(up + down),
        "magnetisation": 0.5 * float(up - down),
        "specific_heat": float(np.sum(_species_means(4.0 * half**2 * np.exp(-2.0 * logarithm)))),
        "susceptibility": 0.25 * beta * float(np.sum(variance)),
        "compressibility": beta * float(np.sum(variance)),
        "double_occupancy": float((up + 0.5) * (down + 0.5)),
    }


def _species_means(values: Reals) -> Reals:
    """Return means over momenta, shape (species,), of values (species, momentum)."""
    return np.asarray(np.mean(values, axis=1))
