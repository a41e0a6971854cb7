"""A chain with reflecting ends as a line: mirrored at the ends, and led to a constant far beyond them."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from tnquench.conventions import Reals


@dataclass(frozen=True, eq=False)
class UnfoldedProfile:
    """Initial beta and beta_field on the unfolded line.

    A quasiparticle that meets a reflecting end comes back with the opposite rapidity, as if it had gone on
    into a mirror image of the chain. Thermal fillings are even in rapidity, so the image is the mirrored
    profile.
    beta, beta_field : functions of position inside the chain; the ends are at plus and minus `wall`
    reach            : from here on |x| is led to a constant over a length `approach`; quasiparticles that
                       take part in what happens inside the chain must start nearer than that
    """

    beta: Callable[[Reals], Reals]
    beta_field: Callable[[Reals], Reals]
    wall: float
    reach: float
    approach: float

    @property
    def edge(self) -> float:
        """From here on the profile is constant."""
        return self.reach + self.approach

    def parameters(self, x: Reals) -> tuple[Reals, Reals]:
        """Return beta and beta_field at unfolded positions of any shape."""
        distance = np.abs(x)
        if distance.max(initial=0.0) > self.reach:
            distance = self._slowed(distance)
        period = 4.0 * self.wall
        nearest = np.copysign(distance, x)
        nearest -= period * np.rint(nearest / period)
        folded = np.copysign(self.wall - np.abs(np.abs(nearest) - self.wall), nearest)
        return self.beta(folded), self.beta_field(folded)

    def _slowed(self, distance: Reals) -> Reals:
        """Return distances, their slope led from 1 at `reach` to 0 at `edge`, flat to third order."""
        beyond = np.clip((distance - self.reach) / self.approach, 0.0, 1.0)
        # integral of 1 - s^4 (35 - 84 s + 70 s^2 - 20 s^3)
        slowed = beyond - beyond**5 * (7.0 - 14.0 * beyond + 10.0 * beyond**2 - 2.5 * beyond**3)
        return np.asarray(np.minimum(distance, self.reach) + self.approach * slowed)
