"""Hydrodynamics at anisotropies that are combined from others, and what depends on D smoothly."""

from __future__ import annotations

from functools import cache

import numpy as np
import pytest

from tests.bethe_cases import rational
from tests.hydro_cases import PLACES
from tnquench.bethe.equilibrium import equilibrium
from tnquench.conventions import Reals, bond_positions, site_positions
from tnquench.errors import InputError
from tnquench.hydro import between as between_module
from tnquench.hydro.between import (
    Between,
    between,
    between_angles,
    between_gapless,
    small_anisotropies,
)
from tnquench.hydro.joined import join_halves
from tnquench.hydro.mesh import OBSERVABLES, rapidity_mesh
from tnquench.hydro.prediction import Prediction, predict_step
from tnquench.hydro.thermal_states import State, thermal_on_mesh

RAYS = np.array([-0.8, -0.6, -0.4, -0.2, 0.0, 0.15, 0.3, 0.5, 0.75])
TEMPERATURES: tuple[State, State] = ((0.5, 0.0), (2.0, 0.0))
FIELDS: tuple[State, State] = ((0.5, 0.8), (2.0, -0.3))
SITES = 12


@cache
def on_rays(anisotropy: float, left: State, right: State) -> Reals:
    """Averages (ray, observable) at one resolution, good to 1e-6 and mostly better."""
    mesh = rapidity_mesh(anisotropy=anisotropy, coupling=1.0, nodes=40, spacing=0.1)
    return join_halves(mesh, thermal_on_mesh(mesh, left), thermal_on_mesh(mesh, right), rays=RAYS)


def combined(way: Between, halves: tuple[State, State]) -> tuple[Reals, Reals]:
    """Value and claim, (ray, observable)."""
    solved = [on_rays(value, *halves) for value in way.anisotropies]
    columns = [
        way.combine([each[:, index] for each in solved], spin=name.startswith("charge"))
        for index, name in enumerate(OBSERVABLES)
    ]
    value, claim = (np.stack(each, axis=1) for each in zip(*columns, strict=True))
    return value, claim


def without(turn: tuple[int, int], monkeypatch: pytest.MonkeyPatch, *, spin_limit: bool = False) -> Between:
    """The combination for cos(pi p/q) as if it could not be solved itself."""
    target = rational(*turn)
    kept = {value: q for value, q in small_anisotropies().items() if abs(value - target) > 1e-9}
    monkeypatch.setattr(between_module, "small_anisotropies", lambda: kept)
    monkeypatch.setattr(between_module, "is_small", lambda _: False)
    if spin_limit:
        monkeypatch.setattr(between_module, "is_rational", lambda _: False)
    return between(target)


@pytest.mark.parametrize("turn", [(3, 8), (4, 11), (5, 13)], ids=str)
@pytest.mark.parametrize("halves", [TEMPERATURES, FIELDS], ids=["temperatures", "fields"])
def test_an_angle_left_out_is_reproduced(
    turn: tuple[int, int], halves: tuple[State, State], monkeypatch: pytest.MonkeyPatch
) -> None:
    """Energies to 3e-6 and spin to 3e-4; the claims cover the differences at 90 % of points of one start."""
    exact = on_rays(rational(*turn), *halves)
    value, claim = combined(without(turn, monkeypatch), halves)
    error = np.abs(value - exact)
    for index, name in enumerate(OBSERVABLES):
        assert error[:, index].max() < (3e-4 if name.startswith("charge") else 3e-6), name
    assert np.mean(error <= claim + 1e-6) >= 0.9
    assert claim.max() < 0.01


@pytest.mark.literature
@pytest.mark.parametrize("anisotropy", [0.3, -0.6])
def test_domain_wall_at_an_irrational_angle(anisotropy: float) -> None:
    """Up on the left, down on the right: m = -z/(2 sin g), j = (sin g/4) [1 - z^2/sin(g)^2] for |z| < sin(g).

    The limit of large denominators of the closed form at rational angles; source: M. Collura, A. De Luca,
    J. Viti, Phys. Rev. B 97, 081111 (2018), from memory. At 2 pi/5, near 0.3, both differ from it by more.
    """
    edge = np.sqrt(1.0 - anisotropy**2)
    inside = np.abs(RAYS) < 0.9 * edge
    value, claim = combined(between(anisotropy), ((0.0, 60.0), (0.0, -60.0)))
    exact = {
        "charge_density": -RAYS / (2.0 * edge),
        "charge_current": 0.25 * edge * (1.0 - (RAYS / edge) ** 2),
    }
    for name, profile in exact.items():
        index = OBSERVABLES.index(name)
        error = np.abs(value[:, index] - profile)[inside]
        assert error.max() < 3e-4
        assert np.mean(error <= claim[inside, index] + 1e-6) >= 0.9
    rational_current = 2.5 * (1.0 - np.cos(np.pi / 5.0)) / np.pi * np.sin(0.4 * np.pi) / np.sin(np.pi / 5.0)
    assert abs(rational_current - 0.25 * np.sin(0.4 * np.pi)) > 5e-3


def test_energy_profiles_are_smooth_in_the_anisotropy() -> None:
    """Values at eight angles, ordered by D, lie on a polynomial of degree 5 to 2e-5."""
    turns = [(4, 9), (3, 7), (5, 12), (2, 5), (5, 13), (3, 8), (4, 11), (1, 3)]
    anisotropies = np.array([rational(*turn) for turn in turns])
    values = np.array([on_rays(value, *TEMPERATURES)[:, 0] for value in anisotropies])
    fit = np.polynomial.polynomial.polyfit(anisotropies, values, 5)
    rest = np.polynomial.polynomial.polyval(anisotropies, fit).T - values
    assert np.abs(rest).max() < 2e-5
    assert np.ptp(values, axis=0).min() > 0.005, "nothing that varies"


def test_free_fermions_are_approached_from_both_sides() -> None:
    """The mean of the energy profiles at D and -D differs from that at D = 0 by D^2, to a few per cent."""
    excess = []
    for turn in ((6, 13), (4, 9)):
        sides = [on_rays(rational(*turn, sign), *FIELDS)[:, 0] for sign in (1, -1)]
        excess.append((0.5 * (sides[0] + sides[1]) - on_rays(0.0, *FIELDS)[:, 0]) / rational(*turn) ** 2)
    assert np.abs(excess[0]).max() > 0.05, "nothing that varies"
    np.testing.assert_allclose(excess[0], excess[1], rtol=0, atol=0.05 * np.abs(excess[0]).max())


def halves(anisotropy: float, left: State, right: State) -> Prediction:
    return predict_step(
        anisotropy=anisotropy,
        coupling=1.0,
        left=left,
        right=right,
        middle=(0.5 * (left[0] + right[0]), 0.5 * (left[1] + right[1])),
        times=np.array([0.0, 4.0]),
        sites=site_positions(SITES),
        bonds=bond_positions(SITES),
    )


def test_irrational_angle_outside_the_light_cone() -> None:
    """At rest the densities are those of equilibrium, found there between other anisotropies."""
    prediction = halves(0.3, *FIELDS)
    for side, (beta, beta_field) in ((0, FIELDS[0]), (-1, FIELDS[1])):
        exact = equilibrium(anisotropy=0.3, beta=beta, field=beta_field / beta)
        for name, value in (("energy_density", exact.energy), ("charge_density", exact.magnetisation)):
            error = np.abs(prediction.fields[name][:, side] - value)
            assert np.all(
                error <= prediction.strings_error[name][:, side] + prediction.grid_error[name][:, side]
            )
    first, last = prediction.light_cone
    slow, fast = (halves(value, *FIELDS).light_cone for value in (rational(5, 12), rational(2, 5)))
    assert fast[0] < first < slow[0]
    assert slow[1] < last < fast[1]
    for name in PLACES:
        assert np.isfinite(prediction.fields[name]).all()
        assert prediction.strings_error[name].max() > 0.0


@pytest.mark.parametrize("anisotropy", [0.3, rational(3, 7)])
def test_uniform_states_stay(anisotropy: float) -> None:
    prediction = halves(anisotropy, (1.0, 0.4), (1.0, 0.4))
    assert prediction.method == "uniform"
    for name in PLACES:
        assert np.ptp(prediction.fields[name][:, 1:-1]) < 1e-12
        assert prediction.strings_error[name].max() < 1e-3


def test_small_tables_are_solved_themselves() -> None:
    for anisotropy in (0.0, 0.5, rational(5, 12, -1), rational(1, 10)):
        way = between(anisotropy)
        assert way.anisotropies == (anisotropy,)
        assert np.all(way.combine([np.ones(3)], spin=True)[1] == 0.0)
    assert len(between(rational(29, 70)).anisotropies) == between_module.NEIGHBOURS


def test_what_anisotropies_are_combined_from() -> None:
    """From both sides of |D| = 1 just below it; at |D| >= 1 from none but itself."""
    for value in (0.97, 0.99, 0.9999999, -0.98, -0.999):
        for nodes in (between(value).anisotropies, between(-value).anisotropies):
            assert max(np.abs(nodes)) > 1.0 > min(np.abs(nodes))
        assert max(np.abs(between_angles(value).anisotropies)) < 1.0
    for value in (1.0, -1.0, 1.5):
        assert between(value).anisotropies == (value,)


@pytest.mark.parametrize("anisotropy", [0.99, -0.98, 1.0, float("nan")])
def test_ranges_of_smooth_profiles_are_refused(anisotropy: float) -> None:
    with pytest.raises(InputError, match=r"anisotropy = .*: smooth profiles .* up to \|D\| = 0\.97"):
        between_gapless(anisotropy)


def test_no_anisotropy_is_refused() -> None:
    with pytest.raises(InputError, match="must be a finite number"):
        between(float("nan"))
