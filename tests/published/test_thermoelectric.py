"""Seebeck coefficient and thermal conductance of an elastic channel.

Source: U. Sivan and Y. Imry, Phys. Rev. B 33 (1986) 551: with L_n = int M T E^n (-dF/dE) dE,
S = -L_1/(e T L_0) and K = (g/h)(L_2 - L_1^2/L_0)/T; at low temperature the formula of N. F. Mott
and H. Jones (1936), S = -(pi^2/3)(k/e) kT dln T(E)/dE. Contacts that differ much in temperature
have a bias without current instead, found here by scipy's brentq. Integrals by scipy's quad.
"""

from math import pi

import numpy as np
import pytest
from scipy import constants, optimize

from tests.checks_of_numbers import (
    BOLTZMANN_MEV_PER_K,
    QUANTUM_S,
    agree,
    fermi,
    integral,
    minus_slope,
    simulate,
)

LENGTH = 120.0
RISING = ([-25.0, -6.0, 18.0, 40.0], [0.1, 0.15, 0.9, 0.95])
PATH = ([-50.0, 10.0, 60.0], [30.0, 60.0, 400.0])


def channel(table, bias, left_K, right_K, histories="6e+6", scatterer=True):
    """One scatterer with a table in the middle, or the table as path throughout."""
    values = f"{{energy_meV: {table[0]}, value: {table[1]}}}"
    return simulate(
        f"""
channel: {{length_nm: {LENGTH}}}
contacts:
  bias_mV: {bias}
  left: {{temperature_K: {left_K}}}
  right: {{temperature_K: {right_K}}}
scattering: {
            "{points: [{position_nm: 60, transmission: " + values + "}]}"
            if scatterer
            else "{backscatter_path_nm: " + values + "}"
        }
simulation: {{histories: {histories}, cells: 10}}
"""
    )


def transmission(table, scatterer=True):
    if scatterer:
        return lambda e: np.interp(e, *table)
    return lambda e: 1 / (1 + LENGTH / np.interp(e, *table))


def moment(of, n, kelvin, breaks):
    return integral(lambda e: of(e) * e**n * minus_slope(e, 0.0, kelvin), *breaks, (0.0, kelvin))


def mirrored(table):
    """The same table with energies counted down."""
    return [-e for e in reversed(table[0])], list(reversed(table[1]))


@pytest.mark.parametrize(
    "table, scatterer, bias, left, right",
    [
        (RISING, True, 0.0, 100.0, 100.0),
        (mirrored(RISING), True, 0.0, 100.2, 99.8),
        (RISING, True, 15.0, 60.0, 60.0),
        (PATH, False, 0.0, 200.0, 200.0),
    ],
    ids=["rising", "falling", "at a bias", "path"],
)
def test_linear_coefficients(table, scatterer, bias, left, right):
    """Of the contacts without bias at their mean temperature, whatever the bias of the run."""
    result = channel(table, bias, left, right, scatterer=scatterer)
    kelvin = (left + right) / 2
    t = transmission(table, scatterer)
    l0, l1, l2 = (moment(t, n, kelvin, table[0]) for n in range(3))
    agree(result.thermal.seebeck_V_per_K, -l1 / l0 / kelvin * 1e-3)
    agree(result.thermal.conductance_W_per_K, 2 * QUANTUM_S * 1e-6 * (l2 - l1**2 / l0) / kelvin)
    rises = table[1][-1] > table[1][0]
    # Carriers above mu dominate where T rises: they are hot on the hot side, and S is negative.
    assert (result.thermal.seebeck_V_per_K.value < 0) == rises


def test_mott_formula():
    """Exact where T(E) is linear, here from 0.02 to 0.98; clamped where hardly anyone is."""
    kT = BOLTZMANN_MEV_PER_K * 20.0
    edge = 13 * kT
    result = channel(([-edge, edge], [0.02, 0.98]), 0.0, 20.0, 20.0, histories="1.2e+7")
    slope = 0.48 / edge / 0.5
    expected = -(pi**2) / 3 * constants.k / constants.e * kT * slope
    # Carriers beyond 13 kT carry (6/pi^2) int_13 x^2 exp(-x) dx = 2.7e-4 of L_1.
    agree(result.thermal.seebeck_V_per_K, expected, systematic=2.7e-4 * abs(expected))
    agree(result.conductance_S, QUANTUM_S)


class Contacts:
    """Exact currents between contacts of different temperatures."""

    def __init__(self, table, left_K, right_K, scatterer=True):
        self.t = transmission(table, scatterer)
        self.breaks = table[0]
        self.left_K, self.right_K = left_K, right_K

    def flow(self, mu, weight=lambda e: 1.0):
        """int weight T (F_L - F_R) dE."""

        def integrand(e):
            return weight(e) * self.t(e) * (fermi(e, mu, self.left_K) - fermi(e, 0.0, self.right_K))

        return integral(integrand, *self.breaks, (mu, self.left_K), (0.0, self.right_K))

    def stopping_bias(self):
        return optimize.brentq(self.flow, -60.0, 60.0, xtol=1e-10)


UNEQUAL = [
    (RISING, True, 10.0, 140.0, 60.0),
    (RISING, True, 0.0, 50.0, 110.0),
    (mirrored(RISING), True, -8.0, 120.0, 50.0),
    (PATH, False, 0.0, 300.0, 150.0),
]


@pytest.mark.parametrize(
    "table, scatterer, bias, left, right", UNEQUAL, ids=["hot left", "hot right", "falling", "path"]
)
def test_contacts_of_different_temperature(table, scatterer, bias, left, right):
    result = channel(table, bias, left, right, scatterer=scatterer)
    exact = Contacts(table, left, right, scatterer)
    g = 2 * QUANTUM_S
    if bias:
        agree(result.current_A, g * 1e-3 * exact.flow(bias))
        agree(result.heat_W.left_contact, g * 1e-6 * exact.flow(bias, lambda e: bias - e))
        agree(result.heat_W.right_contact, g * 1e-6 * exact.flow(bias, lambda e: e))
    else:
        assert result.current_A is None
    agree(result.thermal.heat_current_left_W, g * 1e-6 * exact.flow(bias, lambda e: e - bias))
    agree(result.thermal.heat_current_right_W, g * 1e-6 * exact.flow(bias, lambda e: e))
    slope = integral(lambda e: exact.t(e) * minus_slope(e, bias, left), *exact.breaks, (bias, left))
    agree(result.conductance_S, g * slope)
    stop = exact.stopping_bias()
    assert result.resistance_ohm is None and result.breakdown is None
    agree(result.thermal.seebeck_V_per_K, stop * 1e-3 / (left - right))
    heat = g * 1e-6 * exact.flow(stop, lambda e: e)
    agree(result.thermal.conductance_W_per_K, heat / (left - right))
    # The hot contact is driven positive by carriers above mu: it stops them with mu_hot < mu_cold.
    rises = table[1][-1] > table[1][0]
    assert (result.thermal.seebeck_V_per_K.value < 0) == rises
