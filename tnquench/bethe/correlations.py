"""Entropy, thermodynamic fluctuations and ballistic correlations of a Bethe-ansatz state.

Static covariances are C_ab = sum int rho (1 - theta) q_a q_b, Drude weights the same with v^2 inside; q are
dressed charges, v is the effective velocity. Source: B. Doyon and H. Spohn, SciPost Phys. 3, 039 (2017).
"""

from __future__ import annotations

import numpy as np
from scipy.special import entr

from tnquench.bethe.model import BetheModel
from tnquench.bethe.states import dress
from tnquench.conventions import Reals


def covariance_matrix(model: BetheModel, filling: Reals, charges: Reals) -> Reals:
    """Return lim <Q_a Q_b>_connected / L, shape (charge, charge).

    filling : (string, node); charges : (charge, string, node) bare one-particle values, for instance
    `model.energy` and `-model.charge` (S^z); both smooth in rapidity
    """
    slopes = model.momentum_derivative[None]
    dressed = dress(model, filling, np.concatenate([slopes, charges]))
    measure = _density(model, filling, dressed[0]) * (1.0 - filling)
    return np.asarray(np.einsum("asn,bsn,sn->ab", dressed[1:], dressed[1:], measure))


def drude_matrix(model: BetheModel, filling: Reals, charges: Reals) -> Reals:
    """Return lim_t lim_L <J_a(t) J_b>_connected / L, shape (charge, charge), of the currents of `charges`.

    Arguments as in `covariance_matrix`. Multiply by beta for the Drude weight of linear response.
    """
    slopes = np.stack([model.momentum_derivative, model.energy_derivative])
    dressed = dress(model, filling, np.concatenate([slopes, charges]))
    measure = _density(model, filling, dressed[0]) * (1.0 - filling) * (dressed[1] / dressed[0]) ** 2
    return np.asarray(np.einsum("asn,bsn,sn->ab", dressed[2:], dressed[2:], measure))


def entropy_density(model: BetheModel, filling: Reals) -> float:
    """Return the entropy per site, in nats, of the state `filling` (string, node).

    Source: C. N. Yang and C. P. Yang, J. Math. Phys. 10, 1115 (1969).
    """
    momentum = dress(model, filling, model.momentum_derivative)
    total = model.signs[:, None] * momentum / (2.0 * np.pi) * model.weights
    return float(np.sum(total * (entr(filling) + entr(1.0 - filling))))


def _density(model: BetheModel, filling: Reals, momentum_dressed: Reals) -> Reals:
    """Return the particle density rho times the integration weights, shape (string, node)."""
    return np.asarray(model.signs[:, None] * filling * momentum_dressed / (2.0 * np.pi) * model.weights)
