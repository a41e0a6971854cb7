"""Equilibrium thermodynamics of the XXZ chain at |D| >= 1, each number with an error found by refinement."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from tnquench.bethe.gapped_thermal import gapped_eta, gapped_thermal, log_partition
from tnquench.bethe.thermodynamics import KEYS, Equilibrium
from tnquench.errors import ConvergenceError

#: Numbers of strings and of positive rapidities of the successive refinements. Fermi points of cold states
#: in a field need many rapidities and few strings, zero field at |D| = 1 the other way round.
STRINGS = (4, 6, 9, 13, 20, 30, 45, 68, 102, 153)
NODES = (16, 20, 26, 34, 44, 58, 76, 100, 132, 174, 228, 300)

#: Strings while rapidities are refined: STRINGS_BY_ETA/eta of them, between the others.
FIRST_STRINGS, STRINGS_BY_ETA, WIDE_STRINGS = 1, 5.0, 4

#: Error at which refinement stops if nothing else is asked, and the one above which no value is given, both
#: as fractions of the values' scales.
DEFAULT_ACCURACY = 1e-9
ACCURACY_LIMIT = 1e-4

#: Rounding, as a fraction of the value's scale (of variances ROUNDED_SHARE times theirs, as they are sums
#: that cancel) and growing with every ROUNDED_STRINGS strings: the smallest error ever claimed.
ROUNDING, ROUNDED_SHARE, ROUNDED_STRINGS = 1e-13, 10.0, 10

#: Movements under refinement are taken to fall by a factor between these two; the error is what remains of
#: the geometric series. From 2/3 on (N^-1 in the number of strings) nothing is known.
LEAST_RATIO, LARGEST_RATIO = 0.2, 2.0 / 3.0

#: Products beta h beyond this would overflow.
LARGEST_BETA_FIELD = 600.0

SMALL_VARIANCE = 1e-3


def gapped_equilibrium(
    *,
    anisotropy: float,
    beta: float,
    field: float = 0.0,
    coupling: float = 1.0,
    accuracy: float = DEFAULT_ACCURACY,
) -> Equilibrium:
    """Return the thermodynamics of exp[-beta (H - h S^z)] at |D| >= 1.

    anisotropy, coupling : D of either sign, |D| >= 1, and J > 0; beta : inverse temperature > 0
    field    : h, of either sign; zero is its proper limit
    accuracy : error asked, as a fraction of each value's scale; the claimed errors say what was reached
    Raises ValueError at other values or |beta h| > 600, ConvergenceError (with the best values) where 153
    strings on 300 rapidities leave an error above 1e-4: cold, nearly isotropic ferromagnets.
    """
    if not (beta > 0.0 and coupling > 0.0 and np.isfinite([anisotropy, beta, field, coupling]).all()):
        given = f"D = {anisotropy}, beta = {beta}, field = {field}, coupling = {coupling}"
        message = f"{given}: all must be finite, beta and coupling positive"
        raise ValueError(message)
    if beta * abs(field) > LARGEST_BETA_FIELD:
        message = f"beta field = {beta * field:g}: its size must be at most {LARGEST_BETA_FIELD:g}"
        raise ValueError(message)
    gapped_eta(anisotropy)  # refuses |D| < 1
    task = _Task(anisotropy, beta, abs(field), coupling, accuracy)
    values, errors, reached = task.refined()
    values["magnetisation"] *= -1.0 if field < 0.0 else 1.0
    result = Equilibrium(**values, **{f"{key}_error": errors[key] for key in KEYS})
    if not reached <= ACCURACY_LIMIT:
        what = (
            f"thermodynamics at D = {anisotropy:.6g}, beta = {beta:g}, field = {field:g} "
            f"with {STRINGS[-1]} strings and {NODES[-1]} rapidities (raise the temperature or |D|)"
        )
        raise ConvergenceError(what, residual=reached, best=result)
    return result


Values = dict[str, float]


@dataclass(frozen=True)
class _Task:
    """One equilibrium state to be refined to an accuracy."""

    anisotropy: float
    beta: float
    field: float
    coupling: float
    accuracy: float

    def values(self, strings: int, nodes: int) -> Values:
        """Return the thermodynamic functions on levels of STRINGS and NODES.

        c = beta^2 d^2 ln Z/d beta^2 at fixed field, chi = d m/d h, from derivatives by beta and b = beta h.
        """
        beta, field = self.beta, self.field
        state = gapped_thermal(
            anisotropy=self.anisotropy, beta=beta, beta_field=beta * field, coupling=self.coupling,
            strings=STRINGS[strings], nodes=NODES[nodes],
        )  # fmt: skip
        log_z = log_partition(state)
        energy, magnetisation = -log_z.by_beta, log_z.by_field
        bend = log_z.by_beta_beta + 2.0 * field * log_z.by_beta_field + field**2 * log_z.by_field_field
        return {
            "free_energy": -log_z.value / beta,
            "energy": energy,
            "entropy": log_z.value + beta * (energy - field * magnetisation),
            "magnetisation": magnetisation,
            "specific_heat": beta**2 * bend,
            "susceptibility": beta * log_z.by_field_field,
        }

    def sizes(self, values: Values) -> Values:
        """Return the sizes to which errors are compared: natural scales, or larger values themselves.

        Variances may be exponentially small; they are compared to a small part of those of free spins.
        """
        energy = self.coupling + self.field
        scales = {
            "free_energy": energy + 1.0 / self.beta,
            "energy": self.coupling,
            "entropy": 1.0 + self.beta * energy,
            "magnetisation": 1.0,
            "specific_heat": SMALL_VARIANCE * (self.beta * energy) ** 2,
            "susceptibility": SMALL_VARIANCE * self.beta,
        }
        return {key: max(scales[key], abs(values[key])) for key in KEYS}

    def rounding(self, sizes: Values, strings: int) -> Values:
        """Return what rounding leaves of values whose errors are compared to `sizes`."""
        energy = self.coupling + self.field
        least = {
            "specific_heat": ROUNDED_SHARE * SMALL_VARIANCE * (self.beta * energy) ** 2,
            "susceptibility": ROUNDED_SHARE * SMALL_VARIANCE * self.beta,
        }
        share = ROUNDING * max(1.0, strings / ROUNDED_STRINGS)
        return {key: share * max(sizes[key], least.get(key, 0.0)) for key in KEYS}

    def refined(self) -> tuple[Values, Values, float]:
        """Return values, errors and the largest error relative to its scale.

        Rapidities are refined with few strings, then strings, then rapidities are checked with all strings.
        """
        eta = gapped_eta(self.anisotropy)
        wanted = STRINGS_BY_ETA / max(eta, 1e-3)
        strings = min(WIDE_STRINGS, max(FIRST_STRINGS, int(np.searchsorted(STRINGS, wanted))))
        values, nodes, _ = self._climb(lambda level: self.values(strings, level), 0, len(NODES))
        values, strings, missed = self._climb(
            lambda level: self.values(level, nodes), strings, len(STRINGS), values
        )
        finer = range(nodes, len(NODES))
        coarse = self.values(strings, nodes - 1)
        for level in finer:
            values = values if level == nodes else self.values(strings, level)
            moved = {key: abs(values[key] - coarse[key]) for key in KEYS}
            sizes, share = self.sizes(values), LEAST_RATIO / (1.0 - LEAST_RATIO)
            rounding = self.rounding(sizes, STRINGS[strings])
            errors = {key: missed[key] + share * moved[key] + rounding[key] for key in KEYS}
            if self._size({key: share * moved[key] for key in KEYS}, sizes) <= self.accuracy:
                break
            coarse = values
        return values, errors, self._size(errors, sizes)

    def _climb(
        self, solve: Callable[[int], Values], level: int, levels: int, values: Values | None = None
    ) -> tuple[Values, int, Values]:
        """Refine from `level` on until what remains is within the accuracy; return values, level, remainders.

        Convergence is exponential, or algebraic in the strings at |D| = 1: the last movement times r/(1 - r),
        with the ratio r of the last two movements, is what remains.
        """
        values = values or solve(level)
        moved = remainders = dict.fromkeys(KEYS, np.inf)
        while level + 1 < levels:
            level, coarse, before = level + 1, values, moved
            values = solve(level)
            sizes = self.sizes(values)
            moved = {key: abs(values[key] - coarse[key]) for key in KEYS}
            ratio = max(moved[key] / max(before[key], ROUNDING * sizes[key]) for key in KEYS)
            ratio = min(LARGEST_RATIO, max(ratio, LEAST_RATIO))
            remainders = {key: ratio / (1.0 - ratio) * moved[key] for key in KEYS}
            if self._size(remainders, sizes) <= self.accuracy:
                break
        return values, level, remainders

    def _size(self, errors: Values, sizes: Values) -> float:
        return float(max(errors[key] / sizes[key] for key in KEYS))
