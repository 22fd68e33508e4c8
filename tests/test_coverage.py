"""Do the quoted standard errors say what they claim? Many seeds against exact values.

The standard error of a run comes from its batches, so z = (estimate - truth)/error follows
Student's t with nu = batches - 1 degrees of freedom, not the normal law: E[z^2] = nu/(nu - 2),
which is 15/13 for 16 batches and 63/61 for the default 64. The intervals that should cover 68.27 %
and 95.45 % are therefore value +- t error with the quantile t of that law, and the mean of z^2 is
held against nu/(nu - 2). Occupations of a run with many energy bins take their error from all
(batch, round) samples; nu = batches - 1 is the fewest degrees of freedom they can have.

Every bound is 4 standard errors of what is counted: 6e-5 false alarms each. The seeds are fixed, so
a failure is never a matter of luck.
"""

from dataclasses import replace

import numpy as np
import pytest
from scipy import constants, stats
from scipy.special import expit

from carriersim import assemble as assembling
from carriersim.engine.problem import build
from carriersim.engine.solve import Goal, solve
from carriersim.scenario import read_text

K_MEV = constants.k / constants.e * 1e3  # meV/K
QUANTUM_S = constants.e**2 / constants.h
BIAS, KELVIN, MODES = 4.0, 10.0, 3.0
LEFT_BARRIER = 0.8
LENGTH, SCATTERER, PROBES = 128.0, 64.0, (32.0, 96.0)
CELL, CELL_NM = 9, 76.0  # of 16: between the scatterer and the second probe
NUMBERS = ("160", "0.5")
TABLES = (
    "{energy_meV: [-6, 10], value: [250, 90]}",
    "{energy_meV: [-4, 2, 8], value: [0.2, 0.7, 0.4]}",
)


def problem_of(path, transmission, cells=16, batches=64, bins=40):
    """The channel of this file: a contact barrier, distributed scattering, one scatterer."""
    return build(
        read_text(
            f"""
channel: {{length_nm: {LENGTH}, modes: {MODES}}}
contacts:
  bias_mV: {BIAS}
  temperature_K: {KELVIN}
  left: {{transmission: {LEFT_BARRIER}}}
scattering:
  backscatter_path_nm: {path}
  points: [{{position_nm: {SCATTERER}, transmission: {transmission}}}]
probes: [{{position_nm: {PROBES[0]}, weight_right: 0.75}}, {{position_nm: {PROBES[1]}}}]
simulation: {{cells: {cells}, batches: {batches}, energy_bins: {bins}}}
"""
        )
    )


class Exact:
    """The incoherent series law at each energy (Datta 1995), integrated by the trapezoidal rule.

    path_nm and transmission: arrays over the energies, or numbers.
    """

    def __init__(self, path_nm, transmission):
        self.energy = np.linspace(-60 * K_MEV * KELVIN, BIAS + 60 * K_MEV * KELVIN, 400_001)
        self.path = path_nm(self.energy)
        self.transmission = transmission(self.energy)
        barrier = (1 - LEFT_BARRIER) / LEFT_BARRIER
        point = (1 - self.transmission) / self.transmission
        self.total = 1 / (1 + barrier + point + LENGTH / self.path)
        kT = K_MEV * KELVIN
        self.right = expit(-self.energy / kT)
        self.left = expit(-(self.energy - BIAS) / kT)
        self.window = self.left - self.right
        self.barrier, self.point = barrier, point

    def integral(self, values):
        return np.trapezoid(values, self.energy)

    def g(self, x_nm, side=0.0):
        """Response to the left contact at a place; side=+1: g+, -1: g-, 0: their mean."""
        passed = self.barrier + x_nm / self.path + (self.point if x_nm > SCATTERER else 0.0)
        return 1 - self.total * (0.5 + passed - 0.5 * side)

    def potential(self, g):
        return self.integral(self.window * g)

    def values(self):
        """Exact value of every quantity that `readings` returns, by name, in the same units."""
        unit_A = 2 * MODES * QUANTUM_S * 1e-3  # per meV
        unit_W = unit_A * 1e-3  # per meV^2
        current = unit_A * self.potential(self.total)
        resistance = BIAS * 1e-3 / current
        slope = self.left * (1 - self.left) / (K_MEV * KELVIN)
        # Linear thermal coefficients belong to the right contact's potential, 0.
        at_zero = self.right * (1 - self.right) / (K_MEV * KELVIN)
        l0, l1, l2 = (self.integral(self.total * self.energy**n * at_zero) for n in range(3))
        heat_right = unit_W * self.integral(self.total * self.window * self.energy)
        readings = [
            self.potential(self.g(PROBES[0], 0.5)),
            self.potential(self.g(PROBES[1])),
        ]
        jump = self.integral(self.window * self.total * self.point) / BIAS
        piece = self.integral(self.window * self.total * (LENGTH - SCATTERER) / self.path) / BIAS
        return {
            "transmission": self.potential(self.total) / BIAS,
            "resistance": resistance,
            "current": current,
            "conductance": 2 * MODES * QUANTUM_S * self.integral(self.total * slope),
            "heat_left": current * BIAS * 1e-3 - heat_right,
            "heat_right": heat_right,
            "seebeck": -l1 / l0 / KELVIN * 1e-3,
            "thermal_conductance": unit_W * (l2 - l1**2 / l0) / KELVIN,
            "jump": jump * resistance,
            "piece": piece * resistance,
            "probe": readings[0],
            "four_point": (readings[0] - readings[1]) / BIAS * resistance,
            "mu": self.potential(self.g(CELL_NM)),
            "mu_plus": self.potential(self.g(CELL_NM, 1.0)),
            "mu_minus": self.potential(self.g(CELL_NM, -1.0)),
        }

    def occupation(self, energy_meV, bin_meV, side):
        """f at an energy in the chosen cell, with the response averaged over the energy's bin."""
        inside = (self.energy >= bin_meV[0]) & (self.energy <= bin_meV[1])
        right = expit(-energy_meV / (K_MEV * KELVIN))
        drive = expit(-(energy_meV - BIAS) / (K_MEV * KELVIN)) - right
        return right + drive * self.g(CELL_NM, side)[inside].mean()


def _number(value):
    return lambda energy: np.full(energy.shape, value)


EXACT_NUMBERS = Exact(_number(160.0), _number(0.5))
EXACT_TABLES = Exact(
    lambda e: np.interp(e, [-6, 10], [250, 90]), lambda e: np.interp(e, [-4, 2, 8], [0.2, 0.7, 0.4])
)


def readings(result, energy):
    """Estimates of a result by name: (value, error)."""
    parts = {part.name: part.resistance_ohm for part in result.breakdown}
    piece = next(p for p in result.breakdown if p.kind == "piece" and p.from_nm == SCATTERER)
    named = {
        "transmission": result.transmission,
        "resistance": result.resistance_ohm,
        "current": result.current_A,
        "conductance": result.conductance_S,
        "heat_left": result.heat_W.left_contact,
        "heat_right": result.heat_W.right_contact,
        "seebeck": result.thermal.seebeck_V_per_K,
        "thermal_conductance": result.thermal.conductance_W_per_K,
        "jump": parts["scatterer 1"],
        "piece": piece.resistance_ohm,
        "probe": result.probes[0].potential,
        "four_point": result.four_point[0].resistance_ohm,
    }
    values = {name: (e.value, e.error) for name, e in named.items()}
    for name, key in (("mu", "mu_meV"), ("mu_plus", "mu_plus_meV"), ("mu_minus", "mu_minus_meV")):
        values[name] = (getattr(result, key)[CELL], result.errors[key][CELL])
    for name in ("f_plus", "f_minus"):
        values[name] = (
            getattr(result, name)[energy, CELL],
            result.errors[name][energy, CELL],
        )
    return values


class Seeds:
    """Runs of one problem with many seeds, through the same steps as `simulate`."""

    def __init__(self, problem, exact, goal):
        self.problem, self.exact, self.goal = problem, exact, goal

    def run(self, seed):
        scenario = self.problem.scenario
        simulation = scenario.simulation.model_copy(update={"seed": seed})
        scenario = scenario.model_copy(update={"simulation": simulation})
        problem = replace(self.problem, scenario=scenario)
        return assembling.assemble(problem, solve(problem, self.goal), scenario)

    def bin_around(self, energy_meV):
        """Edges of the run's energy bin at an energy; any two where nothing depends on energy."""
        if self.problem.bins is None:
            return energy_meV - 0.1, energy_meV + 0.1
        edges = self.problem.bins.edges
        place = np.searchsorted(edges, energy_meV)
        return edges[place - 1], edges[place]

    def z(self, seeds):
        """z of every quantity for every seed, a dict of arrays; and the histories of each run."""
        truth = self.exact.values()
        scores, histories = {}, []
        for seed in seeds:
            result = self.run(seed)
            energy = int(np.argmin(np.abs(result.energy_meV - 0.5 * BIAS)))
            if "f_plus" not in truth:
                middle = result.energy_meV[energy]
                bin_meV = self.bin_around(middle)
                truth["f_plus"] = self.exact.occupation(middle, bin_meV, 1.0)
                truth["f_minus"] = self.exact.occupation(middle, bin_meV, -1.0)
            histories.append(result.histories)
            for name, (value, error) in readings(result, energy).items():
                if error == 0.0:  # known without simulation, as Seebeck's coefficient here
                    assert abs(value - truth[name]) < 1e-9
                    continue
                scores.setdefault(name, []).append((value - truth[name]) / error)
        return {name: np.array(values) for name, values in scores.items()}, np.array(histories)


def check(scores, nu, most_bias=0.0):
    """Hold each quantity's scores against Student's t with nu degrees of freedom.

    most_bias: how far the mean of z may lie from 0 beyond its own statistical error.
    """
    failures = []
    for name, z in scores.items():
        counted = []
        for share in (0.6827, 0.9545):
            inside = np.mean(np.abs(z) <= stats.t.ppf(0.5 + share / 2, nu))
            counted.append((f"in {share:.2%}", inside, share, share * (1 - share)))
        second = nu / (nu - 2)
        fourth = 3 * nu**2 / ((nu - 2) * (nu - 4))
        counted.append(("mean z^2", np.mean(z**2), second, fourth - second**2))
        failures += [
            f"{name}: {what} is {got:.4f}, expected {truth:.4f} +- {np.sqrt(variance / z.size):.4f}"
            for what, got, truth, variance in counted
            if not abs(got - truth) <= 4 * np.sqrt(variance / z.size)
        ]
        if not abs(z.mean()) <= 4 * np.sqrt(second / z.size) + most_bias:
            failures.append(f"{name}: mean z is {z.mean():.4f} in {z.size} seeds")
    assert not failures, "\n".join(failures)


@pytest.fixture(autouse=True)
def _only_what_is_tested(monkeypatch):
    """Leave out the closed forms and the distance from equilibrium: they take most of the time."""
    monkeypatch.setattr(assembling.limits, "limits_for", lambda scenario: ())
    monkeypatch.setattr(
        assembling, "_departure_from", lambda problem, observer, g: np.zeros(problem.cells)
    )


@pytest.mark.parametrize("seeds", [800, pytest.param(2000, marks=pytest.mark.slow)])
def test_constant_problem(seeds):
    """Seeds of a few milliseconds. 16 batches instead of 64: four times as many seeds."""
    problem = problem_of(*NUMBERS, batches=16)
    scores, _ = Seeds(problem, EXACT_NUMBERS, Goal(None, 600, None)).z(range(seeds))
    assert all(z.size == seeds for z in scores.values())
    check(scores, 15)


@pytest.mark.slow
def test_constant_problem_with_the_default_batches():
    scores, _ = Seeds(problem_of(*NUMBERS), EXACT_NUMBERS, Goal(None, 1000, None)).z(range(2000))
    check(scores, 63)


@pytest.mark.parametrize("seeds", [200, pytest.param(2000, marks=pytest.mark.slow)])
def test_energy_tables(seeds):
    """Transmission and path against energy: also current, heat, Seebeck, thermal conductance."""
    problem = problem_of(*TABLES)
    scores, _ = Seeds(problem, EXACT_TABLES, Goal(None, 16_000, None)).z(range(seeds))
    assert {"current", "heat_left", "heat_right", "seebeck", "f_plus"} <= scores.keys()
    check(scores, 63)


@pytest.mark.slow
def test_energy_tables_over_many_rounds():
    """The errors of f come from (batch, round) samples: many rounds must not change them."""
    problem = problem_of(*TABLES)
    scores, _ = Seeds(problem, EXACT_TABLES, Goal(None, 60_000, None)).z(range(1000))
    check(scores, 63)


# Stopping where the estimated error is small prefers samples with a high current: a bias of the
# order of (relative error)^2 R, here 3 % of an error times a number of order 3.
STOPPING_BIAS = 0.15


@pytest.mark.parametrize("seeds", [250, pytest.param(2000, marks=pytest.mark.slow)])
def test_stopping_at_an_error_keeps_the_coverage(seeds):
    runs = Seeds(problem_of(*NUMBERS), EXACT_NUMBERS, Goal(0.03, None, None))
    scores, histories = runs.z(range(seeds))
    assert np.unique(histories).size > 5  # the rule did decide
    check(scores, 63, STOPPING_BIAS)


@pytest.mark.slow
def test_stopping_at_an_error_keeps_the_coverage_with_tables():
    runs = Seeds(problem_of(*TABLES), EXACT_TABLES, Goal(0.008, None, None))
    scores, histories = runs.z(range(1000))
    assert np.unique(histories).size > 5
    check(scores, 63, STOPPING_BIAS)
