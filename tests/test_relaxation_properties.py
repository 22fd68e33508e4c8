"""What holds for any mixture of relaxation, probes and scatterers: no formula, only symmetries.

Scenarios are drawn over all mechanisms; the examples are the same in every run. Runs are as short
as they can be (16 batches). Two runs that should agree have different random numbers.
"""

import json
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import example, given, settings
from hypothesis import strategies as st

from carriersim.assemble import assemble
from carriersim.engine.deviation import FromReference
from carriersim.engine.iterate import relax
from carriersim.engine.problem import build
from carriersim.engine.solve import Goal, solve
from carriersim.result import Estimate
from carriersim.runner import as_done
from carriersim.scenario import read_text

GRID = 16  # places are whole sixteenths of the length, so that a mirrored channel is exact too
BATCHES = 16
# Student's t with 15 degrees of freedom beyond 7: 4e-6 on both sides.
FAR = 7.0
# Errors of occupations come from 16 batches in each of 12 rounds: close to the normal law.
FAR_OCCUPATION = 6.0


class Run:
    """A run of a document, short and with 16 batches unless told otherwise."""

    def __init__(self, document, histories=BATCHES, seed=1):
        simulation = {"histories": histories, "cells": 20, "batches": BATCHES, "seed": seed}
        self.scenario = read_text(json.dumps(document | {"simulation": simulation}))
        self.problem = build(self.scenario)
        follow = relax if self.problem.relaxed is not None else solve
        self.totals = follow(self.problem, Goal(None, histories, None), 2)
        done = as_done(self.scenario, self.totals.all_histories)
        self.result = assemble(self.problem, self.totals, done)


def total(estimates):
    """Sum of dependent estimates; their errors add up at worst."""
    return Estimate(
        sum(e.value for e in estimates),
        sum(e.error for e in estimates),
        sum(e.systematic or 0.0 for e in estimates),
    )


def close(one, other, far=FAR):
    """Two independent estimates of the same number."""
    noise = far * np.hypot(one.error, other.error)
    known = (one.systematic or 0.0) + (other.systematic or 0.0)
    size = max(abs(one.value), abs(other.value))
    assert abs(one.value - other.value) <= noise + known + 1e-9 * size, (one, other)


def tight(estimate, largest=0.02):
    """Four errors may not hide more than this."""
    assert 4 * estimate.error < 4 * largest * abs(estimate.value), estimate


# --- what is drawn --------------------------------------------------------------------------------


@st.composite
def mechanisms(draw, length):
    kind = draw(st.sampled_from(["bath", "bath", "carriers", "carriers", "optical_phonon"]))
    one = {"kind": kind, "path_nm": length * draw(st.sampled_from([0.3, 1.0, 3.0]))}
    if kind == "optical_phonon":
        return one | {"energy_meV": draw(st.sampled_from([40.0, 80.0]))}
    return one | {"direction": draw(st.sampled_from(["kept", "randomised"]))}


@st.composite
def mixtures(draw, biases=(5.0, -60.0, 60.0, 200.0), same=False, tables=True):
    """Documents with relaxation, in equilibrium or far from it."""
    length = draw(st.sampled_from([50.0, 200.0, 1000.0]))
    kelvins = st.sampled_from([20.0, 77.0, 300.0])
    left = draw(kelvins)
    right, lattice = (left, left) if same else (draw(kelvins), draw(kelvins))
    count = draw(st.integers(0, 4))
    places = draw(st.lists(st.integers(1, GRID - 1), min_size=count, max_size=count, unique=True))
    points, probes = [], []
    for place in sorted(places):
        x = place * length / GRID
        if draw(st.booleans()):
            value = draw(st.floats(0.3, 0.95))
            if tables and draw(st.integers(0, 3)) == 0:
                value = {"energy_meV": [-10.0, 50.0], "value": [value, draw(st.floats(0.3, 1.0))]}
            points.append({"position_nm": x, "transmission": value})
        else:
            probe = {"position_nm": x, "coupling": draw(st.sampled_from([0.1, 0.5, 1.0]))}
            probes.append(probe | {"weight_right": draw(st.sampled_from([0.5, 0.5, 0.8, 0.1]))})
    scattering = {"points": points}
    if draw(st.booleans()):
        scattering["backscatter_path_nm"] = length * draw(st.sampled_from([0.5, 2.0]))
    if draw(st.booleans()):
        low, high = sorted(
            draw(st.lists(st.integers(0, GRID), min_size=2, max_size=2, unique=True))
        )
        section = {"from_nm": low * length / GRID, "to_nm": high * length / GRID}
        scattering["sections"] = [section | {"backscatter_path_nm": 0.7 * length}]
    return {
        "channel": {"length_nm": length},
        "contacts": {
            "bias_mV": draw(st.sampled_from(biases)),
            "left": {"temperature_K": left},
            "right": {"temperature_K": right},
        },
        "scattering": scattering,
        "relaxation": {
            "bath_temperature_K": lattice,
            "mechanisms": draw(st.lists(mechanisms(length), min_size=1, max_size=3)),
        },
        "probes": probes,
    }


# --- balance --------------------------------------------------------------------------------------


def check_energy(run):
    """Contacts, lattice and probes share I V; to rounding where particles are all there is."""
    result = run.result
    heat, bias = result.heat_W, run.scenario.contacts.bias_mV * 1e-3
    powers = [heat.left_contact, heat.right_contact, heat.lattice, *heat.probes]
    size = sum(abs(p.value) for p in powers)
    rest = sum(p.value for p in powers) - result.current_A.value * bias
    if run.problem.relaxed.setting.exact_energy:
        assert abs(rest) <= 1e-9 * size
        return
    noise = total([*powers, Estimate(0.0, result.current_A.error * abs(bias))])
    assert abs(rest) <= FAR * noise.error + noise.systematic + 1e-6 * size
    assert abs(rest) <= 0.02 * size


def check_number(run):
    """What arrives at a node departs from it: the net flux is the current everywhere."""
    n = run.totals.histories[:, None]
    sums = run.totals.sums
    arrivals, departures = (sums[key] / n[..., None] for key in ("arrivals", "departures"))
    current = sums["current"][:, None] / n
    size = max(np.abs(x).sum(axis=-1).max() for x in (arrivals, departures))
    for flux in (arrivals[..., 0] - departures[..., 1], departures[..., 0] - arrivals[..., 1]):
        gap = flux - current  # in each batch, which brings its own particles to all nodes
        noise = gap.std(axis=0, ddof=1) / np.sqrt(len(n))
        assert (np.abs(gap.mean(axis=0)) <= FAR * noise + 1e-6 * size).all()


def check_occupations(result):
    for name in ("f_plus", "f_minus"):
        f, error = getattr(result, name), result.errors[name]
        assert np.isfinite(f).all() and np.isfinite(error).all()
        assert (f >= -FAR_OCCUPATION * error - 2e-3).all(), name
        assert (f <= 1 + FAR_OCCUPATION * error + 2e-3).all(), name


def check_parts(result):
    if result.breakdown is None:
        assert result.why["breakdown"]
        return
    parts = sum(p.resistance_ohm.value for p in result.breakdown)
    assert abs(parts - result.resistance_ohm.value) <= 1e-8 * abs(result.resistance_ohm.value)


def check_balance(document):
    run = Run(document)
    check_energy(run)
    check_number(run)
    check_occupations(run.result)
    check_parts(run.result)


@given(mixtures())
@settings(max_examples=8)
def test_balance(document):
    check_balance(document)


@pytest.mark.slow
@given(mixtures(biases=(0.5, -5.0, 20.0, -200.0, 400.0)))
@settings(max_examples=80)
def test_balance_of_many(document):
    check_balance(document)


# --- equilibrium ----------------------------------------------------------------------------------


def check_equilibrium(document):
    """All at one temperature, no bias: nothing flows, and a tiny bias tells the same slope."""
    still = Run(document).result
    assert still.linear_response and still.current_A is None and still.heat_W is None
    kelvin = document["relaxation"]["bath_temperature_K"]
    np.testing.assert_allclose(still.carrier_temperature_K, kelvin, rtol=1e-6)
    assert (still.departure == 0.0).all()
    check_parts(still)
    contacts = document["contacts"] | {"bias_mV": 1e-3}
    moved = Run(document | {"contacts": contacts}, seed=2)
    result = moved.result
    close(result.resistance_ohm, still.resistance_ohm)
    tight(still.resistance_ohm)
    power = result.current_A.value * 1e-6
    kT2 = (0.08617333 * kelvin) ** 2
    for one in (result.heat_W.lattice, *result.heat_W.probes):
        # Linear in the bias at most (Peltier, where T depends on energy), and it sums to I V.
        assert abs(one.value) <= FAR * one.error + 1e-3 * np.sqrt(kT2) * 8e-11 + abs(power)


@given(mixtures(biases=(0.0,), same=True))
@settings(max_examples=3)
def test_equilibrium(document):
    check_equilibrium(document)


@pytest.mark.slow
@given(mixtures(biases=(0.0,), same=True))
@settings(max_examples=30)
def test_equilibrium_of_many(document):
    check_equilibrium(document)


# --- the same in other words ----------------------------------------------------------------------

BARRIER = {"position_nm": 60.0, "transmission": 0.5}
FILTERS = [
    {"position_nm": 50.0, "transmission": {"energy_meV": [0.0, 30.0], "value": [0.2, 0.8]}},
    {"position_nm": 150.0, "transmission": {"energy_meV": [0.0, 30.0], "value": [0.9, 0.3]}},
]


def channel(mechanisms, bias=30.0, kelvin=20.0, points=(BARRIER,), path=300.0, probes=()):
    return {
        "channel": {"length_nm": 200.0},
        "contacts": {"bias_mV": bias, "temperature_K": kelvin},
        "scattering": {"backscatter_path_nm": path, "points": list(points)},
        "relaxation": {"mechanisms": list(mechanisms)},
        "probes": list(probes),
    }


def mechanism(kind, path, direction=None, energy=None):
    others = {"direction": direction, "energy_meV": energy}
    given = {key: value for key, value in others.items() if value is not None}
    return {"kind": kind, "path_nm": path} | given


KINDS = {
    "bath kept": ("bath", "kept", None),
    "bath randomised": ("bath", "randomised", None),
    "carriers kept": ("carriers", "kept", None),
    "carriers randomised": ("carriers", "randomised", None),
    "phonon": ("optical_phonon", None, 40.0),
}
QUICK = "bath kept", "phonon"
FEW = pytest.mark.parametrize(
    "name", [pytest.param(n, marks=() if n in QUICK else pytest.mark.slow) for n in KINDS]
)


def numbers(result):
    """Current, heat in each place, and levels and temperatures in the middle."""
    middle = result.x_nm.size // 2
    names = ("mu_plus_meV", "mu_minus_meV", "carrier_temperature_plus_K")
    profiles = [Estimate(getattr(result, n)[middle], result.errors[n][middle]) for n in names]
    heat = result.heat_W
    return [
        result.current_A,
        result.resistance_ohm,
        heat.left_contact,
        heat.right_contact,
        heat.lattice,
        *heat.probes,
        *profiles,
    ]


def same(one, other):
    for a, b in zip(numbers(one), numbers(other), strict=True):
        close(a, b)
    for result in (one, other):
        tight(result.current_A, 0.005)


@FEW
def test_one_mechanism_split_in_two(name):
    kind, direction, energy = KINDS[name]
    bias = 100.0 if kind == "optical_phonon" else 30.0
    one = channel([mechanism(kind, 100.0, direction, energy)], bias, points=FILTERS)
    two = channel([mechanism(kind, 200.0, direction, energy)] * 2, bias, points=FILTERS)
    same(Run(one, 300_000).result, Run(two, 300_000, seed=2).result)


@FEW
def test_weak_relaxation_is_none(name):
    """An infinite path leaves the elastic channel, tables of energy included."""
    kind, direction, energy = KINDS[name]
    weak = channel([mechanism(kind, 1e7, direction, energy)], points=FILTERS)
    relaxed = Run(weak, 300_000).result
    elastic = Run(channel([], points=FILTERS), 1_000_000, seed=2).result
    assert relaxed.relaxes and not elastic.relaxes
    rest = relaxed.heat_W.lattice
    assert abs(rest.value) <= 1e-4 * relaxed.current_A.value * 30e-3 + FAR * rest.error
    for a, b in zip(numbers(relaxed), numbers(elastic), strict=True):
        if b is not elastic.heat_W.lattice:
            close(a, b)
    tight(relaxed.current_A, 0.005)


@pytest.mark.parametrize("path", [20.0, pytest.param(1000.0, marks=pytest.mark.slow)])
@pytest.mark.parametrize("kind", ["bath", pytest.param("carriers", marks=pytest.mark.slow)])
def test_kept_relaxation_leaves_the_resistance(kind, path):
    result = Run(channel([mechanism(kind, path, "kept")]), 1_000_000).result
    elastic = Run(channel([]), 1_000_000, seed=2).result
    close(result.resistance_ohm, elastic.resistance_ohm, 4.0)
    tight(result.resistance_ohm, 0.005)


# --- seen in a mirror -----------------------------------------------------------------------------


def mirrored(document):
    """The channel seen from its other end: contacts change places, tables keep their distance to
    the potential of the contact that was the right one."""
    length = document["channel"]["length_nm"]
    contacts, bias = document["contacts"], document["contacts"]["bias_mV"]
    scattering = dict(document["scattering"])

    def value(t):
        if not isinstance(t, dict):
            return t
        return t | {"energy_meV": [e - bias for e in t["energy_meV"]]}

    scattering["points"] = [
        {"position_nm": length - p["position_nm"], "transmission": value(p["transmission"])}
        for p in scattering["points"]
    ]
    if "sections" in scattering:
        scattering["sections"] = [
            s | {"from_nm": length - s["to_nm"], "to_nm": length - s["from_nm"]}
            for s in scattering["sections"]
        ]
    probes = [
        p | {"position_nm": length - p["position_nm"], "weight_right": 1 - p["weight_right"]}
        for p in reversed(document["probes"])
    ]
    return document | {
        "contacts": {"bias_mV": -bias, "left": contacts["right"], "right": contacts["left"]},
        "scattering": scattering,
        "probes": probes,
    }


def check_mirror(document):
    one = Run(document).result
    other = Run(mirrored(document), seed=2).result
    close(negative(other.current_A), one.current_A)
    close(other.heat_W.left_contact, one.heat_W.right_contact)
    close(other.heat_W.right_contact, one.heat_W.left_contact)
    close(other.heat_W.lattice, one.heat_W.lattice)
    for a, b in zip(other.heat_W.probes[::-1], one.heat_W.probes, strict=True):
        close(a, b)
    bias = document["contacts"]["bias_mV"]
    for a, b in zip(other.probes[::-1], one.probes, strict=True):
        close(shifted(a.potential, bias), b.potential)
    for name, turned in (("mu_plus_meV", "mu_minus_meV"), ("mu_minus_meV", "mu_plus_meV")):
        gap = getattr(other, turned)[::-1] + bias - getattr(one, name)
        noise = np.hypot(other.errors[turned][::-1], one.errors[name])
        assert (np.abs(gap) <= FAR * noise + 2e-3 * abs(bias)).all()


def negative(estimate):
    return replace(estimate, value=-estimate.value)


def shifted(estimate, shift):
    return replace(estimate, value=estimate.value + shift)


@given(mixtures())
@settings(max_examples=3)
def test_mirror(document):
    check_mirror(document)


@pytest.mark.slow
@given(mixtures())
@settings(max_examples=30)
def test_mirror_of_many(document):
    check_mirror(document)


# --- probes that take all of one side -------------------------------------------------------------


@given(st.floats(0.5, 1.0), st.floats(0.0, 1.0), st.sampled_from([30.0, -30.0]))
@example(0.9, 0.8, 30.0)
@settings(max_examples=2)
def test_probe_cut_off_at_full_absorption(coupling, weight, bias):
    """2 w eps > 1: it takes all right movers, and still draws no current."""
    probe = {"position_nm": 120.0, "coupling": coupling, "weight_right": weight}
    document = channel([], bias, probes=[probe])
    run = Run(document, 300_000)
    a, b = min(1.0, 2 * weight * coupling), min(1.0, 2 * (1 - weight) * coupling)
    through = 1 - a * b / (a + b)
    expected = 1 + 200 / 300 + 1 + (1 - through) / through
    ratio = run.result.resistance_ohm.value / run.result.ballistic_resistance_ohm
    error = run.result.resistance_ohm.error / run.result.ballistic_resistance_ohm
    assert error < 0.005 * expected and abs(ratio - expected) < 5 * error
    check_energy(run)
    check_number(run)
    still = Run(channel([], 0.0, probes=[probe]), seed=2).result
    close(still.resistance_ohm, run.result.resistance_ohm)


def test_what_is_exact_is_told_apart():
    """Energy balances to rounding just where no trial occupation is used."""
    run = Run(channel([mechanism("bath", 100.0, "kept"), mechanism("carriers", 100.0, "kept")]))
    assert run.problem.relaxed.setting.exact_energy
    assert FromReference(run.problem).trial is None
    check_energy(run)
    tables = Run(channel([mechanism("bath", 100.0, "kept")], points=FILTERS))
    assert not tables.problem.relaxed.setting.exact_energy
