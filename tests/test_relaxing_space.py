"""Relaxing runs in two and three dimensions against the deterministic solution with directions.

Tolerance: 4 standard errors and what the run says noise may leave; each checked number is known to
0.35 % of itself, or for potentials and for the sum of all heats of the bias and of I V.
"""

from dataclasses import replace
from functools import cache

import numpy as np
import pytest

from carriersim.assemble_relaxed import assemble_relaxed
from carriersim.engine import iterate
from carriersim.engine.problem import build
from carriersim.engine.solve import Goal
from carriersim.result import Estimate
from carriersim.scenario import read_text
from tests.checks_of_numbers import (
    QUANTUM_S,
    STANDARD_ERRORS,
    agree,
    agree_together,
    exactly,
    part,
    simulate,
)
from tests.reference_kinetic_space import (
    Bath,
    Carriers,
    Case,
    Phonon,
    Plane,
    Probe,
    solve,
)

WATT_PER_MEV2 = 2.0 * QUANTUM_S * 1e-6
BALLISTIC_OHM = 0.5 / QUANTUM_S
CELLS = 40
LARGEST = 0.0035
PLACES = 0.1, 0.55, 0.9  # of the length, where profiles are looked at


# --- scenarios ------------------------------------------------------------------------------------


def scenario(case, histories, channel="", seed=1):
    """A Case as YAML; channel: further keys there."""
    path = case.mean_free_path
    keys = [f"mean_free_path_nm: {path}"] if np.isfinite(path) else []
    keys += [f"points: [{', '.join(_plane(p) for p in case.planes)}]"]
    left, right, lattice = case.temperatures
    return f"""
channel: {{length_nm: {case.length}, dimension: {case.dimension}{channel}}}
contacts:
  bias_mV: {case.bias}
  left: {{temperature_K: {left}}}
  right: {{temperature_K: {right}}}
scattering: {{{", ".join(keys)}}}
relaxation:
  bath_temperature_K: {lattice}
  mechanisms: [{", ".join(_mechanism(m) for m in case.mechanisms)}]
probes: [{", ".join(_probe(p) for p in case.probes)}]
simulation: {{cells: {CELLS}, histories: {histories}, seed: {seed}}}
"""


def _plane(plane):
    t = plane.transmission
    if np.ndim(t):
        t = f"{{energy_meV: {[*t[0]]}, value: {[*t[1]]}}}"
    angular = "tunnel" if plane.tunnel else "constant"
    reflection = "diffuse" if plane.diffuse else "specular"
    return (
        f"{{position_nm: {plane.position}, transmission: {t}, angular: {angular},"
        f" reflection: {reflection}}}"
    )


def _mechanism(one):
    if isinstance(one, Phonon):
        return f"{{kind: optical_phonon, path_nm: {one.path}, energy_meV: {one.energy}}}"
    kind = "bath" if isinstance(one, Bath) else "carriers"
    direction = "randomised" if one.randomised else "kept"
    return f"{{kind: {kind}, path_nm: {one.path}, direction: {direction}}}"


def _probe(probe):
    right, left = probe.couplings  # as the README says: 2 weight coupling, 2 (1 - weight) coupling
    kelvin = "" if probe.temperature is None else f", temperature_K: {probe.temperature}"
    return (
        f"{{position_nm: {probe.position}, coupling: {0.5 * (right + left)},"
        f" weight_right: {right / (right + left)}{kelvin}}}"
    )


class Run:
    """A run of a Case, and what it found."""

    def __init__(self, case, problem, totals):
        self.case, self.totals = case, totals
        self.result = assemble_relaxed(problem, totals, problem.scenario)

    def each(self, name):
        """Mean of a sum over histories in each batch, in meV or meV^2."""
        value = self.totals.sums[name]
        return value / self.totals.histories.reshape(-1, *[1] * (value.ndim - 1))

    def missing_heat(self):
        """Heats of all places minus I V, as part of I V."""
        energy = self.each("energy")
        heats = energy[:, 1] - energy[:, 0]  # of both contacts, less I V
        heats += self.each("heat").sum(axis=1) + self.each("probe_heat").sum(axis=1)
        missing = heats / self.each("current").mean() / self.case.bias
        return Estimate(missing.mean(), missing.std(ddof=1) / np.sqrt(missing.size))


def follow(case, histories, channel="", seed=1):
    """A Run."""
    problem = build(read_text(scenario(case, histories, channel, seed)))
    return Run(case, problem, iterate.relax(problem, Goal(None, histories, None), workers=2))


# --- checks ---------------------------------------------------------------------------------------


def transmission(run, exact):
    e = run.result.transmission
    agree(e, exact.transmission, systematic=e.systematic or 0.0)


def heats(run, exact, names, largest=LARGEST):
    """Powers of the named places; `probe`: the first one."""
    heat = run.result.heat_W
    found = {"left": heat.left_contact, "right": heat.right_contact, "lattice": heat.lattice}
    expected = {"left": exact.heat_left, "right": exact.heat_right, "lattice": exact.lattice}
    if heat.probes:
        found["probe"], expected["probe"] = heat.probes[0], exact.probe_heat[0]
    for name in names:
        e = found[name]
        agree(e, expected[name] * WATT_PER_MEV2, largest, e.systematic or 0.0)


def heats_add_up(run, largest=LARGEST):
    missing = run.missing_heat()
    assert missing.error <= largest
    assert abs(missing.value) <= STANDARD_ERRORS * missing.error + 1e-9, missing


def parts_add_up(run):
    total = sum(p.resistance_ohm.value for p in run.result.breakdown)
    exactly(total, run.result.resistance_ohm.value)


def potentials(run, exact):
    """mu+, mu-, mu in three cells, to 0.35 % of the bias."""
    for cell, (mu, _) in _cells(run, exact):
        for name, one in zip(("mu_plus_meV", "mu_minus_meV", "mu_meV"), mu, strict=True):
            value, error = getattr(run.result, name)[cell], run.result.errors[name][cell]
            assert error <= LARGEST * abs(run.case.bias)
            assert abs(value - one) <= STANDARD_ERRORS * error, f"{name} in cell {cell}"


def temperatures(run, exact, largest=LARGEST):
    """T_e of the mean of both directions in three cells."""
    for cell, (_, kelvin) in _cells(run, exact):
        agree(of_cell(run, "carrier_temperature_K", cell), kelvin[2], largest)


def of_cell(run, key, cell):
    return Estimate(getattr(run.result, key)[cell], run.result.errors[key][cell])


def _cells(run, exact):
    edges = run.result.cell_edges_nm
    for place in PLACES:
        cell = int(np.searchsorted(edges, place * run.case.length, side="right")) - 1
        yield cell, exact.mean(edges[cell], edges[cell + 1])


def jump(run, exact, largest=LARGEST):
    """The part of the resistance at the first plane."""
    before, after = exact.jumps[0]
    found = part(run.result, "point", run.case.planes[0].position)
    agree(found, (before - after) / exact.current * BALLISTIC_OHM, largest)


# --- nothing depends on energy --------------------------------------------------------------------

COLD = Case(100, 30, 3, 40, mean_free_path=100)
HALF = (Plane(40, 0.5),)


def test_randomised_bath():
    case = replace(COLD, dimension=2, planes=HALF, mechanisms=(Bath(80, True),))
    run, exact = follow(case, 1_200_000), solve(case)
    transmission(run, exact)
    heats(run, exact, ("right", "lattice"))
    potentials(run, exact)
    temperatures(run, exact)
    heats_add_up(run)
    parts_add_up(run)


def test_a_reversed_bias_exchanges_the_contacts():
    """An even channel is its own mirror image, whatever happens in an event."""
    runs = [
        follow(replace(COLD, bias=bias, mechanisms=(Bath(80, True),)), 1_800_000, seed=50 + bias)
        for bias in (30, -30)
    ]
    ahead, back = (run.result.heat_W for run in runs)
    agree_together(ahead.left_contact, back.right_contact)
    agree_together(ahead.right_contact, back.left_contact)


def test_randomised_carriers():
    case = replace(COLD, dimension=2, planes=HALF, mechanisms=(Carriers(80, True),))
    run, exact = follow(case, 1_000_000), solve(case)
    transmission(run, exact)
    heats(run, exact, ("right",))
    potentials(run, exact)
    temperatures(run, exact)
    heats_add_up(run)


def test_coupled_probe():
    case = replace(COLD, probes=(Probe(40, 0.6),))
    run, exact = follow(case, 700_000), solve(case)
    transmission(run, exact)
    heats(run, exact, ("right", "probe"))
    agree(run.result.probes[0].potential, exact.probe_mu[0])
    potentials(run, exact)
    temperatures(run, exact)
    heats_add_up(run)
    parts_add_up(run)


def test_coupled_probe_of_unequal_weights():
    """Warmer than the lattice, and a bath as well."""
    case = replace(COLD, probes=(Probe(40, 0.9, 0.3, 80),), mechanisms=(Bath(80, True),))
    run, exact = follow(case, 1_000_000), solve(case)
    transmission(run, exact)
    heats(run, exact, ("right", "lattice"))
    agree(run.result.probes[0].potential, exact.probe_mu[0])
    potentials(run, exact)
    heats_add_up(run)


# --- energies decide ------------------------------------------------------------------------------

TABLE = ((0, 30), (0.2, 0.8))


@pytest.mark.slow
def test_randomised_bath_and_a_table():
    case = replace(COLD, planes=(Plane(40, TABLE),), mechanisms=(Bath(80, True),))
    run, exact = follow(case, 800_000), solve(case)
    transmission(run, exact)
    heats(run, exact, ("right", "lattice"))
    potentials(run, exact)
    temperatures(run, exact)
    jump(run, exact, 0.006)
    heats_add_up(run)
    parts_add_up(run)


PHONONS = {
    "warm": Case(200, 400, 3, 300, mean_free_path=200, mechanisms=(Phonon(30, 160),)),
    "on a circle": Case(100, 60, 2, 100, mean_free_path=100, mechanisms=(Phonon(50, 30),)),
    "cold": Case(100, 100, 3, 4, mean_free_path=100, mechanisms=(Phonon(50, 30),)),
    "and a plane": Case(
        100,
        100,
        3,
        100,
        mean_free_path=100,
        planes=(Plane(40, 0.5, tunnel=True, diffuse=True),),
        mechanisms=(Phonon(60, 30),),
    ),
}
HISTORIES = {"warm": 600_000, "on a circle": 400_000, "cold": 1_000_000, "and a plane": 800_000}


@cache
def phonons(name):
    return follow(PHONONS[name], HISTORIES[name])


@pytest.mark.parametrize("name", PHONONS)
def test_optical_phonons(name):
    run, exact = phonons(name), solve(PHONONS[name])
    transmission(run, exact)
    heats(run, exact, ("lattice",))
    potentials(run, exact)
    temperatures(run, exact, 0.005)
    heats_add_up(run)
    parts_add_up(run)


def test_no_slope_yet():
    result = phonons("cold").result
    assert result.differential_resistance_ohm is None
    assert "d = 2, 3" in result.why["differential_resistance_ohm"]


@pytest.mark.slow
def test_linear_response():
    """Bias 0, with a phonon: as much as a thousandth of kT gives."""
    case = Case(100, 0.01, 3, 100, mean_free_path=100, mechanisms=(Phonon(50, 30),))
    run, exact = follow(replace(case, bias=0), 100_000), solve(case)
    agree(run.result.transmission, exact.transmission)
    agree(run.result.differential_resistance_ohm, BALLISTIC_OHM / exact.transmission)


# --- d = 3 and d = 1, where they must agree -------------------------------------------------------


def diffusive(dimension, mechanism, **settings):
    """lam = 20 nm in any dimension; a path of relaxation in d = 3 is twice that in d = 1."""
    free = {1: 10.0, 3: 15.0}[dimension]
    one = replace(mechanism, path=mechanism.path * {1: 1, 3: 2}[dimension])
    return Case(dimension=dimension, mean_free_path=free, mechanisms=(one,), **settings)


def as_on_a_line(histories, allowed, mechanism, **settings):
    """Share of the lattice, and T_e of right movers in the middle, in d = 3 against d = 1.

    Diffusion goes with lam/(2 k_d), and relaxation per length of the channel with k_d/path. What
    differs is of the order of lam/L: less than `allowed`, as the two exact solutions say.
    """
    case = diffusive(3, mechanism, **settings)
    run = follow(case, histories)
    here, there = solve(case), solve(diffusive(1, mechanism, **settings))
    current = run.each("current").mean()
    lattice = run.each("heat").sum(axis=1) / current / case.bias
    share = Estimate(lattice.mean(), lattice.std(ddof=1) / np.sqrt(lattice.size))
    middle = CELLS // 2
    cell = run.result.cell_edges_nm[middle : middle + 2]
    for value, one, other in (
        (share, here.shares[2], there.shares[2]),
        (
            of_cell(run, "carrier_temperature_plus_K", middle),
            here.mean(*cell)[1][0],
            there.mean(*cell)[1][0],
        ),
    ):
        assert abs(one / other - 1) < allowed
        agree(value, other, systematic=allowed * other)


def test_diffusive_limit_of_a_bath():
    """The exact solutions differ by 0.61 % in the heat: its events scatter, too."""
    bath = Bath(400, True)
    as_on_a_line(1_400_000, 0.0075, bath, length=200, bias=30, temperature_left=40)


@pytest.mark.slow
def test_diffusive_limit_of_phonons():
    as_on_a_line(10_000_000, 0.005, Phonon(300, 30), length=100, bias=100, temperature_left=133)


# --- walls, for which there is no reference -------------------------------------------------------

ROUGH = ", width_nm: 60, height_nm: 80, specularity: 0.3"
MIRRORS = ", width_nm: 60, height_nm: 80, specularity: 1"


@pytest.mark.slow
def test_randomised_bath_between_rough_walls():
    """Its R is that of elastic collisions as frequent as both, between the same walls."""
    case = replace(COLD, planes=HALF, mechanisms=(Bath(100, True),))
    run = follow(case, 1_200_000, ROUGH)
    both = replace(case, mechanisms=(), mean_free_path=50)
    elastic = simulate(scenario(both, 800_000, ROUGH, seed=2))
    agree_together(run.result.resistance_ohm, elastic.resistance_ohm)
    heats_add_up(run)
    parts_add_up(run)


def test_mirrors_are_no_walls():
    case = replace(COLD, mechanisms=(Bath(80, True),))
    run, exact = follow(case, 800_000, MIRRORS), solve(case)
    transmission(run, exact)
    heats(run, exact, ("lattice",))


@pytest.mark.slow
def test_phonons_between_rough_walls():
    case = Case(100, 60, 3, 100, mean_free_path=100, mechanisms=(Phonon(50, 30),))
    run, free = follow(case, 700_000, ROUGH), solve(case)
    heats_add_up(run)
    parts_add_up(run)
    resistance = run.result.resistance_ohm
    assert resistance.error <= LARGEST * resistance.value
    assert resistance.value > 1.1 * BALLISTIC_OHM / free.transmission
    walls = [p.resistance_ohm for p in run.result.breakdown if p.mechanism == "walls"]
    assert sum(w.value for w in walls) > 0.1 * resistance.value
