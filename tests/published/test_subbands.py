"""Channels whose modes open one after the other.

Sources: the Landauer formula with M(E) modes (M. Buttiker, Phys. Rev. B 41 (1990) 7906); the
quantised thermopower at a step, -(k/e) ln 2/(N - 1/2) for the N-th subband, of P. Streda, J. Phys.:
Condens. Matter 1 (1989) 1025. Other integrals by scipy's quad.
"""

from math import log

import numpy as np
import pytest
from scipy import constants

from tests.checks_of_numbers import (
    BOLTZMANN_MEV_PER_K,
    QUANTUM_S,
    agree,
    exactly,
    fermi,
    integral,
    minus_slope,
    part,
    profile,
    simulate,
)

MODES = ([-12.0, -8.0, 6.0, 10.0, 28.0, 32.0], [0.0, 1.0, 1.0, 3.0, 3.0, 4.0])
PATH = ([-10.0, 10.0, 30.0], [80.0, 200.0, 100.0])
KELVIN, BIAS, LENGTH = 50.0, 24.0, 100.0


def table(of):
    return f"{{energy_meV: {of[0]}, value: {of[1]}}}"


def modes(energy):
    return np.interp(energy, *MODES)


def transmission(energy):
    return 1 / (1 + LENGTH / np.interp(energy, *PATH) + 0.4 / 0.6)


def wire(bias):
    return simulate(
        f"""
channel: {{length_nm: {LENGTH}, modes: {table(MODES)}}}
contacts: {{bias_mV: {bias}, temperature_K: {KELVIN}}}
scattering:
  backscatter_path_nm: {table(PATH)}
  points: [{{position_nm: 40, transmission: 0.6}}]
simulation: {{histories: 4e+6, cells: 10}}
"""
    )


@pytest.fixture(scope="module")
def biased():
    return wire(BIAS)


@pytest.fixture(scope="module")
def linear():
    return wire(0.0)


CUTS = (*MODES[0], *PATH[0], (0.0, KELVIN), (BIAS, KELVIN))


def window(weight):
    """int weight (F_L - F_R) dE."""
    return integral(lambda e: weight(e) * (fermi(e, BIAS, KELVIN) - fermi(e, 0.0, KELVIN)), *CUTS)


def around(mu, weight):
    """int weight (-dF/dE) dE."""
    return integral(lambda e: weight(e) * minus_slope(e, mu, KELVIN), *CUTS)


def carried(energy):
    return modes(energy) * transmission(energy)


def test_current_and_its_slope(biased):
    agree(biased.current_A, 2 * QUANTUM_S * 1e-3 * window(carried))
    agree(biased.resistance_ohm, BIAS / (2 * QUANTUM_S * window(carried)))
    agree(biased.transmission, window(carried) / window(modes))
    agree(biased.conductance_S, 2 * QUANTUM_S * around(BIAS, carried))
    exactly(biased.ballistic_resistance_ohm, BIAS / (2 * QUANTUM_S * window(modes)))


def test_linear_response(linear):
    agree(linear.conductance_S, 2 * QUANTUM_S * around(0.0, carried))
    agree(linear.transmission, around(0.0, carried) / around(0.0, modes))
    exactly(linear.ballistic_resistance_ohm, 1 / (2 * QUANTUM_S * around(0.0, modes)))


def test_heat(biased):
    to_left = window(lambda e: carried(e) * (BIAS - e))
    to_right = window(lambda e: carried(e) * e)
    agree(biased.heat_W.left_contact, 2 * QUANTUM_S * 1e-6 * to_left)
    agree(biased.heat_W.right_contact, 2 * QUANTUM_S * 1e-6 * to_right)


def test_parts(biased):
    """Levels are means over the modes: so is what each part takes of them."""
    ohm = BIAS / (2 * QUANTUM_S * window(modes))
    drop = ohm / (window(carried) / window(modes)) / window(modes)
    agree(part(biased, "interface", 0.0), ohm / 2)
    agree(part(biased, "interface", LENGTH), ohm / 2)
    agree(part(biased, "point", 40.0), drop * window(carried) * 2 / 3)
    for place, length in ((20.0, 40.0), (70.0, 60.0)):
        taken = window(lambda e, d=length: carried(e) * d / np.interp(e, *PATH))
        agree(part(biased, "piece", place), drop * taken)


def test_level_at_the_far_end(biased):
    """Right movers in the last cell, 95 nm: what is transmitted, and what is sent back there."""

    def filling(e):
        return transmission(e) * (1 + 5 / np.interp(e, *PATH))

    expected = BIAS * window(lambda e: modes(e) * filling(e)) / window(modes)
    agree(profile(biased, "mu_plus_meV", 95.0), expected)


def test_thermal_coefficients(linear):
    l0, l1, l2 = (around(0.0, lambda e, n=n: carried(e) * e**n) for n in range(3))
    agree(linear.thermal.seebeck_V_per_K, -l1 / l0 / KELVIN * 1e-3)
    agree(linear.thermal.conductance_W_per_K, 2 * QUANTUM_S * 1e-6 * (l2 - l1**2 / l0) / KELVIN)


@pytest.mark.parametrize("subband", [1, 2, 3])
def test_quantised_thermopower(subband):
    """mu at the opening of a subband, one transmission for all: T itself drops out."""
    kT = BOLTZMANN_MEV_PER_K * 100.0
    ramp = 0.02 * kT
    result = simulate(
        f"""
channel:
  length_nm: 50
  modes: {{energy_meV: [{-ramp / 2}, {ramp / 2}], value: [{subband - 1}, {subband}]}}
contacts: {{bias_mV: 0, temperature_K: 100}}
scattering: {{points: [{{position_nm: 20, transmission: 0.7}}]}}
simulation: {{histories: 1e+7, cells: 4}}
"""
    )
    expected = -constants.k / constants.e * log(2) / (subband - 0.5)
    # A ramp of width w moves L_1 by about (w/kT)^2/96 of kT, L_0 not at all.
    agree(result.thermal.seebeck_V_per_K, expected, systematic=abs(expected) * 0.02**2 / 20)
    agree(result.conductance_S, 2 * QUANTUM_S * 0.7 * (subband - 0.5))
