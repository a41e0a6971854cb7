"""What the rows of the speed table have in common: their lines, the quenches they time, and the clock."""

from __future__ import annotations

import time
from collections.abc import Iterator, Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass

import numpy as np

from tnquench.conventions import Reals, bond_positions, site_positions
from tnquench.evolution.chain_state import ChainState
from tnquench.evolution.cutting import CutRule
from tnquench.evolution.preparation import prepare
from tnquench.evolution.real_time import Moment, evolve
from tnquench.evolution.trotter import SCHEMES
from tnquench.model.chain import Chain, start_terms
from tnquench.model.grading import Grading, derive_grading
from tnquench.model.pauli import Operator
from tnquench.model.profiles import step
from tnquench.model.spins import xxz_chain
from tnquench.observables.local import LocalObservables


@dataclass(frozen=True)
class Line:
    """One line of the table; passed : None where no target is set."""

    what: str
    target: str
    measured: str
    passed: bool | None = None

    def cells(self, row: str) -> tuple[str, ...]:
        verdict = {None: "", True: "pass", False: "FAIL"}[self.passed]
        return row, self.what, self.target, self.measured, verdict


@dataclass(frozen=True)
class Problem:
    """A chain, the bond terms of its start, and the charges that both leave."""

    name: str
    chain: Chain
    terms: tuple[Operator, ...]
    grading: Grading

    def prepared(self, *, distance: float, weight: float) -> ChainState:
        """The start without bond floor, within `distance` of the exact one; weight : of its first cuts."""
        return prepare(
            self.terms,
            sites=self.chain.sites,
            grading=self.grading,
            distance_target=distance,
            rule=CutRule(weight, bond_floor=1),
        ).state

    def energies(self, state: ChainState) -> Reals:
        """The energy density of every bond (bond,)."""
        operators = {"energy": self.chain.bond_terms}
        meter = LocalObservables(operators, sites=self.chain.sites, grading=self.grading)
        return meter.measure(state)[0]["energy"]

    def evolution(
        self, state: ChainState, rule: CutRule, *, until: float, time_step: float, order: int
    ) -> Iterator[Moment]:
        """The state at t = 0, 1, ..., `until`."""
        return evolve(
            state,
            self.chain.bond_terms,
            every=1.0,
            samples=round(until),
            time_step=time_step,
            scheme=SCHEMES[order],
            rule=rule,
        )


def two_temperatures(sites: int, anisotropy: float = 0.5) -> Problem:
    """xxz, beta 0.5 | 2 coupled: four sectors of one local operator."""
    beta = step(bond_positions(sites), left=0.5, right=2.0).tolist()
    return _problem(f"D = {anisotropy:g}", xxz_chain(sites=sites, anisotropy=anisotropy), beta)


def two_fields(sites: int, anisotropy: float = 0.5) -> Problem:
    """xxz, beta = 1, beta h = 1 | -1 coupled: two sectors of two local operators."""
    field = step(site_positions(sites), left=1.0, right=-1.0).tolist()
    return _problem("field step", xxz_chain(sites=sites, anisotropy=anisotropy), [1.0] * (sites - 1), field)


def _problem(name: str, chain: Chain, beta: Sequence[float], field: Sequence[float] | None = None) -> Problem:
    terms = start_terms(chain, beta=beta, potentials={"charge_density": field} if field else None)
    return Problem(name, chain, terms, derive_grading((*chain.bond_terms, *terms)))


def matmul_peak(sizes: Sequence[int] = (384, 768, 1152, 1536), repetitions: int = 3) -> float:
    """The largest rate of double-precision matrix products, in operations a second of the process's time."""
    best = 0.0
    for size in sizes:
        a, b, out = np.ones((size, size)), np.ones((size, size)), np.empty((size, size))
        for _ in range(repetitions):
            began = time.process_time()
            np.matmul(a, b, out=out)
            best = max(best, 2.0 * size**3 / (time.process_time() - began))
    return best


def cores_gain(size: int = 768, products: int = 24) -> float:
    """What two threads gain at independent matrix products: less than 2 where others use the cores too."""
    a, outs = np.ones((size, size)), np.empty((2, size, size))

    def work(part: int) -> None:
        for _ in range(products // 2):
            np.matmul(a, a, out=outs[part])

    began = time.perf_counter()
    for part in (0, 1):
        work(part)
    alone = time.perf_counter() - began
    with ThreadPoolExecutor(2) as pool:
        began = time.perf_counter()
        list(pool.map(work, (0, 1)))
        return alone / (time.perf_counter() - began)
