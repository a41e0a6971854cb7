"""Thermodynamics of every model by name, against traces over short chains; scans, tables and plots."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest

from tests.command_line import call
from tests.oracles import exact_models
from tnquench.bethe.thermo import THERMO_MODELS, thermo
from tnquench.terminal.thermo import Scan, answer_thermo, scan_rows

BETA = 0.25

#: model, settings of `thermo`, the exact chain of a given length, its potentials h or mu on q, sites, and
#: what -mu N holds beyond -mu sum q in each site's free energy.
CASES = {
    "xxz, D = 2 in a field": (
        "xxz",
        {"anisotropy": 2.0, "coupling": 1.1, "field": 0.7},
        lambda sites: exact_models.xxz(sites=sites, anisotropy=2.0, coupling=1.1),
        {"charge_density": 0.7},
        8,
        0.0,
    ),
    "xxz, D = 0.3": (
        "xxz",
        {"anisotropy": 0.3, "field": -0.4},
        lambda sites: exact_models.xxz(sites=sites, anisotropy=0.3),
        {"charge_density": -0.4},
        8,
        0.0,
    ),
    "ising": (
        "ising",
        {"transverse_field": 0.6, "coupling": 0.9},
        lambda sites: exact_models.ising(sites=sites, transverse_field=0.6, coupling=0.9),
        {},
        8,
        0.0,
    ),
    "fermion": (
        "fermion",
        {"repulsion": 1.2, "hopping": 0.8, "mu": 0.5},
        lambda sites: exact_models.fermion(sites=sites, repulsion=1.2, hopping=0.8),
        {"charge_density": 0.5},
        8,
        -0.25,
    ),
    "hubbard": (
        "hubbard",
        {"repulsion": 2.0, "hopping": 0.6, "mu": 0.5, "field": 0.3},
        lambda sites: exact_models.hubbard(sites=sites, repulsion=2.0, hopping=0.6),
        {"charge_density": 0.5, "magnetisation": 0.3},
        5,
        -0.5,
    ),
}


def log_partition_function(chain: exact_models.ExactChain, potentials: dict[str, float]) -> float:
    grand = chain.hamiltonian
    for name, value in potentials.items():
        grand = grand - value * exact_models.total(chain.charges[name])
    levels = -BETA * np.linalg.eigvalsh(grand.toarray())
    return float(levels.max() + np.log(np.exp(levels - levels.max()).sum()))


@pytest.mark.parametrize("name", CASES)
def test_free_energy_is_that_of_short_chains(name: str) -> None:
    """ln Z of L sites less that of L - 1 is the free energy of a site, up to correlations of order beta^L."""
    model, settings, build, potentials, sites, beyond = CASES[name]
    longer, shorter = (log_partition_function(build(length), potentials) for length in (sites, sites - 1))
    found = thermo(model, beta=BETA, **settings)
    tolerance = 1e-5 if model == "hubbard" else 1e-7
    assert found.values["free_energy"] == pytest.approx(-(longer - shorter) / BETA + beyond, abs=tolerance)


@pytest.mark.parametrize("name", CASES)
def test_functions_are_derivatives_of_the_free_energy(name: str) -> None:
    """u = e - h m - mu n = d(beta f)/dbeta, s = beta (u - f), c = -beta^2 du/dbeta, m = -df/dh, n = -df/dmu,
    and the second derivatives, by central differences.
    """
    model, settings, *_ = CASES[name]
    point, step = {"beta": BETA, **settings}, 1e-3
    conjugates = {"field": "magnetisation", "mu": "density"}

    def at(variable: str, shift: float) -> dict[str, float]:
        moved = point | {variable: point[variable] + shift}
        values = dict(thermo(model, **moved).values)
        values["grand"] = values["energy"] - sum(
            moved[potential] * values[charge]
            for potential, charge in conjugates.items()
            if potential in moved
        )
        values["logarithm"] = moved["beta"] * values["free_energy"]
        return values

    def slope(key: str, variable: str) -> float:
        return (at(variable, step)[key] - at(variable, -step)[key]) / (2.0 * step)

    values = at("beta", 0.0)
    pairs = {
        "grand": slope("logarithm", "beta"),
        "entropy": BETA * (values["grand"] - values["free_energy"]),
        "specific_heat": -(BETA**2) * slope("grand", "beta"),
    }
    for variable, key in {**conjugates, "transverse_field": "magnetisation"}.items():
        if variable in settings:
            pairs[key] = -slope("free_energy", variable)
            both = model == "hubbard" and variable == "mu"
            pairs["compressibility" if both else "susceptibility"] = slope(key, variable)
    for key, expected in pairs.items():
        assert values[key] == pytest.approx(expected, abs=3e-6), key


def test_every_model_answers_with_its_functions() -> None:
    common = {"free_energy", "energy", "entropy", "specific_heat", "susceptibility"}
    own = {
        "xxz": {"magnetisation"},
        "ising": {"magnetisation"},
        "fermion": {"density"},
        "hubbard": {"magnetisation", "density", "compressibility", "double_occupancy"},
    }
    for model, settings, *_ in CASES.values():
        found = thermo(model, beta=1.0, **settings)
        assert set(found.values) == set(found.errors) == common | own[model]
        assert all(0.0 < error < 1e-6 for error in found.errors.values())
    assert set(own) == set(THERMO_MODELS)


# --- the command


def test_scan_of_words() -> None:
    assert Scan.parse("2.5").values == (2.5,)
    assert Scan.parse("-1:1:5").values == (-1.0, -0.5, 0.0, 0.5, 1.0)
    for word in ("a", "1:2", "1:2:1", "1:2:x", "1:nan:3", "inf", "1:2:3:4", "1:2:100000"):
        with pytest.raises(ValueError, match=r"number"):
            Scan.parse(word)


def test_scan_of_a_field_is_a_list_of_points() -> None:
    words = ("thermo", "xxz", "--anisotropy", "0.5", "--beta", "1", "--field", "-0.2:0.2:3")
    answer = call(*words, "--json")
    assert (answer.code, answer.err) == (0, "")
    lists = json.loads(answer.out)
    assert lists["field"] == pytest.approx([-0.2, 0.0, 0.2])
    assert lists["magnetisation"][0] == pytest.approx(-lists["magnetisation"][2], abs=1e-11)
    for index, field in enumerate(lists["field"]):
        single = json.loads(call(*words[:-1], field, "--json").out)
        assert {name: values[index] for name, values in lists.items() if name != "field"} == single
    heading, *rows, last = call(*words).out.splitlines()
    assert heading.split()[0] == "field"
    assert [row.split()[0] for row in rows] == ["-0.2", "0", "0.2"]
    assert last.split()[0] == "error"


def test_points_without_an_answer_are_told_and_left_out() -> None:
    """At |U| below a tenth of the hopping the Hubbard chain's equations are not solved."""
    answer = call("thermo", "hubbard", "--repulsion", "0.05:1.05:3", "--beta", "1", "--json")
    assert answer.code == 0
    assert len(answer.lines) == 1
    assert answer.lines[0].startswith("tnquench thermo: repulsion = 0.05:")
    energies = json.loads(answer.out)["energy"]
    assert energies[0] is None
    assert None not in energies[1:]
    rows = scan_rows(answer_thermo("hubbard", {"repulsion": Scan((0.05, 0.55)), "beta": Scan((1.0,))}))
    assert rows[1][1:] == (" -",) * 9


BAD = [
    (("xxz", "--beta", "1"), "--anisotropy: missing; xxz needs it"),
    (("xxz", "--anisotropy", "1"), "--beta: missing"),
    (("ising", "--transverse-field", "1", "--beta", "1", "--mu", "2"), "--mu: not an option of ising"),
    (("xxz", "--anisotropy", "0.5", "--beta", "0"), "--beta 0: must be positive"),
    (("xxz", "--anisotropy", "0.5", "--beta", "1", "--coupling", "-1"), "--coupling -1: must be positive"),
    (("xxz", "--anisotropy", "0.5", "--beta", "2000"), "must be at most 1000"),
    (("xxz", "--anisotropy", "0:1:3", "--beta", "1:2:3"), "only one option may be a scan"),
    (("hubbard", "--repulsion", "0.01", "--beta", "1"), "must be 0 or at least 0.1"),
    (("xxz", "--anisotropy", "0.5", "--beta", "1", "--plot", "a.svg"), "--plot: needs a scan"),
    (("xxz", "--anisotropy", "0.5", "--beta", "1:2:2", "--plot", "a.doc"), "must end in .svg, .pdf, .png"),
    (("xxz", "--anisotropy", "0.5", "--beta", "1:2:2", "--plot", "no/a.svg"), "cannot be written"),
]


@pytest.mark.parametrize(("words", "complaint"), BAD, ids=[complaint for _, complaint in BAD])
def test_impossible_questions_are_refused_in_one_line(
    words: tuple[str, ...], complaint: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(tmp_path)
    answer = call("thermo", *words)
    assert (answer.code, answer.out) == (2, "")
    assert len(answer.lines) == 2
    assert complaint in answer.lines[1]
    assert not list(tmp_path.iterdir())


@pytest.mark.parametrize("suffix", [".svg", ".pdf", ".png"])
def test_plot_of_a_scan(tmp_path: Path, suffix: str) -> None:
    file = tmp_path / f"scan{suffix}"
    words = ("thermo", "ising", "--transverse-field", "0:2:9", "--beta", "2", "--plot", file)
    assert call(*words).code == 0
    assert file.stat().st_size > 5000
