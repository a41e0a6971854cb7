"""Extra terms of H beside the integrable chain: fields, potentials, disorder, alternation, exchange."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np

from tnquench.conventions import Reals, site_positions
from tnquench.model.chain import Chain, share_among_bonds
from tnquench.model.pauli import Operator, X, add, scale, string


@dataclass(frozen=True)
class ExtraTerm:
    """One extra term of H.

    kind : what it is; strength : in units of energy, a plain factor for alternation and bond disorder
    seed : of the disorder; anisotropy : of the farther exchange, None for that of the chain
    shape, width, values : of a potential (`harmonic`, `linear`, `box`, `table`; the values one a site)
    in_start : whether it belongs to the energy in the start's exponent
    """

    kind: str
    strength: float = 0.0
    seed: int = 0
    anisotropy: float | None = None
    shape: str = ""
    width: float = 0.0
    values: tuple[float, ...] = ()
    in_start: bool = True


#: Kinds that multiply the two-site part of the parent's bond terms, as factors minus one on bonds (bond,).
BOND_FACTORS: dict[str, Callable[[ExtraTerm, int], Reals]] = {
    "bond_alternation": lambda extra, sites: extra.strength * alternating(sites - 1),
    "bond_disorder": lambda extra, sites: extra.strength * disorder(sites - 1, extra.seed),
}

#: Kinds that couple to a local operator of each site, as coefficients on sites (site,). A field lowers the
#: energy, a potential raises it.
SITE_COEFFICIENTS: dict[str, Callable[[ExtraTerm, int], Reals]] = {
    "staggered_field": lambda extra, sites: -extra.strength * alternating(sites),
    "uniform_field": lambda extra, sites: np.full(sites, -extra.strength),
    "longitudinal_field": lambda extra, sites: np.full(sites, -extra.strength),
    "site_disorder": lambda extra, sites: extra.strength * disorder(sites, extra.seed),
    "potential": lambda extra, sites: potential(extra, site_positions(sites)),
}


def alternating(places: int) -> Reals:
    """Return 1, -1, 1, ... (place,)."""
    return np.where(np.arange(places) % 2, -1.0, 1.0)


def disorder(places: int, seed: int) -> Reals:
    """Return independent numbers, uniform in -1 to 1 (place,); the same for the same seed on any machine."""
    return np.random.Generator(np.random.PCG64(seed)).uniform(-1.0, 1.0, size=places)


def potential(extra: ExtraTerm, x: Reals) -> Reals:
    """Return V at positions x (any shape) in lattice spacings: s x^2/2, s x, or s where |x| > width/2.

    A table gives one value a site, in the order of x. Raises ValueError for an unknown shape.
    """
    if extra.shape == "harmonic":
        return 0.5 * extra.strength * x**2
    if extra.shape == "linear":
        return extra.strength * x
    if extra.shape == "box":
        return np.where(np.abs(x) > 0.5 * extra.width, extra.strength, 0.0)
    if extra.shape == "table":
        return np.asarray(extra.values, dtype=np.float64)
    message = f"no potential of shape {extra.shape!r}"
    raise ValueError(message)


def extra_bond_terms(
    parent: Chain,
    extra: ExtraTerm,
    *,
    carriers: Sequence[Operator],
    farther: Callable[[int, int, ExtraTerm], Operator] | None,
    full_sites: int,
) -> tuple[Operator, ...]:
    """Return what an extra adds to each bond term of `parent`, one operator a bond.

    carriers : the local operator of each site that a field, potential or disorder multiplies
    farther : the term between sites i and i + 2 of `next_nearest`; None where the model has none
    full_sites : length of the chain whose sites signs, disorder and tables belong to; a shorter parent takes
    those in its middle
    Raises ValueError for a kind that the model does not have.
    """
    skipped = (full_sites - parent.sites) // 2
    if extra.kind in BOND_FACTORS:
        factors = BOND_FACTORS[extra.kind](extra, full_sites)[skipped : skipped + parent.sites - 1]
        return tuple(
            scale(_between_sites(term, parent.qubits_per_site), float(factor))
            for term, factor in zip(parent.bond_terms, factors, strict=True)
        )
    if extra.kind in SITE_COEFFICIENTS:
        values = SITE_COEFFICIENTS[extra.kind](extra, full_sites)[skipped : skipped + parent.sites]
        return share_among_bonds(
            [scale(carrier, float(value)) for carrier, value in zip(carriers, values, strict=True)]
        )
    if extra.kind == "next_nearest" and farther is not None:
        return _share_pairs([farther(site, site + 2, extra) for site in range(parent.sites - 2)])
    message = f"this model has no extra term of kind {extra.kind!r}"
    raise ValueError(message)


def longitudinal(sites: int) -> tuple[Operator, ...]:
    """Return sigma^x of each site."""
    return tuple({string((site, X)): 1.0} for site in range(sites))


def _between_sites(term: Operator, qubits_per_site: int) -> Operator:
    """Return the strings of a bond term that act on more than one site."""
    return {
        each: coefficient
        for each, coefficient in term.items()
        if len({qubit // qubits_per_site for qubit, _ in each}) > 1
    }


def _share_pairs(pairs: Sequence[Operator]) -> tuple[Operator, ...]:
    """Spread terms on sites (i, i + 2) over their two bonds, half to each; returns one operator a bond."""
    bonds = len(pairs) + 1
    return tuple(
        add(
            scale(pairs[bond], 0.5) if bond < len(pairs) else {},
            scale(pairs[bond - 1], 0.5) if bond else {},
        )
        for bond in range(bonds)
    )
