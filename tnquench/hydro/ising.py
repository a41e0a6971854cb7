"""The Euler prediction of the Ising chain in a transverse field, whose modes are free fermions.

H = -J sum sigma^x sigma^x - g sum sigma^z has modes of energy epsilon(k) = 2 sqrt(J^2 + g^2 + 2 J g cos k)
and velocity v = d epsilon/dk, k in (-pi, pi), filled by n = 1/(1 + exp(beta epsilon)) in equilibrium. Every
mode flies freely, n(k, x, t) = n(k, x - v t, 0), and turns at the ends. Local averages follow from n alone,
e = int dk/2pi epsilon (n - 1/2), j_E = int dk/2pi v epsilon n, <sigma^z> = int dk/2pi (1/2 - n) d epsilon/dg.
Source: P. Pfeuty, Ann. Phys. 57, 79 (1970), for the modes.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import lru_cache

import numpy as np

from tnquench.conventions import OBSERVABLE_PLACES, Reals
from tnquench.errors import InputError
from tnquench.hydro.prediction import Prediction

#: Order of the columns of averages.
OBSERVABLES = ("energy_density", "energy_current", "transverse_magnetisation")

#: Momenta on each half of the zone, doubled until nothing changes, in panels of Gauss-Legendre points.
FEWEST_MOMENTA, MOST_MOMENTA = 64, 16384
PANEL_POINTS = 32

#: Change under doubling at which refinement stops, and error that it cannot see.
TARGET, FLOOR = 1e-10, 1e-13

#: The claimed error is this many times the last change.
SAFETY = 2.0

#: Places times momenta that are summed together.
BLOCK = 4_000_000

REFERENCES = ("pfeuty_1970",)


@dataclass(frozen=True, eq=False)
class Modes:
    """Modes with velocities >= 0, k in (-pi, 0); those of k > 0 move the other way.

    energy, velocity, response (d epsilon/dg), weights (dk/2pi), all (mode,)
    """

    energy: Reals
    velocity: Reals
    response: Reals
    weights: Reals


def predict_ising(
    *,
    coupling: float,
    transverse_field: float,
    beta: Callable[[Reals], Reals],
    times: Reals,
    sites: Reals,
    bonds: Reals,
    joined: bool,
) -> Prediction:
    """Predict a temperature profile between two ends at which modes turn.

    beta : function of position (any shape) in the chain; times : (time,), not negative
    sites, bonds : (site,), (bond,) positions, symmetric about 0
    joined : whether beta is a sharp step at x = 0, uniform on both sides
    Raises InputError where the modes of two joined halves reach the ends, because that solution is that of an
    infinite chain.
    """
    fastest = 2.0 * min(coupling, abs(transverse_field))
    if joined:
        _refuse_reflection(fastest, times, sites)
    places = np.concatenate([sites, bonds])
    solve = _joined_averages if joined else _smooth_averages
    values, errors = _refined(
        lambda momenta: solve(coupling, transverse_field, beta, times, places, sites, momenta)
    )
    fields: dict[str, Reals] = {}
    grid_error: dict[str, Reals] = {}
    for index, name in enumerate(OBSERVABLES):
        part = slice(None, sites.size) if OBSERVABLE_PLACES[name] == "site" else slice(sites.size, None)
        fields[name], grid_error[name] = values[:, part, index].copy(), errors[:, part, index].copy()
    for each in (fields, grid_error):
        each["energy_current"][:, [0, -1]] = 0.0  # no bond beyond the end sites to carry energy
    return Prediction(
        fields=fields,
        grid_error=grid_error,
        strings_error={name: np.zeros_like(field) for name, field in fields.items()},
        light_cone=(-fastest, fastest),
        method="joined halves (free modes)" if joined else "free modes",
        references=REFERENCES,
    )


def _refuse_reflection(fastest: float, times: Reals, sites: Reals) -> None:
    arrival = (float(sites[-1]) + 1.0) / fastest if fastest else np.inf
    if times.max(initial=0.0) > arrival:
        problem = (
            f"[evolution] until = {times.max():g}: light (velocity {fastest:.4g}) reaches the ends at "
            f"t = {arrival:.4g}; the solution for two joined halves is that of an infinite chain. Stop "
            "earlier, take more sites, or give the step a width"
        )
        subject = "prediction"
        raise InputError(subject, [problem])


def _refined(solve: Callable[[int], Reals]) -> tuple[Reals, Reals]:
    """Double the momenta until the averages settle; return them and their errors."""
    momenta = FEWEST_MOMENTA
    values = solve(momenta)
    while True:
        momenta *= 2
        before, values = values, solve(momenta)
        change = np.abs(values - before)
        if change.max() <= TARGET or momenta >= MOST_MOMENTA:
            return values, SAFETY * change + FLOOR


def modes_between(coupling: float, transverse_field: float, lower: Reals, upper: Reals, nodes: int) -> Modes:
    """Return the modes of |k| between `lower` and `upper`, any equal shapes (...), as arrays (..., node)."""
    points, weights = _panels(nodes // PANEL_POINTS)
    half = 0.5 * (upper - lower)[..., None]
    k = lower[..., None] + half * (1.0 + points)
    product = coupling * transverse_field
    # J^2 + g^2 + 2 J g cos k keeps its digits near the gap as (J - |g|)^2 + 4 |J g| times a square
    gap_side = np.cos(0.5 * k) if product >= 0.0 else np.sin(0.5 * k)
    energy = 2.0 * np.hypot(coupling - abs(transverse_field), 2.0 * np.sqrt(abs(product)) * gap_side)
    energy = np.maximum(energy, np.finfo(np.float64).tiny)  # an empty interval may sit where the gap closes
    velocity = 4.0 * abs(product) * np.sin(k) / energy
    response = 4.0 * (transverse_field + coupling * np.cos(k)) / energy
    return Modes(energy, velocity, response, half * weights / (2.0 * np.pi))


@lru_cache(maxsize=16)
def _panels(count: int) -> tuple[Reals, Reals]:
    """Return Gauss-Legendre points and weights on -1..1 cut into so many equal panels."""
    points, weights = np.polynomial.legendre.leggauss(PANEL_POINTS)
    middles = (2.0 * np.arange(count) + 1.0) / count - 1.0
    return (middles[:, None] + points / count).ravel(), np.tile(weights / count, count)


def _filling(modes: Modes, beta: Reals) -> Reals:
    """Return n - 1/2 of a thermal state, beta broadcast against the modes."""
    return np.asarray(-0.5 * np.tanh(0.5 * beta * modes.energy))


def _sums(modes: Modes, right: Reals, left: Reals) -> Reals:
    """Return averages (..., observable) from n - 1/2 of the modes moving right and left (..., mode)."""
    both = right + left
    return np.stack(
        [
            (modes.weights * modes.energy * both).sum(axis=-1),
            (modes.weights * modes.velocity * modes.energy * (right - left)).sum(axis=-1),
            -(modes.weights * modes.response * both).sum(axis=-1),
        ],
        axis=-1,
    )


def _joined_averages(
    coupling: float,
    transverse_field: float,
    beta: Callable[[Reals], Reals],
    times: Reals,
    places: Reals,
    sites: Reals,
    momenta: int,
) -> Reals:
    """Return averages (time, place, observable) of two joined halves: modes that come from either side."""
    left, middle, right = (float(value) for value in beta(np.array([sites[0], 0.0, sites[-1]])))
    with np.errstate(divide="ignore", invalid="ignore"):
        rays = places / times[:, None]
    rays = np.where(np.isnan(rays), 0.0, rays)
    at_joint = (times[:, None] == 0.0) & (places == 0.0)
    slow, fast = faster_than(coupling, transverse_field, np.abs(rays))
    edges = np.stack([np.zeros_like(slow), slow, fast, np.full_like(slow, np.pi)])
    total = np.zeros((*rays.shape, len(OBSERVABLES)))
    for piece in range(3):  # |k| below, among and above the modes faster than the ray
        modes = modes_between(coupling, transverse_field, edges[piece], edges[piece + 1], momenta)
        quick = np.full(rays.shape, piece == 1)
        from_left_right_movers = np.where(rays > 0.0, quick, True)
        from_left_left_movers = np.where(rays < 0.0, ~quick, False)
        source_right = np.where(from_left_right_movers, left, right)
        source_left = np.where(from_left_left_movers, left, right)
        source_right, source_left = (
            np.where(at_joint, middle, source)[..., None] for source in (source_right, source_left)
        )
        total += _sums(modes, _filling(modes, source_right), _filling(modes, source_left))
    return total


def faster_than(coupling: float, transverse_field: float, speed: Reals) -> tuple[Reals, Reals]:
    """Return the interval of |k|, two arrays of the shape of `speed` >= 0, where |v| exceeds it.

    v^2 = 4 J^2 g^2 (1 - c^2)/(J^2 + g^2 + 2 J g c), c = cos k, is a quadratic equation for c. An empty
    interval stands where no mode is that fast.
    """
    product = coupling * transverse_field
    if product == 0.0:
        return np.full(speed.shape, 0.5 * np.pi), np.full(speed.shape, 0.5 * np.pi)
    fastest = 2.0 * min(abs(coupling), abs(transverse_field))
    square = np.minimum(speed, fastest) ** 2
    linear = square / (4.0 * product)
    constant = square * (coupling**2 + transverse_field**2) / (4.0 * product**2) - 1.0
    root = np.sqrt(np.maximum(linear**2 - constant, 0.0))
    lower, upper = (np.arccos(np.clip(-linear + sign * root, -1.0, 1.0)) for sign in (1.0, -1.0))
    return lower, np.where(speed >= fastest, lower, upper)


def _smooth_averages(
    coupling: float,
    transverse_field: float,
    beta: Callable[[Reals], Reals],
    times: Reals,
    places: Reals,
    sites: Reals,
    momenta: int,
) -> Reals:
    """Return averages (time, place, observable) of a smooth profile between two reflecting ends.

    The modes of L sites obey L k + arg(exp(ik) + J/g) = n pi (Pfeuty 1970), so that a packet of momentum k
    returns as if it had turned where L/2 is lengthened by half the derivative of that phase,
    1/2 + 2 (g^2 - J^2)/epsilon^2.
    """
    ends = np.array([0.0, np.pi])
    modes = modes_between(coupling, transverse_field, ends[:1], ends[1:], momenta)
    modes = Modes(*(each[0] for each in (modes.energy, modes.velocity, modes.response, modes.weights)))
    wall = float(sites[-1]) + 0.75 + (transverse_field**2 - coupling**2) / modes.energy**2
    result = np.empty((times.size, places.size, len(OBSERVABLES)))
    together = max(1, BLOCK // modes.energy.size)
    for row, time in enumerate(times):
        for start in range(0, places.size, together):
            x = places[start : start + together, None]
            right, left = (
                _filling(modes, beta(_folded(x - sign * modes.velocity * time, wall))) for sign in (1.0, -1.0)
            )
            result[row, start : start + together] = _sums(modes, right, left)
    return result


def _folded(x: Reals, wall: Reals) -> Reals:
    """Return positions (..., mode) folded into the chain by reflections at plus and minus `wall` (mode,)."""
    turned = np.mod(x + wall, 4.0 * wall)
    return np.asarray(np.minimum(turned, 4.0 * wall - turned) - wall)
