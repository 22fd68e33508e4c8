"""What must hold in every run, whatever the scenario: counted, conserved, bounded.

Scenarios are drawn over all groups of keys. Where a law holds for each run it is asked for to
rounding; where it holds on average only, scores z are collected over all examples and held against
their law. The examples are the same in every run.
"""

import json
import zlib
from collections import Counter
from itertools import combinations

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats

from carriersim import fermi
from carriersim.assemble import assemble
from carriersim.disorder import draw_random_points
from carriersim.engine.observe import Observer
from carriersim.engine.problem import build
from carriersim.engine.solve import Goal, solve
from carriersim.jackknife import jackknife
from carriersim.scenario import EnergyTable, Point, read_text

GRID = 64  # places are multiples of length/64: exact in binary, so a mirrored channel is exact too
FEWEST_BATCHES = 16
# Student's t with 15 degrees of freedom beyond 12: 4e-9 on both sides; for the up to 1e5 numbers
# (strongly correlated) that one test compares at most 4e-4 false alarms, once and for all.
FAR = 12.0

number = st.floats(0.25, 1.0)


def tables(low, high):
    """Tables of energy around the Fermi windows drawn below, sometimes with one flat stretch."""
    return st.integers(2, 4).flatmap(
        lambda n: st.fixed_dictionaries(
            {
                "energy_meV": st.lists(
                    st.integers(-60, 60), min_size=n, max_size=n, unique=True
                ).map(sorted),
                "value": st.lists(st.floats(low, high), min_size=n, max_size=n),
            }
        )
    )


@st.composite
def path_values(draw, length):
    """A path: number or table, not so short that hardly anybody arrives."""
    numbers = st.floats(0.4, 8.0)
    if draw(st.integers(0, 2)):
        return length * draw(numbers)
    table = draw(tables(0.4, 8.0))
    return table | {"value": [length * v for v in table["value"]]}


@st.composite
def paths(draw, length):
    """The path keys of one level: none, a number, a table, or named paths."""
    key = draw(st.sampled_from(["mean_free_path_nm", "backscatter_path_nm"]))
    form = draw(st.sampled_from(["none", "one", "one", "named"]))
    if form == "none":
        return {}
    if form == "one":
        return {key: draw(path_values(length))}
    kinds = draw(
        st.lists(
            st.sampled_from(["mean_free_path_nm", "backscatter_path_nm"]), min_size=1, max_size=3
        )
    )
    names = ["defects", "phonons", "edges"]
    return {
        key: [
            {"name": name, kind: draw(path_values(length))}
            for name, kind in zip(names, kinds, strict=False)
        ]
    }


@st.composite
def contacts(draw):
    """Bias and temperatures (equal, unequal, 0 K) and interface transmissions."""
    bias = draw(st.sampled_from([0.0, 1e-3, 1.0, -1.0, 8.0, -8.0, 60.0]))
    kelvins = st.sampled_from([0.0, 4.2, 50.0, 300.0])
    left, right = draw(kelvins), draw(kelvins)
    sides = {"left": {}, "right": {}}
    for side in sides.values():
        kind = draw(st.sampled_from(["open", "open", "number", "table"]))
        if kind != "open":
            side["transmission"] = draw(number if kind == "number" else tables(0.25, 1.0))
    given = {"bias_mV": bias}
    if draw(st.booleans()):
        given["temperature_K"] = left
        right = left
    else:
        sides["left"]["temperature_K"], sides["right"]["temperature_K"] = left, right
    return given | {side: keys for side, keys in sides.items() if keys}


@st.composite
def scatterings(draw, length, step, places):
    """Paths, sections, points at the given places, random groups."""
    result = draw(paths(length))
    cuts = sorted(draw(st.lists(st.integers(0, GRID), max_size=4, unique=True)))
    pairs = zip(cuts[::2], cuts[1::2], strict=False)
    result["sections"] = [
        {"from_nm": a * step, "to_nm": b * step} | draw(paths(length)) for a, b in pairs
    ]
    result["points"] = [
        {
            "position_nm": place * step,
            "transmission": draw(st.one_of(number, number, tables(0.25, 1.0))),
        }
        for place in places
    ]
    if draw(st.integers(0, 3)) == 0:
        group = draw(
            st.sampled_from([{"count": 2}, {"count": 0}, {"density_per_um": 1000.0 / length}])
        )
        group = group | {"transmission": draw(st.one_of(number, st.just({"low": 0.5, "high": 1})))}
        if draw(st.booleans()):
            group |= {"from_nm": 8 * step, "to_nm": 40 * step}
        result["random"] = [group]
    return result


@st.composite
def scenarios(draw, histories=1500):
    """A scenario with keys of every group, cheap to simulate."""
    step = draw(st.sampled_from([0.125, 1.0, 8.0]))
    length = GRID * step
    places = draw(st.lists(st.integers(1, GRID - 1), max_size=6, unique=True))
    split = draw(st.integers(0, min(3, len(places))))
    channel = {"length_nm": length}
    kind = draw(st.sampled_from(["default", "number", "table"]))
    if kind != "default":
        channel["modes"] = draw(st.floats(0.5, 9.0) if kind == "number" else tables(0.5, 4.0))
    if draw(st.booleans()):
        channel["degeneracy"] = draw(st.sampled_from([1, 2, 4]))
    weights = st.sampled_from([0.0, 0.5, 0.75, 1.0])
    probes = [
        {"position_nm": place * step, "weight_right": draw(weights)}
        for place in places[split:]
        for _ in range(draw(st.integers(1, 2)))
    ]
    simulation = {
        "histories": histories,
        "cells": draw(st.sampled_from([1, 8, 20, 30])),
        "batches": draw(st.sampled_from([FEWEST_BATCHES, FEWEST_BATCHES, 24])),
    }
    if draw(st.booleans()):
        simulation["energy_bins"] = draw(st.integers(8, 40))
    if draw(st.booleans()):
        simulation["disorder_seed"] = draw(st.integers(0, 99))
    data = {
        "channel": channel,
        "contacts": draw(contacts()),
        "scattering": draw(scatterings(length, step, places[:split])),
        "probes": probes,
        "simulation": simulation,
    }
    if draw(st.integers(0, 3)) == 0:  # keys that say nothing about elastic transport
        data |= {
            "name": "drawn",
            "noise": False,
            "accuracy": {"potential_mV": 0.1, "resistance_relative": 0.02},
            "relaxation": {"bath_temperature_K": 77, "substrate_conductance_W_per_K_m": 0.2},
        }
    # A seed of its own for every scenario, so that scores of alike examples are independent.
    simulation["seed"] = zlib.crc32(json.dumps(data).encode())
    return draw_random_points(read_text(json.dumps(data)))


class Run:
    """One run, seen from inside (counts of its batches) and from outside (the Result)."""

    def __init__(self, scenario):
        self.scenario = scenario
        self.problem = build(scenario)
        self.totals = solve(self.problem, Goal(None, scenario.simulation.histories, None))
        self.result = assemble(self.problem, self.totals, scenario)


ALL_GROUPS = {
    "path number",
    "path table",
    "named paths",
    "named path table",
    "ballistic",
    "sections",
    "points",
    "point table",
    "left interface",
    "right interface",
    "interface table",
    "bias 0",
    "negative bias",
    "equal temperatures",
    "unequal temperatures",
    "0 K left",
    "0 K both",
    "modes number",
    "modes table",
    "degeneracy",
    "probes",
    "probe weight",
    "energy bins",
    "disorder seed",
    "other keys",
}


def groups(scenario):
    """Groups of keys that a scenario exercises, to see that the examples cover them all."""
    scattering, contacts = scenario.scattering, scenario.contacts
    levels = [scattering, *scattering.sections]
    values = [v for level in levels for v in (level.mean_free_path_nm, level.backscatter_path_nm)]
    inner = [
        v
        for value in values
        if isinstance(value, tuple)
        for item in value
        for v in (item.mean_free_path_nm, item.backscatter_path_nm)
    ]
    temperatures = scenario.left_temperature_K, scenario.right_temperature_K

    def table(value):
        return isinstance(value, EnergyTable)

    found = {
        "path number": any(isinstance(v, float) for v in values),
        "path table": any(table(v) for v in values),
        "named paths": any(isinstance(v, tuple) for v in values),
        "named path table": any(table(v) for v in inner),
        "ballistic": not any(v for v in values),
        "sections": bool(scattering.sections),
        "points": bool(scattering.points),
        "point table": any(table(p.transmission) for p in scattering.points),
        "left interface": contacts.left.transmission != 1.0,
        "right interface": contacts.right.transmission != 1.0,
        "interface table": table(contacts.left.transmission) or table(contacts.right.transmission),
        "bias 0": contacts.bias_mV == 0,
        "negative bias": contacts.bias_mV < 0,
        "equal temperatures": temperatures[0] == temperatures[1],
        "unequal temperatures": temperatures[0] != temperatures[1],
        "0 K left": temperatures[0] == 0,
        "0 K both": temperatures == (0, 0),
        "modes number": not table(scenario.channel.modes),
        "modes table": table(scenario.channel.modes),
        "degeneracy": scenario.channel.degeneracy != 2,
        "probes": bool(scenario.probes),
        "probe weight": any(p.weight_right != 0.5 for p in scenario.probes),
        "energy bins": scenario.simulation.energy_bins is not None,
        "disorder seed": scenario.simulation.disorder_seed is not None,
        "other keys": scenario.accuracy.potential_mV is not None,
    }
    assert found.keys() == ALL_GROUPS
    return {name for name, there in found.items() if there}


def hold_against_t(values, nu_low, nu_high=np.inf):
    """Hold scores against Student's t with nu_low to nu_high degrees of freedom: mean, mean square.

    4 standard errors each (6e-5 false alarms).
    """
    z = np.array(values)

    def second(nu):
        return 1.0 if nu == np.inf else nu / (nu - 2)

    fourth = 3 * nu_low**2 / ((nu_low - 2) * (nu_low - 4)) if nu_low < np.inf else 3.0
    spread = 4 * np.sqrt((fourth - second(nu_low) ** 2) / z.size)
    assert second(nu_high) - spread < np.mean(z**2) < second(nu_low) + spread, z.size
    assert abs(z.mean()) < 4 * np.sqrt(second(nu_low) / z.size)


def check_flux_at_nodes(run):
    """Nobody is lost: the net flux of every batch is the same at every node and at the end.

    A node that turns nobody back passes on exactly who arrives, so its net flux is the difference
    of the arrivals from both sides. Returns scores for the nodes that do turn carriers back: every
    arrival is one Bernoulli trial there, so the difference between net flux and
    T (arrivals from the left - arrivals from the right) has the variance T (1-T) arrivals.
    """
    problem, totals = run.problem, run.totals
    net = totals.transmitted @ problem.functionals.filling
    arrivals = totals.arrivals
    scale = np.abs(arrivals).sum(axis=(1, 2)).max() + np.abs(net).max()
    # What happens at one energy weighs the same at every node, so rounding is all that differs.
    open_nodes = np.flatnonzero(~problem.is_scatterer)
    for k in open_nodes:
        through = arrivals[:, k, 0] - arrivals[:, k, 1]
        np.testing.assert_allclose(through, net, rtol=0, atol=1e-12 * scale)
    assert np.all(arrivals[:, -1, 1] == 0.0)  # the right contact sends nobody here
    if problem.bins is not None:
        return []
    full = problem.functionals.filling[0]
    counts, through = arrivals.sum(axis=0) / full, net.sum() / full
    np.testing.assert_allclose(counts[0, 0], totals.histories.sum(), rtol=1e-12)
    scores = []
    for k in np.flatnonzero(problem.is_scatterer):
        chance = problem.geometry.transmission[k]
        variance = chance * (1 - chance) * counts[k].sum()
        scores.append((through - chance * (counts[k, 0] - counts[k, 1])) / np.sqrt(variance))
    return scores


def check_flux_in_cells(result):
    """mu+ - mu- is the same in every cell, and the same as probes of unequal weight see."""
    net = result.mu_plus_meV - result.mu_minus_meV
    size = np.abs(result.mu_plus_meV).max() + 1e-300
    np.testing.assert_allclose(net, net[0], rtol=0, atol=1e-11 * size)
    np.testing.assert_allclose(
        result.mu_meV, 0.5 * (result.mu_plus_meV + result.mu_minus_meV), rtol=0, atol=1e-11 * size
    )
    full = 1.0 if result.linear_response else result.scenario.contacts.bias_mV
    if result.transmission is not None:
        np.testing.assert_allclose(net[0], full * result.transmission.value, rtol=1e-9)
    pairs = combinations(zip(result.scenario.probes, result.probes, strict=True), 2)
    for (one, first), (other, second) in pairs:
        if one.position_nm == other.position_nm:
            np.testing.assert_allclose(
                first.potential.value - second.potential.value,
                (one.weight_right - other.weight_right) * net[0],
                rtol=0,
                atol=1e-10 * size,
            )


def check_heat(result):
    """I V = heat in the left contact + heat in the right one (+ nothing elsewhere)."""
    bias = result.scenario.contacts.bias_mV
    if result.linear_response:
        assert result.heat_W is None and result.current_A is None
        assert {"heat_W", "current_A"} <= result.why.keys()
        return
    heat, current = result.heat_W, result.current_A.value
    everywhere = [heat.left_contact, heat.right_contact, heat.lattice, *heat.probes]
    size = abs(heat.left_contact.value) + abs(heat.right_contact.value)
    total = sum(h.value for h in everywhere)
    assert abs(total - current * bias * 1e-3) <= 1e-12 * size
    assert heat.lattice.value == 0.0 and all(h.value == 0.0 for h in heat.probes)
    assert result.thermal.heat_current_left_W.value == -heat.left_contact.value
    assert result.thermal.heat_current_right_W.value == heat.right_contact.value


def check_breakdown(result):
    """The parts add up to R; four-point resistances are differences of the readings over I."""
    scenario = result.scenario
    same = scenario.left_temperature_K == scenario.right_temperature_K
    if not same:
        assert result.breakdown is None and result.resistance_ohm is None
        assert {"breakdown", "resistance_ohm", "four_point"} <= result.why.keys()
        return
    resistance = result.resistance_ohm.value
    if result.breakdown is None:
        assert "five standard errors" in result.why["breakdown"]
        assert not result.resistance_ohm.error < resistance / 5
    else:
        parts = [part.resistance_ohm.value for part in result.breakdown]
        assert abs(sum(parts) - resistance) <= 1e-9 * resistance
        places = [p.from_nm if p.kind == "piece" else p.position_nm for p in result.breakdown]
        assert places == sorted(places)
        kinds = Counter(part.kind for part in result.breakdown)
        barriers = [scenario.contacts.left.transmission, scenario.contacts.right.transmission]
        points = [*barriers, *(p.transmission for p in scenario.scattering.points)]
        assert kinds["point"] == sum(t != 1.0 for t in points)
        assert kinds["interface"] == 2
    full = 1.0 if result.linear_response else scenario.contacts.bias_mV
    readings = [probe.potential.value for probe in result.probes]
    expected = [(a - b) / full * resistance for a, b in combinations(readings, 2)]
    got = [pair.resistance_ohm.value for pair in result.four_point]
    np.testing.assert_allclose(got, expected, rtol=1e-9, atol=1e-9 * resistance)


def check_occupations(result):
    """f lies between those of the contacts, hence in [0, 1], within its error.

    At bias 0 the arrays are df/d(eV), between 0 and -dF/dE.
    """
    scenario, energy = result.scenario, result.energy_meV
    for name in ("f_plus", "f_minus"):
        f, error = getattr(result, name), result.errors[name]
        assert np.isfinite(f).all() and np.isfinite(error).all() and (error >= 0).all()
        assert f.shape == (energy.size, result.x_nm.size)
        if result.linear_response:
            low, high = np.zeros(energy.size), np.full(energy.size, np.inf)
            if scenario.left_temperature_K > 0:
                high = fermi.minus_slope(energy, 0.0, scenario.left_temperature_K)
        else:
            assert (f >= -FAR * error - 1e-12).all() and (f <= 1 + FAR * error + 1e-12).all()
            bias = scenario.contacts.bias_mV
            both = [
                fermi.occupation(energy, bias, scenario.left_temperature_K),
                fermi.occupation(energy, 0.0, scenario.right_temperature_K),
            ]
            low, high = np.minimum(*both), np.maximum(*both)
        assert (f >= low[:, None] - FAR * error - 1e-12).all()
        assert (f <= high[:, None] + FAR * error + 1e-12).all()


def check_errors(result):
    """Every profile has a finite error or a reason why it has none."""
    for name, error in result.errors.items():
        missing = np.isnan(getattr(result, name)).all()
        assert missing == (name in result.why), name
        assert missing or ((error >= 0) & np.isfinite(error)).all(), name


def judged(row, result):
    """Whether a closed form is exact and the simulation can tell its error.

    A part that turns back fewer than thirty carriers of the run has no error bar worth the name.
    """
    if row.holds != "exact" or row.z is None:
        return False
    resistance = result.resistance_ohm or result.differential_resistance_ohm
    part = row.quantity.startswith(("breakdown", "four_point"))
    return not part or row.expected > 30 * resistance.value / result.histories


def test_conservation_laws():
    """Flux, heat, resistance and occupations in 200 scenarios over all groups of keys."""
    seen, scores, scored = Counter(), [], []

    @given(scenarios())
    @settings(max_examples=200)
    def holds(scenario):
        run = Run(scenario)
        result = run.result
        seen.update(groups(scenario))
        here = check_flux_at_nodes(run)
        scores.extend(here)
        assert all(abs(z) < 6.5 for z in here)  # the normal law: 1e-10
        check_flux_in_cells(result)
        check_heat(result)
        check_breakdown(result)
        check_occupations(result)
        check_errors(result)
        z = [row.z for row in result.limits if judged(row, result)]
        scored.extend([np.array(z)] if z else [])

    holds()
    missing = ALL_GROUPS - seen.keys()
    assert not missing
    hold_against_t(scores, np.inf)
    # Every closed form in every run: 4.55 % of the scores lie outside. Those of one run hang
    # together, so the spread between runs is what counts.
    far = stats.t.ppf(0.5 + 0.9545 / 2, FEWEST_BATCHES - 1)
    outside = [np.mean(np.abs(z) > far) for z in scored]
    assert abs(np.mean(outside) - 0.0455) < 4 * np.std(outside) / np.sqrt(len(outside))
    assert max(np.abs(z).max() for z in scored) < FAR


def mirrored(scenario):
    """The same channel seen from the other end; the contacts keep their potentials."""
    length = scenario.channel.length_nm
    s, c = scenario.scattering, scenario.contacts
    points = tuple(
        p.model_copy(update={"position_nm": length - p.position_nm}) for p in reversed(s.points)
    )
    sections = tuple(
        x.model_copy(update={"from_nm": length - x.to_nm, "to_nm": length - x.from_nm})
        for x in reversed(s.sections)
    )
    left = c.left.model_copy(update={"transmission": c.right.transmission})
    right = c.right.model_copy(update={"transmission": c.left.transmission})
    probes = tuple(
        p.model_copy(update={"position_nm": length - p.position_nm})
        for p in reversed(scenario.probes)
    )
    seed = scenario.simulation.seed + 1
    return scenario.model_copy(
        update={
            "scattering": s.model_copy(update={"points": points, "sections": sections}),
            "contacts": c.model_copy(update={"left": left, "right": right}),
            "probes": probes,
            "simulation": scenario.simulation.model_copy(update={"seed": seed}),
        }
    )


def test_responses_to_both_contacts_add_to_one():
    """g+ of the left contact and of the right one (the mirrored channel's g-) fill all states."""
    potentials, occupations = [], []

    @given(scenarios(), st.floats(0, 0.999))
    @settings(max_examples=300)
    def adds(scenario, where):
        run, other = Run(scenario), Run(mirrored(scenario))
        result, mirror = run.result, other.result
        length = scenario.channel.length_nm
        np.testing.assert_allclose(
            result.cell_edges_nm, length - mirror.cell_edges_nm[::-1], atol=1e-9 * length
        )
        full = run.problem.functionals.filling.sum()
        cell = int(where * result.x_nm.size)
        size = np.abs(run.problem.functionals.filling).sum()
        for one, two in (("mu_plus_meV", "mu_minus_meV"), ("mu_minus_meV", "mu_plus_meV")):
            total = getattr(result, one) + getattr(mirror, two)[::-1] - full
            error = np.hypot(result.errors[one], mirror.errors[two][::-1])
            assert (np.abs(total) <= FAR * error + 1e-11 * size).all()
        if error[cell] > 1e-9 * size:
            potentials.append(total[cell] / error[cell])
        if scenario.linear_response:
            return
        energies = result.energy_meV
        left = fermi.occupation(energies, scenario.contacts.bias_mV, scenario.left_temperature_K)
        right = fermi.occupation(energies, 0.0, scenario.right_temperature_K)
        energy = int(np.argmax(np.abs(left - right)))
        total = result.f_plus[energy] + mirror.f_minus[energy, ::-1] - left[energy] - right[energy]
        error = np.hypot(result.errors["f_plus"][energy], mirror.errors["f_minus"][energy, ::-1])
        share = 1.0
        if run.problem.bins:
            place = np.searchsorted(run.problem.bins.edges, energies[energy])
            share = run.problem.share[place - 1]
        # From few visitors of an energy bin no error can be told.
        if error[cell] > 1e-9 and scenario.simulation.histories * share > 30:
            assert (np.abs(total) <= FAR * error + 1e-12).all()
            occupations.append(total[cell] / error[cell])

    adds()
    assert len(potentials) > 100 and len(occupations) > 50
    both_runs = 2 * 23  # degrees of freedom of two runs of 24 batches
    hold_against_t(potentials, FEWEST_BATCHES - 1, both_runs)
    hold_against_t(occupations, FEWEST_BATCHES - 1, both_runs)


@st.composite
def close_scatterers(draw):
    """Scenarios with at least two scatterers inside one cell of ten."""
    scenario = draw(scenarios(histories=640))
    length = scenario.channel.length_nm
    taken = {p.position_nm for p in scenario.probes}
    tenth = draw(st.integers(0, 9))
    inside = draw(st.lists(st.floats(0.01, 0.09), min_size=2, max_size=3, unique=True))
    places = sorted({length * (0.1 * tenth + part) for part in inside} - taken)
    points = tuple(
        Point(position_nm=place, transmission=draw(st.floats(0.3, 0.9))) for place in places
    )
    others = tuple(p for p in scenario.scattering.points if p.position_nm not in places)
    points = tuple(sorted([*others, *points], key=lambda p: p.position_nm))
    return scenario.model_copy(
        update={
            "scattering": scenario.scattering.model_copy(update={"points": points}),
            "simulation": scenario.simulation.model_copy(update={"energy_bins": 24}),
        }
    )


@given(close_scatterers())
@settings(max_examples=200)
def test_cells_change_no_number(scenario):
    """10 and 400 cells: the same bits of all that is no profile, scatterer by scatterer."""
    runs = []
    for cells in (10, 400):
        simulation = scenario.simulation.model_copy(update={"cells": cells})
        problem = build(scenario.model_copy(update={"simulation": simulation}))
        totals = solve(problem, Goal(None, scenario.simulation.histories, None))
        batches = {"histories": totals.histories.astype(float)}
        batches |= {"transmitted": totals.transmitted, "arrivals": totals.arrivals}
        observer = Observer(problem)
        runs.append((problem, totals, *jackknife(observer.scalars, batches)))
    (few, _, *first), (many, _, *second) = runs
    assert few.cells < many.cells
    edges = few.cell_edges_nm
    for point in scenario.scattering.points:  # cells are cut at every scatterer
        assert point.position_nm in edges
    for one, two in zip(first, second, strict=True):
        for name in one:
            np.testing.assert_array_equal(one[name], two[name], err_msg=name)
    values, _ = first
    jumps = values["jumps"]
    assert jumps.size == few.is_scatterer.sum() >= 2
    np.testing.assert_array_equal(runs[0][1].histories, runs[1][1].histories)


@given(st.integers(0, 2**40), st.lists(st.integers(1, 9), max_size=3, unique=True), st.booleans())
@settings(max_examples=50)
def test_fine_cells_average_to_coarse_ones(seed, tenths, tables):
    """The same walks tallied in 10 and in 400 cells: the track lengths are the same."""
    transmission = "{energy_meV: [-5, 5], value: [0.3, 0.8]}" if tables else "0.5"
    points = [f"{{position_nm: {32 * k}, transmission: {transmission}}}" for k in sorted(tenths)]
    text = (
        "{channel: {length_nm: 320}, contacts: {bias_mV: 3, temperature_K: 4},"
        f" scattering: {{backscatter_path_nm: 150, points: [{', '.join(points)}]}},"
        f" simulation: {{seed: {seed}, energy_bins: 20, batches: 16, cells: CELLS}}}}"
    )
    totals = [
        solve(build(read_text(text.replace("CELLS", str(cells)))), Goal(None, 640, None)).cells
        for cells in (10, 400)
    ]
    batches, rows, _, _ = totals[0].shape
    average = totals[1].reshape(batches, rows, 10, 40, 2).mean(axis=3)
    np.testing.assert_allclose(average, totals[0], rtol=1e-10, atol=1e-10 * np.abs(average).max())
