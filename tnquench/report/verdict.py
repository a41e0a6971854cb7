"""The verdict in one sentence, written from the arrays as a physicist would write it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from tnquench.conventions import Reals
from tnquench.report.comparison import Comparison, Verdicts
from tnquench.report.wording import LEVEL_NAMES, OBSERVABLE_NAMES, measured, percent, plain, quantity

#: A power law is fitted from this fraction of the last time on, to no fewer samples than these.
FIT_FROM = 0.3
FIT_SAMPLES = 5
#: An exponent less certain than this is not worth a sentence.
EXPONENT_ERROR = 0.25


@dataclass(frozen=True)
class PowerLaw:
    """A fit |values| ~ time^-exponent between two times, with the standard error of the exponent."""

    exponent: float
    error: float
    first: float
    last: float


def headline(fields: list[Comparison], *, about: str = "energy_density") -> str:
    """Return the verdict of a run in one sentence.

    fields : the observables that do not vanish by symmetry
    about  : the observable to speak of, if it is among them
    """
    if not fields:
        return "Every observable of this run is zero by symmetry: there is nothing to compare."
    field = next((field for field in fields if field.name == about), fields[0])
    if field.quantum is None:
        return (
            f"This dataset holds the prediction alone, up to {_when(field)}: without "
            "the chain's "
            "dynamics it gives no verdict on it."
        )
    if field.prediction is None or field.deviation is None:
        return _without_prediction(field)
    place = joint(field) if field.joined else largest(field.deviation[-1:], field.window[-1:])[1]
    if field.numerical is None or field.resolved is None:
        return _without_companions(field, place)
    if not np.any(field.resolved & field.judged):
        return _nothing_resolved(field)
    return _resolved(field, place, field.resolved & field.judged)


def joint(field: Comparison) -> int:
    """Return the index of the place nearest to x = 0; of two, the one with the larger last deviation."""
    distance = np.abs(field.positions)
    nearest = np.flatnonzero(distance <= distance.min() + 1e-9)
    values = field.known if field.deviation is None else field.deviation
    return int(nearest[np.argmax(np.abs(values[-1, nearest]))])


def power_law(times: Reals, values: Reals, usable: Verdicts) -> PowerLaw | None:
    """Fit |values| ~ times^-p by least squares in the logarithms.

    times, values, usable : (time,); samples before FIT_FROM of the last time or not usable are left out
    Returns None where fewer than FIT_SAMPLES samples remain.
    """
    chosen = usable & (times > 0) & (times >= FIT_FROM * times[-1]) & (values != 0)
    if np.count_nonzero(chosen) < FIT_SAMPLES:
        return None
    logarithm = np.log(times[chosen])
    centred = logarithm - logarithm.mean()
    height = np.log(np.abs(values[chosen]))
    slope = float(centred @ height / (centred @ centred))
    rest = height - height.mean() - slope * centred
    error = float(np.sqrt(rest @ rest / (rest.size - 2) / (centred @ centred)))
    return PowerLaw(-slope, error, float(times[chosen][0]), float(times[chosen][-1]))


def largest(values: Reals, among: Verdicts) -> tuple[int, int]:
    """Return the time and place of the largest |value| among the chosen points of a (time, place) array."""
    chosen = np.where(among, np.abs(values), -1.0)
    time, place = np.unravel_index(int(np.argmax(chosen)), chosen.shape)
    return int(time), int(place)


def first_resolved(field: Comparison) -> float | None:
    """Return the first time after the start with a resolved point inside the light cone, if any."""
    if field.resolved is None:
        return None
    seen = np.any(field.resolved & field.judged, axis=1)
    return float(field.times[int(np.argmax(seen))]) if seen.any() else None


def _names(field: Comparison) -> tuple[str, str]:
    return LEVEL_NAMES.get(field.level, field.level), OBSERVABLE_NAMES[field.name]


def _where(field: Comparison, place: int) -> str:
    x = float(field.positions[place])
    if field.joined and x == 0:
        return "at the joint"
    return f"next to the joint (x = {plain(x)})" if field.joined and abs(x) == 0.5 else f"at x = {plain(x)}"


def _when(field: Comparison, time: int = -1) -> str:
    return field.units.instant(float(field.times[time]))


def _at(field: Comparison, place: int, time: int = -1) -> str:
    where = _where(field, place)
    return f"{where} {'and' if where.startswith('at x') else 'at'} {_when(field, time)}"


def _resolved(field: Comparison, place: int, resolved: Verdicts) -> str:
    theory, said = _names(field)
    assert field.deviation is not None
    assert field.numerical is not None
    at_place = quantity(abs(float(field.deviation[-1, place])), field.unit)
    error = quantity(float(field.numerical[-1, place]), field.unit, digits=1)
    if resolved[-1, place]:
        opening = f"{theory} misses the {said} by {at_place} (± {error} numerical error) {_at(field, place)}"
    else:
        opening = (
            f"{theory} gives the {said} {_at(field, place)} to within "
            f"{plain(field.resolve_at)} times the numerical error (deviation {at_place}, error {error})"
        )
    return f"{opening}; {_history(field, place, resolved)}{_trend(field, place, resolved)}."


def _history(field: Comparison, place: int, resolved: Verdicts) -> str:
    """Say since when and where the deviation is resolved."""
    seen = np.any(resolved, axis=1)
    first = int(np.argmax(seen))
    where = "" if resolved[-1, place] else "elsewhere "
    since = f"{where}the deviation is resolved from {_when(field, first)} on"
    if not np.all(seen[first:]):
        count = f"{np.count_nonzero(seen)} of {np.count_nonzero(field.times > 0)} times"
        since = f"{where}the deviation is resolved at {count}, first at {_when(field, first)}"
    if not seen[-1]:
        return f"{since}, and no longer at {_when(field)}"
    places = field.positions[resolved[-1]]
    low, high = float(places.min()), float(places.max())
    within = (field.positions >= low) & (field.positions <= high)
    share = np.count_nonzero(resolved[-1]) / np.count_nonzero(within)
    if low == high:
        return f"{since}, at the end only at x = {plain(low)}"
    stretch = f"|x| ≤ {plain(high)}" if abs(low + high) < 1e-9 else f"{plain(low)} ≤ x ≤ {plain(high)}"
    dense = "everywhere" if share == 1 else f"at {percent(share)} of the places"
    return f"{since} ({_when(field)}: {dense} in {stretch})"


def _trend(field: Comparison, place: int, resolved: Verdicts) -> str:
    """Say how the deviation at one place moves with time, if a power law describes it."""
    assert field.deviation is not None
    law = power_law(field.times, field.deviation[:, place], resolved[:, place])
    if law is None or law.error > EXPONENT_ERROR:
        return ""
    span = f"{plain(law.first)} ≤ t ≤ {plain(law.last)}"
    if abs(law.exponent) < max(0.1, 2 * law.error):
        return f", and stays at about the same size {_where(field, place)} over {span}"
    verb, sign = ("falls", "1/t") if law.exponent > 0 else ("grows", "t")
    power = measured(abs(law.exponent), max(law.error, 0.01))
    return f", and {_where(field, place)} {verb} like {sign}ᵖ with p = {power} (fit over {span})"


def _nothing_resolved(field: Comparison) -> str:
    theory, said = _names(field)
    assert field.deviation is not None
    assert field.numerical is not None
    time, place = largest(field.deviation, field.judged)
    claim = float(np.max((np.abs(field.deviation) + field.numerical)[field.judged]))
    return (
        f"No deviation is resolved: {theory} agrees with the {said} within {plain(field.resolve_at)} times "
        "the numerical "
        f"error at every place inside the light cone up to {_when(field)}; the largest difference is "
        f"{quantity(abs(float(field.deviation[time, place])), field.unit)} (± "
        f"{quantity(float(field.numerical[time, place]), field.unit, digits=1)} numerical error) "
        f"{_at(field, place, time)}, and a failure of the theory larger than "
        f"{quantity(claim, field.unit)} is excluded."
    )


def _without_companions(field: Comparison, place: int) -> str:
    theory, said = _names(field)
    assert field.deviation is not None
    opening = (
        f"{theory} differs from the chain's {said} by "
        f"{quantity(abs(float(field.deviation[-1, place])), field.unit)} "
        f"{_at(field, place)}; the numerical error is not estimated, as no companion "
        "runs were made"
    )
    if field.bound is None:
        return f"{opening}, so nothing can be called resolved."
    bound = quantity(float(field.bound[-1, place]), field.unit)
    beyond = np.any((np.abs(field.deviation) > field.bound) & field.judged, axis=1)
    if beyond.any():
        until = _when(field, int(np.flatnonzero(beyond)[-1]))
        return (
            f"{opening}; only the rigorous bound on truncation stands ({bound} there), and the deviation "
            "exceeds it "
            f"somewhere up to {until}."
        )
    return f"{opening}; the deviation never exceeds the rigorous bound on truncation, {bound} there."


def _without_prediction(field: Comparison) -> str:
    said = OBSERVABLE_NAMES[field.name]
    opening = f"No prediction was computed for this chain: the run gives its {said} up to {_when(field)}"
    if field.numerical is not None:
        time, place = largest(field.numerical, np.ones_like(field.window))
        worst = quantity(float(field.numerical[time, place]), field.unit)
        return f"{opening} with a numerical error up to {worst} ({_at(field, place, time)})."
    if field.bound is not None:
        bound = quantity(float(np.max(field.bound)), field.unit)
        return (
            f"{opening}; its numerical error is not estimated, the rigorous bound on truncation is {bound}."
        )
    return f"{opening}; its numerical error is not estimated."


def remarks(zero: list[Comparison]) -> list[str]:
    """Return what the verdict leaves out; zero : observables that vanish by symmetry."""
    if not zero:
        return []
    names = " and ".join(OBSERVABLE_NAMES[field.name] for field in zero)
    return [f"Zero by symmetry, hence not drawn: {names}."]
