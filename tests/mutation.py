"""Does a test notice when the engine is wrong by 2 %?

    python tests/mutation.py [--quick] [--list] [NAME ...]

Each mutation scales one rate, path, transmission or constant inside the engine by 1.02, after the
scenario has been validated, and runs the tests that ought to notice, in a process of its own (by
fork, so that the compiled kernels are loaded once): published tests for elastic runs, in one
dimension and with directions, those of test_relaxing_coverage.py for runs with relaxation, and
those of test_directions.py for random directions. A mutation counts as caught only if a number
disagrees with its expectation: not if a test breaks or finds its number too noisy. Without a
mutation the same tests must pass. Exit status 0 if all this is so.

What compiled functions are made of is changed in their source, and they are compiled again.
"""

import argparse
import contextlib
import dataclasses
import inspect
import io
import multiprocessing
import os
import sys
import time
from collections.abc import Callable
from multiprocessing.connection import wait
from pathlib import Path

sys.path.insert(0, str(Path(__file__).resolve().parents[1]))

import numpy as np
import pytest

from carriersim import fermi
from carriersim.engine import (
    deviation,
    directions,
    mechanisms,
    observe,
    observe_relaxed,
    observe_space,
    planes,
    problem,
    ray_tallies,
    rays,
    residual,
    rounds,
    sources,
    space,
    straight,
    tallies,
    trial_part,
    wander,
)
from tests.checks_of_numbers import TooNoisy, simulate

ROOT = Path(__file__).resolve().parents[1]
FACTOR = 1.02
AT_ONCE = 2  # processes; each runs the kernels in two threads

INTERRUPTED = pytest.ExitCode.INTERRUPTED  # by the recorder, at the first disagreement
OPTIONS = ["-q", "--tb=no", "-m", "not slow", f"--rootdir={ROOT}", "-p", "no:cacheprovider"]

ONE_SCATTERER = "test_one_scatterer.py::test_four_parts_at_the_scatterer_and_one_at_the_interfaces"
LANDAUER = "test_landauer_integrals.py"
MIXED_PARTS = "test_series_law.py::test_each_part_with_sections_mechanisms_and_barriers"
TWO_STEP = "test_two_step_distribution.py"
SERIES_LAW = "test_series_law.py"
THERMO = "test_thermoelectric.py"
RELAXING = "test_relaxing_coverage.py"
DIRECTIONS = "test_directions.py"


class Applied:
    """Counts how often a mutation has changed anything."""

    count = 0


@dataclasses.dataclass(frozen=True)
class Mutation:
    """One thing to be scaled. install: patches the engine in this process; tests: who notices."""

    name: str
    install: Callable[[], None]
    tests: tuple[str, ...]
    quick: bool = False


def in_problem(change):
    """An install function that passes every Problem through change (None: nothing to scale)."""

    def install():
        build = problem.build

        def changed(scenario):
            built = build(scenario)
            new = change(built)
            if new is None:
                return built
            Applied.count += 1
            return new

        problem.build = changed

    return install


def scaled(array, chosen):
    """Copy of an array with the chosen entries scaled; None if that changes nothing."""
    new = np.array(array, float)
    new[chosen] *= FACTOR
    return None if np.array_equal(new, array) else new


def with_geometry(built, **arrays):
    return dataclasses.replace(built, geometry=built.geometry._replace(**arrays))


def with_spectrum(built, **arrays):
    return dataclasses.replace(built, spectrum=built.spectrum._replace(**arrays))


def transmission(choose):
    """Scale the transmission of the node that choose(problem) gives (None: no such node)."""

    def change(built):
        node = choose(built)
        if node is None or not built.geometry.transmission[node] < 1.0:
            return None
        new = scaled(built.geometry.transmission, node)
        assert new[node] <= 1.0
        return with_geometry(built, transmission=new)

    return in_problem(change)


def scatterer(number):
    """The node of the number-th point scatterer of constant transmission, from 0."""

    def choose(built):
        nodes = np.flatnonzero(built.geometry.transmission[1:-1] < 1.0) + 1
        return nodes[number] if number < nodes.size else None

    return choose


def transmission_table(choose):
    """Scale the table of the node that choose(problem) gives."""

    def change(built):
        if built.spectrum is None:
            return None
        table = built.spectrum.node_table[choose(built)]
        if table < 0:
            return None
        return scaled_table(built, table, largest=1.0)

    return in_problem(change)


def first_table(built):
    """The first inner node whose transmission is a table."""
    inner = np.flatnonzero(built.spectrum.node_table[1:-1] >= 0) + 1
    return inner[0] if inner.size else 0


def path_table(number):
    """Scale the number-th table of a path."""

    def change(built):
        if built.spectrum is None:
            return None
        used = np.unique(built.spectrum.path_index)
        return scaled_table(built, used[number]) if number < used.size else None

    return in_problem(change)


def scaled_table(built, table, largest=np.inf):
    new = scaled(built.spectrum.values, np.s_[:, table])
    width = np.diff(built.spectrum.edges_meV)
    ends = new[:, table, 0] + 0.5 * np.abs(new[:, table, 1]) * width
    assert ends.max() <= largest
    return with_spectrum(built, values=new)


def thickness(chosen):
    """Scale the optical thickness of the segments that chosen(problem) marks (bool, K-1)."""

    def change(built):
        new = scaled(built.geometry.thickness, chosen(built))
        return None if new is None else with_geometry(built, thickness=new)

    return in_problem(change)


def section(number):
    """Segments of the number-th section."""

    def chosen(built):
        middle = 0.5 * (built.nodes_nm[1:] + built.nodes_nm[:-1])
        sections = built.scenario.scattering.sections[number : number + 1]
        inside = [(s.from_nm < middle) & (middle < s.to_nm) for s in sections]
        return inside[0] if inside else np.zeros(middle.size, bool)

    return chosen


def outside_sections(built):
    number = len(built.scenario.scattering.sections)
    inside = [section(i)(built) for i in range(number)]
    return ~np.any(inside, axis=0) if inside else np.ones(built.nodes_nm.size - 1, bool)


def named_path(name):
    """Scale the rate of one mechanism where it is one of several and a number."""

    def change(built):
        share = np.zeros(built.geometry.thickness.size)
        for i, paths in enumerate(built.segment_paths):
            rates = {p.name: 1 / p.value for p in paths if isinstance(p.value, float)}
            if name in rates and len(rates) > 1:
                share[i] = rates[name] / sum(rates.values())
        if not share.any():
            return None
        new = built.geometry.thickness * (1 + (FACTOR - 1) * share)
        return with_geometry(built, thickness=new)

    return in_problem(change)


def path_share(name):
    """Scale a mechanism's path where a piece is split among mechanisms, and nowhere else."""

    def change(built):
        found = False
        segments = []
        for paths in built.segment_paths:
            row = []
            for path in paths:
                if path.name == name and len(paths) > 1 and isinstance(path.value, float):
                    path = dataclasses.replace(path, value=path.value * FACTOR)
                    found = True
                row.append(path)
            segments.append(tuple(row))
        return dataclasses.replace(built, segment_paths=tuple(segments)) if found else None

    return in_problem(change)


def functional(name, index=None):
    """Scale one of the integrals that results are made of."""

    def change(built):
        old = getattr(built.functionals, name)
        if old is None:
            return None
        if index is None:
            new = old * FACTOR
        else:
            new = tuple(c * FACTOR if i == index else c for i, c in enumerate(old))
        functionals = dataclasses.replace(built.functionals, **{name: new})
        return dataclasses.replace(built, functionals=functionals)

    return in_problem(change)


def in_channel(key):
    """Scale a number of the scenario's channel that results are computed with."""

    def change(built):
        channel = built.scenario.channel
        channel = channel.model_copy(update={key: getattr(channel, key) * FACTOR})
        return dataclasses.replace(
            built, scenario=built.scenario.model_copy(update={"channel": channel})
        )

    return in_problem(change)


def probe_weight(built):
    probes = built.scenario.probes
    if not probes:
        return None
    new = tuple(
        p.model_copy(update={"weight_right": min(FACTOR * p.weight_right, 1.0)}) for p in probes
    )
    scenario = built.scenario.model_copy(update={"probes": new})
    return dataclasses.replace(built, scenario=scenario)


def constant(module, name):
    """Scale a constant as one module sees it."""

    def install():
        setattr(module, name, getattr(module, name) * FACTOR)
        Applied.count += 1

    return install


def argument(module, name, position):
    """Scale a numeric argument of one function or class of a module."""

    def install():
        function = getattr(module, name)

        def changed(*arguments, **keywords):
            new = list(arguments)
            new[position] = new[position] * FACTOR
            Applied.count += 1
            return function(*new, **keywords)

        setattr(module, name, changed)

    return install


def result_of(module, name):
    """Scale what one function of a module returns."""

    def install():
        function = getattr(module, name)

        def changed(*arguments):
            Applied.count += 1
            return function(*arguments) * FACTOR

        setattr(module, name, changed)

    return install


def mean_free_path():
    """Scale the backscattering path that a mean free path stands for, 2 l."""
    function = problem._scaled

    def changed(value, factor):
        Applied.count += factor != 1.0
        return function(value, factor * FACTOR if factor != 1.0 else factor)

    problem._scaled = changed


def tally(name, column=np.s_[:]):
    """Scale one of the kernel's counts before it becomes a response."""

    def install():
        reduce = tallies.reduce

        def changed(built, counts, histories):
            getattr(counts, name)[..., column] *= FACTOR
            Applied.count += 1
            return reduce(built, counts, histories)

        tallies.reduce = changed

    return install


# --- relaxation -----------------------------------------------------------------------------------


def in_relaxed(change):
    """Pass what a relaxing problem has on top through change: a dict of new fields, or None."""

    def in_built(built):
        new = None if built.relaxed is None else change(built.relaxed)
        if new is None:
            return None
        return dataclasses.replace(built, relaxed=dataclasses.replace(built.relaxed, **new))

    return in_problem(in_built)


def mechanism(name, chosen=np.s_[:]):
    """Scale an array of Mechanisms; bounds of phonon rates are made from it later."""

    def change(relaxed):
        old = relaxed.mechanisms
        array = scaled(getattr(old, name), chosen)
        if array is None:
            return None
        return {"mechanisms": old._replace(**{name: array})}

    return in_relaxed(change)


def bath_of_the_residual():
    """Scale k T_b where the residual of a trial occupation aims at it."""
    return in_relaxed(
        lambda r: {"mechanisms": r.mechanisms._replace(bath_meV=FACTOR * r.mechanisms.bath_meV)}
    )


def setting(name):
    """Scale a number that the relaxing kernel needs."""

    def change(relaxed):
        old = getattr(relaxed.setting, name)
        return {"setting": relaxed.setting._replace(**{name: FACTOR * old})} if old else None

    return in_relaxed(change)


def coupled(*names):
    """Scale arrays of the coupled probes."""

    def change(relaxed):
        arrays = {name: scaled(getattr(relaxed.probes, name), np.s_[:]) for name in names}
        if not relaxed.probes.from_left.any():
            return None
        return {"probes": relaxed.probes._replace(**arrays)}

    return in_relaxed(change)


def relaxing_table(number):
    """Scale the number-th table as the relaxing kernel has it."""

    def change(relaxed):
        if relaxed.tables is None:
            return None
        first = relaxed.tables.first
        value = scaled(relaxed.tables.value, np.s_[first[number] : first[number + 1]])
        return {"tables": relaxed.tables._replace(value=value)}

    return in_relaxed(change)


def returned(owner, name, change, spoils=True):
    """Pass what a function or method returns through change, which may alter it in place.

    spoils: whether that is counted as a change; else the change has to count.
    """

    def install():
        function = inspect.getattr_static(owner, name)

        def changed(*arguments, **keywords):
            result = function(*arguments, **keywords)
            Applied.count += spoils
            new = change(result)
            return result if new is None else new

        setattr(owner, name, changed)

    return install


def entry(key, chosen=None, factor=FACTOR):
    """For `returned`: scale an entry of a dict, or some of its numbers."""

    def change(result):
        if result is None or key not in result:
            return
        new = np.array(result[key], float)
        new[() if chosen is None else chosen] *= factor
        result[key] = new

    return change


def member(number, factor=FACTOR):
    """For `returned`: scale one member of a tuple."""
    return lambda result: tuple(x * factor if i == number else x for i, x in enumerate(result))


def frozen(name, factor=FACTOR):
    """Scale a field that particles meet."""

    def change(result):
        fields, warmer = result
        return fields._replace(**{name: getattr(fields, name) * factor}), warmer

    return returned(deviation.FromReference, "frozen", change)


def source(kind):
    """Scale how much a source emits."""

    def change(result):
        result[0][kind] *= FACTOR

    return returned(deviation.FromReference, "warm", change)


def opposite_pairs(result):
    """Phonon pairs with the other sign; 2 % of them are 2 % of something small."""
    pairs, strength = result
    pairs["pair_kind"] = pairs["pair_kind"] ^ 4
    return pairs, strength


def recompiled(modules, old, new):
    """Replace a text in the source of the first module; compile all of them again, in order.

    modules: the changed one and those whose compiled functions call it.
    """

    def install():
        for module in modules:
            source = inspect.getsource(module).replace("cache=True, ", "")
            if module is modules[0]:
                assert source.count(old) == 1, f"{source.count(old)} times: {old}"
                source = source.replace(old, new)
            before = dict(vars(module))
            exec(compile(source, module.__file__, "exec"), module.__dict__)
            rebind(before, module)
        Applied.count += 1

    return install


def rebind(before, module):
    """Let who has imported a function of a module see the new one."""
    renewed = {
        id(function): getattr(module, name)
        for name, function in before.items()
        if callable(function) and not isinstance(function, type)
    }
    for other in [m for name, m in sys.modules.items() if name.startswith("carriersim")]:
        for name, thing in list(vars(other).items()):
            if id(thing) in renewed:
                setattr(other, name, renewed[id(thing)])


def residual_term(old):
    """Scale a term of the residual, given as the beginning of a factor in its source."""
    return recompiled((residual, sources, wander), old, f"{old}{FACTOR} * ")


# --- directions -----------------------------------------------------------------------------------


def in_space(change):
    """Pass planes and walls of a problem through change: a dict of new fields, or None."""

    def in_built(built):
        new = None if built.space is None else change(built.space)
        if new is None:
            return None
        return dataclasses.replace(built, space=dataclasses.replace(built.space, **new))

    return in_problem(in_built)


def walls(name):
    """Scale a number of the walls that scatter."""

    def change(old):
        if old.walls[0] is None:
            return None
        pairs = [p and p._replace(**{name: min(FACTOR * getattr(p, name), 1e9)}) for p in old.walls]
        return {"walls": tuple(pairs)}

    return in_space(change)


def view_edges(old):
    """The classes of direction a little wider, counted from the axis."""
    edges = np.cos(np.minimum(FACTOR * np.arccos(old.planes.view_edges), np.pi / 2))
    first = np.zeros_like(old.planes.view_first)
    return {"planes": old.planes._replace(view_edges=edges, view_first=first)}


def of_dimension(module, name):
    """Scale a table of numbers, one for each dimension, in d = 2 and 3."""

    def install():
        table = getattr(module, name)
        for dimension in (2, 3):
            table[dimension] *= FACTOR
        Applied.count += 1

    return install


def own_table(module, name):
    """The same, as one module alone sees it."""

    def install():
        setattr(module, name, dict(getattr(module, name)))
        of_dimension(module, name)()

    return install


def of_sample(chosen):
    """Scale something of what a batch found; chosen: function of the Sample's dict of sums."""

    def change(sample):
        chosen(sample.rays)[...] *= FACTOR

    return returned(ray_tallies, "reduce", change)


def kernel(old, new):
    """Change the source of the kernel with directions."""
    return recompiled((rays,), old, new)


def drawn(old, new):
    """Change the source of the random directions that the kernel draws."""
    return recompiled((directions, rays), old, new)


def one_run(*names):
    return tuple(f"{RELAXING}::test_one_run[{name}]" for name in names)


def left_node(built):
    return 0


def right_node(built):
    return -1


def _barrier(name, case="barrier 30 mV 77 K"):
    return (f"{LANDAUER}::{name}[{case}]",)


FIVE = (f"{SERIES_LAW}::test_each_scatterer",)
EVERYTHING = (f"{LANDAUER}::test_each_part_drops_its_share_of_the_potential[everything 0 mV 50 K]",)
CURRENT = _barrier("test_current_and_resistance")
BALLISTIC = "test_codata.py::test_a_channel_without_scatterers_has_one_quantum_per_mode"
ANY_BALLISTIC = (f"{BALLISTIC}[1-2-10.0]",)
SCALES = ("test_wiedemann_franz.py::test_ratio_at_a_small_temperature_difference[300-300]",)
SUBBANDS = ("test_subbands.py::test_current_and_its_slope",)
LINEAR = (f"{THERMO}::test_linear_coefficients[rising]",)
UNEQUAL = (f"{THERMO}::test_contacts_of_different_temperature[hot left]",)

MUTATIONS = (
    Mutation("transmission of scatterer 1", transmission(scatterer(0)), (ONE_SCATTERER,), True),
    *(
        Mutation(f"transmission of scatterer {n + 1}", transmission(scatterer(n)), FIVE)
        for n in range(1, 5)
    ),
    Mutation("transmission of the left interface", transmission(left_node), (MIXED_PARTS,)),
    Mutation("transmission of the right interface", transmission(right_node), (MIXED_PARTS,)),
    Mutation("table of a scatterer", transmission_table(first_table), CURRENT, True),
    Mutation("table of the left interface", transmission_table(left_node), EVERYTHING),
    Mutation("table of the right interface", transmission_table(right_node), EVERYTHING),
    Mutation("rate of the channel", thickness(outside_sections), SCALES, True),
    Mutation("rate of section 1", thickness(section(0)), (MIXED_PARTS,)),
    Mutation("rate of section 2", thickness(section(1)), (MIXED_PARTS,)),
    Mutation("rate of the first named path", named_path("defects"), (MIXED_PARTS,)),
    Mutation("rate of the second named path", named_path("phonons"), (MIXED_PARTS,)),
    Mutation("share of the first named path", path_share("defects"), (MIXED_PARTS,)),
    Mutation("share of the second named path", path_share("phonons"), (MIXED_PARTS,)),
    Mutation("mean free path to backscattering path", mean_free_path, (MIXED_PARTS,)),
    Mutation(
        "table of a path",
        path_table(0),
        (f"{LANDAUER}::test_each_part_drops_its_share_of_the_potential[wire -25 mV 60 K]",),
        True,
    ),
    Mutation("table of the second named path", path_table(1), EVERYTHING),
    Mutation(
        "length of segments with path tables",
        in_problem(
            lambda p: (
                with_geometry(p, length_nm=p.geometry.length_nm * FACTOR)
                if p.spectrum is not None and p.spectrum.path_index.size
                else None
            )
        ),
        (f"{LANDAUER}::test_each_part_drops_its_share_of_the_potential[wire -25 mV 60 K]",),
    ),
    Mutation("modes", argument(problem, "_constant_functionals", 0), ANY_BALLISTIC, True),
    Mutation("table of modes", result_of(problem, "modes_at"), SUBBANDS, True),
    Mutation("degeneracy", in_channel("degeneracy"), ANY_BALLISTIC),
    Mutation("charge: current", constant(observe, "AMPERE_PER_MEV"), ANY_BALLISTIC),
    Mutation("charge: power", constant(observe, "WATT_PER_MEV2"), SCALES),
    Mutation("Boltzmann: Fermi functions", constant(fermi, "BOLTZMANN_MEV_PER_K"), LINEAR, True),
    Mutation("Boltzmann: closed integrals", constant(problem, "BOLTZMANN_MEV_PER_K"), SCALES),
    Mutation("Boltzmann: temperatures", constant(observe, "BOLTZMANN_MEV_PER_K"), (TWO_STEP,)),
    Mutation("bias", argument(problem, "Window", 0), CURRENT),
    Mutation("left temperature", argument(problem, "Window", 1), UNEQUAL),
    Mutation("right temperature", argument(problem, "Window", 2), UNEQUAL),
    Mutation("integral of the current", functional("current"), CURRENT),
    Mutation(
        "integral of its slope",
        functional("bias_slope"),
        _barrier("test_differential_resistance_is_taken_at_the_bias"),
    ),
    Mutation("integral of the heat", functional("heat"), _barrier("test_heat_in_each_contact")),
    Mutation(
        "integral of the filling", functional("filling"), _barrier("test_levels_beside_the_middle")
    ),
    Mutation("integral of the number", functional("number"), (TWO_STEP,)),
    Mutation("integral of the energy", functional("energy"), (TWO_STEP,)),
    *(
        Mutation(f"thermal integral {n}", functional("thermal", n), LINEAR, quick=n == 1)
        for n in range(3)
    ),
    Mutation("mean number of modes", functional("mean_modes"), ANY_BALLISTIC),
    Mutation(
        "share of the histories",
        in_problem(lambda p: dataclasses.replace(p, share=p.share * FACTOR)),
        CURRENT,
    ),
    Mutation("weight of probes", in_problem(probe_weight), ("test_probe_weight.py::test_reading",)),
    Mutation("tally of turns", tally("turns"), (TWO_STEP,)),
    Mutation("tally of arrivals from the left", tally("arrivals", 0), FIVE),
    Mutation("tally of arrivals from the right", tally("arrivals", 1), FIVE),
    Mutation("tally of what gets through", tally("transmitted"), (ONE_SCATTERER,)),
)

KEPT_BATH, RANDOM_BATH = one_run("kept bath"), one_run("randomised bath")
KEPT_CARRIERS, RANDOM_CARRIERS = one_run("kept carriers"), one_run("randomised carriers")
PHONON, PROBE = one_run("phonon"), one_run("coupled probe")
COLD_BATH, HOT_PROBE = one_run("cold bath"), one_run("hot probe")
OBSERVER = observe_relaxed.RelaxedObserver

RELAXATION = (
    # What happens to carriers, alike in the trial occupation and for the particles.
    Mutation("rate of a kept bath", mechanism("rates", mechanisms.KEPT_BATH), KEPT_BATH, True),
    Mutation(
        "rate of a randomised bath", mechanism("rates", mechanisms.RANDOM_BATH), RANDOM_BATH, True
    ),
    Mutation("rate of kept carriers", mechanism("rates", mechanisms.KEPT_CARRIERS), KEPT_CARRIERS),
    Mutation(
        "rate of randomised carriers",
        mechanism("rates", mechanisms.RANDOM_CARRIERS),
        RANDOM_CARRIERS,
    ),
    Mutation("rate of phonons", mechanism("phonon_rate"), PHONON),
    Mutation("number of phonons", mechanism("phonon_number"), PHONON),
    Mutation("energy of phonons", mechanism("phonon_meV"), PHONON),
    Mutation("coupling of a probe", coupled("from_left", "from_right"), HOT_PROBE),
    Mutation("coupling of a probe to the right", coupled("from_left"), HOT_PROBE),
    Mutation("coupling of a probe to the left", coupled("from_right"), HOT_PROBE),
    Mutation("where a probe emits to", coupled("emits_right"), HOT_PROBE),
    Mutation(
        "temperature of a probe",
        in_relaxed(lambda r: {"probe_kelvin": scaled(r.probe_kelvin, np.s_[:])}),
        HOT_PROBE,
    ),
    Mutation("rate of a relaxing channel", thickness(outside_sections), PHONON),
    Mutation("scatterer of a relaxing channel", transmission(scatterer(0)), HOT_PROBE),
    Mutation("first table of a relaxing channel", relaxing_table(0), KEPT_BATH),
    Mutation("second table of a relaxing channel", relaxing_table(1), KEPT_BATH),
    # Energies.
    Mutation("bias at which particles start", setting("mu_left"), RANDOM_BATH, True),
    Mutation("left temperature of particles", setting("left_kT"), COLD_BATH),
    Mutation("right temperature of particles", setting("right_kT"), COLD_BATH),
    Mutation("lattice temperature of particles", setting("bath_kT"), COLD_BATH),
    Mutation(
        "lattice temperature of the residual",
        bath_of_the_residual(),
        KEPT_BATH,
    ),
    Mutation("width of the box", frozen("mu"), RANDOM_BATH),
    Mutation("potential of a probe", frozen("probe_mu"), PROBE),
    Mutation("temperature that carriers aim at", frozen("kT"), RANDOM_CARRIERS),
    Mutation("temperature that probes emit at", frozen("probe_kT"), HOT_PROBE),
    Mutation("strength of contacts' heat", result_of(deviation, "heat_strength"), COLD_BATH, True),
    *(
        Mutation(f"strength of {what}", source(kind), tests)
        for what, kind, tests in (
            ("the left number", sources.LEFT_NUMBER, RANDOM_BATH),
            ("the left heat", sources.LEFT_HEAT, COLD_BATH),
            ("the right heat", sources.RIGHT_HEAT, COLD_BATH),
            ("a probe's heat", sources.PROBE_HEAT, HOT_PROBE),
            ("the carriers' heat", sources.CARRIER_HEAT, RANDOM_CARRIERS),
        )
    ),
    Mutation(
        "energies of heat pairs",
        recompiled((sources, wander), "return between * z", f"return {FACTOR} * between * z"),
        COLD_BATH,
    ),
    Mutation("temperatures of the fields", result_of(deviation, "temperatures"), RANDOM_CARRIERS),
    # The trial occupation's part of the tallies.
    *(
        Mutation(f"trial's {key}", returned(deviation, "trial_part", entry(key)), PHONON)
        for key in (
            "current",
            "energy",
            "arrivals",
            "departures",
            "cells",
            "heat",
            "turned",
            "field",
        )
    ),
    Mutation("trial's heat of a bath", result_of(trial_part, "_bath_heat"), KEPT_BATH),
    Mutation("trial's energies", returned(trial_part, "number_and_energy", member(1)), KEPT_BATH),
    # What it lacks.
    *(
        Mutation(f"residual: {name}", residual_term(old), tests)
        for name, old, tests in (
            ("elastic", "result = elastic * ", PHONON),
            ("phonons", "result += mechanisms.phonon_rate[k] * ", PHONON),
            ("kept bath", "result += rates[KEPT_BATH] * ", KEPT_BATH),
            ("kept carriers", "result += rates[KEPT_CARRIERS] * ", KEPT_CARRIERS),
            ("streaming", "step = ", PHONON),
        )
    ),
    Mutation(
        "sign of phonon pairs",
        returned(rounds, "phonon_pairs", opposite_pairs),
        (f"{RELAXING}::test_a_poor_trial",),
    ),
    # From tallies to results.
    *(
        Mutation(f"particles' {key}", returned(rounds.Rounds, "run", entry(key)), tests)
        for key, tests in (
            ("current", RANDOM_BATH),
            ("energy", COLD_BATH),
            ("arrivals", HOT_PROBE),
            ("departures", HOT_PROBE),
            ("cells", RANDOM_BATH),
            ("heat", COLD_BATH),
            ("probe_heat", HOT_PROBE),
            ("turned", PHONON),
            ("field", RANDOM_BATH),
        )
    ),
    *(
        Mutation(f"{key} of results", returned(OBSERVER, "powers", entry(key)), tests)
        for key, tests in (
            ("left_power", COLD_BATH),
            ("right_power", PHONON),
            ("lattice_power", COLD_BATH),
            ("probe_power", HOT_PROBE),
        )
    ),
    *(
        Mutation(f"{key} of the resistance", returned(OBSERVER, "parts", entry(key)), tests)
        for key, tests in (("interface", PHONON), ("jumps", KEPT_BATH), ("pieces", PHONON))
    ),
    Mutation("readings of probes", returned(OBSERVER, "_potentials", entry("probe")), HOT_PROBE),
    Mutation("slope at the bias", returned(OBSERVER, "_slope", lambda x: x * FACTOR), RANDOM_BATH),
    Mutation(
        "lattice power per nm",
        returned(OBSERVER, "profiles", entry("lattice_power_W_per_nm")),
        PHONON,
    ),
    Mutation(
        "temperatures of results", result_of(observe_relaxed, "temperatures"), RANDOM_CARRIERS
    ),
    Mutation("charge: relaxing power", constant(observe_relaxed, "WATT_PER_MEV2"), COLD_BATH),
    Mutation("ballistic resistance", result_of(observe_relaxed, "ballistic_ohm"), RANDOM_BATH),
    Mutation("reference occupation of results", result_of(observe_relaxed, "reference"), PHONON),
    # A run that follows a change of the bias.
    Mutation(
        "heat of a change of the bias", returned(deviation.Tangent, "emitters", member(0)), PHONON
    ),
)
MUTATIONS += RELAXATION


SLAB, ACROSS, WIRE = "test_slab.py", "test_planes_across.py", "test_wire_and_ribbon.py"
SLABS = tuple(f"{SLAB}::test_thicker_slabs[{d}-10]" for d in (2, 3))
PROFILE = (f"{SLAB}::test_half_space_means_along_a_slab[3]",)
THICK_CONTACTS = (f"{SLAB}::test_contacts_of_a_thick_slab[2]",)
SINGLE = f"{ACROSS}::test_one_plane_in_a_channel_that_scatters"
TUNNEL = (f"{SINGLE}[3 tunnel]",)
BARRIERS = (f"{ACROSS}::test_barriers_at_contacts[2-diffuse]",)
STRAIGHT = (f"{ACROSS}::test_mirror_planes_add_up_direction_by_direction[True-2]",)
ANGLES = (f"{ACROSS}::test_current_by_direction[3]",)
ROUGH = (f"{WIRE}::test_two_walls_that_scatter[0.5-2]",)
FILM = (f"{WIRE}::test_which_pair_of_walls_scatters_is_the_same[0.9999]",)
MOMENTUM = (f"{WIRE}::test_walls_and_collisions_share_a_piece_by_the_momentum_they_take[3]",)
MEAN_PATH = (f"{WIRE}::test_mean_path_does_not_depend_on_what_happens_in_a_channel[3]",)
EMISSION = tuple(f"{DIRECTIONS}::test_emission_at_the_left_contact[{d}]" for d in (2, 3))
FREE = tuple(f"{DIRECTIONS}::test_isotropic_moments[{d}-True]" for d in (2, 3))
BY_COSINE = tuple(f"{DIRECTIONS}::test_cosine_law_moments[{d}-True]" for d in (2, 3))

SPACE = (
    # What carriers meet.
    Mutation("rate where carriers have directions", thickness(outside_sections), SLABS[:1], True),
    Mutation("transmission of a plane", transmission(scatterer(0)), TUNNEL),
    Mutation("transmission of a contact's plane", transmission(left_node), BARRIERS),
    Mutation("specularity of walls", walls("specularity"), ROUGH),
    Mutation("distance of walls", walls("size"), ROUGH),
    Mutation(
        "backscattering path in d = 2 and 3",
        own_table(problem, "BACKSCATTER"),
        (f"{SLAB}::test_backscattering_path_is_this_many_mean_free_paths[3]",),
    ),
    Mutation(
        "angle of a tunnel barrier",
        recompiled(
            (planes, rays),
            "return square / (square + (1.0 - chance))",
            f"return square / (square + {FACTOR} * (1.0 - chance))",
        ),
        TUNNEL,
    ),
    Mutation(
        "free path", kernel("free = free_of[segment]", f"free = {FACTOR} * free_of[segment]"), SLABS
    ),
    Mutation(
        "mirrors above and below",
        kernel("mirror = second.specularity", f"mirror = {FACTOR} * second.specularity"),
        FILM,
    ),
    # Random directions.
    Mutation(
        "emission in d = 3", kernel("return np.sqrt(quantile)", "return quantile**0.51"), EMISSION
    ),
    Mutation(
        "emission in d = 2",
        kernel("return np.sqrt(1.0 - sine * sine)", "return (1.0 - sine * sine) ** 0.51"),
        EMISSION,
    ),
    Mutation(
        "isotropic directions in d = 3",
        drawn(
            "out[0, k] = (2.0 * one_to_two(next_bits(lanes, k)) - 3.0) + 2.0**-52",
            "out[0, k] = 2.0 * (one_to_two(next_bits(lanes, k)) - 1.0) ** 1.02 - 1.0",
        ),
        FREE,
    ),
    Mutation(
        "isotropic directions in d = 2",
        drawn("b = _QUARTER_PI * (", f"b = {FACTOR} * _QUARTER_PI * ("),
        FREE,
    ),
    Mutation(
        "cosine law in d = 3",
        drawn("out[0, k] = np.sqrt(square)", "out[0, k] = square**0.51"),
        BY_COSINE,
    ),
    Mutation(
        "cosine law in d = 2",
        drawn(
            "out[0, k] = max(np.sqrt(1.0 - sine * sine), SMALLEST)",
            "out[0, k] = max((1.0 - sine * sine) ** 0.51, SMALLEST)",
        ),
        BY_COSINE,
    ),
    # Counts of the kernel.
    Mutation(
        "weight of a flight",
        kernel("new_weight = 1.0 / abs(new_ux)", f"new_weight = {FACTOR} / abs(new_ux)"),
        PROFILE,
    ),
    Mutation(
        "momentum that walls take",
        kernel("lost[b, segment] += ux", f"lost[b, segment] += {FACTOR} * ux"),
        MOMENTUM,
    ),
    Mutation(
        "weight of a crossing",
        recompiled(
            (planes, rays),
            "return weight if weight * GRAZING",
            f"return {FACTOR} * weight if weight * GRAZING",
        ),
        THICK_CONTACTS,
    ),
    Mutation(
        "what barriers let through of what is emitted",
        result_of(ray_tallies, "mean_passing"),
        BARRIERS,
    ),
    Mutation("weight of the current by direction", result_of(ray_tallies, "drive_of"), ANGLES),
    Mutation("path per length", of_dimension(space, "OBLIQUE"), MEAN_PATH),
    Mutation(
        "crossings to the right behind planes",
        of_sample(lambda sums: sums["densities"][:, 3]),
        (f"{ACROSS}::test_half_space_means_at_both_sides_of_every_plane[3]",),
    ),
    Mutation(
        "mean of right-movers",
        recompiled(
            (ray_tallies,),
            "g_right = weight[b] * (right",
            f"g_right = {FACTOR} * weight[b] * (right",
        ),
        PROFILE,
    ),
    Mutation(
        "mean of left-movers",
        recompiled(
            (ray_tallies,), "g_left = weight[b] * (left", f"g_left = {FACTOR} * weight[b] * (left"
        ),
        PROFILE,
    ),
    # Directions that nothing mixes.
    Mutation(
        "resistance of a plane at an angle",
        recompiled(
            (straight,),
            "resistance[k] = (1.0 - chance)",
            f"resistance[k] = {FACTOR} * (1.0 - chance)",
        ),
        STRAIGHT,
    ),
    Mutation(
        "occupation at an angle",
        recompiled(
            (straight,),
            "crossings[b, k, LEFT_BEHIND] += weight",
            f"crossings[b, k, LEFT_BEHIND] += {FACTOR} * weight",
        ),
        STRAIGHT,
    ),
    # From counts to results.
    Mutation(
        "potential before a node",
        returned(observe_space, "beside_nodes", member(0)),
        THICK_CONTACTS,
    ),
    Mutation("potential behind a node", returned(observe_space, "beside_nodes", member(1)), TUNNEL),
    Mutation("current by direction", result_of(observe_space, "by_direction"), ANGLES),
    Mutation("classes of direction", in_space(view_edges), ANGLES),
    Mutation("share of collisions", own_table(observe_space, "BACKSCATTER"), MOMENTUM),
    Mutation(
        "readings where carriers have directions",
        in_problem(probe_weight),
        (f"{ACROSS}::test_probes_read_what_arrives[2]",),
    ),
)
MUTATIONS += SPACE


# Every variant of the kernel with directions.
LOADING_SPACE = [
    f"{{channel: {{length_nm: 1, dimension: {channel}}}, scattering: {{{scattering}}}, contacts:"
    f" {{bias_mV: 1, temperature_K: 1}}, simulation: {{cells: 2, batches: 8, histories: 8}}}}"
    for channel, scattering in (
        ("3", ""),
        ("3", "mean_free_path_nm: 1"),
        ("2, width_nm: 1, specularity: 0", ""),
        ("3, width_nm: 1, height_nm: 1, specularity: 0", ""),
    )
]
# Every variant of the relaxing kernels.
LOADING = [
    "{channel: {length_nm: 1}, contacts: {bias_mV: 1, temperature_K: 1}, scattering: {"
    + scattering
    + "}, relaxation: {mechanisms: ["
    + relaxation
    + "]}, simulation: {cells: 2, batches: 8, histories: 8, energy_bins: 30}}"
    for scattering, relaxation in (
        ("", "{kind: carriers, path_nm: 10}"),
        ("", "{kind: optical_phonon, path_nm: 10, energy_meV: 1}"),
        (
            "points: [{position_nm: 0.5, transmission: {energy_meV: [0, 1], value: [0.5, 0.6]}}]",
            "{kind: bath, path_nm: 10, direction: kept}",
        ),
    )
]


class Recorder:
    """Pytest plugin: counts what passed, disagreed and broke; ends at the first disagreement."""

    def __init__(self, stop):
        self.stop = stop
        self.passed, self.noisy, self.broken, self.disagreed = 0, [], [], []

    def pytest_runtest_logreport(self, report):
        self.passed += report.when == "call" and report.passed

    def pytest_exception_interact(self, node, call, report):
        error = call.excinfo.value
        where = node.name
        if isinstance(error, TooNoisy):
            self.noisy.append(f"{where}: {error}")
        elif isinstance(error, AssertionError):
            self.disagreed.append(f"{where}: {error}".partition("\n")[0])
            if self.stop:
                node.session.shouldstop = "noticed"
        else:
            self.broken.append(f"{where}: {error!r}")


def place(test):
    """Path of a test: a published one, but for those with relaxation and of directions."""
    folder = ROOT / "tests"
    return folder / test if test.startswith((RELAXING, DIRECTIONS)) else folder / "published" / test


def run_tests(install, tests):
    """Install a mutation in this process and run tests; returns a dict for the parent."""
    if install is not None:
        install()
    recorder = Recorder(stop=install is not None)
    places = [str(place(test)) for test in tests]
    with contextlib.redirect_stdout(io.StringIO()), contextlib.redirect_stderr(io.StringIO()):
        status = pytest.main([*places, *OPTIONS], plugins=[recorder])
    answer = {key: getattr(recorder, key) for key in ("passed", "noisy", "broken", "disagreed")}
    return answer | {"applied": Applied.count, "status": int(status)}


def in_children(tasks):
    """Run (key, install, tests) in forked children, AT_ONCE at a time; yields (key, answer)."""
    context = multiprocessing.get_context("fork")
    waiting, running = list(tasks), {}

    def work(pipe, install, tests):
        pipe.send(run_tests(install, tests))
        pipe.close()

    while waiting or running:
        while waiting and len(running) < AT_ONCE:
            key, install, tests = waiting.pop(0)
            mine, theirs = context.Pipe(duplex=False)
            child = context.Process(target=work, args=(theirs, install, tests))
            child.start()
            theirs.close()
            running[mine] = key, child
        for pipe in wait(list(running)):
            key, child = running.pop(pipe)
            try:
                answer = pipe.recv()
            except EOFError:
                answer = {"broken": ["the process ended without an answer"]}
            child.join()
            yield key, answer


def verdict(mutation, answer):
    """None if all is well, else what is wrong. mutation None: the negative control."""
    if answer["broken"]:
        return f"broke: {answer['broken'][0]}"
    if answer["status"] not in (pytest.ExitCode.OK, pytest.ExitCode.TESTS_FAILED, INTERRUPTED):
        return f"pytest ended with status {answer['status']}: is there no such test?"
    if mutation is None:
        if answer["disagreed"] or answer["noisy"] or not answer["passed"] or answer["status"]:
            return f"{(answer['disagreed'] or answer['noisy'] or ['nothing ran'])[0]}"
        return None
    if not answer["applied"]:
        return "changed nothing"
    if not answer["disagreed"]:
        return f"NOT NOTICED by {answer['passed']} tests" + "".join(
            f"; {n}" for n in answer["noisy"]
        )
    return None


def check(mutations):
    """Run the mutations and the control; prints a line for each, returns those that failed."""
    tests = tuple(sorted({test for m in mutations for test in m.tests}))
    tasks = [(None, None, tests), *((m, m.install, m.tests) for m in mutations)]
    failed = []
    for mutation, answer in in_children(tasks):
        name = mutation.name if mutation else "no mutation"
        wrong = verdict(mutation, answer)
        if wrong:
            failed.append(name)
        fine = answer["disagreed"][0] if mutation and not wrong else f"{answer.get('passed')} pass"
        print(f"{'FAIL' if wrong else 'ok':4} {name}: {wrong or fine}", flush=True)
    return failed


def main():
    parser = argparse.ArgumentParser(description=__doc__.partition("\n")[0])
    parser.add_argument("names", nargs="*", help="only mutations with one of these in their name")
    parser.add_argument("--quick", action="store_true", help="a few that are fast")
    parser.add_argument("--list", action="store_true")
    asked = parser.parse_args()
    chosen = [m for m in MUTATIONS if m.quick or not asked.quick]
    if asked.names:
        chosen = [m for m in chosen if any(name in m.name for name in asked.names)]
    if asked.list:
        print(*(m.name for m in chosen), sep="\n")
        return 0
    os.chdir(ROOT)
    begin = time.perf_counter()
    # Load the compiled kernels before the children are forked.
    simulate("{channel: {length_nm: 1}, contacts: {bias_mV: 1, temperature_K: 1}}")
    tests = {test for m in chosen for test in m.tests}
    if any(test.startswith(RELAXING) for test in tests):
        for text in LOADING:
            simulate(text)
    if any(test.startswith((SLAB, ACROSS, WIRE)) for test in tests):
        for text in LOADING_SPACE:
            simulate(text)
    failed = check(chosen)
    print(f"{len(chosen)} mutations, {len(failed)} failed, {time.perf_counter() - begin:.0f} s")
    return 1 if failed else 0


if __name__ == "__main__":
    sys.exit(main())
