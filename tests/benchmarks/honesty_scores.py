"""Coverage and sharpness of claimed errors: what counts, and how it is summed up.

coverage  : share of all points (sample, place) of an observable with |true error| <= claimed error.
sharpness : median of claimed over true error, over the points that count: those whose true error exceeds
            rounding (1e-12) and a thousandth of the observable's largest one in its case. Outside the light
            cone both errors are tiny, and no reader minds the ratio of two numbers that nobody can see.
An observable that vanishes by symmetry (below 1e-10 everywhere) counts for neither. The oracles themselves
are good to 1e-13, which is taken off every true error.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass, field

import numpy as np

from tests.benchmarks.honesty_runs import Solved
from tests.honesty_cases import Case
from tnquench.conventions import Reals

#: True errors below this are rounding; below this share of the largest one they do not count for sharpness.
ROUNDED, VISIBLE = 1e-12, 1e-3

#: Rounding of the oracles.
ORACLE = 1e-13

#: An observable smaller than this everywhere vanishes by symmetry.
NOTHING = 1e-10

#: What the acceptance asks for: coverage of all points and in every case, median sharpness.
COVERAGE, COVERAGE_OF_EACH, SHARPNESS = 0.95, 0.90, 10.0


@dataclass(frozen=True)
class Score:
    """One observable of one case: points covered and points at all, ratios claimed/true of those that count.

    true, claimed : largest error of either kind
    """

    case: str
    kind: str
    observable: str
    source: str
    covered: int
    points: int
    ratios: Reals = field(repr=False)
    true: float
    claimed: float

    @property
    def coverage(self) -> float:
        return self.covered / self.points

    @property
    def sharpness(self) -> float:
        return float(np.median(self.ratios)) if self.ratios.size else float("nan")


def score(
    case: Case, observable: str, source: str, *, true: Reals, claimed: Reals, beside: Reals | float = 0.0
) -> Score:
    """Compare claimed with true errors of one observable, of one shape.

    beside : true error from other sources; where it is the larger one a point does not count for sharpness,
    because the source then cannot be told from the noise of the others
    """
    true, claimed = np.maximum(np.abs(true) - ORACLE, 0.0), np.broadcast_to(claimed, true.shape)
    counted = (true > max(ROUNDED, VISIBLE * float(true.max()))) & (true >= np.abs(beside))
    return Score(
        case.name,
        case.kind,
        observable,
        source,
        covered=int(np.sum(true <= claimed)),
        points=true.size,
        ratios=claimed[counted] / true[counted],
        true=float(true.max()),
        claimed=float(claimed.max()),
    )


def quantum_scores(solved: Solved) -> Iterator[Score]:
    """Score every observable of a run, in total and by source.

    total         : against the exact chain of the same length, without the claim for the ends that it shares
    time_step     : the exact Trotter circuit against the exact evolution
    cuts_and_start: the run against the exact circuit
    start         : the largest error of the prepared start (currents vanish there)
    length        : the exact chain against the middle of a longer one
    infinite      : the run against that, with everything claimed
    A start made loose on purpose is scored alone: evolved_start, the run (cut as little as is affordable)
    against the exact circuit.
    """
    truth, main, case = solved.truth, solved.main, solved.case
    for name, exact in truth["exact"].items():
        if np.abs(exact).max() < NOTHING:
            continue
        found = solved.sources(name)
        ends, rounding = found.pop("length"), found["arithmetic"]
        values, total = main.fields[name], np.sum(list(found.values()), axis=0)
        start = found["preparation"] + rounding
        if "current" not in name:
            largest = np.abs(values[:1] - exact[:1]).max(keepdims=True)
            yield score(case, name, "start", true=largest, claimed=start[:1, :1])
        if case.start_distance:
            claimed = start + found["truncation"]
            yield score(case, name, "evolved_start", true=values - truth["circuit"][name], claimed=claimed)
            continue
        yield score(case, name, "total", true=values - exact, claimed=total)
        if "circuit" in truth:
            step, rest = truth["circuit"][name] - exact, values - truth["circuit"][name]
            yield score(
                case, name, "time_step", true=step, claimed=found["time_step"] + rounding, beside=rest
            )
            yield score(
                case, name, "cuts_and_start", true=rest, claimed=found["truncation"] + start, beside=step
            )
        if "longer" in truth:
            longer = truth["longer"][name]
            yield score(case, name, "length", true=exact - longer, claimed=ends + rounding)
            yield score(case, name, "infinite", true=values - longer, claimed=total + ends)


@dataclass(frozen=True)
class Summary:
    """A family of scores in a few numbers.

    coverage : share of all points; worst_coverage : of the worst case
    sharpness : median of the medians of all observables of all cases; pooled : median over all points
    """

    cases: int
    observables: int
    points: int
    coverage: float
    worst_coverage: float
    worst_case: str
    sharpness: float
    pooled: float
    largest_sharpness: float
    largest_case: str


def summary(scores: Iterable[Score]) -> Summary:
    """Sum up scores of one source; nan for the sharpness where no true error exceeds rounding."""
    listed = list(scores)
    by_case = {
        case: [each for each in listed if each.case == case] for case in {s.case: None for s in listed}
    }
    shares = {case: pooled_coverage(members) for case, members in by_case.items()}
    worst = min(shares, key=lambda case: shares[case])
    sharp = [each for each in listed if each.ratios.size]
    widest = max(sharp, key=lambda each: each.sharpness, default=None)
    return Summary(
        cases=len(by_case),
        observables=len(listed),
        points=sum(each.points for each in listed),
        coverage=pooled_coverage(listed),
        worst_coverage=shares[worst],
        worst_case=worst,
        sharpness=float(np.median([each.sharpness for each in sharp])) if sharp else np.nan,
        pooled=float(np.median(np.concatenate([each.ratios for each in sharp]))) if sharp else np.nan,
        largest_sharpness=np.nan if widest is None else widest.sharpness,
        largest_case="" if widest is None else f"{widest.case}, {widest.observable}",
    )


def pooled_coverage(scores: Sequence[Score]) -> float:
    """Share of all points of some scores that are covered."""
    return sum(each.covered for each in scores) / sum(each.points for each in scores)
