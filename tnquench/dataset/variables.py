"""The table of everything a dataset may hold: dimensions, units and meaning of each variable, group by group.

Groups are named by their path in the file, without a leading slash: "quantum", "hydrodynamics/euler",
"budget/energy_density", "companions/weight_30". What a group may hold depends on nothing but that name; of
the observables a run holds those of its model, which the root's attribute "observables" lists.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, replace

from tnquench.conventions import CURRENTS, OBSERVABLE_PLACES, STRETCH_FINDINGS

#: Version of the layout below; a reader refuses a file whose version is larger. Files of version 1 are of the
#: XXZ chain and hold `FIRST_OBSERVABLES`. A file is of the first version that has all of its groups.
FORMAT_VERSION = 3
#: Version of a file without any of the groups that came later, and these groups.
PLAIN_VERSION = 2
SINCE: dict[str, int] = {"stretch": 3}
FIRST_OBSERVABLES: tuple[str, ...] = ("energy_density", "energy_current", "charge_density", "charge_current")

#: Name of the dataset in its folder.
FILE_NAME = "run.h5"

#: Hydrodynamic theories a dataset may hold.
LEVELS: tuple[str, ...] = ("euler", "diffusive")

#: Companion runs on a chain of another length carry their own places, under these names.
OWN_PLACES: dict[str, str] = {"site": "site_length", "bond": "bond_length"}


RMS = "root mean square in the light cone"


@dataclass(frozen=True)
class Variable:
    """One row of the table: dimensions, units, meaning, element type and the names of its integer values."""

    dims: tuple[str, ...]
    units: str
    long_name: str
    dtype: str = "float64"
    #: Meanings of the values 0, 1, 2..., without blanks; empty where a value is a number.
    flags: tuple[str, ...] = ()
    #: Whether nan may stand for a value that could not be determined.
    gaps: bool = False


#: Dimension scales of the root group.
COORDINATES: dict[str, Variable] = {
    "time": Variable(("time",), "1/energy", "time since the start"),
    "site": Variable(("site",), "lattice spacing", "position of the site, the middle of the chain at zero"),
    "bond": Variable(("bond",), "lattice spacing", "position of the bond, the middle of the chain at zero"),
    "source": Variable(("source",), "1", "source of error", "str"),
}

#: Dimension scales of a companion run whose chain has another length.
OWN_COORDINATES: dict[str, Variable] = {
    own: replace(
        COORDINATES[place], dims=(own,), long_name=f"{COORDINATES[place].long_name}, companion chain"
    )
    for place, own in OWN_PLACES.items()
}

#: Dimension scales of the stretch study: factors of the family, norms of a deviation, parts of the time.
STRETCH_COORDINATES: dict[str, Variable] = {
    "factor": Variable(("factor",), "1", "factor by which profiles, chain and times are stretched"),
    "norm": Variable(("norm",), "1", "norm over the light-cone window", "str"),
    "window": Variable(("window",), "1", "part of the time", "str"),
}

#: What the stretch study says of the family as a whole.
STRETCH_FAMILY: dict[str, Variable] = {
    "window_start": Variable(("window",), "1/energy", "first time of the part, divided by the factor"),
    "window_end": Variable(("window",), "1/energy", "last time of the part, divided by the factor"),
    "sites": Variable(("factor",), "1", "number of sites", "int64"),
    "wall_seconds": Variable(("factor",), "s", "wall time of the run and its companions"),
}

#: Units and meaning of each local observable. What the charge is depends on the model.
OBSERVABLES: dict[str, Variable] = {
    name: Variable(("time", OBSERVABLE_PLACES[name]), units, long_name)
    for name, units, long_name in (
        ("energy_density", "energy", "energy density, the expectation value of the bond's term of H"),
        ("energy_current", "energy^2", "energy current"),
        ("charge_density", "1", "charge density: S^z (xxz), n - 1/2 (fermion), n - 1 (hubbard)"),
        ("charge_current", "energy", "current of the charge density: of S^z (xxz), of particles (otherwise)"),
        ("magnetisation", "1", "magnetisation S^z"),
        ("spin_current", "energy", "current of the magnetisation S^z"),
        ("double_occupancy", "1", "double occupancy, the expectation value of n_up n_down"),
        ("transverse_magnetisation", "1", "transverse magnetisation, the expectation value of sigma^z"),
    )
}

#: Sum over the chain of each conserved density.
TOTALS: dict[str, Variable] = {
    "total_energy": Variable(("time",), "energy", "total energy"),
    "total_charge": Variable(("time",), "1", "sum of the charge density"),
    "total_magnetisation": Variable(("time",), "1", "total magnetisation S^z"),
}

_QUANTUM: dict[str, Variable] = (
    OBSERVABLES
    | {
        "bond_dimension": Variable(("time", "bond"), "1", "bond dimension", "int64"),
        "operator_entanglement": Variable(("time", "bond"), "nats", "entropy of entanglement of the state"),
        "discarded_weight": Variable(("time", "bond"), "1", "discarded weight, summed since the start"),
    }
    | TOTALS
)

#: A companion's observables, and what its cuts lost.
_COMPANION: dict[str, Variable] = OBSERVABLES | {"discarded_weight": _QUANTUM["discarded_weight"]}

_ON_OWN_PLACES: dict[str, Variable] = OWN_COORDINATES | {
    name: replace(row, dims=tuple(OWN_PLACES.get(dim, dim) for dim in row.dims))
    for name, row in _COMPANION.items()
}

#: What `/provenance` must say; the writer adds the last two.
PROVENANCE: tuple[str, ...] = (
    "config_toml",
    "config_file",
    "title",
    "versions",
    "machine",
    "wall_seconds",
    "cpu_seconds",
    "created",
    "events",
    "preparation",
    "format_version",
    "digest",
)

#: Attributes that hold a list or a mapping as JSON text, decoded when a run is opened.
JSON_ATTRIBUTES: frozenset[str] = frozenset(
    {"versions", "events", "preparation", "references", "main_run", "model", "advice"}
)

#: Rigorous bounds that a file may lack: older ones do.
TIGHTER: frozenset[str] = frozenset({"layer_bound", "light_cone_bound"})

#: Variables of a budget that exist only where companion runs measured the errors; so do the verdicts.
MEASURED: frozenset[str] = frozenset({"error", "numerical", "numerical_norm", "dominant_source"})


def variables_of(group: str, *, own_places: bool = False) -> dict[str, Variable]:
    """Return the variables that group `group` may hold, by name, copies of the root's scales left out.

    own_places : the group is a companion run on a chain of another length, with positions of its own
    Raises ValueError for a group that the layout does not know.
    """
    head, _, tail = group.partition("/")
    if group == "quantum":
        return _QUANTUM
    if group == "stretch":
        return STRETCH_COORDINATES | STRETCH_FAMILY | _stretch_variables()
    if head == "hydrodynamics" and tail in LEVELS:
        return _prediction_variables(tail)
    if head == "budget" and tail in OBSERVABLES:
        return _budget_variables(tail)
    if head == "companions" and tail and "/" not in tail:
        return _ON_OWN_PLACES if own_places else _COMPANION
    message = f"no such group in a dataset: {group!r}"
    raise ValueError(message)


def total_of(density: str) -> str:
    """Return the name of the sum over the chain of a conserved density, such as "total_charge"."""
    return f"total_{density.removesuffix('_density')}"


def held_by(group: str, observables: Iterable[str]) -> set[str]:
    """Return the variables of "quantum" or of a companion that a file with these observables holds."""
    held = set(observables)
    if group != "quantum":
        return held | set(OWN_COORDINATES)
    own = set(_QUANTUM) - set(OBSERVABLES) - set(TOTALS)
    return held | own | {total_of(density) for density in CURRENTS if density in held}


def attributes_of(group: str, *, sources: Iterable[str]) -> tuple[str, ...]:
    """Return the attributes that group `group` must carry; `sources` are the names on the source scale."""
    head = group.partition("/")[0]
    required: dict[str, tuple[str, ...]] = {
        "provenance": PROVENANCE,
        "hydrodynamics": ("light_cone_left", "light_cone_right", "method", "references"),
        "budget": (*(f"kind_{source}" for source in sources), "first_resolved_time", "resolve_at"),
        "companions": ("discarded_weight", "time_step", "sites", "seconds"),
        "stretch": ("resolve_at", "reach"),
    }
    return required.get(head, ())


def words(name: str) -> str:
    """Return a variable's name as words."""
    return name.replace("_", " ")


def _prediction_variables(level: str) -> dict[str, Variable]:
    table: dict[str, Variable] = {}
    for name, observable in OBSERVABLES.items():
        said = f"{words(name)}, {level} hydrodynamics"
        table[name] = replace(observable, long_name=said)
        table[f"{name}_grid_error"] = replace(observable, long_name=f"error of the grids: {said}")
        table[f"{name}_strings_error"] = replace(observable, long_name=f"error of the strings: {said}")
    return table


def _budget_variables(name: str) -> dict[str, Variable]:
    observable = OBSERVABLES[name]
    dims, units, said = observable.dims, observable.units, words(name)
    table = {
        "error": Variable(("source", *dims), units, f"error of the {said} by source"),
        "bound": Variable(dims, units, f"rigorous bound on the real-time truncation error of the {said}"),
        "layer_bound": Variable(dims, units, f"rigorous bound on that error by the angles of layers, {said}"),
        "light_cone_bound": Variable(dims, units, f"rigorous bound on that error by cuts in reach, {said}"),
        "numerical": Variable(dims, units, f"summed numerical error of the {said}"),
        "numerical_norm": Variable(("time",), units, f"numerical error of the {said}, {RMS}"),
        "dominant_source": Variable(("time",), "1", f"largest source of error of the {said}", "int64"),
    }
    for level in LEVELS:
        deviation = f"{said}, quantum minus {level} hydrodynamics"
        table[f"{level}_deviation"] = Variable(dims, units, deviation)
        table[f"{level}_resolved"] = Variable(
            dims, "1", f"verdict on the {deviation}", "int8", ("unresolved", "resolved")
        )
        table[f"{level}_deviation_norm"] = Variable(("time",), units, f"{deviation}, {RMS}")
    return table


def stretch_rows(name: str, level: str) -> dict[str, Variable]:
    """Return the variables of the stretch study of one observable against one theory."""
    key, units, said = f"{name}_{level}", OBSERVABLES[name].units, f"{words(name)}, quantum minus {level}"
    at_times, in_windows, of_fits = (
        ("norm", "factor", "time"),
        ("norm", "factor", "window"),
        ("norm", "window"),
    )
    p = f"p of {said} ~ factor^-p"
    return {
        f"{key}_deviation": Variable(at_times, units, f"norm of {said}, at time/factor"),
        f"{key}_numerical": Variable(at_times, units, f"numerical error of the norm of {said}"),
        f"{key}_window_deviation": Variable(in_windows, units, f"norm of {said} over a part of the time"),
        f"{key}_window_numerical": Variable(in_windows, units, f"numerical error of that norm of {said}"),
        f"{key}_exponent": Variable(of_fits, "1", p, gaps=True),
        f"{key}_uncertainty": Variable(of_fits, "1", f"uncertainty of {p}", gaps=True),
        f"{key}_numerical_uncertainty": Variable(
            of_fits, "1", f"part of numerical errors in the uncertainty of {p}", gaps=True
        ),
        f"{key}_change": Variable(of_fits, "1", f"change from smaller to larger factors of {p}", gaps=True),
        f"{key}_used": Variable(
            in_windows, "1", f"whether the fit has the factor: {p}", "int8", ("left_out", "used")
        ),
        f"{key}_finding": Variable(of_fits, "1", f"verdict on {p}", "int8", STRETCH_FINDINGS),
    }


def _stretch_variables() -> dict[str, Variable]:
    rows = (stretch_rows(name, level) for name in OBSERVABLES for level in LEVELS)
    return {key: row for table in rows for key, row in table.items()}
