"""How fast a running quench goes, and how long the rest of it will take.

A half layer costs the same work a bond plus work that grows with the cube of the bond dimension, and the cube
root of a bond dimension grows linearly with time (see tnquench/budget/pilot.py): the ninth root of the summed
cubes is extrapolated linearly, and the recent cost sets the scale.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from tnquench.conventions import Reals
from tnquench.observables.quench import Progress

#: Half layers kept apart; when there are more, neighbours are merged.
MOST_ENTRIES = 1024

#: Nothing is foretold before so many half layers and this share of the way.
FEWEST_LAYERS, LEAST_SHARE = 8, 0.04

#: Growth is measured over this share of the time reached.
RECENT_SHARE = 0.35

#: Part of the time reached over which the present cost is averaged.
PRESENT_SHARE = 0.15

GROWTH_ROOT = 9.0

#: Bond dimension at which both parts of the cost are equal, measured on this engine (32 to 500, D = 0.5).
#: Only the scale is fitted to a run: early on its own small bonds cannot tell the two parts apart.
EQUAL_PARTS_BOND = 80.0

#: Points at which the cost still to come is evaluated.
OUTLOOK_POINTS = 100


@dataclass
class Pace:
    """Half layers of a running quench and what they cost.

    until : time of the last measurement; bond_ceiling : largest bond dimension allowed
    """

    until: float
    bond_ceiling: int
    times: list[float] = field(default_factory=list)
    cubes: list[float] = field(default_factory=list)
    seconds: list[float] = field(default_factory=list)
    bonds: int = 0

    def record(self, progress: Progress) -> None:
        """Take note of one half layer."""
        sizes = progress.bond_dimensions.astype(np.float64)
        self.bonds = len(sizes)
        self.times.append(progress.time)
        self.cubes.append(float((sizes**3).sum()))
        self.seconds.append(progress.layer_seconds)
        if len(self.times) > MOST_ENTRIES:
            self._merge()

    def _merge(self) -> None:
        """Halve the number of entries; the newest stays apart where their number is odd."""
        even = len(self.times) // 2 * 2
        self.seconds = [a + b for a, b in _pairs(self.seconds, even)] + self.seconds[even:]
        self.cubes = [0.5 * (a + b) for a, b in _pairs(self.cubes, even)] + self.cubes[even:]
        self.times = [b for _, b in _pairs(self.times, even)] + self.times[even:]

    def seconds_a_time(self) -> float:
        """Return the present cost of one unit of time in seconds; needs one half layer at least."""
        first = self._present()
        since = self.times[first - 1] if first else 0.0
        return sum(self.seconds[first:]) / (self.times[-1] - since)

    def _present(self) -> int:
        """Return the index of the first entry that counts as present."""
        since = (1.0 - PRESENT_SHARE) * self.times[-1]
        return min(int(np.searchsorted(self.times, since)), len(self.times) - 1)

    def seconds_left(self) -> float | None:
        """Return the seconds that the rest will take, None while too little is known."""
        if len(self.times) < FEWEST_LAYERS or self.times[-1] < LEAST_SHARE * self.until:
            return None
        times, cubes = np.array(self.times), np.array(self.cubes)
        span, fixed = self.until - times[-1], self.bonds * EQUAL_PARTS_BOND**3
        outlook = times[-1] + span * (np.arange(OUTLOOK_POINTS) + 0.5) / OUTLOOK_POINTS
        present, later = cubes[self._present() :].mean(), self._foretold_cubes(times, cubes, outlook).mean()
        return float(span * (fixed + later) / (fixed + present) * self.seconds_a_time())

    def _foretold_cubes(self, times: Reals, cubes: Reals, outlook: Reals) -> Reals:
        """Return the summed cubes of the bond dimensions at times to come."""
        roots = np.power(cubes, 1.0 / GROWTH_ROOT)
        now, then = times[-1], (1.0 - RECENT_SHARE) * times[-1]
        slope = max(0.0, (roots[-1] - np.interp(then, times, roots)) / (now - then))
        most = self.bonds * float(self.bond_ceiling) ** 3
        return np.asarray(np.minimum((roots[-1] + slope * (outlook - now)) ** GROWTH_ROOT, most))


def _pairs(entries: list[float], even: int) -> list[tuple[float, float]]:
    """Return the first `even` entries two by two."""
    return list(zip(entries[0:even:2], entries[1:even:2], strict=True))
