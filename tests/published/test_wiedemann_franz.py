"""Thermal conductance over electrical conductance and temperature: (pi^2/3)(k/e)^2.

Sources: G. Wiedemann and R. Franz, Ann. Phys. 165 (1853) 497, and A. Sommerfeld, Z. Phys. 47 (1928)
1, whose number is exact where the transmission is the same at all energies. One mode carries at
most pi^2 k^2 T/(3 h): L. G. C. Rego and G. Kirczenow, Phys. Rev. Lett. 81 (1998) 232.
"""

from math import pi

import pytest
from scipy import constants

from tests.checks_of_numbers import QUANTUM_S, agree, exactly, simulate

LORENZ = pi**2 / 3 * (constants.k / constants.e) ** 2
ONE_MODE_W_PER_K2 = pi**2 * constants.k**2 / (3 * constants.h)
TRANSMISSION = 1 / (1 + 150 / 120 + 0.4 / 0.6)


def channel(bias, left_K, right_K, scattering):
    return simulate(
        f"""
channel: {{length_nm: 150, modes: 3}}
contacts:
  bias_mV: {bias}
  left: {{temperature_K: {left_K}}}
  right: {{temperature_K: {right_K}}}
scattering: {scattering}
simulation: {{histories: 1e+6, cells: 10}}
"""
    )


SCATTERING = "{backscatter_path_nm: 120, points: [{position_nm: 50, transmission: 0.6}]}"


def test_the_number_itself():
    assert pytest.approx(2.443e-8, rel=3e-4) == LORENZ
    assert pytest.approx(9.464e-13, rel=1e-4) == ONE_MODE_W_PER_K2


@pytest.mark.parametrize("left, right", [(300, 300), (12.03, 11.97), (76.7, 77.3)])
def test_ratio_at_a_small_temperature_difference(left, right):
    result = channel(0.0, left, right, SCATTERING)
    mean = (left + right) / 2
    conductance = result.thermal.conductance_W_per_K
    agree(conductance, 2 * 3 * TRANSMISSION * ONE_MODE_W_PER_K2 * mean)
    agree(result.conductance_S, 2 * 3 * TRANSMISSION * QUANTUM_S)
    # Both come from the same carriers, so that the ratio has no noise at all.
    exactly(conductance.value / (result.conductance_S.value * mean), LORENZ)
    assert abs(result.thermal.seebeck_V_per_K.value) < 1e-15
    if left != right:
        heat = LORENZ * 2 * 3 * TRANSMISSION * QUANTUM_S * mean * (left - right)
        agree(result.thermal.heat_current_left_W, heat)
        agree(result.thermal.heat_current_right_W, heat)


def test_heat_current_at_a_large_temperature_difference():
    """pi^2 k^2 (T_L^2 - T_R^2)/(6 h) for each mode and spin, and so the same ratio at the mean."""
    result = channel(0.0, 300, 100, SCATTERING)
    heat = 2 * 3 * TRANSMISSION * ONE_MODE_W_PER_K2 * (300**2 - 100**2) / 2
    agree(result.thermal.heat_current_left_W, heat)
    agree(result.thermal.heat_current_right_W, heat)
    agree(result.thermal.conductance_W_per_K, heat / 200)


def test_one_mode_without_scatterers_carries_the_most_it_can():
    result = channel(0.0, 2.005, 1.995, "{}")
    agree(result.thermal.conductance_W_per_K, 2 * 3 * ONE_MODE_W_PER_K2 * 2.0)
