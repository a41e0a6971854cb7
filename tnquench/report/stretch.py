"""The stretch study in words: exponents, and the order of hydrodynamics they support."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

from tnquench.conventions import CURRENTS, STRETCH_FINDINGS, STRETCH_NORMS, Reals
from tnquench.dataset.reader import Run
from tnquench.report.comparison import Comparison
from tnquench.report.question import settings_of
from tnquench.report.tables import Cell, Summary
from tnquench.report.units import Units
from tnquench.report.wording import LEVEL_NAMES, measured, plain, quantity

NORM_NAMES = {"rms": "root mean square", "maximum": "maximum"}
WHOLE = "whole"
#: What each finding says of Euler hydrodynamics.
MEANINGS: dict[str, str] = {
    "not_falling": "the deviation does not fall: the theory fails at this scale",
    "slower": "smaller than 1: the deviation falls more slowly than diffusive corrections would",
    "first_order": "consistent with p = 1 (diffusive corrections)",
    "between": "larger than 1 and smaller than 2: at these stretches no single order of the gradients rules",
    "second_order": "consistent with p = 2 (second order in the gradients, as for free modes; no diffusive "
    "correction is seen)",
    "faster": "larger than 2",
}
SHORT_MEANINGS: dict[str, str] = {
    "unresolved": "not resolved",
    "not_falling": "does not fall",
    "slower": "smaller than 1",
    "first_order": "consistent with 1",
    "between": "between 1 and 2",
    "second_order": "consistent with 2",
    "faster": "larger than 2",
    "undecided": "undecided",
}


@dataclass(frozen=True)
class Stretched:
    """The stretch study of one observable, as the report needs it.

    factors (factor,), times (time,) and starts, ends (window,) divided by the factor; windows : their names
    deviation, numerical (norm, factor, time); over windows : (norm, factor, window)
    exponent, uncertainty, numerical_uncertainty, change : (norm, window), nan where not determined
    finding : by norm and window; used (norm, factor, window) : factors of the fit
    """

    name: str
    said: str
    unit: str
    units: Units
    level: str
    factors: Reals
    times: Reals
    windows: tuple[str, ...]
    starts: Reals
    ends: Reals
    deviation: Reals
    numerical: Reals
    window_deviation: Reals
    window_numerical: Reals
    exponent: Reals
    uncertainty: Reals
    numerical_uncertainty: Reals
    change: Reals
    used: Reals
    finding: tuple[tuple[str, ...], ...]
    resolve_at: float

    def power(self, norm: int, window: int) -> str:
        """Return an exponent with its uncertainty as text."""
        return measured(float(self.exponent[norm, window]), max(float(self.uncertainty[norm, window]), 0.001))


def stretched(run: Run, fields: list[Comparison]) -> list[Stretched]:
    """Return the stretch study of each of some observables, none for a run without one."""
    study = run.stretch
    found = []
    for field in fields:
        key = f"{field.name}_{field.level}"
        if f"{key}_exponent" not in study:
            continue
        values: dict[str, Any] = {
            str(name).removeprefix(f"{key}_"): np.asarray(study[name].values)
            for name in study
            if str(name).startswith(f"{key}_")
        }
        values["finding"] = tuple(
            tuple(STRETCH_FINDINGS[int(code)] for code in row) for row in values["finding"]
        )
        found.append(
            Stretched(
                name=field.name,
                said=field.said,
                unit=field.unit,
                units=field.units,
                level=field.level,
                factors=np.asarray(study["factor"].values),
                times=field.times,
                windows=tuple(str(name) for name in study["window"].values),
                starts=np.asarray(study["window_start"].values),
                ends=np.asarray(study["window_end"].values),
                resolve_at=float(study.attrs.get("resolve_at", np.nan)),
                **values,
            )
        )
    return found


def stretch_sentence(run: Run, fields: list[Comparison], *, about: str) -> str:
    """Return which order of hydrodynamics the stretch study supports, a sentence on a density and one on its
    current; empty without a study.

    about : the density to speak of, if it has a study
    """
    studies = stretched(run, fields)
    if not studies:
        return ""
    study = next((study for study in studies if study.name == about), studies[0])
    norm, window = STRETCH_NORMS.index("rms"), study.windows.index(WHOLE)
    theory = LEVEL_NAMES.get(study.level, study.level)
    factors = [plain(float(factor)) for factor in study.factors]
    opening = (
        f"Stretched by {', '.join(factors[:-1])} and {factors[-1]}, the deviation of {theory} from the "
        f"{study.said} (root mean square over the light cone and all times after the start)"
    )
    finding = study.finding[norm][window]
    if finding == "unresolved":
        return f"{opening} has no resolved exponent: {_too_large(study, norm, window)}."
    errors = measured(0.0, max(float(study.numerical_uncertainty[norm, window]), 0.001)).split(" ")[-1]
    power = f"goes like 1/stretchᵖ with p = {study.power(norm, window)} (numerical errors alone ± {errors})"
    sharp = _is_sharp(settings_of(run))
    meaning = _meaning(finding, study, norm, window, sharp=sharp)
    more = f"{_trend(study, norm, window)}{_left_out(study, norm, window)}"
    current = next((other for other in studies if other.name == CURRENTS.get(study.name)), None)
    return f"{opening} {power}: {meaning}{more}.{_on_current(current, norm, window, sharp=sharp)}"


def _on_current(study: Stretched | None, norm: int, window: int, *, sharp: bool) -> str:
    """Return the sentence on the current that belongs to the density; diffusion shows there first."""
    if study is None or study.finding[norm][window] == "unresolved":
        return ""
    meaning = _meaning(study.finding[norm][window], study, norm, window, sharp=sharp)
    more = f"{_trend(study, norm, window)}{_left_out(study, norm, window)}"
    return f" For the {study.said} p = {study.power(norm, window)}: {meaning}{more}."


def _meaning(finding: str, study: Stretched, norm: int, window: int, *, sharp: bool) -> str:
    """Return what a finding says of the order of the theory."""
    if finding == "undecided":
        if np.count_nonzero(study.used[norm, :, window]) < 3:
            return "undecided, for two stretches cannot show whether one power describes them"
        return "undecided: the uncertainty leaves more than one order"
    if finding == "first_order" and study.level != "euler":
        return "consistent with p = 1: corrections of first order in the gradients remain"
    if finding == "first_order" and sharp:
        return "consistent with p = 1 (diffusive corrections, or those of the lattice at a sharp joint)"
    return MEANINGS[finding]


def _trend(study: Stretched, norm: int, window: int) -> str:
    """Say how the exponent moves with the stretch, where that moves it visibly."""
    change = float(study.change[norm, window])
    if not np.isfinite(change) or abs(change) < max(float(study.numerical_uncertainty[norm, window]), 0.02):
        return ""
    verb = "rises" if change > 0 else "falls"
    return f"; from the smaller to the larger stretches it {verb} by {abs(change):.2f}"


def _left_out(study: Stretched, norm: int, window: int) -> str:
    """Name the stretches whose deviation is not resolved."""
    used = study.used[norm, :, window] == 1
    if np.all(used):
        return ""
    named = " and ".join(plain(float(factor)) for factor in study.factors[~used])
    return f" (not resolved at stretch {named}, hence left out)"


def _too_large(study: Stretched, norm: int, window: int) -> str:
    """Say at which stretch the numerical errors are too large."""
    value, error = study.window_deviation[norm, :, window], study.window_numerical[norm, :, window]
    worst = int(np.argmax(error / np.maximum(value, 1e-300)))
    return (
        f"numerical errors are too large (at stretch {plain(float(study.factors[worst]))} the deviation is "
        f"{quantity(float(value[worst]), study.unit)}, its numerical error "
        f"{quantity(float(error[worst]), study.unit, digits=1)}, and {plain(study.resolve_at)} times that is "
        "asked)"
    )


def _is_sharp(settings: Mapping[str, Any]) -> bool:
    profiles = settings.get("start", {}).values()
    steps = [table for table in profiles if isinstance(table, dict) and table.get("shape") == "step"]
    return any(not table.get("width") for table in steps)


def stretch_summary(studies: list[Stretched]) -> Summary:
    """Return the exponents: one row an observable and norm, one column a part of the time."""
    first = studies[0]
    headings = tuple(
        f"p, {_part(name)}: {plain(float(start))} ≤ t/stretch ≤ {plain(float(end))}"
        for name, start, end in zip(first.windows, first.starts, first.ends, strict=True)
    )
    rows = tuple(
        (
            f"{study.said}, {NORM_NAMES[name]}",
            tuple(_cell(study, norm, window) for window in range(len(study.windows))),
        )
        for study in studies
        for norm, name in enumerate(STRETCH_NORMS)
    )
    return Summary(headings, rows)


def _part(name: str) -> str:
    return "all times" if name == WHOLE else name


def _cell(study: Stretched, norm: int, window: int) -> Cell:
    finding = study.finding[norm][window]
    said = SHORT_MEANINGS[finding]
    return Cell(said) if finding == "unresolved" else Cell(study.power(norm, window), said)


def stretch_note(studies: list[Stretched]) -> str:
    """Return how to read the study."""
    return (
        "Each run is stretched in space and time alike, so that Euler hydrodynamics predicts the same "
        "function of x/stretch and t/stretch; what it leaves out falls as a power p of the stretch: 1 for "
        "diffusion, 2 for free modes. The light-cone window is the same in x/stretch for all. Uncertainties "
        "are two standard errors, with the numerical errors of every run, the scatter about one power, and "
        "its change from the smaller to the larger stretches, continued beyond. A stretch enters where its "
        f"deviation exceeds {plain(studies[0].resolve_at)} times its numerical error."
    )
