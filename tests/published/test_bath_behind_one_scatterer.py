"""One scatterer, and a bath that keeps directions: f relaxes exponentially on either side.

Source: the kinetic equation itself (+- df±/dx = (F(E; mu±, T_b) - f±)/path, worked out by hand), as
carriers thermalise behind a barrier in R. Landauer, IBM J. Res. Dev. 1 (1957) 223: behind it
f+ = F(mu+) + [T F_L + (1-T) F_R - F(mu+)] exp(-(x - x_s)/path), mu+ = T eV. Of each direction the
lattice takes (g M/h) T(1-T) (eV)^2/2 in all, and no resistance is added.
"""

import numpy as np
import pytest

from tests.checks_of_numbers import (
    BOLTZMANN_MEV_PER_K,
    QUANTUM_S,
    agree,
    agree_each,
    part,
    profile,
    simulate,
)

LENGTH, PLACE, T, PATH, KELVIN = 200.0, 60.0, 0.4, 50.0, 20.0
LARGEST = 0.005
R_B = 0.5 / QUANTUM_S


@pytest.fixture(scope="module", params=[30.0, pytest.param(-50.0, marks=pytest.mark.slow)], ids=str)
def run(request):
    bias = request.param
    return bias, simulate(
        f"""
channel: {{length_nm: {LENGTH}}}
contacts: {{bias_mV: {bias}, temperature_K: {KELVIN}}}
scattering: {{points: [{{position_nm: {PLACE}, transmission: {T}}}]}}
relaxation: {{mechanisms: [{{kind: bath, path_nm: {PATH}, direction: kept}}]}}
simulation: {{histories: {3e6 if bias > 0 else 1e7:.0f}, cells: 10}}
"""
    )


def mean_fermi(edges, mu):
    """Mean of F(E; mu, T_b) over each bin."""
    kT = BOLTZMANN_MEV_PER_K * KELVIN
    return -np.diff(kT * np.logaddexp(0.0, (mu - edges) / kT)) / np.diff(edges)


def decay(start, stop):
    """Mean of exp(-distance/path) between two distances."""
    return PATH * (np.exp(-start / PATH) - np.exp(-stop / PATH)) / (stop - start)


def cell_of(result, place):
    cell = np.searchsorted(result.cell_edges_nm, place, side="right") - 1
    return cell, np.sort(np.abs(result.cell_edges_nm[[cell, cell + 1]] - PLACE))


@pytest.mark.parametrize("place", [70.0, 110.0, 190.0])
def test_right_movers_behind_it(run, place):
    bias, result = run
    cell, distances = cell_of(result, place)
    edges = result.energy_edges_meV
    left, right, own = (mean_fermi(edges, mu) for mu in (bias, 0.0, T * bias))
    expected = own + (T * left + (1 - T) * right - own) * decay(*distances)
    hold_occupation(result, "f_plus", cell, expected, bias)
    agree(profile(result, "mu_plus_meV", place), T * bias, LARGEST)


@pytest.mark.parametrize("place", [10.0, 50.0])
def test_left_movers_before_it(run, place):
    bias, result = run
    cell, distances = cell_of(result, place)
    edges = result.energy_edges_meV
    left, right, own = (mean_fermi(edges, mu) for mu in (bias, 0.0, (1 - T) * bias))
    expected = own + (T * right + (1 - T) * left - own) * decay(*distances)
    hold_occupation(result, "f_minus", cell, expected, bias)
    agree(profile(result, "mu_minus_meV", place), (1 - T) * bias, LARGEST)


def hold_occupation(result, name, cell, expected, bias):
    f, error = getattr(result, name)[:, cell], result.errors[name][:, cell]
    low, high = sorted((0.0, bias))
    seen = (result.energy_meV > low - 4) & (result.energy_meV < high + 4) & (expected > 0.12)
    assert seen.sum() > 20
    # Output bins are cut from wider ones by parabolas: 1e-3 of difference is theirs.
    agree_each(f[seen], error[seen], expected[seen], largest_relative_error=0.025, systematic=1e-3)
    # Each bin is known to 0.005 at worst; 2 % of wrong physics would triple the typical score.
    assert np.median(error[seen]) < 0.0035
    z = (f - expected)[seen] / error[seen]
    assert np.sqrt(np.mean(z**2)) < 1.5


def test_what_comes_from_a_contact_stays_as_it_was(run):
    bias, result = run
    edges = result.energy_edges_meV
    for name, mu, place in (("f_plus", bias, 30.0), ("f_minus", 0.0, 150.0)):
        cell, _ = cell_of(result, place)
        f, error = getattr(result, name)[:, cell], result.errors[name][:, cell]
        assert np.all(np.abs(f - mean_fermi(edges, mu)) <= 4.5 * error + 2e-3)
        assert error.max() < 0.006


def test_no_resistance_is_added(run):
    bias, result = run
    assert result.converged, result.drift
    agree(result.transmission, T)
    agree(result.resistance_ohm, R_B / T)
    agree(part(result, "point", PLACE), (1 - T) / T * R_B)
    agree(result.current_A, 2 * QUANTUM_S * T * bias * 1e-3)


def test_heat_in_each_place(run):
    """Contacts take half of what a ballistic channel's would at T V, and what is not yet lost."""
    bias, result = run
    unit = 2 * QUANTUM_S * (bias * 1e-3) ** 2
    excess = 0.5 * T * (1 - T)
    to_left, to_right = excess * np.exp(-PLACE / PATH), excess * np.exp(-(LENGTH - PLACE) / PATH)
    heat = result.heat_W
    agree(heat.lattice, unit * (2 * excess - to_left - to_right), LARGEST)
    agree(heat.left_contact, unit * (0.5 * T**2 + to_left), LARGEST)
    agree(heat.right_contact, unit * (0.5 * T**2 + to_right), LARGEST)


@pytest.mark.parametrize("place", [10.0, 50.0, 70.0, 110.0, 130.0])
def test_heat_along_the_channel(run, place):
    bias, result = run
    _, distances = cell_of(result, place)
    density = QUANTUM_S * T * (1 - T) * (bias * 1e-3) ** 2 * decay(*distances) / PATH
    agree(profile(result, "lattice_power_W_per_nm", place), density, 0.01)


def test_heat_along_the_channel_all_together(run):
    """Single cells are known to a per cent: together they tell half of it."""
    bias, result = run
    power, error = result.lattice_power_W_per_nm, result.errors["lattice_power_W_per_nm"]
    distances = [cell_of(result, x)[1] for x in result.x_nm]
    shape = np.array([decay(*d) for d in distances]) * QUANTUM_S * (bias * 1e-3) ** 2 / PATH
    weight = (shape / error) ** 2
    # Noise of cells is correlated through the few carriers that reach them: the spread is hypot'd.
    ratio, noise = np.average(power / shape, weights=weight), 1 / np.sqrt(weight.sum())
    assert noise < 0.005 * T * (1 - T)
    assert abs(ratio - T * (1 - T)) < 8 * noise
