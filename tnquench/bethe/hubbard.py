"""Equilibrium thermodynamics of the Hubbard chain, every number with an error measured by refinement."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import asdict, dataclass

import numpy as np

from tnquench.bethe.functions import refined_functions
from tnquench.bethe.hubbard_equations import hubbard_equations
from tnquench.bethe.hubbard_free import free_hubbard
from tnquench.bethe.hubbard_state import Fields, HubbardState, solve_state
from tnquench.errors import ConvergenceError, InputError

#: Nodes on the line (and momenta) of the successive refinements; momenta at U = 0.
NODE_LADDER = (41, 61, 91, 137, 205, 307, 461)
MOMENTUM_LADDER = tuple(2**power for power in range(5, 16))

#: Refinement stops when every error is below this fraction of the value's scale.
ERROR_TARGET = 1e-11

#: Rounding, as a fraction of the value's scale: the smallest error ever claimed.
ROUNDING = 1e-13

#: Size to which errors of variances are compared, beside their own.
LEAST_SCALE = 0.01

#: States whose free energy is not known to this fraction of its scale are refused.
ERROR_LIMIT = 1e-5

#: Smallest |U|/t_h other than zero: kernels of width U/4 must be resolved.
LEAST_REPULSION = 0.1

KEYS = (
    "free_energy",
    "energy",
    "entropy",
    "density",
    "magnetisation",
    "specific_heat",
    "susceptibility",
    "compressibility",
    "double_occupancy",
)


@dataclass(frozen=True)
class HubbardEquilibrium:
    """Thermodynamic functions per site of exp[-beta (H - h S^z - mu (N - L))], each with its error.

    H = -t_h sum_(i, s) (c+_(i s) c_(i+1 s) + h.c.) + U sum_i (n_up - 1/2)(n_down - 1/2), infinite chain;
    mu = 0 is half filling. Energies in the unit of t_h and U.
    free_energy      : -ln Z/(beta L) of the exponential above: mu multiplies n - 1, not n
    energy           : of H, without the terms of h and mu
    entropy          : in nats
    density          : n = <n_up + n_down>, between 0 and 2
    magnetisation    : m = <S^z> = <n_up - n_down>/2
    specific_heat    : at fixed h and mu
    susceptibility   : dm/dh at fixed beta and mu
    compressibility  : dn/dmu at fixed beta and h
    double_occupancy : <n_up n_down> = df/dU + n/2 - 1/4
    """

    free_energy: float
    energy: float
    entropy: float
    density: float
    magnetisation: float
    specific_heat: float
    susceptibility: float
    compressibility: float
    double_occupancy: float
    free_energy_error: float
    energy_error: float
    entropy_error: float
    density_error: float
    magnetisation_error: float
    specific_heat_error: float
    susceptibility_error: float
    compressibility_error: float
    double_occupancy_error: float

    def as_dict(self) -> dict[str, float]:
        """Return all values and errors by name."""
        return asdict(self)


def hubbard_equilibrium(
    *, repulsion: float, beta: float, mu: float = 0.0, field: float = 0.0, hopping: float = 1.0
) -> HubbardEquilibrium:
    """Return the thermodynamics of exp[-beta (H - h S^z - mu (N - L))].

    repulsion : U, of either sign: zero, or |U| >= 0.1 hopping; beta : inverse temperature > 0
    mu, field : chemical potential of n - 1 and magnetic field h, of either sign; hopping : t_h > 0
    Raises InputError for parameters outside these ranges, ConvergenceError (with the best values) if the
    integral equations are not solved or their discretisation errors stay large.
    Sources: Takahashi (1972), Suzuki (1999), see `hubbard_equations`.
    """
    check_parameters(repulsion=repulsion, beta=beta, mu=mu, field=field, hopping=hopping)
    attractive = repulsion < 0.0
    if attractive:
        mu, field = 0.5 * field, 2.0 * mu
    reduced = {"beta": beta * hopping, "mu": abs(mu) / hopping, "field": abs(field) / hopping}
    values, errors = _refine(abs(repulsion) / hopping, **reduced)
    values["density"] = 1.0 + np.copysign(1.0, mu) * (values["density"] - 1.0)
    values["magnetisation"] *= np.copysign(1.0, field)
    values["double_occupancy"] += 0.5 * (values["density"] - 1.0) + 0.25
    if attractive:
        _exchange_spin_and_charge(values, errors)
    found = _restore_units(values, errors, hopping)
    if not errors["free_energy"] <= ERROR_LIMIT * (1.0 + abs(values["free_energy"])):
        what = f"Hubbard chain at U = {repulsion:g}, beta = {beta:g}, finest grid of {NODE_LADDER[-1]} nodes"
        raise ConvergenceError(what, residual=found.free_energy_error, best=found)
    return found


def check_parameters(*, repulsion: float, beta: float, mu: float, field: float, hopping: float) -> None:
    """Raise InputError with one line per impossible parameter."""
    named = {"repulsion": repulsion, "beta": beta, "mu": mu, "field": field, "hopping": hopping}
    problems = [
        f"{name} = {value}: must be a finite number"
        for name, value in named.items()
        if not np.isfinite(value)
    ]
    if beta <= 0.0:
        problems.append(f"beta = {beta:g}: must be positive (in units of 1/energy)")
    if hopping <= 0.0:
        problems.append(f"hopping = {hopping:g}: must be positive")
    elif 0.0 < abs(repulsion) < LEAST_REPULSION * hopping:
        problems.append(
            f"repulsion = {repulsion:g}: must be 0 or at least {LEAST_REPULSION:g} hopping in size "
            f"(here {LEAST_REPULSION * hopping:g}); smaller ones need a finer grid than there is"
        )
    if problems:
        subject = "Hubbard chain in equilibrium"
        raise InputError(subject, problems, consequence="")


def thermodynamics(state: HubbardState) -> dict[str, float]:
    """Return the thermodynamic functions of a solved state at hopping 1; keys as in `HubbardEquilibrium`.

    double_occupancy is still <(n_up - 1/2)(n_down - 1/2)>. Derivatives are linear responses of the solution.
    """
    beta = state.fields.beta
    spin, charge = state.fields.spin / beta, state.fields.charge / beta
    energy, imbalance, excess = -state.gradient[0], state.gradient[1], state.gradient[2]
    direction = np.array([1.0, spin, charge])
    return {
        "free_energy": -state.log_partition / beta,
        "energy": float(energy),
        "entropy": state.log_partition + float(beta * (energy - spin * imbalance - charge * excess)),
        "density": 1.0 + float(excess),
        "magnetisation": 0.5 * float(imbalance),
        "specific_heat": float(beta**2 * (direction @ state.covariance @ direction)),
        "susceptibility": 0.25 * beta * float(state.covariance[1, 1]),
        "compressibility": beta * float(state.covariance[2, 2]),
        "double_occupancy": -0.25 * state.repulsion_slope / beta,
    }


def _refine(
    repulsion: float, *, beta: float, mu: float, field: float
) -> tuple[dict[str, float], dict[str, float]]:
    """Return values and errors at hopping 1 and U, mu, h >= 0, refining until the errors are small."""
    energy_scale = 2.0 + repulsion / 4.0
    whole = energy_scale + mu + field / 2.0
    scales = {
        "free_energy": whole + 1.0 / beta,
        "energy": energy_scale,
        "entropy": 1.0 + beta * whole,
        "density": 1.0,
        "magnetisation": 1.0,
        "double_occupancy": 1.0 + 0.1 / beta,
        "specific_heat": 0.1 + 1e-3 * (beta * whole) ** 2,
    }
    if repulsion == 0.0:

        def solve_free(momenta: int) -> dict[str, float]:
            values = free_hubbard(beta=beta, mu=mu, field=field, momenta=momenta)
            values["double_occupancy"] -= 0.5 * (values["density"] - 1.0) + 0.25
            return values

        return _refined(solve_free, MOMENTUM_LADDER, scales)
    states: list[HubbardState] = []

    def solve(nodes: int) -> dict[str, float]:
        equations = hubbard_equations(repulsion / 4.0, nodes=nodes)
        start = states.pop() if states else None
        states.append(solve_state(equations, Fields(beta, 0.5 * beta * field, beta * mu), start))
        return thermodynamics(states[0])

    return _refined(solve, NODE_LADDER, scales)


def _refined(
    solve: Callable[[int], dict[str, float]], ladder: tuple[int, ...], scales: dict[str, float]
) -> tuple[dict[str, float], dict[str, float]]:
    found = refined_functions(
        solve,
        ladder,
        lambda key, value: scales.get(key, LEAST_SCALE) + abs(value),
        target=ERROR_TARGET,
        rounding=ROUNDING,
    )
    return dict(found.values), dict(found.errors)


def _exchange_spin_and_charge(values: dict[str, float], errors: dict[str, float]) -> None:
    """Turn results at -U, (h/2, 2 mu) in place of (mu, h), into those at U.

    c_down -> (-1)^i c+_down keeps the hopping and exchanges n - 1 with 2 S^z. Source: H. Shiba, Prog. Theor.
    Phys. 48, 2171 (1972).
    """
    excess, magnetisation = values["density"] - 1.0, values["magnetisation"]
    centred = values["double_occupancy"] - 0.5 * excess - 0.25
    values["density"], values["magnetisation"] = 1.0 + 2.0 * magnetisation, 0.5 * excess
    values["double_occupancy"] = -centred + magnetisation + 0.25
    errors["density"], errors["magnetisation"] = 2.0 * errors["magnetisation"], 0.5 * errors["density"]
    for table in (values, errors):
        compressibility, susceptibility = table["compressibility"], table["susceptibility"]
        table["compressibility"], table["susceptibility"] = 4.0 * susceptibility, 0.25 * compressibility


def _restore_units(values: dict[str, float], errors: dict[str, float], hopping: float) -> HubbardEquilibrium:
    """Return results at hopping 1 in units of `hopping`; the double occupancy has the density's error too."""
    units = {"free_energy": hopping, "energy": hopping}
    units |= {"susceptibility": 1.0 / hopping, "compressibility": 1.0 / hopping}
    errors["double_occupancy"] += 0.5 * errors["density"]
    scaled = {key: float(values[key] * units.get(key, 1.0)) for key in KEYS}
    claims = {f"{key}_error": float(errors[key] * units.get(key, 1.0)) for key in KEYS}
    return HubbardEquilibrium(**scaled, **claims)
