"""Extra terms of the Hamiltonian, sections [[chain.extra]] told apart by `kind`."""

from __future__ import annotations

from typing import Annotated, Any, ClassVar, Literal

from pydantic import Field, Strict

from tnquench.config.profile import LARGEST_LENGTH, SMALLEST_LENGTH
from tnquench.config.setting import Section, setting

#: Largest energy that an extra term or a coupling may name.
LARGEST_ENERGY = 1e6
#: Largest relative disorder of the bonds.
LARGEST_DISORDER = 10.0
LARGEST_SEED = 10**9

_ENERGY = "J"


def _kind() -> Any:
    return setting("kind of term")


def _energy(meaning: str, **options: Any) -> Any:
    return setting(meaning, unit=_ENERGY, ge=-LARGEST_ENERGY, le=LARGEST_ENERGY, **options)


def _seed() -> Any:
    return setting(
        "seed of the random numbers; the same seed gives the same u", default=0, ge=0, le=LARGEST_SEED
    )


def _in_start() -> Any:
    return setting(
        "true: the term is part of the energy in the start as well; false: it acts from t = 0 on",
        default=True,
    )


class StaggeredField(Section):
    """H - h sum_i (-1)^i q_i: a field that changes sign from site to site, positive on site 0."""

    EXAMPLE: ClassVar[str] = 'kind = "staggered_field"\nstrength = 0.2'

    kind: Literal["staggered_field"] = _kind()
    strength: float = _energy("strength h", symbols=("h",))
    in_start: bool = _in_start()


class UniformField(Section):
    """H - h sum_i q_i. It commutes with H where q is conserved (all models but ising)."""

    EXAMPLE: ClassVar[str] = 'kind = "uniform_field"\nstrength = 0.5'

    kind: Literal["uniform_field"] = _kind()
    strength: float = _energy("strength h", symbols=("h",))
    in_start: bool = _in_start()


class LongitudinalField(Section):
    """H - h sum_i sigma^x_i: a field along the coupled spin components; ising only."""

    EXAMPLE: ClassVar[str] = 'kind = "longitudinal_field"\nstrength = 0.3'

    kind: Literal["longitudinal_field"] = _kind()
    strength: float = _energy("strength h", symbols=("h",))
    in_start: bool = _in_start()


class NextNearest(Section):
    """A coupling of sites i and i + 2 (not hubbard).

    xxz: J2 [SxSx + SySy + D2 SzSz]; ising: -J2 sigma^x sigma^x; fermion: V2 (n - 1/2)(n - 1/2).
    """

    EXAMPLE: ClassVar[str] = 'kind = "next_nearest"\nstrength = 0.2'

    kind: Literal["next_nearest"] = _kind()
    strength: float = _energy("strength J2 (fermion: V2), of either sign", symbols=("J2", "V2"))
    anisotropy: float | None = setting(
        "anisotropy D2 (xxz only)",
        default=None,
        default_rule="that of the chain",
        symbols=("D2", "D", "delta"),
        ge=-1000.0,
        le=1000.0,
    )
    in_start: bool = _in_start()


class BondAlternation(Section):
    """Strong and weak bonds in turn: the two-site part of bond j times 1 + d (-1)^j."""

    EXAMPLE: ClassVar[str] = 'kind = "bond_alternation"\nstrength = 0.1'

    kind: Literal["bond_alternation"] = _kind()
    strength: float = setting(
        "relative strength d; bond 0 is the stronger where it is positive", ge=-1.0, le=1.0
    )
    in_start: bool = _in_start()


class BondDisorder(Section):
    """Random bonds: the two-site part of bond j times 1 + W u_j, u_j uniform in [-1, 1]."""

    EXAMPLE: ClassVar[str] = 'kind = "bond_disorder"\nstrength = 0.2\nseed = 7'

    kind: Literal["bond_disorder"] = _kind()
    strength: float = setting("relative strength W", symbols=("W",), ge=0.0, le=LARGEST_DISORDER)
    seed: int = _seed()
    in_start: bool = _in_start()


class SiteDisorder(Section):
    """A random potential: H + W sum_i u_i q_i, u_i uniform in [-1, 1]."""

    EXAMPLE: ClassVar[str] = 'kind = "site_disorder"\nstrength = 0.5\nseed = 7'

    kind: Literal["site_disorder"] = _kind()
    strength: float = setting("strength W", unit=_ENERGY, symbols=("W",), ge=0.0, le=LARGEST_ENERGY)
    seed: int = _seed()
    in_start: bool = _in_start()


class Potential(Section):
    """H + sum_i V(x_i) q_i: a trap, a slope, walls, or any values."""

    EXAMPLE: ClassVar[str] = 'kind = "potential"\nshape = "harmonic"\nstrength = 0.01'

    kind: Literal["potential"] = _kind()
    shape: Literal["harmonic", "linear", "box", "table"] = setting(
        "harmonic: V = strength x^2/2; linear: V = strength x; box: V = strength where abs(x) > width/2, "
        "else 0; table: V as given"
    )
    strength: float | None = _energy(
        "strength; harmonic: in J a lattice spacing squared, linear: in J a lattice spacing",
        default=None,
        default_rule="must be given for harmonic, linear and box",
    )
    width: float | None = setting(
        "width of the box",
        default=None,
        default_rule="must be given for box",
        unit="the lattice spacing",
        ge=SMALLEST_LENGTH,
        le=LARGEST_LENGTH,
    )
    values: (
        Annotated[
            tuple[Annotated[float, Field(ge=-LARGEST_ENERGY, le=LARGEST_ENERGY)], ...], Strict(strict=False)
        ]
        | None
    ) = setting(
        "values of V from left to right, one a site",
        default=None,
        default_rule="must be given for table, or file",
        unit=_ENERGY,
    )
    file: str | None = setting(
        "instead of values: CSV file with one number a line, as for the profiles of the start", default=None
    )
    in_start: bool = _in_start()


Extra = Annotated[
    StaggeredField
    | UniformField
    | LongitudinalField
    | NextNearest
    | BondAlternation
    | BondDisorder
    | SiteDisorder
    | Potential,
    Field(discriminator="kind"),
]

#: Every kind of extra term by the name it has in the config.
KINDS: dict[str, type[Section]] = {
    "staggered_field": StaggeredField,
    "uniform_field": UniformField,
    "longitudinal_field": LongitudinalField,
    "next_nearest": NextNearest,
    "bond_alternation": BondAlternation,
    "bond_disorder": BondDisorder,
    "site_disorder": SiteDisorder,
    "potential": Potential,
}

#: Models that have a kind, where it is not all of them.
KIND_MODELS: dict[str, tuple[str, ...]] = {
    "longitudinal_field": ("ising",),
    "next_nearest": ("xxz", "ising", "fermion"),
}

#: Settings that each shape of a potential must have; `file` stands for values.
POTENTIAL_KEYS: dict[str, tuple[str, ...]] = {
    "harmonic": ("strength",),
    "linear": ("strength",),
    "box": ("strength", "width"),
    "table": ("values",),
}
