"""What each model is called in the report: its Hamiltonian, its parameters, its unit, its observables."""

# ruff: noqa: RUF001 (formulas hold true minus signs)

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

from tnquench.report.wording import plain

#: Observables in running text where the model has no name of its own for them, and totals.
COMMON_NAMES: dict[str, str] = {
    "energy_density": "energy density",
    "energy_current": "energy current",
    "charge_density": "charge density",
    "charge_current": "charge current",
    "magnetisation": "magnetisation",
    "spin_current": "spin current",
    "double_occupancy": "double occupancy",
    "transverse_magnetisation": "transverse magnetisation",
    "total_energy": "total energy",
    "total_charge": "total charge",
    "total_magnetisation": "total magnetisation",
}

#: Extra terms of H whose kind alone would not be understood.
EXTRA_NAMES: dict[str, str] = {"next_nearest": "coupling of next-nearest neighbours"}

_PARTICLES: dict[str, str] = {
    "charge_density": "particle density",
    "charge_current": "particle current",
    "total_charge": "particle number beyond half filling",
}


@dataclass(frozen=True)
class ModelWords:
    """One model in words.

    kind, hamiltonian : what the chain is, and H in its symbols
    symbols   : setting of [chain] -> its symbol in H, in the order in which they are stated
    unit      : the setting that is the unit of energy where it is 1
    names     : observables and totals that are called otherwise than in `COMMON_NAMES`
    formulas  : what a density is where its name alone does not say, as a formula for an axis
    remarks   : the same in a line for the reader
    references : keys of the works behind the representation of the chain, and behind its solution
    """

    kind: str
    hamiltonian: str
    symbols: Mapping[str, str]
    unit: str = "coupling"
    names: Mapping[str, str] = field(default_factory=dict)
    formulas: Mapping[str, str] = field(default_factory=dict)
    remarks: Mapping[str, str] = field(default_factory=dict)
    references: tuple[str, ...] = ()
    solution: tuple[str, ...] = ()

    @property
    def symbol(self) -> str:
        """Symbol of the unit of energy."""
        return self.symbols.get(self.unit, "J")

    def name(self, observable: str) -> str:
        """Return an observable or a total in running text."""
        common = COMMON_NAMES.get(observable, observable.replace("_", " "))
        return self.names.get(observable, common)


MODELS: dict[str, ModelWords] = {
    "xxz": ModelWords(
        kind="spin-1/2 XXZ",
        hamiltonian="H = J Σ (SˣSˣ + SʸSʸ + D SᶻSᶻ)",
        symbols={"anisotropy": "D", "coupling": "J"},
        names={
            "charge_density": "magnetisation",
            "charge_current": "spin current",
            "total_charge": "total magnetisation",
        },
        solution=("takahashi_1972", "takahashi_1999"),
    ),
    "ising": ModelWords(
        kind="Ising in a transverse field",
        hamiltonian="H = −J Σ σˣσˣ − g Σ σᶻ",
        symbols={"transverse_field": "g", "coupling": "J"},
        formulas={"transverse_magnetisation": r"$\sigma^z$"},
        remarks={"transverse_magnetisation": "the transverse magnetisation, ⟨σᶻ⟩, is not conserved"},
    ),
    "fermion": ModelWords(
        kind="spinless fermions",
        hamiltonian="H = −tₕ Σ (c⁺c + h.c.) + V Σ (n − ½)(n − ½)",
        symbols={"repulsion": "V", "hopping": "tₕ"},
        unit="hopping",
        names=_PARTICLES,
        formulas={"charge_density": "$n - 1/2$"},
        remarks={"charge_density": "the particle density, ⟨n⟩ − ½, is zero at half filling"},
        references=("jordan_1928",),
        solution=("takahashi_1972", "takahashi_1999"),
    ),
    "hubbard": ModelWords(
        kind="Hubbard",
        hamiltonian="H = −tₕ Σ (c⁺c + h.c.) + U Σ (n↑ − ½)(n↓ − ½)",
        symbols={"repulsion": "U", "hopping": "tₕ"},
        unit="hopping",
        names=_PARTICLES,
        formulas={"charge_density": "$n - 1$", "double_occupancy": r"$n_\uparrow n_\downarrow$"},
        remarks={
            "charge_density": "the particle density, ⟨n⟩ − 1, is zero at half filling",
            "magnetisation": "the magnetisation is ⟨n↑ − n↓⟩/2",
            "double_occupancy": "the double occupancy is ⟨n↑n↓⟩",
        },
        references=("jordan_1928",),
    ),
}


def words_of(settings: Mapping[str, Any]) -> ModelWords:
    """Return the words of a run's model from its effective config, plain ones where it has no entry."""
    chain = settings.get("chain", {})
    model = str(chain.get("model", "xxz"))
    return MODELS.get(model) or ModelWords(kind=model, hamiltonian="", symbols={})


def extra_lines(extras: object) -> list[str]:
    """Return each extra term of H in words: what it is and its settings.

    extras : `extra` of the table [chain], a list of tables
    """
    return (
        [_extra(extra) for extra in extras if isinstance(extra, Mapping)] if isinstance(extras, list) else []
    )


def _extra(extra: Mapping[str, Any]) -> str:
    kind = str(extra.get("kind", "unnamed"))
    said = EXTRA_NAMES.get(kind, kind.replace("_", " "))
    if extra.get("shape"):
        said = f"{said} ({extra['shape']})"
    numbers = [
        f"{name.replace('_', ' ')} {plain(value)}"
        for name, value in extra.items()
        if isinstance(value, int | float) and not isinstance(value, bool)
    ]
    if isinstance(extra.get("values"), list):
        numbers.append(f"{len(extra['values'])} values")
    outside = ["absent from the start"] if extra.get("in_start") is False else []
    return ", ".join([said, *numbers, *outside])
