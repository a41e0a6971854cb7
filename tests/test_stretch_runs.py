"""A family of runs from config to report, and what the report says of made-up families."""

from __future__ import annotations

import re
import shutil
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from tests.synthetic_run import config_toml, synthetic_pieces
from tnquench.config.load import read_config
from tnquench.conventions import OBSERVABLE_PLACES, STRETCH_FINDINGS, STRETCH_NORMS
from tnquench.dataset.integrity import check_run
from tnquench.dataset.reader import open_run
from tnquench.dataset.writer import write_run
from tnquench.outcome import Pieces
from tnquench.report.page import write_report
from tnquench.run import run
from tnquench.stretch_of import add_study, stretched_config
from tnquench.terminal.summary import findings

SMALL = """
title = "A small family"
[chain]
model = "xxz"
sites = 16
anisotropy = 0.0
[start.beta]
shape = "bump"
base = 1.0
height = -0.5
width = 1.0
[evolution]
until = 1.0
every = 0.5
time_step = 0.25
discarded_weight = 1e-6
[stretch]
factors = [1, 2]
"""


@pytest.fixture(scope="module")
def family(tmp_path_factory):
    """A real run with a stretch study, from its config."""
    folder = tmp_path_factory.mktemp("family")
    file = folder / "small.toml"
    file.write_text(SMALL)
    return run(file, into=folder / "out")


def test_every_run_is_a_sound_dataset_of_its_own(family):
    assert check_run(family) == []
    assert check_run(family / "stretch_2") == []
    main, other = open_run(family), open_run(family / "stretch_2")
    assert (main.provenance["format_version"], other.provenance["format_version"]) == (3, 2)
    assert len(other.stretch) == 0
    stretched = stretched_config(read_config(SMALL, subject="small"), 2.0)
    assert read_config(other.provenance["config_toml"], subject="there") == stretched
    assert other.provenance["title"] == "A small family, stretched by 2"
    np.testing.assert_allclose(other.coordinates["time"], 2.0 * main.coordinates["time"])


def test_the_study_is_made_of_the_datasets(family):
    main, other = open_run(family), open_run(family / "stretch_2")
    study = main.stretch
    assert study["factor"].values.tolist() == [1.0, 2.0]
    assert study["sites"].values.tolist() == [16, 32]
    assert study["norm"].values.tolist() == list(STRETCH_NORMS)
    for name in ("energy_density", "energy_current"):
        norms = study[f"{name}_euler_deviation"].sel(norm="maximum").values
        edge = 3.0 if name == "energy_density" else 3.5  # four spacings from the ends of the smaller chain
        for row, factor, dataset in zip(norms, (1.0, 2.0), (main, other), strict=True):
            deviation: Any = np.abs(dataset.budget[name]["euler_deviation"])
            inner = np.abs(dataset.coordinates[deviation.dims[1]].values) <= factor * edge
            np.testing.assert_allclose(row, deviation.values[:, inner].max(axis=1), rtol=1e-12)
        whole = study[f"{name}_euler_window_deviation"].sel(norm="maximum", window="whole").values
        slope = -np.log(whole[1] / whole[0]) / np.log(2.0)
        found = study[f"{name}_euler_exponent"].sel(norm="maximum", window="whole")
        assert float(found) == pytest.approx(slope, rel=1e-9), "two factors: the line goes through both"
    code = int(study["energy_density_euler_finding"].sel(norm="rms", window="whole"))
    assert STRETCH_FINDINGS[code] == "undecided"


def test_the_report_is_rebuilt_from_the_dataset_alone(family, tmp_path):
    page = (family / "report.html").read_text(encoding="utf-8")
    assert '<section id="stretch">' in page
    shutil.copy(family / "run.h5", tmp_path / "run.h5")
    assert write_report(tmp_path).read_text(encoding="utf-8") == page
    assert (tmp_path / "figures" / "energy_density_stretch.png").stat().st_size > 10_000


def test_a_study_with_rows_missing_is_found(tmp_path):
    pieces = made_family(power=1.0)
    del pieces.groups["stretch"]["energy_density_euler_change"]
    write_run(tmp_path, **pieces.as_arguments())
    assert check_run(tmp_path) == ["missing variable stretch/energy_density_euler_change"]
    pieces = made_family(power=1.0)
    pieces.groups["stretch"]["energy_density_euler_deviation"][0, 0, 0] = np.nan
    write_run(tmp_path, **pieces.as_arguments())
    assert len(check_run(tmp_path)) == 1, "only exponents may be undetermined"


# --- made-up families: a sharp step, deviations that follow one power exactly


def made_family(*, power, numerical=1e-6):
    config = read_config(config_toml(sites=32) + "[stretch]\nfactors = [1, 2, 4]\n", subject="made")
    family = {factor: made_run(factor, power, numerical) for factor in (1.0, 2.0, 4.0)}
    add_study(family[1.0], config, family)
    return family[1.0]


def made_run(factor, power, numerical):
    pieces = Pieces(**synthetic_pieces(sites=int(32 * factor)))
    pieces.coordinates["time"] = factor * np.asarray(pieces.coordinates["time"])
    time = pieces.coordinates["time"][:, None] / factor
    for group, rows in pieces.groups.items():
        if not group.startswith("budget/"):
            continue
        place = pieces.coordinates[OBSERVABLE_PLACES[group.removeprefix("budget/")]][None, :] / factor
        rows["euler_deviation"] = 0.05 * factor**-power * np.exp(-((place / (3 + 0.5 * time)) ** 2))
        rows["numerical"] = np.full_like(rows["euler_deviation"], numerical)
    return pieces


@pytest.mark.parametrize(
    ("power", "numerical", "said"),
    [
        (
            1.0,
            1e-6,
            "consistent with p = 1 (diffusive corrections, or those of the lattice at a sharp joint)",
        ),
        (2.0, 1e-6, "consistent with p = 2 (second order in the gradients, as for free modes"),
        (1.5, 1e-6, "larger than 1 and smaller than 2"),
        (0.0, 1e-6, "the deviation does not fall: the theory fails at this scale"),
        (0.5, 1e-6, "smaller than 1"),
        (3.0, 1e-6, "larger than 2"),
        (1.0, 0.05, "has no resolved exponent: numerical errors are too large"),
        (2.0, 1.5e-3, "not resolved at stretch 4, hence left out"),
    ],
)
def test_the_sentence_says_which_order_the_data_support(tmp_path: Path, power, numerical, said):
    write_run(tmp_path, **made_family(power=power, numerical=numerical).as_arguments())
    assert check_run(tmp_path) == []
    sentences = [line for line in findings(tmp_path) if line.startswith("Stretched by 1, 2 and 4")]
    assert len(sentences) == 1
    assert said in sentences[0]
    assert sentences[0].endswith(".")


def test_the_page_has_sentence_figure_and_table(tmp_path):
    write_run(tmp_path, **made_family(power=1.0).as_arguments())
    page = write_report(tmp_path).read_text(encoding="utf-8")
    section = re.search(r'<section id="stretch">.*?</section>', page, re.DOTALL)
    assert section is not None
    assert section[0].count("<img ") == 8, "two pictures an observable"
    table = section[0].split("<tbody>")[1]
    assert table.count("<tr>") == 8, "two norms an observable"
    assert table.count("consistent with 1") == 32


def test_a_run_without_a_study_has_no_such_section(tmp_path):
    write_run(tmp_path, **synthetic_pieces())
    assert open_run(tmp_path).provenance["format_version"] == 2
    assert "stretch" not in write_report(tmp_path).read_text(encoding="utf-8")
