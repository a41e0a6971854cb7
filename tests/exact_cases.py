"""Chains of every model and with every extra: as the program builds them, and from the definitions alone."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import pytest

from tests.oracles import exact_models
from tests.oracles.exact_models import ExactChain
from tests.oracles.exact_quench import exact_quench
from tnquench.conventions import OBSERVABLE_PLACES, Reals, bond_positions, site_positions
from tnquench.model.catalogue import build_chain
from tnquench.model.chain import Chain, start_terms
from tnquench.model.extras import ExtraTerm, disorder
from tnquench.model.pauli import Operator
from tnquench.model.profiles import step
from tnquench.observables.quench import QuantumRecord, Quench, simulate

SIGNS, PLACES = (-1.0) ** np.arange(8), site_positions(8)
TABLE = (0.1, -0.2, 0.3, 0.5, -0.7, 0.4, 0.6, -0.3)
#: Largest difference allowed from exact diagonalisation, at discarded weight 1e-14.
TOLERANCE = 1e-7
#: Steps in each half unit of time that leave the Trotter error below it (Pauli matrices: larger energies).
STEPS = {"xxz": 4, "fermion": 4, "ising": 8, "hubbard": 11}


@dataclass(frozen=True)
class Case:
    """A model with extra terms: as the program builds it, and `exact` from the definitions alone.

    parent : the exact chain whose bond terms are the energy of the start, where it is not `exact`
    """

    model: str
    parameters: Mapping[str, float]
    exact: Callable[[], ExactChain]
    sites: int = 8
    extra: ExtraTerm | None = None
    parent: Callable[[], ExactChain] | None = None
    beta: tuple[float, float] = (0.3, 1.2)
    fields: Mapping[str, tuple[float, float]] = field(default_factory=dict)

    def build(self) -> tuple[Chain, tuple[Operator, ...]]:
        extras = () if self.extra is None else (self.extra,)
        return build_chain(self.model, sites=self.sites, parameters=self.parameters, extras=extras)

    def start(self) -> tuple[Chain, tuple[Operator, ...]]:
        """The chain and the terms of the start's exponent."""
        chain, energy = self.build()
        beta, potentials = self.profiles()
        listed = {name: values.tolist() for name, values in potentials.items()}
        return chain, start_terms(chain, beta=beta.tolist(), potentials=listed, energy=energy)

    def solved(self, times: Sequence[float]) -> dict[str, Reals]:
        """The same quench by exact diagonalisation."""
        beta, potentials = self.profiles()
        return exact_quench(
            self.exact(),
            beta=beta,
            potentials=potentials,
            times=times,
            start=None if self.parent is None else self.parent(),
            entanglement=self.sites != 5,  # of 1024 states it would cost more than all the rest
        )

    def profiles(self) -> tuple[Reals, dict[str, Reals]]:
        beta = step(bond_positions(self.sites), left=self.beta[0], right=self.beta[1])
        places = site_positions(self.sites)
        return beta, {
            name: step(places, left=left, right=right) for name, (left, right) in self.fields.items()
        }


def xxz_case(extra: ExtraTerm | None, *, charged: bool = False, **exact: Any) -> Case:
    fields = {"charge_density": (0.6, -0.4)} if charged else {}
    parameters = {"coupling": 1.0, "anisotropy": 0.5}
    return Case(
        "xxz",
        parameters,
        lambda: exact_models.xxz(sites=8, anisotropy=0.5, **exact),
        extra=extra,
        parent=None if extra is None or extra.in_start else lambda: exact_models.xxz(sites=8, anisotropy=0.5),
        fields=fields,
    )


def ising_case(extra: ExtraTerm | None, **exact: Any) -> Case:
    parameters = {"coupling": 1.0, "transverse_field": 0.7}
    return Case(
        "ising",
        parameters,
        lambda: exact_models.ising(sites=8, transverse_field=0.7, **exact),
        extra=extra,
        beta=(0.5, 2.0),
    )


def fermion_case(extra: ExtraTerm | None, **exact: Any) -> Case:
    return Case(
        "fermion",
        {"hopping": 0.5, "repulsion": 0.8},
        lambda: exact_models.fermion(sites=8, hopping=0.5, repulsion=0.8, **exact),
        extra=extra,
        fields={"charge_density": (0.6, -0.4)},
    )


def hubbard_case(sites: int, extra: ExtraTerm | None = None, **exact: Any) -> Case:
    return Case(
        "hubbard",
        {"hopping": 1.0, "repulsion": 4.0},
        lambda: exact_models.hubbard(sites=sites, repulsion=4.0, **exact),
        sites=sites,
        extra=extra,
        beta=(0.2, 1.0),
        fields={"charge_density": (0.5, -0.3), "magnetisation": (-0.4, 0.2)},
    )


CASES: dict[str, Case] = {
    "ising": ising_case(None),
    "ising, longitudinal field": ising_case(
        ExtraTerm("longitudinal_field", strength=0.3), longitudinal_field=0.3
    ),
    "ising, second neighbours": ising_case(ExtraTerm("next_nearest", strength=0.3), second=0.3),
    "fermion": fermion_case(None),
    "fermion, second neighbours": fermion_case(ExtraTerm("next_nearest", strength=0.6), second=0.6),
    "fermion, potential": fermion_case(
        ExtraTerm("potential", shape="table", values=TABLE), potential=np.array(TABLE)
    ),
    "hubbard, four sites": hubbard_case(4),
    "hubbard, five sites": hubbard_case(5),
    "hubbard, staggered field": hubbard_case(
        4, ExtraTerm("staggered_field", strength=0.7), magnetic_field=0.7 * SIGNS[:4]
    ),
    "hubbard, linear potential": hubbard_case(
        4, ExtraTerm("potential", shape="linear", strength=0.3), potential=0.3 * site_positions(4)
    ),
    "hubbard, alternating": hubbard_case(
        4, ExtraTerm("bond_alternation", strength=0.3), factors=1.0 + 0.3 * SIGNS[:3]
    ),
    "xxz, staggered field": xxz_case(ExtraTerm("staggered_field", strength=0.4), potential=-0.4 * SIGNS),
    "xxz, uniform field": xxz_case(ExtraTerm("uniform_field", strength=0.3), potential=-0.3),
    "xxz, second neighbours": xxz_case(
        ExtraTerm("next_nearest", strength=0.3, anisotropy=0.7), charged=True, second=(0.3, 0.7)
    ),
    "xxz, second neighbours as anisotropic": xxz_case(
        ExtraTerm("next_nearest", strength=-0.4), second=(-0.4, 0.5)
    ),
    "xxz, alternating": xxz_case(ExtraTerm("bond_alternation", strength=0.2), factors=1.0 + 0.2 * SIGNS[:7]),
    "xxz, bond disorder": xxz_case(
        ExtraTerm("bond_disorder", strength=0.4, seed=3), factors=1.0 + 0.4 * disorder(7, 3)
    ),
    "xxz, site disorder": xxz_case(
        ExtraTerm("site_disorder", strength=0.6, seed=4), potential=0.6 * disorder(8, 4)
    ),
    "xxz, harmonic potential": xxz_case(
        ExtraTerm("potential", shape="harmonic", strength=0.1), potential=0.05 * PLACES**2
    ),
    "xxz, box": xxz_case(
        ExtraTerm("potential", shape="box", strength=0.8, width=4.0),
        potential=np.where(np.abs(PLACES) > 2.0, 0.8, 0.0),
    ),
    "xxz, staggered field after the start": xxz_case(
        ExtraTerm("staggered_field", strength=0.4, in_start=False), charged=True, potential=-0.4 * SIGNS
    ),
    "xxz, second neighbours after the start": xxz_case(
        ExtraTerm("next_nearest", strength=0.3, anisotropy=0.7, in_start=False), second=(0.3, 0.7)
    ),
}


def quench(chain: Chain, terms: tuple[Operator, ...], *, weight: float = 1e-14, **settings: Any) -> Quench:
    """A quench sampled at t = 0, 0.5, 1, 1.5, 2 in small steps of order 4, cut by SVD."""
    defaults = {
        "every": 0.5,
        "samples": 4,
        "steps": 8,
        "trotter_order": 4,
        "preparation_weight": 1e-4 * weight,
        "preparation_distance": max(0.03 * np.sqrt(weight), 2e-8),
        "cutting": "svd",
    }
    return Quench(chain=chain, start_terms=terms, discarded_weight=weight, **(defaults | settings))


def compare(record: QuantumRecord, exact: Mapping[str, Reals], *, tolerance: float = TOLERANCE) -> None:
    """Every observable of either side, the totals and ln Z."""
    assert set(record.fields) == set(exact) & set(OBSERVABLE_PLACES)
    for name, values in record.fields.items():
        np.testing.assert_allclose(values, exact[name], rtol=0.0, atol=tolerance, err_msg=name)
    np.testing.assert_allclose(
        record.totals["total_energy"], exact["total_energy"], rtol=0.0, atol=10.0 * tolerance
    )
    assert record.log_partition_function == pytest.approx(
        float(exact["log_partition_function"]), abs=tolerance
    )


def compare_whole_quench(case: Case) -> None:
    """Every observable to 1e-7 at discarded weight 1e-14, t = 0, 0.5, 1, 1.5, 2; the entropies to 1e-6."""
    record = simulate(quench(*case.start(), steps=STEPS[case.model]))
    exact = case.solved(record.times.tolist())
    compare(record, exact)
    if "operator_entanglement" in exact:
        entropies = exact["operator_entanglement"]
        np.testing.assert_allclose(record.operator_entanglement, entropies, rtol=0.0, atol=1e-6)
    assert np.abs(exact["energy_current"]).max() > 1e-2, "nothing flows: an empty comparison"
