"""The verdict in one sentence, and what else is said in words: levels, conservation, what was left out."""

from __future__ import annotations

from collections.abc import Sequence

from tnquench.judge.allowance import CHI_SQUARE, WRONG_SHARE
from tnquench.judge.conservation import Check, Conservation
from tnquench.judge.deviations import NEARLY, VANISHING, LevelComparison
from tnquench.judge.judgement import Judgement, ObservableJudgement, left_out_in_words
from tnquench.report.wording import LEVEL_NAMES, TIMES, capitalised, number, percent, plain, quantity


def sentence(judgement: Judgement) -> str:
    """Return the verdict in one sentence."""
    failed = [observable for observable in judgement.observables if observable.passed is False]
    if not failed:
        return _passed(judgement)
    worst = max(failed, key=lambda observable: _badness(observable, judgement))
    others = [observable.said for observable in failed if observable is not worst]
    also = f" The {listed(others)} {'fail' if len(others) > 1 else 'fails'} likewise." if others else ""
    return f"{_failed(judgement, worst)}.{also}"


def finding(observable: ObservableJudgement, judgement: Judgement) -> str:
    """Return in one line why an observable fails."""
    found, allowance = observable.found, judgement.allowance
    if allowance.level:
        level = found.levels[allowance.level]
        return (
            f"{observable.said}: root mean square distance from the chain {_in(observable, level.rms)}, "
            f"{name_of(allowance.level)} has {_in(observable, level.level_rms)} "
            f"(allowed: {percent(NEARLY - 1)} more, and {_in(observable, level.slack)} for numerical errors)"
        )
    if allowance.excess is not None:
        return (
            f"{observable.said}: root mean square deviation beyond numerical error "
            f"{_in(observable, found.excess)}, allowed {plain(allowance.excess)}"
        )
    return (
        f"{observable.said}: reduced chi-square {number(found.chi_square or 0.0)}, at most "
        f"{plain(CHI_SQUARE)} allowed; {found.wrong_count} of {observable.used} points wrong beyond "
        f"{plain(observable.resolve_at)} times the error"
    )


def standing(comparison: LevelComparison, level: str) -> str:
    """Return how a candidate compares with a prediction of the reference, as a part of a sentence."""
    theory = name_of(level)
    if comparison.indistinguishable:
        return f"indistinguishable from {theory}"
    if max(comparison.level_rms, comparison.rms) <= comparison.error:
        return f"as close to the chain as {theory}, both within the error"
    low, high = sorted((comparison.rms, comparison.level_rms))
    if high <= NEARLY * low + comparison.slack:
        return f"as far from the chain as {theory}"
    which = "closer to" if comparison.rms < comparison.level_rms else "farther from"
    certain = max(comparison.error, VANISHING)
    least = low <= certain
    factor = high / max(low, certain)
    return f"{which} the chain than {theory} by a factor {'of at least ' if least else ''}{number(factor)}"


def conservation_lines(judgement: Judgement) -> list[str]:
    """Return what was found on the conservation of each density, one sentence each."""
    return [_conservation(each, judgement) for each in judgement.conservation]


def points_line(observable: ObservableJudgement) -> str:
    """Return how many points count, how many were interpolated, and which were left out."""
    said = f"{observable.said}: {observable.used} points"
    if observable.interpolated:
        said += f", {observable.interpolated} of them between samples of the reference"
    if observable.coarse:
        larger = "interpolation is less certain than the reference's own numbers"
        said += f" (at {observable.coarse} {larger}; its error is added)"
    if observable.left_out:
        said += f"; left out: {left_out_in_words(observable.faced)}"
    return said


def allowed_in_words(judgement: Judgement) -> str:
    """Return what the candidate was allowed."""
    allowance = judgement.allowance
    if allowance.level:
        theory = name_of(allowance.level)
        return f"no farther from the chain than {theory}, to {percent(NEARLY - 1)} and the numerical error"
    if allowance.excess is not None:
        return (
            f"a root mean square deviation beyond numerical error of {plain(allowance.excess)} "
            "in each observable"
        )
    return (
        f"agreement within numerical error: reduced chi-square at most {plain(CHI_SQUARE)}, at most "
        f"{percent(WRONG_SHARE)} of the points beyond the threshold"
    )


def name_of(level: str) -> str:
    """Return a level of hydrodynamics as it is called in texts."""
    return LEVEL_NAMES.get(level, level)


def short(value: float) -> str:
    """Return a time or place of the candidate with four digits at most."""
    return plain(float(f"{value:.4g}"))


def listed(names: Sequence[str]) -> str:
    """Return names as a list in words."""
    *others, last = names
    return f"{', '.join(others)} and {last}" if others else last


def _passed(judgement: Judgement) -> str:
    judged = [observable for observable in judgement.observables if observable.passed]
    lead = next((each for each in judged if each.name == judgement.about), judged[0])
    allowance = judgement.allowance
    names = listed([observable.said for observable in judged])
    if allowance.level:
        comparison = lead.found.levels[allowance.level]
        others = [each.said for each in judged if each is not lead]
        also = f"; its {listed(others)} keep{'s' if len(others) == 1 else ''} up too" if others else ""
        said = standing(comparison, allowance.level)
        return f"The candidate keeps up with {name_of(allowance.level)}: its {lead.said} is {said}{also}."
    if allowance.excess is not None:
        worst = max(judged, key=lambda observable: observable.found.excess)
        if worst.found.excess == 0:
            return (
                f"The candidate keeps within the allowed {plain(allowance.excess)} in {names}: it deviates "
                "from the chain nowhere beyond the numerical error."
            )
        return (
            f"The candidate keeps within the allowed {plain(allowance.excess)} in {names}: beyond "
            f"numerical error it deviates from the chain by at most {_in(worst, worst.found.excess)} "
            f"in the root mean square ({worst.said})."
        )
    worst = max(judged, key=lambda observable: observable.found.chi_square or 0.0)
    chi = number(worst.found.chi_square or 0.0)
    return (
        f"The candidate agrees with the chain within numerical error in {names}, up to "
        f"{judgement.units.instant(_last(lead))}: the largest reduced chi-square is {chi} ({worst.said}), "
        f"and {_wrong_in_words(worst)}."
    )


def _failed(judgement: Judgement, worst: ObservableJudgement) -> str:
    found, allowance = worst.found, judgement.allowance
    if allowance.level:
        level = found.levels[allowance.level]
        factor = number(level.rms / max(level.level_rms, level.error, VANISHING))
        return (
            f"The candidate is farther from the chain than {name_of(allowance.level)}: its {worst.said} "
            f"deviates by {_in(worst, level.rms)} in the root mean square, {name_of(allowance.level)} by "
            f"{_in(worst, level.level_rms)} (numerical error {_in(worst, level.error)}), a factor "
            f"{factor} more{_worst_place(judgement, worst)}"
        )
    if allowance.excess is not None:
        return (
            f"The candidate misses the allowed {plain(allowance.excess)}: beyond numerical error its "
            f"{worst.said} deviates from the chain by {_in(worst, found.excess)} in the root mean square"
            f"{_worst_place(judgement, worst)}{_standings(worst)}"
        )
    if not found.wrong_count:
        return (
            f"The candidate does not agree with the chain: the reduced chi-square of its {worst.said} is "
            f"{number(found.chi_square or 0.0)}, where {plain(CHI_SQUARE)} is allowed, though no single "
            f"point is wrong beyond {plain(worst.resolve_at)} times the numerical error{_standings(worst)}"
        )
    return (
        f"The candidate does not agree with the chain: its {worst.said} is wrong beyond "
        f"{plain(worst.resolve_at)} times the numerical error at {found.wrong_count} of {worst.used} points, "
        f"first at {_instant(judgement, worst.first_wrong or 0.0)}{_worst_place(judgement, worst)}"
        f"{_standings(worst)}"
    )


def _worst_place(judgement: Judgement, observable: ObservableJudgement) -> str:
    if not observable.found.worst:
        return ""
    point = observable.found.worst[0]
    size = _in(observable, abs(point.value - point.chain))
    where = f"x = {short(point.position)} and {_instant(judgement, point.time)}"
    return f", at worst by {size} (± {_in(observable, point.error, digits=1)}) at {where}"


def _instant(judgement: Judgement, time: float) -> str:
    return judgement.units.instant(float(f"{time:.4g}"))


def _standings(observable: ObservableJudgement) -> str:
    said = [standing(comparison, level) for level, comparison in observable.found.levels.items()]
    return f"; it is {listed(said)}" if said else ""


def _wrong_in_words(observable: ObservableJudgement) -> str:
    beyond = f"beyond {plain(observable.resolve_at)} times the error"
    if not observable.found.wrong_count:
        return f"no point lies {beyond}"
    return f"{percent(observable.found.wrong_count / observable.used)} of its points lie {beyond}"


def _badness(observable: ObservableJudgement, judgement: Judgement) -> float:
    found, allowance = observable.found, judgement.allowance
    if allowance.level:
        level = found.levels[allowance.level]
        return level.rms / max(level.level_rms, level.error, VANISHING)
    return found.excess if allowance.excess is not None else found.chi_square or 0.0


def _last(observable: ObservableJudgement) -> float:
    return float(observable.faced.points.times.max())


def _in(observable: ObservableJudgement, value: float, *, digits: int = 2) -> str:
    return quantity(value, observable.unit, digits=digits)


def _conservation(found: Conservation, judgement: Judgement) -> str:
    said = capitalised(judgement.words.name(found.name))
    parts = []
    if found.total:
        verb = "is conserved" if found.total.holds else "is not conserved"
        parts.append(f"its total {verb} ({_balance(found.total)})")
    if found.local:
        verb = "holds" if found.local.holds else "is violated"
        parts.append(f"the continuity equation with its own current {verb} ({_balance(found.local)})")
    reasons = [found.reason] if found.reason else []
    if not parts:
        return f"{said}: not checked, for {found.reason or 'something flows through the ends'}."
    return f"{said}: {'; '.join([*parts, *(f'more was not checked, for {reason}' for reason in reasons)])}."


def _balance(check: Check) -> str:
    relative = check.violation / check.scale if check.scale > 0 else 0.0
    share = f"{number(100 * relative)}% of what moves" if check.scale > 0 else number(check.violation)
    within = check.tolerance / check.scale if check.scale > 0 else 0.0
    account = f"{number(100 * within)}%" if check.scale > 0 else number(check.tolerance)
    times = (
        ""
        if check.holds or not check.tolerance
        else f", {number(check.violation / check.tolerance)} {TIMES} that"
    )
    return f"violation {share}; discretisation accounts for {account}{times}"
