"""What a candidate is allowed, and whether one observable keeps within it."""

from __future__ import annotations

from dataclasses import dataclass
from math import isfinite

from tnquench.dataset.variables import LEVELS
from tnquench.errors import InputError
from tnquench.judge.deviations import Deviations

#: Consistent within numerical error means a reduced chi-square of at most this ...
CHI_SQUARE = 1.0
#: ... and no larger share of points than this beyond k times the error: claimed errors are estimates, and few
#: points may lie beyond them by chance.
WRONG_SHARE = 0.01


@dataclass(frozen=True)
class Allowance:
    """The tolerance of a verdict; with neither, the candidate must agree with the chain within its error.

    excess : largest root mean square, over an observable's points, of the deviation beyond numerical error
    level  : prediction of the reference that the candidate may be no farther from the chain than
    """

    excess: float | None = None
    level: str = ""

    @classmethod
    def parse(cls, allow: float | str | None) -> Allowance:
        """Return the tolerance meant by a number, by its text, or by the name of a level.

        Raises InputError for anything else.
        """
        if allow is None:
            return cls()
        if isinstance(allow, str) and allow.strip().lower() in LEVELS:
            return cls(level=allow.strip().lower())
        try:
            excess = float(allow)
        except ValueError:
            excess = float("nan")
        if not (isfinite(excess) and excess >= 0):
            allowed = f"allowed: a number such as 1e-3, or {' or '.join(LEVELS)}"
            problem, option = f"{str(allow)[:40]!r}: {allowed}", "--allow"
            raise InputError(option, [problem], consequence="nothing was judged")
        return cls(excess=excess)

    def kept_by(self, found: Deviations) -> bool | None:
        """Return whether one observable keeps within the tolerance; None where that cannot be said."""
        if self.level:
            comparison = found.levels.get(self.level)
            return None if comparison is None else comparison.no_farther
        if self.excess is not None:
            return found.excess <= self.excess
        if found.chi_square is None:
            return None
        return found.chi_square <= CHI_SQUARE and found.wrong_count <= WRONG_SHARE * found.wrong.size
