"""What a notebook gets: datasets by attribute and the report's figures by name."""

from __future__ import annotations

from pathlib import Path

import pytest
from matplotlib.figure import Figure

import tnquench
from tests.synthetic_run import write_synthetic_run


def test_open_run_gives_datasets_and_figures(tmp_path: Path) -> None:
    write_synthetic_run(tmp_path)
    run = tnquench.open_run(tmp_path)
    assert run.quantum.energy_density.dims == ("time", "bond")
    for name in ("energy_density_maps", "energy_density_cuts", "budget"):
        assert isinstance(run.figure(name), Figure)
    with pytest.raises(KeyError, match="energy_density_maps"):
        run.figure("no such figure")
