"""Times of thermal states and of joined halves, beside what was asked of them.

Run: python -m tests.benchmarks.thermodynamics

One core. Every case is solved at several parameters, none twice; `first` includes kernels and grids, which
later ones find ready. A case passes if its median meets the target in processor time (the machine may be
shared: wall times and the load are printed too) and the largest error claimed for any of its values, as a
fraction of 1 or of a larger value, is at most 1e-8.
"""

from __future__ import annotations

import os
import time
from collections.abc import Callable
from dataclasses import dataclass
from statistics import median

import numpy as np
from threadpoolctl import threadpool_limits

from tnquench.bethe.functions import ThermodynamicFunctions
from tnquench.bethe.thermo import thermo
from tnquench.conventions import bond_positions, site_positions
from tnquench.hydro.prediction import predict_step

ACCURACY = 1e-8

#: 70/29 = 2 + 1/(2 + 1/(2 + 1/(2 + 1/2))): five levels, ten strings.
FIVE_LEVELS = float(np.cos(np.pi * 29 / 70))

#: 101 sites and 100 bonds see 201 rays, nine tenths of them inside the light cone that ends at this place.
SITES, FRONT = 101, 45.0


@dataclass(frozen=True)
class Case:
    """What is timed; solve : maps the number of the repetition to the largest relative error claimed."""

    name: str
    target: float
    solve: Callable[[int], float]
    repetitions: int = 7


def largest_error(found: ThermodynamicFunctions) -> float:
    """The largest claimed error as a fraction of 1, or of the value if that is larger."""
    return max(error / max(1.0, abs(found.values[key])) for key, error in found.errors.items())


def thermal(model: str, **settings: float) -> Callable[[int], float]:
    """A thermal state, hot and cold in turn, in a small field."""

    def solve(repetition: int) -> float:
        beta = (1.0, 0.3, 2.0, 0.05, 3.0, 0.7, 5.0)[repetition]
        return largest_error(thermo(model, beta=beta, **settings))

    return solve


def joined(anisotropy: float, speed: float) -> Callable[[int], float]:
    """Two temperatures on 201 rays; speed : of the light cone, about."""

    def solve(repetition: int) -> float:
        left, right = (0.5 + 0.01 * repetition, 0.0), (2.0, 0.0)
        found = predict_step(
            anisotropy=anisotropy,
            coupling=1.0,
            left=left,
            right=right,
            middle=left,
            times=np.array([FRONT / speed]),
            sites=site_positions(SITES),
            bonds=bond_positions(SITES),
        )
        return max(float((found.grid_error[name] + found.strings_error[name]).max()) for name in found.fields)

    return solve


CASES = (
    Case("thermal state, D = 0.5", 0.02, thermal("xxz", anisotropy=0.5, field=0.3)),
    Case("thermal state, D = 2", 0.5, thermal("xxz", anisotropy=2.0, field=0.3)),
    Case("thermal state, D = cos(29 pi/70)", 2.0, thermal("xxz", anisotropy=FIVE_LEVELS, field=0.3)),
    Case("hubbard, U = 4", 10.0, thermal("hubbard", repulsion=4.0, mu=0.4, field=0.3)),
    Case("joined halves, 201 rays, D = 0.5", 1.0, joined(0.5, 1.35), repetitions=3),
    Case("joined halves, 201 rays, D = 2", 15.0, joined(2.0, 2.5), repetitions=2),
)


def measure(case: Case) -> str:
    """Return the row of a case."""
    wall, cpu, errors = [], [], []
    for repetition in range(case.repetitions):
        began, worked = time.perf_counter(), time.process_time()
        errors.append(case.solve(repetition))
        wall.append(time.perf_counter() - began)
        cpu.append(time.process_time() - worked)
    passed = median(cpu) <= case.target and max(errors) <= ACCURACY
    numbers = f"{case.target:6.2f} | {median(cpu):6.3f} | {cpu[0]:6.3f} | {median(wall):6.3f}"
    return f"{case.name:34} | {numbers} | {max(errors):.0e} | {'yes' if passed else 'NO'}"


def main() -> None:
    """Print the table, seconds."""
    print(f"load of the machine: {os.getloadavg()[0]:.1f} on {os.cpu_count()} processors")
    print(f"{'':34} | target |    cpu |  first |   wall | error | pass")
    for case in CASES:
        print(measure(case), flush=True)


if __name__ == "__main__":
    with threadpool_limits(1):
        main()
