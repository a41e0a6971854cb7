"""States whose filling functions are rough in rapidity: dressing and averages on a fine uniform mesh.

The dressed derivatives e' and p' stay smooth even where the filling jumps or oscillates, because the
scattering kernel smooths. They are therefore kept at the Gauss-Legendre nodes of `BetheModel`, divided by
the window 1/cosh(lambda)^2 so that they stay finite at infinite rapidity, while fillings live on a uniform
rapidity mesh, where the trapezoidal rule converges exponentially (L. N. Trefethen and J. A. C. Weideman,
SIAM Review 56, 385 (2014)).
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property, lru_cache

import numpy as np
from scipy.linalg import lu_factor, lu_solve

from tnquench.bethe.grid import RapidityGrid, interpolation_matrix, rapidity_grid, unit_of_rapidity
from tnquench.bethe.model import BetheModel, bare_functions, xxz_model
from tnquench.bethe.strings import kernel_terms, phase_derivative
from tnquench.conventions import Integers, Reals

#: Rapidities beyond this are left out: every density falls like exp(-2 |lambda|), to 5e-12 here.
MESH_REACH = 13.0

#: Newton steps that place a point; each squares an error that starts well below the spacing.
NEWTON_STEPS = 4

#: Order of the columns of `averages`.
OBSERVABLES: tuple[str, ...] = ("energy_density", "charge_density", "energy_current", "charge_current")


@dataclass(frozen=True)
class Layout:
    """Points of a mesh: integer tau = (points - 1)/2 + lambda/spacing + tanh(lambda)/core_spacing.

    The trapezoidal rule in tau integrates over lambda. Points are dense near zero, where velocities vary
    most.
    """

    spacing: float
    core_spacing: float

    @property
    def points(self) -> int:
        """Number of points, odd."""
        return 2 * int(np.ceil(MESH_REACH / self.spacing + 1.0 / self.core_spacing)) + 1

    def weights(self, rapidities: Reals) -> Reals:
        """Return d lambda / d tau."""
        density = 1.0 / self.spacing + 1.0 / (self.core_spacing * np.cosh(rapidities) ** 2)
        return np.asarray(1.0 / density)

    def rapidities(self, positions: Reals) -> Reals:
        """Return the rapidities at tau = positions, any shape, by Newton's method from a table."""
        counts = positions - 0.5 * (self.points - 1)
        if np.isinf(self.core_spacing):
            return np.asarray(self.spacing * counts)
        rapidities = np.interp(counts, *self._table)
        for _ in range(NEWTON_STEPS):
            excess = self._count(rapidities) - counts
            rapidities = rapidities - excess * self.weights(rapidities)
        return np.asarray(rapidities)

    @cached_property
    def _table(self) -> tuple[Reals, Reals]:
        """Counts and rapidities between which Newton's method starts."""
        rapidities = np.linspace(-2.0 * MESH_REACH, 2.0 * MESH_REACH, 4 * self.points)
        return self._count(rapidities), rapidities

    def _count(self, rapidities: Reals) -> Reals:
        return np.asarray(rapidities / self.spacing + np.tanh(rapidities) / self.core_spacing)


@dataclass(frozen=True, eq=False)
class RapidityMesh:
    """A rapidity mesh with the kernel that takes its fillings to the nodes of `model`.

    grid       : the nodes of `model`
    layout     : where points are; rapidities : (point,), ascending
    spread     : (node, point) interpolation from nodes to mesh
    window     : (point,) 1/cosh^2
    kernel     : (string*point, string*node); (theta f) @ kernel is the convolution of T with sigma theta f,
                 f on the mesh, both f and the result divided by the window
    slopes     : (2, string, node) bare e' and p' divided by the window
    measure    : (string, point) sigma window weight / 2 pi, the weight of theta q f in an average
    energy     : (string, point) bare energy
    """

    model: BetheModel
    grid: RapidityGrid
    layout: Layout
    rapidities: Reals
    spread: Reals
    window: Reals
    kernel: Reals
    slopes: Reals
    measure: Reals
    energy: Reals

    @property
    def shape(self) -> tuple[int, int]:
        """(string, point): the shape of a filling."""
        return self.model.strings, self.rapidities.size


@lru_cache(maxsize=4)
def rapidity_mesh(
    *, anisotropy: float, coupling: float, nodes: int, spacing: float, core_spacing: float = np.inf
) -> RapidityMesh:
    """Return the mesh with points at most `spacing` apart, over `nodes` nodes a string.

    spacing, core_spacing : in units of the finest angle of the strings; the second one is about the distance
        of points near rapidity zero, where it is the smaller one
    Raises UnsupportedAnisotropy where the strings are not finite in number. Cached.
    """
    model = xxz_model(anisotropy=anisotropy, coupling=coupling, nodes=nodes)
    table = model.table
    grid = rapidity_grid(table.state_angle, nodes)
    layout = Layout(spacing * table.finest_angle, core_spacing * table.finest_angle)
    rapidities = layout.rapidities(np.arange(layout.points, dtype=np.float64))
    weights = layout.weights(rapidities)
    window = np.cosh(rapidities) ** -2
    inverse_window = np.cosh(model.rapidities) ** 2
    energy_unit = model.energy[0, 0] / model.momentum_derivative[0, 0] * 2.0 * np.pi  # e = energy_unit * a_n
    return RapidityMesh(
        model=model,
        grid=grid,
        layout=layout,
        rapidities=rapidities,
        spread=interpolation_matrix(grid, unit_of_rapidity(grid, rapidities)).T.copy(),
        window=window,
        kernel=_mesh_kernel(model, rapidities, window * weights),
        slopes=np.stack([model.energy_derivative, model.momentum_derivative]) * inverse_window,
        measure=model.signs[:, None] * window * weights / (2.0 * np.pi),
        energy=energy_unit * bare_functions(phase_derivative, table, rapidities),
    )


def _mesh_kernel(model: BetheModel, rapidities: Reals, weights: Reals) -> Reals:
    """Return T_ab(lambda_node - mu_point) sigma_b weights / window(node), (string*point, string*node)."""
    distance = model.rapidities[None, :] - rapidities[:, None]
    scale = weights[:, None] * np.cosh(model.rapidities) ** 2
    basic: dict[int, Reals] = {}
    kernel = np.zeros((model.strings, rapidities.size, model.strings, model.nodes))
    for row in range(model.strings):
        for column in range(model.strings):
            for residue, count in kernel_terms(model.table, row, column).items():
                if residue not in basic:
                    angle = np.pi * residue / model.table.turn.denominator
                    basic[residue] = scale * phase_derivative(distance, angle=angle)
                kernel[column, :, row] += count * model.signs[column] * basic[residue]
    return kernel.reshape(model.strings * rapidities.size, -1)


@dataclass(frozen=True, eq=False)
class Reference:
    """A state around which others are dressed by iteration.

    filling : (string, point); slopes : (2, string, node) its dressed e', p' over the window
    response : (string*point, string*node), the kernel times the inverse dressing matrix of this state
    """

    filling: Reals
    slopes: Reals
    response: Reals


def reference_state(mesh: RapidityMesh, filling: Reals) -> Reference:
    """Return `filling` (string, point) with its dressed slopes and linear response, by direct solution."""
    factors = _dressing_factors(mesh, filling)
    slopes = lu_solve(factors, mesh.slopes.reshape(2, -1).T, check_finite=False).T
    response = lu_solve(factors, mesh.kernel.T, check_finite=False).T
    return Reference(filling, slopes.reshape(mesh.slopes.shape), np.ascontiguousarray(response))


def dressed_slopes(mesh: RapidityMesh, filling: Reals) -> Reals:
    """Return the dressed e', p' over the window, (2, string, node), of one filling (string, point)."""
    columns = lu_solve(_dressing_factors(mesh, filling), mesh.slopes.reshape(2, -1).T, check_finite=False)
    return np.asarray(columns.T.reshape(mesh.slopes.shape))


def _dressing_factors(mesh: RapidityMesh, filling: Reals) -> tuple[Reals, Integers]:
    """Return the LU factors of 1 + T sigma theta on the nodes."""
    size = mesh.model.strings * mesh.model.nodes
    loaded = mesh.kernel.reshape(mesh.model.strings, -1, size) * filling[..., None]
    matrix = np.ascontiguousarray((mesh.spread @ loaded).reshape(size, size).T)
    matrix.flat[:: size + 1] += 1.0
    factors: tuple[Reals, Integers] = lu_factor(matrix, overwrite_a=True, check_finite=False)
    return factors


def redress(mesh: RapidityMesh, reference: Reference, *, change: Reals, slopes: Reals) -> Reals:
    """Return one iterate of the dressed slopes, (state, function, string, node), of states near a reference.

    f = f_reference - R (change f) with R the reference's response is exact at its fixed point.
    change : (state, string, point) filling minus the reference's; slopes : current iterate, shape as returned
    """
    states, functions = slopes.shape[:2]
    loaded = change[:, None] * (slopes @ mesh.spread)
    correction = loaded.reshape(states * functions, -1) @ reference.response
    return np.asarray(reference.slopes[-functions:] - correction.reshape(slopes.shape))


def averages(mesh: RapidityMesh, filling: Reals, slopes: Reals) -> Reals:
    """Return the mean densities and currents of states, (state, observable) in the order OBSERVABLES.

    Densities integrate q theta sigma p'_dressed / 2 pi, currents q theta sigma e'_dressed / 2 pi, with q = e
    above the ferromagnet for the energy and q = -n for the charge S^z.
    filling : (state, string, point); slopes : (state, 2, string, node) dressed e', p' over the window
    Source: Castro-Alvaredo, Doyon and Yoshimura (2016); Bertini, Collura, De Nardis and Fagotti (2016).
    """
    model = mesh.model
    flow, density = np.moveaxis((mesh.measure * filling)[:, None] * (slopes @ mesh.spread), 1, 0)
    lengths = model.lengths.astype(float)
    return np.stack(
        [
            0.25 * model.coupling * model.anisotropy + np.einsum("rsp,sp->r", density, mesh.energy),
            0.5 - density.sum(axis=2) @ lengths,
            np.einsum("rsp,sp->r", flow, mesh.energy),
            -flow.sum(axis=2) @ lengths,
        ],
        axis=1,
    )


def uniform_averages(mesh: RapidityMesh, filling: Reals) -> Reals:
    """Return the averages (observable,) of one uniform state, filling (string, point)."""
    return np.asarray(averages(mesh, filling[None], dressed_slopes(mesh, filling)[None])[0])
