"""Reads the arrays of a netCDF file of the classic kind (before netCDF-4) that may be damaged or hostile."""

from __future__ import annotations

import io
from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray
from scipy.io import netcdf_file

#: Bytes handed to the reader over the size of the file: variables that share their bytes are each a copy.
LARGEST_RATIO = 4
#: Reads altogether; each entry of the file's head takes a few.
MOST_READS = 200_000


class _Rationed(io.BytesIO):
    """A file in memory that ends when its reader asks for more than an honest file makes it ask for."""

    def __init__(self, image: bytes) -> None:
        super().__init__(image)
        self._bytes_left, self._reads_left = LARGEST_RATIO * len(image), MOST_READS

    def read(self, size: int | None = -1, /) -> bytes:
        found = super().read(size)
        self._bytes_left -= len(found)
        self._reads_left -= 1
        if self._bytes_left < 0 or self._reads_left < 0:
            message = "the file's head asks for more than the file holds"
            raise ValueError(message)
        return found


class _Reader(netcdf_file):  # type: ignore[misc]  # scipy is untyped
    """A reader that a file's attributes cannot steer: scipy makes them attributes of the reader itself."""

    def _read_gatt_array(self) -> None:
        self._read_att_array()

    def __del__(self) -> None:
        """Leave nothing to do: the file is memory."""


def read_classic_netcdf(image: bytes) -> Mapping[str, tuple[tuple[str, ...], NDArray[np.generic], bool]]:
    """Return dimension names, values and whether they are packed of each variable by name.

    image : the bytes of the file
    Raises nearly anything for bytes that are no such file, and ValueError for one that claims too much.
    """
    file = _Reader(_Rationed(image), "r", mmap=False, maskandscale=False)
    return {
        name: (
            tuple(stored.dimensions),
            np.asarray(stored.data),
            hasattr(stored, "scale_factor") or hasattr(stored, "add_offset"),
        )
        for name, stored in file.variables.items()
    }
