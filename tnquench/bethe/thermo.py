"""Equilibrium thermodynamics of every chain of the program, by the model's name.

Each model is solved where its Bethe ansatz (or its free modes) is at home: xxz at |D| < 1 and at |D| >= 1 by
different strings, ising by free modes, fermion as xxz with J = 2 t_h, D = V/(2 t_h) and h = mu, hubbard by
its own strings.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass

from tnquench.bethe.equilibrium import equilibrium
from tnquench.bethe.free import ising_thermodynamics
from tnquench.bethe.functions import ThermodynamicFunctions, refined_functions
from tnquench.bethe.hubbard import hubbard_equilibrium

#: Equidistant momenta of successive refinements of free modes.
MOMENTUM_LADDER = tuple(2**power for power in range(6, 17))

#: Least size to which errors are compared.
SMALL = 1e-3


@dataclass(frozen=True)
class ThermoModel:
    """A model's functions and what they depend on.

    functions : of `beta`, all parameters and potentials, by keyword
    required, scale : parameters without a default, and the one that sets the unit of energy (default 1)
    potentials : `field` h of exp[-beta (H - h S^z)], `mu` of exp[-beta (H - mu N)]
    """

    functions: Callable[..., ThermodynamicFunctions]
    required: tuple[str, ...]
    scale: str
    potentials: tuple[str, ...]

    @property
    def settings(self) -> tuple[str, ...]:
        """Names of all settings but beta."""
        return (*self.required, self.scale, *self.potentials)


def _split(numbers: Mapping[str, float]) -> ThermodynamicFunctions:
    """Return functions from values and errors in one mapping."""
    names = [name for name in numbers if f"{name}_error" in numbers]
    return ThermodynamicFunctions(
        {name: numbers[name] for name in names}, {name: numbers[f"{name}_error"] for name in names}
    )


def _xxz(*, beta: float, anisotropy: float, coupling: float, field: float) -> ThermodynamicFunctions:
    found = equilibrium(anisotropy=anisotropy, beta=beta, field=field, coupling=coupling)
    return _split(found.as_dict())


def _fermion(*, beta: float, repulsion: float, hopping: float, mu: float) -> ThermodynamicFunctions:
    """H - mu N is the spin chain's H - h S^z less mu/2 a site, and n = S^z + 1/2."""
    spins = _xxz(beta=beta, anisotropy=0.5 * repulsion / hopping, coupling=2.0 * hopping, field=mu)
    values = {_AS_FERMIONS.get(name, name): value for name, value in spins.values.items()}
    values["free_energy"] -= 0.5 * mu
    values["density"] += 0.5
    return ThermodynamicFunctions(
        values, {_AS_FERMIONS.get(name, name): error for name, error in spins.errors.items()}
    )


_AS_FERMIONS = {"magnetisation": "density"}


def _ising(*, beta: float, transverse_field: float, coupling: float) -> ThermodynamicFunctions:
    energy = coupling + abs(transverse_field)
    scales = {"free_energy": energy + 1.0 / beta, "energy": energy, "entropy": 1.0 + beta * energy}
    return refined_functions(
        lambda momenta: ising_thermodynamics(
            beta=beta, transverse_field=transverse_field, coupling=coupling, momenta=momenta
        ),
        MOMENTUM_LADDER,
        lambda name, value: scales.get(name, abs(value) + SMALL),
    )


def _hubbard(
    *, beta: float, repulsion: float, hopping: float, mu: float, field: float
) -> ThermodynamicFunctions:
    """The Bethe ansatz counts particles from half filling: H - mu N is H - mu (N - L) less mu a site."""
    found = hubbard_equilibrium(beta=beta, repulsion=repulsion, hopping=hopping, mu=mu, field=field)
    numbers = found.as_dict()
    numbers["free_energy"] -= mu
    return _split(numbers)


THERMO_MODELS: dict[str, ThermoModel] = {
    "xxz": ThermoModel(_xxz, ("anisotropy",), "coupling", ("field",)),
    "ising": ThermoModel(_ising, ("transverse_field",), "coupling", ()),
    "fermion": ThermoModel(_fermion, ("repulsion",), "hopping", ("mu",)),
    "hubbard": ThermoModel(_hubbard, ("repulsion",), "hopping", ("mu", "field")),
}


def thermo(model: str, *, beta: float, **settings: float) -> ThermodynamicFunctions:
    """Return the thermodynamic functions per site of exp[-beta (H - h S^z - mu N)].

    model : a key of THERMO_MODELS; settings : its parameters, named as in [chain], and `field` h or `mu`;
    potentials left out are zero, coupling and hopping 1
    Functions: free_energy, energy (of H alone), entropy (nats), magnetisation (<S^z>, ising: <sigma^z>) or
    density (<n>), specific_heat (at fixed field and mu), susceptibility (derivative of the magnetisation by
    h, of <sigma^z> by g, of the density of `fermion` by mu), and for hubbard compressibility (d n/d mu) and
    double_occupancy besides.
    Raises ValueError or InputError for parameters without an answer, ConvergenceError where none was found.
    """
    entry = THERMO_MODELS[model]
    defaults = {entry.scale: 1.0, **dict.fromkeys(entry.potentials, 0.0)}
    return entry.functions(beta=beta, **(defaults | settings))
