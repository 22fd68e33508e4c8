"""Do the quoted standard errors say what they claim in two and three dimensions?

As tests/test_coverage.py, whose bounds are used: many seeds, z = (estimate - truth)/error against
Student's t. Truths: discrete ordinates (tests/reference_angles.py, good to 1e-8) and, for walls
that scatter, Clausing's equation (tests/reference_slot.py).
"""

from dataclasses import replace

import numpy as np
import pytest

from carriersim import assemble as assembling
from carriersim.engine import solve as solving
from carriersim.engine.observe import Observer
from carriersim.engine.problem import build
from carriersim.engine.solve import Goal, solve
from carriersim.scenario import read_text
from tests import reference_angles
from tests.channels_in_space import mean, over_cells, parts_of, yaml_of
from tests.checks_of_numbers import fermi
from tests.reference_angles import Case, Plane
from tests.reference_slot import Slot
from tests.test_coverage import check

BATCHES = 16
BIAS, KELVIN = 4.0, 10.0
HISTORIES = 32_000
# Carriers that graze count up to 200 times as much as others where potentials beside contacts and
# planes are asked for: means of samples are skew, and an error tends to be small where its value
# is. With HISTORIES 94 instead of 95.5 % of the intervals of a contact's part hold the truth, with
# MANY as many as should.
MANY = 320_000
SKEW = 0.12


@pytest.fixture(autouse=True)
def _only_what_is_tested(monkeypatch):
    """One round, and neither closed forms nor the distance from equilibrium."""
    monkeypatch.setattr(solving, "FIRST_ROUND", MANY // BATCHES)
    monkeypatch.setattr(assembling.limits, "limits_for", lambda scenario: ())
    monkeypatch.setattr(
        assembling, "_departure_from", lambda problem, observer, g: np.zeros(problem.cells)
    )


def scores(text, truth, readings, seeds, histories=HISTORIES):
    """z of every quantity for every seed, a dict of arrays.

    readings: function of a result that gives estimates by name; truth: the exact values.
    """
    problem = build(read_text(text))
    found = {}
    for seed in range(seeds):
        simulation = problem.scenario.simulation.model_copy(update={"seed": seed})
        scenario = problem.scenario.model_copy(update={"simulation": simulation})
        one = replace(problem, scenario=scenario)
        totals = solve(one, Goal(None, histories, None))
        values = readings(assembling.assemble(one, totals, scenario))
        assert values.keys() == truth.keys()
        for name, (value, error) in values.items():
            found.setdefault(name, []).append((value - truth[name]) / error)
    return {name: np.array(z) for name, z in found.items()}


def pair(estimate, unit=1.0):
    return estimate.value / unit, estimate.error / unit


def parts(result):
    """Parts of the resistance in units of R_B by kind and place."""
    return {
        (p.kind, p.position_nm if p.kind != "piece" else (p.from_nm, p.to_nm)): pair(
            p.resistance_ohm, result.ballistic_resistance_ohm
        )
        for p in result.breakdown
        if p.mechanism != "ballistic"
    }


def in_cell(result, name, cell):
    return getattr(result, name)[cell] / BIAS, result.errors[name][cell] / BIAS


# --- planes -------------------------------------------------------------------------------------

CHANNEL = Case(64, 3, 80, planes=(Plane(0, 0.7, False, True), Plane(24, 0.5, True, True)))
PROBES = ((12.0, 0.75), (40.0, 0.5))
CELL = 8  # of 16, from 32 to 36 nm
CLASS = 6  # of direction: 30 to 35 degrees


def reading(solution, place, weight):
    """What a probe reads: the flux from the left and that from the right."""
    plus, minus = (solution.directions.flux @ f for f in solution.occupations(place))
    return weight * plus + (1 - weight) * minus


def plane_truth(solution):
    """Exact values of `plane_readings`."""
    exact = parts_of(solution)
    first, second = (reading(solution, *probe) for probe in PROBES)
    edges = np.array([32.0, 36.0])
    plus, minus = (over_cells(f, edges)[0] for f in (solution.f_plus, solution.f_minus))
    classes = solution.fluxes(64, np.cos(np.radians(np.linspace(0, 90, 19))))
    return exact | {
        "transmission": solution.transmission,
        "resistance": 1 / solution.transmission,
        "probe": first,
        "four-point": (first - second) / solution.transmission,
        "mu+": plus,
        "mu-": minus,
        "mu": 0.5 * (plus + minus),
        "f+": plus,
        "by direction": classes[0][CLASS],
    }


def plane_readings(result):
    unit = result.ballistic_resistance_ohm
    row = int(np.argmin(np.abs(result.energy_meV - 0.5 * BIAS)))
    empty, full = (fermi(result.energy_meV[row], mu, KELVIN) for mu in (0, BIAS))
    f, error = result.f_plus[row, CELL], result.errors["f_plus"][row, CELL]
    emitted = 1e-3 * BIAS / unit / 5  # per degree
    found = parts(result) | {
        "transmission": pair(result.transmission),
        "resistance": pair(result.resistance_ohm, unit),
        "probe": pair(result.probes[0].potential, BIAS),
        "four-point": pair(result.four_point[0].resistance_ohm, unit),
        "f+": ((f - empty) / (full - empty), error / (full - empty)),
        "by direction": (
            result.current_by_direction[-1, 0, CLASS] / emitted,
            result.errors["current_by_direction"][-1, 0, CLASS] / emitted,
        ),
    }
    for name, key in (("mu+", "mu_plus_meV"), ("mu-", "mu_minus_meV"), ("mu", "mu_meV")):
        found[name] = in_cell(result, key, CELL)
    return found


@pytest.mark.parametrize(
    ("dimension", "seeds", "histories"),
    [
        (2, 100, HISTORIES),
        (3, 100, HISTORIES),
        pytest.param(2, 300, MANY, marks=pytest.mark.slow),
        pytest.param(3, 300, MANY, marks=pytest.mark.slow),
    ],
)
def test_planes(dimension, seeds, histories):
    case = replace(CHANNEL, dimension=dimension)
    truth = plane_truth(reference_angles.solve(case))
    text = yaml_of(case, BIAS, KELVIN, probes=PROBES, cells=16, batches=BATCHES)
    z = scores(text, truth, plane_readings, seeds, histories)
    check(z, BATCHES - 1, SKEW)


# --- walls --------------------------------------------------------------------------------------


def wall_truth(slot):
    contact = 0.5 * (1 - slot.returning) / slot.transmission
    return {
        "transmission": slot.transmission,
        "resistance": 1 / slot.transmission,
        ("interface", 0.0): contact,
        ("interface", 6.0): contact,
        ("piece", (0.0, 6.0)): slot.walls_part,
        "middle": 0.5,  # by symmetry
    }


def wall_readings(result):
    return parts(result) | {
        "transmission": pair(result.transmission),
        "resistance": pair(result.resistance_ohm, result.ballistic_resistance_ohm),
        "middle": in_cell(result, "mu_meV", 2),
    }


@pytest.mark.parametrize(
    ("height", "seeds", "histories"),
    [
        (3, 120, HISTORIES),
        pytest.param(None, 300, MANY, marks=pytest.mark.slow),
        pytest.param(3, 300, MANY, marks=pytest.mark.slow),
    ],
)
def test_walls(height, seeds, histories):
    """A slot between diffuse walls; five cells, so that one is in the middle."""
    walls = "width_nm: 2, specularity: 0.5"
    case = Case(6, 2)
    if height is not None:
        walls = f"width_nm: 2, height_nm: {height}, specularity: {{width: 0.5, height: 1}}"
        case = Case(6, 3)
    # A probe off the middle, so that no node is there.
    text = yaml_of(case, BIAS, KELVIN, probes=[(2.4, 0.5)], channel=walls, cells=5, batches=BATCHES)
    z = scores(text, wall_truth(Slot(3, 0.5)), wall_readings, seeds, histories)
    check(z, BATCHES - 1, SKEW)


# --- energy -------------------------------------------------------------------------------------

PATH = ([-6, 10], [100, 40])
CHANCE = ([-4, 2, 8], [0.3, 0.7, 0.5])
ENERGIES = np.linspace(-15, 19, 341)  # meV; the entries of the tables are among them
TABLES = f"""
channel: {{length_nm: 64, dimension: DIMENSION}}
contacts: {{bias_mV: {BIAS}, temperature_K: {KELVIN}}}
scattering:
  mean_free_path_nm: {{energy_meV: {PATH[0]}, value: {PATH[1]}}}
  points:
    - position_nm: 24
      transmission: {{energy_meV: {CHANCE[0]}, value: {CHANCE[1]}}}
      angular: tunnel
      reflection: diffuse
probes: [{{position_nm: 12, weight_right: 0.75}}]
simulation: {{cells: 16, batches: {BATCHES}, energy_bins: 40, trajectories: 0}}
"""


def table_truth(solutions, bin_meV, energy):
    """Exact values: integrals over energy by the trapezoidal rule; f+ in one bin."""
    right = fermi(ENERGIES, 0, KELVIN)
    window = fermi(ENERGIES, BIAS, KELVIN) - right
    # The tails beyond 15 meV hold some 1e-8.
    window /= np.trapezoid(window, ENERGIES) / BIAS

    def over_energy(function, weight=1.0):
        values = np.array([function(s) for s in solutions])
        return np.trapezoid(window * values * weight, ENERGIES) / BIAS

    through = over_energy(lambda s: s.transmission)
    edges = np.array([32.0, 36.0])
    plus = np.array([over_cells(s.f_plus, edges)[0] for s in solutions])
    inside = np.linspace(*bin_meV, 21)
    g = np.interp(inside, ENERGIES, plus).mean()
    low, high = fermi(energy, 0, KELVIN), fermi(energy, BIAS, KELVIN)
    return {
        "transmission": through,
        "heat": over_energy(lambda s: s.transmission, ENERGIES),
        "point": over_energy(lambda s: mean(s, 24, "left") - mean(s, 24, "right")) / through,
        "probe": over_energy(lambda s: reading(s, *PROBES[0])),
        "mu+": np.trapezoid(window * plus, ENERGIES) / BIAS,
        "f+": low + (high - low) * g,
    }


@pytest.mark.parametrize(
    ("dimension", "seeds"),
    [(3, 60), *(pytest.param(d, 600, marks=pytest.mark.slow) for d in (2, 3))],
)
def test_energy_tables(dimension, seeds):
    text = TABLES.replace("DIMENSION", str(dimension))
    problem = build(read_text(text))
    energies = Observer(problem).grid.centres
    at = int(np.argmin(np.abs(energies - 0.5 * BIAS)))
    row = int(np.searchsorted(problem.bins.edges, energies[at])) - 1
    solutions = [
        reference_angles.solve(
            Case(
                64,
                dimension,
                float(np.interp(e, *PATH)),
                planes=(Plane(24, float(np.interp(e, *CHANCE)), True, True),),
                directions=16,
            )
        )
        for e in ENERGIES
    ]

    def readings(result):
        unit = result.ballistic_resistance_ohm
        return {
            "transmission": pair(result.transmission),
            "heat": pair(result.heat_W.right_contact, 1e-6 * BIAS / unit),
            "point": parts(result)["point", 24.0],
            "probe": pair(result.probes[0].potential, BIAS),
            "mu+": in_cell(result, "mu_plus_meV", CELL),
            "f+": (result.f_plus[at, CELL], result.errors["f_plus"][at, CELL]),
        }

    truth = table_truth(solutions, problem.bins.edges[row : row + 2], energies[at])
    check(scores(text, truth, readings, seeds), BATCHES - 1, SKEW)
