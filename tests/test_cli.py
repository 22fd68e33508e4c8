"""The command line: exit statuses, messages, interruption, and what is written when."""

import json
import os
import re
import signal
import subprocess
import sys
import time
from dataclasses import replace
from pathlib import Path

import pytest

import carriersim as cs
from carriersim import cli, runner, storage
from carriersim.cli import main

ROOT = Path(__file__).parents[1]
FILES = {"scenario.yaml", "summary.json", "fields.npz", "profile.csv"}

QUICK = """\
name: Quick One
channel:
  length_nm: 100
contacts:
  bias_mV: 5
  temperature_K: 20
scattering:
  points:
    - {position_nm: 40, transmission: 0.5}
probes: [{position_nm: 20}, {position_nm: 70}]
simulation: {cells: 10, relative_error: 0.02}
"""
RELAXING = """\
name: Relaxing
channel: {length_nm: 100}
contacts: {bias_mV: 20, temperature_K: 77}
scattering: {points: [{position_nm: 40, transmission: 0.5}]}
relaxation:
  substrate_conductance_W_per_K_m: 0.1
  mechanisms: [{kind: bath, path_nm: 50, direction: kept}]
probes: [{position_nm: 70, coupling: 0.2}]
simulation: {cells: 10, energy_bins: 40, batches: 16, histories: 16}
"""
ENDLESS = QUICK.replace("relative_error: 0.02", "relative_error: 1e-7")
STATUS = {"done": 0, "our fault": 1, "bad input": 2, "not reached": 3, "interrupted": 130}


@pytest.fixture
def here(tmp_path, monkeypatch):
    """A working directory with a scenario in it."""
    monkeypatch.chdir(tmp_path)
    (tmp_path / "quick.yaml").write_text(QUICK)
    return tmp_path


@pytest.fixture
def relaxing(tmp_path, monkeypatch):
    """A working directory with a scenario that relaxes in it; returns a function that runs it."""
    monkeypatch.chdir(tmp_path)
    (tmp_path / "relaxing.yaml").write_text(RELAXING)
    arguments = ["run", "relaxing.yaml", "--no-figures", "--out", "place"]
    return lambda *changes: main([*arguments, *(f"--set={change}" for change in changes)])


def run(*arguments):
    return main(["run", "quick.yaml", "--no-figures", *arguments])


def summary(place):
    return json.loads((Path(place) / "summary.json").read_text("utf-8"))


def names(place):
    return {path.name for path in Path(place).iterdir()}


# --- run ------------------------------------------------------------------------------------------


def test_run(here, capsys):
    assert run() == STATUS["done"]
    out, err = capsys.readouterr()
    assert names(here / "runs") == {"quick-one"} and names(here / "runs" / "quick-one") == FILES
    assert "runs/quick-one" in out and "resistance" in out and "\x1b" not in out
    assert err == ""
    data = summary("runs/quick-one")
    assert data["stopped_by"] == "relative_error" and data["converged"]
    value = data["resistance_ohm"]
    assert value["error"] <= 0.0201 * value["value"]


def test_default_place_without_a_name_is_that_of_the_file(here):
    (here / "My Wire.yaml").write_text(QUICK.replace("name: Quick One\n", ""))
    assert main(["run", "My Wire.yaml", "--no-figures"]) == STATUS["done"]
    assert names(here / "runs") == {"my-wire"}


def test_figures_unless_told_otherwise(here):
    assert main(["run", "quick.yaml", "--out", "with"]) == STATUS["done"]
    written = names("with")
    assert FILES < written
    figures = written - FILES
    assert {"profile.png", "profile.svg", "occupation.png", "resistance.svg"} <= figures
    assert main(["run", "quick.yaml", "--out", "with", "--no-figures"]) == STATUS["done"]
    assert names("with") == FILES  # replaced as a whole


def test_options_change_the_scenario(here):
    options = ["--out", "place", "--seed", "7", "--relative-error", "0.05", "--workers", "2"]
    options += ["--set", "contacts.bias_mV=-3", "--set", "scattering.points[0].transmission=0.25"]
    options += ["--set", "simulation.cells = 12"]
    assert run(*options) == STATUS["done"]
    data = summary("place")
    assert data["seed"] == 7 and data["bias_mV"] == -3
    saved = cs.load("place/scenario.yaml")
    assert saved.simulation.relative_error == 0.05 and saved.simulation.cells == 12
    assert saved.scattering.points[0].transmission == 0.25
    value = data["resistance_ohm"]
    assert value["error"] <= 0.05 * value["value"]


def test_set_takes_whole_lists_and_tables(here):
    table = "{energy_meV: [0, 5], value: [0.3, 0.6]}"
    assert run("--out", "a", "--set", f"scattering.points[0].transmission={table}") == 0
    assert cs.load("a/scenario.yaml").scattering.points[0].transmission.value == (0.3, 0.6)
    assert run("--out", "b", "--set", "probes=[]", "--set", "scattering.points=") == 0
    saved = cs.load("b/scenario.yaml")
    assert saved.probes == () and saved.scattering.points == ()


def test_workers_change_no_bit(here):
    for workers in "1", "2":
        assert run("--out", workers, "--workers", workers) == STATUS["done"]
    assert Path("1/profile.csv").read_bytes() == Path("2/profile.csv").read_bytes()


@pytest.mark.parametrize("limit", ["histories=5000", "max_seconds=0.05"])
def test_reaching_the_only_limit_is_success(here, limit):
    options = ["--set", "simulation.relative_error=", "--set", f"simulation.{limit}"]
    assert run("--out", "place", *options) == STATUS["done"]
    assert summary("place")["stopped_by"] == limit.partition("=")[0]
    assert summary("place")["converged"] is True


@pytest.mark.parametrize("limit", ["histories=5000", "max_seconds=0.05"])
def test_error_not_reached(here, capsys, limit):
    options = ["--relative-error", "1e-6", "--set", f"simulation.{limit}"]
    assert run("--out", "place", *options) == STATUS["not reached"]
    out, err = capsys.readouterr()
    name = limit.partition("=")[0]
    assert re.search(
        r"not converged: the asked error was not reached: [\d.]+ % of R, asked 1e-04 % "
        rf"\(stopped by {name}\); raise simulation\.{name} or simulation\.relative_error\n$",
        err,
    ), err
    assert "place" in out and names("place") == FILES
    assert summary("place")["converged"] is False and summary("place")["stopped_by"] == name


# --- relaxing runs --------------------------------------------------------------------------------


def test_relaxing_run(relaxing, capsys):
    assert relaxing() == STATUS["done"]
    out, err = capsys.readouterr()
    assert err == "" and names("place") == FILES
    text = " ".join(out.split())
    assert "bath (path 50 nm, direction kept); 1 coupled probe; lattice 77 K" in text
    assert "With 0.1 W/(K m) to the substrate" in text and "T_b itself stays fixed" in text
    data = summary("place")
    assert data["converged"] is True and data["stopped_by"] == "histories"
    heat = data["heat_W"]
    powers = [heat["left_contact"], heat["right_contact"], heat["lattice"], *heat["probes"]]
    power = sum(power["value"] for power in powers)
    assert power == pytest.approx(20e-3 * data["current_A"]["value"], rel=1e-6)


def test_drifting_fields(relaxing, capsys, monkeypatch):
    """Some drift there always is; with a threshold close to 0 no run has settled."""
    from carriersim.engine import iterate

    monkeypatch.setattr(iterate, "DRIFT_SIGMA", 0.01)
    assert relaxing() == STATUS["not reached"]
    out, err = capsys.readouterr()
    data = summary("place")
    assert names("place") == FILES and "results: place" in out
    assert data["converged"] is False and data["residual"] > 0.01
    result = cs.open_result("place")
    assert result.drift in err and f"by {result.drift_sigma:.2f}"[:-1] in err
    assert re.search(
        r"^carriersim: not converged: the fields still drift, most of all .+: by [\d.]+ standard "
        r"errors from one window of rounds to the next, where 0\.01 are allowed \(stopped by "
        r"histories\); raise simulation\.histories\n$",
        err,
    ), err
    assert "asked error" not in err
    assert "Not converged: the fields still drift" in " ".join(out.split())


def test_drift_and_error_not_reached(relaxing, capsys, monkeypatch):
    from carriersim.engine import iterate

    monkeypatch.setattr(iterate, "DRIFT_SIGMA", 0.01)
    assert relaxing("simulation.relative_error=1e-7") == STATUS["not reached"]
    err = capsys.readouterr().err
    assert "the fields still drift" in err and "asked 1e-05 %" in err
    assert err.endswith("raise simulation.histories or simulation.relative_error\n")


@pytest.mark.parametrize("limit", ["histories=16", "max_seconds=0.01"])
def test_settled_run_whose_error_is_not_reached(relaxing, capsys, limit):
    changes = ["simulation.histories=", f"simulation.{limit}", "simulation.relative_error=1e-7"]
    assert relaxing(*changes) == STATUS["not reached"]
    err = capsys.readouterr().err
    name = limit.partition("=")[0]
    assert "asked error was not reached" in err and "drift" not in err
    assert err.endswith(f"raise simulation.{name} or simulation.relative_error\n")
    assert summary("place")["converged"] is False


def test_error_of_the_heat_share(relaxing, capsys, monkeypatch):
    from carriersim.engine import iterate

    shares = []

    def watched(*args):
        shares.append(heat_share(*args))
        return shares[-1]

    heat_share = iterate.heat_share
    monkeypatch.setattr(iterate, "heat_share", watched)
    asked = 0.0005
    changes = ["simulation.histories=", f"simulation.heat_share_error={asked}"]
    assert relaxing(*changes) == STATUS["done"]
    out, err = capsys.readouterr()
    assert err == "" and "asked error of the heat share reached" in " ".join(out.split())
    data = summary("place")
    assert data["stopped_by"] == "heat_share_error" and data["converged"] is True
    assert shares[-1].error <= asked < shares[0].error  # it had to go on for it
    result = cs.open_result("place")
    power = 20e-3 * result.current_A.value
    assert 0.05 < shares[-1].value < 0.95
    assert shares[-1].value == pytest.approx(result.heat_W.lattice.value / power, rel=1e-9)
    assert result.scenario.simulation.heat_share_error == asked


def test_error_of_the_heat_share_not_reached(relaxing, capsys):
    assert relaxing("simulation.heat_share_error=1e-6") == STATUS["not reached"]
    err = capsys.readouterr().err
    assert "the asked error was not reached: 1e-06 of the lattice's share of I V" in err
    assert err.endswith("raise simulation.histories or simulation.heat_share_error\n")


def test_without_a_result(here, capsys, monkeypatch):
    """A run that gave itself up before it had anything to write."""
    from carriersim.engine.solve import NothingDone

    def nothing(*args):
        raise NothingDone("stopped before two windows were complete (event_limit)")

    monkeypatch.setattr(runner, "simulate", nothing)
    assert run("--out", "place") == STATUS["not reached"]
    err = capsys.readouterr().err
    assert "(event_limit), nothing was written" in err
    assert names(here) == {"quick.yaml"}


# --- bad input ------------------------------------------------------------------------------------

BAD_FILES = {
    "transmission": (
        QUICK.replace("0.5}", "1.4}"),
        r"bad.yaml, line 9: scattering.points\[0\].transmission: found 1.4; allowed: a number in "
        r"\(0, 1\]",
    ),
    "unknown key": (
        QUICK.replace("bias_mV", "bias_mv"),
        r"bad.yaml, line 5: contacts.bias_mv: unknown key; did you mean bias_mV\?",
    ),
    "not yaml": ("channel: [1, 2", r"bad.yaml, line \d"),
    "empty": ("", "bad.yaml"),
    "not this version": (
        QUICK + "\nnoise: true\n",
        "this version does not compute noise",
    ),
    "too large for memory": (
        RELAXING.replace("cells: 10,", "cells: 100000,"),
        r"bad.yaml, line 9: simulation.cells: simulation.cells \(10000\d with cuts at scatterers "
        r"and probes\) times simulation.energy_bins \(\d+\) need up to \S+ GB",
    ),
}


@pytest.mark.parametrize("command", ["run", "check"])
@pytest.mark.parametrize(("text", "message"), BAD_FILES.values(), ids=BAD_FILES)
def test_bad_file(here, capsys, command, text, message):
    (here / "bad.yaml").write_text(text)
    assert main([command, "bad.yaml"]) == STATUS["bad input"]
    out, err = capsys.readouterr()
    assert out == "" and err.startswith("carriersim: ") and re.search(message, err)
    assert "Traceback" not in err
    assert names(here) == {"quick.yaml", "bad.yaml"}


def test_all_faults_at_once(here, capsys):
    (here / "bad.yaml").write_text(QUICK.replace("0.5}", "2}").replace("100", "-100"))
    assert main(["run", "bad.yaml"]) == STATUS["bad input"]
    err = capsys.readouterr().err
    assert "line 3: channel.length_nm: found -100" in err
    assert "line 9: scattering.points[0].transmission: found 2" in err


@pytest.mark.parametrize("name", ["nowhere.yaml", ".", "quick.yaml/inside"])
@pytest.mark.parametrize("command", ["run", "check"])
def test_file_that_cannot_be_read(here, capsys, command, name):
    assert main([command, name]) == STATUS["bad input"]
    err = capsys.readouterr().err
    assert name in err and "Traceback" not in err


BAD_OPTIONS = {
    "no value": (["--set", "contacts.bias_mV"], "--set contacts.bias_mV: allowed: KEY=VALUE"),
    "no key": (["--set", "=5"], "--set =5: allowed: KEY=VALUE"),
    "unknown key": (["--set", "contacts.bias=5"], "contacts.bias"),
    "bad path": (["--set", "scattering.points[7].transmission=1"], r"points\[7\]"),
    "bad value": (["--set", "contacts.bias_mV=high"], "contacts.bias_mV: found 'high'"),
    "not yaml": (["--set", "contacts.bias_mV=[1"], "contacts.bias_mV"),
    "out of range": (["--relative-error", "-1"], "simulation.relative_error: found -1"),
    "not finite": (["--relative-error", "nan"], "simulation.relative_error: found .nan"),
    "negative seed": (["--seed", "-1"], "simulation.seed: found -1"),
    "position outside": (["--set", "channel.length_nm=30"], "outside the channel"),
}


@pytest.mark.parametrize(("options", "message"), BAD_OPTIONS.values(), ids=BAD_OPTIONS)
def test_bad_option(here, capsys, options, message):
    assert run(*options) == STATUS["bad input"]
    out, err = capsys.readouterr()
    assert out == "" and err.startswith("carriersim: ") and re.search(message, err), err
    assert names(here) == {"quick.yaml"}


@pytest.mark.parametrize(
    "arguments",
    [
        [],
        ["walk"],
        ["run"],
        ["run", "quick.yaml", "--workers", "0"],
        ["run", "quick.yaml", "--workers", "many"],
        ["run", "quick.yaml", "--seed", "1.5"],
        ["run", "quick.yaml", "--relative-error", "small"],
        ["run", "quick.yaml", "--unknown"],
    ],
)
def test_bad_usage(here, capsys, arguments):
    with pytest.raises(SystemExit) as caught:
        main(arguments)
    assert caught.value.code == STATUS["bad input"]
    assert "usage: carriersim" in capsys.readouterr().err


def test_check_without_a_file(capsys):
    assert main(["check"]) == STATUS["bad input"]
    assert "name a scenario file, or ask for --schema" in capsys.readouterr().err


def test_too_many_random_scatterers(here, capsys):
    """Found out only when they are drawn."""
    crowd = (
        "scattering.random=[{count: 9, transmission: 0.5, from_nm: 10, to_nm: 10.000000000000002}]"
    )
    assert run("--set", crowd) == STATUS["bad input"]
    assert "no room for 9 places" in capsys.readouterr().err


@pytest.mark.parametrize("options", [[], ["--no-figures"]])
def test_bad_place_is_refused_before_the_run(here, capsys, monkeypatch, options):
    (here / "mine").mkdir()
    (here / "mine" / "thesis.tex").write_text("years of work")
    monkeypatch.setattr(cli, "_simulate_interruptibly", lambda *args: pytest.fail("it ran"))
    assert main(["run", "quick.yaml", "--out", "mine", *options]) == STATUS["bad input"]
    err = capsys.readouterr().err
    assert "mine: holds what is not a result of carriersim (thesis.tex)" in err
    assert names("mine") == {"thesis.tex"}


@pytest.mark.parametrize("place", ["/proc/carriersim", "/dev/null/place"])
def test_unwritable_place(here, capsys, place):
    assert run("--out", place) == STATUS["bad input"]
    err = capsys.readouterr().err
    assert "choose another place with --out" in err and "Traceback" not in err


def test_place_that_fails_while_saving(here, capsys, monkeypatch):
    def full(result, work):
        raise OSError(28, "No space left on device")

    run("--out", "place", "--seed", "3")
    monkeypatch.setattr(storage, "_write_files", full)
    assert run("--out", "place", "--seed", "4") == STATUS["bad input"]
    assert "place: No space left on device" in capsys.readouterr().err
    assert summary("place")["seed"] == 3 and names(here) == {"quick.yaml", "place"}


# --- check ----------------------------------------------------------------------------------------


def test_check_prints_the_limits(here, capsys):
    assert main(["check", "quick.yaml", "--set", "scattering.points[0].transmission=0.2"]) == 0
    out, err = capsys.readouterr()
    assert err == "" and "\x1b" not in out
    assert "Datta" in out
    # One scatterer with T = 0.2, two spins: R = 5 h/2e^2 = 64.532 kOhm.
    assert re.search(r"64\.5[0-9]* ?kΩ|64 ?53[0-9]", out), out
    assert names(here) == {"quick.yaml"}


def test_check_draws_random_scatterers(here, capsys):
    assert (
        main(["check", "quick.yaml", "--set", "scattering.random=[{count: 3, transmission: 1}]"])
        == 0
    )
    assert capsys.readouterr().out


def test_schema_is_json(capsys):
    assert main(["check", "--schema"]) == STATUS["done"]
    schema = json.loads(capsys.readouterr().out)
    assert schema["$schema"].startswith("https://json-schema.org/") and schema["type"] == "object"
    assert {"channel", "contacts", "scattering", "simulation"} <= schema["properties"].keys()
    assert set(schema["required"]) == {"channel", "contacts"}
    references = set(re.findall(r'"#/\$defs/(\w+)"', json.dumps(schema)))
    assert references <= schema["$defs"].keys()


@pytest.mark.parametrize("path", sorted((ROOT / "scenarios").glob("*.yaml")), ids=lambda p: p.stem)
def test_check_of_the_shipped_scenarios(path, capsys):
    assert main(["check", str(path)]) == STATUS["done"]
    assert path.read_text().startswith("#")  # a comment says what question it answers


def test_version_and_help(capsys):
    for options in (["--version"], ["--help"], ["run", "--help"], ["check", "--help"]):
        with pytest.raises(SystemExit) as caught:
            main(options)
        assert caught.value.code == 0
        out, err = capsys.readouterr()
        assert "carriersim" in out and err == ""
    assert cs.__version__


# --- our own faults -------------------------------------------------------------------------------


@pytest.mark.parametrize("where", ["simulate", "save"])
def test_own_fault(here, capsys, monkeypatch, where):
    def broken(*args, **kwargs):
        raise RuntimeError("a wheel came off")

    logs = here / "logs"
    logs.mkdir()
    monkeypatch.setattr(cli.tempfile, "tempdir", str(logs))
    monkeypatch.setattr(runner if where == "simulate" else storage, where, broken)
    assert run("--out", "place") == STATUS["our fault"]
    err = capsys.readouterr().err
    (log,) = logs.iterdir()
    assert str(log) in err and "fault of the program" in err and "Traceback" not in err
    text = log.read_text()
    assert "Traceback" in text and "a wheel came off" in text and cs.__version__ in text
    assert not (here / "place").exists()


# --- processes ------------------------------------------------------------------------------------


def command(*arguments):
    return [sys.executable, "-m", "carriersim.cli", *map(str, arguments)]


def environment(**more):
    return os.environ | {"PYTHONPATH": str(ROOT)} | more


def process(*arguments, **options):
    return subprocess.run(
        command(*arguments),
        env=environment(),
        capture_output=True,
        text=True,
        timeout=120,
        **options,
    )


def test_exit_statuses_of_a_process(here):
    place = ["--no-figures", "--out", "place"]
    done = process("run", "quick.yaml", *place)
    assert (done.returncode, done.stderr) == (STATUS["done"], "")
    assert "\x1b" not in done.stdout and "\r" not in done.stdout
    missed = process(
        "run", "quick.yaml", *place, "--relative-error=1e-9", "--set=simulation.histories=1000"
    )
    assert missed.returncode == STATUS["not reached"]
    bad = process("run", "quick.yaml", "--set", "channel.length_nm=-1")
    assert bad.returncode == STATUS["bad input"] and bad.stdout == ""


def test_output_in_another_encoding(here):
    """A terminal that knows no Greek gets letters instead of a traceback."""
    done = subprocess.run(
        command("run", "quick.yaml", "--no-figures"),
        env=environment(PYTHONIOENCODING="ascii"),
        capture_output=True,
        timeout=120,
    )
    assert done.returncode == STATUS["done"], done.stderr
    assert done.stdout.decode("ascii") and done.stderr == b""


@pytest.mark.parametrize(
    "arguments",
    [["check", "quick.yaml"], ["check", "--schema"], ["run", "quick.yaml"]],
    ids=" ".join,
)
def test_broken_pipe(here, arguments):
    """Whoever reads our output may stop: no traceback, no complaint, results are written."""
    if arguments[0] == "run":
        arguments = [*arguments, "--no-figures", "--out", "place"]
    read, write = os.pipe()
    os.close(read)
    done = subprocess.run(
        command(*arguments), env=environment(), stdout=write, stderr=subprocess.PIPE, timeout=120
    )
    os.close(write)
    assert done.stderr.decode() == ""
    assert done.returncode == STATUS["done"]
    if arguments[0] == "run":
        assert names("place") == FILES


class Running:
    """A run in a process of its own that goes on until it is stopped."""

    def __init__(self, text, *options, delay=0.0):
        Path("endless.yaml").write_text(text)
        self.begin = time.monotonic()
        self.process = subprocess.Popen(
            [sys.executable, "-c", ANNOUNCED, "run", "endless.yaml", "--out", "place", *options],
            env=environment(),
            stdout=subprocess.PIPE,
            stderr=subprocess.PIPE,
            text=True,
        )
        assert self.process.stdout.readline() == "third round\n"
        time.sleep(delay)

    def interrupt(self):
        self.process.send_signal(signal.SIGINT)

    def finish(self):
        """Exit status, output, messages, and the time since the call in s."""
        begin = time.monotonic()
        try:
            out, err = self.process.communicate(timeout=60)
        finally:
            self.process.kill()
        return self.process.returncode, out, err, time.monotonic() - begin


# The command line, which says when a run is well under way.
ANNOUNCED = """
import sys
from carriersim import cli, runner

simulate = runner.simulate

class Announcing:
    rounds = 0

    def __init__(self, progress):
        self.progress = progress

    def update(self, *numbers):
        self.rounds += 1
        if self.rounds == 3:
            print("third round", flush=True)
        self.progress.update(*numbers)

def announcing(scenario, workers, stop, progress):
    return simulate(scenario, workers, stop, Announcing(progress))

runner.simulate = announcing
sys.exit(cli.main())
"""
# The contract asks for 1 s; the rest allows for a machine busy with other tests.
PROMPT = 3.0


@pytest.mark.parametrize("number", [signal.SIGINT, signal.SIGTERM], ids=["Ctrl-C", "terminate"])
def test_interrupted_in_mid_run(here, number):
    running = Running(ENDLESS, "--no-figures", delay=0.3)
    running.process.send_signal(number)
    status, out, err, seconds = running.finish()
    assert status == STATUS["interrupted"] and seconds < PROMPT
    assert "Traceback" not in err and "place" in out
    data = summary("place")
    assert data["stopped_by"] == "interrupted" and not data["converged"]
    assert data["iterations"] >= 3 and names("place") == FILES
    # Whole rounds only: the saved scenario repeats them to the same bits.
    again = cs.simulate(cs.load("place/scenario.yaml"))
    assert again.resistance_ohm == cs.open_result("place").resistance_ohm
    assert again.histories == data["histories"]


def test_interrupted_in_a_round_of_long_walks(here):
    """A kernel in the middle of a round notices, too."""
    text = QUICK.replace("relative_error: 0.02", "relative_error: 1e-7")
    text = text.replace("  points:", "  mean_free_path_nm: 0.1\n  points:")
    running = Running(text, "--no-figures", "--workers", "2", delay=1.0)
    running.interrupt()
    status, _, err, seconds = running.finish()
    assert status == STATUS["interrupted"] and seconds < PROMPT and "Traceback" not in err
    assert summary("place")["stopped_by"] == "interrupted"


def test_interrupted_twice_writes_nothing(here):
    """Many cells: putting the result together takes long enough for the second Ctrl-C."""
    cs.simulate(cs.load("quick.yaml")).save("place")
    before = {path.name: path.read_bytes() for path in Path("place").iterdir()}
    running = Running(ENDLESS.replace("cells: 10", "cells: 10000"), delay=0.3)
    running.interrupt()
    time.sleep(0.03)
    running.interrupt()
    status, _, err, seconds = running.finish()
    assert status == STATUS["interrupted"] and seconds < PROMPT
    assert "nothing was written" in err and "Traceback" not in err
    assert {path.name: path.read_bytes() for path in Path("place").iterdir()} == before
    assert names(here) == {"quick.yaml", "endless.yaml", "place"}


def test_figures_do_not_hold_up_an_interrupted_result(here, monkeypatch):
    """Drawing takes longer than the second within which results are to be written."""
    from carriersim import figures

    result = cs.simulate(cs.load("quick.yaml"))
    stopped = replace(result, stopped_by="interrupted", converged=False)
    monkeypatch.setattr(runner, "simulate", lambda *args: stopped)
    written = []

    def draw(result, work):
        written.append((here / "place" / "summary.json").exists())

    monkeypatch.setattr(figures, "save_all", draw)
    assert main(["run", "quick.yaml", "--out", "place"]) == STATUS["interrupted"]
    assert FILES <= names("place") and all(written)


def test_interrupted_before_the_first_round(here, capsys, monkeypatch):
    from carriersim.engine.solve import NothingDone

    def nothing(*args):
        raise NothingDone("stopped before the first round was complete (interrupted)")

    monkeypatch.setattr(runner, "simulate", nothing)
    assert run("--out", "place") == STATUS["interrupted"]
    assert "nothing was written" in capsys.readouterr().err
    assert names(here) == {"quick.yaml"}


def test_signal_handlers_are_put_back(here):
    before = signal.getsignal(signal.SIGINT), signal.getsignal(signal.SIGTERM)
    run("--out", "place")
    assert (signal.getsignal(signal.SIGINT), signal.getsignal(signal.SIGTERM)) == before
