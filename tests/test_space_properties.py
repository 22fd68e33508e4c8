"""What must hold in every elastic run in two and three dimensions, whatever the scenario.

As tests/test_conservation.py: what holds for each run is asked for to rounding; where a law holds
on average, scores z are collected over all examples. The examples are the same in every run.
"""

import re
import zlib
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import carriersim as cs
from carriersim.engine import solve as solving
from carriersim.engine.problem import build
from carriersim.engine.solve import Goal, NothingDone, solve
from carriersim.engine.straight import is_straight
from carriersim.scenario import read_text
from tests import reference_angles
from tests.channels_in_space import Run, follow, yaml_of
from tests.checks_of_numbers import agree, fermi
from tests.reference_angles import Case, Plane, Section, plain_wire
from tests.reference_slot import Slot
from tests.test_repeat import same

GRID = 32  # places are multiples of length/32: exact in binary, so a mirrored channel is exact too
BATCHES = 16
# Student's t with 15 degrees of freedom beyond 12: 4e-9 on both sides.
FAR = 12.0
BIAS = 8.0

chances = st.one_of(st.floats(0.3, 0.9), st.floats(0.3, 0.9), st.just(1.0))


@st.composite
def planes(draw, places):
    """Planes of every kind at places, diffuse tunnel barriers most of all."""
    kinds = st.sampled_from(
        [(True, True), (True, True), (True, False), (False, True), (False, False)]
    )
    return tuple(Plane(x, draw(chances), *draw(kinds)) for x in sorted(places))


@st.composite
def channels(draw):
    """A Case and keys of its walls, not so opaque that hardly anybody arrives."""
    length = draw(st.sampled_from([1.0, 64.0]))
    step = length / GRID
    places = draw(st.lists(st.integers(0, GRID), min_size=1, max_size=4, unique=True))
    cuts = sorted(draw(st.lists(st.integers(0, GRID), min_size=2, max_size=2, unique=True)))
    numbers = st.floats(0.5, 8.0).map(lambda f: f * length)
    paths = st.one_of(numbers, numbers, numbers, st.none())
    sections = draw(st.booleans()) * (Section(cuts[0] * step, cuts[1] * step, draw(paths)),)
    dimension = draw(st.sampled_from([2, 3]))
    case = Case(
        length,
        dimension,
        draw(paths),
        sections=sections,
        planes=draw(planes([p * step for p in places])),
    )
    walls = ""
    if draw(st.integers(0, 2)):
        sizes = draw(st.tuples(*2 * [st.floats(0.4, 2.0)]))
        mirrors = draw(st.tuples(*2 * [st.sampled_from([0.0, 0.5, 0.9, 1.0])]))
        walls = f"width_nm: {sizes[0] * length}, specularity: {mirrors[0]}"
        if dimension == 3:
            walls = (
                f"width_nm: {sizes[0] * length}, height_nm: {sizes[1] * length},"
                f" specularity: {{width: {mirrors[0]}, height: {mirrors[1]}}}"
            )
    return case, walls


class Drawn(Run):
    """A run of a Case with walls."""

    def __init__(self, case, walls="", histories=1600, **more):
        self.case = case
        settings = {"cells": 8, "batches": BATCHES, "histories": histories} | more
        # A seed of its own for every scenario, so that scores are independent.
        settings.setdefault("seed", zlib.crc32(repr((case, walls)).encode()))
        probes = [(case.length * k / GRID, 0.25) for k in (9, 23)]
        probes = [p for p in probes if p[0] not in {plane.position for plane in case.planes}]
        text = yaml_of(case, BIAS, probes=probes, channel=walls, **settings)
        super().__init__(text, workers=1)

    def means(self):
        """Occupations of each batch in each cell, right- and left-moving: (batches, C, 2)."""
        return self.totals.cells[:, 0] / self.totals.histories[:, None, None] / BIAS

    def occupations(self):
        """Of each batch, at both sides of each node: (batches, K, 4), see Sample.rays."""
        return self.totals.rays["densities"] / self.totals.histories[:, None, None] / BIAS

    def passed(self):
        """Transmission of each batch."""
        return self.totals.transmitted[:, 0] / self.totals.histories


def check_nobody_is_lost(run):
    """Every history ends in a contact, and passes every node as often to the right, but for one."""
    arrivals, histories = run.totals.arrivals / BIAS, run.totals.histories
    through = run.totals.transmitted[:, 0]
    size = 1e-12 * arrivals.max()
    for node in np.flatnonzero(~run.problem.is_scatterer):
        net = arrivals[:, node, 0] - arrivals[:, node, 1]
        np.testing.assert_allclose(net, through, rtol=0, atol=size)
    np.testing.assert_allclose(arrivals[:, -1, 1], 0, atol=size)  # the right contact sends nobody
    np.testing.assert_allclose(arrivals[:, 0, 0] - histories, 0, atol=size)
    if not run.problem.is_scatterer[0]:  # who comes back to the left contact has left the channel
        np.testing.assert_allclose(arrivals[:, 0, 1] + through, histories, rtol=1e-12)
    if not run.problem.is_scatterer[-1]:
        np.testing.assert_allclose(arrivals[:, -1, 0], through, rtol=0, atol=size)


def check_current_everywhere(run):
    """To the right less to the left is I at every place, since every crossing is counted."""
    result = run.result
    right, left = result.current_by_direction.sum(axis=2).T * 5
    assert right.size == result.view_nm.size >= 3
    np.testing.assert_allclose(right - left, result.current_A.value, rtol=1e-9)
    assert result.current_by_direction.min() >= -1e-12 * right.max()
    # In a channel without an interface on the left, all that is emitted passes there.
    if not run.problem.is_scatterer[0]:
        emitted = 1e-3 * BIAS / result.ballistic_resistance_ohm
        np.testing.assert_allclose(right[0], emitted, rtol=1e-9)


def check_sums(run):
    """Heat and the parts of the resistance."""
    result = run.result
    heat, power = result.heat_W, result.current_A.value * BIAS * 1e-3
    places = [heat.left_contact, heat.right_contact, heat.lattice, *heat.probes]
    assert abs(sum(h.value for h in places) - power) <= 1e-12 * power
    assert heat.lattice.value == 0.0 and all(h.value == 0.0 for h in heat.probes)
    parts = [p.resistance_ohm.value for p in result.breakdown]
    assert abs(sum(parts) - result.resistance_ohm.value) <= 1e-9 * result.resistance_ohm.value
    kinds = [p.kind for p in result.breakdown]
    assert kinds.count("point") == run.problem.is_scatterer.sum()
    readings = [p.potential.value for p in result.probes]
    if len(readings) == 2:
        drop = (readings[0] - readings[1]) / BIAS * result.resistance_ohm.value
        four = result.four_point[0].resistance_ohm.value
        assert abs(four - drop) <= 1e-9 * result.resistance_ohm.value


def check_bounds(run):
    """0 <= f <= 1, and every array has an error."""
    result = run.result
    for name in ("mu_plus_meV", "mu_minus_meV", "mu_meV"):
        value, error = getattr(result, name) / BIAS, result.errors[name] / BIAS
        assert np.isfinite(value).all() and np.isfinite(error).all() and (error >= 0).all()
        assert (value > -FAR * error - 1e-12).all() and (value < 1 + FAR * error + 1e-12).all()
    both = 0.5 * (result.mu_plus_meV + result.mu_minus_meV)
    np.testing.assert_allclose(result.mu_meV, both, rtol=0, atol=1e-11 * BIAS)
    for name in ("f_plus", "f_minus"):
        value, error = getattr(result, name), result.errors[name]
        assert (value > -FAR * error - 1e-12).all() and (value < 1 + FAR * error + 1e-12).all()


def scatters_everywhere(case):
    return case.mean_free_path is not None and all(s.mean_free_path for s in case.sections)


# Without collisions the 1e-4 of carriers that graze most make 1 % of an occupation; in few
# histories there may be none of them (planes.GRAZING).
UNSEEN = 0.015


def score(each, expected, known):
    """Value less expectation over the standard error of the mean of batches; nan if no noise.

    known: how far it may be off beside the noise.
    """
    error = each.std(axis=0, ddof=1) / np.sqrt(len(each))
    difference = each.mean(axis=0) - expected
    assert np.all(np.abs(difference) <= FAR * error + known), (difference, error)
    return np.divide(difference, error, out=np.full_like(error, np.nan), where=error > 1e-9)


def test_laws_of_every_run():
    """Conservation in each run; equilibrium and reversal from runs of mirrored channels.

    Full from both contacts is full everywhere, so the occupation that a full left contact causes
    and, mirrored, that of the mirrored channel add to one: in cells and at both sides of planes.
    """
    found = {"cells": [], "planes": [], "transmission": []}
    kinds, straight = set(), 0

    @given(channels())
    @settings(max_examples=60)
    def holds(channel):
        nonlocal straight
        case, walls = channel
        run = Drawn(case, walls)
        other = Drawn(case.mirrored, walls, seed=zlib.crc32(repr((channel, 2)).encode()))
        straight += is_straight(run.problem)
        kinds.update((case.dimension, p.tunnel, p.diffuse) for p in case.planes)
        for one in (run, other):
            check_nobody_is_lost(one)
            check_current_everywhere(one)
            check_sums(one)
            check_bounds(one)
        everywhere = scatters_everywhere(case)
        known = 1e-9 if everywhere else UNSEEN
        total = run.means() + other.means()[:, ::-1, ::-1]
        z = score(total, 1.0, known)
        if everywhere:
            found["cells"].append(z[len(z) // 2, 0])
        # Right- and left-movers before a plane become left- and right-movers behind it.
        planes = run.problem.is_scatterer
        total = run.occupations() + other.occupations()[:, ::-1, [2, 3, 0, 1]]
        z = score(total[:, planes], 1.0, known)
        if everywhere and z.size:
            found["planes"].append(z[len(z) // 2, 1])
        through = run.passed() - other.passed()
        found["transmission"].append(score(through, 0.0, 1e-9))

    holds()
    assert len(kinds) >= 6 and straight > 0  # of 8; what is drawn differs between processes
    for name, z in found.items():
        z = np.array([v for v in z if np.isfinite(v)])
        assert z.size > 10, name
        nu = BATCHES - 1  # at least
        second = nu / (nu - 2)
        spread = 4 * np.sqrt((3 * nu**2 / ((nu - 2) * (nu - 4)) - second**2) / z.size)
        assert abs(z.mean()) < 4 * np.sqrt(second / z.size), name
        assert 1 - spread < np.mean(z**2) < second + spread, name


# --- equilibrium --------------------------------------------------------------------------------

EVERYTHING = Case(
    64,
    3,
    mean_free_path=50,
    sections=(Section(20, 40, 15), Section(40, 44, None)),
    planes=(
        Plane(0, 0.6, True, True),
        Plane(16, 0.5, False, True),
        Plane(30, 0.4, True, True),
        Plane(50, 0.5, True),
        Plane(64, 0.7, False, True),
    ),
)
WALLS = {
    2: "width_nm: 20, specularity: 0.3",
    3: "width_nm: 20, height_nm: 30, specularity: {width: 0.3, height: 0}",
}
EACH_DIMENSION = pytest.mark.parametrize("dimension", [2, 3])


@EACH_DIMENSION
def test_equal_contacts_leave_the_fermi_function_as_it_is(dimension):
    """Only the deviation from it is simulated, so it holds to rounding in every cell."""
    text = yaml_of(
        replace(EVERYTHING, dimension=dimension),
        bias_mV=1e-9,
        kelvin=20,
        channel=WALLS[dimension],
        histories=3000,
        cells=10,
    )
    result = follow(text)
    exact = fermi(result.energy_meV, 0.0, 20.0)
    for f in (result.f_plus, result.f_minus):
        np.testing.assert_allclose(f, np.repeat(exact[:, None], f.shape[1], axis=1), atol=1e-8)
    np.testing.assert_allclose(result.carrier_temperature_K, 20, rtol=1e-6)


@EACH_DIMENSION
def test_bias_scales_all_and_linear_response_is_the_limit(dimension):
    """The same walks at any bias: potentials per bias and R are the same."""
    case = replace(EVERYTHING, dimension=dimension)
    keys = {"channel": WALLS[dimension], "histories": 3000, "cells": 10, "probes": [(10, 0.5)]}
    results = [follow(yaml_of(case, bias_mV=bias, **keys)) for bias in (0, 1e-3, -50)]
    linear = results[0]
    for bias, result in zip((1, 1e-3, -50), results, strict=True):
        assert result.resistance_ohm.value == pytest.approx(linear.resistance_ohm.value, rel=1e-9)
        assert result.transmission.value == pytest.approx(linear.transmission.value, rel=1e-9)
        for name in ("mu_plus_meV", "mu_minus_meV"):
            np.testing.assert_allclose(getattr(result, name) / bias, getattr(linear, name))
        one, other = result.probes[0].potential, linear.probes[0].potential
        assert one.value / bias == pytest.approx(other.value)


# --- the same bits ------------------------------------------------------------------------------

TABLES = """
name: repeat
channel: {length_nm: 64, dimension: 3, width_nm: 30, height_nm: 20, specularity: 0.4}
contacts: {bias_mV: 4, temperature_K: 10, left: {transmission: 0.6, angular: tunnel}}
scattering:
  mean_free_path_nm: {energy_meV: [0, 4], value: [90, 30]}
  points:
    - position_nm: 30
      transmission: {energy_meV: [1, 3], value: [0.3, 0.8]}
      angular: tunnel
      reflection: diffuse
probes: [{position_nm: 40}]
simulation: {histories: 40000, cells: 10, energy_bins: 20, seed: 7}
"""
CONSTANT = yaml_of(
    replace(EVERYTHING, dimension=2),
    probes=[(10, 0.5)],
    channel=WALLS[2],
    histories=6000,
    cells=10,
    trajectories=5,
)
REPEATED = {"constant": CONSTANT, "tables": TABLES}


@pytest.mark.parametrize("text", REPEATED.values(), ids=REPEATED)
def test_any_number_of_workers_and_the_saved_scenario_repeat_the_run(text, tmp_path):
    one = cs.simulate(read_text(text), workers=1)
    assert one.iterations > 2
    same(one, cs.simulate(read_text(text), workers=2), leave_out=["scenario"])
    one.save(tmp_path / "first")
    saved = cs.load(tmp_path / "first" / "scenario.yaml")
    same(one, cs.simulate(saved, workers=2), leave_out=["scenario", "stopped_by", "converged"])
    again = cs.open_result(tmp_path / "first")
    np.testing.assert_array_equal(again.current_by_direction, one.current_by_direction)
    np.testing.assert_array_equal(again.view_nm, one.view_nm)


def test_another_seed_is_another_run():
    one, other = (follow(TABLES.replace("seed: 7", f"seed: {seed}")) for seed in (7, 8))
    assert one.resistance_ohm != other.resistance_ohm


# --- corners ------------------------------------------------------------------------------------


def test_a_very_flat_wire_is_a_film():
    """The far walls are met by a thousandth of the carriers."""
    run = Drawn(Case(3, 3), "width_nm: 1, height_nm: 1000, specularity: 0", histories=400_000)
    check_nobody_is_lost(run)
    exact = Slot(3, 0).transmission
    agree(run.result.transmission, exact, 0.003, systematic=0.002 * exact)


@pytest.mark.parametrize("path", [None, 1.0])
@EACH_DIMENSION
def test_a_very_thin_wire(dimension, path):
    """Walls every hundredth of a nanometre: nobody is lost, and it is what a plain walk finds."""
    height = None if dimension == 2 else 0.01
    walls = "width_nm: 0.01, specularity: 0.5" + ("" if height is None else ", height_nm: 0.01")
    run = Drawn(Case(0.32, dimension, path), walls, histories=20_000)
    check_nobody_is_lost(run)
    check_current_everywhere(run)
    check_sums(run)
    assert run.result.events > 30 * run.result.histories
    plain = plain_wire(0.32, 0.01, height, 0.5, path or np.inf, histories=20_000, seed=2)
    found = run.result.transmission
    assert abs(found.value - plain.transmission) < 4 * np.hypot(found.error, plain.error)


def test_a_thin_slit_has_clausings_transmission():
    run = Drawn(Case(0.08, 2), "width_nm: 0.01, specularity: 0", histories=500_000)
    agree(run.result.transmission, Slot(8, 0).transmission, 0.003)


@EACH_DIMENSION
def test_nothing_in_the_way(dimension):
    """Everybody gets through, and every number is exact."""
    walls = WALLS[dimension].replace("0.3", "1").replace("height: 0", "height: 1")
    run = Drawn(Case(7, dimension), walls)
    assert run.problem.transparent
    assert run.result.transmission.value == 1.0
    np.testing.assert_allclose(run.result.mu_plus_meV, BIAS, rtol=1e-12)
    np.testing.assert_allclose(run.result.mu_minus_meV, 0.0, atol=1e-12)
    for part in run.result.breakdown:
        expected = 0.5 * run.result.ballistic_resistance_ohm if part.kind == "interface" else 0.0
        assert abs(part.resistance_ohm.value - expected) < 1e-9 * run.result.resistance_ohm.value


def test_a_channel_that_hardly_lets_anybody_through():
    run = Drawn(Case(32, 3, planes=(Plane(8, 1e-3, True, True),)), histories=2_000_000)
    exact = reference_angles.solve(run.case).transmission
    found = run.result.transmission
    assert abs(found.value - exact) < 4 * found.error < 0.3 * exact
    check_sums(run)


# --- carriers without end -----------------------------------------------------------------------


def endless(histories):
    """A thick channel, where some carriers collide very often; a node every 10 nm."""
    text = yaml_of(
        Case(60, 3, 4, planes=(Plane(30, 0.9, diffuse=True),)),
        probes=[(x, 0.5) for x in (10, 20, 40, 50)],
        histories=histories,
        cells=6,
    )
    return build(read_text(text))


def test_a_carrier_without_end_is_named(monkeypatch):
    """Particle, batch, place and limit; what was done before stays."""
    limit = 6 * 128
    monkeypatch.setattr(solving, "EVENT_LIMIT", limit)
    totals = solve(endless(300_000), Goal(None, 300_000, None))
    assert totals.stopped_by == "event_limit" and totals.rounds > 0 and not totals.converged
    pattern = r"carrier (\d+) of batch (\d+), last seen at (\d+) nm, used up 8e\+02 random numbers"
    carrier, batch, place = map(int, re.fullmatch(pattern, totals.trouble).groups())
    assert place in range(0, 61, 10) and batch < 64
    # The same carrier gets as far as that in a run that lets it go on.
    assert carrier >= totals.histories[batch]
    monkeypatch.setattr(solving, "EVENT_LIMIT", 10**10)
    done = int(totals.histories.sum())
    again = solve(endless(done), Goal(None, done, None))
    assert again.trouble == "" and again.stopped_by == "histories"
    np.testing.assert_array_equal(again.transmitted, totals.transmitted)


def test_a_run_whose_first_carriers_have_no_end_says_which(monkeypatch):
    monkeypatch.setattr(solving, "EVENT_LIMIT", 100)
    with pytest.raises(NothingDone, match=r"carrier \d+ of batch \d+, last seen at"):
        solve(endless(1000), Goal(None, 1000, None))
