"""Nested content as plain text and a row of arrays, and back, exact to the last bit and stride.

Text (JSON) holds everything but the arrays; in their place stands where their numbers are, and how they lay
in memory. The layout matters: linear algebra rounds differently for another order of axes, so a calculation
continues bit for bit only on arrays that lie as they lay.
"""

from __future__ import annotations

import json
import struct
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

#: Kinds of numbers that are kept: truth values, integers, reals, complex numbers.
NUMERIC_KINDS = frozenset("biufc")

#: Types that HDF5 does not carry on every machine.
LEFT_OUT = frozenset("gG")

#: Whole numbers beyond 64 bits are written as hexadecimal text.
LARGEST_PLAIN = 2**63

#: An array that spreads over more than this many times its own bytes is kept without its gaps.
WIDEST_SPREAD = 4

#: (type, first entry, shape) -> entries in C order.
Fetch = Callable[[str, int, list[int]], NDArray[Any]]


@dataclass
class Packed:
    """Content taken apart.

    text    : JSON text of everything but the arrays' entries
    columns : the arrays by type ("<f8"), each as a flat or C-ordered view in the order of memory
    sizes   : entries of each type
    """

    text: str = ""
    columns: dict[str, list[NDArray[Any]]] = field(default_factory=dict)
    sizes: dict[str, int] = field(default_factory=dict)


def pack(content: Mapping[str, Any]) -> Packed:
    """Take nested content apart; arrays without gaps are not copied.

    content : dict with text keys; leaves are arrays of numbers or truth values, int, float, bool, str, None,
    numpy scalars, and lists, tuples or dicts of these
    Raises TypeError for anything else.
    """
    packed = Packed()
    packed.text = json.dumps(_described(dict(content), packed), allow_nan=False)
    return packed


def unpack(text: str, fetch: Fetch) -> Any:
    """Put content together again; raises ValueError, KeyError or TypeError for a text that is not ours."""
    return _restored(json.loads(text), fetch)


def _described(value: object, packed: Packed) -> object:
    """Return a value as JSON knows it; what JSON lacks becomes a mapping of one mark."""
    if type(value) is np.ndarray:
        return {"array": _array_described(value, packed)}
    if isinstance(value, np.generic):
        return {"scalar": [_known_type(value.dtype), value.tobytes().hex()]}
    if value is None or isinstance(value, bool | str):
        return value
    if isinstance(value, int):
        return value if abs(value) < LARGEST_PLAIN else {"integer": hex(value)}
    if isinstance(value, float):
        return value if np.isfinite(value) else {"float": struct.pack("<d", value).hex()}
    if isinstance(value, list):
        return [_described(each, packed) for each in value]
    if isinstance(value, tuple):
        return {"tuple": [_described(each, packed) for each in value]}
    if isinstance(value, Mapping) and all(isinstance(key, str) for key in value):
        return {"mapping": {key: _described(each, packed) for key, each in value.items()}}
    message = f"cannot be kept in a checkpoint: {type(value).__name__} {value!r:.80}"
    raise TypeError(message)


def _restored(value: Any, fetch: Fetch) -> Any:
    if isinstance(value, list):
        return [_restored(each, fetch) for each in value]
    if not isinstance(value, dict):
        return value
    ((mark, said),) = value.items()
    match mark:
        case "mapping":
            return {key: _restored(each, fetch) for key, each in said.items()}
        case "array":
            return _array_restored(said, fetch)
        case "scalar":
            return np.frombuffer(bytes.fromhex(said[1]), dtype=said[0])[0]
        case "integer":
            return int(said, 16)
        case "float":
            return struct.unpack("<d", bytes.fromhex(said))[0]
        case "tuple":
            return tuple(_restored(each, fetch) for each in said)
    message = f"unknown mark {mark!r}"
    raise ValueError(message)


def _known_type(dtype: np.dtype[Any]) -> str:
    if dtype.kind not in NUMERIC_KINDS or dtype.char in LEFT_OUT:
        message = f"cannot be kept in a checkpoint: numbers of type {dtype}"
        raise TypeError(message)
    return dtype.str


def _array_described(array: NDArray[Any], packed: Packed) -> dict[str, object]:
    """Enter an array into the columns; return its type, shape, strides and first entry."""
    name = _known_type(array.dtype)
    ordered = array.transpose(_axes(array.strides))
    if not ordered.flags.c_contiguous:
        ordered = np.ascontiguousarray(ordered).reshape(ordered.shape)  # only an array with gaps is copied
        if sum(_reach(array)) + array.itemsize > WIDEST_SPREAD * array.nbytes:
            array = ordered.transpose(np.argsort(_axes(array.strides)))
    first = packed.sizes.get(name, 0)
    packed.columns.setdefault(name, []).append(ordered)
    packed.sizes[name] = first + array.size
    return {"type": name, "shape": list(array.shape), "strides": list(array.strides), "first": first}


def _array_restored(said: Mapping[str, Any], fetch: Fetch) -> NDArray[Any]:
    """Return an array with the strides it had."""
    dtype, shape, strides = np.dtype(said["type"]), tuple(said["shape"]), tuple(said["strides"])
    axes = _axes(strides)
    entries = fetch(_known_type(dtype), said["first"], [shape[axis] for axis in axes])
    found = entries.transpose(np.argsort(axes))
    if found.size == 0:
        return found
    if _same_place(found.strides, strides, shape):  # strides of axes of length 1 lead nowhere, but are told
        return np.ndarray(shape, dtype, buffer=entries.reshape(-1), strides=strides)
    before, behind = _reach_of(shape, strides)
    if before + behind + dtype.itemsize > WIDEST_SPREAD * entries.nbytes:
        message = "an array's strides reach beyond its bytes"
        raise ValueError(message)
    room = np.zeros(before + behind + dtype.itemsize, dtype=np.uint8)
    spread: NDArray[Any] = np.ndarray(shape, dtype, buffer=room, offset=before, strides=strides)
    spread[...] = found
    return spread


def _axes(strides: tuple[int, ...]) -> list[int]:
    """Return the axes in the order of memory, the slowest first."""
    return sorted(range(len(strides)), key=lambda axis: -abs(strides[axis]))


def _same_place(found: tuple[int, ...], told: tuple[int, ...], shape: tuple[int, ...]) -> bool:
    return all(a == b for a, b, length in zip(found, told, shape, strict=True) if length > 1)


def _reach(array: NDArray[Any]) -> tuple[int, int]:
    return _reach_of(array.shape, array.strides)


def _reach_of(shape: tuple[int, ...], strides: tuple[int, ...]) -> tuple[int, int]:
    """Return how many bytes before and behind its first entry an array that is not empty reaches."""
    ways = [(length - 1) * stride for length, stride in zip(shape, strides, strict=True) if length > 1]
    return -sum(way for way in ways if way < 0), sum(way for way in ways if way > 0)
