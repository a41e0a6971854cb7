"""What equilibrium thermodynamics of the XXZ chain consists of: values by name, each with its error."""

from __future__ import annotations

from dataclasses import asdict, dataclass

KEYS = ("free_energy", "energy", "entropy", "magnetisation", "specific_heat", "susceptibility")


@dataclass(frozen=True)
class Equilibrium:
    """Thermodynamic functions per site of exp[-beta (H - h S^z)], each with its numerical error.

    Energies in units of the coupling J's unit, energy is that of H (field term left out), entropy in nats,
    specific_heat at fixed field h, susceptibility d magnetisation / d h at fixed beta.
    """

    free_energy: float
    energy: float
    entropy: float
    magnetisation: float
    specific_heat: float
    susceptibility: float
    free_energy_error: float
    energy_error: float
    entropy_error: float
    magnetisation_error: float
    specific_heat_error: float
    susceptibility_error: float

    def as_dict(self) -> dict[str, float]:
        """Return all values and errors by name."""
        return asdict(self)
