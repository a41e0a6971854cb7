"""The verdict in one sentence, written from the arrays as a physicist would write it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from tnquench.conventions import Reals
from tnquench.report.comparison import Comparison, Verdicts, numerical_sources
from tnquench.report.wording import LEVEL_NAMES, SOURCE_NAMES, capitalised, measured, percent, plain, quantity

#: A power law is fitted from this fraction of the last time on, to no fewer samples than these.
FIT_FROM = 0.3
FIT_SAMPLES = 5
#: An exponent less certain than this is not worth a sentence.
EXPONENT_ERROR = 0.25
#: Nor is one that differs by more than twice this between the early and the late half of the fit.
SLOPE_SPREAD = 0.25
#: A deviation that is there at t = 0 is told where it is at least this part of the last one.
LARGE_PART = 0.3
#: Exponents this small, uncertainty included, describe something that stays as it is.
STEADY = 0.15


@dataclass(frozen=True)
class PowerLaw:
    """A fit |values| ~ time^-exponent between two times.

    error : standard error of the exponent; spread : half the difference of the exponents of the two halves of
    the samples, which a curve that is no power law makes large
    """

    exponent: float
    error: float
    spread: float
    first: float
    last: float


def headline(fields: list[Comparison], *, about: str = "energy_density", absence: str = "") -> str:
    """Return the verdict of a run in one sentence.

    fields : the observables that do not vanish by symmetry
    about  : the observable to speak of, if it is among them
    absence : why there is no prediction, where there is none
    """
    if not fields:
        return "Every observable of this run is zero by symmetry: there is nothing to compare."
    field = next((field for field in fields if field.name == about), fields[0])
    if field.quantum is None:
        return (
            f"This dataset holds the prediction alone, up to {_when(field)}: without the chain's dynamics it "
            "gives no verdict on it."
        )
    if field.prediction is None or field.deviation is None:
        return _without_prediction(field, absence)
    last = field.window[-1:]
    if field.resolved is not None and np.any(field.resolved[-1:] & last):
        last = field.resolved[-1:] & last
    place = largest(field.deviation[-1:], last)[1]
    if field.numerical is None or field.resolved is None:
        return _without_companions(field, place)
    if not np.any(field.resolved & field.judged):
        return _nothing_resolved(field)
    return _resolved(field, place, field.resolved & field.judged)


def power_law(times: Reals, values: Reals, usable: Verdicts) -> PowerLaw | None:
    """Fit |values| ~ times^-p by least squares in the logarithms.

    times, values, usable : (time,); samples before FIT_FROM of the last time or not usable are left out
    Returns None where fewer than FIT_SAMPLES samples remain.
    """
    chosen = usable & (times > 0) & (times >= FIT_FROM * times[-1]) & (values != 0)
    if np.count_nonzero(chosen) < FIT_SAMPLES:
        return None
    logarithm, height = np.log(times[chosen]), np.log(np.abs(values[chosen]))
    slope, error = _line(logarithm, height)
    half = logarithm.size // 2
    early, late = (
        _line(logarithm[: half + 1], height[: half + 1])[0],
        _line(logarithm[half:], height[half:])[0],
    )
    first, last = float(times[chosen][0]), float(times[chosen][-1])
    return PowerLaw(-slope, error, 0.5 * abs(early - late), first, last)


def _line(x: Reals, y: Reals) -> tuple[float, float]:
    """Return the slope of a least-squares line and its standard error."""
    centred = x - x.mean()
    slope = float(centred @ y / (centred @ centred))
    rest = y - y.mean() - slope * centred
    return slope, float(np.sqrt(rest @ rest / max(rest.size - 2, 1) / (centred @ centred)))


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
    return LEVEL_NAMES.get(field.level, field.level), field.said


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
    history, trend = _history(field, place, resolved), _trend(field, resolved)
    return f"{opening}{_from_the_start(field, place)}; {history}{trend}."


def _from_the_start(field: Comparison, place: int) -> str:
    """Say how much of the deviation at a place is there at t = 0 already, if that is a large part of it."""
    assert field.deviation is not None
    if field.times[0] != 0.0:
        return ""
    first, last = float(field.deviation[0, place]), float(field.deviation[-1, place])
    if first * last <= 0.0 or abs(first) < LARGE_PART * abs(last):
        return ""
    return f", of which {quantity(min(abs(first), abs(last)), field.unit)} are there at t = 0 already"


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


def _trend(field: Comparison, resolved: Verdicts) -> str:
    """Say how the deviation's norm moves with time, if one power law describes it."""
    assert field.deviation is not None
    law = power_law(field.times, field.norm(field.deviation), np.any(resolved, axis=1))
    if law is None or law.error > EXPONENT_ERROR or law.spread > SLOPE_SPREAD:
        return ""
    span = f"{plain(law.first)} ≤ t ≤ {plain(law.last)}"
    norm = "its root mean square over the light cone"
    uncertainty = max(law.error, law.spread, 0.01)
    if abs(law.exponent) + uncertainty < STEADY:
        return f", and {norm} stays about the same over {span}"
    if abs(law.exponent) < 2 * uncertainty:
        return ""  # neither steady nor a law
    verb, sign = ("falls", "1/t") if law.exponent > 0 else ("grows", "t")
    power = measured(abs(law.exponent), uncertainty)
    return f", and {norm} {verb} like {sign}ᵖ with p = {power} (fit over {span})"


def _nothing_resolved(field: Comparison) -> str:
    theory, said = _names(field)
    assert field.deviation is not None
    assert field.numerical is not None
    time, place = largest(field.deviation, field.judged)
    claim = float(np.max((np.abs(field.deviation) + field.resolve_at * field.numerical)[field.judged]))
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


def _without_prediction(field: Comparison, absence: str) -> str:
    opening = (
        f"{_no_prediction(absence)} Here are the quantum side and its error alone: the {field.said} is "
        f"followed up to {_when(field)}"
    )
    if field.numerical is not None:
        among = field.judged if field.judged.any() else field.window
        time, place = largest(field.numerical, among)
        worst = quantity(float(field.numerical[time, place]), field.unit)
        where = f"{_at(field, place, time)}{_source(field, time, place)}"
        return f"{opening} with a numerical error of at most {worst} ({where})."
    if field.bound is not None:
        bound = quantity(float(np.max(field.bound)), field.unit)
        return (
            f"{opening}; its numerical error is not estimated, the rigorous bound on truncation is {bound}."
        )
    return f"{opening}; its numerical error is not estimated."


def _no_prediction(absence: str) -> str:
    """Say that there is no prediction, and why where that is known."""
    if not absence:
        return "No prediction exists for this run."
    if any(words in absence for words in ("no prediction", "no hydrodynamic")):
        return f"{capitalised(absence)}."
    return f"No prediction exists for this run: {absence}."


def _source(field: Comparison, time: int, place: int) -> str:
    """Name the largest source of the numerical error at one point, if it is more than half of it."""
    assert field.numerical is not None
    sizes = {source: float(values[time, place]) for source, values in numerical_sources(field.errors).items()}
    named = max(sizes, key=lambda source: sizes[source], default="")
    if not named or sizes[named] < 0.5 * field.numerical[time, place]:
        return ""
    return f", mostly {SOURCE_NAMES.get(named, named)}"


def remarks(zero: list[Comparison]) -> list[str]:
    """Return what the verdict leaves out; zero : observables that vanish by symmetry."""
    if not zero:
        return []
    *others, last = (field.said for field in zero)
    names = f"{', '.join(others)} and {last}" if others else last
    return [f"Zero by symmetry, hence not drawn: {names}."]
