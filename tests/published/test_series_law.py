"""Incoherent scatterers and distributed scattering in series.

Source: S. Datta, Electronic Transport in Mesoscopic Systems (Cambridge 1995), chapters 2 and 3
(from memory): R/R_B = 1 + L/lam + sum (1 - T_i)/T_i, each term dropping its share of the potential.
"""

from itertools import combinations

import pytest

from tests.checks_of_numbers import QUANTUM_S, agree, centre, exactly, part, profile, simulate

# Five unequal scatterers in a channel that scatters everywhere.
POINTS = {90.0: 0.5, 170.0: 0.6, 250.0: 0.55, 320.0: 0.65, 400.0: 0.7}
LAM = 200.0
LENGTH = 480.0

FIVE = f"""
channel: {{length_nm: {LENGTH}, modes: 2}}
contacts: {{bias_mV: 15, temperature_K: 77}}
scattering:
  backscatter_path_nm: {LAM}
  points: [{", ".join(f"{{position_nm: {x}, transmission: {t}}}" for x, t in POINTS.items())}]
probes: [{{position_nm: 40}}, {{position_nm: 200}}, {{position_nm: 450}}]
simulation: {{histories: 2.4e+7, cells: 48}}
"""

# Barriers at the contacts, three mechanisms, and two sections that scatter more.
MIXED = """
channel: {length_nm: 400, modes: 1, degeneracy: 4}
contacts:
  bias_mV: -40
  temperature_K: 20
  left: {transmission: 0.6}
  right: {transmission: 0.7}
scattering:
  mean_free_path_nm:
    - {name: defects, mean_free_path_nm: 250}
    - {name: phonons, backscatter_path_nm: 300}
  sections:
    - {from_nm: 160, to_nm: 220, backscatter_path_nm: 75}
    - {from_nm: 330, to_nm: 400, mean_free_path_nm: 50}
  points: [{position_nm: 160, transmission: 0.6}]
probes: [{position_nm: 50}, {position_nm: 280}]
simulation: {histories: 2e+7, cells: 40}
"""


def reflection(transmission):
    """Resistance of a scatterer in units of R_B."""
    return (1 - transmission) / transmission


@pytest.fixture(scope="module")
def five():
    return simulate(FIVE)


@pytest.fixture(scope="module")
def mixed():
    return simulate(MIXED)


R_FIVE = 1 / (2 * 2 * QUANTUM_S)
TOTAL_FIVE = 1 + LENGTH / LAM + sum(reflection(t) for t in POINTS.values())


def upstream_of(place):
    """Resistance from the left reservoir to a place of FIVE in units of R_B."""
    return 0.5 + place / LAM + sum(reflection(t) for x, t in POINTS.items() if x < place)


def test_total(five):
    agree(five.resistance_ohm, R_FIVE * TOTAL_FIVE)
    agree(five.differential_resistance_ohm, R_FIVE * TOTAL_FIVE)
    agree(five.transmission, 1 / TOTAL_FIVE)
    agree(five.conductance_S, 1 / (R_FIVE * TOTAL_FIVE))
    agree(five.current_A, 15e-3 / (R_FIVE * TOTAL_FIVE))


@pytest.mark.parametrize("place", POINTS)
def test_each_scatterer(five, place):
    agree(part(five, "point", place), R_FIVE * reflection(POINTS[place]))


def test_interfaces(five):
    agree(part(five, "interface", 0.0), R_FIVE / 2)
    agree(part(five, "interface", LENGTH), R_FIVE / 2)


@pytest.mark.parametrize("piece", range(6))
def test_each_piece_between_scatterers(five, piece):
    cuts = [0.0, *POINTS, LENGTH]
    a, b = cuts[piece], cuts[piece + 1]
    agree(part(five, "piece", (a + b) / 2), R_FIVE * (b - a) / LAM)


def test_parts_sum_to_the_resistance(five, mixed):
    for result in (five, mixed):
        total = sum(p.resistance_ohm.value for p in result.breakdown)
        exactly(total, result.resistance_ohm.value)


@pytest.mark.parametrize("place", [40.0, 120.0, 200.0, 280.0, 350.0, 450.0])
def test_levels_along_the_channel(five, place):
    """mu falls in proportion to the resistance passed; mu+ and mu- stand I R_B/2 off it."""
    above = upstream_of(centre(five, place))
    agree(profile(five, "mu_meV", place), 15 * (1 - above / TOTAL_FIVE))
    agree(profile(five, "mu_plus_meV", place), 15 * (1 - (above - 0.5) / TOTAL_FIVE))
    if place < 400:  # mu- is too near zero at the end for a relative error
        agree(profile(five, "mu_minus_meV", place), 15 * (1 - (above + 0.5) / TOTAL_FIVE))


def test_probes(five):
    for probe in five.probes:
        agree(probe.potential, 15 * (1 - upstream_of(probe.position_nm) / TOTAL_FIVE))


def test_four_point_resistances_hold_what_lies_between_the_probes(five):
    found = {(q.from_nm, q.to_nm): q.resistance_ohm for q in five.four_point}
    assert list(found) == list(combinations((40.0, 200.0, 450.0), 2))
    for (a, b), resistance in found.items():
        agree(resistance, R_FIVE * (upstream_of(b) - upstream_of(a)))


R_MIXED = 1 / (4 * QUANTUM_S)
# A mean free path l between isotropising collisions turns a carrier round once in 2 l.
DEFECTS, PHONONS = 1 / 500, 1 / 300
PARTS_MIXED = {
    "barrier": reflection(0.6),
    "defects first": 160 * DEFECTS,
    "phonons first": 160 * PHONONS,
    "scatterer": reflection(0.6),
    "section": 60 / 75,
    "defects second": 110 * DEFECTS,
    "phonons second": 110 * PHONONS,
    "end section": 70 / 100,
    "end barrier": reflection(0.7),
}
TOTAL_MIXED = 1 + sum(PARTS_MIXED.values())


def test_total_with_sections_mechanisms_and_barriers(mixed):
    agree(mixed.resistance_ohm, R_MIXED * TOTAL_MIXED)
    agree(mixed.current_A, -40e-3 / (R_MIXED * TOTAL_MIXED))


@pytest.mark.parametrize(
    "name, kind, place, mechanism",
    [
        ("barrier", "point", 0.0, None),
        ("defects first", "piece", 80.0, "defects"),
        ("phonons first", "piece", 80.0, "phonons"),
        ("scatterer", "point", 160.0, None),
        ("section", "piece", 190.0, None),
        ("defects second", "piece", 300.0, "defects"),
        ("phonons second", "piece", 300.0, "phonons"),
        ("end section", "piece", 365.0, None),
        ("end barrier", "point", 400.0, None),
    ],
)
def test_each_part_with_sections_mechanisms_and_barriers(mixed, name, kind, place, mechanism):
    agree(part(mixed, kind, place, mechanism), R_MIXED * PARTS_MIXED[name])


def test_readings_with_sections_mechanisms_and_barriers(mixed):
    near = 0.5 + PARTS_MIXED["barrier"] + 50 * (DEFECTS + PHONONS)
    far = 0.5 + sum(list(PARTS_MIXED.values())[:5]) + 60 * (DEFECTS + PHONONS)
    for probe, above in zip(mixed.probes, (near, far), strict=True):
        agree(probe.potential, -40 * (1 - above / TOTAL_MIXED))
    agree(mixed.four_point[0].resistance_ohm, R_MIXED * (far - near))
