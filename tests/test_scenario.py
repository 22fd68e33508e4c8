"""Scenario files: what they mean, what is refused and in which words."""

import copy
import json
import math
import pickle
import subprocess
import sys
import time

import numpy as np
import pydantic
import pytest
from hypothesis import given
from hypothesis import strategies as st

from carriersim.scenario import (
    SCENARIO_KEYS,
    EnergyTable,
    Point,
    Scenario,
    ScenarioError,
    json_schema,
    load,
    read_text,
    to_yaml,
)
from carriersim.yamlwrite import to_yaml as write_yaml

MINIMAL = """\
channel: {length_nm: 200}
contacts: {bias_mV: 1, temperature_K: 4}
"""

FULL = """\
name: a wire
channel:
  length_nm: 1e3
  modes: {energy_meV: [-10, 0, 10], value: [0, 1, 2]}
  degeneracy: 4
contacts:
  bias_mV: -20
  left: {temperature_K: 300, transmission: 0.5}
  right: {temperature_K: 0, transmission: {energy_meV: [0, 1], value: [0.1, 0.2]}}
scattering:
  backscatter_path_nm:
    - {name: edge, mean_free_path_nm: 500}
    - {name: bulk, backscatter_path_nm: {energy_meV: [0, 10], value: [100, 200]}}
  sections:
    - {from_nm: 0, to_nm: 10, mean_free_path_nm: 5}
    - {from_nm: 10, to_nm: 1000, backscatter_path_nm: [{name: a, mean_free_path_nm: 1}]}
  points:
    - {position_nm: 100, transmission: 0.2, group: 2}
    - {position_nm: 50, transmission: {energy_meV: [0, 1], value: [1, 0.5]}}
  random:
    - {count: 3, transmission: {low: 0.1, high: 0.5}, from_nm: 100}
    - {density_per_um: 2.5, transmission: 1}
    - {count: 2, transmission: 1, drawn: true}
relaxation: {bath_temperature_K: 10, substrate_conductance_W_per_K_m: 0.1}
probes:
  - {position_nm: 500}
  - {position_nm: 600, weight_right: 1, temperature_K: 3}
accuracy: {potential_mV: 0.1, occupation: 0.01, heat_share: 0.1, fano: 0.1, resistance_relative: 1}
simulation: {seed: 0, disorder_seed: 7, relative_error: 0.01, histories: 1e6, max_seconds: 10,
  cells: 50, energy_bins: 100, batches: 8, trajectories: 3}
"""

SPACE = """\
channel:
  length_nm: 100
  dimension: 3
  fermi_wavenumber_per_nm: 13.6
  width_nm: 40
  height_nm: 20
  specularity: {width: 1, height: 0.25}
  bulk_resistivity_uohm_cm: 1.68
contacts:
  bias_mV: 1
  temperature_K: 300
  left: {transmission: 0.5, angular: tunnel, reflection: diffuse}
scattering:
  mean_free_path_nm: 39
  random: [{density_per_um: 50, transmission: 0.8, angular: tunnel, reflection: specular}]
simulation: {trajectories: 12}
"""


def faults_of(text: str) -> str:
    with pytest.raises(ScenarioError) as caught:
        read_text(text, "s.yaml")
    return str(caught.value)


def with_parts(**parts: str) -> str:
    """Write a scenario with some of its parts given as YAML; the others stay valid."""
    known = {"channel": "{length_nm: 200}", "contacts": "{bias_mV: 1, temperature_K: 4}"}
    return "".join(f"{key}: {value}\n" for key, value in (known | parts).items())


def part(name: str, inside: str) -> str:
    """Write a valid scenario with some keys of one part."""
    start = {"channel": "length_nm: 200, ", "contacts": "bias_mV: 1, temperature_K: 4, "}
    return with_parts(**{name: f"{{{start.get(name, '')}{inside}}}"})


def with_directions(mechanisms, **parts):
    """A relaxing scenario in d = 3."""
    channel = "{length_nm: 9, dimension: 3}"
    return with_parts(channel=channel, relaxation=f"{{mechanisms: [{mechanisms}]}}", **parts)


def test_defaults():
    scenario = read_text(MINIMAL, "dir/My wire.yaml")
    assert scenario.name == "My wire"
    assert scenario.slug == "my-wire"
    channel = scenario.channel
    assert (channel.dimension, channel.modes, channel.degeneracy) == (1, 1.0, 2.0)
    assert channel.specularity == 1.0
    assert scenario.contacts.left.transmission == 1.0
    assert scenario.scattering.mean_free_path_nm is None
    assert scenario.scattering.points == ()
    assert scenario.probes == ()
    assert scenario.noise is False
    simulation = scenario.simulation
    assert (simulation.seed, simulation.cells, simulation.batches) == (1, 200, 64)
    assert simulation.energy_bins is None
    assert simulation.trajectories == 6
    assert simulation.target_relative_error == 0.005
    assert simulation.resolved_disorder_seed == 1
    temperatures = (scenario.left_temperature_K, scenario.right_temperature_K)
    assert temperatures == (4.0, 4.0)
    assert scenario.bath_temperature_K == 4.0
    assert not scenario.linear_response


def test_every_key_of_an_elastic_scenario():
    scenario = read_text(FULL)
    assert scenario.channel.length_nm == 1000.0
    assert scenario.channel.modes.energy_meV == (-10.0, 0.0, 10.0)
    assert scenario.channel.modes.value == (0.0, 1.0, 2.0)
    assert isinstance(scenario.channel.modes, EnergyTable)
    assert (scenario.left_temperature_K, scenario.right_temperature_K) == (300.0, 0.0)
    assert scenario.bath_temperature_K == 10.0
    assert scenario.contacts.right.transmission.value == (0.1, 0.2)
    edge, bulk = scenario.scattering.backscatter_path_nm
    assert (edge.name, edge.mean_free_path_nm, edge.backscatter_path_nm) == ("edge", 500.0, None)
    assert bulk.backscatter_path_nm.value == (100.0, 200.0)
    assert scenario.scattering.sections[0].mean_free_path_nm == 5.0
    assert scenario.scattering.sections[1].backscatter_path_nm[0].name == "a"
    assert scenario.scattering.points[0] == Point(position_nm=100, transmission=0.2, group=2)
    assert scenario.scattering.random[0].transmission.high == 0.5
    assert scenario.scattering.random[1].density_per_um == 2.5
    assert scenario.scattering.undrawn == scenario.scattering.random[:2]
    assert scenario.probes[1].weight_right == 1.0
    assert scenario.simulation.histories == 1_000_000
    assert type(scenario.simulation.histories) is int
    assert scenario.simulation.resolved_disorder_seed == 7


def test_every_key_of_a_scenario_in_space():
    scenario = read_text(SPACE)
    channel = scenario.channel
    assert (channel.dimension, channel.width_nm, channel.height_nm) == (3, 40.0, 20.0)
    assert (channel.modes, channel.fermi_wavenumber_per_nm) == (None, 13.6)
    assert channel.bulk_resistivity_uohm_cm == 1.68
    assert channel.face_specularity == (1.0, 0.25)
    assert scenario.contacts.left.angular == "tunnel"
    assert scenario.contacts.left.reflection == "diffuse"
    assert scenario.scattering.random[0].angular == "tunnel"
    assert scenario.simulation.trajectories == 12
    assert read_text(to_yaml(scenario)) == scenario


def test_modes_of_a_wavenumber():
    """Against counts of standing waves in the cross-section, Dirichlet walls (Weyl's law).

    The count of a ribbon is exact but for its fraction; that of a rectangle of perimeter P has the
    term -k P/(4 pi) next (Weyl 1911; Kac, Am. Math. Monthly 73, 4 (1966) 1; from memory).
    """
    ribbon = "dimension: 2, width_nm: 50, fermi_wavenumber_per_nm: 0.7"
    modes = read_text(part("channel", ribbon)).channel.resolved_modes
    assert int(modes) == sum(math.pi * n / 50 < 0.7 for n in range(1, 100))
    assert modes == pytest.approx(11.14084601642)  # 35/pi, not rounded
    channel = read_text(SPACE).channel
    k, width, height = 13.6, 40.0, 20.0
    m, n = np.mgrid[1:400, 1:400]
    count = np.count_nonzero((np.pi * m / width) ** 2 + (np.pi * n / height) ** 2 < k**2)
    perimeter = k * (width + height) / (2 * math.pi)
    assert channel.resolved_modes - perimeter == pytest.approx(count, rel=2e-3)
    # The wavenumber stays what the scenario gives, also in the record of a run.
    saved = read_text(to_yaml(read_text(SPACE).with_defaults())).channel
    assert saved == channel and "modes" not in to_yaml(read_text(SPACE))


def test_modes_given():
    assert read_text(MINIMAL).channel.resolved_modes == 1.0
    assert read_text(part("channel", "modes: 3.5, dimension: 3")).channel.resolved_modes == 3.5
    assert read_text(FULL).channel.resolved_modes.value == (0.0, 1.0, 2.0)


@pytest.mark.parametrize(
    ("inside", "area", "faces"),
    [
        ("dimension: 1", None, (1.0, 1.0)),
        ("dimension: 2, width_nm: 5, specularity: 0.3", None, (0.3, 0.3)),
        ("dimension: 3", None, (1.0, 1.0)),
        ("dimension: 3, width_nm: 5, height_nm: 4, specularity: 0", 20.0, (0.0, 0.0)),
        ("dimension: 3, width_nm: 5, height_nm: 4, specularity: {height: 0}", 20.0, (1.0, 0.0)),
    ],
)
def test_cross_section(inside, area, faces):
    channel = read_text(part("channel", inside)).channel
    assert channel.area_nm2 == area
    assert channel.face_specularity == faces


def test_frozen_and_hashable():
    scenario = read_text(FULL)
    with pytest.raises(pydantic.ValidationError, match="frozen"):
        scenario.name = "other"
    assert hash(scenario) == hash(read_text(FULL))


@pytest.mark.parametrize(
    ("inside", "target"),
    [
        ("cells: 10", 0.005),
        ("relative_error: 0.1", 0.1),
        ("histories: 1000", None),
        ("max_seconds: 1", None),
        ("max_seconds: 1, relative_error: 0.02", 0.02),
        ("heat_share_error: 0.1", None),
    ],
)
def test_target_relative_error(inside, target):
    scenario = read_text(relaxing(BATH, simulation=f"{{{inside}}}"))
    assert scenario.simulation.target_relative_error == target


NUMBER = "a number > 0"
TRANSMISSION = "a number in (0, 1], or a table {energy_meV, value}"
PATHS = f"{NUMBER}, or a table {{energy_meV, value}}, or a list of named paths"
POINT = "position_nm: 100, transmission: 0.5"


def points(inside: str) -> str:
    return part("scattering", f"points: [{inside}]")


def table(energies: str, values: str) -> str:
    return points(f"{{position_nm: 9, transmission: {{energy_meV: {energies}, value: {values}}}}}")


COLD = "{bias_mV: 1, temperature_K: 4}"
BATH = "{kind: bath, path_nm: 1, direction: kept}"
MANY_PROBES = "[" + ", ".join(f"{{position_nm: {0.25 * i}}}" for i in range(1, 501)) + "]"


def relaxing(mechanisms: str, **parts: str) -> str:
    return with_parts(relaxation=f"{{mechanisms: [{mechanisms}]}}", **parts)


FAULTS = {
    # Types and ranges.
    "too large": (
        points("{position_nm: 9, transmission: 1.4}"),
        f"s.yaml, line 3: scattering.points[0].transmission: found 1.4; allowed: {TRANSMISSION}",
    ),
    "zero transmission": (
        part("contacts", "left: {transmission: 0}"),
        f"s.yaml, line 2: contacts.left.transmission: found 0; allowed: {TRANSMISSION}",
    ),
    "boolean for a number": (
        part("channel", "degeneracy: true"),
        f"s.yaml, line 1: channel.degeneracy: found true; allowed: {NUMBER}",
    ),
    "boolean for an integer": (
        part("simulation", "seed: true"),
        "s.yaml, line 3: simulation.seed: found true; allowed: an integer >= 0",
    ),
    "number in quotes": (
        part("channel", "degeneracy: '2'"),
        f"found '2' (text: write the number without quotes); allowed: {NUMBER}",
    ),
    "underscore": (part("channel", "degeneracy: 1_0"), "'1_0' (text: write numbers without _)"),
    "leading zero": (part("channel", "degeneracy: 010"), "without quotes and leading zeros"),
    "decimal comma": (
        "channel:\n  length_nm: 0,5\ncontacts: {bias_mV: 1, temperature_K: 4}\n",
        "s.yaml, line 2: channel.length_nm: found '0,5' (text: the decimal mark is a point)",
    ),
    "decimal comma in braces": (
        "channel: {length_nm: 0,5}\ncontacts: {bias_mV: 1, temperature_K: 4}\n",
        "channel.5: unknown key; is it part of a number? the decimal mark is a point",
    ),
    "text": (part("channel", "degeneracy: two"), "found 'two' (text); allowed: a number > 0"),
    "no value": (
        part("contacts", "left: "),
        "contacts.left: found nothing (the key has no value); allowed: a mapping with the keys "
        "temperature_K, transmission, angular, reflection",
    ),
    "list for a number": (
        part("channel", "degeneracy: [1]"),
        f"channel.degeneracy: found a list of 1 entry; allowed: {NUMBER}",
    ),
    "mapping for a number": (
        part("channel", "degeneracy: {a: 1}"),
        f"channel.degeneracy: found a mapping with the keys a; allowed: {NUMBER}",
    ),
    "number for a mapping": (
        with_parts(accuracy="5"),
        "accuracy: found 5; allowed: a mapping with the keys potential_mV, occupation",
    ),
    "number for an entry": (
        points("7"),
        "scattering.points[0]: found 7; allowed: a mapping with the keys position_nm",
    ),
    "mapping for a list": (
        part("scattering", "points: {a: 1}"),
        "scattering.points: found a mapping with the keys a; allowed: a list of at most 10000",
    ),
    "infinite": (
        part("contacts", "left: {temperature_K: .inf}"),
        "contacts.left.temperature_K: found .inf, not a finite number; allowed: a number >= 0",
    ),
    "not a number": (
        with_parts(contacts="{temperature_K: 1, bias_mV: .nan}"),
        "s.yaml, line 2: contacts.bias_mV: found .nan, not a finite number; allowed: a number",
    ),
    "overflow": (part("channel", "degeneracy: 1e999"), "found .inf, not a finite number"),
    "the word nan": (part("channel", "degeneracy: nan"), "found 'nan', not a finite number"),
    "yes": (
        with_parts(noise="yes"),
        "noise: found 'yes' (text: only true and false are booleans); allowed: true or false",
    ),
    "1 for true": (with_parts(noise="1"), "noise: found 1; allowed: true or false"),
    "name a number": (
        with_parts(name="2024"),
        "name: found 2024; allowed: one line of text (in quotes if it looks like a number)",
    ),
    "name empty": (with_parts(name="' '"), "name: found ' ' (text); allowed: one line of text"),
    "name of lines": (with_parts(name='"a\\nb"'), "name: found 'a\\nb' (text); allowed: one line"),
    "length": (with_parts(channel="{length_nm: 0}"), "channel.length_nm: found 0; allowed: a nu"),
    "dimension": (part("channel", "dimension: 4"), "found 4; allowed: 1, 2 or 3"),
    "modes zero": (
        part("channel", "modes: 0"),
        f"channel.modes: found 0; allowed: {NUMBER}, or a table {{energy_meV, value}}",
    ),
    "temperature": (
        with_parts(contacts="{bias_mV: 0, temperature_K: -1}"),
        "contacts.temperature_K: found -1; allowed: a number >= 0",
    ),
    "angular": (
        points(f"{{{POINT}, angular: flat}}"),
        "scattering.points[0].angular: found 'flat' (text); allowed: constant or tunnel",
    ),
    "reflection": (
        part("contacts", "right: {reflection: 1}"),
        "contacts.right.reflection: found 1; allowed: specular or diffuse",
    ),
    "path": (
        part("scattering", "mean_free_path_nm: 0"),
        f"scattering.mean_free_path_nm: found 0; allowed: {PATHS}",
    ),
    "position zero": (
        points("{position_nm: 0, transmission: 1}"),
        "position_nm: found 0; allowed: a number between 0 and channel.length_nm",
    ),
    "count not whole": (
        part("scattering", "random: [{count: 2.5, transmission: 1}]"),
        "scattering.random[0].count: found 2.5; allowed: an integer in 0..10000",
    ),
    "coupling": (
        with_parts(probes="[{position_nm: 1, coupling: 1.5}]"),
        "probes[0].coupling: found 1.5; allowed: a number in 0..1",
    ),
    "weight": (
        with_parts(probes="[{position_nm: 1, weight_right: -1}]"),
        "probes[0].weight_right: found -1; allowed: a number in 0..1",
    ),
    "accuracy": (
        part("accuracy", "fano: 0"),
        "accuracy.fano: found 0; allowed: a number > 0",
    ),
    "substrate": (
        part("relaxation", "substrate_conductance_W_per_K_m: 0"),
        "relaxation.substrate_conductance_W_per_K_m: found 0; allowed: a number > 0",
    ),
    "seed": (part("simulation", "seed: -1"), "seed: found -1; allowed: an integer >= 0"),
    "disorder seed": (
        part("simulation", "disorder_seed: 1.5"),
        "simulation.disorder_seed: found 1.5; allowed: an integer >= 0",
    ),
    "cells 0": (part("simulation", "cells: 0"), "cells: found 0; allowed: an integer in 1..100000"),
    "cells": (part("simulation", "cells: 100001"), "allowed: an integer in 1..100000"),
    "bins": (part("simulation", "energy_bins: 5001"), "allowed: an integer in 1..5000"),
    "batches 7": (part("simulation", "batches: 7"), "found 7; allowed: an integer in 8..4096"),
    "batches": (part("simulation", "batches: 4097"), "allowed: an integer in 8..4096"),
    "relative error": (part("simulation", "relative_error: 0"), "found 0; allowed: a number > 0"),
    "seconds": (
        part("simulation", "max_seconds: 0"),
        "max_seconds: found 0; allowed: a number > 0",
    ),
    # Keys.
    "missing part": (
        "channel: {length_nm: 1}\n",
        "s.yaml, line 1: contacts: required, but missing; allowed: a mapping with the keys bias_mV",
    ),
    "missing key": (
        with_parts(contacts="\n  temperature_K: 3"),
        "s.yaml, line 2: contacts.bias_mV: required, but missing; allowed: a number",
    ),
    "missing in an entry": (
        MINIMAL + "scattering:\n  points:\n"
        "    - {position_nm: 1, transmission: 1}\n    - position_nm: 2\n",
        "s.yaml, line 6: scattering.points[1].transmission: required, but missing; allowed: a",
    ),
    "unknown key": (
        points("{position_nm: 1, transmision: 0.2}"),
        "s.yaml, line 3: scattering.points[0].transmision: unknown key; did you mean transmission? "
        "allowed keys: position_nm, transmission, angular, reflection",
    ),
    "unknown key without unit": (
        with_parts(channel="{length: 5}"),
        "channel.length: unknown key; did you mean length_nm? allowed keys: length_nm, dimension",
    ),
    "unknown key of another part": (
        with_parts(seed="5"),
        "seed: unknown key; did you mean simulation.seed? allowed keys: name, channel, contacts",
    ),
    "unknown key like none": (
        with_parts(zzz="5"),
        "s.yaml, line 3: zzz: unknown key; allowed keys: name, channel, contacts",
    ),
    "unknown key like a tag of ours": (
        part("scattering", "mean_free_path_nm: 1, '|number': 2"),
        "scattering.|number: unknown key; allowed keys: mean_free_path_nm,",
    ),
    "unknown key in a table": (
        part("scattering", "mean_free_path_nm: {energy: [0, 1], value: [1, 1]}"),
        "mean_free_path_nm.energy: unknown key; did you mean energy_meV? allowed keys: energy_meV,",
    ),
    "duplicate key": (
        MINIMAL + "channel: {length_nm: 2}\n",
        "s.yaml, line 3: channel: duplicate key: it stands in line 1 already",
    ),
    # Places.
    "point outside": (
        points("{position_nm: 200, transmission: 1}"),
        "position_nm: found 200; outside the channel; allowed: between 0 and 200.0 nm "
        "(channel.length_nm)",
    ),
    "probe outside": (
        with_parts(probes="[{position_nm: 300}]"),
        "probes[0].position_nm: found 300; outside the channel; allowed: between 0 and 200.0 nm",
    ),
    "two scatterers": (
        points(f"{{{POINT}}}, {{position_nm: 9, transmission: 1}}, {{{POINT}}}"),
        "scattering.points[2].position_nm: found 100; two scatterers at one place: "
        "scattering.points[0] is there too; allowed: a place of its own",
    ),
    "scatterer and probe": (
        with_parts(scattering=f"{{points: [{{{POINT}}}]}}", probes="[{position_nm: 1e2}]"),
        "probes[0].position_nm: found 100.0; the scatterer scattering.points[0] is at this place, "
        "where the potential jumps; allowed: a place beside the scatterer",
    ),
    "two coupled probes": (
        with_parts(probes="[{position_nm: 9}, {position_nm: 9, coupling: 0.1}]"),
        "probes[1].position_nm: found 9; the probe probes[0] is at this place, and one of them is "
        "coupled; allowed: a place of its own",
    ),
    "section outside": (
        part("scattering", "sections: [{from_nm: 0, to_nm: 201, mean_free_path_nm: 1}]"),
        "scattering.sections[0].to_nm: found 201; outside the channel; allowed: a number in "
        "0..200.0 nm (channel.length_nm)",
    ),
    "section reversed": (
        part("scattering", "sections: [{from_nm: 20, to_nm: 10, mean_free_path_nm: 1}]"),
        "sections[0].to_nm: found 10; the stretch is empty or reversed; allowed: from_nm < to_nm "
        "(they are 20.0 and 10.0)",
    ),
    "sections overlap": (
        part(
            "scattering",
            "sections: [{from_nm: 50, to_nm: 60, mean_free_path_nm: 1}, "
            "{from_nm: 0, to_nm: 100, mean_free_path_nm: 1}]",
        ),
        "scattering.sections[0].from_nm: found 50; overlaps scattering.sections[1], which ends at "
        "100.0 nm; allowed: sections that share no more than an end",
    ),
    "section without end": (
        part("scattering", "sections: [{from_nm: 20, mean_free_path_nm: 1}]"),
        "sections[0].to_nm: required, but missing; allowed: a number above from_nm, up to channel",
    ),
    "random outside": (
        part("scattering", "random: [{count: 1, transmission: 1, from_nm: 300}]"),
        "scattering.random[0].from_nm: found 300; outside the channel; allowed: a number in 0..200",
    ),
    "random empty": (
        part("scattering", "random: [{count: 1, transmission: 1, from_nm: 200}]"),
        "random[0].from_nm: found 200; the stretch is empty or reversed; allowed: from_nm < to_nm",
    ),
    # Exclusive keys.
    "two paths": (
        part("scattering", "mean_free_path_nm: 1, backscatter_path_nm: 2"),
        "scattering.backscatter_path_nm: found 2; mean_free_path_nm is given too; allowed: one of "
        "mean_free_path_nm and backscatter_path_nm",
    ),
    "two paths in a section": (
        part(
            "scattering",
            "sections: [{from_nm: 0, to_nm: 1, mean_free_path_nm: 1, backscatter_path_nm: 2}]",
        ),
        "scattering.sections[0].backscatter_path_nm: found 2; mean_free_path_nm is given too",
    ),
    "no path in a named path": (
        part("scattering", "mean_free_path_nm: [{name: a}]"),
        "scattering.mean_free_path_nm[0]: a key is missing; allowed: exactly one of",
    ),
    "no named path": (
        part("scattering", "mean_free_path_nm: []"),
        f"scattering.mean_free_path_nm: found a list of 0 entries; allowed: {PATHS}",
    ),
    "same name": (
        part(
            "scattering",
            "mean_free_path_nm: [{name: a, mean_free_path_nm: 1}, {name: a, mean_free_path_nm: 1}]",
        ),
        "scattering.mean_free_path_nm[1].name: found 'a' (text); scattering.mean_free_path_nm[0] "
        "has this name too; allowed: a name of its own",
    ),
    "modes and wavenumber": (
        part("channel", "modes: 1, fermi_wavenumber_per_nm: 2, dimension: 2, width_nm: 1"),
        "channel.fermi_wavenumber_per_nm: found 2; modes is given too; allowed: one of modes and",
    ),
    "count and density": (
        part("scattering", "random: [{count: 1, density_per_um: 2, transmission: 1}]"),
        "scattering.random[0].density_per_um: found 2; count is given too; allowed: one of count",
    ),
    "neither count nor density": (
        part("scattering", "random: [{transmission: 1}]"),
        "scattering.random[0]: a key is missing; allowed: exactly one of count and density_per_um",
    ),
    # Tables.
    "table not increasing": (
        table("[0, 5, 5, 7]", "[1, 1, 1, 1]"),
        "scattering.points[0].transmission.energy_meV[2]: found 5; the energies of a table must "
        "increase, and 5.0 comes before; allowed: a larger number",
    ),
    "table of unequal lengths": (
        table("[0, 5, 6]", "[1, 1]"),
        "transmission.value: found a list of 2 entries; there are 3 energies; allowed: as many",
    ),
    "table of one": (
        table("[0]", "[1]"),
        "transmission.energy_meV: found a list of 1 entry; allowed: a list of 2 or more strictly",
    ),
    "table value": (
        table("[0, 1]", "[0.5, 1.5]"),
        "transmission.value[1]: found 1.5; allowed: a list of numbers in (0, 1], one for each ener",
    ),
    "table energy": (
        table("[0, .inf]", "[0.5, 1]"),
        "transmission.energy_meV[1]: found .inf, not a finite number; allowed: a list of 2 or more",
    ),
    "table incomplete": (
        points("{position_nm: 9, transmission: {energy_meV: [0, 1]}}"),
        "points[0].transmission.value: required, but missing; allowed: a list of numbers in (0, 1]",
    ),
    "path table value": (
        part("scattering", "mean_free_path_nm: {energy_meV: [0, 1], value: [0, 1]}"),
        "scattering.mean_free_path_nm.value[0]: found 0; allowed: a list of numbers > 0, one for",
    ),
    "no open mode": (
        part("channel", "modes: {energy_meV: [0, 1], value: [0, 0]}"),
        "channel.modes.value: found a list of 2 entries; no mode is open at any energy; allowed: "
        "at least one value > 0",
    ),
    "modes table value": (
        part("channel", "modes: {energy_meV: [0, 1], value: [-1, 1]}"),
        "channel.modes.value[0]: found -1; allowed: a list of numbers >= 0, at least one of them",
    ),
    "modes table with relaxation": (
        with_parts(
            channel="{length_nm: 9, modes: {energy_meV: [0, 1], value: [0, 1]}}",
            relaxation="{mechanisms: [{kind: carriers, path_nm: 1}]}",
        ),
        "channel.modes: found a mapping with the keys energy_meV, value; modes against energy are "
        "for elastic runs, and there are relaxation.mechanisms; allowed: a number > 0",
    ),
    "modes table with a coupled probe": (
        with_parts(
            channel="{length_nm: 9, modes: {energy_meV: [0, 1], value: [0, 1]}}",
            probes="[{position_nm: 1, coupling: 1}]",
        ),
        "modes against energy are for elastic runs, and a probe is coupled",
    ),
    # Random scatterers.
    "low above high": (
        part("scattering", "random: [{count: 1, transmission: {low: 0.5, high: 0.4}}]"),
        "random[0].transmission.low: found 0.5; low is above high (0.4); allowed: low <= high",
    ),
    "range": (
        part("scattering", "random: [{count: 1, transmission: {low: 0, high: 0.4}}]"),
        "scattering.random[0].transmission.low: found 0; allowed: a number in (0, 1]",
    ),
    "too many": (
        part(
            "scattering",
            "random: [{count: 10000, transmission: 1}, {density_per_um: 100, transmission: 1}]",
        ),
        "scattering.random: found 10020 scatterers; allowed: at most 10000 scatterers, points and",
    ),
    "too many, were those drawn before drawn anew": (
        part("scattering", "random: [{density_per_um: 50005, transmission: 1, drawn: true}]"),
        "scattering.random: found 10001 scatterers; allowed: at most 10000 scatterers, points and",
    ),
    "drawn": (
        part("scattering", "random: [{count: 1, transmission: 1, drawn: 1}]"),
        "s.yaml, line 3: scattering.random[0].drawn: found 1; allowed: true or false",
    ),
    "group below 0": (
        points(f"{{{POINT}, group: -1}}"),
        "scattering.points[0].group: found -1; allowed: the number of a drawn group",
    ),
    "group that is not there": (
        part(
            "scattering",
            f"\n  random: [{{count: 1, transmission: 1, drawn: true}}],\n"
            f"  points: [{{{POINT}, group: 1}}]",
        ),
        "s.yaml, line 5: scattering.points[0].group: found 1; there is no such group; allowed: no "
        "such key, or the number (from 0) of a drawn group in scattering.random",
    ),
    "group without groups": (
        points(f"{{{POINT}, group: 0}}"),
        "s.yaml, line 3: scattering.points[0].group: found 0; there is no such group; allowed: no",
    ),
    "group not drawn": (
        part(
            "scattering",
            f"random: [{{count: 1, transmission: 1}}], points: [{{{POINT}, group: 0}}]",
        ),
        "scattering.points[0].group: found 0; scattering.random[0] is not drawn; allowed: no such",
    ),
    "count too large": (
        part("scattering", "random: [{count: 10001, transmission: 1}]"),
        "random[0].count: found 10001; allowed: an integer in 0..10000",
    ),
    # Contacts.
    "no temperature": (
        with_parts(contacts="{bias_mV: 1, left: {temperature_K: 1}}"),
        "s.yaml, line 2: contacts.right.temperature_K: the right contact has no temperature; "
        "allowed: a number >= 0 here, or contacts.temperature_K for both",
    ),
    # Dimensions and walls.
    "width in d = 1": (
        part("channel", "width_nm: 5"),
        "channel.width_nm: found 5; there are no walls in d = 1; allowed: no such key in d = 1",
    ),
    "height in d = 1": (
        part("channel", "height_nm: 5"),
        "channel.height_nm: found 5; there are no",
    ),
    "height in d = 2": (
        part("channel", "dimension: 2, width_nm: 5, height_nm: 5"),
        "channel.height_nm: found 5; in d = 2 there is no height; allowed: width_nm only",
    ),
    "width alone in d = 3": (
        part("channel", "dimension: 3, width_nm: 5"),
        "channel.width_nm: found 5; height_nm is missing; allowed: in d = 3 both width_nm and heig",
    ),
    "height alone in d = 3": (
        part("channel", "dimension: 3, height_nm: 5"),
        "channel.height_nm: found 5; width_nm is missing; allowed: in d = 3 both",
    ),
    "wavenumber in d = 1": (
        part("channel", "fermi_wavenumber_per_nm: 5"),
        "fermi_wavenumber_per_nm: found 5; modes follow from it only in d = 2 and 3; allowed: chan",
    ),
    "wavenumber without width": (
        part("channel", "dimension: 2, fermi_wavenumber_per_nm: 5"),
        "fermi_wavenumber_per_nm: found 5; the width is missing; allowed: together with width_nm",
    ),
    "wavenumber without cross-section": (
        part("channel", "dimension: 3, fermi_wavenumber_per_nm: 5"),
        "found 5; the cross-section is missing; allowed: together with width_nm and height_nm",
    ),
    "wavenumber that gives no mode": (
        part("channel", "\n  dimension: 2, width_nm: 1e-200, fermi_wavenumber_per_nm: 1e-200"),
        "s.yaml, line 2: channel.fermi_wavenumber_per_nm: found 1e-200; with the sides of the "
        "channel it gives 0 modes; allowed: what gives a finite number of modes > 0",
    ),
    "wavenumber that gives too many modes": (
        part("channel", "dimension: 3, width_nm: 1, height_nm: 1, fermi_wavenumber_per_nm: 1e+200"),
        "fermi_wavenumber_per_nm: found 1e+200; with the sides of the channel it gives inf modes",
    ),
    "bulk resistivity": (
        part("channel", "dimension: 3, bulk_resistivity_uohm_cm: 0"),
        f"s.yaml, line 1: channel.bulk_resistivity_uohm_cm: found 0; allowed: {NUMBER}",
    ),
    "bulk resistivity in d = 1": (
        part("channel", "\n  bulk_resistivity_uohm_cm: 2"),
        "s.yaml, line 2: channel.bulk_resistivity_uohm_cm: found 2; in d = 1 there is no "
        "cross-section; allowed: for d = 3 only",
    ),
    "bulk resistivity in d = 2": (
        part("channel", "dimension: 2, width_nm: 9, bulk_resistivity_uohm_cm: 2"),
        "channel.bulk_resistivity_uohm_cm: found 2; in d = 2 the resistivity is that of a sheet, "
        "in ohm; allowed: for d = 3 only",
    ),
    "path called walls": (
        with_parts(
            channel="{length_nm: 9, dimension: 2, width_nm: 9}",
            scattering="{mean_free_path_nm: [{name: walls, mean_free_path_nm: 1}]}",
        ),
        "s.yaml, line 3: scattering.mean_free_path_nm[0].name: found 'walls' (text); with "
        "channel.width_nm this is the name of a part of the resistance; allowed: another name",
    ),
    "specularity in d = 1": (
        part("channel", "specularity: 0.5"),
        "channel.specularity: found 0.5; there are no walls in d = 1; allowed: 1, the default",
    ),
    "specularity without walls": (
        part("channel", "specularity: {width: 0}, dimension: 3"),
        "channel.specularity.width: found 0; there are no walls without width_nm; allowed: 1",
    ),
    "specularity of the height in d = 2": (
        part("channel", "specularity: {height: 0}, dimension: 2, width_nm: 1"),
        "channel.specularity.height: found 0; in d = 2 there is no height; allowed: 1, the default",
    ),
    "specularity range": (
        part("channel", "specularity: {width: 2}"),
        "channel.specularity.width: found 2; allowed: a number in 0..1",
    ),
    "tunnel in d = 1": (
        points(f"{{{POINT}, angular: tunnel}}"),
        "points[0].angular: found 'tunnel' (text); in d = 1 there are no angles, the transmission "
        "cannot depend on them; allowed: constant",
    ),
    "diffuse in d = 1": (
        part("contacts", "left: {reflection: diffuse}"),
        "contacts.left.reflection: found 'diffuse' (text); in d = 1 there is one way back, "
        "reflection cannot be diffuse; allowed: specular",
    ),
    "random tunnel in d = 1": (
        part("scattering", "random: [{count: 1, transmission: 1, angular: tunnel}]"),
        "scattering.random[0].angular: found 'tunnel' (text); in d = 1 there are no angles",
    ),
    # Mechanisms.
    "mechanism kind": (
        part("relaxation", "mechanisms: [{kind: foo, path_nm: 1}]"),
        "mechanisms[0].kind: found 'foo' (text); allowed: bath, carriers or optical_phonon",
    ),
    "bath without direction": (
        part("relaxation", "mechanisms: [{kind: bath, path_nm: 1}]"),
        "relaxation.mechanisms[0].direction: required for bath, but missing; allowed: kept or rand",
    ),
    "phonon with direction": (
        part(
            "relaxation",
            "mechanisms: [{kind: optical_phonon, path_nm: 1, energy_meV: 2, direction: kept}]",
        ),
        "mechanisms[0].direction: found 'kept' (text); a phonon always makes the direction random; "
        "allowed: no such key for optical_phonon",
    ),
    "phonon without energy": (
        part("relaxation", "mechanisms: [{kind: optical_phonon, path_nm: 1}]"),
        "mechanisms[0].energy_meV: required for optical_phonon, but missing; allowed: a number > 0",
    ),
    "energy of carriers": (
        part("relaxation", "mechanisms: [{kind: carriers, path_nm: 1, energy_meV: 3}]"),
        "energy_meV: found 3; carriers has no energy of its own; allowed: for optical_phonon only",
    ),
    **{
        f"mechanism path {value}": (
            relaxing(f"{{kind: carriers, path_nm: {value}}}"),
            f"s.yaml, line 3: relaxation.mechanisms[0].path_nm: found {words}; allowed: {NUMBER}",
        )
        for value, words in {
            "0": "0",
            "-5": "-5",
            ".nan": ".nan, not a finite number",
            ".inf": ".inf, not a finite number",
        }.items()
    },
    "phonon energy zero": (
        relaxing("{kind: optical_phonon, path_nm: 1, energy_meV: 0}"),
        f"relaxation.mechanisms[0].energy_meV: found 0; allowed: {NUMBER}",
    ),
    "phonon energy below zero": (
        relaxing("{kind: optical_phonon, path_nm: 1, energy_meV: -3}"),
        f"relaxation.mechanisms[0].energy_meV: found -3; allowed: {NUMBER}",
    ),
    "coupled probe outside": (
        with_parts(probes="[{position_nm: 200, coupling: 1}]"),
        "probes[0].position_nm: found 200; outside the channel; allowed: between 0 and 200.0 nm",
    ),
    "coupled probe at a contact": (
        with_parts(probes="[{position_nm: 0, coupling: 1}]"),
        "probes[0].position_nm: found 0; allowed: a number between 0 and channel.length_nm",
    ),
    "coupled probe at a scatterer": (
        with_parts(
            scattering=f"{{points: [{{{POINT}}}]}}", probes="[{position_nm: 100, coupling: 1}]"
        ),
        "probes[0].position_nm: found 100; the scatterer scattering.points[0] is at this place",
    ),
    "coupled probe at a coupled probe": (
        with_parts(probes="[{position_nm: 9, coupling: 0.1}, {position_nm: 9, coupling: 0.1}]"),
        "probes[1].position_nm: found 9; the probe probes[0] is at this place, and one of them is "
        "coupled; allowed: a place of its own",
    ),
    **{
        f"path called {name}": (
            relaxing(
                "{kind: carriers, path_nm: 1}",
                scattering=f"{{mean_free_path_nm: [{{name: {name}, mean_free_path_nm: 1}}]}}",
            ),
            f"scattering.mean_free_path_nm[0].name: found '{name}' (text); with "
            "relaxation.mechanisms this is the name of a part of the resistance; allowed: another",
        )
        for name in ("bath", "carriers", "optical phonon", "optical phonons")
    },
    "path of a section called bath": (
        relaxing(
            "{kind: carriers, path_nm: 1}",
            scattering="{sections: [{from_nm: 0, to_nm: 9, backscatter_path_nm: "
            "[{name: a, mean_free_path_nm: 1}, {name: bath, mean_free_path_nm: 1}]}]}",
        ),
        "scattering.sections[0].backscatter_path_nm[1].name: found 'bath' (text); with relaxation",
    ),
    # Simulation.
    **{
        f"trajectories {value}": (
            part("simulation", f"\n  trajectories: {value}"),
            f"s.yaml, line 4: simulation.trajectories: found {value}; allowed: an integer in 0..50",
        )
        for value in ("-1", "51", "2.5", "true")
    },
    "heat share without relaxation": (
        part("simulation", "heat_share_error: 0.1"),
        "simulation.heat_share_error: found 0.1; no mechanism gives heat to the lattice; allowed: "
        "with a bath or an optical_phonon in relaxation.mechanisms",
    ),
    "heat share with carriers only": (
        relaxing("{kind: carriers, path_nm: 1}", simulation="{heat_share_error: 0.1}"),
        "simulation.heat_share_error: found 0.1; no mechanism gives heat to the lattice",
    ),
    "heat share without a bias": (
        relaxing(BATH, simulation="{heat_share_error: 0.1}", contacts=COLD.replace("1,", "0,")),
        "heat_share_error: found 0.1; without a bias there is no heat; allowed: with a bias other",
    ),
    "heat share error": (
        relaxing(BATH, simulation="{heat_share_error: 0}"),
        f"simulation.heat_share_error: found 0; allowed: {NUMBER}",
    ),
    "memory for cells": (
        relaxing(BATH, simulation="{\n  cells: 100000, energy_bins: 50}"),
        "s.yaml, line 5: simulation.cells: simulation.cells (100000 with cuts at scatterers and "
        "probes) times simulation.energy_bins (46) need up to 24.4 GB of memory with relaxation "
        "and 64 batches; allowed: at most 16423 cells with so many bins (4 GB)",
    ),
    "memory for bins": (
        relaxing(BATH, simulation="{energy_bins: 5000}", probes=MANY_PROBES),
        "simulation.energy_bins: simulation.cells (701 with cuts at scatterers and probes) times "
        "simulation.energy_bins (4996) need up to 8.89 GB of memory with relaxation and 64 "
        "batches; allowed: at most 315 cells with so many bins or 2220 bins with so many cells",
    ),
    "memory for automatic bins": (
        with_parts(probes="[{position_nm: 1, coupling: 1}]", simulation="{cells: 20000}"),
        "simulation.cells: simulation.cells (20002 with cuts at scatterers and probes) times "
        "simulation.energy_bins (103, automatic) need up to ",
    ),
    "memory for batches": (
        relaxing(BATH, simulation="{batches: 4096, cells: 1000, energy_bins: 400}"),
        "and 4096 batches; allowed: at most 179 cells with so many bins (4 GB)",
    ),
    "memory for a small phonon": (
        relaxing("{kind: optical_phonon, path_nm: 1, energy_meV: 1e-4}"),
        "relaxation.mechanisms[0].energy_meV: found 0.0001; no bin may be wider, and "
        "simulation.cells (200 with cuts at scatterers and probes) times simulation.energy_bins (",
    ),
    "no number of bins": (
        relaxing("{kind: optical_phonon, path_nm: 1, energy_meV: 1e-300}"),
        "relaxation.mechanisms[0].energy_meV: no number of bins covers the energies of this",
    ),
    "no number of bins for a bias": (
        relaxing(BATH, contacts="{bias_mV: 1.7e308, temperature_K: 1}"),
        "s.yaml, line 2: contacts.bias_mV: no number of bins covers the energies of this scenario",
    ),
    "few histories": (
        part("simulation", "histories: 63"),
        "simulation.histories: found 63; fewer than one for each batch; allowed: an integer >= 64 "
        "(simulation.batches)",
    ),
    # What later versions bring.
    "noise": (
        with_parts(noise="true"),
        "noise: found true; this version does not compute noise; allowed: false",
    ),
    "noise in d = 2": (
        with_parts(channel="{length_nm: 9, dimension: 2}", noise="true"),
        "s.yaml, line 3: noise: found true; this version does not compute noise; allowed: false",
    ),
    "fano error": (
        part("simulation", "fano_error: 0.1"),
        "simulation.fano_error: found 0.1; this version does not compute noise; allowed: no such",
    ),
    "kept bath in d = 3": (
        with_directions("{kind: bath, path_nm: 5, direction: kept}"),
        "relaxation.mechanisms[0].direction: found 'kept' (text); this version relaxes carriers "
        "that keep their direction in d = 1 only; allowed: direction: randomised, or d = 1",
    ),
    "carriers in d = 3": (
        with_directions("{kind: carriers, path_nm: 5}"),
        "this version relaxes carriers that keep their direction in d = 1 only; allowed: dir",
    ),
    "carriers and phonons in d = 3": (
        with_directions(
            "{kind: optical_phonon, path_nm: 5, energy_meV: 9}, "
            "{kind: carriers, path_nm: 5, direction: randomised}"
        ),
        "relaxation.mechanisms[1].kind: found 'carriers' (text); this version has carriers with "
        "phonons or tables of energy in d = 1 only; allowed: bath, or d = 1",
    ),
    "carriers and a table in d = 3": (
        with_directions(
            "{kind: carriers, path_nm: 5, direction: randomised}",
            scattering="{mean_free_path_nm: {energy_meV: [0, 1], value: [1, 2]}}",
        ),
        "relaxation.mechanisms[0].kind: found 'carriers' (text); this version has carriers with",
    ),
    "driven by temperatures past a coupled probe in d = 3": (
        with_parts(
            channel="{length_nm: 9, dimension: 3}",
            contacts="{bias_mV: 0, temperature_K: 4, left: {temperature_K: 5}}",
            scattering="{mean_free_path_nm: {energy_meV: [0, 1], value: [1, 2]}}",
            probes="[{position_nm: 3, coupling: 0.5}]",
        ),
        "contacts.bias_mV: found 0; this version has bias 0 between unequal temperatures with",
    ),
    "driven by temperatures in d = 3": (
        with_directions(
            "{kind: optical_phonon, path_nm: 5, energy_meV: 9}",
            contacts="{bias_mV: 0, temperature_K: 4, left: {temperature_K: 5}}",
        ),
        "contacts.bias_mV: found 0; this version has bias 0 between unequal temperatures with "
        "relaxation in d = 1 only; allowed: a bias that is not 0, or d = 1",
    ),
}

LATER = {"noise", "noise in d = 2", "fano error", *(name for name in FAULTS if "in d = 3" in name)}
LATER -= {"width alone in d = 3", "height alone in d = 3"}


def test_relaxation_that_every_dimension_has():
    for mechanisms in (
        "{kind: bath, path_nm: 5, direction: randomised}",
        "{kind: optical_phonon, path_nm: 5, energy_meV: 9}",
        "{kind: carriers, path_nm: 5, direction: randomised}",
    ):
        assert read_text(with_directions(mechanisms)).channel.dimension == 3


@pytest.mark.parametrize("name", FAULTS)
def test_fault(name):
    text, message = FAULTS[name]
    assert message in faults_of(text)


@pytest.mark.parametrize("name", sorted(LATER))
def test_what_later_versions_bring_is_one_sentence(name):
    text, message = FAULTS[name]
    lines = faults_of(text).splitlines()
    assert len(lines) == 1
    assert message in lines[0]


def test_every_kind_of_fault_at_once():
    text = """\
channel: {length_nm: 100, modess: 1, degeneracy: "2"}
contacts: {bias_mV: 1, temperature_K: -4}
channel: {length_nm: 7}
scattering:
  mean_free_path_nm: 1
  backscatter_path_nm: 2
  points:
    - {position_nm: 10, transmission: 2}
    - {position_nm: 10, transmission: 1}
    - {position_nm: 500, transmission: 1, angular: tunnel}
noise: true
"""
    with pytest.raises(ScenarioError) as caught:
        read_text(text, "s.yaml")
    faults = caught.value.faults
    lines = [fault.line for fault in faults]
    assert lines == sorted(lines)
    assert {(fault.line, fault.key) for fault in faults} == {
        (1, "channel.modess"),
        (1, "channel.degeneracy"),
        (2, "contacts.temperature_K"),
        (3, "channel"),
        (6, "scattering.backscatter_path_nm"),
        (8, "scattering.points[0].transmission"),
        (9, "scattering.points[1].position_nm"),
        (10, "scattering.points[2].position_nm"),
        (10, "scattering.points[2].angular"),
        (11, "noise"),
    }
    assert [fault.value for fault in faults if fault.line == 8] == [2]
    assert all(str(fault).startswith("s.yaml, line ") for fault in faults)
    assert len(str(caught.value).splitlines()) == len(faults) == 10


def test_one_fault_gives_one_line():
    more_than_one = {"unknown key", "unknown key without unit", "decimal comma in braces"}
    more_than_one |= {"unknown key in a table", "table of one", "missing part", "position zero"}
    for name, (text, _) in FAULTS.items():
        if not (name in more_than_one or name in LATER):
            lines = [line for line in faults_of(text).splitlines() if "this version" not in line]
            assert len(lines) == 1, (name, lines)


def test_many_faults_stay_readable_and_quick():
    entries = ", ".join(["{position: 1, transmision: 2}"] * 9000)
    start = time.process_time()
    with pytest.raises(ScenarioError) as caught:
        read_text(points(entries))
    assert time.process_time() - start < 3
    assert 1000 <= len(caught.value.faults) < 3000
    lines = str(caught.value).splitlines()
    assert len(lines) == 101
    assert lines[-1].endswith("more faults")
    assert any("more faults of type and range" in str(fault) for fault in caught.value.faults)


def test_error_survives_pickling():
    with pytest.raises(ScenarioError) as caught:
        read_text("a: 1\n")
    assert str(pickle.loads(pickle.dumps(caught.value))) == str(caught.value)


@pytest.mark.parametrize(
    "text",
    [
        part("contacts", "left: {temperature_K: 0}"),
        with_parts(contacts="{bias_mV: 0, left: {temperature_K: 0}, right: {temperature_K: 1}}"),
        with_parts(probes="[{position_nm: 9, weight_right: 0}, {position_nm: 9, weight_right: 1}]"),
        part("scattering", "random: [{count: 0, transmission: 1}]"),
        part("scattering", "random: [{density_per_um: 0, transmission: 1}]"),
        part(
            "scattering",
            "sections: [{from_nm: 100, to_nm: 200, mean_free_path_nm: 1}, "
            "{from_nm: 0, to_nm: 100, mean_free_path_nm: 1}]",
        ),
        part("simulation", "batches: 8, histories: 8"),
        part("simulation", "cells: 100000, energy_bins: 5000, batches: 4096"),
        part("simulation", "disorder_seed: null, seed: 123456789012345678901234567890"),
        part("channel", "specularity: 1, dimension: 1.0"),
        part("channel", "specularity: {width: 1, height: 1}"),
        part("channel", "dimension: 2, width_nm: 10, specularity: 0.5"),
        part("channel", "dimension: 2, modes: 30"),
        part("channel", "dimension: 2, width_nm: 10, fermi_wavenumber_per_nm: 0.7"),
        part("channel", "dimension: 2, modes: {energy_meV: [0, 1], value: [1, 2]}"),
        part("channel", "dimension: 3, bulk_resistivity_uohm_cm: 1.7"),
        part(
            "channel",
            "dimension: 3, width_nm: 1, height_nm: 2, specularity: {width: 0}, "
            "fermi_wavenumber_per_nm: 3, bulk_resistivity_uohm_cm: 1.7",
        ),
        with_parts(
            channel="{length_nm: 200, dimension: 3}",
            contacts="{bias_mV: 1, temperature_K: 4, left: {transmission: 0.5, angular: tunnel}}",
            scattering=f"{{points: [{{{POINT}, angular: tunnel, reflection: diffuse}}], random: "
            "[{count: 2, transmission: 0.5, angular: tunnel, reflection: diffuse}], "
            "mean_free_path_nm: {energy_meV: [0, 1], value: [1, 2]}}",
        ),
        # Without walls, and without relaxation, these names are free.
        with_parts(
            channel="{length_nm: 9, dimension: 2}",
            scattering="{mean_free_path_nm: [{name: walls, mean_free_path_nm: 1}, "
            "{name: bath, mean_free_path_nm: 1}]}",
        ),
        part(
            "scattering",
            "random: [{count: 9, transmission: 1, drawn: true}, {count: 9, transmission: 1}], "
            f"points: [{{{POINT}, group: 0}}, {{position_nm: 1, transmission: 1, group: null}}]",
        ),
        part("simulation", "trajectories: 0"),
        part("simulation", "trajectories: 50"),
        part("relaxation", "bath_temperature_K: 0"),
        relaxing(
            "{kind: bath, path_nm: 1, direction: randomised}, {kind: carriers, path_nm: 1e9}, "
            "{kind: optical_phonon, path_nm: 1, energy_meV: 36}",
            simulation="{heat_share_error: 0.01}",
        ),
        with_parts(probes="[{position_nm: 1, coupling: 0.5}, {position_nm: 2, coupling: 1}]"),
        relaxing(BATH, simulation="{energy_bins: 5000}"),
        relaxing(BATH, simulation="{cells: 16423, energy_bins: 50}"),
        part("scattering", "mean_free_path_nm: [{name: bath, mean_free_path_nm: 1}]"),
        with_parts(scattering="{points: [], random: [], sections: []}", noise="false"),
    ],
)
def test_accepted_and_read_back(text):
    scenario = read_text(text)
    assert read_text(to_yaml(scenario)) == scenario


def test_load(tmp_path):
    path = tmp_path / "Wire 3.yaml"
    path.write_text(MINIMAL)
    assert load(path) == load(str(path))
    assert load(path).name == "Wire 3"
    path.write_text("channel:\n  length_nm: -1\ncontacts: {bias_mV: 1, temperature_K: 4}\n")
    with pytest.raises(ScenarioError) as caught:
        load(path)
    message = f"{path}, line 2: channel.length_nm: found -1; allowed: a number > 0"
    assert str(caught.value) == message
    # Changes are made before anything is checked; what they set stands in no line.
    assert load(path, {"channel.length_nm": 5}).channel.length_nm == 5.0
    with pytest.raises(ScenarioError) as caught:
        load(path, {"channel.length_nm": -2})
    assert str(caught.value) == f"{path}: channel.length_nm: found -2; allowed: a number > 0"


@pytest.mark.parametrize(
    ("name", "slug"),
    [
        ("a wire", "a-wire"),
        ("Gate_2 (V=0.5)", "gate_2-v-0-5"),
        ("../../etc", "etc"),
        ("Fläche", "flache"),
        ("线", "scenario"),
        ("x" * 300, "x" * 80),
    ],
)
def test_slug(name, slug):
    assert read_text(with_parts(name=json.dumps(name, ensure_ascii=False))).slug == slug


VALUES = st.recursive(
    st.none()
    | st.booleans()
    | st.integers()
    | st.floats()
    | st.sampled_from(["", "a", "bath", "|number", "1,5", "\n", "tunnel", "é"]),
    lambda inner: (
        st.lists(inner, max_size=3)
        | st.dictionaries(
            st.sampled_from(["position_nm", "transmission", "energy_meV", "value", "|list", "low"]),
            inner,
            max_size=3,
        )
    ),
    max_leaves=6,
)


@given(
    st.sampled_from([FULL, SPACE]),
    st.dictionaries(st.sampled_from(SCENARIO_KEYS), VALUES, min_size=1, max_size=4),
)
def test_whatever_is_set_gives_a_scenario_or_faults_that_can_be_told(text, changes):
    changes = {key.replace("[]", "[0]"): value for key, value in changes.items()}
    scenario = read_text(text)
    try:
        changed = scenario.replace(changes)
    except ScenarioError as error:
        assert error.faults
        assert all(str(fault) for fault in error.faults)
    else:
        assert read_text(to_yaml(changed)) == changed


# Writing.


def test_to_yaml_is_canonical():
    text = to_yaml(read_text(points("{position_nm: 100, transmission: 0.2}"), "one defect.yaml"))
    assert (
        text
        == """\
name: one defect
channel:
  length_nm: 200.0
  dimension: 1
  modes: 1.0
  degeneracy: 2.0
  specularity: 1.0
contacts:
  bias_mV: 1.0
  temperature_K: 4.0
  left: {transmission: 1.0, angular: constant, reflection: specular}
  right: {transmission: 1.0, angular: constant, reflection: specular}
scattering:
  sections: []
  points:
    - {position_nm: 100.0, transmission: 0.2, angular: constant, reflection: specular}
  random: []
relaxation:
  mechanisms: []
probes: []
noise: false
accuracy: {}
simulation:
  seed: 1
  cells: 200
  batches: 64
  trajectories: 6
"""
    )


@pytest.mark.parametrize("text", [FULL, SPACE])
def test_round_trip_of_every_key(text):
    scenario = read_text(text)
    assert read_text(to_yaml(scenario)) == scenario
    assert to_yaml(read_text(to_yaml(scenario))) == to_yaml(scenario)


def test_long_tables_are_wrapped():
    energies = [0.1 * i for i in range(100)]
    values = [1 / (i + 3) for i in range(100)]
    scenario = read_text(table(str(energies), str(values)))
    text = to_yaml(scenario)
    assert max(map(len, text.splitlines())) <= 100
    assert read_text(text) == scenario


@given(
    st.floats(allow_nan=False, allow_infinity=False),
    st.text().filter(lambda text: text.strip() and text.isprintable()),
)
def test_numbers_and_names_round_trip_exactly(number, name):
    scenario = read_text(MINIMAL).replace({"contacts.bias_mV": number, "name": name})
    again = read_text(to_yaml(scenario))
    assert again.name == name
    assert math.copysign(1, again.contacts.bias_mV) == math.copysign(1, number)
    assert again == scenario


def test_numbers_are_numbers_for_other_readers_too():
    assert write_yaml({"a": 1e22, "b": 1e-7, "c": 1.5e300, "d": "1e3", "e": "on", "f": None}) == (
        'a: 1.0e+22\nb: 1.0e-07\nc: 1.5e+300\nd: "1e3"\ne: "on"\nf: null\n'
    )


def test_ten_thousand_points_are_quick():
    lines = [
        f"    - {{position_nm: {(i + 1) * 9.123456789012}, transmission: {1 / (i + 1.1)!r}}}"
        for i in range(10_000)
    ]
    text = with_parts(channel="{length_nm: 1e5}", scattering="\n  points:\n" + "\n".join(lines))
    start = time.process_time()
    scenario = read_text(text)
    again = read_text(to_yaml(scenario))
    assert time.process_time() - start < 4  # 1.5 s here; a parser in Python alone needs longer
    assert again == scenario


# Changing.


def test_replace():
    scenario = read_text(FULL)
    before = copy.deepcopy(scenario)
    changed = scenario.replace(
        {
            "channel.length_nm": np.float64(2000),
            "scattering.points[1].transmission": 0.3,
            "scattering.backscatter_path_nm[1].backscatter_path_nm.value[0]": np.int64(7),
            "contacts.left.transmission": {"energy_meV": np.array([0, 1]), "value": (0.5, 1)},
            "simulation.energy_bins": None,
            "simulation.seed": np.int32(5),
        }
    )
    assert scenario == before
    assert changed.channel.length_nm == 2000.0
    assert type(changed.channel.length_nm) is float
    assert changed.scattering.points[1].transmission == 0.3
    assert changed.scattering.backscatter_path_nm[1].backscatter_path_nm.value == (7.0, 200.0)
    assert changed.contacts.left.transmission.value == (0.5, 1.0)
    assert changed.simulation.energy_bins is None
    assert changed.simulation.seed == 5
    assert read_text(to_yaml(changed)) == changed


def test_replace_removes_with_none():
    scenario = read_text(FULL)
    changed = scenario.replace(
        {
            "scattering.points[0]": None,
            "scattering.points[1].position_nm": 60,
            "scattering.backscatter_path_nm": None,
            "scattering.mean_free_path_nm": 40,
            "channel.modes": None,
            "accuracy": None,
        }
    )
    assert [point.position_nm for point in changed.scattering.points] == [60.0]
    assert changed.scattering.mean_free_path_nm == 40.0
    assert changed.channel.modes == 1.0
    assert changed.accuracy.fano is None


def test_replace_takes_parts_of_scenarios():
    scenario = read_text(MINIMAL)
    point = Point(position_nm=5, transmission=0.5)
    assert scenario.replace({"scattering.points": [point]}).scattering.points == (point,)


@pytest.mark.parametrize(
    ("changes", "message"),
    [
        ({"channel.lenght_nm": 1}, "channel.lenght_nm: unknown key; did you mean length_nm?"),
        ({"chanel.length_nm": 1}, "chanel: unknown key; did you mean channel? allowed keys: name,"),
        ({"channel.length_nm": -1}, "channel.length_nm: found -1; allowed: a number > 0"),
        ({"channel.length_nm": True}, "channel.length_nm: found true; allowed: a number > 0"),
        ({"channel.length_nm": "5"}, "found '5' (text: write the number without quotes)"),
        ({"channel.length_nm": math.nan}, "found .nan, not a finite number"),
        ({"simulation.seed": 10**400}, "simulation.seed: found .inf, not a finite number"),
        ({"channel.length_nm": object}, "channel.length_nm: found <class 'object'>; allowed"),
        ({"channel.length_nm": None}, "channel.length_nm: required, but missing"),
        ({"channel.length_nm": 70}, "sections[1].to_nm: found 1000.0; outside the channel"),
        (
            {"scattering.points[2].transmission": 1},
            "scattering.points[2]: no such entry; allowed: scattering.points[0] to "
            "scattering.points[1]",
        ),
        ({"relaxation.mechanisms[0].path_nm": 1}, "no such entry; relaxation.mechanisms is empty"),
        ({"channel[0]": 1}, "channel[0]: channel is no list: found a mapping"),
        (
            {"contacts.left.transmission.value[0]": 1},
            "contacts.left.transmission.value[0]: contacts.left.transmission is no mapping: found",
        ),
        (
            {"scattering.mean_free_path_nm": 5},
            "scattering.backscatter_path_nm: found a list of 2 entries; mean_free_path_nm is given",
        ),
        ({"noise": True}, "this version does not compute noise"),
        ({"channel.bulk_resistivity_uohm_cm": 2}, "in d = 1 there is no cross-section"),
        ({"points[-1].a": 1}, "points[-1].a: not a key path; allowed: for example scattering.poi"),
        ({"channel..length_nm": 1}, "channel..length_nm: not a key path"),
        ({"": 1}, "not a key path"),
        ({"channel.length_nm ": 1}, "not a key path"),
        ({"scattering.points[00].a": 1}, "not a key path"),
        ({"scattering.points[x]": 1}, "not a key path"),
        ({5: 1}, "5: not a key path"),
    ],
)
def test_replace_refuses(changes, message):
    scenario = read_text(FULL)
    with pytest.raises(ScenarioError) as caught:
        scenario.replace(changes)
    lines = str(caught.value).splitlines()
    assert message in lines[0]
    assert lines[0].startswith("scenario 'a wire': ")
    with pytest.raises(ScenarioError, match="--set: "):
        scenario.replace(changes, source="--set")


def test_changes_make_missing_mappings():
    changes = {"scattering.mean_free_path_nm": 9, "simulation.cells": 7}
    scenario = read_text(MINIMAL, changes=changes)
    assert scenario.scattering.mean_free_path_nm == 9.0
    assert scenario.simulation.cells == 7
    with pytest.raises(
        ScenarioError, match=r"points\[0\]: no such entry; scattering.points is emp"
    ):
        read_text(MINIMAL, changes={"scattering.points[0].transmission": 0.5})


def test_scenarios_built_in_python_are_checked():
    parts = {"channel": {"length_nm": 10}, "contacts": {"bias_mV": 1, "temperature_K": 1}}
    assert Scenario(**parts).channel.modes == 1.0
    with pytest.raises(ValueError, match="outside the channel"):
        Scenario(**parts, scattering={"points": [Point(position_nm=11, transmission=1)]})


def test_with_defaults():
    text = with_parts(probes="[{position_nm: 9}]", scattering="{mean_free_path_nm: 9}")
    scenario = read_text(text)
    filled = scenario.with_defaults()
    assert filled.simulation.disorder_seed == 1
    assert filled.simulation.relative_error == 0.005
    assert filled.relaxation.bath_temperature_K == 4.0
    assert filled.probes[0].temperature_K == 4.0
    assert read_text(to_yaml(filled)) == filled
    limited = scenario.replace({"simulation.histories": 1000}).with_defaults()
    assert limited.simulation.relative_error is None


# Schema.


def test_json_schema():
    schema = json_schema()
    assert schema["$schema"].startswith("https://json-schema.org/")
    assert set(schema["required"]) == {"channel", "contacts"}
    assert schema["additionalProperties"] is False
    channel = schema["$defs"]["Channel"]["properties"]
    assert channel["length_nm"] == {
        "description": "Length of the channel in nm. Allowed: a number > 0.",
        "exclusiveMinimum": 0,
        "type": "number",
    }
    assert channel["modes"]["default"] == 1.0
    for definition in [schema, *schema["$defs"].values()]:
        for name, entry in definition["properties"].items():
            assert entry.get("description"), name
    json.dumps(schema)


def test_every_key_has_its_words():
    assert "scattering.points[].transmission.energy_meV" in SCENARIO_KEYS
    assert "relaxation.mechanisms[].direction" in SCENARIO_KEYS
    assert len(set(SCENARIO_KEYS)) == len(SCENARIO_KEYS)


def test_import_is_light():
    code = (
        "import sys, carriersim.scenario; "
        "print([m for m in ('numba', 'scipy', 'matplotlib', 'numpy') if m in sys.modules])"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "[]"


@pytest.mark.parametrize("phonons", ["", ", {kind: optical_phonon, path_nm: 9, energy_meV: 7}"])
@pytest.mark.parametrize("asked", ["", "energy_bins: 333"])
def test_bins_and_cells_are_counted_as_the_run_does(phonons, asked):
    """The limit on memory is of no use if it counts something else."""
    from carriersim.engine.problem import build
    from carriersim.memory_check import cuts, energy_bins
    from carriersim.yamlfile import read

    text = relaxing(
        f"{{kind: carriers, path_nm: 5}}{phonons}",
        contacts="{bias_mV: -30, temperature_K: 9, left: {temperature_K: 20}}",
        scattering="{points: [{position_nm: 9.6, transmission: 0.5}], "
        "sections: [{from_nm: 33.3, to_nm: 100.1}]}",
        probes="[{position_nm: 50.2, coupling: 0.5}]",
        simulation=f"{{{asked}}}",
    )
    problem, (document, _) = build(read_text(text)), read(text, "s.yaml")
    assert energy_bins(document)[0] == problem.relaxed.axis.bins
    assert 200 <= problem.cells <= 200 + cuts(document)


def test_a_check_needs_no_compiled_code():
    code = (
        "import sys; from carriersim.scenario import read_text; read_text(sys.stdin.read()); "
        "print('numba' in sys.modules)"
    )
    text = relaxing("{kind: optical_phonon, path_nm: 1, energy_meV: 36}")
    done = subprocess.run(
        [sys.executable, "-c", code], input=text, capture_output=True, text=True, check=True
    )
    assert done.stdout.strip() == "False"


def test_section_without_a_path_is_ballistic():
    scenario = read_text(
        part(
            "scattering",
            "backscatter_path_nm: 5, sections: [{from_nm: 0, to_nm: 1}]",
        )
    )
    section = scenario.scattering.sections[0]
    assert section.mean_free_path_nm is None
    assert section.backscatter_path_nm is None
