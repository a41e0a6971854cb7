"""Datasets that are whole as files and wrong in what they say, their digest right or wrong."""

from __future__ import annotations

import io
import json
from collections.abc import Callable
from dataclasses import replace
from functools import cache
from typing import Any

import h5py
import numpy as np
from hypothesis import strategies as st

from tests.hostile_cases import hostile_text, mutated
from tnquench.dataset.contents import Contents, StoredVariable, digest_of_contents
from tnquench.dataset.storage import decode, encode

#: Attributes of any kind and value.
odd_attributes: st.SearchStrategy[Any] = st.one_of(
    st.integers(-(2**63), 2**63 - 1),
    st.floats(),
    st.text(st.characters(exclude_categories=["Cs"], exclude_characters="\0"), max_size=20),
    st.lists(st.integers(-5, 5), min_size=2, max_size=4),
    st.sampled_from([
        *(hostile_text("attribute"), "[" * 100_000, "9" * 10_000, "{}", "[]", "[1, null]", "null", "NaN"),
        *('{"a": {}}', "[[1]]", '[{"time": "now", "kind": [], "detail": {}}]', "x" * 50_000, "", "1e999"),
        *("$\\frac{$", "\\N{x}", '{"discarded_weight": 1e999, "time_step": 0, "seconds": -1}', "a = [[["),
        *("shape = 3\n[chain]\nsites = 'x'", "[chain]\nsites = 1e9\n[start]\nbeta = 3"),
        *("chain = 3\nstart = [1]\nevolution = 'x'", "start.beta = 'hot'", "chain.extra = 7"),
        "[start.beta]\nshape = 'table'\nfile = '/etc/passwd'",
    ]),
)  # fmt: skip


_decoded = cache(decode)


@st.composite
def told_otherwise(draw: st.DrawFn, image: bytes) -> bytes:
    """A dataset with a few attributes and variables changed, written as we do, its digest made right."""
    contents = _decoded(image)
    for _ in range(draw(st.integers(1, 4))):
        change = _with_attribute if draw(st.booleans()) else _with_variable
        contents = change(draw, contents)
    return resealed(contents)


def resealed(contents: Contents) -> bytes:
    """Return contents as a file whose digest and seal are right."""
    said = {group: dict(attributes) for group, attributes in contents.attributes.items()}
    said["provenance"] = {**said.get("provenance", {}), "digest": digest_of_contents(contents)}
    return encode(Contents(contents.variables, said))


def _with_attribute(draw: st.DrawFn, contents: Contents) -> Contents:
    group = draw(st.sampled_from(sorted(contents.attributes)))
    said = dict(contents.attributes[group])
    name = draw(st.sampled_from(sorted(said)) | st.sampled_from(["resolve_at", "light_cone_reach", "advice"]))
    if draw(st.integers(0, 4)) == 0:
        said.pop(name, None)
    else:
        said[name] = draw(odd_attributes)
    if name == "format_version" and said.get(name) != 2:
        said[name] = 2  # other versions are refused at once
    return Contents(contents.variables, {**contents.attributes, group: said})


def _with_variable(draw: st.DrawFn, contents: Contents) -> Contents:
    variables = dict(contents.variables)
    path = draw(st.sampled_from(sorted(variables)))
    old = variables[path]
    change = draw(st.sampled_from(sorted(CHANGES)))
    if change == "remove":
        del variables[path]
    elif change == "rename":
        head, bar, _ = path.rpartition("/")
        variables[f"{head}{bar}{draw(st.sampled_from(['a', 'time', 'energy_density', 'bound']))}"] = (
            variables.pop(path)
        )
    else:
        variables[path] = CHANGES[change](old)
    return Contents(variables, contents.attributes)


def _filled(value: float) -> Callable[[StoredVariable], StoredVariable]:
    def change(old: StoredVariable) -> StoredVariable:
        if old.values.dtype.kind not in "fi":
            return old
        if old.values.dtype.kind == "i" and not np.isfinite(value):
            return old
        most = np.inf if old.values.dtype.kind == "f" else np.iinfo(old.values.dtype).max
        return replace(old, values=np.full_like(old.values, min(value, most)))

    return change


CHANGES: dict[str, Callable[[StoredVariable], StoredVariable]] = {
    "remove": lambda old: old,
    "rename": lambda old: old,
    "nan": _filled(np.nan),
    "inf": _filled(np.inf),
    "zero": _filled(0.0),
    "minus one": _filled(-1.0),
    "huge": _filled(1e300),
    "tiny": _filled(1e-300),
    "whole numbers": lambda old: replace(old, values=np.ones(old.values.shape, dtype=np.int32)),
    "text": lambda old: replace(old, values=np.full(old.values.shape, "<b>$x_$")),
    "reversed": lambda old: replace(old, values=old.values[::-1].copy()),
    "other units": lambda old: replace(old, attributes={**old.attributes, "units": hostile_text("units")}),
}


def unsealed(image: bytes) -> bytes:
    """A file as another program leaves it: without the line that guards its bytes."""
    return image[: image.rindex(b"\nSHA-256")]


def datasets(image: bytes) -> st.SearchStrategy[bytes]:
    """Datasets with spoiled bytes, sealed or not, and whole ones that say something else."""
    return st.one_of(told_otherwise(image), mutated(image), mutated(unsealed(image)), told_otherwise(image))


def everywhere_hostile(image: bytes) -> bytes:
    """A sound dataset in which every text that may be anybody's choice is hostile."""
    contents = decode(image)
    said = {group: dict(attributes) for group, attributes in contents.attributes.items()}
    provenance = said["provenance"]
    for name in ("title", "machine", "created", "config_file"):
        provenance[name] = hostile_text(name)
    provenance["config_toml"] = (
        f"# {hostile_text('config').replace(chr(27), '')}\n{provenance['config_toml']}"
    )
    provenance["versions"] = json.dumps({hostile_text("package"): hostile_text("version")})
    provenance["preparation"] = json.dumps({hostile_text("key"): hostile_text("value")})
    kinds = ("extra", "no_prediction", "bond_ceiling", hostile_text("kind"))
    provenance["events"] = json.dumps(
        [{"kind": kind, "time": 0.5, "detail": hostile_text("event")} for kind in kinds]
    )
    provenance["advice"] = json.dumps({"sentences": [hostile_text("advice")]})
    for group in said:
        if group.startswith("hydrodynamics/"):
            said[group] |= {
                "method": hostile_text("method"),
                "references": json.dumps([hostile_text("reference")]),
            }
        if group.startswith("budget/"):
            said[group] |= {name: hostile_text(name) for name in said[group] if name.startswith("kind_")}
    return resealed(Contents(contents.variables, said))


def image_with(image: bytes, change: Callable[[h5py.File], None]) -> bytes:
    """Return a dataset after a change made by HDF5 itself, without its seal."""
    file = io.BytesIO(unsealed(image))
    with h5py.File(file, "r+") as opened:
        change(opened)
    return file.getvalue()
