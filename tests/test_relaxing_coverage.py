"""Do the standard errors of relaxing runs say what they claim? Many seeds against exact values.

As in test_coverage.py: z = (estimate - truth)/error follows Student's t with batches - 1 degrees
of freedom, and every bound is 4 standard errors of what is counted. A run here is 3 windows of 6
rounds as always, but of few histories, so that frozen fields are as noisy as they can ever be.

Truth: tests/reference_kinetic.py, on grids that leave less than a twentieth of an error.

`test_one_run` checks single runs that are long enough for 2 % of wrong physics to fail;
tests/mutation.py shows that they do.
"""

from dataclasses import dataclass, replace
from functools import cache

import numpy as np
import pytest
from scipy.interpolate import CubicSpline

from carriersim.assemble_relaxed import assemble_relaxed
from carriersim.engine import deviation, iterate, rounds
from carriersim.engine.observe_relaxed import heat_share
from carriersim.engine.problem import build
from carriersim.engine.solve import Goal
from carriersim.result import Estimate
from carriersim.scenario import read_text
from tests import reference_kinetic as reference
from tests.checks_of_numbers import QUANTUM_S, Disagreement, TooNoisy, agree, part
from tests.test_coverage import check

WATT_PER_MEV2 = 2.0 * QUANTUM_S * 1e-6
BALLISTIC_OHM = 0.5 / QUANTUM_S
SMALL_ROUND = 12  # histories of a batch in the rounds of the first window, instead of 96
BATCHES = 16
SLOPE_MEV = 0.5  # half the step of the bias that dI/dV is taken from


@dataclass(frozen=True)
class Channel:
    """A scenario, the same for the deterministic solution, and where its fields are looked at."""

    text: str
    case: reference.Case
    place_nm: float
    jump_nm: float | None = None

    def problem(self, batches, cells):
        simulation = f"simulation: {{cells: {cells}, batches: {batches}, energy_bins: 60}}"
        return build(read_text(self.text + simulation))


def channel(case, place_nm, jump_nm=None, mechanisms=(), points=(), contacts="", **more):
    """A Channel; the mechanisms and points of the case are given once more, as YAML."""
    lam = more.pop("path", case.backscatter_path)
    scattering = [f"points: [{', '.join(points)}]"] if points else []
    scattering += [f"backscatter_path_nm: {lam}"] if np.isfinite(lam) else []
    probes = [f"{{position_nm: {place_nm}}}", *more.pop("probes", ())]
    text = f"""
channel: {{length_nm: {case.length}}}
contacts: {{bias_mV: {case.bias}, temperature_K: {case.temperature_left}{contacts}}}
scattering: {{{", ".join(scattering)}}}
relaxation: {{{more.pop("bath", "")} mechanisms: [{", ".join(mechanisms)}]}}
probes: [{", ".join(probes)}]
"""
    assert not more
    return Channel(text, case, place_nm, jump_nm)


def filters(energy_meV, values):
    """Two point scatterers that pass different energies, at 30 and 60 nm: objects and YAML."""
    tables = [(energy_meV, values), (energy_meV, values[::-1])]
    places = 30.0, 60.0
    objects = tuple(reference.Scatterer(x, t) for x, t in zip(places, tables, strict=True))
    yaml = [
        f"{{position_nm: {x}, transmission: {{energy_meV: {[*t[0]]}, value: {[*t[1]]}}}}}"
        for x, t in zip(places, tables, strict=True)
    ]
    return objects, yaml


# Filters that make the current depend on how fast carriers relax between them.
SHARP, SHARP_YAML = filters((10.0, 20.0), (0.05, 0.95))


def between_filters(mechanism, yaml, **settings):
    case = reference.Case(
        length=100.0,
        bias=30.0,
        temperature_left=40.0,
        backscatter_path=300.0,
        scatterers=SHARP,
        mechanisms=(mechanism,),
        **settings,
    )
    return channel(case, 85.0, 30.0, [yaml], SHARP_YAML)


CHANNELS = {
    "kept bath": between_filters(
        reference.Bath(80.0), "{kind: bath, path_nm: 80, direction: kept}", energy_step=1.0
    ),
    "kept carriers": between_filters(
        reference.Carriers(80.0), "{kind: carriers, path_nm: 80}", energy_step=2.0
    ),
    "phonon": channel(
        reference.Case(
            length=60.0,
            bias=100.0,
            temperature_left=300.0,
            backscatter_path=120.0,
            mechanisms=(reference.Phonon(15.0, 25.0),),
            energy_step=2.5,
        ),
        22.0,
        mechanisms=["{kind: optical_phonon, path_nm: 15, energy_meV: 25}"],
    ),
    # Nothing depends on energy: particles start at the contact, fields enter energies only.
    "coupled probe": channel(
        reference.Case(
            length=100.0,
            bias=30.0,
            temperature_left=40.0,
            backscatter_path=150.0,
            scatterers=(reference.Scatterer(30.0, 0.6),),
            mechanisms=(reference.Bath(120.0, randomised=True), reference.Carriers(80.0)),
            probes=(reference.Probe(60.0, 0.4),),
        ),
        45.0,
        30.0,
        [
            "{kind: bath, path_nm: 120, direction: randomised}",
            "{kind: carriers, path_nm: 80}",
        ],
        ["{position_nm: 30, transmission: 0.6}"],
        probes=["{position_nm: 60, coupling: 0.4}"],
    ),
    "randomised bath": channel(
        reference.Case(
            length=100.0,
            bias=30.0,
            temperature_left=40.0,
            backscatter_path=1000.0,
            mechanisms=(reference.Bath(10.0, randomised=True),),
        ),
        45.0,
        mechanisms=["{kind: bath, path_nm: 10, direction: randomised}"],
    ),
    "randomised carriers": channel(
        reference.Case(
            length=100.0,
            bias=30.0,
            temperature_left=10.0,
            backscatter_path=1000.0,
            mechanisms=(reference.Carriers(25.0, randomised=True),),
        ),
        45.0,
        mechanisms=["{kind: carriers, path_nm: 25, direction: randomised}"],
    ),
    # A bath, colder than the contacts, that takes the heat of a clean channel.
    "cold bath": channel(
        reference.Case(
            length=100.0,
            bias=20.0,
            temperature_left=300.0,
            temperature_right=200.0,
            lattice_temperature=100.0,
            mechanisms=(reference.Bath(100.0),),
        ),
        45.0,
        mechanisms=["{kind: bath, path_nm: 100, direction: kept}"],
        contacts=", left: {temperature_K: 300}, right: {temperature_K: 200}",
        bath="bath_temperature_K: 100,",
    ),
    "hot probe": channel(
        reference.Case(
            length=100.0,
            bias=20.0,
            temperature_left=40.0,
            scatterers=(reference.Scatterer(20.0, 0.8),),
            probes=(reference.Probe(60.0, 0.9, temperature=200.0),),
        ),
        45.0,
        20.0,
        points=["{position_nm: 20, transmission: 0.8}"],
        probes=["{position_nm: 60, coupling: 0.9, temperature_K: 200}"],
    ),
}


class Place:
    """Where the fields of a run are looked at: a cell, and bins of energy by name of f."""

    def __init__(self, given, problem):
        self.cell = int(np.searchsorted(problem.cell_edges_nm, given.place_nm) - 1)
        self.edges_nm = problem.cell_edges_nm[self.cell : self.cell + 2]
        self.axis = problem.relaxed.axis
        middle = 0.5 * given.case.bias
        low = -0.5 * self.axis.step_meV  # where the reference occupation is far from 0 and 1
        self.bins = {
            name: ("plus" if "plus" in name else "minus", self._bin(energy))
            for name, energy in (("f_plus", middle), ("f_minus", middle), ("f_minus_low", low))
        }

    def _bin(self, energy_meV):
        return int((energy_meV - self.axis.first_meV) / self.axis.step_meV)

    def bin_meV(self, name):
        return self.axis.first_meV + self.axis.step_meV * (self.bins[name][1] + np.arange(2))


def truth(given, place, slope=False):
    """Exact value of every quantity that `readings` returns, by name, in the same units.

    slope: dI/dV as well, from two more solutions. Tables leave an error of second order in the step
    of energy, which two steps remove.
    """
    case = given.case
    values = _exact(given, place, case, slope)
    if any(np.ndim(s.transmission) for s in case.scatterers):
        fine = _exact(given, place, replace(case, energy_step=0.5 * case.energy_step), slope)
        values = {name: (4.0 * fine[name] - value) / 3.0 for name, value in values.items()}
    return values


def _exact(given, place, case, slope):
    solution = reference.solve(case)
    values = _totals(given, solution) | _fields(place, solution)
    if slope:
        biases = case.bias + SLOPE_MEV, case.bias - SLOPE_MEV
        up, down = (reference.solve(replace(case, bias=bias)).current for bias in biases)
        values["slope"] = (up - down) / 2 / SLOPE_MEV / BALLISTIC_OHM
    return values


def _totals(given, s):
    case = s.case
    ohm_per_meV = BALLISTIC_OHM / s.current
    middle = 0.5 * (s.mu_plus + s.mu_minus)
    totals = {
        "current": s.current * 2e-3 * QUANTUM_S,
        "heat_left": s.heat_left * WATT_PER_MEV2,
        "heat_right": s.heat_right * WATT_PER_MEV2,
        "lattice": s.lattice * WATT_PER_MEV2,
        "share": s.lattice_share,
        "resistance": case.bias * ohm_per_meV,
        "interface": (case.bias - middle[0]) * ohm_per_meV,
        "probe": 0.5 * sum(s.at(name, given.place_nm) for name in ("mu_plus", "mu_minus")),
    }
    if given.jump_nm is not None:
        before, after = middle[np.flatnonzero(s.x == given.jump_nm)[[0, -1]]]
        totals["jump"] = (before - after) * ohm_per_meV
    if case.of_kind(reference.Phonon):
        totals["elastic"] = case.length / case.backscatter_path * BALLISTIC_OHM
        totals["phonon"] = totals["resistance"] - totals["elastic"] - BALLISTIC_OHM
    if case.probes:
        totals["coupled"] = s.probe_mu[0]
        totals["probe_power"] = s.probe_heat[0] * WATT_PER_MEV2
    return totals


def _fields(place, s):
    """Means over the cell, of f over the bin as well; temperatures from mean n and u."""
    node, weight = np.polynomial.legendre.leggauss(6)
    x, weight = place.edges_nm[0] + np.diff(place.edges_nm) * (node + 1) / 2, weight / 2
    fields = {"power": weight @ s.lattice_density(x) * WATT_PER_MEV2}
    number, energy = [], []
    for side in ("plus", "minus"):
        mu, kelvin = s.at(f"mu_{side}", x), s.at(f"T_{side}", x)
        number.append(weight @ mu)
        energy.append(weight @ ((np.pi * reference.BOLTZMANN * kelvin) ** 2 / 6 + mu**2 / 2))
    for name, (side, _) in place.bins.items():
        f = CubicSpline(s.energy, weight @ s.at(f"f_{side}", x))
        fields[name] = f.integrate(*place.bin_meV(name)) / place.axis.step_meV
    means = [*number, np.mean(number)], [*energy, np.mean(energy)]
    for side, n, u in zip(("_plus", "_minus", ""), *means, strict=True):
        fields[f"mu{side}"] = n
        fields[f"T{side}"] = np.sqrt(6 * (u - n**2 / 2)) / np.pi / reference.BOLTZMANN
    return fields


def readings(given, place, problem, totals):
    """Estimates of a run by name."""
    result = assemble_relaxed(problem, totals, problem.scenario)
    heat, cell = result.heat_W, place.cell
    found = {
        "current": result.current_A,
        "heat_left": heat.left_contact,
        "heat_right": heat.right_contact,
        "lattice": heat.lattice,
        "share": heat_share(problem, totals),
        "probe": result.probes[0].potential,
        "slope": result.conductance_S,
    }
    if result.resistance_ohm is not None:
        found |= {"resistance": result.resistance_ohm, "interface": part(result, "interface", 0.0)}
        if given.jump_nm is not None:
            found["jump"] = part(result, "point", given.jump_nm)
        if given.case.of_kind(reference.Phonon):
            found["elastic"] = part(result, "piece", given.place_nm, "elastic")
            found["phonon"] = part(result, "piece", given.place_nm, "optical phonon")
    if len(result.probes) > 1:
        found |= {"coupled": result.probes[1].potential, "probe_power": heat.probes[1]}
    for name, key in KEYS.items():
        found[name] = Estimate(getattr(result, key)[cell], result.errors[key][cell])
    finer = result.energy_meV.size // problem.relaxed.axis.bins
    for name, (side, bin_) in place.bins.items():  # the parts of a bin err together
        key, parts = f"f_{side}", slice(bin_ * finer, (bin_ + 1) * finer)
        f, error = getattr(result, key)[parts, cell], result.errors[key][parts, cell]
        found[name] = Estimate(f.mean(), error.mean())
    return {name: e for name, e in found.items() if e is not None}


KEYS = {
    "mu_plus": "mu_plus_meV",
    "mu_minus": "mu_minus_meV",
    "mu": "mu_meV",
    "T_plus": "carrier_temperature_plus_K",
    "T_minus": "carrier_temperature_minus_K",
    "T": "carrier_temperature_K",
    "power": "lattice_power_W_per_nm",
}


# --- many short runs ------------------------------------------------------------------------------


def scores(name, seeds, slope):
    """(value - truth, error, systematic) of every quantity, arrays over the seeds."""
    given = CHANNELS[name]
    problem = given.problem(BATCHES, 12)
    place = Place(given, problem)
    exact = truth(given, place, slope)
    found = {}
    for seed in seeds:
        simulation = problem.scenario.simulation.model_copy(update={"seed": seed})
        scenario = problem.scenario.model_copy(update={"simulation": simulation})
        one = replace(problem, scenario=scenario)
        totals = iterate.relax(one, Goal(None, 1, None))  # no more than the fewest windows
        assert len(totals.windows) == iterate.FIRST_WINDOWS
        for key, e in readings(given, place, one, totals).items():
            if key in exact and e.error > 0.0:  # nobody heats a lattice without a bath
                row = e.value - exact[key], e.error, e.systematic or 0.0
                found.setdefault(key, []).append(row)
    return {key: np.array(rows).T for key, rows in found.items()}


@pytest.fixture
def short_runs(monkeypatch):
    """Rounds of few histories, and the trial occupation, which no seed enters, found once."""
    monkeypatch.setattr(rounds, "FIRST_SIZE", SMALL_ROUND)
    find = iterate.FromTrial
    one = cache(lambda key: find(key.problem))

    class Key:
        """All problems of a test are the same channel."""

        def __init__(self, problem):
            self.problem = problem

        def __hash__(self):
            return 0

        def __eq__(self, other):
            return True

    monkeypatch.setattr(iterate, "FromTrial", lambda problem: one(Key(problem)))


@pytest.fixture
def without_slopes(monkeypatch):
    """Leave out the runs that follow a change of the bias."""
    follow = iterate._follow

    def main_run_only(problem, deviation, *others):
        if deviation.tangent:
            raise iterate.NothingDone
        return follow(problem, deviation, *others)

    monkeypatch.setattr(iterate, "_follow", main_run_only)


OVER_SEEDS = [
    pytest.param("kept bath", marks=pytest.mark.slow),
    "phonon",
    pytest.param("coupled probe", marks=pytest.mark.slow),
]
# Their errors cover a bend of f inside a bin, which the means compared here don't have, and in runs
# from a trial occupation also what one particle of the whole bias would change.
AT_LEAST = {"f_plus", "f_minus", "f_minus_low"}


def hold(found):
    """Errors alone, as noisy as fields are: what noise leaves behind must not show."""
    z = {key: d / error for key, (d, error, _) in found.items()}
    check({key: one for key, one in z.items() if key not in AT_LEAST}, BATCHES - 1)
    for key in AT_LEAST:
        assert np.mean(np.abs(z[key]) < 1.0) > 0.6
    for key, (d, error, systematic) in found.items():
        if systematic.any():
            assert abs(d.mean()) <= systematic.mean() + 4.0 * error.mean() / np.sqrt(d.size), key


@pytest.mark.parametrize("name", OVER_SEEDS)
def test_coverage_over_100_seeds(name, short_runs, without_slopes):
    found = scores(name, range(100), slope=False)
    assert {"resistance", "probe", "heat_left", "lattice", "mu", "f_plus", "T"} <= found.keys()
    hold(found)


@pytest.mark.slow
@pytest.mark.parametrize("name", OVER_SEEDS)
def test_coverage_over_500_seeds(name, short_runs):
    found = scores(name, range(1000, 1500), slope=name != "coupled probe")
    hold(found)


# --- one run at a time ----------------------------------------------------------------------------

BATCHES_OF_ONE, CELLS_OF_ONE = 32, 20
# Histories, and the largest relative errors of what must be known well.
ONE_RUN = {
    "kept bath": (200_000, {"current": 1e-3, "lattice": 1e-3, "jump": 1e-3, "T_plus": 1e-3}),
    "kept carriers": (400_000, {"current": 1e-3, "heat_left": 4e-3, "T_plus": 1e-3}),
    "phonon": (800_000, {"current": 1e-3, "lattice": 1e-3, "phonon": 1e-3, "slope": 4.5e-3}),
    "coupled probe": (2_000_000, {"current": 3e-3, "probe_power": 3e-3, "T": 2e-3, "drawn": 4e-3}),
    "randomised bath": (2_000_000, {"current": 3e-3, "lattice": 4e-3, "probe": 3e-3}),
    "randomised carriers": (2_000_000, {"current": 3e-3, "T": 2e-3, "drawn": 4e-3}),
    "cold bath": (1_500_000, {"heat_left": 4e-3, "lattice": 3e-3, "T": 2e-3}),
    "hot probe": (1_500_000, {"heat_left": 3e-3, "probe_power": 3e-3, "T_minus": 2e-3}),
}
POOR = 0.2  # of the phonons' rate
WITH_SLOPE = {"phonon", "randomised bath"}


@pytest.mark.parametrize("name", ONE_RUN)
def test_one_run(name):
    """Everything within 4 errors and what noise may leave, at errors that let 2 % of it show."""
    given, (histories, largest) = CHANNELS[name], ONE_RUN[name]
    problem = given.problem(BATCHES_OF_ONE, CELLS_OF_ONE)
    place = Place(given, problem)
    totals = iterate.relax(problem, Goal(None, histories, None), workers=2)
    found = readings(given, place, problem, totals)
    exact = truth(given, place, slope=name in WITH_SLOPE)
    if "drawn" in largest:
        found["drawn"] = drawn_energy(problem, totals)
        exact["drawn"] = mean_energy(given, problem)
    for key, limit in largest.items():
        if not found[key].error <= limit * abs(found[key].value):
            raise TooNoisy(f"{key}: {found[key]}")
    for key in found.keys() & exact.keys():
        e = found[key]
        far = 4.0 * e.error + (e.systematic or 0.0) + 1e-7 * abs(exact[key])
        if e.error > 0.0 and not abs(e.value - exact[key]) <= far:
            raise Disagreement(f"{key} of {name} is {e}, not {exact[key]:.6g}")


def test_a_poor_trial(monkeypatch, without_slopes):
    """A trial occupation of too few phonons: particles, and what is quadratic in them, mend it."""
    find = deviation.solve_trial

    def with_few_phonons(problem):
        relaxed, few = problem.relaxed, POOR * problem.relaxed.mechanisms.phonon_rate
        poor = replace(relaxed, mechanisms=relaxed.mechanisms._replace(phonon_rate=few))
        return find(replace(problem, relaxed=poor))

    monkeypatch.setattr(deviation, "solve_trial", with_few_phonons)
    given = CHANNELS["phonon"]
    problem = given.problem(BATCHES_OF_ONE, CELLS_OF_ONE)
    place = Place(given, problem)
    totals = iterate.relax(problem, Goal(None, 800_000, None), workers=2)
    lattice = readings(given, place, problem, totals)["lattice"]
    agree(lattice, truth(given, place)["lattice"], 0.02, lattice.systematic)


def drawn_energy(problem, totals):
    """Energy of the particles themselves, mean over the channel, where results come from energies
    that carriers events keep: only f shows it."""
    each = totals.sums["cells"] / totals.histories[:, None, None, None]
    each = each[..., 1].mean(axis=-1) @ np.diff(problem.cell_edges_nm) / problem.cell_edges_nm[-1]
    return Estimate(each.mean(), each.std(ddof=1) / np.sqrt(each.size))


def mean_energy(given, problem):
    """The same of the deterministic solution."""
    s = reference.solve(given.case)
    node, weight = np.polynomial.legendre.leggauss(4)
    left, width = problem.cell_edges_nm[:-1], np.diff(problem.cell_edges_nm)
    x = left[:, None] + width[:, None] * (node + 1) / 2
    lattice = given.case.temperatures[2]
    energy = 0.0
    for side in ("plus", "minus"):
        mu, kelvin = (s.at(f"{name}_{side}", x) for name in ("mu", "T"))
        warm = (np.pi * reference.BOLTZMANN) ** 2 / 6 * (kelvin**2 - lattice**2)
        energy += 0.5 * (warm + mu**2 / 2) @ weight / 2
    return float(energy @ width / width.sum())
