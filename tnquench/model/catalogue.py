"""Every model that a config can name: how its chain is built, and what may be added to it."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field, replace

from tnquench.model.chain import Chain
from tnquench.model.extras import ExtraTerm, extra_bond_terms, longitudinal
from tnquench.model.fermions import fermion_chain, hubbard_chain
from tnquench.model.pauli import Operator, X, Z, add, string
from tnquench.model.spins import ising_chain, spin_exchange, xxz_chain

#: The term between sites i and i + 2 of `next_nearest`, from both sites, the extra and the parameters.
FartherTerm = Callable[[int, int, ExtraTerm, Mapping[str, float]], Operator]


@dataclass(frozen=True)
class ModelEntry:
    """One model.

    build : the chain, from `sites` and its parameters by keyword
    parameters : names of its parameters, those of the table [chain]
    profiles : profile of the start -> the charge it couples to, by the observable's name
    field_carrier, potential_carrier : observable to which fields, and potentials and disorder, couple
    farther : its next-nearest-neighbour term, None where there is none; longitudinal : whether a field along
    x may be added
    """

    build: Callable[..., Chain]
    parameters: tuple[str, ...]
    profiles: Mapping[str, str] = field(default_factory=dict)
    field_carrier: str = "charge_density"
    potential_carrier: str = "charge_density"
    farther: FartherTerm | None = None
    longitudinal: bool = False

    def has_extra(self, kind: str) -> bool:
        """Return whether an extra term of this kind may be added."""
        missing = {"next_nearest": self.farther is None, "longitudinal_field": not self.longitudinal}
        return not missing.get(kind, False)


def _farther_exchange(first: int, second: int, extra: ExtraTerm, parameters: Mapping[str, float]) -> Operator:
    anisotropy = parameters["anisotropy"] if extra.anisotropy is None else extra.anisotropy
    return spin_exchange(first, second, coupling=extra.strength, anisotropy=anisotropy)


def _farther_repulsion(first: int, second: int, extra: ExtraTerm, _: Mapping[str, float]) -> Operator:
    return {string((first, Z), (second, Z)): 0.25 * extra.strength}


def _farther_ising(first: int, second: int, extra: ExtraTerm, _: Mapping[str, float]) -> Operator:
    return {string((first, X), (second, X)): -extra.strength}


MODELS: dict[str, ModelEntry] = {
    "xxz": ModelEntry(
        xxz_chain,
        ("coupling", "anisotropy"),
        profiles={"beta_field": "charge_density"},
        farther=_farther_exchange,
    ),
    "ising": ModelEntry(
        ising_chain,
        ("coupling", "transverse_field"),
        field_carrier="transverse_magnetisation",
        potential_carrier="transverse_magnetisation",
        farther=_farther_ising,
        longitudinal=True,
    ),
    "fermion": ModelEntry(
        fermion_chain,
        ("hopping", "repulsion"),
        profiles={"beta_mu": "charge_density"},
        farther=_farther_repulsion,
    ),
    "hubbard": ModelEntry(
        hubbard_chain,
        ("hopping", "repulsion"),
        profiles={"beta_mu": "charge_density", "beta_field": "magnetisation"},
        field_carrier="magnetisation",
    ),
}


def build_chain(
    model: str,
    *,
    sites: int,
    parameters: Mapping[str, float],
    extras: Sequence[ExtraTerm] = (),
    full_sites: int | None = None,
) -> tuple[Chain, tuple[Operator, ...]]:
    """Return a model's chain with all extras, and the bond terms that count as energy in its start.

    model : a key of `MODELS`; parameters : all of its parameters by name
    full_sites : length of the chain to whose sites signs, disorder and tables of the extras belong (a shorter
    chain takes those in its middle), its own if not given
    Raises ValueError for an extra that the model does not have.
    """
    entry = MODELS[model]
    parent = entry.build(sites=sites, **parameters)
    evolved, started = parent.bond_terms, parent.bond_terms
    for extra in extras:
        terms = _extra_terms(entry, parent, extra, parameters, full_sites or sites)
        evolved = tuple(add(*pair) for pair in zip(evolved, terms, strict=True))
        if extra.in_start:
            started = tuple(add(*pair) for pair in zip(started, terms, strict=True))
    return replace(parent, bond_terms=evolved), started


def _extra_terms(
    entry: ModelEntry, parent: Chain, extra: ExtraTerm, parameters: Mapping[str, float], full_sites: int
) -> tuple[Operator, ...]:
    """Return one extra's bond terms."""
    if not entry.has_extra(extra.kind):
        message = f"this model has no extra term of kind {extra.kind!r}"
        raise ValueError(message)
    farther = entry.farther
    return extra_bond_terms(
        parent,
        extra,
        carriers=_carriers(entry, parent, extra.kind),
        farther=None if farther is None else lambda i, j, term: farther(i, j, term, parameters),
        full_sites=full_sites,
    )


def _carriers(entry: ModelEntry, parent: Chain, kind: str) -> Sequence[Operator]:
    """Return the operator of each site to which an extra of this kind couples."""
    if kind == "longitudinal_field":
        return longitudinal(parent.sites)
    name = entry.field_carrier if kind.endswith("_field") else entry.potential_carrier
    return {**parent.charges, **parent.densities}[name]
