"""The schema of a config: every setting with its bounds, default, unit and meaning."""

from __future__ import annotations

from typing import Annotated, ClassVar, Literal, Self

from pydantic import Strict, model_validator

from tnquench.config.chain import Chain
from tnquench.config.cluster import Cluster
from tnquench.config.energies import bond_energy
from tnquench.config.profile import Profile
from tnquench.config.rules import conflicts, default_time_step
from tnquench.config.setting import Section, setting
from tnquench.config.stretch import Stretch
from tnquench.config.sweep import Sweep


class Start(Section):
    """The initial state, rho_0 proportional to exp[-sum_j beta_j h_j + sum_i (beta mu)_i q_i].

    The charge q is S^z for beta_field (xxz, hubbard), n - 1/2 for beta_mu in fermion, n - 1 for beta_mu in
    hubbard, which takes both; ising conserves no charge and takes beta alone.
    """

    EXAMPLE: ClassVar[str] = 'joint = "coupled"'

    joint: Literal["coupled", "separate"] = setting(
        "coupled: every bond belongs to the start, the bond at x = 0 with the mean of both sides of a step; "
        "separate: the bond at x = 0 is absent from it, with its half of the on-site terms of H on both its "
        "sites (steps and an even number of sites only)",
        default="coupled",
    )
    beta: Profile = setting("inverse temperature, one value a bond", unit="1/J")
    beta_field: Profile | None = setting(
        "product beta h of inverse temperature and field along z, one value a site; absent: no field "
        "(xxz, hubbard)",
        default=None,
    )
    beta_mu: Profile | None = setting(
        "product beta mu of inverse temperature and chemical potential, one value a site; absent: half "
        "filling (fermion, hubbard)",
        default=None,
    )


class Evolution(Section):
    """How long the chain evolves and how finely. Exactly one of discarded_weight and accuracy is given."""

    EXAMPLE: ClassVar[str] = "until = 10.0\nevery = 0.5\ndiscarded_weight = 1e-9\ntime_step = 0.2"

    until: float = setting(
        "time of the last measurement, a whole multiple of every", unit="1/J", symbols=("t",), gt=0.0, le=1e6
    )
    every: float = setting("time between measurements; the first is at 0", unit="1/J", gt=0.0)
    discarded_weight: float | None = setting(
        "squared norm that each cut of a bond may discard, as a fraction of the whole",
        default=None,
        default_rule="none; give it or accuracy",
        symbols=("w", "weight"),
        ge=1e-16,
        le=1e-3,
    )
    accuracy: float | None = setting(
        "largest error that truncation, time step, start and rounding may leave on any observable; the "
        "program chooses weight and time step by pilot runs and verifies them by its error budget (what the "
        "chain's ends and the prediction's grids contribute is reported, but no weight or step mends it)",
        default=None,
        default_rule="none; give it or discarded_weight",
        unit="J",
        ge=1e-10,
        le=0.1,
    )
    time_step: float | None = setting(
        "longest Trotter step; shortened where needed so that a whole number of equal steps fills `every`",
        default=None,
        default_rule="with a weight: 0.2 at order 4, 0.05 at order 2, divided by the energy of a bond, "
        "which is J max(1, abs(D)) for xxz, 2 max(J, abs(g)) for ising, max(2 t_h, abs(V)) for fermion, "
        "2 t_h + abs(U)/4 for hubbard, and more with extra terms; with accuracy: chosen by the program",
        unit="1/J",
        symbols=("dt", "tau", "step"),
        gt=0.0,
    )
    trotter_order: Literal[2, 4] = setting(
        "order of the Suzuki-Trotter scheme", default=4, symbols=("order",)
    )
    bond_ceiling: int = setting(
        "largest bond dimension; where it binds, more than the requested weight is discarded and the dataset "
        "says so",
        default=4000,
        symbols=("chi", "bond_dimension"),
        ge=1,
        le=1_000_000,
    )
    cut: Literal["subspace", "svd", "gram"] = setting(
        "method that cuts a bond: subspace iteration from the previous basis, singular values, or "
        "eigenvectors of the smaller Gram matrix (weights from 1e-13 on)",
        default="subspace",
    )

    @property
    def intervals(self) -> int:
        """Number of intervals between measurements: until / every, a whole number."""
        return round(self.until / self.every)


class Hydrodynamics(Section):
    """The predictions that are compared with the chain."""

    EXAMPLE: ClassVar[str] = 'levels = ["euler"]'

    levels: Annotated[tuple[Literal["euler"], ...], Strict(strict=False)] = setting(
        "levels of the theory; [] computes the chain alone", default=("euler",)
    )


class Budget(Section):
    """How the numerical error is measured and judged."""

    EXAMPLE: ClassVar[str] = 'companions = "full"\nresolve_at = 3.0'

    companions: Literal["full", "none"] = setting(
        "full: cheaper companion runs measure each source of error; none: rigorous bounds only",
        default="full",
    )
    resolve_at: float = setting(
        "a deviation counts as resolved where it exceeds this many times the numerical error",
        default=3.0,
        symbols=("k",),
        gt=0.0,
        le=1e6,
    )


class Config(Section):
    """Everything one run needs; only its title stands above all sections."""

    EXAMPLE: ClassVar[str] = 'title = "Two temperatures joined"'

    title: str = setting(
        "heading of the report",
        default="Untitled",
        max_length=200,
        pattern=r"^[^\x00-\x1f\x7f\u2028\u2029]*$",
    )
    chain: Chain
    start: Start
    evolution: Evolution
    hydrodynamics: Hydrodynamics = Hydrodynamics()
    budget: Budget = Budget()
    stretch: Stretch = Stretch()
    sweep: Sweep = Sweep()
    cluster: Cluster = Cluster()

    @model_validator(mode="after")
    def _settle(self) -> Self:
        """Refuse contradictions, then fill in what follows from other settings: parameters, time step."""
        sections = self.model_dump(exclude={"title"})
        settings = {f"{name}.{key}": value for name, keys in sections.items() for key, value in keys.items()}
        if problems := conflicts(settings):
            raise ValueError("\n".join(problems))
        chain = self.chain.model_copy(update=self.chain.parameters)
        object.__setattr__(self, "chain", chain)  # frozen for everyone else
        energy = bond_energy(chain.model_dump())
        if energy and self.evolution.time_step is None and self.evolution.accuracy is None:
            step = default_time_step(trotter_order=self.evolution.trotter_order, energy=energy)
            settled = self.evolution.model_copy(update={"time_step": step})
            object.__setattr__(self, "evolution", settled)
        return self


#: Tables of a config by name.
SECTIONS: dict[str, type[Section]] = {
    "chain": Chain,
    "start": Start,
    "evolution": Evolution,
    "hydrodynamics": Hydrodynamics,
    "budget": Budget,
    "stretch": Stretch,
    "sweep": Sweep,
    "cluster": Cluster,
}

#: Settings of `[start]` that are profiles, tables with settings of their own.
PROFILES = ("beta", "beta_field", "beta_mu")

#: Settings that are not built yet, and what is there instead.
LATER: dict[str, str] = {}

#: Choices that are not built yet, by setting.
LATER_CHOICES: dict[str, tuple[str, ...]] = {
    "chain.model": (),
    "hydrodynamics.levels": ("diffusive",),
}
