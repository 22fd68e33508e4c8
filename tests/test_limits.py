"""Closed forms against independent solutions: the kinetic equation itself, quad and mpmath."""

import re
from dataclasses import replace
from functools import cache
from itertools import pairwise
from types import SimpleNamespace

import mpmath
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import constants, integrate
from scipy.special import expit

from carriersim import fermi, limits
from carriersim.result import Estimate, FourPoint, Part, ProbeReading
from carriersim.scenario import read_text

K_MEV = constants.k / constants.e * 1e3  # meV/K
POWER_W = 1e-6 * constants.e**2 / constants.h  # meV^2/h in W
STEEP = "{energy_meV: [-5, -1, 1, 40], value: [0.3, 0.001, 0.9, 0.6]}"
PATH = "{energy_meV: [-60, 0, 80], value: [100, 300, 50]}"
SUBBANDS = "{energy_meV: [-20, -19, 15, 16], value: [0, 1, 1, 3]}"


def approx(expected, rel=1e-6, abs=0.0):
    """pytest.approx without its absolute tolerance of 1e-12, which hides errors of A and W."""
    return pytest.approx(expected, rel=rel, abs=abs)


def scenario(bias_mV=0.0, left_K=300.0, right_K=None, length_nm=500.0, modes=1, extra="", more=""):
    """A scenario from YAML. extra: the scattering block; more: whole lines of the contacts."""
    right_K = left_K if right_K is None else right_K
    return read_text(
        f"channel: {{length_nm: {length_nm}, modes: {modes}}}\n"
        "contacts:\n"
        f"  bias_mV: {bias_mV}\n"
        f"  left: {{temperature_K: {left_K}{more}}}\n"
        f"  right: {{temperature_K: {right_K}}}\n"
        f"{extra}"
    )


def mixed(bias_mV, left_K, right_K=None, modes=1, probes=""):
    """Sections, named paths, tables and a contact barrier together."""
    return scenario(
        bias_mV,
        left_K,
        right_K,
        modes=modes,
        more=", transmission: 0.8",
        extra=f"""
scattering:
  mean_free_path_nm:
    - {{name: defects, mean_free_path_nm: 400}}
    - {{name: phonons, backscatter_path_nm: {PATH}}}
  sections:
    - {{from_nm: 250, to_nm: 350, backscatter_path_nm: 700}}
    - {{from_nm: 50, to_nm: 60, mean_free_path_nm: {PATH}}}
  points:
    - {{position_nm: 300, transmission: 0.2}}
    - {{position_nm: 120, transmission: {STEEP}}}
    - {{position_nm: 420, transmission: {STEEP}}}
{probes}""",
    )


def row(scenario, name):
    (found,) = [limit for limit in limits.limits_for(scenario) if limit.name == name]
    return found


def named(scenario):
    return {limit.name: limit.expected for limit in limits.limits_for(scenario)}


# --- an independent solution of the kinetic equation of `mixed`, by transfer matrices


def _at(table, energy):
    nodes, values = (
        [float(x) for x in part.split(",")] for part in re.findall(r"\[(.*?)\]", table)
    )
    return np.interp(energy, nodes, values)


def _stretch(length, rate):
    # df+/dx = df-/dx = (f- - f+)/lam; the matrix squared is 0, so its exponential has two terms.
    return np.eye(2) + length * rate * np.array([[-1.0, 1.0], [-1.0, 1.0]])


def _scatterer(t):
    # From f-(left) = t f-(right) + (1-t) f+(left), f+(right) = t f+(left) + (1-t) f-(right).
    r = 1.0 - t
    return np.array([[t - r * r / t, r / t], [-r / t, 1.0 / t]])


@cache
def _kinetic(energy, places=()):
    """T(E) and [(f+, f-) at the places] of `mixed` for a full left and an empty right contact."""
    phonons = 1.0 / _at(PATH, energy)
    usual = 1.0 / 800 + phonons
    steep = _scatterer(_at(STEEP, energy))
    elements = [(0.0, 0.0, _scatterer(0.8))]
    elements += [
        (0, 50, usual),
        (50, 60, 0.5 * phonons),
        (60, 120, usual),
        (120, 120, steep),
        (120, 250, usual),
        (250, 300, 1 / 700),
        (300, 300, _scatterer(0.2)),
        (300, 350, 1 / 700),
        (350, 420, usual),
        (420, 420, steep),
        (420, 500, usual),
    ]

    def matrix(x):
        product = np.eye(2)
        for low, high, what in elements:
            if low == high and x >= low:
                product = what @ product
            elif low < high and x > low:
                product = _stretch(min(x, high) - low, what) @ product
        return product

    whole = matrix(500.0)
    back = -whole[1, 0] / whole[1, 1]  # f- at x = 0 such that f-(L) = 0
    start = np.array([1.0, back])
    return (whole @ start)[0], [matrix(x) @ start for x in places]


def _quad(function, low=-1200.0, high=1200.0, breaks=()):
    """Integral by adaptive quadrature, cut at the breaks."""
    edges = sorted({low, high, *(b for b in breaks if low < b < high)})
    return sum(
        integrate.quad(function, a, b, epsabs=3e-12, epsrel=1e-10, limit=400)[0]
        for a, b in pairwise(edges)
    )


def _fermi(energy, mu, kelvin):
    return expit(-(energy - mu) / (K_MEV * kelvin))


ENTRIES = (-60, -20, -19, -5, -1, 1, 15, 16, 40, 80, 0, 30, -30, -200, 200, 500, -500, -70, 150)


# --- numbers that the docstrings state, exact constants


def test_constants_are_the_si_values():
    quantum = 2 * constants.e**2 / constants.h
    assert limits.ballistic_conductance_S() == approx(quantum, rel=1e-15)
    assert limits.ballistic_conductance_S() == approx(7.748091730e-5, rel=1e-10)
    assert limits.ballistic_conductance_S() == approx(
        constants.physical_constants["conductance quantum"][0], rel=1e-9
    )
    assert limits.ballistic_resistance_ohm() == approx(12906.40372, rel=1e-9)
    assert limits.ballistic_resistance_ohm() == approx(
        constants.physical_constants["von Klitzing constant"][0] / 2, rel=1e-9
    )
    assert limits.ballistic_resistance_ohm(modes=4, degeneracy=1) == approx(
        constants.h / (4 * constants.e**2), rel=1e-15
    )
    assert limits.LORENZ_NUMBER == approx(2.443e-8, rel=1e-4)


def test_single_resistances():
    assert limits.point_resistance(0.2) == approx(4.0)
    assert limits.stretch_resistance(300.0, 100.0) == 3.0
    # Two barriers: the sum over all multiple reflections T1 T2 (1 + R1 R2 + ...).
    t1, t2 = 0.3, 0.85
    reflections = t1 * t2 * sum(((1 - t1) * (1 - t2)) ** n for n in range(200))
    series = limits.series_transmission(limits.point_resistance([t1, t2]))
    assert series == approx(reflections, rel=1e-14)


# --- one scatterer, two scatterers


@pytest.mark.parametrize("bias", [0.0, 20.0, -20.0])
@pytest.mark.parametrize("kelvin", [0.0, 4.2, 300.0])
def test_one_scatterer_of_one_fifth(bias, kelvin):
    one = scenario(
        bias, kelvin, extra="scattering: {points: [{position_nm: 200, transmission: 0.2}]}"
    )
    ballistic = constants.h / (2 * constants.e**2)
    unit = bias or 1.0
    expected = named(one)
    assert expected["resistance, series law"] == approx(5 * ballistic, rel=1e-12)
    assert expected["conductance dI/dV"] == approx(0.2 / ballistic, rel=1e-12)
    assert expected["scatterer at 200 nm"] == approx(4 * ballistic, rel=1e-12)
    for side in ("left", "right"):
        half = expected[f"{side} interface, half of ballistic"]
        assert half == approx(ballistic / 2, rel=1e-12)
    plus, minus = limits.profile(one, np.array([0.0, 199.0, 200.0, 201.0, 500.0]))
    np.testing.assert_allclose(plus / unit, [1, 1, 0.6, 0.2, 0.2], atol=1e-12)
    np.testing.assert_allclose(minus / unit, [0.8, 0.8, 0.4, 0, 0], atol=1e-12)
    if bias:
        assert expected["current"] == approx(0.2e-3 * bias / ballistic, rel=1e-12)


def test_symmetric_barriers_share_the_bias():
    points = ", ".join(f"{{position_nm: {x}, transmission: 0.4}}" for x in (100, 400))
    double = scenario(10.0, extra=f"scattering: {{points: [{points}]}}")
    assert limits.transmission(double, 3.0) == approx(0.4 / (2 - 0.4))
    plus, minus = limits.profile(double, 250.0)
    assert plus + minus == approx(10.0)
    expected = named(double)
    assert expected["scatterer at 100 nm"] == approx(expected["scatterer at 400 nm"])


# --- the response at one energy


@pytest.mark.parametrize("energy", [-100.0, -17.0, -1.0, 0.5, 33.0, 90.0])
def test_response_solves_the_kinetic_equation(energy):
    places = [1e-9, 30.0, 55.0, 119.0, 121.0, 260.0, 299.0, 301.0, 419.0, 499.0]
    t, states = _kinetic(energy, tuple(places))
    case = mixed(5.0, 300.0)
    assert limits.transmission(case, energy) == approx(t, rel=1e-8)
    plus, minus = limits.response(case, places, [energy])
    assert plus.shape == minus.shape == (1, len(places))
    np.testing.assert_allclose(plus[0], [s[0] for s in states], atol=1e-9)
    np.testing.assert_allclose(minus[0], [s[1] for s in states], atol=1e-9)


def test_response_at_a_scatterer_is_the_mean_of_its_sides():
    case = mixed(0.0, 300.0)
    at, before, after = (
        limits.response(case, x, [-0.3, 7.0]) for x in (120, 120 - 1e-9, 120 + 1e-9)
    )
    for i in (0, 1):
        np.testing.assert_allclose(at[i], 0.5 * (before[i] + after[i]), atol=1e-9)


def test_tabulated_contact_barriers_are_scatterers_at_the_ends():
    barriers = scenario(5.0, 50.0).replace(
        {
            "contacts.left.transmission": {"energy_meV": [0, 10], "value": [0.2, 0.4]},
            "contacts.right.transmission": {"energy_meV": [0, 10], "value": [0.9, 0.7]},
        }
    )
    energies = np.array([0.0, 5.0, 10.0])
    t = 1 / (1 / np.array([0.2, 0.3, 0.4]) + 1 / np.array([0.9, 0.8, 0.7]) - 1)
    np.testing.assert_allclose(limits.transmission(barriers, energies), t, rtol=1e-13)
    plus, minus = limits.response(barriers, [0.0, 500.0], energies)
    inside = t / np.array([0.9, 0.8, 0.7])  # g+ that the right barrier lets through
    np.testing.assert_allclose(plus, np.column_stack([inside, inside]), rtol=1e-12)
    np.testing.assert_allclose(minus, plus - t[:, None], rtol=1e-12)
    rows = named(barriers)
    ends = [rows["left contact barrier"], rows["right contact barrier"]]
    total = limits.resistance_ohm(barriers)
    assert sum(ends) + rows["ballistic resistance"] == approx(total, rel=1e-11)


def test_transmission_keeps_the_shape_and_clamps():
    case = mixed(0.0, 300.0)
    energies = np.array([[-60.0, -1e4], [80.0, 1e5]])
    t = limits.transmission(case, energies)
    assert t.shape == (2, 2)
    np.testing.assert_array_equal(t[:, 0], t[:, 1])
    assert limits.transmission(case, 0.0).shape == ()


# --- Landauer integrals


CONTACTS = [(30.0, 300.0, 300.0), (-30.0, 77.0, 77.0), (12.0, 150.0, 300.0), (40.0, 300.0, 20.0)]


@pytest.mark.parametrize("modes", ["1", SUBBANDS])
@pytest.mark.parametrize(("bias", "left", "right"), CONTACTS)
def test_current_and_heat_against_quad(bias, left, right, modes):
    case = mixed(bias, left, right, modes)

    def flux(energy):
        m = _at(modes, energy) if modes != "1" else 1.0
        return m * _kinetic(energy)[0] * (_fermi(energy, bias, left) - _fermi(energy, 0, right))

    breaks = (*ENTRIES, bias)
    number = _quad(flux, breaks=breaks)
    current = 2 * constants.e * number * 1e-3 * constants.e / constants.h
    assert limits.current_A(case) == approx(current, rel=1e-8)
    heat_right = 2 * POWER_W * _quad(lambda e: e * flux(e), breaks=breaks)
    heat_left = 2 * POWER_W * _quad(lambda e: (bias - e) * flux(e), breaks=breaks)
    assert limits.contact_heat_W(case) == approx((heat_left, heat_right), rel=1e-8)
    assert sum(limits.contact_heat_W(case)) == approx(current * bias * 1e-3, rel=1e-8)
    if left == right:
        resistance = bias * 1e-3 / current
        assert limits.resistance_ohm(case) == approx(resistance, rel=1e-8)


@pytest.mark.parametrize("modes", ["1", SUBBANDS])
def test_conductance_is_the_slope_of_the_current(modes):
    step = 0.05
    around = [limits.current_A(mixed(25.0 + d, 300.0, 250.0, modes)) for d in (-step, step)]
    slope = (around[1] - around[0]) / (2e-3 * step)
    assert limits.conductance_S(mixed(25.0, 300.0, 250.0, modes)) == approx(slope, rel=1e-6)


def test_linear_response_is_the_limit_of_a_small_bias():
    zero, small = mixed(0.0, 100.0), mixed(1e-5, 100.0)
    assert limits.resistance_ohm(zero) == approx(limits.resistance_ohm(small), rel=1e-6)
    assert limits.mean_transmission(zero) == approx(limits.mean_transmission(small), rel=1e-6)
    x = np.linspace(0, 500, 23)
    np.testing.assert_allclose(
        limits.profile(zero, x), np.array(limits.profile(small, x)) / 1e-5, rtol=1e-6, atol=1e-9
    )


@pytest.mark.parametrize("modes", ["1", SUBBANDS])
def test_thermoelectric_coefficients_against_quad(modes):
    kelvin = 120.0
    case = mixed(15.0, 120.4, 119.6, modes)  # within 1 %: linear, whatever the bias

    def weight(energy):
        f = _fermi(energy, 0.0, kelvin)
        m = _at(modes, energy) if modes != "1" else 1.0
        return m * _kinetic(energy)[0] * f * (1 - f) / (K_MEV * kelvin)

    moments = [_quad(lambda e, n=n: e**n * weight(e), -600, 600, ENTRIES) for n in range(3)]
    assert limits.thermoelectric_integrals(case) == approx(moments, rel=1e-8)
    seebeck = -moments[1] / moments[0] / kelvin * 1e-3
    assert limits.seebeck_V_per_K(case) == approx(seebeck, rel=1e-8)
    heat = 2 * POWER_W * (moments[2] - moments[1] ** 2 / moments[0]) / kelvin
    assert limits.thermal_conductance_W_per_K(case) == approx(heat, rel=1e-8)


@pytest.mark.parametrize(("left", "right"), [(300.0, 200.0), (50.0, 300.0), (0.0, 80.0)])
def test_seebeck_at_a_finite_difference_stops_the_current(left, right):
    seebeck = limits.seebeck_V_per_K(mixed(7.0, left, right))
    stop = 1e3 * seebeck * (left - right)
    stopped, pushed = mixed(stop, left, right), mixed(stop + 1.0, left, right)
    assert abs(limits.current_A(stopped)) < 1e-10 * limits.current_A(pushed)
    conductance = limits.thermal_conductance_W_per_K(mixed(7.0, left, right))
    into_left, into_right = limits.contact_heat_W(stopped)
    assert into_right == approx(-into_left, rel=1e-8)
    assert conductance == approx(into_right / (left - right), rel=1e-8)
    assert conductance > 0.0


def test_the_linear_coefficients_are_the_limit_of_a_small_difference():
    assert limits.nearly_equal_temperatures(mixed(0.0, 301.49, 298.51))
    assert not limits.nearly_equal_temperatures(mixed(0.0, 301.51, 298.49))
    # The bias that stops the current moves the mean potential, an odd effect: both signs cancel it.
    for function in (limits.seebeck_V_per_K, limits.thermal_conductance_W_per_K):
        linear, warm, cold = (
            function(mixed(0.0, 300.0 + d / 2, 300.0 - d / 2)) for d in (0.0, 4.0, -4.0)
        )
        assert linear == approx((warm + cold) / 2, rel=2e-5)


def test_carriers_above_the_potential_make_seebeck_negative():
    rising = (
        "scattering: {points: [{position_nm: 9, transmission: {energy_meV: [-50, 50], value: %s}}]}"
    )
    assert limits.seebeck_V_per_K(scenario(extra=rising % "[0.1, 0.9]")) < 0.0
    assert limits.seebeck_V_per_K(scenario(extra=rising % "[0.9, 0.1]")) > 0.0


def test_no_bias_stops_a_current_without_partner():
    """States only above a contact at 0 K: the hot contact always wins."""
    modes = "{energy_meV: [1, 2], value: [0, 1]}"
    case = scenario(0.0, 30.0, 0.0, modes=modes)
    assert np.isnan(limits.seebeck_V_per_K(case))
    assert "Seebeck coefficient at I = 0" not in named(case)


def test_the_stopping_bias_may_be_reached_from_one_side():
    """The last of Newton's steps is too small to change the bias, and no other side is known."""
    seebeck = limits.seebeck_V_per_K(mixed(0.0, 300.0, 150.0, SUBBANDS))
    stop = 1e3 * seebeck * 150.0
    stopped, pushed = (mixed(bias, 300.0, 150.0, SUBBANDS) for bias in (stop, stop + 1.0))
    assert abs(limits.current_A(stopped)) < 1e-10 * limits.current_A(pushed)


def test_a_table_close_to_a_step_needs_few_energies():
    """Rounding of the energy makes T a staircase, which no halving of the axis resolves."""
    table = "{energy_meV: [10, 10.000000001], value: [1.0e-6, 1]}"
    points = f"{{points: [{{position_nm: 9, transmission: {table}}}]}}"
    case = limits.read(scenario(5.0, extra=f"scattering: {points}"))
    upper, lower = (
        _quad(lambda e: _fermi(e, 5.0, 300) - _fermi(e, 0, 300), *span)
        for span in ((10.0, 1200.0), (-1200.0, 10.0))
    )
    current = 2e-3 * constants.e**2 / constants.h * (upper + 1e-6 * lower)
    assert limits.current_A(case) == approx(current, rel=1e-9)
    (drive,) = case.drives.values()
    assert drive.energy_meV.size < 1e4


@pytest.mark.parametrize("bias", [0.0, 0.3])
def test_steep_transmission_converges(bias):
    """A table from 1e-6 to 1 in series with a long channel: the integrand turns in 1e-3 meV."""
    text = """
scattering:
  backscatter_path_nm: 1
  points:
    - {position_nm: 9, transmission: {energy_meV: [0.1, 0.4], value: [1.0e-6, 1]}}
"""
    case = scenario(bias, 1.0, extra=text)
    with mpmath.workdps(25):
        k = mpmath.mpf(constants.k) / mpmath.mpf(constants.e) * 1000

        def f(energy, mu):
            return 1 / (1 + mpmath.exp((energy - mu) / k))

        def integrand(energy):
            t = 1e-6 + (energy - mpmath.mpf("0.1")) / mpmath.mpf("0.3") * (1 - 1e-6)
            t = min(max(t, mpmath.mpf(1e-6)), mpmath.mpf(1))
            drive = f(energy, bias) - f(energy, 0) if bias else f(energy, 0) * f(-energy, 0) / k
            return drive / (1 + 500 + (1 - t) / t)

        edges = [-4, -2, -1, -0.5, 0, 0.1]
        edges += [0.1 + 10.0 ** (p / 2) for p in range(-12, -1)] + [0.4, 0.5, 1, 2, 4]
        total = float(mpmath.quad(integrand, sorted(edges)))
    scale = 2 * constants.e**2 / constants.h * (1e-3 if bias else 1.0)
    value = limits.current_A(case) if bias else limits.conductance_S(case)
    assert value == approx(scale * total, rel=1e-10)


# --- 0 K


LINEAR = """
scattering:
  points:
    - {position_nm: 9, transmission: {energy_meV: [-10, 10], value: [0.2, 0.6]}}
"""


@pytest.mark.parametrize("bias", [8.0, -8.0])
def test_zero_kelvin_is_exact(bias):
    """T = 0.4 + 0.02 E integrated by hand from 0 to the bias."""
    case = scenario(bias, 0.0, extra=LINEAR)
    number = 0.4 * bias + 0.01 * bias**2
    first = 0.2 * bias**2 + 0.02 * bias**3 / 3
    quantum = 2 * constants.e**2 / constants.h
    assert limits.current_A(case) == approx(1e-3 * quantum * number, rel=1e-13)
    assert limits.conductance_S(case) == approx(quantum * (0.4 + 0.02 * bias), rel=1e-13)
    left, right = limits.contact_heat_W(case)
    assert right == approx(1e-6 * quantum * first, rel=1e-13)
    assert left == approx(1e-6 * quantum * (bias * number - first), rel=1e-13)
    assert np.isnan(limits.seebeck_V_per_K(case))
    expected = named(case)
    assert not any("Seebeck" in name or "thermal" in name for name in expected)
    assert expected["transmission, series law"] == approx(number / bias, rel=1e-13)


def test_zero_kelvin_linear_response_is_the_transmission_at_the_potential():
    case = scenario(0.0, 0.0, extra=LINEAR)
    assert limits.mean_transmission(case) == approx(0.4, rel=1e-14)
    plus, minus = limits.profile(case, [5.0, 20.0])
    np.testing.assert_allclose([plus, minus], [[1, 0.4], [0.6, 0]], atol=1e-14)
    assert limits.contact_heat_W(case) == (0.0, 0.0)
    assert named(case)["transmission, series law"] == approx(0.4, rel=1e-14)


def test_one_cold_contact():
    """Constant T: I = G V whatever the temperatures, and heat (pi k T_L)^2/6 more to the right."""
    text = "scattering: {backscatter_path_nm: 500}"
    case = scenario(10.0, 300.0, 0.0, extra=text)
    half = constants.e**2 / constants.h
    assert limits.current_A(case) == approx(half * 10e-3, rel=1e-12)
    thermal = (np.pi * K_MEV * 300) ** 2 / 6
    assert limits.contact_heat_W(case)[1] == approx(1e-6 * half * (50 + thermal), rel=1e-11)
    assert "resistance, series law" not in named(case)
    assert named(case)["current"] > 0.0


# --- symmetry


@given(
    bias=st.floats(-60, 60).filter(lambda v: v == 0 or abs(v) > 1e-3),
    left=st.floats(1, 400),
    right=st.floats(1, 400),
    place=st.floats(1, 499),
    values=st.lists(st.floats(1e-3, 1), min_size=3, max_size=3),
    path=st.floats(10, 1e4),
)
def test_mirror_and_reversal(bias, left, right, place, values, path):
    """Seen from the other end: bias and temperatures exchanged, energies counted from mu_L."""

    def channel(bias, left, right, x, shift):
        nodes = [e - shift for e in (-20.0, 3.0, 25.0)]
        return scenario(
            bias,
            left,
            right,
            extra=f"""
scattering:
  backscatter_path_nm: {path!r}
  points:
    - {{position_nm: {x!r}, transmission: {{energy_meV: {nodes}, value: {values}}}}}
""",
        )

    one = channel(bias, left, right, place, 0.0)
    other = channel(-bias, right, left, 500.0 - place, bias)
    scale = 2e-3 * K_MEV * 800 * constants.e**2 / constants.h
    currents = limits.current_A(one), -limits.current_A(other)
    assert currents[0] == approx(currents[1], rel=1e-9, abs=1e-12 * scale)
    heats = limits.contact_heat_W(one), limits.contact_heat_W(other)[::-1]
    assert heats[0] == approx(heats[1], rel=1e-9, abs=1e-12 * K_MEV * 400 * scale)
    assert sum(heats[0]) == approx(currents[0] * bias * 1e-3, rel=1e-9, abs=1e-24)
    if bias and left == right:
        assert limits.resistance_ohm(one) == approx(limits.resistance_ohm(other), rel=1e-9)


@pytest.mark.parametrize("bias", [0.0, 35.0, -35.0])
@pytest.mark.parametrize("modes", ["1", SUBBANDS])
def test_parts_add_up_to_the_resistance(bias, modes, monkeypatch):
    monkeypatch.setattr(limits.listing, "MOST_LISTED", 20)
    case = mixed(bias, 200.0, modes=modes)
    rows = limits.limits_for(case)
    parts = [limit for limit in rows if limit.quantity == "breakdown.resistance_ohm"]
    total = sum(limit.expected for limit in parts)
    assert total == approx(limits.resistance_ohm(case), rel=1e-11)
    names = {limit.name for limit in parts}
    assert {"left contact barrier", "scatterer at 120 nm", "60 to 120 nm, phonons"} <= names
    assert {"250 to 300 nm", "300 to 350 nm", "50 to 60 nm", "350 to 420 nm, defects"} <= names
    assert "right contact barrier" not in names


# --- profiles and probes


@pytest.mark.parametrize("modes", ["1", SUBBANDS])
@pytest.mark.parametrize(("bias", "kelvin"), [(20.0, 100.0), (-20.0, 100.0), (0.0, 100.0)])
def test_profile_against_quad(bias, kelvin, modes):
    case = mixed(bias, kelvin, modes=modes)
    places = [0.0, 55.0, 200.0, 301.0, 450.0, 500.0]

    def drive(energy):
        m = _at(modes, energy) if modes != "1" else 1.0
        f = _fermi(energy, bias, kelvin)
        if bias == 0.0:
            return m * f * (1 - f) / (K_MEV * kelvin)
        return m * (f - _fermi(energy, 0.0, kelvin))

    breaks = (*ENTRIES, bias)
    modes_mean = _quad(drive, -500, 500, breaks) / (bias or 1.0)
    assert limits.mean_modes(case) == approx(modes_mean, rel=1e-9)
    plus, minus = limits.profile(case, places)
    for x, p, m in zip(places, plus, minus, strict=True):
        for side, value in ((0, p), (1, m)):
            total = _quad(
                lambda e, s=side, x=x: drive(e) * _kinetic(e, (x,))[1][0][s], -500, 500, breaks
            )
            assert value == approx(total / modes_mean, rel=1e-8, abs=1e-9)


def test_mean_modes_at_unequal_temperatures():
    """Averaged over the right contact's -dF/dE: M(0) where it is at 0 K."""
    modes = "{energy_meV: [-10, 0, 10], value: [2, 3, 7]}"
    assert limits.mean_modes(scenario(5.0, 30.0, 0.0, modes=modes)) == approx(3.0)


def test_probe_readings_and_four_point():
    text = "probes:\n" + "".join(
        f"  - {{position_nm: {x}, weight_right: {w}}}\n"
        for x, w in ((460, 0.5), (80, 0.9), (80, 0))
    )
    case = mixed(10.0, 300.0, probes=text)
    rows = [limit for limit in limits.limits_for(case) if limit.name.startswith("probe")]
    plus, minus = limits.profile(case, np.array([460.0, 80.0]))
    wanted = [(plus[0] + minus[0]) / 2, 0.9 * plus[1] + 0.1 * minus[1], minus[1]]
    assert [limit.expected for limit in rows] == approx(wanted, rel=1e-12)
    assert rows[0].quantity == "probes[0].potential_mV"
    pairs = [limit for limit in limits.limits_for(case) if limit.name.startswith("four-point")]
    resistances = [
        limits.four_point_resistance_ohm(wanted[a], wanted[b], limits.current_A(case))
        for a, b in ((0, 1), (0, 2), (1, 2))
    ]
    assert [limit.expected for limit in pairs] == approx(resistances, rel=1e-10)
    assert limits.probe_reading(3.0, 1.0) == 2.0


def test_probes_of_one_scatterer_measure_it_alone():
    """Symmetric probes on both sides: R_B (1-T)/T, without the contacts (Landauer 1970)."""
    text = """
scattering: {points: [{position_nm: 200, transmission: 0.2}]}
probes: [{position_nm: 100}, {position_nm: 300}]
"""
    for bias in (0.0, 5.0, -5.0):
        four = row(scenario(bias, extra=text), "four-point, 100 to 300 nm")
        assert four.expected == approx(4 * 12906.40372, rel=1e-9)


# --- two-step distribution, Wiedemann-Franz


def test_two_step_distribution_is_the_long_channel():
    case = scenario(15.0, 40.0, 25.0, extra="scattering: {backscatter_path_nm: 0.05}")
    energies = np.linspace(-20, 40, 61)
    x = np.array([50.0, 250.0, 410.0])
    left, right = _fermi(energies, 15.0, 40.0), _fermi(energies, 0.0, 25.0)
    for g in limits.response(case, x, energies):
        f = right[:, None] + (left - right)[:, None] * g
        wanted = limits.two_step_distribution(energies[:, None], x / 500, 15.0, 40.0, 25.0)
        np.testing.assert_allclose(f, wanted, atol=2e-4)


def test_two_step_temperature_holds_its_number_and_energy():
    for fraction, bias, left, right in ((0.3, 12.0, 20.0, 50.0), (0.5, -9.0, 0.0, 0.0)):

        def excess(energy, args=(fraction, bias, left, right)):
            step = 1.0 if energy < 0.0 else 0.0
            return float(limits.two_step_distribution(energy, *args)) - step

        breaks = (0.0, bias, *np.linspace(-40, 40, 17))
        number = _quad(excess, -300, 300, breaks)
        energy = _quad(lambda e, f=excess: e * f(e), -300, 300, breaks)
        kelvin = limits.two_step_temperature_K(fraction, bias, left, right)
        assert kelvin == approx(fermi.carrier_temperature(number, energy), rel=1e-8)
    # sqrt(3)/(2 pi) eV/k in the middle of a cold wire (Nagaev 1995)
    middle = limits.two_step_temperature_K(0.5, 10.0, 0.0, 0.0)
    assert middle == approx(np.sqrt(3) / (2 * np.pi) * 10.0 / K_MEV, rel=1e-12)
    assert limits.two_step_temperature_K(np.array([0.0, 1.0]), 5.0, 3.0, 4.0) == approx([3, 4])


@pytest.mark.parametrize(("left", "right"), [(300.0, 299.0), (300.0, 100.0), (30.0, 0.0)])
def test_wiedemann_franz_without_energy_dependence(left, right):
    """Exact also at a finite difference, with T the mean; heat from the contacts' own integrals."""
    case = scenario(0.0, left, right, extra="scattering: {backscatter_path_nm: 100}")
    heat = limits.contact_heat_W(case)[1] / (left - right)
    assert limits.thermal_conductance_W_per_K(case) == approx(heat, rel=1e-9)
    ratio = limits.wiedemann_franz_ratio(heat, limits.conductance_S(case), (left + right) / 2)
    assert ratio == approx(limits.LORENZ_NUMBER, rel=1e-9)
    assert limits.seebeck_V_per_K(case) == 0.0
    assert row(case, "Wiedemann-Franz ratio K/(G T)").holds == "exact"


def test_wiedemann_franz_is_approximate_with_energy_dependence():
    weak = scenario(0.0, 10.0, extra=LINEAR)
    assert row(weak, "Wiedemann-Franz ratio K/(G T)").holds == "approximate"
    ratio = limits.wiedemann_franz_ratio(
        limits.thermal_conductance_W_per_K(weak), limits.conductance_S(weak), 10.0
    )
    assert ratio == approx(limits.LORENZ_NUMBER, rel=2e-2)
    assert ratio != approx(limits.LORENZ_NUMBER, rel=1e-5)
    biased = scenario(5.0, 10.0, extra=LINEAR)
    assert "Wiedemann-Franz ratio K/(G T)" not in named(biased)


# --- which limits are listed


def test_long_and_transparent_channels_have_an_approximate_limit():
    long_name = "resistance of a long channel, contacts left out"
    free_name = "resistance without any scattering"
    for path, listed in ((25.0, [long_name]), (60.0, []), (1e5, [free_name])):
        case = scenario(extra=f"scattering: {{mean_free_path_nm: {path / 2}}}")
        approximate = [x for x in limits.limits_for(case) if x.holds == "approximate"]
        assert [limit.name for limit in approximate] == listed
        if listed:
            exact = row(case, "resistance, series law").expected
            assert approximate[0].expected == approx(exact, rel=0.06)
    assert row(scenario(extra="scattering: {mean_free_path_nm: 12.5}"), long_name).expected == (
        approx(20 * 12906.40372, rel=1e-9)
    )


def test_a_ballistic_channel_lists_no_scattering():
    rows = limits.limits_for(scenario(1.0, 4.0))
    assert {limit.holds for limit in rows} == {"exact"}
    assert {limit.name for limit in rows if limit.quantity.startswith("breakdown")} == {
        "left interface, half of ballistic",
        "right interface, half of ballistic",
    }
    assert all(limit.source for limit in rows)


def test_bias_zero_and_unequal_temperatures():
    zero = named(mixed(0.0, 300.0))
    assert not {"current", "heat in the left contact"} & zero.keys()
    assert not any(name.startswith("heat current") for name in zero)
    unequal = mixed(0.0, 300.0, 200.0)
    rows = named(unequal)
    assert rows["heat current into the right contact"] == limits.contact_heat_W(unequal)[1]
    assert rows["heat current out of the left contact"] == -limits.contact_heat_W(unequal)[0]
    assert "transmission, series law" in rows
    assert not any("scatterer" in name for name in rows)
    biased = named(mixed(5.0, 300.0, 200.0))
    assert {"current", "heat in the left contact", "conductance dI/dV"} <= biased.keys()
    assert "transmission, series law" not in biased


def test_many_points_are_summed():
    places = np.linspace(10, 490, 40)
    points = ", ".join(
        f"{{position_nm: {x}, transmission: {0.5 if i == 7 else 0.9}}}"
        for i, x in enumerate(places)
    )
    case = scenario(3.0, extra=f"scattering: {{backscatter_path_nm: 900, points: [{points}]}}")
    rows = named(case)
    ballistic = rows["ballistic resistance"]
    assert rows["40 point scatterers, sum"] == approx(ballistic * (39 / 9 + 1))
    assert rows[f"scatterer at {places[7]:g} nm, the largest"] == approx(ballistic)
    assert rows["41 pieces between, sum"] == approx(ballistic * 500 / 900)
    assert sum("scatterer" in name for name in rows) == 2


def test_undrawn_scatterers_are_refused():
    case = scenario(extra="scattering: {random: [{count: 3, transmission: 0.5}]}")
    with pytest.raises(ValueError, match="drawn"):
        limits.transmission(case, 0.0)


# --- comparison with a run


def _run(**numbers):
    """A stand-in for a Result: None where nothing is given."""
    names = ("transmission", "current_A", "conductance_S", "resistance_ohm", "breakdown", "heat_W")
    thermal = SimpleNamespace(conductance_W_per_K=None, seebeck_V_per_K=None)
    given = dict.fromkeys((*names, "four_point")) | {
        "ballistic_resistance_ohm": 12906.403729652257,
        "probes": (),
        "thermal": thermal,
    }
    return SimpleNamespace(**(given | numbers))


def _compared(case, run):
    return {found.name: found for found in limits.compare(limits.limits_for(case), run)}


def test_compare_measures_in_standard_errors():
    text = """
scattering: {points: [{position_nm: 200, transmission: 0.2}]}
probes: [{position_nm: 100}, {position_nm: 300}]
"""
    case = scenario(10.0, extra=text)
    ballistic = 12906.403729652257
    parts = (
        Part("left interface", "interface", Estimate(ballistic / 2, 0.0), position_nm=0.0),
        Part("scatterer 1", "point", Estimate(4 * ballistic - 30, 20.0), position_nm=200.0),
    )
    run = _run(
        transmission=Estimate(0.23, 0.02),
        conductance_S=Estimate(0.2 / ballistic, None),
        resistance_ohm=None,
        breakdown=parts,
        probes=(ProbeReading(100.0, Estimate(9.2, 0.1)), ProbeReading(300.0, Estimate(0.8, 0.1))),
        four_point=(FourPoint(100.0, 300.0, Estimate(4 * ballistic + 1, 1.0)),),
        thermal=SimpleNamespace(
            conductance_W_per_K=Estimate(0.2 / ballistic * limits.LORENZ_NUMBER * 300, 0.0),
            seebeck_V_per_K=Estimate(-0.0, 0.0),
        ),
    )
    rows = _compared(case, run)
    assert rows["transmission, series law"].z == approx(1.5)
    assert rows["ballistic resistance"].z == 0.0
    assert rows["left interface, half of ballistic"].z == 0.0
    assert rows["right interface, half of ballistic"].simulated is None
    assert rows["scatterer at 200 nm"].z == approx(-1.5)
    assert rows["probe at 100 nm"].z == approx(2.0)
    assert rows["probe at 300 nm"].z == approx(-2.0)
    assert rows["four-point, 100 to 300 nm"].z == approx(1.0)
    assert rows["Seebeck coefficient at I = 0"].z == 0.0
    assert rows["conductance dI/dV"].simulated == 0.2 / ballistic
    missing = rows["conductance dI/dV"], rows["resistance, series law"], rows["current"]
    assert [found.z for found in missing] == [None, None, None]
    assert rows["Wiedemann-Franz ratio K/(G T)"].error is None


def test_compare_without_error_shows_only_agreement():
    limit = row(scenario(10.0), "current")
    exact = limits.compare([limit], _run(current_A=Estimate(limit.expected, 0.0)))[0]
    assert (exact.z, exact.error, exact.holds) == (0.0, 0.0, "exact")
    wrong = limits.compare([limit], _run(current_A=Estimate(1.01 * limit.expected, 0.0)))[0]
    assert wrong.z is None
    for difference, z in ((5e-9, 0.0), (2e-8, None)):
        near = Estimate((1 + difference) * limit.expected, 0.0)
        assert limits.compare([limit], _run(current_A=near))[0].z == z
    shifted = replace(limit, expected=0.0, scale=1e-6)
    rounding = limits.compare([shifted], _run(current_A=Estimate(1e-20, 1e-21)))[0]
    assert rounding.z == 0.0


def test_wiedemann_franz_adds_relative_errors():
    case = scenario()
    g, kappa = 7.748e-5, 7.748e-5 * limits.LORENZ_NUMBER * 300
    run = _run(
        conductance_S=Estimate(g, 0.01 * g),
        thermal=SimpleNamespace(
            conductance_W_per_K=Estimate(1.06 * kappa, 0.02 * 1.06 * kappa), seebeck_V_per_K=None
        ),
    )
    found = _compared(case, run)["Wiedemann-Franz ratio K/(G T)"]
    assert found.z == approx(0.06 / (1.06 * 0.03))


def test_the_error_of_a_sum_of_parts_is_the_smaller_bound():
    points = ", ".join(f"{{position_nm: {x}, transmission: 0.9}}" for x in range(10, 210, 10))
    case = scenario(extra=f"scattering: {{points: [{points}]}}")
    r = 12906.403729652257
    parts = [
        Part("interface", "interface", Estimate(r / 2, 0.0), position_nm=x) for x in (0.0, 500.0)
    ]
    parts += [
        Part("scatterer", "point", Estimate(r / 9, 10.0), position_nm=float(x))
        for x in range(10, 210, 10)
    ]
    total = r * (1 + 20 / 9)
    tight = _run(breakdown=tuple(parts), resistance_ohm=Estimate(total, 50.0))
    found = _compared(case, tight)["20 point scatterers, sum"]
    assert (found.simulated, found.error) == approx((r * 20 / 9, 50.0))
    loose = _run(breakdown=tuple(parts), resistance_ohm=Estimate(total, 500.0))
    assert _compared(case, loose)["20 point scatterers, sum"].error == approx(200.0)
    alone = _run(breakdown=tuple(parts))
    assert _compared(case, alone)["20 point scatterers, sum"].error == approx(200.0)


def test_pieces_are_found_by_their_mechanism():
    case = scenario(
        extra="""
scattering:
  backscatter_path_nm: [{name: a, backscatter_path_nm: 500}, {name: b, backscatter_path_nm: 250}]
"""
    )
    r = 12906.403729652257
    parts = tuple(
        Part(name, "piece", Estimate(value, 1.0), from_nm=0.0, to_nm=500.0, mechanism=name)
        for name, value in (("b", 2 * r + 3), ("a", r - 2))
    )
    rows = _compared(case, _run(breakdown=parts))
    assert rows["0 to 500 nm, a"].z == approx(-2.0, rel=1e-6)
    assert rows["0 to 500 nm, b"].z == approx(3.0, rel=1e-6)
