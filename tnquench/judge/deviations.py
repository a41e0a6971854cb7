"""How far a candidate is from the chain, in numbers: over all its points, by window of time, by level."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from tnquench.conventions import Reals
from tnquench.judge.reference import Faced, Level

#: Windows of equal length into which the times are cut.
WINDOWS = 4
#: Points named as the worst.
NAMED = 5
#: Norms below this are zero by symmetry, and only the grids of a theory make them otherwise.
VANISHING = 1e-8
#: Candidate and prediction closer to each other than this fraction of the prediction's own distance from the
#: chain are the same theory.
SAME = 1e-3
#: Distances from the chain that differ by less than this factor are called the same.
NEARLY = 1.05


@dataclass(frozen=True)
class Window:
    """One stretch of time: from and to, number of points, and norms over them.

    rms, largest : of the deviation from the chain; error : root mean square of the total error
    wrong  : points beyond k times that error; levels : root mean square deviation of each prediction
    """

    start: float
    end: float
    points: int
    rms: float
    largest: float
    error: float
    wrong: int
    levels: dict[str, float]


@dataclass(frozen=True)
class WrongPoint:
    """A point where the candidate is wrong: its value, the chain's, and the error of the difference."""

    time: float
    position: float
    value: float
    chain: float
    error: float


@dataclass(frozen=True)
class LevelComparison:
    """A candidate beside a prediction of the reference, over the points where there is one.

    points  : how many
    rms     : root mean square distance of the candidate from the chain; level_rms : of the prediction
    slack   : how much farther than the prediction the candidate may seem because of the errors of all numbers
    error   : root mean square of the error of the candidate's distance
    apart   : root mean square distance of the two from each other; apart_error : of its error
    """

    points: int
    rms: float
    level_rms: float
    slack: float
    error: float
    apart: float
    apart_error: float

    @property
    def indistinguishable(self) -> bool:
        """Whether candidate and prediction differ by no more than the numbers of either are certain."""
        return self.apart <= max(self.apart_error, SAME * self.level_rms, VANISHING)

    @property
    def no_farther(self) -> bool:
        """Whether the candidate is no farther from the chain than the prediction, give or take the errors and
        the share NEARLY, which discretisation of its own may cost it."""
        return self.rms <= NEARLY * self.level_rms + self.slack + VANISHING


@dataclass(frozen=True)
class Deviations:
    """Norms of candidate minus chain for one observable.

    rms, largest : root mean square and largest absolute deviation; error : rms of the total error
    excess : root mean square of what exceeds the error point by point, zero where the error covers it
    chi_square : mean of (deviation / error)^2 over the points, None without an estimated error
    wrong  : mask (point,) of |deviation| beyond k times the error; worst : the largest of them first
    """

    rms: float
    largest: float
    error: float
    excess: float
    chi_square: float | None
    wrong: np.ndarray
    worst: tuple[WrongPoint, ...]
    windows: tuple[Window, ...]
    levels: dict[str, LevelComparison]

    @property
    def wrong_count(self) -> int:
        """Number of wrong points."""
        return int(np.count_nonzero(self.wrong))


def measure(faced: Faced, *, resolve_at: float) -> Deviations:
    """Return the norms of one observable.

    resolve_at : k, a point is wrong beyond k times the error; without an estimated error none is called so
    """
    deviation, error = np.abs(faced.deviation), faced.error
    estimated = faced.numerical is not None
    wrong = (deviation > resolve_at * error) & estimated
    return Deviations(
        rms=rms(deviation),
        largest=float(deviation.max()),
        error=rms(error),
        excess=rms(np.maximum(deviation - error, 0.0)),
        chi_square=float(np.mean((deviation / error) ** 2)) if estimated else None,
        wrong=wrong,
        worst=_worst(faced, wrong, resolve_at),
        windows=_windows(faced, wrong),
        levels={name: _compared(faced, level) for name, level in faced.levels.items() if _known(level).any()},
    )


def rms(values: Reals) -> float:
    """Return the root mean square of an array, zero of an empty one."""
    return float(np.sqrt(np.mean(np.square(values)))) if values.size else 0.0


def _known(level: Level) -> np.ndarray:
    return np.isfinite(level.values) & np.isfinite(level.error)


def _worst(faced: Faced, wrong: np.ndarray, resolve_at: float) -> tuple[WrongPoint, ...]:
    beyond = np.where(wrong, np.abs(faced.deviation) - resolve_at * faced.error, -np.inf)
    order = np.argsort(-beyond, kind="stable")[: min(NAMED, int(np.count_nonzero(wrong)))]
    points = faced.points
    return tuple(
        WrongPoint(
            time=float(points.times[index]),
            position=float(points.positions[index]),
            value=float(points.values[index]),
            chain=float(faced.chain[index]),
            error=float(faced.error[index]),
        )
        for index in order
    )


def _windows(faced: Faced, wrong: np.ndarray) -> tuple[Window, ...]:
    times = faced.points.times
    edges = np.linspace(times.min(), times.max(), WINDOWS + 1)
    number = np.clip(np.searchsorted(edges, times, side="left") - 1, 0, WINDOWS - 1)
    found = []
    for index in range(WINDOWS):
        inside = number == index
        if not inside.any():
            continue
        deviation = faced.deviation[inside]
        found.append(
            Window(
                start=float(edges[index]),
                end=float(edges[index + 1]),
                points=int(np.count_nonzero(inside)),
                rms=rms(deviation),
                largest=float(np.abs(deviation).max()),
                error=rms(faced.error[inside]),
                wrong=int(np.count_nonzero(wrong & inside)),
                levels=_level_norms(faced, inside),
            )
        )
    return tuple(found)


def _level_norms(faced: Faced, inside: np.ndarray) -> dict[str, float]:
    norms = {}
    for name, level in faced.levels.items():
        chosen = inside & _known(level)
        if chosen.any():
            norms[name] = rms(level.values[chosen] - faced.chain[chosen])
    return norms


def _compared(faced: Faced, level: Level) -> LevelComparison:
    """Compare over the points where the prediction is known.

    With c, e, q for candidate, prediction and chain, the difference of the squared distances is the mean of
    (c - e) (c + e - 2 q): an error of q moves it by 2 |c - e| times that, an error of e by 2 |e - q|, one of
    c by 2 |c - q|. Their sum, as a length, is the slack.
    """
    known = _known(level)
    deviation, own = np.abs(faced.deviation[known]), faced.points.error[known]
    apart = np.abs(faced.points.values[known] - level.values[known])
    theirs = np.abs(level.values[known] - faced.chain[known])
    chain_error = faced.error[known] - own
    moved = 2.0 * np.mean(apart * chain_error + theirs * level.error[known] + deviation * own)
    level_rms = rms(theirs)
    return LevelComparison(
        points=int(np.count_nonzero(known)),
        rms=rms(deviation),
        level_rms=level_rms,
        slack=float(np.sqrt(level_rms**2 + moved)) - level_rms,
        error=rms(faced.error[known]),
        apart=rms(apart),
        apart_error=rms(level.error[known] + own),
    )
