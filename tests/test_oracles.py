"""The oracles against each other and against operator identities, before anything is checked by them."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest

from tests.oracles import exact_chain, free_fermions, high_temperature, quimb_chain, transfer_matrix

SITES = 8
TEMPERATURE_STEP = np.array([0.5, 0.5, 0.5, 1.25, 2.0, 2.0, 2.0])
BUMP = 1.0 + 0.8 * np.exp(-0.5 * (np.arange(7) - 3.0) ** 2)
FIELD_STEP = np.array([1.0] * 4 + [-0.6] * 4)

STARTS: dict[str, dict[str, Any]] = {
    "temperature step": {"beta": TEMPERATURE_STEP},
    "temperature bump": {"beta": BUMP},
    "field step": {"beta": 1.5, "beta_field": FIELD_STEP},
    "both, separate": {"beta": np.where(np.arange(7) == 3, 0.0, TEMPERATURE_STEP), "beta_field": FIELD_STEP},
}


@pytest.mark.parametrize("anisotropy", [0.0, 0.5, 1.0, 2.0, -0.5])
def test_continuity_as_operator_identities(anisotropy: float) -> None:
    """i[H, h_j] = K_j - K_{j+1} and i[H, Sz_i] = J_{i-1} - J_i on a chain of 6 sites, to 1e-10 (rounding)."""
    sites, coupling = 6, 1.3
    energies = exact_chain.local_hamiltonian(sites=sites, anisotropy=anisotropy, coupling=coupling)
    charges = exact_chain.magnetisations(sites=sites)
    hamiltonian = sum(energies)
    energy_currents = exact_chain.energy_currents(energies)
    inner = exact_chain.spin_currents(sites=sites, coupling=coupling)
    nothing = 0.0 * charges[0]
    spin_currents = [nothing, *inner, nothing]  # through the left of site 0, ..., the right of the last site
    for densities, currents in ((energies, energy_currents), (charges, spin_currents)):
        for place, density in enumerate(densities):
            change = 1j * (hamiltonian @ density - density @ hamiltonian)
            assert np.abs((change - currents[place] + currents[place + 1]).toarray()).max() < 1e-10
    assert all(np.abs(current.toarray()).max() > 0.1 for current in [*energy_currents[1:-1], *inner])


@pytest.mark.parametrize("anisotropy", [0.5, 1.0, 2.0, -0.5])
def test_continuity_in_time(anisotropy: float) -> None:
    """The measured densities change by the measured currents: centred differences of order 4, to 1e-8."""
    step = 1e-2
    times = 1.0 + step * np.array([-2.0, -1.0, 0.0, 1.0, 2.0])
    run = exact_chain.exact_evolution(
        sites=SITES, anisotropy=anisotropy, times=times, entanglement=False, **STARTS["both, separate"]
    )
    slope = np.array([1.0, -8.0, 0.0, 8.0, -1.0]) / (12.0 * step)
    energy_current, charge_current = run["energy_current"][2], run["charge_current"][2]
    through = np.concatenate([[0.0], charge_current, [0.0]])
    np.testing.assert_allclose(slope @ run["energy_density"], -np.diff(energy_current), rtol=0, atol=1e-8)
    np.testing.assert_allclose(slope @ run["charge_density"], -np.diff(through), rtol=0, atol=1e-8)
    assert np.abs(energy_current).max() > 1e-3
    assert np.abs(charge_current).max() > 1e-3


def test_currents_start_at_zero_and_flow_from_hot_to_cold() -> None:
    """No current in the start, which is real in the basis of Sz; energy then flows to the colder right."""
    run = exact_chain.exact_evolution(
        sites=SITES, anisotropy=0.5, times=[0.0, 1.0], **STARTS["temperature step"]
    )
    assert np.abs(run["energy_current"][0]).max() < 1e-13
    assert run["energy_current"][1, SITES // 2] > 0.01
    assert np.abs(run["charge_density"]).max() < 1e-13


def test_start_of_two_sites_in_closed_form() -> None:
    """Two sites: levels J/4 (D) twice, J/2 - J D/4, -J/2 - J D/4, split by the field; no factor 2 is lost."""
    anisotropy, coupling, beta, product = 0.7, 1.2, 1.5, 0.4
    run = exact_chain.exact_evolution(
        sites=2, anisotropy=anisotropy, coupling=coupling, beta=[beta], beta_field=[product] * 2, times=[0.0]
    )
    outer = 0.25 * coupling * anisotropy
    energies = np.array([outer, outer, 0.5 * coupling - outer, -0.5 * coupling - outer])
    magnetisations = np.array([1.0, -1.0, 0.0, 0.0])
    weights = np.exp(-beta * energies + product * magnetisations)
    probabilities = weights / weights.sum()
    assert run["log_partition_function"] == pytest.approx(np.log(weights.sum()), rel=1e-13)
    assert run["energy_density"][0, 0] == pytest.approx(probabilities @ energies, rel=1e-12)
    assert run["charge_density"][0] == pytest.approx(0.5 * probabilities @ magnetisations, rel=1e-12)


@pytest.mark.parametrize("start", STARTS)
def test_free_fermions_against_exact_chain(start: str) -> None:
    """At D = 0 both oracles agree on every observable; entropies to 1e-10 because of eigenvalues near 0."""
    settings = {"sites": SITES, "coupling": 1.3, "times": [0.0, 1.3, 7.0], **STARTS[start]}
    exact = exact_chain.exact_evolution(anisotropy=0.0, **settings)
    free = free_fermions.free_evolution(entanglement=True, **settings)
    assert exact.keys() == free.keys()
    for name, values in exact.items():
        np.testing.assert_allclose(free[name], values, rtol=0, atol=1e-10, err_msg=name)


@pytest.mark.literature
def test_joined_halves_against_long_chain() -> None:
    """The ballistic profile of two joined halves is approached by a long finite chain at D = 0.

    Source: Y. Ogata, Phys. Rev. E 66, 016135 (2002) for the XX chain; reference from memory.
    Regime: 400 sites, t = 150 and 50, so that light (velocity J) has not met the ends. Tolerance: the chain
    deviates by terms that fall like 1/t near the joint; 3e-3 at t = 50, and less at t = 150.
    """
    left, right, sites = (0.5, 0.4), (2.0, -0.8), 400
    half = sites // 2
    beta = np.array([left[0]] * (half - 1) + [1.25] + [right[0]] * (half - 1))
    field = np.array([left[1]] * half + [right[1]] * half)
    times = np.array([50.0, 150.0])
    run = free_fermions.free_evolution(sites=sites, beta=beta, beta_field=field, times=times)
    positions = {
        "bond": np.arange(sites - 1) - 0.5 * (sites - 2),
        "site": np.arange(sites) - 0.5 * (sites - 1),
    }
    places = {
        "energy_density": "bond",
        "charge_current": "bond",
        "charge_density": "site",
        "energy_current": "site",
    }
    for name, place in places.items():
        inside = np.abs(positions[place]) < 0.5 * times[0]
        errors = []
        for row, time in zip(run[name], times, strict=True):
            expected = free_fermions.joined_halves(positions[place][inside] / time, left=left, right=right)
            errors.append(np.abs(row[inside] - expected[name]).max())
        assert errors[0] < 3e-3, name
        assert errors[1] < 0.6 * errors[0], name


@pytest.mark.parametrize(("beta", "field"), [(0.1, 0.5), (1.0, -1.5), (4.0, 0.0), (8.0, 0.3)])
def test_transfer_matrix_at_free_fermions(beta: float, field: float) -> None:
    """Quantum transfer matrix against the closed integral at D = 0, to 1e-12."""
    closed = free_fermions.infinite_chain(beta=beta, field=field, coupling=1.2)["free_energy"]
    found = transfer_matrix.free_energy(anisotropy=0.0, beta=beta, field=field, coupling=1.2)
    assert found == pytest.approx(closed, rel=0, abs=1e-12)


@pytest.mark.parametrize("anisotropy", [np.cos(np.pi / 3), np.cos(np.pi / 8), -np.cos(np.pi / 5), 0.3])
@pytest.mark.parametrize(("beta", "field"), [(1.0, 0.7), (5.0, 0.0), (5.0, 1.5)])
def test_transfer_matrix_does_not_depend_on_the_contour(anisotropy: float, beta: float, field: float) -> None:
    """Another height, length and number of nodes, and the opposite field, give the same to 1e-12."""
    one = transfer_matrix.free_energy(anisotropy=anisotropy, beta=beta, field=field)
    other = transfer_matrix.free_energy(
        anisotropy=anisotropy, beta=beta, field=-field, height=0.40, stretch=1.2, nodes=448
    )
    assert one == pytest.approx(other, rel=0, abs=1e-12)


@pytest.mark.parametrize("anisotropy", [0.5, 0.9, -0.6])
@pytest.mark.parametrize("field", [0.0, 0.7])
def test_transfer_matrix_against_high_temperature_series(anisotropy: float, field: float) -> None:
    """The remainder beyond the exact series of order 8 is at most 1e-4 beta^9; twice is allowed."""
    coefficients = high_temperature.series(anisotropy=anisotropy, field=field, order=8)
    for beta in (0.4, 0.2, 0.1):
        free_energy = transfer_matrix.free_energy(anisotropy=anisotropy, beta=beta, field=field)
        remainder = abs(-beta * free_energy - np.polynomial.polynomial.polyval(beta, coefficients))
        assert remainder < 2e-4 * beta**9 + 1e-13


def test_quimb_chain_against_exact_chain() -> None:
    """On 8 sites the error of quimb's evolution is that of Trotter order 2: a quarter at half the step."""
    times = [0.0, 1.0, 2.0]
    exact = exact_chain.exact_evolution(sites=SITES, anisotropy=0.5, beta=TEMPERATURE_STEP, times=times)
    for name in ("energy_density", "operator_entanglement"):
        errors = []
        for divisor in (1, 2):
            run = quimb_chain.quimb_evolution(
                sites=SITES,
                anisotropy=0.5,
                beta=TEMPERATURE_STEP,
                times=times,
                time_step=0.1 / divisor,
                discarded_weight=1e-14,
                preparation_steps=10 * divisor,
            )
            errors.append(np.abs(run[name] - exact[name]).max())
        assert errors[0] < 1e-3
        assert 3.7 < errors[0] / errors[1] < 4.3
