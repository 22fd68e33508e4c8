"""What a weakly coupled voltage probe reads.

Source: M. Buttiker, Phys. Rev. Lett. 57 (1986) 1761 and IBM J. Res. Dev. 32 (1988) 317: a probe
that draws no current reads the mean of the levels it couples to. Coupled in the proportion a to
1 - a to right and left movers it reads a mu+ + (1 - a) mu- (common practice; levels worked out here
by hand).
"""

from itertools import combinations

import pytest

from tests.checks_of_numbers import QUANTUM_S, agree, simulate

LENGTH, LAM, BIAS = 200.0, 100.0, 8.0
PROBES = [(30.0, 0.0), (30.5, 1.0), (60.0, 0.25), (120.0, 0.3), (160.0, 0.85)]
TOTAL = 1 + LENGTH / LAM + 0.5 / 0.5


@pytest.fixture(scope="module", params=[BIAS, 0.0])
def run(request):
    probes = ", ".join(f"{{position_nm: {x}, weight_right: {a}}}" for x, a in PROBES)
    result = simulate(
        f"""
channel: {{length_nm: {LENGTH}}}
contacts: {{bias_mV: {request.param}, temperature_K: 10}}
scattering:
  backscatter_path_nm: {LAM}
  points: [{{position_nm: 80, transmission: 0.5}}]
probes: [{probes}]
simulation: {{histories: 6e+6, cells: 10}}
"""
    )
    return result, request.param or 1.0


def reading(place, weight):
    """Fraction of the bias: g+ = 1 - (resistance passed)/R, g- below it by R_B/R."""
    passed = place / LAM + (1.0 if place > 80 else 0.0)
    plus = 1 - passed / TOTAL
    return weight * plus + (1 - weight) * (plus - 1 / TOTAL)


@pytest.mark.parametrize("index", range(len(PROBES)))
def test_reading(run, index):
    result, unit = run
    assert result.probes[index].position_nm == PROBES[index][0]
    agree(result.probes[index].potential, unit * reading(*PROBES[index]))


def test_four_point_resistance_between_them(run):
    result, _ = run
    assert len(result.four_point) == 10
    ohm = TOTAL / (2 * QUANTUM_S)
    pairs = combinations(PROBES, 2)
    for found, (first, second) in zip(result.four_point, pairs, strict=True):
        between = reading(*first) - reading(*second)
        if abs(between) > 0.1:  # small differences of large readings are too noisy to check
            agree(found.resistance_ohm, ohm * between)
