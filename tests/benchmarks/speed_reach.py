"""A long run on two threads: xxz, D = 0.5, beta 0.5 | 2, 96 sites, weight 1e-8, until t = 20."""

from __future__ import annotations

import sys
import time
from collections.abc import Iterator

from tests.benchmarks.speed_cases import Line, two_temperatures
from tnquench.evolution.cutting import CutRule
from tnquench.evolution.threads import threads

SITES, WEIGHT, UNTIL, THREADS = 96, 1e-8, 20, 2

#: Minutes from the start's preparation to the end.
MINUTES = 20.0

#: The schedule that costs least late. Measured at weight 1e-8, 64 sites, bond dimension at t = 10 and seconds
#: of the process from t = 8: order 2 with steps of 0.1: 448, 2.7; 0.05: 304, 2.8; order 4 with steps of 0.1:
#: 252, 6.0; 0.2: 384, 5.5; 0.25: 440, 4.9; 0.5: 620, 7.4. Bonds grow slower with short steps, and count by
#: their cubes. Of the error of the energy density from t = 3 to 6 (1.2e-4 to 2.2e-4, 40 sites) a quarter is
#: the step's.
ORDER, TIME_STEP = 2, 0.05

#: Times at which the bond dimension is told.
TOLD = (10, 15, 18, 20)


def reach_lines(sites: int = SITES, until: int = UNTIL, weight: float = WEIGHT) -> Iterator[Line]:
    """Yield the lines of the row `reach`."""
    began = time.perf_counter()
    bonds: dict[int, int] = {}
    with threads(THREADS):
        problem = two_temperatures(sites)
        start = problem.prepared(distance=0.03 * weight**0.5, weight=1e-4 * weight)
        rule = CutRule(weight, bond_floor=1)
        moments = problem.evolution(start, rule, until=until, time_step=TIME_STEP, order=ORDER)
        for unit, moment in enumerate(moments):
            bonds[unit] = int(moment.state.bond_dimensions.max())
            minutes = (time.perf_counter() - began) / 60.0
            print(f"reach: t = {unit}, bond {bonds[unit]}, {minutes:.1f} min", file=sys.stderr, flush=True)
    grew = ", ".join(f"{bonds[unit]} at t = {unit}" for unit in sorted({*TOLD, until}) if unit in bonds)
    what = f"{problem.name}, {sites} sites, weight {weight:g}, until t = {until} on {THREADS} threads"
    whole = until == UNTIL and sites == SITES
    yield Line(what, f"< {MINUTES:g} min" if whole else "", f"{minutes:.1f} min",
               minutes < MINUTES if whole else None)  # fmt: skip
    yield Line("bond dimension", "", grew)
