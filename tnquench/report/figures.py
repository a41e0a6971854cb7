"""The figures of a run, in the order of the report; each also stands alone for a notebook."""

from __future__ import annotations

from dataclasses import dataclass

from matplotlib.figure import Figure

from tnquench.conventions import OBSERVABLE_PLACES
from tnquench.dataset.reader import Run
from tnquench.report.canvas import Plate
from tnquench.report.comparison import Comparison, compare
from tnquench.report.cuts import cut_note, cut_plate
from tnquench.report.maps import map_note, map_plate
from tnquench.report.question import settings_of
from tnquench.report.sources import budget_plate, start_plate
from tnquench.report.traces import conservation_plate, growth_plate
from tnquench.report.units import units_of


@dataclass(frozen=True)
class Chapter:
    """A section of the report: its anchor, its heading, how to read it, and its plates."""

    anchor: str
    heading: str
    note: str
    plates: tuple[Plate, ...]


def comparisons(run: Run) -> tuple[list[Comparison], list[Comparison]]:
    """Return the observables that a run holds: those worth drawing, and those that are zero by symmetry."""
    held = [name for name in OBSERVABLE_PLACES if name in run.quantum or _predicted(run, name)]
    fields = [compare(run, name) for name in held]
    return [field for field in fields if not field.vanishes], [field for field in fields if field.vanishes]


def chapters(run: Run, fields: list[Comparison]) -> list[Chapter]:
    """Return every figure that the run has data for.

    fields : the observables to draw, from `comparisons`
    """
    compared = [field for field in fields if field.deviation is not None]
    budgeted = [field for field in fields if field.errors or field.bound is not None]
    found = []
    if fields:
        found += [
            Chapter(
                "maps", "Light cones", map_note(fields[0]), _joined([map_plate(field) for field in fields])
            ),
            Chapter("cuts", "Profiles", cut_note(fields[0]), tuple(cut_plate(field) for field in fields)),
        ]
    if compared:
        found.append(_alone("start", start_plate(compared)))
    if budgeted:
        found.append(_alone("budget", budget_plate(budgeted)))
    if len(run.quantum):
        units = units_of(settings_of(run))
        found += [
            _alone("growth", growth_plate(run.quantum, units)),
            _alone("conservation", conservation_plate(run.quantum, units)),
        ]
    return found


def _joined(plates: list[Plate]) -> tuple[Plate, ...]:
    """Put plates of a single panel side by side, leave others as they are."""
    if any(len(plate.panels) > 1 for plate in plates):
        return tuple(plates)
    panels = tuple(panel for plate in plates for panel in plate.panels)
    return (Plate("maps", "", "", panels, columns=3),)


def _alone(anchor: str, plate: Plate) -> Chapter:
    return Chapter(anchor, plate.heading, "", (plate,))


def figure(run: Run, name: str) -> Figure:
    """Return one plate of the report as a matplotlib figure.

    name : such as "energy_density_maps", "energy_density_cuts", "start", "budget", "growth", "conservation"
    Raises KeyError that names the figures there are.
    """
    plates = {plate.name: plate for chapter in chapters(run, comparisons(run)[0]) for plate in chapter.plates}
    if name not in plates:
        message = f"no figure {name!r} in this run; there are: {', '.join(plates)}"
        raise KeyError(message)
    return plates[name].figure()


def _predicted(run: Run, name: str) -> bool:
    return any(name in theory for theory in run.hydrodynamics.values())
