"""Is a dataset what it was when it was written, and all of it there?"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from tnquench.dataset.contents import Contents, StoredVariable, digest_of_contents
from tnquench.dataset.hdf5_image import DamagedFile
from tnquench.dataset.kinds import kind_complaints
from tnquench.dataset.storage import decode, locate, read_bytes
from tnquench.dataset.variables import (
    COORDINATES,
    FIRST_OBSERVABLES,
    FORMAT_VERSION,
    LEVELS,
    MEASURED,
    OBSERVABLES,
    OWN_COORDINATES,
    STRETCH_COORDINATES,
    STRETCH_FAMILY,
    TIGHTER,
    Variable,
    attributes_of,
    held_by,
    stretch_rows,
    variables_of,
)
from tnquench.errors import InputError


def digest_of(path: Path | str) -> str:
    """Return the SHA-256 of all variables and attributes of a dataset but the stored digest, in hexadecimal.

    path : the dataset or its folder
    Raises InputError if the dataset is missing, unreadable or damaged.
    """
    return digest_of_contents(read_contents(Path(path)))


def check_run(path: Path | str) -> list[str]:
    """Return what is wrong with a dataset, one plain line a finding; empty when it is sound.

    path : the dataset or its folder
    Raises InputError only if there is no file to read.
    """
    image = read_bytes(Path(path))
    try:
        contents = decode(image)
    except DamagedFile as damage:
        return [str(damage)]
    return findings_of(contents)


def read_contents(path: Path) -> Contents:
    """Return the contents of a dataset (file or folder); raises InputError if they cannot be read."""
    image = read_bytes(path)
    try:
        return decode(image)
    except DamagedFile as damage:
        raise InputError(str(locate(path)), [str(damage)], consequence="") from damage


def findings_of(contents: Contents) -> list[str]:
    """Return what is wrong with `contents`, one plain line a finding."""
    if complaint := version_complaint(contents):
        return [complaint]
    return [line if line.isprintable() else _printable(line) for line in _findings(contents)]


def version_complaint(contents: Contents) -> str:
    """Return why the layout of `contents` cannot be understood, or nothing."""
    version = contents.attributes.get("provenance", {}).get("format_version")
    if version is None:
        return "no format version in /provenance: not a dataset of this program"
    if not isinstance(version, int) or version < 1:
        return f"format version {str(version)[:20]!r} in /provenance is not a positive integer"
    if version > FORMAT_VERSION:
        return f"format version {version} is newer than {FORMAT_VERSION}, the newest this program reads"
    return ""


def digest_complaint(contents: Contents) -> str:
    """Return how `contents` differ from their stored digest, or nothing."""
    stored = contents.attributes.get("provenance", {}).get("digest")
    if stored is None:
        return "no digest in /provenance"
    found = digest_of_contents(contents)
    if found == stored:
        return ""
    return f"altered since it was written: digest {found[:12]} where {str(stored)[:12]} is stored"


def _findings(contents: Contents) -> Iterator[str]:
    if complaint := digest_complaint(contents):
        yield complaint
    scales = contents.group("")
    alone = _is_prediction_alone(contents)
    required = set(COORDINATES) - ({"source"} if alone else set())
    yield from _presence_findings("", scales, COORDINATES, required=required)
    for name, scale in scales.items():
        yield from _order_findings(name, scale)
    for group in contents.groups():
        if group != "provenance":
            yield from _group_findings(contents, group)
        yield from _attribute_findings(contents, group)
    yield from kind_complaints("", contents.attributes.get("", {}))
    for path, variable in contents.variables.items():
        yield from kind_complaints(path, variable.attributes)
    yield from _missing_groups(contents)
    yield from _observable_findings(contents)


def observables_of(contents: Contents) -> tuple[str, ...]:
    """Return the observables that a file says it holds, those of the XXZ chain where it is too old to say."""
    listed = contents.attributes.get("", {}).get("observables")
    return FIRST_OBSERVABLES if listed is None else tuple(str(listed).split())


def _observable_findings(contents: Contents) -> Iterator[str]:
    """Compare the root's list of observables with what is there."""
    listed = observables_of(contents)
    version = contents.attributes.get("provenance", {}).get("format_version")
    if "observables" not in contents.attributes.get("", {}) and version != 1:
        yield "missing attribute observables of the root"
    if strangers := [name for name in listed if name not in OBSERVABLES]:
        yield f"unknown observables in the root's list: {', '.join(strangers)}"
    found = [group.removeprefix("budget/") for group in contents.groups() if group.startswith("budget/")]
    for name in sorted({*found, *contents.group("quantum")} & set(OBSERVABLES) - set(listed)):
        yield f"observable {name} is not in the root's list"


def _is_prediction_alone(contents: Contents) -> bool:
    return contents.attributes.get("", {}).get("content") == "prediction"


def _missing_groups(contents: Contents) -> Iterator[str]:
    """Compare the groups with what the file says of itself; a run may lack companions or a prediction."""
    groups, levels = contents.groups(), _levels(contents)
    if _is_prediction_alone(contents):
        expected = {f"hydrodynamics/{level}" for level in levels or LEVELS[:1]}
    else:
        expected = {
            "quantum",
            *(f"budget/{name}" for name in observables_of(contents) if name in OBSERVABLES),
        }
        expected |= {f"hydrodynamics/{level}" for level in levels}
    for group in sorted(expected - set(groups)):
        yield f"missing group {group}"
    if _is_measured(contents) and not any(group.startswith("companions/") for group in groups):
        yield "missing group companions, from which the errors of the budget were measured"


def _levels(contents: Contents) -> list[str]:
    """Return the theories that the file predicts or judges."""
    judged = {f"budget/{name}/{level}_deviation": level for name in OBSERVABLES for level in LEVELS}
    named = {judged[path] for path in contents.variables if path in judged}
    return [level for level in LEVELS if level in named or contents.group(f"hydrodynamics/{level}")]


def _is_measured(contents: Contents) -> bool:
    """Were the errors measured by companion runs?"""
    measured = {f"budget/{name}/{variable}" for name in OBSERVABLES for variable in MEASURED}
    return any(path in measured or path.startswith("companions/") for path in contents.variables)


def _group_findings(contents: Contents, group: str) -> Iterator[str]:
    """Compare the variables of one group with its table and with the scales of the root."""
    found, scales = contents.group(group), contents.group("")
    own = {name: found[name] for name in OWN_COORDINATES if name in found}
    try:
        table = variables_of(group, own_places=bool(own))
        own |= {name: found[name] for name in STRETCH_COORDINATES if name in found}
    except ValueError:
        yield f"unknown group {group}"
        return
    required = _required(contents, group) & set(table)
    yield from _presence_findings(group, found, {**COORDINATES, **table}, required=required)
    for name, variable in found.items():
        yield from _shape_findings(f"{group}/{name}", variable, {**scales, **own})
        if name in scales and not np.array_equal(variable.values, scales[name].values):
            yield f"{group}/{name} differs from the scale {name}"


def _required(contents: Contents, group: str) -> set[str]:
    """Return the variables of a group that this file must have."""
    head, _, tail = group.partition("/")
    if head == "budget":
        return _required_of_budget(contents, tail)
    if head == "hydrodynamics":
        errors = ("", "_grid_error", "_strings_error")
        return {f"{name}{error}" for name in _predicted(contents, tail) for error in errors}
    if group == "stretch":
        return _required_of_stretch(contents)
    return held_by(group, observables_of(contents))


def _required_of_stretch(contents: Contents) -> set[str]:
    """A study has all rows of an observable against a theory, or none where a run lacks the prediction."""
    found = contents.group("stretch")
    required = {*STRETCH_COORDINATES, *STRETCH_FAMILY}
    for name in OBSERVABLES:
        for level in LEVELS:
            rows = stretch_rows(name, level)
            required |= set(rows) if set(rows) & set(found) else set()
    return required


def _required_of_budget(contents: Contents, name: str) -> set[str]:
    absent = tuple(f"{level}_" for level in LEVELS if name not in _predicted(contents, level))
    required = {row for row in variables_of(f"budget/{name}") if not row.startswith(absent)} - TIGHTER
    if _is_measured(contents):
        return required
    return {row for row in required if row not in MEASURED and not row.endswith("_resolved")}


def _predicted(contents: Contents, level: str) -> set[str]:
    """Return the observables that a theory predicts: some of a model's may have no prediction."""
    if _is_prediction_alone(contents):
        return set(observables_of(contents))
    judged = {name for name in OBSERVABLES if f"budget/{name}/{level}_deviation" in contents.variables}
    return judged | set(OBSERVABLES) & set(contents.group(f"hydrodynamics/{level}"))


def _attribute_findings(contents: Contents, group: str) -> Iterator[str]:
    source = contents.variables.get("source")
    found = contents.attributes.get(group, {})
    for name in attributes_of(group, sources=[] if source is None else source.values.ravel().tolist()):
        if name not in found:
            yield f"missing attribute {name} of {group}"
    yield from kind_complaints(group, found)


def _presence_findings(
    group: str, found: Mapping[str, StoredVariable], table: Mapping[str, Variable], *, required: set[str]
) -> Iterator[str]:
    """Compare the variables of one group with the rows of its table."""
    place = f"{group}/" if group else ""
    for name in sorted(required - set(found)):
        yield f"missing variable {place}{name}"
    for name, variable in found.items():
        if name in table:
            yield from _value_findings(f"{place}{name}", variable, table[name])
        else:
            yield f"unknown variable {place}{name}"


def _value_findings(path: str, variable: StoredVariable, row: Variable) -> Iterator[str]:
    values = variable.values
    if variable.dims != row.dims:
        yield f"{path} has dimensions {_listed(variable.dims)}, expected {_listed(row.dims)}"
    kind = "U" if row.dtype == "str" else np.dtype(row.dtype).kind
    if values.dtype.kind != kind:
        yield f"{path} holds {values.dtype.name}, expected {row.dtype}"
        return
    if variable.attributes.get("units") != row.units:
        yield f"{path} has units {variable.attributes.get('units')!r}, expected {row.units!r}"
    if kind == "f" and (bad := int(np.count_nonzero(_unsound(values, row)))):
        yield f"{path} holds {bad} values that are not finite numbers"
    meanings = str(variable.attributes.get("flag_meanings", "")).split()
    if meanings and values.size and not (values.min() >= 0 and values.max() < len(meanings)):
        yield f"{path} holds values outside 0..{len(meanings) - 1}"


def _unsound(values: NDArray[np.float64], row: Variable) -> NDArray[np.bool_]:
    """Return which values are no numbers that the row allows."""
    return np.isinf(values) if row.gaps else ~np.isfinite(values)


def _shape_findings(
    path: str, variable: StoredVariable, scales: Mapping[str, StoredVariable]
) -> Iterator[str]:
    sizes = tuple(scales[dim].values.size if dim in scales else None for dim in variable.dims)
    if variable.values.shape != sizes:
        yield f"{path} has shape {variable.values.shape}, its dimensions have sizes {sizes}"


def _order_findings(name: str, scale: StoredVariable) -> Iterator[str]:
    values = scale.values.ravel()
    if values.size == 0:
        yield f"{name} is empty"
    elif values.dtype.kind == "f" and not np.all(np.diff(values) > 0):
        yield f"{name} does not increase everywhere"
    elif np.unique(values).size < values.size:
        yield f"{name} repeats a value"


def _printable(line: str) -> str:
    return "".join(letter if letter.isprintable() else "?" for letter in line)


def _listed(dims: tuple[str, ...]) -> str:
    return f"({', '.join(dims)})"
