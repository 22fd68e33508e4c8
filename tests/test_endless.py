"""The endless channel: what may not matter, units, what it refuses, and its errors.

tests/published/test_endless_channel.py compares it with published values.
"""

from pathlib import Path

import numpy as np
import pytest
from scipy import constants
from scipy.integrate import quad

import carriersim as cs
from carriersim.disorder import draw_random_points
from carriersim.engine import endless, endless_setup, endless_window
from carriersim.engine.endless_coordinate import Coordinate
from carriersim.engine.problem import build
from carriersim.engine.solve import StopRequest
from carriersim.scenario import read_text
from tests.checks_of_numbers import QUANTUM_S, agree, exactly, integral, minus_slope

KELVIN = 300


def problem_of(channel, scattering="", more="", length=200, seed=1, kelvin=KELVIN):
    text = f"""
channel: {{length_nm: {length}, {channel}}}
contacts: {{bias_mV: 1, temperature_K: {kelvin}}}
scattering: {{{scattering}}}
simulation: {{seed: {seed}, cells: 10, energy_bins: 20, histories: 1000}}
{more}
"""
    return build(draw_random_points(read_text(text, Path("endless.yaml"))))


def walked(problem, relative_error=0.0033, workers=2, most_events=2e8):
    """LongChannel good to a relative error."""
    setup = endless.setup_of(problem)
    assert setup.refusal() is None
    totals = endless.estimate(setup, relative_error, most_events, StopRequest(), workers)
    return endless.quantities(setup, totals)[0]


def path_of(*scenario, **settings):
    return walked(problem_of(*scenario, **settings)).backscatter_path_nm


def holds(estimate, expected):
    agree(estimate, expected, systematic=estimate.systematic or 0.0)


WIRE = "dimension: 3, width_nm: 40, height_nm: 30, specularity: 0.2"
TABLE = "{energy_meV: [-60, 60], value: [0.3, 0.9]}"
PATHS = "{energy_meV: [-60, 60], value: [20, 90]}"
EVERYTHING = f"""
  mean_free_path_nm: 60, sections: [{{from_nm: 50, to_nm: 80, mean_free_path_nm: {PATHS}}}],
  points: [{{position_nm: 20, transmission: {TABLE}, angular: tunnel, reflection: diffuse}}],
  random: [{{density_per_um: 30, transmission: {{low: 0.5, high: 0.8}}}}]
"""


@pytest.fixture(scope="module")
def everything():
    return problem_of(WIRE, EVERYTHING)


# --- what may not matter


def test_any_number_of_workers_gives_the_same_bits(everything):
    assert walked(everything, 0.02, 1) == walked(everything, 0.02, 2) == walked(everything, 0.02, 5)


def test_seeds(everything):
    other = walked(problem_of(WIRE, EVERYTHING, seed=2), 0.02).backscatter_path_nm
    own = walked(everything, 0.02).backscatter_path_nm
    assert own != other
    assert abs(own.value - other.value) < 4 * np.hypot(own.error, other.error)


def test_neither_contacts_nor_probes_nor_the_planes_that_were_drawn(everything):
    """Each ring draws random planes of its own; contacts and probes are no part of it."""
    text = f"""
channel: {{length_nm: 200, {WIRE}}}
contacts: {{bias_mV: 5, temperature_K: {KELVIN}, left: {{transmission: 0.2}}}}
scattering: {{{EVERYTHING}}}
probes: [{{position_nm: 150, coupling: 0}}]
simulation: {{disorder_seed: 7}}
"""
    scenario = draw_random_points(read_text(text, Path("endless.yaml")))
    assert walked(build(scenario), 0.02) == walked(everything, 0.02)


def test_a_run_holds_it_and_its_files_too(tmp_path):
    text = f"""
channel: {{length_nm: 20, {WIRE}, modes: 5}}
contacts: {{bias_mV: 1, temperature_K: 0}}
scattering: {{mean_free_path_nm: 60}}
simulation: {{histories: 2000, cells: 4}}
"""
    scenario = read_text(text, Path("endless.yaml"))
    result = cs.simulate(scenario, workers=1)
    found = result.long_channel
    assert found == walked(build(scenario), endless.DEFAULT_ERROR, most_events=3e7)
    assert not [key for key in result.why if key.startswith("long_channel")]
    assert "Green 1954" in found.method and "Einstein 1905" in found.method
    assert found == cs.simulate(scenario.replace({"simulation.histories": 5000})).long_channel
    result.save(tmp_path / "run")
    assert cs.open_result(tmp_path / "run").long_channel == found


def test_the_coordinate_does_not_matter(monkeypatch):
    """D_x = D_xi/S^2 for any xi; a bad one only remembers longer."""
    scattering = "mean_free_path_nm: 100, points: [{position_nm: 40, transmission: 0.5}]"
    problem = problem_of("dimension: 3", scattering, length=100)
    good = walked(problem, 0.004).backscatter_path_nm
    jump = Coordinate.jump
    monkeypatch.setattr(Coordinate, "jump", lambda *args: 1.3 * jump(*args))
    monkeypatch.setattr(endless_window, "MEMORIES", 12.0)
    monkeypatch.setattr(endless_window, "SLOW_MEMORIES", 60.0)
    bad = walked(problem, 0.004).backscatter_path_nm
    assert bad != good
    assert abs(bad.value - good.value) < 4 * np.hypot(bad.error, good.error)


# --- units


def test_units():
    """R_B = h/(g e^2 M); rho = R_B A/lam, 1 ohm nm = 0.1 micro-ohm cm; a square: R_B W/lam."""
    more = ", modes: 12.5, degeneracy: 4"
    found = walked(problem_of(WIRE + more, "mean_free_path_nm: 50"), 0.02)
    ohm = 1 / (4 * 12.5 * QUANTUM_S)
    lam = found.backscatter_path_nm
    exactly(found.resistivity_uohm_cm.value, ohm * 40 * 30 / lam.value / 10)
    exactly(found.sheet_ohm.value, ohm * 40 / lam.value)
    exactly(found.resistivity_ratio.value, 4 / 3 * 50 / lam.value)
    for estimate in (found.resistivity_uohm_cm, found.sheet_ohm, found.resistivity_ratio):
        exactly(estimate.error / estimate.value, lam.error / lam.value)


def test_resistivity_of_free_electrons():
    """Drude: sigma = n e^2 l/(hbar k) with n = k^3/(3 pi^2) (d = 3), k^2/(2 pi) (d = 2)."""
    k, l_m = 13.6e9, 39e-9
    found = walked(
        problem_of(f"{WIRE}, fermi_wavenumber_per_nm: 13.6", "mean_free_path_nm: 39"), 0.02
    )
    sigma = k**2 * constants.e**2 * l_m / (3 * np.pi**2 * constants.hbar)
    exactly(found.resistivity_uohm_cm.value, 1e8 / sigma * found.resistivity_ratio.value)
    flat = "dimension: 2, width_nm: 20, fermi_wavenumber_per_nm: 0.3"
    found = walked(problem_of(flat, "mean_free_path_nm: 39"), 0.02)
    sheet = 2 * np.pi * constants.hbar / (0.3e9 * constants.e**2 * l_m)
    exactly(found.sheet_ohm.value, sheet * found.resistivity_ratio.value)


def test_given_resistivity_of_the_bulk():
    given = f"{WIRE}, bulk_resistivity_uohm_cm: 1.7"
    found = walked(problem_of(given, "mean_free_path_nm: 50"), 0.02)
    ratio = found.resistivity_ratio.value
    exactly(found.resistivity_uohm_cm.value, 1.7 * ratio)
    exactly(found.sheet_ohm.value, 1.7e-8 * ratio / 30e-9)
    setup = endless.setup_of(
        problem_of("dimension: 3, bulk_resistivity_uohm_cm: 2", "mean_free_path_nm: 50")
    )
    totals = endless.estimate(setup, 0.05, 1e7, StopRequest())
    found, why = endless.quantities(setup, totals)
    exactly(found.resistivity_uohm_cm.value, 2 * found.resistivity_ratio.value)
    assert found.sheet_ohm is None and why == {"long_channel.sheet_ohm": endless.NO_WIDTH}


# --- what has no meaning

FACES = "dimension: 3, width_nm: 40, height_nm: 30, specularity: {width: 1, height: 0}"
RELAX = "relaxation: {mechanisms: [%s]}"
NULLS = {
    "ballistic": (("dimension: 3",), endless_setup.NOTHING),
    "mirrors": (("dimension: 2, width_nm: 30",), endless_setup.NOTHING),
    "film": ((FACES,), endless_setup.LOGARITHM),
    "ribbon": (("dimension: 2, width_nm: 30, specularity: 0",), endless_setup.LOGARITHM),
    "open at some energies": (
        (
            "dimension: 3",
            f"points: [{{position_nm: 5, transmission: {TABLE.replace('0.9', '1')}}}]",
        ),
        endless_setup.SOME_ENERGIES,
    ),
    "ribbon open at some energies": (
        (
            "dimension: 2, width_nm: 30, specularity: 0",
            f"points: [{{position_nm: 5, transmission: {TABLE.replace('0.9', '1')}}}]",
        ),
        endless_setup.SOME_ENERGIES,
    ),
    "phonons": (
        (
            "dimension: 3",
            "mean_free_path_nm: 50",
            RELAX % "{kind: optical_phonon, path_nm: 50, energy_meV: 20}",
        ),
        endless_setup.PHONONS,
    ),
    "tables and relaxation": (
        (
            "dimension: 3",
            f"mean_free_path_nm: {PATHS}",
            RELAX % "{kind: bath, path_nm: 50, direction: randomised}",
        ),
        endless_setup.TABLES,
    ),
}


@pytest.mark.parametrize("name", NULLS)
def test_no_endless_channel(name):
    scenario, reason = NULLS[name]
    assert endless.long_channel(problem_of(*scenario)) == (None, {"long_channel": reason})


def test_no_endless_channel_in_one_dimension():
    text = """
channel: {length_nm: 20}
contacts: {bias_mV: 1, temperature_K: 0}
scattering: {mean_free_path_nm: 60}
simulation: {histories: 1000, cells: 4}
"""
    result = cs.simulate(read_text(text, Path("endless.yaml")), workers=1)
    assert result.long_channel is None and "2 and 3" in result.why["long_channel"]


def test_parts_without_meaning():
    def found(*scenario):
        setup = endless.setup_of(problem_of(*scenario))
        totals = endless.estimate(setup, 0.05, 1e7, StopRequest())
        return endless.quantities(setup, totals)

    point = "points: [{position_nm: 50, transmission: 0.5}]"
    result, why = found("dimension: 3", point)
    assert result.backscatter_path_nm is not None
    assert why == {
        "long_channel.resistivity_ratio": endless.NO_BULK,
        "long_channel.resistivity_uohm_cm": endless.NO_AREA,
        "long_channel.sheet_ohm": endless.NO_WIDTH,
    }
    assert result.resistivity_ratio is result.resistivity_uohm_cm is result.sheet_ohm is None
    result, why = found("dimension: 2, width_nm: 30", point)
    assert set(why) == {"long_channel.resistivity_ratio", "long_channel.resistivity_uohm_cm"}
    assert result.sheet_ohm is not None
    result, why = found(f"{WIRE}, bulk_resistivity_uohm_cm: 2", point)
    assert set(why.values()) == {endless.NO_BULK} and len(why) == 3


def test_interrupted():
    problem = problem_of("dimension: 3", "mean_free_path_nm: 50")
    stop = StopRequest()
    stop.set("interrupted")
    assert endless.long_channel(problem, stop) == (None, {"long_channel": endless.INTERRUPTED})
    setup = endless.setup_of(problem)
    assert endless.estimate(setup, 0.05, 1e7, stop) == endless.INTERRUPTED


def test_too_long_a_memory_is_refused():
    problem = problem_of(
        "dimension: 3, width_nm: 1, height_nm: 1, specularity: 0.9999", "mean_free_path_nm: 1e+5"
    )
    found, why = endless.long_channel(problem)
    assert found is None and why["long_channel"].startswith("carriers forget their direction only")


# --- what the channel is made of


def test_relaxation_that_makes_directions_random_adds_to_the_rate():
    bath = "{kind: bath, path_nm: 100, direction: randomised}"
    carriers = "{kind: carriers, path_nm: 200, direction: randomised}"
    both = problem_of("dimension: 3", "mean_free_path_nm: 50", RELAX % f"{bath}, {carriers}")
    found = walked(both)
    holds(found.backscatter_path_nm, 4 / 3 / (1 / 50 + 1 / 100 + 1 / 200))
    holds(found.resistivity_ratio, 1)


def test_sections_without_planes_add():
    """Isotropic scattering: density and current are linear in optical depth, exactly."""
    sections = "[{from_nm: 20, to_nm: 50, mean_free_path_nm: 10}, {from_nm: 90, to_nm: 100}]"
    scattering = f"mean_free_path_nm: 80, sections: {sections}"
    holds(path_of("dimension: 3", scattering, length=100), 4 / 3 * 100 / (60 / 80 + 30 / 10))


def test_given_and_random_planes_together():
    """Mirrors of constant T alone: the series law (Datta 1995), whatever the places."""
    scattering = """
  points: [{position_nm: 10, transmission: 0.4}, {position_nm: 12, transmission: 0.7}],
  random: [{count: 3, transmission: 0.5}, {density_per_um: 10, transmission: 0.6, from_nm: 50},
           {count: 1, transmission: {low: 0.2, high: 0.8}}]
"""
    # Mean of (1 - T)/T over the range: ln(high/low)/(high - low) - 1.
    ranged = np.log(0.8 / 0.2) / 0.6 - 1
    total = 0.6 / 0.4 + 0.3 / 0.7 + 3 * 1 + 1.5 * 0.4 / 0.6 + ranged
    holds(path_of("dimension: 2", scattering, length=200), 200 / total)


def test_a_random_number_of_planes_adds_no_noise():
    """64 rings of 200 planes have 0.9 % too many or too few; the result knows how many to expect.

    Two seeds, so that one lucky draw is not enough.
    """
    for seed in (1, 2):
        group = "random: [{density_per_um: 20, transmission: 0.4}]"
        holds(path_of("dimension: 3", group, length=1000, seed=seed), 50 * 0.4 / 0.6)


def test_a_ring_of_rare_planes():
    group = "mean_free_path_nm: 20, random: [{density_per_um: 1.0e-3, transmission: 0.5}]"
    holds(path_of("dimension: 3", group, length=50), 4 / 3 * 20)


# --- energies


def test_paths_of_energy():
    """Energies side by side: the mean of lam(E) over M (-dF/dE)."""

    def over(function, modes=lambda e: 1.0):
        def weight(e):
            return modes(e) * minus_slope(e, 0, KELVIN)

        cuts = -60, 60, (0, KELVIN)
        return integral(lambda e: weight(e) * function(e), *cuts) / integral(weight, *cuts)

    def table(low, high):
        return lambda e: np.interp(e, [-60, 60], [low, high])

    path, passing = table(20, 90), table(0.3, 0.9)
    bulk = problem_of("dimension: 3", f"mean_free_path_nm: {PATHS}")
    holds(walked(bulk).backscatter_path_nm, 4 / 3 * over(path))
    modes = "modes: {energy_meV: [-60, 60], value: [1, 7]}"
    weighted = walked(
        problem_of(f"{WIRE}, {modes}".replace("0.2", "1"), f"mean_free_path_nm: {PATHS}")
    )
    holds(weighted.backscatter_path_nm, 4 / 3 * over(path, table(1, 7)))
    holds(weighted.resistivity_ratio, 1)
    mean = integral(lambda e: table(1, 7)(e) * minus_slope(e, 0, KELVIN), -60, 60, (0, KELVIN))
    lam = weighted.backscatter_path_nm.value
    assert weighted.sheet_ohm.value == pytest.approx(40 / lam / (2 * mean * QUANTUM_S), rel=1e-4)
    plane = f"points: [{{position_nm: 20, transmission: {TABLE}}}]"
    expected = 50 * over(lambda e: passing(e) / (1 - passing(e)))
    holds(path_of("dimension: 2", plane, length=50), expected)


def test_at_zero_kelvin_one_energy_counts():
    """E = 0, where the table has 55."""
    found = path_of("dimension: 3", f"mean_free_path_nm: {PATHS}", kelvin=0)
    holds(found, 4 / 3 * 55)


# --- errors


@pytest.mark.parametrize(
    "channel, scattering, length, expected",
    [
        # A film: Fuchs 1938, Sondheimer 1952.
        (FACES.replace("30", "100"), "mean_free_path_nm: 100", 10, 400 / 3 / 1.46229),
        # Planes alone in random number: the series law.
        ("dimension: 3", "random: [{density_per_um: 20, transmission: 0.4}]", 500, 50 * 2 / 3),
    ],
    ids=["film", "planes"],
)
def test_errors_cover_the_truth_as_often_as_they_say(channel, scattering, length, expected):
    z = []
    for seed in range(100):
        problem = problem_of(channel, scattering, length=length, seed=seed)
        found = walked(problem, 1.0, workers=1).backscatter_path_nm
        z.append((found.value - expected) / found.error)
    z = np.abs(z)
    # Binomial: 68.3 and 95.4 of 100, four standard deviations of 4.7 and 2.1.
    assert 50 <= np.sum(z < 1) <= 87
    assert np.sum(z < 2) >= 87


def test_too_short_a_window_shows_in_systematic(monkeypatch):
    """Half a mean free path is too short: carriers would have flown on."""
    scattering = "mean_free_path_nm: 100, points: [{position_nm: 10, transmission: 0.5}]"
    problem = problem_of("dimension: 3", scattering, length=300)
    good = walked(problem, 0.005).backscatter_path_nm
    monkeypatch.setattr(endless_window, "MEMORIES", 0.5)
    short = walked(problem, 0.005).backscatter_path_nm
    assert good.value - short.value > 10 * np.hypot(short.error, good.error)
    assert 0.5 < short.systematic / (good.value - short.value) < 2
    assert (good.systematic or 0.0) < 2 * good.error


def test_the_coordinate_s_own_numbers():
    """Local path and weak planes against quadrature; barriers' mean over the flux by quad."""
    for dimension in (2, 3):
        (path,), (factor,) = Coordinate(dimension, ()).path_and_factor(np.array([0.02]))
        assert path == pytest.approx({2: np.pi / 2, 3: 4 / 3}[dimension] * 50, rel=1e-3)
        # <|u|^3>/(k <u^2>^2): 9/8 and 32/(3 pi^2).
        assert factor == pytest.approx({2: 32 / (3 * np.pi**2), 3: 9 / 8}[dimension], rel=1e-3)
        # A weak barrier by first order: factor <|u|^3 (1 - T(u))>/<|u|^3>.
        gamma = 1e-4
        reflected = _mean(lambda u: u**3 * 1e-4 / (u**2 + 1e-4), dimension)
        found = Coordinate(dimension, ()).jump(1 / (1 + gamma), True, factor)
        expected = factor * reflected / _mean(lambda u: u**3, dimension)
        assert found == pytest.approx(expected, rel=5e-3)  # the second order


def _mean(function, dimension):
    """Over the directions of a half space."""
    if dimension == 3:
        return quad(function, 0, 1, points=[0.01])[0]
    return quad(lambda a: function(np.cos(a)), 0, np.pi / 2, points=[1.56])[0] * 2 / np.pi
