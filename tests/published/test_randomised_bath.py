"""A bath that makes directions random is backscattering of path 1/(2 path); a kept one is none.

Source: S. Datta, Electronic Transport in Mesoscopic Systems (1995), and M. Buttiker, Phys. Rev. B
33 (1986) 3020, phase-randomising reservoirs all along: half of the events turn a carrier round, so
R/R_B = 1 + L/lam + L/(2 path) + sum (1-T_i)/T_i.
"""

import pytest

from tests.checks_of_numbers import QUANTUM_S, agree, part, simulate

R_B = 0.5 / QUANTUM_S
LENGTH, LAM, T = 300.0, 400.0, 0.6
LARGEST = 0.005


def channel(path, direction, histories, bias=20.0, kind="bath"):
    return simulate(
        f"""
channel: {{length_nm: {LENGTH}}}
contacts: {{bias_mV: {bias}, temperature_K: 30}}
scattering: {{backscatter_path_nm: {LAM}, points: [{{position_nm: 200, transmission: {T}}}]}}
relaxation: {{mechanisms: [{{kind: {kind}, path_nm: {path}, direction: {direction}}}]}}
simulation: {{histories: {histories}, cells: 15}}
"""
    )


@pytest.mark.parametrize(
    ("path", "bias"),
    [
        (100.0, 20.0),
        pytest.param(100.0, -300.0, marks=pytest.mark.slow),
        pytest.param(400.0, 0.0, marks=pytest.mark.slow),
        pytest.param(30.0, 20.0, marks=pytest.mark.slow),
    ],
)
def test_adds_half_its_rate_to_backscattering(path, bias):
    result = channel(path, "randomised", 3_000_000, bias)
    assert result.converged, result.drift
    terms = LENGTH / LAM, LENGTH / (2 * path), (1 - T) / T
    agree(result.resistance_ohm, R_B * (1 + sum(terms)), LARGEST)
    agree(part(result, "point", 200.0), R_B * terms[2], LARGEST)
    for place, share in ((100.0, 2 / 3), (250.0, 1 / 3)):
        agree(part(result, "piece", place, "bath"), R_B * terms[1] * share, 0.01)
        agree(part(result, "piece", place, "elastic"), R_B * terms[0] * share, 0.01)


@pytest.mark.parametrize("kind", ["bath", pytest.param("carriers", marks=pytest.mark.slow)])
def test_kept_directions_add_nothing(kind):
    result = channel(60.0, "kept", 3_000_000, kind=kind)
    agree(result.resistance_ohm, R_B * (1 + LENGTH / LAM + (1 - T) / T), LARGEST)
    kinds = {p.mechanism for p in result.breakdown if p.kind == "piece"}
    assert kinds == {"elastic"}
