"""A dataset as a notebook wants it: xarray datasets and ready figures."""

from __future__ import annotations

from dataclasses import dataclass, fields
from pathlib import Path

from matplotlib.figure import Figure

from tnquench.dataset import reader
from tnquench.report import figures


@dataclass(frozen=True, repr=False)
class Run(reader.Run):
    """A dataset in memory with the report's figures at hand; see `tnquench.dataset.reader.Run` for its
    parts."""

    def figure(self, name: str) -> Figure:
        """Return a figure of the report by name, such as "energy_density_maps", "energy_density_cuts" or
        "budget".

        Raises KeyError for an unknown name; the message lists all.
        """
        return figures.figure(self, name)


def open_run(path: Path | str, *, verify: bool = True) -> Run:
    """Return the dataset in folder `path`, or the dataset `path` itself, read into memory.

    verify : refuse a dataset that differs from its digest; without it such a dataset is opened as it is
    Raises InputError if the dataset is missing, unreadable, damaged, altered, or of a newer format.
    """
    run = reader.open_run(path, verify=verify)
    return Run(**{part.name: getattr(run, part.name) for part in fields(run)})
