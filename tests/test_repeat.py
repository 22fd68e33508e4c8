"""The same seed gives the same bits: any number of workers, again, and from the saved scenario."""

import hashlib
import os
import subprocess
import sys
import threading
import time
from dataclasses import fields, is_dataclass
from pathlib import Path

import numpy as np
import pytest

import carriersim as cs
from carriersim.engine.solve import NothingDone, StopRequest
from carriersim.scenario import read_text, to_yaml

ROOT = Path(__file__).parents[1]

CONSTANT = """
name: repeat
channel: {length_nm: 300, modes: 2}
contacts: {bias_mV: 5, temperature_K: 20, left: {transmission: 0.7}}
scattering:
  mean_free_path_nm: [{name: a, mean_free_path_nm: 400}, {name: b, backscatter_path_nm: 900}]
  sections: [{from_nm: 200, to_nm: 250, mean_free_path_nm: 90}]
  points: [{position_nm: 100, transmission: 0.4}]
  random: [{count: 3, transmission: {low: 0.5, high: 0.9}}]
probes: [{position_nm: 60}, {position_nm: 220, weight_right: 1}]
simulation: {cells: 40, histories: 6000, seed: 11}
"""

TABLE = """
name: repeat tables
channel: {length_nm: 300, modes: {energy_meV: [-10, 10], value: [1, 3]}}
contacts: {bias_mV: -3, left: {temperature_K: 40}, right: {temperature_K: 20}}
scattering:
  mean_free_path_nm: {energy_meV: [-20, 20], value: [500, 200]}
  points: [{position_nm: 100, transmission: {energy_meV: [-5, 5], value: [0.2, 0.8]}}]
probes: [{position_nm: 60}, {position_nm: 220}]
simulation: {cells: 30, histories: 40000, energy_bins: 60, seed: 12}
"""

LINEAR = CONSTANT.replace("bias_mV: 5", "bias_mV: 0").replace(
    "temperature_K: 20", "temperature_K: 0"
)

RELAXING = """
name: repeat relaxing
channel: {length_nm: 120}
contacts: {bias_mV: 40, left: {temperature_K: 100}, right: {temperature_K: 80}}
scattering:
  backscatter_path_nm: 150
  points: [{position_nm: 50, transmission: {energy_meV: [0, 40], value: [0.3, 0.8]}}]
relaxation:
  mechanisms:
    - {kind: optical_phonon, path_nm: 60, energy_meV: 20}
    - {kind: bath, path_nm: 100, direction: randomised}
probes: [{position_nm: 80, coupling: 0.3}, {position_nm: 100}]
simulation: {cells: 12, histories: 30000, batches: 16, seed: 13}
"""

ELASTIC = {"constant": CONSTANT, "tables": TABLE, "linear": LINEAR}
PROBLEMS = ELASTIC | {"relaxing": RELAXING, "relaxing linear": RELAXING.replace("V: 40", "V: 0")}
each_problem = pytest.mark.parametrize("text", PROBLEMS.values(), ids=PROBLEMS)
# An interrupted relaxing run leaves out the second run, which gives dI/dV.
each_elastic = pytest.mark.parametrize("text", ELASTIC.values(), ids=ELASTIC)


def bits(value):
    """A value with all that is inside it, comparable by ==; arrays and floats by their bits."""
    if isinstance(value, np.ndarray):
        return (value.dtype.str, value.shape, value.tobytes())
    if isinstance(value, float):
        return value.hex()
    if isinstance(value, tuple | list):
        return [bits(item) for item in value]
    if isinstance(value, dict):
        return {key: bits(item) for key, item in sorted(value.items())}
    if is_dataclass(value):
        return {f.name: bits(getattr(value, f.name)) for f in fields(value)}
    return value


def result_bits(result, leave_out=()):
    """Everything in a result but the time it took (and the names given)."""
    found = bits(result)
    for name in ("seconds", *leave_out):
        del found[name]
    return found


def same(one, other, leave_out=()):
    first, second = result_bits(one, leave_out), result_bits(other, leave_out)
    different = [name for name in first if first[name] != second[name]]
    assert not different, different


# What says how a run ended may differ in a repetition that is told the number of histories.
ENDING = ("scenario", "stopped_by", "converged")


@each_problem
def test_any_number_of_workers(text):
    scenario = read_text(text)
    one = cs.simulate(scenario, workers=1)
    assert one.iterations > 3  # several rounds
    for workers in (2, 4):
        same(one, cs.simulate(scenario, workers=workers))


@each_problem
def test_saved_scenario_repeats_the_run(text, tmp_path):
    first = cs.simulate(read_text(text), workers=2)
    first.save(tmp_path / "first")
    saved = cs.load(tmp_path / "first" / "scenario.yaml")
    assert saved == first.scenario
    assert saved.scattering.undrawn == () and saved.simulation.histories == first.histories
    second = cs.simulate(saved, workers=1)
    same(first, second)
    second.save(tmp_path / "second")
    for name in ("scenario.yaml", "fields.npz", "profile.csv"):
        once, again = (tmp_path / place / name for place in ("first", "second"))
        assert _digest(once) == _digest(again), name


def _digest(path):
    if path.suffix == ".npz":  # zip entries carry the time
        with np.load(path) as archive:
            return {name: (array.dtype, array.tobytes()) for name, array in archive.items()}
    return hashlib.sha256(path.read_bytes()).hexdigest()


def test_defaults_repeat_too(tmp_path):
    """Nothing but what is required: every default is in the saved file."""
    first = cs.simulate(
        read_text("{channel: {length_nm: 1}, contacts: {bias_mV: 1, temperature_K: 9}}")
    )
    first.save(tmp_path / "place")
    same(first, cs.simulate(cs.load(tmp_path / "place" / "scenario.yaml")))


@each_problem
def test_repeats_a_run_stopped_by_its_error(text, tmp_path):
    asked = read_text(text).replace(
        {"simulation.histories": None, "simulation.relative_error": 0.02}
    )
    first = cs.simulate(asked, workers=2)
    assert first.stopped_by == "relative_error" and first.converged
    first.save(tmp_path / "place")
    again = cs.simulate(cs.load(tmp_path / "place" / "scenario.yaml"), workers=1)
    same(first, again)
    assert again.iterations == first.iterations


@each_problem
def test_repeats_a_run_stopped_by_the_clock(text, tmp_path):
    asked = read_text(text).replace({"simulation.histories": None, "simulation.max_seconds": 0.2})
    first = cs.simulate(asked, workers=2)
    assert first.stopped_by == "max_seconds" and first.converged
    first.save(tmp_path / "place")
    saved = cs.load(tmp_path / "place" / "scenario.yaml")
    assert saved.simulation.max_seconds is None
    same(first, cs.simulate(saved, workers=1), ENDING)


@each_elastic
def test_repeats_a_run_stopped_by_a_request(text, tmp_path):
    """A stop in mid-round throws that round away: what was whole before is the result."""
    asked = read_text(text).replace(
        {"simulation.histories": None, "simulation.relative_error": 1e-7}
    )
    stop = StopRequest()

    class StopInRound:
        """Asks for an end a moment after the fourth round."""

        rounds = 0

        def update(self, histories, relative_error, target, seconds):
            self.rounds += 1
            self.histories = histories
            if self.rounds == 4:
                threading.Timer(0.002, stop.set, ["interrupted"]).start()

    progress = StopInRound()
    first = cs.simulate(asked, workers=2, stop=stop, progress=progress)
    assert first.stopped_by == "interrupted" and not first.converged
    assert first.histories == progress.histories and first.iterations == progress.rounds
    first.save(tmp_path / "place")
    saved = cs.load(tmp_path / "place" / "scenario.yaml")
    again = cs.simulate(saved, workers=1)
    same(first, again, ENDING)
    assert saved.simulation.histories == again.histories


@pytest.mark.parametrize("ending", ["interrupted", "max_seconds"])
def test_relaxing_run_stopped_in_a_window(ending, tmp_path):
    """What was whole before is the result; only dI/dV, from a run of its own, may be missing."""
    asked = read_text(RELAXING).replace(
        {"simulation.histories": None, "simulation.relative_error": 1e-7}
    )
    stop, seconds = StopRequest(), 1.2
    if ending == "max_seconds":
        asked = asked.replace({"simulation.max_seconds": seconds})

    class StopInWindow:
        """Asks for an end, or waits for the clock, in the window after the fourth."""

        windows = 0

        def update(self, histories, relative_error, target, seconds):
            self.windows += 1  # the first two are not told
            self.histories = histories
            if ending == "interrupted" and self.windows == 2:
                threading.Timer(0.05, stop.set, ["interrupted"]).start()

    progress = StopInWindow()
    first = cs.simulate(asked, workers=2, stop=stop, progress=progress)
    assert first.stopped_by == ending and not first.converged
    assert first.histories == progress.histories and first.iterations == 6 * (2 + progress.windows)
    missing = {"conductance_S", "differential_resistance_ohm"} if ending == "interrupted" else set()
    for name in missing:
        assert getattr(first, name) is None and first.why[name]
    first.save(tmp_path / "place")
    again = cs.simulate(cs.load(tmp_path / "place" / "scenario.yaml"), workers=1)
    same(first, again, (*ENDING, *missing, "why"))


def test_stop_before_the_first_round_is_no_result():
    stop = StopRequest()
    stop.set("interrupted")
    with pytest.raises(NothingDone, match="before the first round was complete"):
        # With long flights a kernel has to look at the flag.
        cs.simulate(
            read_text(CONSTANT).replace({"simulation.histories": 10**7}), workers=2, stop=stop
        )


def test_stop_is_quick():
    """Within a second (the clock of a busy machine: three) even in a round of long walks."""
    text = """
channel: {length_nm: 100000}
contacts: {bias_mV: 1, temperature_K: 4}
scattering: {mean_free_path_nm: 2}
simulation: {relative_error: 1e-6, cells: 10}
"""
    stop, done = StopRequest(), threading.Event()

    def work():
        try:
            cs.simulate(read_text(text), workers=2, stop=stop)
        except NothingDone:
            pass
        done.set()

    thread = threading.Thread(target=work, daemon=True)
    thread.start()
    time.sleep(1.0)
    assert not done.is_set()
    begin = time.perf_counter()
    stop.set("interrupted")
    assert done.wait(30)
    assert time.perf_counter() - begin < 3.0


@each_problem
def test_seeds_differ(text):
    scenario = read_text(text).replace({"simulation.disorder_seed": 5})
    one = cs.simulate(scenario)
    other = cs.simulate(scenario.replace({"simulation.seed": 99}))
    for name in ("conductance_S", "differential_resistance_ohm"):
        assert getattr(one, name).value != getattr(other, name).value
    for name in ("mu_plus_meV", "mu_minus_meV"):
        assert (getattr(one, name) != getattr(other, name)).mean() > 0.9
    for name in ("f_plus", "f_minus"):
        uncertain = one.errors[name] > 1e-6 * one.errors[name].max()
        uncertain &= getattr(one, name) > 1e-3 * getattr(one, name).max()  # somebody was there
        assert (getattr(one, name) != getattr(other, name))[uncertain].mean() > 0.9


def test_seeds_are_independent():
    """Neighbouring seeds share no batch: no two batches of eight seeds walk alike."""
    from carriersim.engine.problem import build
    from carriersim.engine.solve import Goal, solve

    rows = []
    for seed in range(8):
        scenario = read_text(CONSTANT).replace({"simulation.seed": seed, "scattering.random": []})
        totals = solve(build(scenario), Goal(None, 6400, None))
        rows.append(totals.cells.reshape(totals.cells.shape[0], -1))
    rows = np.concatenate(rows)
    assert np.unique(rows, axis=0).shape == rows.shape


def test_global_random_state_is_left_alone():
    np.random.seed(123)  # noqa: NPY002 - what is looked at
    before = np.random.get_state()  # noqa: NPY002
    cs.simulate(read_text(CONSTANT))
    after = np.random.get_state()  # noqa: NPY002
    assert before[0] == after[0] and np.array_equal(before[1], after[1]) and before[2:] == after[2:]
    np.random.seed(321)  # noqa: NPY002
    same(cs.simulate(read_text(CONSTANT)), cs.simulate(read_text(CONSTANT)))


def test_scenario_is_not_changed():
    scenario = read_text(CONSTANT)
    before = to_yaml(scenario)
    cs.simulate(scenario)
    assert to_yaml(scenario) == before


@each_problem
def test_save_and_open(text, tmp_path):
    result = cs.simulate(read_text(text))
    result.save(tmp_path / "place")
    opened = cs.open_result(tmp_path / "place")
    same(result, opened)
    assert result.seconds == opened.seconds


OTHER_PROCESS = """
import sys
sys.path[:0] = [sys.argv[1], sys.argv[2]]
import carriersim as cs
cs.simulate(cs.load(sys.argv[3]), workers=int(sys.argv[5])).save(sys.argv[4])
"""


def _in_another_process(tmp_path, name, workers=1, **environment):
    source = tmp_path / "source.yaml"
    source.write_text(TABLE)
    subprocess.run(
        [sys.executable, "-c", OTHER_PROCESS, ROOT, ROOT, source, tmp_path / name, str(workers)],
        env=os.environ | environment,
        check=True,
        timeout=300,
    )
    return cs.open_result(tmp_path / name)


def test_another_process(tmp_path):
    same(cs.simulate(read_text(TABLE)), _in_another_process(tmp_path, "other"))


@pytest.mark.slow
def test_independent_of_the_kernel_cache(tmp_path):
    """Kernels compiled afresh, in another process: the same bits as from the cache."""
    here = cs.simulate(read_text(TABLE))
    fresh = _in_another_process(tmp_path, "fresh", NUMBA_CACHE_DIR=str(tmp_path / "cache"))
    assert list((tmp_path / "cache").rglob("*.nbi"))
    cached = _in_another_process(tmp_path, "cached", 4, NUMBA_CACHE_DIR=str(tmp_path / "cache"))
    same(here, fresh)
    same(here, cached)
