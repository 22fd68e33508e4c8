"""Voltage probes that take carriers: transmission, reading and heat in a ballistic channel.

Source: M. Buttiker, Phys. Rev. B 33 (1986) 3020, Phys. Rev. Lett. 57 (1986) 1761, and IBM J. Res.
Dev. 32 (1988) 317: a probe that draws no net current and takes a carrier with probability eps sends
half of them back, T_tot = 1 - eps/2; with full coupling it dissipates half of the power. Unequal
coupling and series worked out here by hand from the same balance.
"""

import numpy as np
import pytest

from tests.checks_of_numbers import QUANTUM_S, agree, part, simulate

BIAS, KELVIN = 30.0, 20.0
LARGEST = 0.005
UNIT_W = 2 * QUANTUM_S * (BIAS * 1e-3) ** 2
R_B = 0.5 / QUANTUM_S


def channel(probes, histories=1_500_000, bias=BIAS, more="", mechanisms=""):
    return simulate(
        f"""
channel: {{length_nm: 100}}
contacts: {{bias_mV: {bias}, temperature_K: {KELVIN}}}
scattering: {{{more}}}
relaxation: {{mechanisms: [{mechanisms}]}}
probes: [{probes}]
simulation: {{histories: {histories}, cells: 20}}
"""
    )


def relative(estimate):
    return estimate.error / abs(estimate.value)


SLOW = pytest.mark.slow


@pytest.mark.parametrize("eps", [0.6, 1.0, pytest.param(0.2, marks=SLOW)])
def test_one_probe(eps):
    result = channel(f"{{position_nm: 40, coupling: {eps}}}")
    assert result.converged, result.drift
    agree(result.transmission, 1 - eps / 2)
    agree(result.resistance_ohm, R_B / (1 - eps / 2))
    agree(part(result, "probe", 40.0), eps / 2 / (1 - eps / 2) * R_B, LARGEST)
    agree(result.probes[0].potential, BIAS / 2)
    # eps (eV)^2/4: what is absorbed has two steps at half height, what comes out has one.
    (probe,) = result.heat_W.probes
    agree(probe, UNIT_W * eps / 4, LARGEST)
    for contact in (result.heat_W.left_contact, result.heat_W.right_contact):
        agree(contact, UNIT_W * (0.5 * (1 - eps / 2) - eps / 8), LARGEST)
    if eps == 1.0:  # a half of I V
        half = 0.5 * result.current_A.value * BIAS * 1e-3
        agree(probe, half, LARGEST, systematic=4 * half * relative(result.current_A))


@pytest.mark.parametrize("weight", [0.7, pytest.param(0.2, marks=SLOW)])
def test_unequal_coupling(weight):
    """a = 2 w eps of right movers, b = 2 (1-w) eps of left movers: it reads w mu+ + (1-w) mu-."""
    eps = 0.6
    result = channel(f"{{position_nm: 40, coupling: {eps}, weight_right: {weight}}}")
    a, b = 2 * weight * eps, 2 * (1 - weight) * eps
    assert max(a, b) <= 1
    turned = a * b / (a + b)
    agree(result.transmission, 1 - turned)
    agree(result.probes[0].potential, weight * BIAS)
    agree(result.heat_W.probes[0], UNIT_W * 0.5 * turned, LARGEST)


def test_weak_coupling_reads_the_mean():
    """eps -> 0: a probe in a channel with a barrier reads the mean of mu+ and mu-."""
    places = (30.0, 80.0)
    weak = ", ".join(f"{{position_nm: {x}, coupling: 0.002}}" for x in places)
    result = channel(weak, 2_500_000, more="points: [{position_nm: 50, transmission: 0.5}]")
    for place, probe in zip(places, result.probes, strict=True):
        mean = 0.75 if place < 50 else 0.25
        # Each probe's own resistance, R_B eps/2, shifts the readings by no more than that.
        agree(probe.potential, mean * BIAS, LARGEST, systematic=0.002 * BIAS / 2)
        cell = np.searchsorted(result.x_nm, place)
        both = 0.5 * (result.mu_plus_meV[cell] + result.mu_minus_meV[cell])
        agree(probe.potential, both, LARGEST, systematic=0.002 * BIAS / 2)


@pytest.mark.parametrize("bias", [BIAS, pytest.param(-BIAS, marks=SLOW)])
def test_two_of_full_coupling_in_series(bias):
    """Three ballistic channels end to end: 3 R_B, thirds of the bias, I V/6 at each of six ends."""
    probes = "{position_nm: 30, coupling: 1}, {position_nm: 70, coupling: 1}"
    result = channel(probes, bias=bias)
    agree(result.resistance_ohm, 3 * R_B)
    for probe, third in zip(result.probes, (2 / 3, 1 / 3), strict=True):
        agree(probe.potential, third * bias, LARGEST)
    heat, power = result.heat_W, UNIT_W / 3
    for one in (heat.left_contact, heat.right_contact):
        agree(one, power / 6, LARGEST)
    for one in heat.probes:
        agree(one, power / 3, LARGEST)


def test_two_of_partial_coupling_in_series():
    """Incoherent: R_B [1 + sum (1 - T_i)/T_i] with T_i = 1 - eps_i/2."""
    result = channel("{position_nm: 30, coupling: 0.8}, {position_nm: 70, coupling: 0.4}")
    terms = [0.4 / 0.6, 0.2 / 0.8]
    agree(result.resistance_ohm, R_B * (1 + sum(terms)))
    for place, term in zip((30.0, 70.0), terms, strict=True):
        agree(part(result, "probe", place), term * R_B, LARGEST)
    rise = BIAS / (1 + sum(terms))
    # Halves of R_B belong to the contacts; each probe sits in the middle of its own drop.
    agree(result.probes[0].potential, BIAS - rise * (0.5 + terms[0] / 2), LARGEST)
    agree(result.probes[1].potential, rise * (0.5 + terms[1] / 2), LARGEST)
