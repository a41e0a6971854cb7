"""Pauli strings on the sites of a chain, and the site at which each is closed between two environments."""

from __future__ import annotations

from collections.abc import Iterable

from tnquench.model.pauli import PauliString

#: Sides of the site at which a string is closed.
LEFT, RIGHT = -1, 1

#: Local operators on consecutive sites.
Letters = tuple[int, ...]

#: First site of a string and its letters from there to its last site, identities only in between.
PlacedString = tuple[int, Letters]


def placed_string(term: PauliString, *, qubits_per_site: int) -> PlacedString:
    """Return a Pauli string as local operators of sites, numbered as in `model.grading`; the identity has no
    place."""
    letters: dict[int, int] = {}
    for qubit, letter in term:
        site, position = divmod(qubit, qubits_per_site)
        letters[site] = letters.get(site, 0) | letter << 2 * position
    first, last = min(letters), max(letters)
    return first, tuple(letters.get(site, 0) for site in range(first, last + 1))


def sides(string: PlacedString, site: int) -> tuple[Letters, int, Letters]:
    """Return the letters left of a site of the string, the one on it, and those right of it; the farthest
    first on both sides."""
    first, letters = string
    return letters[: site - first], letters[site - first], letters[: site - first : -1]


def closing_sites(strings: Iterable[PlacedString]) -> dict[int, list[PlacedString]]:
    """Return for each site the strings to be closed there, so that few environments are needed.

    A string is closed in its middle, where its longer side is as short as it can be; of two middle sites, at
    the one that asks for fewer environments beyond those of the strings before it, the widest first.
    """
    needed: set[tuple[int, int, Letters]] = set()
    closed: dict[int, list[PlacedString]] = {}
    for string in sorted(strings, key=lambda each: (-len(each[1]), each)):
        first, reach = string[0], len(string[1]) - 1
        middles = first + reach // 2, first + (reach + 1) // 2
        wanted = {site: _environments(string, site) for site in middles}
        site = min(middles, key=lambda each: len(wanted[each] - needed))
        needed |= wanted[site]
        closed.setdefault(site, []).append(string)
    return closed


def _environments(string: PlacedString, site: int) -> set[tuple[int, int, Letters]]:
    """Return the (site, side, letters) of all environments by which a string is closed at `site`."""
    left, _, right = sides(string, site)
    return {
        (site + side * (len(letters) - size), side, letters[:size])
        for side, letters in ((LEFT, left), (RIGHT, right))
        for size in range(1, len(letters) + 1)
    }
