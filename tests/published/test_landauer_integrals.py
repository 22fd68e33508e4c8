"""Current, heat and differential resistance where the transmission depends on energy.

Source: the Landauer formula, I = (g e/h) int M T (F_L - F_R) dE (R. Landauer 1957, 1970; M.
Buttiker, Phys. Rev. Lett. 57 (1986) 1761), with power (g/h) int M T (mu - E) (F_L - F_R) dE in each
contact. The transmissions are the series law of S. Datta (1995) at each energy; integrals by
scipy's quad.
"""

from types import SimpleNamespace

import numpy as np
import pytest

from tests.checks_of_numbers import (
    QUANTUM_S,
    agree,
    fermi,
    integral,
    minus_slope,
    part,
    profile,
    simulate,
)

BARRIER = ([-30.0, -5.0, 10.0, 25.0, 60.0], [0.15, 0.25, 0.85, 0.45, 0.9])
PATH = ([-40.0, 0.0, 35.0], [60.0, 250.0, 120.0])
OTHER_PATH = ([-25.0, 5.0, 30.0], [400.0, 90.0, 300.0])
LEFT = ([-20.0, 20.0], [0.35, 0.9])
RIGHT = ([-10.0, 30.0], [0.8, 0.4])


def table(of):
    return f"{{energy_meV: {of[0]}, value: {of[1]}}}"


def at(energy, of):
    return np.interp(energy, *of)


def barrier_at(energy):
    return at(energy, BARRIER)


def wire_at(energy):
    return 1 / (1 + 180 / at(energy, PATH) + 0.25 / 0.75)


def everything_at(energy):
    """Two barriers at the contacts, one inside, two mechanisms with tables, and a plain section."""
    walls = 1 / at(energy, LEFT) + 1 / at(energy, RIGHT) - 2
    paths = 120 / at(energy, PATH) + 120 / at(energy, OTHER_PATH) + 30 / 90
    return 1 / (1 + walls + 0.2 / 0.8 + paths)


CHANNELS = {
    "barrier": (
        barrier_at,
        f"scattering: {{points: [{{position_nm: 80, transmission: {table(BARRIER)}}}]}}",
        [*BARRIER[0]],
        "",
    ),
    "wire": (
        wire_at,
        f"""
scattering:
  backscatter_path_nm: {table(PATH)}
  points: [{{position_nm: 90, transmission: 0.75}}]""",
        [*PATH[0]],
        "",
    ),
    "everything": (
        everything_at,
        f"""
scattering:
  backscatter_path_nm:
    - {{name: defects, backscatter_path_nm: {table(PATH)}}}
    - {{name: phonons, backscatter_path_nm: {table(OTHER_PATH)}}}
  sections: [{{from_nm: 120, to_nm: 150, mean_free_path_nm: 45}}]
  points: [{{position_nm: 60, transmission: 0.8}}]""",
        [*LEFT[0], *RIGHT[0], *PATH[0], *OTHER_PATH[0]],
        "transmission: {}, ",
    ),
}
LENGTH = {"barrier": 160.0, "wire": 180.0, "everything": 150.0}

CASES = [
    ("barrier", 30.0, 77.0),
    ("barrier", -18.0, 0.0),
    ("barrier", 0.0, 120.0),
    ("wire", -25.0, 60.0),
    ("everything", 22.0, 40.0),
    ("everything", 0.0, 50.0),
]


@pytest.fixture(scope="module", params=CASES, ids=lambda c: f"{c[0]} {c[1]:g} mV {c[2]:g} K")
def run(request):
    """One channel, the exact transmission as a function of energy, and its contacts."""
    name, bias, kelvin = request.param
    transmission, scattering, breaks, walls = CHANNELS[name]
    left, right = (walls.format(table(t)) for t in (LEFT, RIGHT))
    result = simulate(
        f"""
channel: {{length_nm: {LENGTH[name]}, modes: 1.5}}
contacts:
  bias_mV: {bias}
  left: {{{left}temperature_K: {kelvin}}}
  right: {{{right}temperature_K: {kelvin}}}
{scattering}
simulation: {{histories: {"1e+7" if name == "everything" else "4e+6"}, cells: 10}}
"""
    )
    cuts = [*breaks, (bias, kelvin), (0.0, kelvin)]
    return SimpleNamespace(
        name=name, result=result, transmission=transmission, bias=bias, kelvin=kelvin, cuts=cuts
    )


def over_window(run, weight=lambda e: 1.0):
    """int weight T (F_L - F_R) dE, in meV times the units of the weight."""

    def integrand(e):
        window = fermi(e, run.bias, run.kelvin) - fermi(e, 0.0, run.kelvin)
        return weight(e) * run.transmission(e) * window

    return integral(integrand, *clipped(run))


def clipped(run):
    """Breaks; at 0 K the integrand vanishes outside the window but is cut there anyway."""
    if run.kelvin == 0.0:
        low, high = min(run.bias, 0.0), max(run.bias, 0.0)
        return [low, high, *(e for e in run.cuts if isinstance(e, float) and low < e < high)]
    reach = 45 * 0.0862 * run.kelvin
    low, high = min(run.bias, 0.0) - reach, max(run.bias, 0.0) + reach
    return [e for e in run.cuts if isinstance(e, tuple) or low < e < high]


def slope(run, mu):
    """int T (-dF/dE) dE."""
    if run.kelvin == 0.0:
        return run.transmission(mu)
    return integral(lambda e: run.transmission(e) * minus_slope(e, mu, run.kelvin), *clipped(run))


MODES = 1.5
G_B = 2 * MODES * QUANTUM_S


def mean_transmission(run):
    return over_window(run) / run.bias if run.bias else slope(run, 0.0)


def test_current_and_resistance(run):
    agree(run.result.transmission, mean_transmission(run))
    agree(run.result.resistance_ohm, 1 / (G_B * mean_transmission(run)))
    if run.bias:
        agree(run.result.current_A, G_B * mean_transmission(run) * run.bias * 1e-3)


def test_differential_resistance_is_taken_at_the_bias(run):
    expected = G_B * slope(run, run.bias)
    agree(run.result.conductance_S, expected)
    agree(run.result.differential_resistance_ohm, 1 / expected)


def test_heat_in_each_contact(run):
    if not run.bias:
        assert run.result.heat_W is None
        return
    to_left = G_B * 1e-6 * over_window(run, lambda e: run.bias - e)
    to_right = G_B * 1e-6 * over_window(run, lambda e: e)
    agree(run.result.heat_W.left_contact, to_left)
    agree(run.result.heat_W.right_contact, to_right)
    agree(run.result.thermal.heat_current_left_W, -to_left)
    agree(run.result.thermal.heat_current_right_W, to_right)


def share(run, resistance):
    """Mean of T times a resistance that depends on energy, over mean T: in units of R_B."""
    total = mean_transmission(run)
    if run.bias:
        return over_window(run, resistance) / run.bias / total
    weighted = SimpleNamespace(
        transmission=lambda e: resistance(e) * run.transmission(e),
        kelvin=run.kelvin,
        bias=run.bias,
        cuts=run.cuts,
    )
    return slope(weighted, 0.0) / total


def test_each_part_drops_its_share_of_the_potential(run):
    """At each energy its share of the filling; their mean over the current is what mu shows."""
    expected = {
        "barrier": {("point", 80.0, None): lambda e: 1 / at(e, BARRIER) - 1},
        "wire": {
            ("piece", 40.0, None): lambda e: 90 / at(e, PATH),
            ("point", 90.0, None): lambda e: 1 / 3,
            ("piece", 140.0, None): lambda e: 90 / at(e, PATH),
        },
        "everything": {
            ("point", 0.0, None): lambda e: 1 / at(e, LEFT) - 1,
            ("piece", 30.0, "defects"): lambda e: 60 / at(e, PATH),
            ("piece", 30.0, "phonons"): lambda e: 60 / at(e, OTHER_PATH),
            ("point", 60.0, None): lambda e: 0.25,
            ("piece", 90.0, "defects"): lambda e: 60 / at(e, PATH),
            ("piece", 90.0, "phonons"): lambda e: 60 / at(e, OTHER_PATH),
            ("piece", 130.0, None): lambda e: 30 / 90,
            ("point", 150.0, None): lambda e: 1 / at(e, RIGHT) - 1,
        },
    }[run.name]
    for (kind, place, mechanism), resistance in expected.items():
        agree(part(run.result, kind, place, mechanism), share(run, resistance) / G_B)
    for place in (0.0, LENGTH[run.name]):
        agree(part(run.result, "interface", place), 0.5 / G_B)


def test_levels_beside_the_middle(run):
    """mu+ just behind what lies left of it: eV less the sum of the drops, weighted alike."""
    if run.name != "barrier":
        return
    unit = run.bias or 1.0
    agree(profile(run.result, "mu_plus_meV", 120.0), unit * mean_transmission(run))
    agree(profile(run.result, "mu_minus_meV", 40.0), unit * (1 - mean_transmission(run)))
