"""The quantum of conductance and of resistance, 2e^2/h and h/2e^2.

Source: the SI of 2019, which fixes e, h and k, as CODATA tabulates it and scipy.constants quotes
it.
"""

import pytest
from scipy import constants

from carriersim import limits
from tests.checks_of_numbers import agree, exactly, part, simulate

TWO_E2_OVER_H = constants.physical_constants["conductance quantum"][0]
H_OVER_2E2 = constants.physical_constants["inverse of conductance quantum"][0]

BALLISTIC = """
channel: {{length_nm: 100, modes: {modes}, degeneracy: {degeneracy}}}
contacts: {{bias_mV: {bias}, temperature_K: 300}}
simulation: {{histories: 1000, cells: 4}}
"""


def test_tabulated_values():
    assert TWO_E2_OVER_H == pytest.approx(7.748091729e-5, rel=2e-10)
    assert H_OVER_2E2 == pytest.approx(12906.40372, rel=1e-9)
    exactly(limits.ballistic_conductance_S(), TWO_E2_OVER_H)
    exactly(limits.ballistic_resistance_ohm(), H_OVER_2E2)


@pytest.mark.parametrize("bias", [0.0, 10.0, -500.0])
@pytest.mark.parametrize("modes, degeneracy", [(1, 2), (2.5, 2), (1, 4)])
def test_a_channel_without_scatterers_has_one_quantum_per_mode(bias, modes, degeneracy):
    result = simulate(BALLISTIC.format(bias=bias, modes=modes, degeneracy=degeneracy))
    quanta = modes * degeneracy / 2
    agree(result.transmission, 1.0)
    agree(result.conductance_S, quanta * TWO_E2_OVER_H)
    agree(result.resistance_ohm, H_OVER_2E2 / quanta)
    agree(result.differential_resistance_ohm, H_OVER_2E2 / quanta)
    exactly(result.ballistic_resistance_ohm, H_OVER_2E2 / quanta)
    for place in (0.0, 100.0):
        agree(part(result, "interface", place), 0.5 * H_OVER_2E2 / quanta)
    if bias:
        agree(result.current_A, quanta * TWO_E2_OVER_H * bias * 1e-3)
