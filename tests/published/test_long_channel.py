"""Ohm's law: a channel of 300 backscattering paths.

Source: S. Datta, Electronic Transport in Mesoscopic Systems (Cambridge 1995), from memory: R grows
as (1 + L/lam) R_B, the 1 being the contacts.
"""

import pytest

from tests.checks_of_numbers import QUANTUM_S, agree, part, profile, simulate

R_B = 1 / (2 * QUANTUM_S)
LENGTH, LAM = 3000.0, 10.0

LONG = f"""
channel: {{length_nm: {LENGTH}}}
contacts: {{bias_mV: 100, temperature_K: 300}}
scattering: {{mean_free_path_nm: {LAM / 2}}}
probes: [{{position_nm: 600}}, {{position_nm: 1000}}]
simulation: {{relative_error: {{error}}, cells: 60}}
"""


def check(error):
    result = simulate(LONG.replace("{error}", str(error)))
    assert result.stopped_by == "relative_error" and result.converged
    agree(result.resistance_ohm, 301 * R_B, error)
    agree(part(result, "piece", 1000.0), 300 * R_B, 301 / 300 * error)
    for probe, place in zip(result.probes, (600.0, 1000.0), strict=True):
        agree(probe.potential, 100 * (1 - (place / LAM + 0.5) / 301), error)
    agree(profile(result, "mu_meV", 825.0), 100 * (1 - (82.5 + 0.5) / 301), error)


def test_within_one_per_cent():
    check(0.01)


@pytest.mark.slow
def test_within_half_a_per_cent():
    check(0.005)
