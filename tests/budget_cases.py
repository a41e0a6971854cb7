"""Synthetic records and budgets for the tests of the budget: arrays of plausible shape, no physics."""

from __future__ import annotations

from collections.abc import Callable, Sequence

import numpy as np

from tnquench.budget.assess import PredictedLevel, RunSettings, assess
from tnquench.budget.companions import COARSE, LOOSE, SHORT
from tnquench.budget.verdict import ObservableBudget
from tnquench.conventions import ERROR_SOURCES, OBSERVABLE_PLACES, Reals, bond_positions, site_positions
from tnquench.model.chain import start_terms
from tnquench.model.spins import xxz_chain
from tnquench.observables.quench import QuantumRecord, Quench

SITES, SHORTER, SAMPLES = 16, 12, 6
NORMS = {"energy_density": 0.5, "energy_current": 0.25, "charge_density": 0.4, "charge_current": 0.3}
START_ERROR = {"energy_density": 1e-7, "energy_current": 2e-7, "charge_density": 3e-7, "charge_current": 4e-7}
#: What is claimed later: 0.3 of the largest error in units of the norms, 4e-7/0.3, can reach the energy.
CARRIED_ERROR = START_ERROR | {"energy_density": 0.3 * 0.5 * 4e-7 / 0.3}
#: The observables of a run of the XXZ chain.
NAMES = tuple(NORMS)
CUTS = 100.0 * np.arange(SAMPLES)
#: Weight of the companions, thirty times the main run's.
LOOSE_WEIGHT = 3e-7
SETTINGS = RunSettings(step_ratio=3.0, trotter_order=4, resolve_at=3.0)
ROUNDING = 2.0**-52
Perturb = Callable[[str, Reals], Reals]


def positions_of(sites: int) -> dict[str, Reals]:
    return {"site": site_positions(sites), "bond": bond_positions(sites)}


def noise(seed: int, size: float) -> Perturb:
    """An irregular pattern, another one for every observable."""

    def add(name: str, values: Reals) -> Reals:
        generator = np.random.default_rng([seed, list(OBSERVABLE_PLACES).index(name)])
        return np.asarray(values + size * generator.standard_normal(values.shape))

    return add


def unchanged(_name: str, values: Reals) -> Reals:
    return values


def record(
    perturb: Perturb = unchanged,
    *,
    sites: int = SITES,
    weight: float = 1e-8,
    samples: int = SAMPLES,
    names: Sequence[str] = NAMES,
    time_step: float = 0.1,
) -> QuantumRecord:
    """A run whose fields are functions of time and position alone, so that chains of all lengths agree."""
    times = np.arange(samples, dtype=np.float64)
    fields = {}
    for row, name in enumerate(names):
        place = positions_of(sites)[OBSERVABLE_PLACES[name]]
        values = np.cos(0.3 * times[:, None] + 0.2 * (row + 1) * place[None, :])
        fields[name] = perturb(name, values)
    lost = weight * times[:, None] * (1.0 + np.arange(sites - 1)[None, :] / sites)
    return QuantumRecord(
        times=times,
        fields=fields,
        bond_dimension=np.full((samples, sites - 1), 32.0),
        operator_entanglement=np.zeros((samples, sites - 1)),
        discarded_weight=lost,
        angle=0.01 * times,
        norms={name: NORMS.get(name, 1.0) for name in names},
        start_distance=1e-7,
        start_error={name: START_ERROR.get(name, 5e-7) for name in names},
        start_steps=8,
        log_partition_function=0.0,
        totals={"total_energy": np.zeros(samples), "total_charge": np.zeros(samples)},
        events=(),
        seconds=1.0,
        cpu_seconds=1.0,
        cuts=100.0 * times,
        peak_state_bytes=1,
        weight_asked=weight,
        time_step=time_step,
    )


def companions(
    *, loose: Perturb = unchanged, coarse: Perturb | None = None, short: Perturb | None = None
) -> dict[str, QuantumRecord]:
    """Companions that agree with the one before them unless told otherwise: looser, longer step, shorter."""
    coarse = coarse or loose

    def central(name: str, values: Reals) -> Reals:
        full = record(coarse).fields[name]
        removed = (full.shape[1] - values.shape[1]) // 2
        return full[:, removed : full.shape[1] - removed]

    return {
        LOOSE: record(loose, weight=LOOSE_WEIGHT),
        COARSE: record(coarse, weight=LOOSE_WEIGHT, time_step=0.3),
        SHORT: record(short or central, sites=SHORTER, weight=LOOSE_WEIGHT, time_step=0.3),
    }


def judge(
    runs: dict[str, QuantumRecord],
    levels: dict[str, PredictedLevel] | None = None,
    *,
    main: QuantumRecord | None = None,
    settings: RunSettings = SETTINGS,
) -> dict[str, ObservableBudget]:
    return assess(main or record(), runs, levels or {}, positions=positions_of(SITES), settings=settings)


def row(budget: ObservableBudget, source: str) -> Reals:
    return np.asarray(budget.error[ERROR_SOURCES.index(source)])


def expected_numerical(budget: ObservableBudget) -> Reals:
    """Everything but the physics of the start."""
    return np.asarray(sum(row(budget, source) for source in ERROR_SOURCES if source != "initial_gradient"))


LOOSE_NOISE = noise(1, 3e-5)
STEP_NOISE, END_NOISE = noise(3, 2e-4), noise(4, 5e-4)


def free_quench(sites: int = 12) -> Quench:
    chain = xxz_chain(sites=sites, anisotropy=0.0)
    beta = np.where(bond_positions(sites) < 0.0, 0.5, 2.0)
    field = np.where(site_positions(sites) < 0.0, 0.8, -0.3)
    return Quench(
        chain=chain,
        start_terms=start_terms(chain, beta=beta.tolist(), potentials={"charge_density": field.tolist()}),
        every=0.5,
        samples=4,
        steps=3,
        trotter_order=4,
        discarded_weight=1e-5,
        preparation_weight=1e-10,
        preparation_distance=1e-4,
        bond_floor=1,
    )
