"""Open the dataset of a run as labelled arrays."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import xarray

from tnquench.dataset.contents import Attribute, Contents, StoredVariable
from tnquench.dataset.integrity import findings_of, read_contents, version_complaint
from tnquench.dataset.kinds import from_json
from tnquench.dataset.storage import locate
from tnquench.dataset.variables import COORDINATES, JSON_ATTRIBUTES, OWN_COORDINATES, STRETCH_COORDINATES
from tnquench.errors import InputError


@dataclass(frozen=True, repr=False)
class Run:
    """A dataset in memory: each group an xarray Dataset with its coordinates, units and meanings.

    path          : the file
    quantum       : the exact dynamics, such as `energy_density` (time, bond)
    hydrodynamics : the predictions by level, such as `hydrodynamics["euler"]`
    budget        : errors, deviation and verdict by observable, such as `budget["energy_density"]`
    companions    : the companion runs by name
    coordinates   : `time`, `site`, `bond`, `source`
    attributes    : attributes of the file itself
    provenance    : where it comes from; versions, events and preparation as Python lists and mappings
    stretch       : the stretch study, such as `energy_density_euler_exponent` (norm, window); empty without
    """

    path: Path
    quantum: xarray.Dataset
    hydrodynamics: Mapping[str, xarray.Dataset]
    budget: Mapping[str, xarray.Dataset]
    companions: Mapping[str, xarray.Dataset]
    coordinates: xarray.Dataset
    attributes: Mapping[str, Any]
    provenance: Mapping[str, Any]
    stretch: xarray.Dataset = field(default_factory=xarray.Dataset)

    def __repr__(self) -> str:
        sizes = ", ".join(f"{name} {size}" for name, size in self.coordinates.sizes.items())
        levels = ", ".join(self.hydrodynamics) or "no prediction"
        return f"Run({self.provenance.get('title', '')!r}: {sizes}; {levels}; {self.path})"


def open_run(path: Path | str, *, verify: bool = True) -> Run:
    """Return the dataset in folder `path`, or the dataset `path` itself, read into memory.

    verify : refuse a dataset that differs from its digest; without it such a dataset is opened as it is
    Raises InputError if the dataset is missing, unreadable, damaged, altered, incomplete, or of a newer
    format.
    """
    contents = read_contents(Path(path))
    file = locate(Path(path))
    findings = findings_of(contents) if verify else [version_complaint(contents)]
    if any(findings):
        more = f" ({len(findings) - 1} more findings; tnquench check lists them)" if findings[1:] else ""
        raise InputError(str(file), [findings[0] + more], consequence="")
    try:
        return _build(file, contents)
    except Exception as error:  # unverified: dimensions that contradict each other, attributes of any kind
        said = " ".join(str(error).split())[:200]
        raise InputError(str(file), [f"damaged dataset: {said}"], consequence="") from error


def _build(file: Path, contents: Contents) -> Run:
    datasets = {group: _dataset(contents, group) for group in contents.groups()}
    return Run(
        path=file,
        quantum=datasets.get("quantum", xarray.Dataset()),
        hydrodynamics=_below("hydrodynamics", datasets),
        budget=_below("budget", datasets),
        companions=_below("companions", datasets),
        coordinates=_dataset(contents, ""),
        attributes=_decoded(contents.attributes.get("", {})),
        provenance=_decoded(contents.attributes["provenance"]),
        stretch=datasets.get("stretch", xarray.Dataset()),
    )


def _below(head: str, datasets: Mapping[str, xarray.Dataset]) -> dict[str, xarray.Dataset]:
    split = {group: group.partition("/") for group in datasets}
    return {tail: datasets[group] for group, (first, _, tail) in split.items() if first == head}


def _dataset(contents: Contents, group: str) -> xarray.Dataset:
    """Return one group with the scales its variables use."""
    found = contents.group(group)
    used = {*found, *(dim for variable in found.values() for dim in variable.dims)}
    scales = {**contents.group(""), **found}
    known = (*COORDINATES, *OWN_COORDINATES, *STRETCH_COORDINATES)
    names = [name for name in known if name in scales and name in used]
    return xarray.Dataset(
        {name: _labelled(variable) for name, variable in found.items() if name not in names},
        {name: _labelled(scales[name]) for name in names},
        _decoded(contents.attributes.get(group, {})),
    )


def _labelled(variable: StoredVariable) -> xarray.Variable:
    return xarray.Variable(variable.dims, variable.values, dict(variable.attributes))


def _decoded(attributes: Mapping[str, Attribute]) -> dict[str, Any]:
    """Return attributes with JSON text turned into lists and mappings."""
    return {
        name: from_json(value) if name in JSON_ATTRIBUTES else value for name, value in attributes.items()
    }
