"""Closed forms of relaxation against a deterministic solution of the kinetic equation.

Independent of the package: tests/reference_kinetic.py, scipy's quadrature, linear solves and
boundary value solver. Scenarios with relaxation are refused at the door: these enter behind it.
"""

from dataclasses import replace
from itertools import pairwise
from types import SimpleNamespace

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import constants, integrate
from scipy.special import expit

from carriersim import limits
from carriersim.engine.problem import build
from carriersim.limits import two_flux
from carriersim.limits.listing_relaxation import middle_cell_nm
from carriersim.result import Estimate, Heat, Part, ProbeReading
from carriersim.scenario import read_text
from tests import reference_kinetic as reference
from tests.reference_kinetic import BOLTZMANN, Bath, Carriers, Case, Phonon, Probe, Scatterer

POWER_W = 2 * 1e-6 * constants.e**2 / constants.h  # of meV^2, one mode with spin
BALLISTIC = constants.h / (2 * constants.e**2)


def approx(expected, rel=1e-6, abs=0.0):
    """pytest.approx without its absolute tolerance of 1e-12, which hides errors of A and W."""
    return pytest.approx(expected, rel=rel, abs=abs)


def scenario(
    mechanisms="",
    scattering="{}",
    probes="[]",
    bias=40.0,
    left="{}",
    right="{}",
    kelvin=20.0,
    bath=None,
    length=200,
    modes=1,
    cells=50,
):
    bath_line = "" if bath is None else f"bath_temperature_K: {bath}, "
    return read_text(f"""
channel: {{length_nm: {length}, modes: {modes}}}
contacts: {{bias_mV: {bias}, temperature_K: {kelvin}, left: {left}, right: {right}}}
scattering: {scattering}
relaxation: {{{bath_line}mechanisms: [{mechanisms}]}}
probes: {probes}
simulation: {{cells: {cells}}}
""")


KEPT, RANDOM = "{kind: bath, path_nm: 60, direction: kept}", "direction: randomised}"
EVERYTHING = f"""
  {{kind: bath, path_nm: 100, direction: kept}}, {{kind: bath, path_nm: 300, {RANDOM},
  {{kind: bath, path_nm: 300, {RANDOM}, {{kind: carriers, path_nm: 70}},
  {{kind: carriers, path_nm: 250, {RANDOM}"""


def mixed(bias=60.0, left_K=30.0, right_K=45.0, bath=25.0, path=200, modes=1):
    """All mechanisms, scatterers, a section, a barrier and probes together."""
    return scenario(
        EVERYTHING,
        f"""{{backscatter_path_nm: {path}, points: [{{position_nm: 80, transmission: 0.3}}],
            sections: [{{from_nm: 120, to_nm: 180, backscatter_path_nm: 60}}]}}""",
        """[{position_nm: 230}, {position_nm: 220, coupling: 0.5, temperature_K: 60},
            {position_nm: 150, coupling: 0.4, weight_right: 0.3}]""",
        bias,
        f"{{temperature_K: {left_K}, transmission: 0.7}}",
        f"{{temperature_K: {right_K}}}",
        bath=bath,
        length=300,
        modes=modes,
    )


@pytest.fixture(scope="module")
def mixed_solution():
    return reference.solve(
        Case(
            300,
            60,
            30,
            45,
            25,
            backscatter_path=200,
            sections=(reference.Section(120, 180, 60),),
            scatterers=(Scatterer(80, 0.3),),
            interface_left=0.7,
            mechanisms=(Bath(100), Bath(150, True), Carriers(70), Carriers(250, True)),
            # weight 0.3: 2 * 0.3 * 0.4 of the right movers, 2 * 0.7 * 0.4 of the left movers
            probes=(Probe(150, 0.24, 0.56), Probe(220, 0.5, temperature=60)),
        )
    )


def named(case):
    return {limit.name: limit.expected for limit in limits.limits_for(case)}


def fermi(energy, mu, kelvin):
    return expit((mu - energy) / (BOLTZMANN * kelvin))


# --- carriers


@pytest.mark.parametrize("path", [8.0, 150.0, 5000.0])
@pytest.mark.parametrize("randomised", [False, True])
def test_hot_carriers_for_any_path_and_lattice(path, randomised):
    """Exact at every x whatever the path and the lattice: Nagaev 1995; Kozub & Rudin 1995."""
    bias, kelvin = 40.0, 20.0
    solution = reference.solve(
        Case(
            200,
            bias,
            kelvin,
            lattice_temperature=12.0,
            backscatter_path=100,
            scatterers=(Scatterer(70, 0.4),),
            mechanisms=(Carriers(path, randomised),),
        )
    )
    added = 1 / path if randomised else 0
    assert 1 / solution.transmission == approx(1 + 2 + 100 * added + 1.5, rel=1e-7)
    for mu, hot in ((solution.mu_plus, solution.T_plus), (solution.mu_minus, solution.T_minus)):
        expected = limits.hot_carrier_temperature_K(mu / bias, bias, kelvin)
        np.testing.assert_allclose(hot, expected, rtol=1e-6)
        assert np.max(np.abs(hot / limits.hot_carrier_temperature_K(mu / bias, 41, kelvin) - 1)) > (
            0.015
        )
    direction = "randomised" if randomised else "kept"
    case = scenario(
        f"{{kind: carriers, path_nm: {path}, direction: {direction}}}",
        "{backscatter_path_nm: 100, points: [{position_nm: 70, transmission: 0.4}]}",
        bath=12.0,
    )
    x = np.array([3.0, 69.0, 71.0, 190.0])
    potentials = limits.profile(limits.number_transport(case), x)
    kelvins = limits.carrier_temperatures_K(case, x)
    for side, mu, found in zip(("plus", "minus"), potentials, kelvins, strict=True):
        assert mu == approx(solution.at(f"mu_{side}", x), rel=1e-6)
        assert found == approx(limits.hot_carrier_temperature_K(mu / bias, bias, kelvin), rel=1e-12)


def test_hot_carriers_in_the_middle_of_a_long_cold_wire():
    """sqrt(3)/(2 pi) eV/k: Nagaev 1995."""
    middle = limits.hot_carrier_temperature_K(0.5, 10.0, 0.0)
    assert middle == approx(np.sqrt(3) / (2 * np.pi) * 10 / BOLTZMANN, rel=1e-12)
    ends = limits.hot_carrier_temperature_K(np.array([0.0, 1.0]), 10.0, 7.0)
    assert ends == approx([7.0, 7.0], rel=1e-12)


# --- bath


ONE = {"place_nm": 50.0, "transmission": 0.3, "path_nm": 60.0, "bias_mV": 40.0}


@pytest.fixture(scope="module")
def behind_one():
    case = Case(200, 40, 20, scatterers=(Scatterer(50, 0.3),), mechanisms=(Bath(60),))
    return reference.solve(replace(case, refinement=2))


def test_occupation_behind_one_scatterer(behind_one):
    """From the kinetic equation; both directions on both sides, and what leaves the scatterer."""
    for x in (1.0, 30.0, 49.999, 50.001, 90.0, 199.0):
        plus, minus = limits.occupation_beside_scatterer(
            behind_one.energy, x, temperature_K=20.0, **ONE
        )
        np.testing.assert_allclose(plus, behind_one.at("f_plus", x), atol=2e-6)
        np.testing.assert_allclose(minus, behind_one.at("f_minus", x), atol=2e-6)
    energy = np.array([[5.0], [20.0], [33.0]])
    x = np.array([49.0, 50.0, 51.0])
    plus, minus = limits.occupation_beside_scatterer(energy, x, temperature_K=20.0, **ONE)
    assert plus.shape == minus.shape == (3, 3)
    left, right = fermi(energy[:, 0], 40, 20), fermi(energy[:, 0], 0, 20)
    np.testing.assert_allclose(plus[:, 0], left, rtol=1e-12)
    np.testing.assert_allclose(plus[:, 1], 0.3 * left + 0.7 * right, rtol=1e-12)
    np.testing.assert_allclose(minus[:, 1], 0.7 * left + 0.3 * right, rtol=1e-12)
    np.testing.assert_allclose(minus[:, 2], right, atol=1e-15)
    off = ONE | {"transmission": 0.306}
    wrong, _ = limits.occupation_beside_scatterer(energy, 51.0, temperature_K=20.0, **off)
    assert np.max(np.abs(wrong[:, 0] - plus[:, 2])) > 2e-3


def test_heat_of_one_scatterer(behind_one):
    """Against the solution, and against the energy that the closed-form occupation carries."""
    x = np.array([5.0, 45.0, 55.0, 180.0])
    density = limits.lattice_power_beside_scatterer_W_per_nm(x, **ONE)
    assert density == approx(POWER_W * behind_one.lattice_density(x), rel=1e-5)
    left, lattice, right = limits.heat_of_one_scatterer_W(200.0, **ONE)
    assert lattice == approx(POWER_W * behind_one.lattice, rel=1e-6)
    assert left == approx(POWER_W * behind_one.heat_left, rel=1e-6)
    assert right == approx(POWER_W * behind_one.heat_right, rel=1e-6)
    assert left + lattice + right == approx(POWER_W * 0.3 * 40**2, rel=1e-12)
    assert lattice != approx(limits.heat_of_one_scatterer_W(200.0, **(ONE | {"path_nm": 61.2}))[1])
    total = sum(
        integrate.quad(
            lambda place: limits.lattice_power_beside_scatterer_W_per_nm(place, **ONE), low, high
        )[0]
        for low, high in ((0, 50), (50, 200))
    )
    assert lattice == approx(total, rel=1e-10)

    def carried(energy):
        plus, minus = limits.occupation_beside_scatterer(energy, 200.0, temperature_K=20.0, **ONE)
        return float(energy * (plus - minus))

    pieces = pairwise((-80.0, 0.0, 12.0, 40.0, 120.0))
    energy_current = sum(integrate.quad(carried, a, b, epsabs=1e-10)[0] for a, b in pieces)
    assert right == approx(POWER_W * energy_current, rel=1e-8)


@pytest.mark.parametrize("modes", [1, 3.5])
def test_one_scatterer_is_a_case_of_the_energy_balance(modes):
    case = scenario(KEPT, "{points: [{position_nm: 50, transmission: 0.3}]}", modes=modes)
    expected = limits.heat_of_one_scatterer_W(200.0, modes=modes, **ONE)
    balance = limits.heat_W(case)
    assert (balance.left_contact, balance.lattice, balance.right_contact) == approx(expected, 1e-12)
    x = np.array([[10.0, 49.0], [60.0, 199.0]])
    density = limits.lattice_power_beside_scatterer_W_per_nm(x, modes=modes, **ONE)
    assert limits.lattice_power_W_per_nm(case, x) == approx(density, rel=1e-12)
    rows = named(case)
    for name, heat in zip(("left contact", "lattice", "right contact"), expected, strict=True):
        assert rows[f"heat in the {name}"] == approx(heat, rel=1e-12)


# --- number transport: randomised directions, probes


def test_randomised_relaxation_is_backscattering_of_twice_the_path():
    """1/lam + 1/(2 path), also beside points, sections and contact barriers (Datta 1995)."""
    assert limits.randomised_backscatter_path_nm(35.0) == 70.0
    case = scenario(
        f"{{kind: bath, path_nm: 90, {RANDOM}, {{kind: carriers, path_nm: 50, {RANDOM}, {KEPT}",
        """{backscatter_path_nm: 150, points: [{position_nm: 120, transmission: 0.4}],
            sections: [{from_nm: 20, to_nm: 60}]}""",
        left="{transmission: 0.8}",
    )
    solution = reference.solve(
        Case(
            200,
            40,
            20,
            backscatter_path=150,
            sections=(reference.Section(20, 60, np.inf),),
            scatterers=(Scatterer(120, 0.4),),
            interface_left=0.8,
            mechanisms=(Bath(90, True), Carriers(50, True), Bath(60)),
        )
    )
    series = 1 + 160 / 150 + 200 / 180 + 200 / 100 + 0.6 / 0.4 + 0.2 / 0.8
    rows = named(case)
    name = "resistance, series law with randomising relaxation"
    assert rows[name] == approx(series * BALLISTIC, rel=1e-12)
    assert 1 / solution.transmission == approx(series, rel=1e-8)
    off = scenario(f"{{kind: bath, path_nm: 91.8, {RANDOM}", length=2000)
    right = scenario(f"{{kind: bath, path_nm: 90, {RANDOM}", length=2000)
    assert named(off)[name] == approx(named(right)[name] / 1.0184, rel=1e-3)
    x = np.array([10.0, 40.0, 119.0, 121.0, 199.0])
    profile = limits.profile(limits.number_transport(case), x)
    assert profile[0] == approx(solution.at("mu_plus", x), rel=1e-7)
    assert profile[1] == approx(solution.at("mu_minus", x), rel=1e-7)


@pytest.mark.parametrize("weight", [0.5, 0.3, 0.0, 1.0])
@pytest.mark.parametrize("coupling", [1e-3, 0.4, 1.0])
def test_one_probe_in_a_clean_channel(coupling, weight):
    """Transmission, reading and heat: Buttiker 1986, 1988."""
    a, b = limits.probe_couplings(coupling, weight)
    assert (a, b) == approx(
        (min(1, 2 * weight * coupling), min(1, 2 * (1 - weight) * coupling)), rel=1e-12
    )
    solution = reference.solve(Case(100, 40, 20, probes=(Probe(30, float(a), float(b)),)))
    assert limits.probe_transmission(coupling, weight) == approx(solution.transmission, rel=1e-8)
    reading = limits.coupled_probe_reading(40.0, 0.0, coupling, weight)
    assert reading == approx(solution.probe_mu[0], rel=1e-6, abs=1e-6)
    heat = limits.probe_heat_W(coupling, 40.0, weight)
    assert heat == approx(POWER_W * solution.probe_heat[0], rel=1e-6, abs=1e-6 * POWER_W)
    case = scenario(probes=f"[{{position_nm: 30, coupling: {coupling}, weight_right: {weight}}}]")
    assert limits.heat_W(case).probes == approx((heat,), rel=1e-9, abs=1e-20)
    rows = named(case)
    assert rows["transmission, series law with coupled probes"] == approx(solution.transmission)
    assert rows["probe at 30 nm"] == approx(reading, rel=1e-12, abs=1e-12)


def test_what_the_docstrings_say_of_one_probe():
    assert limits.probe_transmission(0.6) == approx(0.7, rel=1e-14)
    assert limits.probe_transmission(0.0) == 1.0
    total = POWER_W * limits.probe_transmission(1.0) * 40**2
    assert limits.probe_heat_W(1.0, 40.0) == approx(total / 2, rel=1e-12)
    wrong = limits.probe_transmission(0.612)
    assert abs(wrong / limits.probe_transmission(0.6) - 1) > 5e-3


@given(
    st.lists(
        st.tuples(st.floats(0.01, 1), st.floats(0, 1), st.floats(0, 3)), min_size=1, max_size=6
    ),
    st.floats(0, 3),
)
def test_probes_in_series_against_their_linear_equations(probes, first):
    """All potentials between resistors and floating probes as one linear system (Buttiker 1986)."""
    resistors = np.array([first, *(r for _, _, r in probes)])
    couplings = [limits.probe_couplings(coupling, weight) for coupling, weight, _ in probes]
    # Unknowns: mu+ and mu- at the left and the right of each resistor, then the probes' potentials.
    n = 4 * len(resistors)
    rows, right = [], []

    def equation(terms, value=0.0):
        rows.append(np.zeros(n + len(probes)))
        rows[-1][list(terms)] = list(terms.values())
        right.append(value)

    for i, r in enumerate(resistors):
        plus, minus, plus_after, minus_after = 4 * i + np.arange(4)
        equation({plus: 1, minus: -1, plus_after: -1, minus_after: 1})
        equation({plus: 0.5 - r, minus: 0.5 + r, plus_after: -0.5, minus_after: -0.5})
    for i, (a, b) in enumerate(couplings):
        plus, minus, plus_after, minus_after, own = (
            4 * i + 2,
            4 * i + 3,
            4 * i + 4,
            4 * i + 5,
            n + i,
        )
        equation({plus_after: 1, plus: a - 1, own: -a})
        equation({minus: 1, minus_after: b - 1, own: -b})
        equation({plus: a, minus_after: b, own: -a - b})
    equation({0: 1}, 1.0)
    equation({n - 1: 1})
    found = np.linalg.solve(np.array(rows), right)
    of_probes = limits.point_resistance(limits.probe_transmission(*np.array(probes).T[:2]))
    total = limits.series_transmission(np.append(resistors, of_probes))
    assert found[0] - found[1] == approx(total, rel=1e-9)


def test_probe_cut_off_at_full_absorption_still_keeps_equilibrium():
    """Both contacts full: what it emits to the right is what it took there, a of a + b."""
    a, b = limits.probe_couplings(0.9, 0.8)
    assert (a, b) == approx((1.0, 0.36), rel=1e-12)
    forward = (1 - a) + a * a / (a + b)
    backward = (1 - b) + b * b / (a + b)
    assert forward == approx(backward, rel=1e-14)
    assert limits.probe_transmission(0.9, 0.8) == approx(forward, rel=1e-14)


# --- energy transport


def test_two_flux_stretch_against_a_boundary_value_solver():
    c, k, q, length = 0.013, 0.004, 0.7, 120.0

    def slopes(x, v):
        return np.array([c * (v[1] - v[0]) - k * v[0] + q, -c * (v[0] - v[1]) + k * v[1] - q])

    solved = integrate.solve_bvp(
        slopes,
        lambda left, right: np.array([left[0] - 5.0, right[1] - 2.0]),
        np.linspace(0, length, 60),
        np.zeros((2, 60)),
        tol=1e-9,
    )
    found = two_flux.stretches(np.array([length]), np.array([c]), k, np.array([q]))
    through, _, back, source, _ = (column[0] for column in found)
    assert through * 5 + back * 2 + source == approx(solved.y[0, -1], rel=1e-8)
    assert through * 2 + back * 5 + source == approx(solved.y[1, 0], rel=1e-8)


def test_two_flux_stretches_at_their_ends():
    lengths = np.array([1e-9, 1.0, 1e9])
    through, _, back, source, _ = two_flux.stretches(
        lengths, np.full(3, 0.5), 0.0, np.ones(3)
    )  # without loss
    np.testing.assert_allclose(through, 1 / (1 + 0.5 * lengths), rtol=1e-6)
    np.testing.assert_allclose(through + back, 1.0, rtol=1e-12)
    np.testing.assert_allclose(source, lengths, rtol=1e-12)
    small, none = (two_flux.stretches(lengths, np.full(3, 0.5), k, np.ones(3)) for k in (1e-26, 0))
    np.testing.assert_allclose(small, none, rtol=1e-6, atol=1e-13)
    clear = two_flux.stretches(lengths, np.zeros(3), 0.2, np.ones(3))
    np.testing.assert_allclose(clear.through_right, np.exp(-0.2 * lengths), rtol=1e-12, atol=1e-16)
    np.testing.assert_allclose(clear.back, 0.0, atol=1e-16)


def test_everything_together(mixed_solution):
    """Currents, heats, temperatures and power along x, all temperatures different."""
    case, solution = mixed(), mixed_solution
    conductor = limits.number_transport(case)
    assert conductor.transmission(0.0) == approx(solution.transmission, rel=1e-8)
    balance = limits.heat_W(case)
    expected = POWER_W * np.array([solution.heat_left, solution.heat_right, solution.lattice])
    np.testing.assert_allclose(balance[:3], expected, rtol=1e-6)
    assert balance.probes[0] == 0.0
    taken = POWER_W * solution.probe_heat
    assert balance.probes[1:] == approx(tuple(taken[::-1]), rel=1e-6)
    power = limits.current_A(conductor) * 60e-3
    assert sum(balance[:3]) + sum(balance.probes) == approx(power, rel=1e-12)
    x = np.array([2.0, 79.0, 81.0, 121.0, 149.0, 151.0, 219.0, 221.0, 299.0])
    plus, minus = limits.carrier_temperatures_K(case, x)
    assert plus == approx(solution.at("T_plus", x), rel=1e-5)
    assert minus == approx(solution.at("T_minus", x), rel=1e-5)
    density = POWER_W * solution.lattice_density(x)
    assert limits.lattice_power_W_per_nm(case, x) == approx(density, rel=1e-5)
    assert [named(case)[f"probe at {place} nm"] for place in (150, 220)] == approx(
        solution.probe_mu, rel=1e-7
    )
    # 2 % more backscattering shows in every one of these.
    wrong = limits.heat_W(mixed(path=196))
    assert np.all(np.abs(np.array(wrong[:3]) / balance[:3] - 1) > 5e-4)
    assert not np.allclose(limits.carrier_temperatures_K(mixed(path=196), x)[0], plus, rtol=1e-4)


def test_local_balance_of_heat_and_bath_in_a_long_wire():
    """T^2 - T_b^2 = (3/pi^2) (d mu/dx / k)^2 lam path far from the contacts (Nagaev 1995)."""
    case = scenario(KEPT, "{backscatter_path_nm: 30}", length=4000, bias=400.0)
    field = 400 / (1 + 4000 / 30) / 30
    expected = np.sqrt(20**2 + 3 / np.pi**2 * (field / BOLTZMANN) ** 2 * 30 * 60)
    for found in limits.carrier_temperatures_K(case, np.array([1500.0, 2000.0])):
        assert found == approx(np.full(2, expected), rel=1e-9)


def test_reversing_the_bias_mirrors_the_heat():
    one = limits.heat_W(scenario(EVERYTHING, "{points: [{position_nm: 60, transmission: 0.4}]}"))
    other = limits.heat_W(
        scenario(EVERYTHING, "{points: [{position_nm: 140, transmission: 0.4}]}", bias=-40.0)
    )
    assert other.lattice == approx(one.lattice, rel=1e-12)
    assert other[:2] == approx(one[1::-1], rel=1e-12)


def test_places_and_scenarios_that_are_refused():
    with pytest.raises(ValueError, match="outside the channel, 0 to 300 nm"):
        limits.carrier_temperatures_K(mixed(), [10.0, 301.0])
    table = "{backscatter_path_nm: {energy_meV: [0, 10], value: [50, 60]}}"
    phonon = "{kind: optical_phonon, path_nm: 10, energy_meV: 160}"
    for case in (scenario(KEPT, table), scenario(phonon)):
        with pytest.raises(ValueError, match="without tables of energy and phonons"):
            limits.heat_W(case)


# --- saturation current


def phonons(bias=400.0, path=2.0, length=100, kelvin=40.0, more="", **others):
    mechanisms = f"{{kind: optical_phonon, path_nm: {path}, energy_meV: 160}}{more}"
    return scenario(mechanisms, bias=bias, length=length, kelvin=kelvin, **others)


SATURATED = "saturation current at the phonon energy"


def test_saturation_current_of_four_channels():
    """25 uA: Yao, Kane & Dekker 2000."""
    assert limits.saturation_current_A(160.0, modes=2) == approx(24.8e-6, rel=1e-3)
    assert limits.saturation_current_A(160.0) == approx(2 * constants.e**2 / constants.h * 0.16)


@pytest.mark.parametrize(
    ("bias", "paths", "kelvin", "excess"),
    [(400.0, 25, 40.0, 0.012), (400.0, 50, 40.0, 1.5e-4), (800.0, 25, 40.0, 0.13)],
)
def test_saturation_current_is_approached_from_above(bias, paths, kelvin, excess):
    solution = reference.solve(Case(2.0 * paths, bias, kelvin, mechanisms=(Phonon(2, 160),)))
    assert solution.current / 160 - 1 == approx(excess, rel=0.05)


@pytest.mark.parametrize(
    ("bias", "length", "kelvin"),
    [(400.0, 50, 74.0), (-400.0, 50, 30.0), (800.0, 100, 40.0), (186.0, 60, 74.0)],
)
def test_where_it_is_listed_the_saturation_current_holds_to_two_percent(bias, length, kelvin):
    case = phonons(bias, length=length, kelvin=kelvin)
    (row,) = [limit for limit in limits.limits_for(case) if limit.name == SATURATED]
    assert row.holds == "approximate"
    # Contacts exchanged: the solver and the row reverse the current alike.
    solution = reference.solve(Case(length, bias, kelvin, mechanisms=(Phonon(2, 160),)))
    current_A = 2 * 1e-3 * constants.e**2 / constants.h * solution.current
    assert row.expected == approx(current_A, rel=0.02)
    assert row.expected != approx(current_A, rel=1e-9)


@pytest.mark.parametrize(
    "case",
    [
        {"bias": 150.0},
        {"bias": 0.0},
        {"bias": 800.0, "length": 50},
        {"path": 5.0},
        {"kelvin": 77.0},
        {"bath": 300.0},
        {"scattering": "{backscatter_path_nm: 300}"},
        {"scattering": "{points: [{position_nm: 20, transmission: 0.9}]}"},
        {"left": "{transmission: 0.9}"},
        {"probes": "[{position_nm: 20, coupling: 0.1}]"},
        {"more": ", " + KEPT},
    ],
)
def test_else_phonons_have_the_ballistic_resistance_only(case):
    rows = limits.limits_for(phonons(**case))
    assert [limit.name for limit in rows] == ["ballistic resistance"]
    assert [limit.name for limit in limits.limits_for(phonons())] == [
        "ballistic resistance",
        SATURATED,
    ]


# --- rows


@pytest.mark.parametrize("bias", [60.0, -60.0, 0.0])
def test_parts_add_up_to_the_resistance(bias, monkeypatch):
    monkeypatch.setattr(limits.listing, "MOST_LISTED", 30)
    case = mixed(bias, 30.0, 30.0, 30.0)
    rows = limits.limits_for(case)
    parts = {x.name: x.expected for x in rows if x.quantity == "breakdown.resistance_ohm"}
    whole = "resistance, series law with randomising relaxation and coupled probes"
    total = named(case)[whole]
    assert sum(parts.values()) == approx(total, rel=1e-12)
    assert parts["coupled probe at 220 nm"] == approx(BALLISTIC * 0.25 / 0.75, rel=1e-12)
    assert parts["80 to 120 nm, elastic"] == approx(BALLISTIC * 40 / 200, rel=1e-12)
    assert parts["80 to 120 nm, bath"] == approx(BALLISTIC * 40 / 300, rel=1e-12)
    assert parts["150 to 180 nm, carriers"] == approx(BALLISTIC * 30 / 500, rel=1e-12)
    assert "0 to 80 nm, bath" in parts
    assert "220 to 300 nm, bath" in parts
    assert {limit.holds for limit in rows} == {"exact"}
    assert all(limit.source for limit in rows)
    assert ("heat in the lattice" in named(case)) == (bias != 0.0)


def test_readings_and_four_point_of_coupled_probes():
    case = mixed(60.0, 30.0, 30.0, 30.0)
    rows = named(case)
    parts = [rows[f"probe at {place} nm"] for place in (230, 220)]
    ohm = 1e-3 / limits.current_A(limits.number_transport(case))
    assert rows["four-point, 230 to 220 nm"] == approx((parts[0] - parts[1]) * ohm, rel=1e-10)
    # The uncoupled probe reads the mean beside it.
    plus, minus = limits.profile(limits.number_transport(case), 230.0)
    assert parts[0] == approx((plus + minus) / 2, rel=1e-12)


def test_a_probe_that_turns_nobody_round_still_cuts_the_breakdown():
    probe = "[{position_nm: 30, coupling: 0.4, weight_right: 1}]"
    rows = named(scenario(KEPT, "{backscatter_path_nm: 100}", probe))
    assert rows["coupled probe at 30 nm"] == 0.0
    assert rows["0 to 30 nm"] == approx(0.3 * BALLISTIC, rel=1e-12)
    assert rows["30 to 200 nm"] == approx(1.7 * BALLISTIC, rel=1e-12)


def test_kept_mechanisms_list_the_elastic_resistance():
    elastic = "{backscatter_path_nm: 100, points: [{position_nm: 70, transmission: 0.4}]}"
    kept = KEPT + ", {kind: carriers, path_nm: 20}"
    with_it, without = named(scenario(kept, elastic)), named(scenario("", elastic))
    for name in ("resistance, series law", "scatterer at 70 nm", "70 to 200 nm", "current"):
        assert with_it[name] == approx(without[name], rel=1e-12)
    # Carriers alone give the lattice nothing and leave the contacts' shares as they were.
    alone = named(scenario("{kind: carriers, path_nm: 20}", elastic))
    for name in ("heat in the left contact", "heat in the right contact"):
        assert alone[name] == approx(without[name], rel=1e-9)
        assert with_it[name] < 0.9 * without[name]
    assert alone["heat in the lattice"] == 0.0


def test_unequal_temperatures_have_no_resistance():
    rows = named(mixed())
    assert not any("resistance, series" in name or "four-point" in name for name in rows)
    assert not any("nm, bath" in name or name.startswith("transmission") for name in rows)
    assert {"current", "conductance dI/dV", "probe at 150 nm", "heat in the lattice"} <= rows.keys()
    balance = limits.heat_W(mixed())
    assert rows["heat current out of the left contact"] == -balance.left_contact
    assert rows["heat current into the right contact"] == balance.right_contact
    no_bias = limits.heat_W(mixed(0.0))
    assert sum(no_bias[:3]) + sum(no_bias.probes) == pytest.approx(0.0, abs=1e-12 * POWER_W)
    assert no_bias.right_contact < 0 < no_bias.lattice


def test_energy_dependence_lists_the_ballistic_resistance_only():
    table = "{energy_meV: [0, 10], value: [0.2, 0.6]}"
    for case in (
        scenario(KEPT, f"{{points: [{{position_nm: 70, transmission: {table}}}]}}"),
        scenario(probes="[{position_nm: 9, coupling: 1}]", left=f"{{transmission: {table}}}"),
    ):
        assert named(case) == {"ballistic resistance": approx(BALLISTIC, rel=1e-9)}


def test_other_dimensions_have_the_ballistic_resistance_only():
    case = read_text(f"""
channel: {{length_nm: 100, dimension: 3}}
contacts: {{bias_mV: 10, temperature_K: 10}}
relaxation: {{mechanisms: [{{kind: bath, path_nm: 60, {RANDOM}]}}
""")
    assert [limit.name for limit in limits.limits_for(case)] == ["ballistic resistance"]


@pytest.mark.parametrize("cells", [1, 7, 50, 201])
def test_the_middle_cell_is_one_of_the_runs(cells):
    for case in (mixed(), scenario(KEPT), mixed(0.0)):
        case = case.replace({"simulation.cells": cells})
        edges = build(case).cell_edges_nm
        centres = 0.5 * (edges[1:] + edges[:-1])
        place = middle_cell_nm(case)
        assert np.min(np.abs(centres - place)) < 1e-9
        half = case.channel.length_nm / 2
        assert abs(place - half) < np.min(np.abs(centres - half)) + 1e-9


def test_rows_find_their_numbers_in_a_result(monkeypatch):
    monkeypatch.setattr(limits.listing, "MOST_LISTED", 30)
    case = mixed(60.0, 30.0, 30.0, 30.0)
    expected = named(case)
    place = middle_cell_nm(case)
    exact = Estimate(0.0, 1.0)
    names = ("mu_plus_meV", "mu_minus_meV")
    hot = ("carrier_temperature_plus_K", "carrier_temperature_minus_K")
    x = np.array([10.0, place, 290.0])
    unknown = dict.fromkeys(
        ("transmission", "current_A", "conductance_S", "resistance_ohm", "four_point")
    )
    run = SimpleNamespace(
        **unknown,
        ballistic_resistance_ohm=BALLISTIC,
        breakdown=(
            Part("probe", "probe", Estimate(4300.0, 10.0), position_nm=220.0),
            Part("", "piece", Estimate(1.0, 1.0), from_nm=80.0, to_nm=120.0, mechanism="bath"),
            Part("", "piece", Estimate(2.0, 1.0), from_nm=80.0, to_nm=120.0, mechanism="elastic"),
        ),
        probes=tuple(ProbeReading(p.position_nm, exact) for p in case.probes),
        heat_W=Heat(exact, exact, Estimate(3e-8, 1e-9), (exact, Estimate(5.0, 0.1), exact)),
        thermal=SimpleNamespace(heat_current_left_W=None, heat_current_right_W=None),
        x_nm=x,
        errors={name: np.array([0.0, 0.5, 0.0]) for name in (*names, hot[0])},
        **{name: np.array([1.0, 20.0 + i, 3.0]) for i, name in enumerate((*names, *hot))},
    )
    rows = {row.name: row for row in limits.compare(limits.limits_for(case), run)}
    assert rows["coupled probe at 220 nm"].z == approx(
        (4300 - expected["coupled probe at 220 nm"]) / 10, rel=1e-9
    )
    assert rows["80 to 120 nm, bath"].simulated == 1.0
    assert rows["80 to 120 nm, elastic"].simulated == 2.0
    assert rows["heat in the lattice"].simulated == 3e-8
    assert rows["heat in the probe at 220 nm"].simulated == 5.0
    left_movers = rows[f"potential of left movers at {place:g} nm"]
    assert (left_movers.simulated, left_movers.error) == (21.0, 0.5)
    assert rows[f"temperature of right movers at {place:g} nm"].simulated == 22.0
    assert rows[f"temperature of left movers at {place:g} nm"].error is None
    run.x_nm = x + 3.0
    moved = {row.name: row for row in limits.compare(limits.limits_for(case), run)}
    assert moved[left_movers.name].simulated is None
    run.heat_W = None
    none = {row.name: row for row in limits.compare(limits.limits_for(case), run)}
    assert none["heat in the probe at 220 nm"].simulated is None
    assert none["heat in the lattice"].simulated is None
