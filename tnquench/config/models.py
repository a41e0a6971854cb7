"""What each model takes: its settings in [chain] and its profiles in [start]."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

from tnquench.config.wording import alternatives


@dataclass(frozen=True)
class ModelKeys:
    """Settings of one model beside those that all have.

    parameters  : settings of [chain] with their defaults; None must be given
    profiles    : profiles of [start] beside beta
    hamiltonian : H in words of these settings
    """

    parameters: Mapping[str, float | None]
    profiles: tuple[str, ...]
    hamiltonian: str


MODELS: dict[str, ModelKeys] = {
    "xxz": ModelKeys(
        {"coupling": 1.0, "anisotropy": None},
        ("beta_field",),
        "J sum [SxSx + SySy + D SzSz], spins 1/2, S = sigma/2",
    ),
    "ising": ModelKeys(
        {"coupling": 1.0, "transverse_field": None},
        (),
        "-J sum sigma^x sigma^x - g sum sigma^z, Pauli matrices",
    ),
    "fermion": ModelKeys(
        {"hopping": 1.0, "repulsion": None},
        ("beta_mu",),
        "-t_h sum (c+c + h.c.) + V sum (n - 1/2)(n - 1/2), fermions without spin",
    ),
    "hubbard": ModelKeys(
        {"hopping": 1.0, "repulsion": None},
        ("beta_mu", "beta_field"),
        "-t_h sum (c+c + h.c.) + U sum (n_up - 1/2)(n_dn - 1/2), fermions of two species",
    ),
}

#: Settings of [chain] that only some models take.
PARAMETERS: tuple[str, ...] = tuple(
    dict.fromkeys(key for model in MODELS.values() for key in model.parameters)
)


def takers(key: str) -> str:
    """Return the models that take a parameter or a profile, as prose: model "a" or models "a" and "b"."""
    names = [f'"{name}"' for name, model in MODELS.items() if key in (*model.parameters, *model.profiles)]
    return f"model{'s' if len(names) > 1 else ''} {alternatives(names, last='and')}"


def parameter_values(model: str, given: Mapping[str, object]) -> dict[str, object]:
    """Return the value of each parameter of a model, its default where `given` says nothing or None."""
    return {
        key: default if given.get(key) is None else given[key]
        for key, default in MODELS[model].parameters.items()
    }
