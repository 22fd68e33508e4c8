"""Symmetries of a channel: the bias reversed, the channel seen in a mirror.

Common practice: exchanging the contacts reverses the current and nothing else (M. Buttiker, IBM J.
Res. Dev. 32 (1988) 317, for two terminals). No formula is used: two runs with different random
numbers are held against each other.
"""

import numpy as np
import pytest

from carriersim.result import Estimate
from tests.checks_of_numbers import agree_together, part, profile, simulate

LENGTH = 300.0
POINTS = [(60.0, 0.5), (120.0, 0.6)]
SECTION = (120.0, 240.0)
BIAS = 12.0


def linear_channel(bias, seed, mirror=False):
    def at(place):
        return LENGTH - place if mirror else place

    points = ", ".join(f"{{position_nm: {at(x)}, transmission: {t}}}" for x, t in POINTS)
    low, high = sorted(at(x) for x in SECTION)
    near, far = ("right", "left") if mirror else ("left", "right")
    return simulate(
        f"""
channel: {{length_nm: {LENGTH}}}
contacts:
  bias_mV: {bias}
  temperature_K: 30
  {near}: {{transmission: 0.5}}
  {far}: {{transmission: 0.6}}
scattering:
  backscatter_path_nm: 110
  sections: [{{from_nm: {low}, to_nm: {high}, backscatter_path_nm: 60}}]
  points: [{points}]
simulation: {{histories: 1.8e+7, cells: 30, seed: {seed}}}
"""
    )


@pytest.fixture(scope="module")
def forward():
    return linear_channel(BIAS, 1)


@pytest.fixture(scope="module")
def reversed_bias():
    return linear_channel(-BIAS, 2)


@pytest.fixture(scope="module")
def mirrored():
    return linear_channel(BIAS, 3, mirror=True)


def negative(estimate, shift=0.0):
    return Estimate(shift - estimate.value, estimate.error)


def test_reversed_bias_reverses_the_current(forward, reversed_bias):
    agree_together(reversed_bias.resistance_ohm, forward.resistance_ohm)
    agree_together(negative(reversed_bias.current_A), forward.current_A)
    for place in (75.0, 155.0):
        for name in ("mu_plus_meV", "mu_minus_meV"):
            agree_together(
                negative(profile(reversed_bias, name, place)), profile(forward, name, place)
            )


PARTS = [("point", 0.0), ("point", 60.0), ("point", 120.0), ("point", 300.0)]
PARTS += [("piece", 30.0), ("piece", 90.0), ("piece", 180.0), ("piece", 270.0)]


def test_mirrored_channel_has_the_same_resistance_and_mirrored_parts(forward, mirrored):
    agree_together(mirrored.resistance_ohm, forward.resistance_ohm)
    for kind, place in PARTS:
        agree_together(part(mirrored, kind, LENGTH - place), part(forward, kind, place))


@pytest.mark.parametrize("place", [75.0, 105.0, 155.0, 225.0])
def test_mirrored_channel_has_the_mirrored_profile(forward, mirrored, place):
    """mu+(x) becomes eV - mu-(L - x)."""
    plus = profile(forward, "mu_plus_meV", place)
    minus = profile(mirrored, "mu_minus_meV", LENGTH - place)
    agree_together(negative(minus, BIAS), plus)
    mean = profile(mirrored, "mu_meV", LENGTH - place)
    agree_together(negative(mean, BIAS), profile(forward, "mu_meV", place))


def selective_channel(bias, left_K, right_K, seed, mirror=False):
    """A barrier and a path that depend on energy, counted from the right contact's level."""
    shift = -BIAS if mirror else 0.0  # the other contact is the zero of energy then
    barrier = [e + shift for e in (-15.0, 0.0, 25.0)]
    path = [e + shift for e in (-20.0, 10.0)]
    return simulate(
        f"""
channel: {{length_nm: 100}}
contacts:
  bias_mV: {bias}
  left: {{temperature_K: {left_K}}}
  right: {{temperature_K: {right_K}}}
scattering:
  backscatter_path_nm: {{energy_meV: {path}, value: [80, 300]}}
  points:
    - position_nm: {80 if mirror else 20}
      transmission: {{energy_meV: {barrier}, value: [0.2, 0.9, 0.5]}}
simulation: {{histories: 6e+6, cells: 20, seed: {seed}}}
"""
    )


def test_contacts_exchanged_where_everything_depends_on_energy():
    """Also of different temperatures: current, heat and thermal coefficients change places."""
    one = selective_channel(BIAS, 80.0, 40.0, seed=1)
    other = selective_channel(-BIAS, 40.0, 80.0, seed=2, mirror=True)
    agree_together(negative(other.current_A), one.current_A)
    agree_together(other.heat_W.left_contact, one.heat_W.right_contact)
    agree_together(other.heat_W.right_contact, one.heat_W.left_contact)
    plus = np.searchsorted(one.x_nm, 60.0)
    minus = one.x_nm.size - 1 - plus
    energies = [-5.0, 3.0, 9.0]
    for e in energies:
        row = np.searchsorted(one.energy_edges_meV, e) - 1
        same = np.searchsorted(other.energy_edges_meV, e - BIAS) - 1
        a = one.f_plus[row, plus], one.errors["f_plus"][row, plus]
        b = other.f_minus[same, minus], other.errors["f_minus"][same, minus]
        assert abs(a[0] - b[0]) <= 4 * np.hypot(a[1], b[1]) + 0.01
