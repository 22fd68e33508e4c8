"""Carriers that share their energy: T_e^2 = T^2 + (3/pi^2) p (1 - p) (eV/k)^2, p = mu±/eV.

Source: K. E. Nagaev, Phys. Rev. B 52 (1995) 4740; V. I. Kozub and A. M. Rudin, Phys. Rev. B 52
(1995) 7853: the hot-electron regime of a wire, p = 1 - x/L where it is long. For each direction by
itself, with p from the series law, the law is exact at any length and path: number and energy then
obey the same linear equations.
"""

from math import pi

import numpy as np
import pytest

from carriersim.result import Estimate
from tests.checks_of_numbers import BOLTZMANN_MEV_PER_K, agree, centre, profile, simulate

KELVIN, LAM = 20.0, 100.0
# Of the squared temperature, and of potentials: four of them are the 2 % that must fail.
LARGEST = 0.005


def wire(length, path, bias, histories, direction="kept", cells=20):
    return simulate(
        f"""
channel: {{length_nm: {length}}}
contacts: {{bias_mV: {bias}, temperature_K: {KELVIN}}}
scattering: {{backscatter_path_nm: {LAM}}}
relaxation: {{mechanisms: [{{kind: carriers, path_nm: {path}, direction: {direction}}}]}}
simulation: {{histories: {histories}, cells: {cells}}}
"""
    )


def squared(estimate):
    return Estimate(estimate.value**2, 2 * estimate.value * estimate.error)


def level(x, length, lam=LAM):
    """p of right-moving carriers, that of left-moving ones."""
    total = 1 + length / lam
    plus = 1 - x / lam / total
    return plus, plus - 1 / total


def hot(p, bias):
    return KELVIN**2 + 3 / pi**2 * p * (1 - p) * (bias / BOLTZMANN_MEV_PER_K) ** 2


def hold(result, length, bias, places, lam=LAM):
    assert result.converged, result.drift
    agree(result.transmission, 1 / (1 + length / lam), LARGEST)
    for place in places:
        p = level(centre(result, place), length, lam)
        for side, one in zip(("plus", "minus"), p, strict=True):
            # An inner cell as long as the elastic path, or shorter: the mean of p(1-p) in it.
            width = np.diff(result.cell_edges_nm)[0] / lam / (1 + length / lam)
            kelvin = squared(profile(result, f"carrier_temperature_{side}_K", place))
            n = profile(result, f"mu_{side}_meV", place)
            agree(n, one * bias, LARGEST * max(1.0, 0.5 / one), systematic=1e-9)
            expected = hot(one, bias)
            curved = 3 / pi**2 * width**2 / 12 * (bias / BOLTZMANN_MEV_PER_K) ** 2
            agree(kelvin, expected, LARGEST, systematic=curved)
    assert result.heat_W.lattice.value == 0.0  # energy stays with the carriers
    power = result.current_A.value * bias * 1e-3
    for one in (result.heat_W.left_contact, result.heat_W.right_contact):
        agree(one, power / 2, 0.01)


def test_short_wire():
    """As long as the elastic path: temperatures are those of each direction's own level."""
    hold(wire(100, 50, 30.0, 3_000_000), 100, 30.0, (12.0, 48.0, 88.0))


def test_long_wire():
    """Six elastic paths; path of the carriers twice as long as the elastic one."""
    hold(wire(600, 200, 30.0, 2_500_000), 600, 30.0, (140.0, 310.0, 460.0))


@pytest.mark.slow
@pytest.mark.parametrize(
    ("length", "path", "bias", "histories"),
    [(600, 40, 30.0, 8_000_000), (600, 200, -30.0, 3_000_000), (1500, 300, 60.0, 10_000_000)],
)
def test_other_wires(length, path, bias, histories):
    result = wire(length, path, bias, histories)
    places = (0.25 * length, 0.52 * length, 0.7 * length)
    if bias > 0:
        hold(result, length, bias, places)
        return
    for place in places:  # right-moving carriers come from the lower contact now
        p = level(centre(result, place), length)
        for side, one in zip(("plus", "minus"), p, strict=True):
            kelvin = squared(profile(result, f"carrier_temperature_{side}_K", place))
            agree(kelvin, hot(one, bias), LARGEST, systematic=2e-3 * hot(one, bias))


def test_random_directions_add_twice_their_path():
    """The law of each direction holds with 1/lam + 1/(2 path) in place of 1/lam."""
    result = wire(100, 150, 30.0, 1_500_000, "randomised")
    hold(result, 100, 30.0, (12.0, 48.0, 88.0), lam=1 / (1 / LAM + 1 / 300))


@pytest.mark.slow
def test_short_path_makes_each_direction_a_fermi_function():
    """Path a tenth of the elastic one: f+ is F(E; mu+, T_e), two steps are gone."""
    result = wire(600, 10, 30.0, 2_000_000)
    cell = np.searchsorted(result.x_nm, 300.0)
    p, _ = level(result.x_nm[cell], 600)
    kT = BOLTZMANN_MEV_PER_K * np.sqrt(hot(p, 30.0))
    expected = 0.5 * (1 - np.tanh(0.5 * (result.energy_meV - 30.0 * p) / kT))
    error = result.errors["f_plus"][:, cell]
    assert np.median(error) < 0.01
    assert np.all(np.abs(result.f_plus[:, cell] - expected) < 4 * error + 0.015)
    elastic = 0.5 * (1 - np.tanh(0.5 * result.energy_meV / (BOLTZMANN_MEV_PER_K * KELVIN)))
    shifted = 0.5 * (1 - np.tanh(0.5 * (result.energy_meV - 30) / (BOLTZMANN_MEV_PER_K * KELVIN)))
    two_steps = p * shifted + (1 - p) * elastic
    assert np.abs(two_steps - expected).max() > 0.1
