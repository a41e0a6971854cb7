"""The figures of a run, in the order of the report; each also stands alone for a notebook."""

from __future__ import annotations

from dataclasses import dataclass, replace

from matplotlib.figure import Figure

from tnquench.conventions import CURRENTS, OBSERVABLE_PLACES
from tnquench.dataset.reader import Run
from tnquench.report.canvas import Plate
from tnquench.report.comparison import Comparison, compare
from tnquench.report.cuts import FEW_FRACTIONS, FRACTIONS, cut_note, cut_plate
from tnquench.report.maps import map_note, map_plate
from tnquench.report.models import words_of
from tnquench.report.overlays import overlay_note, overlay_plate
from tnquench.report.question import settings_of, subject
from tnquench.report.sources import advice_of, budget_note, budget_plate, start_plate
from tnquench.report.stretch import stretch_note, stretch_summary, stretched
from tnquench.report.stretch_figures import stretch_plate
from tnquench.report.tables import Summary
from tnquench.report.traces import conservation_plate, growth_plate
from tnquench.report.units import units_of

#: With more observables than this only some are drawn in the foreground.
MANY = 4


@dataclass(frozen=True)
class Chapter:
    """A section of the report: its anchor, its heading, how to read it, its plates and perhaps a table."""

    anchor: str
    heading: str
    note: str
    plates: tuple[Plate, ...]
    table: Summary | None = None


def comparisons(run: Run) -> tuple[list[Comparison], list[Comparison]]:
    """Return the observables that a run holds: those worth drawing, and those that are zero by symmetry."""
    held = [name for name in OBSERVABLE_PLACES if name in run.quantum or _predicted(run, name)]
    fields = [compare(run, name) for name in held]
    return [field for field in fields if not field.vanishes], [field for field in fields if field.vanishes]


def foreground(fields: list[Comparison], about: str) -> list[Comparison]:
    """Return the observables that are drawn first: all of a few, else two densities and their currents.

    about : the observable that the run is about; it and the energy come before other densities
    """
    if len(fields) <= MANY:
        return fields
    held = {field.name for field in fields}
    densities = sorted(CURRENTS, key=lambda name: (name != about, name != "energy_density"))
    first = [density for density in densities if density in held][:2]
    chosen = {*first, *(CURRENTS[density] for density in first)}
    return [field for field in fields if field.name in chosen]


def chapters(run: Run, fields: list[Comparison]) -> list[Chapter]:
    """Return every figure that the run has data for.

    fields : the observables to draw, from `comparisons`
    """
    settings = settings_of(run)
    first = foreground(fields, subject(settings))
    others = [field for field in fields if field.name not in {shown.name for shown in first}]
    compared = [field for field in fields if field.deviation is not None]
    found = []
    if fields:
        found += [
            Chapter(
                "maps", "Light cones", map_note(first[0]), _joined([map_plate(field) for field in first])
            ),
            Chapter("cuts", "Profiles", _profile_note(first), _profiles(first, "cuts", FRACTIONS)),
        ]
    if compared:
        found.append(_alone("start", start_plate(compared)))
    if budgeted := _budgeted(first):
        plate = budget_plate(budgeted, advice=advice_of(run))
        found.append(_alone("budget", plate, note=budget_note(budgeted)))
    if studies := stretched(run, first):
        plates = (stretch_plate(studies),)
        table = stretch_summary(stretched(run, fields))
        found.append(Chapter("stretch", plates[0].heading, stretch_note(studies), plates, table))
    if len(run.quantum):
        units = units_of(settings)
        found += [
            _alone("growth", growth_plate(run.quantum, units)),
            _alone("conservation", conservation_plate(run.quantum, units, words_of(settings))),
        ]
    if others:
        found.append(_further(others))
    return found


def _further(fields: list[Comparison]) -> Chapter:
    """Return the chapter of the observables that are not in the foreground: maps, two profiles, budgets."""
    plates = list(_joined([map_plate(field) for field in fields], name="further_maps"))
    plates += _profiles(fields, "further_cuts", FEW_FRACTIONS)
    if budgeted := _budgeted(fields):
        plates.append(replace(budget_plate(budgeted), name="further_budget", caption=""))
    return Chapter("further", "Further observables", "Drawn as above.", tuple(plates))


def _budgeted(fields: list[Comparison]) -> list[Comparison]:
    return [field for field in fields if field.errors or field.bound is not None]


def _profiles(fields: list[Comparison], name: str, fractions: tuple[float, ...]) -> tuple[Plate, ...]:
    """Return the profiles of each observable."""
    return _joined([_profile(field, fractions) for field in fields], name=name, columns=2)


def _profile(field: Comparison, fractions: tuple[float, ...] = FRACTIONS) -> Plate:
    """Return an observable beside its prediction, a panel a time, or without one at all times together."""
    return overlay_plate(field) if field.prediction is None else cut_plate(field, fractions)


def _profile_note(fields: list[Comparison]) -> str:
    compared = [field for field in fields if field.prediction is not None]
    alone = [field for field in fields if field.prediction is None]
    notes = [cut_note(field) for field in compared[:1]]
    if alone and compared:
        notes.append("What has no prediction is drawn at several times together.")
    elif alone:
        notes.append(overlay_note(alone[0]))
    return " ".join(notes)


def _joined(plates: list[Plate], *, name: str = "maps", columns: int = 3) -> tuple[Plate, ...]:
    """Put plates of a single panel side by side, leave others as they are."""
    if any(len(plate.panels) > 1 for plate in plates):
        return tuple(plates)
    panels = tuple(panel for plate in plates for panel in plate.panels)
    return (Plate(name, "", "", panels, columns=2 if len(panels) in (2, 4) else columns),)


def _alone(anchor: str, plate: Plate, *, note: str = "") -> Chapter:
    return Chapter(anchor, plate.heading, note, (plate,))


def figure(run: Run, name: str) -> Figure:
    """Return one plate of the report as a matplotlib figure.

    name : such as "energy_density_maps", "energy_density_cuts", "start", "budget", "growth", "conservation"
    Raises KeyError that names the figures there are.
    """
    fields = comparisons(run)[0]
    found = [plate for chapter in chapters(run, fields) for plate in chapter.plates]
    found += [*map(map_plate, fields), *map(_profile, fields)]
    plates = {plate.name: plate for plate in found}
    if name not in plates:
        message = f"no figure {name!r} in this run; there are: {', '.join(plates)}"
        raise KeyError(message)
    return plates[name].figure()


def _predicted(run: Run, name: str) -> bool:
    return any(name in theory for theory in run.hydrodynamics.values())
