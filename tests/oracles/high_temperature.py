"""Exact high-temperature series of the infinite XXZ chain from the moments of two short open chains.

ln Z = L ln 2 + sum_n (-beta)^n kappa_n / n! with the cumulants kappa_n of H - h Sz at infinite temperature.
By the linked cluster theorem kappa_n is a sum over connected clusters of n terms, which cover at most n bonds
(e.g. J. Oitmaa, C. Hamer, W. Zheng, Series Expansion Methods, Cambridge 2006). A cluster of w sites fits into
an open chain in L - w + 1 places, so kappa_n(L) - kappa_n(L - 1) counts each once as soon as L > n: that is
the cumulant per site of the infinite chain.
"""

from __future__ import annotations

from math import comb, factorial

import numpy as np
from numpy.typing import NDArray

from tests.oracles.exact_chain import local_hamiltonian, magnetisations

Reals = NDArray[np.float64]


def cumulants(*, sites: int, anisotropy: float, field: float, coupling: float, order: int) -> list[float]:
    """Cumulants 0, kappa_1, ... kappa_order of H - h Sz of an open chain at infinite temperature."""
    terms = local_hamiltonian(sites=sites, anisotropy=anisotropy, coupling=coupling)
    charges = magnetisations(sites=sites)
    levels = np.linalg.eigvalsh((sum(terms) - field * sum(charges)).toarray())
    moments = [float(np.mean(levels**power)) for power in range(order + 1)]
    values = [0.0]
    for n in range(1, order + 1):
        lower = sum(comb(n - 1, m - 1) * values[m] * moments[n - m] for m in range(1, n))
        values.append(moments[n] - lower)
    return values


def series(*, anisotropy: float, field: float, coupling: float = 1.0, order: int = 8) -> Reals:
    """Coefficients c_n of -beta f = sum_n c_n beta^n per site, n = 0..order, at fixed field; c_0 = ln 2."""
    longer, shorter = (
        cumulants(sites=sites, anisotropy=anisotropy, field=field, coupling=coupling, order=order)
        for sites in (order + 1, order)
    )
    differences = np.subtract(longer, shorter)
    signs = np.array([(-1.0) ** n / factorial(n) for n in range(order + 1)])
    return np.asarray(signs * differences + np.log(2.0) * (np.arange(order + 1) == 0))
