"""The XXZ chain at |D| >= 1 for states of either parity: strings, rapidities on the whole period, sources.

In decoupled form a one-particle function q_n is its source q_n - s * (q_(n-1) + q_(n+1)), which for energy
and momentum is s or its derivative on the first string alone, and its growth with n, which is 1 for the
number of turned spins. Energies are counted from the ferromagnet. D < 0: e changes sign (see
`gapped_thermal`).
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np

from tnquench.bethe.gapped_chain import ChainFactors, factor_chain
from tnquench.bethe.gapped_equations import RESIDUAL_LIMIT, GappedEquations
from tnquench.bethe.gapped_grid import (
    EQUIDISTANT_FROM,
    IMAGES,
    LARGEST_EXPONENT,
    GappedGrid,
    gapped_grid,
)
from tnquench.bethe.gapped_tail import tail_correction
from tnquench.bethe.gapped_thermal import gapped_eta, gapped_thermal, ground_state_energy
from tnquench.bethe.states import fermi
from tnquench.conventions import Reals
from tnquench.errors import ConvergenceError


@dataclass(frozen=True, eq=False)
class GappedModel:
    """Strings of length 1..strings on `nodes` rapidities over the whole period, ascending and symmetric.

    anisotropy, coupling : D, J; half : the grid of positive rapidities
    angles, rapidities, weights : (node,) phi, u and the weight of the integral over u
    smoothing, poisson : (node, node) convolutions with s and a_1
    momentum_source, energy_source, energy_slope_source : (node,) of p' = dp/du, e and e' = de/du
    ground_energy : energy per site of the antiferromagnet's ground state, times the sign of D
    """

    anisotropy: float
    coupling: float
    strings: int
    half: GappedGrid
    angles: Reals
    rapidities: Reals
    weights: Reals
    smoothing: Reals
    poisson: Reals
    momentum_source: Reals
    energy_source: Reals
    energy_slope_source: Reals
    ground_energy: float

    @property
    def nodes(self) -> int:
        """Number of rapidity nodes of each string."""
        return int(self.rapidities.size)

    @property
    def strength(self) -> float:
        """J sinh(eta)/eta with the sign of D: e = -strength p'/2."""
        return float(np.copysign(self.coupling * self.half.energy_scale, self.anisotropy))


@lru_cache(maxsize=16)
def gapped_model(*, anisotropy: float, coupling: float = 1.0, strings: int, nodes: int) -> GappedModel:
    """Return the model at |D| >= 1 with an even number of `nodes`. Cached: the arrays are read-only.

    Raises ValueError at |D| < 1.
    """
    half = gapped_grid(gapped_eta(anisotropy), nodes // 2)
    strength = np.copysign(coupling * half.energy_scale, anisotropy)
    positive = source_slope(half.eta, half.rapidities)
    arrays = {
        "angles": _both_signs(half.angles, odd=True),
        "rapidities": _both_signs(half.rapidities, odd=True),
        "weights": 0.5 * _both_signs(half.weights),
        "smoothing": _whole(half.smoothing),
        "poisson": _whole(half.poisson),
        "momentum_source": 2.0 * np.pi * _both_signs(half.source),
        "energy_source": -np.pi * strength * _both_signs(half.source),
        "energy_slope_source": -np.pi * strength * _both_signs(positive, odd=True),
    }
    for array in arrays.values():
        array.flags.writeable = False
    ground = float(np.copysign(1.0, anisotropy)) * ground_state_energy(anisotropy, coupling)
    return GappedModel(anisotropy, coupling, strings, half, **arrays, ground_energy=ground)


def _both_signs(positive: Reals, *, odd: bool = False) -> Reals:
    """Return values at all rapidities (..., node) of a function known at positive ones."""
    return np.concatenate([(-1.0 if odd else 1.0) * positive[..., ::-1], positive], axis=-1)


def _whole(parities: Reals) -> Reals:
    """Return the (node, node) operator on all rapidities from those on even and odd functions."""
    same, other = 0.5 * (parities[0] + parities[1]), 0.5 * (parities[0] - parities[1])
    return np.block([[same[::-1, ::-1], other[::-1]], [other[:, ::-1], same]])


def source_slope(eta: float, rapidities: Reals) -> Reals:
    """Return the derivative by u of `gapped_grid.source`; any shape."""
    if eta >= EQUIDISTANT_FROM:
        order = np.arange(1.0, LARGEST_EXPONENT / eta)
        waves = np.sin(2.0 * eta * np.multiply.outer(rapidities, order))
        return np.asarray(-2.0 * eta**2 / np.pi * (waves @ (order / np.cosh(eta * order))))
    shifts = np.arange(-IMAGES, IMAGES + 1) * np.pi / eta if eta else np.zeros(1)
    distance = np.pi * np.subtract.outer(rapidities, shifts)
    decay = np.exp(-np.abs(distance))
    return np.asarray((-np.pi * np.tanh(distance) * decay / (1.0 + decay**2)).sum(axis=-1))


@dataclass(frozen=True, eq=False)
class GappedState:
    """A state by its filling functions (string, node) and what the longer strings tend to.

    half_field : the limit of ln(eta_n)/(2 n), |beta h|/2 of a thermal state
    sign       : of the magnetisation, which fillings do not know
    """

    filling: Reals
    half_field: float = 0.0
    sign: float = 1.0

    @property
    def holes(self) -> Reals:
        """1 - theta, (string, node)."""
        return np.asarray(1.0 - self.filling)

    @property
    def tail_ratio(self) -> Reals:
        """C_N = sqrt(sinh(a)^2 + theta_N), (node,); see `gapped_tail`."""
        return np.asarray(np.sqrt(np.sinh(self.half_field) ** 2 + self.filling[-1]))

    @property
    def tail_factor(self) -> Reals:
        """C_(N+1)/C_N, (node,): what takes deviations of string N to N + 1."""
        ratio = self.tail_ratio
        return np.asarray(1.0 - self.filling[-1] / (ratio * (np.cosh(self.half_field) + ratio)))


def gapped_state(model: GappedModel, *, beta: float, beta_field: float = 0.0) -> GappedState:
    """Return the thermal state exp(-beta H + beta_field S^z). Raises ConvergenceError."""
    state = gapped_thermal(
        anisotropy=model.anisotropy, beta=beta, beta_field=beta_field, coupling=model.coupling,
        strings=model.strings, nodes=model.nodes // 2,
    )  # fmt: skip
    return GappedState(_both_signs(fermi(state.log_eta)), state.half_field, float(np.sign(beta_field)))


def generalized_state(model: GappedModel, driving: Reals, *, beta_field: float = 0.0) -> GappedState:
    """Return the state with ln eta_1 = driving + s * ln(1 + eta_2) and the usual equations of longer strings.

    driving : (node,) of either parity; the source of beta e for a thermal state, and so for each further
              conserved charge whose one-particle function has a source on the first string alone
    Raises ConvergenceError with the residual.
    """
    half_field = 0.5 * abs(beta_field)
    equations = GappedEquations(
        model.smoothing, driving, tail_operator(model, half_field), a=half_field, strings=model.strings
    )
    excess, residual = equations.solve()
    if not residual <= RESIDUAL_LIMIT:
        what = f"generalized state at D = {model.anisotropy:.6g}, beta_field = {beta_field:g}"
        raise ConvergenceError(what, residual=residual)
    return GappedState(fermi(equations.constants + excess), half_field, float(np.sign(beta_field)))


@lru_cache(maxsize=16)
def tail_operator(model: GappedModel, half_field: float) -> Reals:
    """Return `gapped_tail.tail_correction` on all rapidities, (node, node); cached."""
    return tail_correction(model.poisson, model.strings, half_field)


def dressing_factors(model: GappedModel, state: GappedState) -> ChainFactors:
    """Return the factorised dressing equations of a state."""
    tail = np.diag(state.tail_factor) + tail_operator(model, state.half_field)
    return factor_chain(model.smoothing, state.holes, tail)
