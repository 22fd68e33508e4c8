"""Result directories: what is in them, who may be replaced, and that nothing is ever half there."""

import csv
import json
import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pytest

import carriersim as cs
from carriersim import storage
from carriersim.constants import BOLTZMANN_MEV_PER_K
from carriersim.scenario import read_text
from carriersim.storage import PlaceError

ROOT = Path(__file__).parents[1]
FILES = {"scenario.yaml", "summary.json", "fields.npz", "profile.csv"}

MIXED = """
name: stored
channel: {length_nm: 100, modes: 2}
contacts: {bias_mV: 5, temperature_K: 20, left: {transmission: 0.9}}
scattering:
  backscatter_path_nm: [{name: a, backscatter_path_nm: 300}, {name: b, mean_free_path_nm: 200}]
  points: [{position_nm: 40, transmission: 0.5}]
probes: [{position_nm: 20}, {position_nm: 30}, {position_nm: 70}]
simulation: {cells: 10, batches: 8, histories: 4000}
"""
TABLE = MIXED.replace("transmission: 0.5", "transmission: {energy_meV: [0, 5], value: [0.4, 0.6]}")
KINDS = {
    "mixed": MIXED,
    "table": TABLE,
    "few bins": TABLE.replace("cells: 10", "cells: 10, energy_bins: 12"),
    "bias 0": MIXED.replace("bias_mV: 5", "bias_mV: 0"),
    "0 K": MIXED.replace("temperature_K: 20", "temperature_K: 0"),
    "bias 0 at 0 K": TABLE.replace("bias_mV: 5, temperature_K: 20", "bias_mV: 0, temperature_K: 0"),
    "unequal": MIXED.replace("left: {", "right: {temperature_K: 60}, left: {"),
    "modes": TABLE.replace("modes: 2", "modes: {energy_meV: [-9, 9], value: [1, 3]}"),
    "ballistic": "{channel: {length_nm: 9}, contacts: {bias_mV: -7, temperature_K: 300}}",
}
each_kind = pytest.mark.parametrize("kind", KINDS)


@pytest.fixture(scope="module")
def results():
    """A result of each kind, made when asked for."""
    made = {}

    def get(kind, seed=1):
        if (kind, seed) not in made:
            scenario = read_text(KINDS[kind]).replace({"simulation.seed": seed})
            made[kind, seed] = cs.simulate(scenario, workers=1)
        return made[kind, seed]

    return get


@pytest.fixture
def result(results):
    return results("mixed")


def contents(directory):
    """Names and bytes of all files below a directory."""
    return {
        str(path.relative_to(directory)): path.read_bytes()
        for path in sorted(directory.rglob("*"))
        if path.is_file()
    }


# --- what is in the files -------------------------------------------------------------------------

SUMMARY_KEYS = """
format scenario version seed bias_mV linear_response histories events seconds iterations converged
residual stopped_by transmission current_A conductance_S resistance_ohm differential_resistance_ohm
ballistic_resistance_ohm breakdown four_point probes heat_W thermal noise long_channel limits
""".split()
NUMBERS = ("ballistic_resistance_ohm", "bias_mV", "histories", "events", "seconds", "seed")
ESTIMATES = (
    "transmission",
    "current_A",
    "conductance_S",
    "resistance_ohm",
    "differential_resistance_ohm",
)


def is_estimate(data):
    return (
        {"value", "error"} <= data.keys() <= {"value", "error", "systematic"}
        and isinstance(data["value"], float)
        and (data["error"] is None or data["error"] >= 0)
    )


@each_kind
def test_summary(results, kind, tmp_path):
    results(kind).save(tmp_path / "place")
    assert {p.name for p in (tmp_path / "place").iterdir()} == FILES
    text = (tmp_path / "place" / "summary.json").read_text("utf-8")
    data = json.loads(text, parse_constant=lambda word: pytest.fail(f"{word} is not JSON"))
    assert set(SUMMARY_KEYS) <= data.keys()
    why = data["why"]
    for key in SUMMARY_KEYS:
        if data[key] is None:
            assert why.get(key), f"{key} is null without a reason"
    assert all(isinstance(reason, str) and reason for reason in why.values())
    assert data["long_channel"] is None and data["noise"] is None and data["residual"] is None
    assert data["format"] == 1 and data["scenario"] == data["scenario"].strip()
    assert all(isinstance(data[key], int | float) for key in NUMBERS)
    assert isinstance(data["converged"], bool) and data["stopped_by"] in (
        "relative_error",
        "histories",
    )
    assert all(data[key] is None or is_estimate(data[key]) for key in ESTIMATES)
    for part in data["breakdown"] or ():
        place = {"from_nm", "to_nm", "mechanism"} if part["kind"] == "piece" else {"position_nm"}
        assert part.keys() == {"part", "kind", "resistance_ohm"} | place
        assert part["kind"] in ("interface", "point", "probe", "piece")
        assert is_estimate(part["resistance_ohm"])
    probes = len(data["probes"])
    assert data["four_point"] is None or len(data["four_point"]) == probes * (probes - 1) // 2
    for pair in data["four_point"] or ():
        assert pair.keys() == {"from_nm", "to_nm", "resistance_ohm"}
        assert is_estimate(pair["resistance_ohm"])
    for probe in data["probes"]:
        assert probe.keys() == {"position_nm", "potential_mV"} and is_estimate(
            probe["potential_mV"]
        )
    heat = data["heat_W"]
    if heat is not None:
        assert heat.keys() == {"left_contact", "right_contact", "lattice", "probes"}
        assert len(heat["probes"]) == probes
    thermal = data["thermal"]
    assert thermal.keys() == {
        "conductance_W_per_K",
        "seebeck_V_per_K",
        "heat_current_left_W",
        "heat_current_right_W",
    }
    for key, value in thermal.items():
        assert is_estimate(value) if value else why.get(f"thermal.{key}") or why.get("thermal")
    assert data["limits"]
    for row in data["limits"]:
        assert row.keys() == set("name quantity expected simulated error z source holds".split())
        assert row["holds"] in ("exact", "approximate") and row["source"]


def test_null_exactly_where_there_is_no_meaning(results):
    nulls = {
        kind: {key for key, value in storage.summary(results(kind)).items() if value is None}
        - {"noise", "residual", "drift", "drift_sigma", "long_channel", "resistance_width_ohm_um"}
        for kind in KINDS
    }
    linear = {"current_A", "heat_W"}
    unequal = {"resistance_ohm", "breakdown", "four_point", "transmission"}
    expected = {kind: set() for kind in KINDS} | {"bias 0": linear, "bias 0 at 0 K": linear}
    assert nulls == expected | {"unequal": unequal}


PROFILES = """
mu_plus_meV mu_minus_meV mu_meV carrier_temperature_plus_K carrier_temperature_minus_K
carrier_temperature_K departure lattice_power_W_per_nm
""".split()


@each_kind
def test_fields(results, kind, tmp_path):
    result = results(kind)
    result.save(tmp_path / "place")
    with np.load(tmp_path / "place" / "fields.npz", allow_pickle=False) as archive:
        arrays = dict(archive)
    energy, x = arrays["energy_meV"], arrays["x_nm"]
    assert energy.size >= 200
    assert (np.diff(energy) > 0).all() and (np.diff(x) > 0).all()
    assert 0 < x[0] and x[-1] < result.scenario.channel.length_nm
    scenario = result.scenario
    for mu, kelvin in (
        (scenario.contacts.bias_mV, scenario.left_temperature_K),
        (0.0, scenario.right_temperature_K),
    ):
        reach = 10 * BOLTZMANN_MEV_PER_K * kelvin  # beyond: exp(-10) = 5e-5
        assert energy[0] < mu - reach and mu + reach < energy[-1]
    for name in PROFILES:
        assert arrays[name].shape == arrays[f"{name}_error"].shape == x.shape
    for name in ("f_plus", "f_minus"):
        assert arrays[name].shape == arrays[f"{name}_error"].shape == (energy.size, x.size)
    for name, array in arrays.items():
        assert array.dtype == np.float64, name
        missing = name.removesuffix("_error") in result.why
        assert np.isnan(array).all() if missing else np.isfinite(array).all(), name


@each_kind
def test_profile_table(results, kind, tmp_path):
    result = results(kind)
    result.save(tmp_path / "place")
    with open(tmp_path / "place" / "profile.csv", newline="") as file:
        header, *rows = list(csv.reader(file))
    names = PROFILES
    if result.linear_response:  # potentials per unit of the bias carry no meV
        names = [name.replace("_meV", "_per_eV") for name in names]
    assert header == ["x_nm", *(c for name in names for c in (name, f"{name}_error"))]
    assert len(rows) == result.x_nm.size
    columns = np.array(rows, float).T
    np.testing.assert_allclose(columns[0], result.x_nm, rtol=1e-8)
    np.testing.assert_allclose(columns[1], result.mu_plus_meV, rtol=1e-8, atol=1e-300)
    np.testing.assert_allclose(columns[2], result.errors["mu_plus_meV"], rtol=1e-8, atol=1e-300)


@each_kind
def test_scenario_has_every_default(results, kind, tmp_path):
    result = results(kind)
    result.save(tmp_path / "place")
    text = (tmp_path / "place" / "scenario.yaml").read_text("utf-8")
    for key in (
        "degeneracy",
        "seed",
        "disorder_seed",
        "histories",
        "cells",
        "batches",
        "bath_temp",
    ):
        assert key in text
    saved = cs.load(tmp_path / "place" / "scenario.yaml")
    assert saved == result.scenario
    assert saved.simulation.histories == result.histories


# --- where it may be written ----------------------------------------------------------------------


def test_new_directories_are_made(result, tmp_path):
    place = tmp_path / "a" / "b" / "c"
    assert result.save(place) == place
    assert {p.name for p in place.iterdir()} == FILES
    assert [p.name for p in place.parent.iterdir()] == ["c"]  # nothing temporary is left


def test_empty_directory_is_taken(result, tmp_path):
    (tmp_path / "place").mkdir()
    result.save(tmp_path / "place")
    assert cs.open_result(tmp_path / "place").histories == result.histories


def test_own_result_is_replaced_as_a_whole(results, tmp_path):
    place = tmp_path / "place"
    results("mixed").save(place)
    (place / "profile.png").write_bytes(b"figure of an older run")
    results("mixed", 2).save(place)
    assert {p.name for p in place.iterdir()} == FILES  # the older figure is gone
    assert cs.open_result(place).scenario.simulation.seed == 2
    assert [p.name for p in tmp_path.iterdir()] == ["place"]


def test_replaced_where_two_paths_cannot_be_swapped(results, tmp_path, monkeypatch):
    monkeypatch.setattr(storage, "_exchange", lambda first, second: False)
    results("mixed").save(tmp_path / "place")
    results("mixed", 2).save(tmp_path / "place")
    assert cs.open_result(tmp_path / "place").scenario.simulation.seed == 2
    assert [p.name for p in tmp_path.iterdir()] == ["place"]


def _foreign_file(place, result):
    result.save(place)
    (place / "thesis.tex").write_text("years of work")


def _foreign_directory(place, result):
    result.save(place)
    (place / "data").mkdir()


def _hidden_file(place, result):
    result.save(place)
    (place / ".git").write_text("")


def _only_foreign(place, result):
    place.mkdir()
    (place / "notes.txt").write_text("mine")


def _wrong_summary(place, result):
    result.save(place)
    (place / "summary.json").write_text('{"program": "something else"}')


def _no_summary(place, result):
    result.save(place)
    (place / "summary.json").unlink()


def _summary_that_is_no_json(place, result):
    result.save(place)
    (place / "summary.json").write_bytes(b"\xff\xfe\x00")


def _summary_that_is_a_list(place, result):
    result.save(place)
    (place / "summary.json").write_text("[1]")


def _file(place, result):
    place.write_text("a file")


def _link_to_result(place, result):
    result.save(place.with_name("real"))
    place.symlink_to("real")


def _broken_link(place, result):
    place.symlink_to("nowhere")


def _file_on_the_way(place, result):
    place.parent.rmdir()
    place.parent.write_text("a file")


REFUSED = {
    _foreign_file: r"holds what is not a result of carriersim \(thesis.tex\); nothing was written",
    _foreign_directory: r"holds what is not a result of carriersim \(data\)",
    _hidden_file: r"holds what is not a result of carriersim \(.git\)",
    _only_foreign: r"holds what is not a result of carriersim \(notes.txt\)",
    _wrong_summary: "its summary.json is not one of carriersim's; nothing was written",
    _no_summary: "its summary.json is not one of carriersim's",
    _summary_that_is_no_json: "its summary.json is not one of carriersim's",
    _summary_that_is_a_list: "its summary.json is not one of carriersim's",
    _file: "not a directory; choose another place with --out",
    _link_to_result: "not a directory; choose another place with --out",
    _broken_link: "not a directory; choose another place with --out",
    _file_on_the_way: "not a directory; choose another place with --out",
}


@pytest.mark.parametrize("prepare", REFUSED, ids=lambda f: f.__name__.strip("_"))
def test_refused_places(result, tmp_path, prepare):
    place = tmp_path / "folder" / "place"
    place.parent.mkdir()
    prepare(place, result)
    before = contents(tmp_path)
    links = [p.is_symlink() for p in sorted(tmp_path.rglob("*"))]
    for attempt in (storage.check_place, result.save):
        with pytest.raises(PlaceError, match=REFUSED[prepare]) as caught:
            attempt(place)
        assert str(tmp_path) in str(caught.value)
    assert contents(tmp_path) == before
    assert [p.is_symlink() for p in sorted(tmp_path.rglob("*"))] == links


@pytest.mark.parametrize("place", ["/proc/carriersim", "/dev/null/place", "/proc/self/fd/a/b"])
def test_places_that_the_system_refuses(result, place):
    """Also for root, whom os.access allows everything."""
    with pytest.raises(PlaceError, match="choose another place with --out"):
        result.save(place)


def test_directory_without_permission(result, tmp_path, monkeypatch):
    monkeypatch.setattr(os, "access", lambda path, mode: False)
    with pytest.raises(PlaceError, match="not writable; choose another place with --out"):
        storage.check_place(tmp_path / "place")
    with pytest.raises(PlaceError, match="not writable"):
        result.save(tmp_path / "place")
    assert list(tmp_path.iterdir()) == []


def test_place_that_turns_foreign_during_the_run(result, results, tmp_path, monkeypatch):
    """Looked at before the run and again before the swap."""
    place = tmp_path / "place"
    result.save(place)
    write = storage._write_files

    def write_and_disturb(what, work):
        write(what, work)
        (place / "mine.txt").write_text("just saved here")

    monkeypatch.setattr(storage, "_write_files", write_and_disturb)
    with pytest.raises(PlaceError, match=r"mine\.txt"):
        results("mixed", 2).save(place)
    assert (place / "mine.txt").exists() and [p.name for p in tmp_path.iterdir()] == ["place"]


def test_own_directory_name(result, tmp_path, monkeypatch):
    """The working directory itself: taken or refused in words, never half emptied."""
    inside = tmp_path / "here"
    inside.mkdir()
    monkeypatch.chdir(inside)
    try:
        result.save(".")
    except PlaceError as error:
        assert "choose another place" in str(error)
        assert list(tmp_path.iterdir()) == [inside] and list(inside.iterdir()) == []
    else:
        assert cs.open_result(inside).histories == result.histories
        assert list(tmp_path.iterdir()) == [inside]


def test_result_in_the_working_directory_is_not_lost(result, results, tmp_path, monkeypatch):
    inside = tmp_path / "here"
    result.save(inside)
    monkeypatch.chdir(inside)
    try:
        results("mixed", 2).save(".")
    except PlaceError as error:
        assert "choose another place" in str(error)
        assert cs.open_result(inside).scenario.simulation.seed == 1
    else:
        assert cs.open_result(inside).scenario.simulation.seed == 2
    assert list(tmp_path.iterdir()) == [inside]


def test_permissions_are_those_of_an_ordinary_directory(result, tmp_path):
    (tmp_path / "plain").mkdir()
    result.save(tmp_path / "place")
    assert (tmp_path / "place").stat().st_mode == (tmp_path / "plain").stat().st_mode


# --- opening --------------------------------------------------------------------------------------


def test_open_what_is_no_result(tmp_path):
    for place in (tmp_path, tmp_path / "nowhere"):
        with pytest.raises(PlaceError, match="no result of carriersim here"):
            cs.open_result(place)


def test_open_a_newer_format(result, tmp_path):
    result.save(tmp_path / "place")
    summary = tmp_path / "place" / "summary.json"
    summary.write_text(json.dumps(json.loads(summary.read_text()) | {"format": 99}))
    with pytest.raises(PlaceError, match="written in format 99, this version reads up to 1"):
        cs.open_result(tmp_path / "place")


@each_kind
def test_opened_result_saves_the_same_files(results, kind, tmp_path):
    results(kind).save(tmp_path / "first")
    cs.open_result(tmp_path / "first").save(tmp_path / "second")
    first, second = contents(tmp_path / "first"), contents(tmp_path / "second")
    del first["fields.npz"], second["fields.npz"]  # zip entries carry the time
    assert first == second


# --- accidents ------------------------------------------------------------------------------------

FULL_DISK = """
import resource, sys
import carriersim as cs
from carriersim.storage import PlaceError
old, place, limit, figures = sys.argv[1:]
result = cs.open_result(old)
if figures == "True":
    import carriersim.figures
resource.setrlimit(resource.RLIMIT_FSIZE, (int(limit), int(limit)))
try:
    result.save(place, figures=figures == "True")
except PlaceError as error:
    print(error)
    sys.exit(2)
"""


def _python(code, *arguments):
    return subprocess.run(
        [sys.executable, "-c", code, *map(str, arguments)],
        env=os.environ | {"PYTHONPATH": str(ROOT)},
        capture_output=True,
        text=True,
        timeout=300,
    )


@pytest.mark.parametrize(
    ("limit", "figures"),
    [(0, False), (1500, False), (20_000, False), (90_000, True)],
    ids=["nothing", "scenario", "summary", "figures"],
)
def test_full_disk_leaves_the_older_result(results, tmp_path, limit, figures):
    """Files are cut off at a size, as by a disk that is full."""
    old, new = tmp_path / "runs" / "place", tmp_path / "source"
    results("mixed", 1).save(old)
    results("mixed", 2).save(new)
    if limit > (new / "fields.npz").stat().st_size and not figures:
        pytest.fail("the limit is above the largest file")
    before = contents(old)
    done = _python(FULL_DISK, new, old, limit, figures)
    assert done.returncode == 2, done.stderr
    assert str(old) in done.stdout and "File too large" in done.stdout
    assert done.stderr == ""
    assert contents(old) == before
    assert [p.name for p in old.parent.iterdir()] == ["place"]


ENDLESS = """
import sys
import carriersim as cs
first, second, place = sys.argv[1:]
results = [cs.open_result(first), cs.open_result(second)]
print("ready", flush=True)
while True:
    for result in results:
        result.save(place)
"""


def test_kill_leaves_the_old_or_the_new_result(results, tmp_path):
    first, second, place = (tmp_path / name for name in ("first", "second", "place"))
    results("mixed", 1).save(first)
    results("mixed", 2).save(second)
    first_files, second_files = contents(first), contents(second)
    results("mixed", 1).save(place)
    delays = np.random.default_rng(5).uniform(0.0, 0.06, 6)
    for delay in delays:
        process = subprocess.Popen(
            [sys.executable, "-c", ENDLESS, first, second, place],
            env=os.environ | {"PYTHONPATH": str(ROOT)},
            stdout=subprocess.PIPE,
        )
        try:
            assert process.stdout.readline() == b"ready\n"
            time.sleep(delay)
        finally:
            process.send_signal(signal.SIGKILL)
            process.wait(30)
            process.stdout.close()
        found = contents(place)
        seed = cs.open_result(place).scenario.simulation.seed
        expected = first_files if seed == 1 else second_files
        assert found.keys() == expected.keys()
        assert all(found[name] == expected[name] for name in FILES - {"fields.npz"})
    results("mixed", 2).save(place)  # what was left beside it does not disturb
    assert cs.open_result(place).scenario.simulation.seed == 2
