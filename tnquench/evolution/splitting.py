"""A sum of bond terms split into groups of commuting gates, and the layers of gates of a Trotter step.

Terms on one site or on neighbours make two groups, the even and the odd bonds. Terms on sites i and i + 2
make two more, with i = 0, 1 and i = 2, 3 modulo 4: in a block of four sites, the first of them i, an exchange
of the two inner sites makes (i, i + 2) and (i + 1, i + 3) neighbours on the block's outer bonds.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass

from tnquench.evolution.gates import Gate, composed, swap_gate
from tnquench.evolution.trotter import TrotterScheme, half_layers
from tnquench.model.grading import Grading
from tnquench.model.pauli import Operator, PauliString, add, string


@dataclass(frozen=True)
class Group:
    """Terms that commute because they act on different sites, and the exchanges that make them neighbours.

    terms : bond -> term on the two sites that the exchanges have brought to the bond; all bonds even or all
            odd
    swaps : bonds whose sites are exchanged before the terms act, and back afterwards
    """

    terms: Mapping[int, Operator]
    swaps: tuple[int, ...] = ()


@dataclass(frozen=True)
class Action:
    """What gates of one group do in a layer: exponentials of `fraction` of a step, or its swaps if None."""

    group: int
    fraction: float | None


#: Gates on bonds that do not overlap, applied in one sweep; where several act on a bond, in this order.
Layer = tuple[Action, ...]


def split(terms: Sequence[Operator], *, sites: int, qubits_per_site: int = 1) -> tuple[Group, ...]:
    """Split a sum of terms, one operator a bond, into groups of commuting gates.

    A string stays with its bond if it acts on the bond's sites alone. Elsewhere a string on one site is
    shared by halves between its bonds (wholly at an end), one on neighbours goes to their bond, one on sites
    i and i + 2 to the groups with exchanges.
    Raises ValueError for a string that acts on any other sites, or if there is not one operator a bond.
    """
    if len(terms) != sites - 1:
        message = f"{len(terms)} bond terms for {sites} sites; one a bond is needed"
        raise ValueError(message)
    near: list[list[Operator]] = [[] for _ in terms]
    far: list[list[Operator]] = [[] for _ in range(sites - 2)]
    for bond, term in enumerate(terms):
        here, elsewhere = _parted(term, bond, qubits_per_site)
        near[bond].append(here)
        for factors, coefficient in elsewhere.items():
            first, width = _extent(factors, sites, qubits_per_site)
            if width == 1:
                adjacent = [place for place in (first - 1, first) if 0 <= place < sites - 1]
                for place in adjacent:
                    near[place].append({factors: coefficient / len(adjacent)})
            elif width == 2:
                near[first].append({factors: coefficient})
            else:
                far[first].append({factors: coefficient})
    bonds = [add(*parts) for parts in near]
    even, odd = ({bond: bonds[bond] for bond in range(parity, sites - 1, 2)} for parity in (0, 1))
    beyond = [add(*parts) for parts in far]
    groups = [_exchanged(beyond, offset, qubits_per_site) for offset in (0, 2)]
    if not any(group.terms for group in groups):
        return Group(even), Group(odd)
    # in this order most exchanges act on odd bonds beside the odd group and are merged with its gates
    return tuple(group for group in (Group(even), groups[0], Group(odd), groups[1]) if group.terms)


def plan(groups: Sequence[Group], scheme: TrotterScheme, steps: int) -> list[Layer]:
    """Return the layers of `steps` time steps; neighbouring actions on bonds of one parity are merged."""
    layers: list[list[Action]] = []
    last = None
    for group, fraction in half_layers(scheme, steps, groups=len(groups)):
        exchange = [Action(group, None)] if groups[group].swaps else []
        for action in (*exchange, Action(group, fraction), *exchange):
            parity = min(_bonds(groups, action), default=group) % 2
            if parity == last:
                layers[-1].append(action)
            else:
                layers.append([action])
            last = parity
    return [tuple(layer) for layer in layers]


class LayerGates:
    """Builds the gates of layers and keeps them: bonds with the same term up to a translation share one.

    Each gate follows from its term and rounded fraction alone, whichever layer asks for it first, so that an
    evolution that is taken up in the middle has the same gates.
    """

    def __init__(
        self, groups: Sequence[Group], grading: Grading, exponential: Callable[[Operator, float], Gate]
    ) -> None:
        """exponential : (term, moved to the first two sites, fraction of a step) -> gate."""
        self.groups = groups
        self.qubits_per_site = grading.qubits_per_site
        self.exponential = exponential
        self.sectors = grading.sectors
        self.swap = swap_gate(grading)
        self.layers: dict[Layer, dict[int, Gate]] = {}
        self.gates: dict[tuple[frozenset[tuple[PauliString, complex]], float], Gate] = {}

    def of(self, layer: Layer) -> dict[int, Gate]:
        """Return the gates of a layer, bond -> gate."""
        key = tuple(  # fractions that are the same number differ in how they were summed up
            Action(action.group, None if action.fraction is None else round(action.fraction, 14))
            for action in layer
        )
        if key not in self.layers:
            gates: dict[int, Gate] = {}
            for action in key:
                for bond in _bonds(self.groups, action):
                    gate = self._gate(action, bond)
                    gates[bond] = composed(gates[bond], gate, sectors=self.sectors) if bond in gates else gate
            self.layers[key] = gates
        return self.layers[key]

    def _gate(self, action: Action, bond: int) -> Gate:
        """Return one action's gate on a bond."""
        if action.fraction is None:
            return self.swap
        term = self.groups[action.group].terms[bond]
        first = bond * self.qubits_per_site
        translated = frozenset(
            (tuple((qubit - first, letter) for qubit, letter in factors), value)
            for factors, value in term.items()
        )
        key = (translated, action.fraction)
        if key not in self.gates:
            self.gates[key] = self.exponential(dict(sorted(translated)), action.fraction)
        return self.gates[key]


def _bonds(groups: Sequence[Group], action: Action) -> Sequence[int]:
    """Return the bonds on which an action has gates."""
    group = groups[action.group]
    return group.swaps if action.fraction is None else list(group.terms)


def _parted(term: Operator, bond: int, qubits_per_site: int) -> tuple[Operator, Operator]:
    """Part a term into the strings on the sites of its bond and all others."""
    qubits = range(bond * qubits_per_site, (bond + 2) * qubits_per_site)
    here = {factors: value for factors, value in term.items() if all(q in qubits for q, _ in factors)}
    return here, {factors: value for factors, value in term.items() if factors not in here}


def _extent(factors: PauliString, sites: int, qubits_per_site: int) -> tuple[int, int]:
    """Return the first site of a string and its width in sites, at most three."""
    touched = sorted({qubit // qubits_per_site for qubit, _ in factors})
    first, width = touched[0], touched[-1] - touched[0] + 1
    if width > 3 or len(touched) == 3 or first < 0 or touched[-1] >= sites:
        message = (
            f"no gate for the string {factors} on sites {touched} of {sites}: terms may act on one site, "
            "on two neighbours, or on sites i and i + 2"
        )
        raise ValueError(message)
    return first, width


def _exchanged(beyond: Sequence[Operator], offset: int, qubits_per_site: int) -> Group:
    """Return the group of the terms on sites i and i + 2 with (i - offset) % 4 = 0 or 1.

    beyond : term of each i, shape (sites - 2,)
    """
    terms: dict[int, Operator] = {}
    swaps: set[int] = set()
    for first, term in enumerate(beyond):
        place = (first - offset) % 4
        if not term or place > 1:
            continue
        block = first - place
        swaps.add(block + 1)
        bond = block + 2 * place
        terms[bond] = {
            _brought(factors, first, bond, qubits_per_site): value for factors, value in term.items()
        }
    return Group(terms, tuple(sorted(swaps)))


def _brought(factors: PauliString, first: int, bond: int, qubits_per_site: int) -> PauliString:
    """Return a string on sites `first` and `first` + 2 as it acts once they are the sites of `bond`."""
    shift = {first: bond - first, first + 2: bond - first - 1}
    return string(
        *((qubit + qubits_per_site * shift[qubit // qubits_per_site], letter) for qubit, letter in factors)
    )
