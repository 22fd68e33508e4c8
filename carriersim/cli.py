"""The command line: parse, call, print. No physics and no file formats here."""

import argparse
import json
import os
import signal
import sys
import tempfile
import threading
import traceback
from pathlib import Path

from carriersim import __version__
from carriersim.faults import ScenarioError
from carriersim.yamlfile import read_value

DONE, OUR_FAULT, BAD_INPUT, NOT_REACHED, INTERRUPTED = 0, 1, 2, 3, 130


def main(arguments=None):
    """Entry point of the console command; returns the exit status."""
    try:
        options = _parser().parse_args(arguments)
        status = options.command(options)
        sys.stdout.flush()
        return status
    except ScenarioError as error:
        return _refuse(str(error))
    except BrokenPipeError:  # the reader of our output has had enough
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return DONE
    except KeyboardInterrupt:
        print("carriersim: interrupted, nothing was written", file=sys.stderr)
        return INTERRUPTED
    except Exception:
        return _own_fault()


def _refuse(message):
    print(f"carriersim: {message}", file=sys.stderr)
    return BAD_INPUT


def _own_fault():
    """A fault of the program itself: the traceback goes to a file, its path to the user."""
    text = f"carriersim {__version__}\n{sys.argv}\n{traceback.format_exc()}"
    with tempfile.NamedTemporaryFile(
        "w", prefix="carriersim-fault-", suffix=".log", delete=False, encoding="utf-8"
    ) as log:
        log.write(text)
    print(
        f"carriersim: this is a fault of the program, not of your file; details: {log.name}",
        file=sys.stderr,
    )
    return OUR_FAULT


def _parser():
    parser = argparse.ArgumentParser(
        prog="carriersim",
        description="Simulate carriers in short conducting channels with scatterers.",
    )
    parser.add_argument("--version", action="version", version=f"carriersim {__version__}")
    commands = parser.add_subparsers(title="commands", required=True, metavar="COMMAND")

    run = commands.add_parser("run", help="simulate a scenario and write its results")
    run.add_argument("scenario", metavar="SCENARIO", help="scenario file (YAML)")
    run.add_argument("--out", metavar="DIR", help="where results go (default: runs/NAME)")
    run.add_argument("--seed", type=int, metavar="N", help="simulation.seed")
    run.add_argument("--workers", type=_workers, metavar="N", help="threads (default: all cores)")
    run.add_argument(
        "--relative-error", type=float, metavar="X", help="stop at this relative error of R"
    )
    run.add_argument(
        "--set",
        action="append",
        default=[],
        metavar="KEY=VALUE",
        help="change a key, e.g. contacts.bias_mV=5 (may be given several times)",
    )
    run.add_argument("--no-figures", action="store_true", help="write no figures")
    run.set_defaults(command=_run)

    check = commands.add_parser("check", help="check a scenario and print its closed-form limits")
    check.add_argument("scenario", nargs="?", metavar="SCENARIO", help="scenario file (YAML)")
    check.add_argument("--schema", action="store_true", help="print the JSON schema instead")
    check.add_argument("--set", action="append", default=[], metavar="KEY=VALUE")
    check.set_defaults(command=_check)
    return parser


def _workers(text):
    number = int(text) if text.isdigit() else 0
    if not 1 <= number <= 1024:
        raise argparse.ArgumentTypeError(f"found {text}; allowed: a whole number from 1 to 1024")
    return number


def _changes(options):
    """Key paths and values from --set and the options that stand for a key."""
    changes = {}
    for text in options.set:
        key, equals, value = text.partition("=")
        if not equals or not key.strip():
            raise UsageError(f"--set {text}: allowed: KEY=VALUE, e.g. contacts.bias_mV=5")
        try:
            changes[key.strip()] = read_value(value)
        except ScenarioError as error:
            raise UsageError(f"--set {text}: the value {error.faults[0].message}") from error
    if getattr(options, "seed", None) is not None:
        changes["simulation.seed"] = options.seed
    if getattr(options, "relative_error", None) is not None:
        changes["simulation.relative_error"] = options.relative_error
    return changes


class UsageError(ScenarioError):
    """A word on the command line that can't be taken."""

    def __init__(self, message):
        super().__init__(())
        self.message = message

    def __str__(self):
        return self.message


def _check(options):
    from carriersim.scenario import json_schema, load

    if options.schema:
        print(json.dumps(json_schema(), indent=2))
        return DONE
    if options.scenario is None:
        raise UsageError("check: name a scenario file, or ask for --schema")
    from carriersim import limits, report
    from carriersim.disorder import draw_random_points

    scenario = draw_random_points(load(options.scenario, _changes(options)))
    report.print_limits(scenario, limits.limits_for(scenario), _output())
    return DONE


def _run(options):
    from carriersim import report, storage
    from carriersim.scenario import load

    scenario = load(options.scenario, _changes(options))
    place = Path(options.out) if options.out else Path("runs") / scenario.slug
    try:
        storage.check_place(place)
    except storage.PlaceError as error:
        return _refuse(error)
    result, why = _simulate_interruptibly(scenario, options.workers)
    if result is None:
        print(f"carriersim: {why}, nothing was written", file=sys.stderr)
        return INTERRUPTED if "interrupted" in why else NOT_REACHED
    try:
        # After a Ctrl-C the results are due within a second, which drawing would exceed.
        interrupted = result.stopped_by == "interrupted"
        result.save(place, figures=not options.no_figures and not interrupted)
    except storage.PlaceError as error:
        return _refuse(error)
    report.print_result(result, _output())
    print(f"results: {place}")
    return _status(result)


def _output():
    """The terminal or file that results are printed to; goes quiet when its reader has gone."""
    from rich.console import Console

    class Output(Console):
        def on_broken_pipe(self):  # rich would end the process with status 1
            self.quiet = True
            os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())

    return Output()


def _status(result):
    if result.stopped_by == "interrupted":
        return INTERRUPTED
    if result.converged:
        return DONE
    from carriersim.report import unfinished

    reason, remedy = unfinished(result)
    print(
        f"carriersim: not converged: {reason} (stopped by {result.stopped_by}); {remedy}",
        file=sys.stderr,
    )
    return NOT_REACHED


def _simulate_interruptibly(scenario, workers):
    """Simulate in a thread of its own, so that this one can answer a Ctrl-C at once.

    The first Ctrl-C (or a request to terminate) ends the run after its last whole round, a second
    one raises KeyboardInterrupt. Returns (result, None), or (None, why) if there is no result.
    """
    from rich.console import Console

    from carriersim import report
    from carriersim.engine.solve import NothingDone, StopRequest
    from carriersim.runner import simulate

    stop = StopRequest()
    outcome = {"why": None}
    progress = report.progress(Console(stderr=True))

    def work():
        try:
            outcome["result"] = simulate(scenario, workers, stop, progress)
        except NothingDone as error:
            outcome.update(result=None, why=str(error))
        except BaseException as error:
            outcome["error"] = error

    def on_signal(number, frame):
        if stop.flag[0]:
            raise KeyboardInterrupt
        stop.set("interrupted")

    thread = threading.Thread(target=work, daemon=True)
    in_main_thread = threading.current_thread() is threading.main_thread()
    if in_main_thread:
        previous = {s: signal.signal(s, on_signal) for s in (signal.SIGINT, signal.SIGTERM)}
    progress.start(scenario.simulation.target_relative_error)
    try:
        thread.start()
        while thread.is_alive():
            thread.join(0.05)
    finally:
        progress.stop()
        if in_main_thread:
            for number, handler in previous.items():
                signal.signal(number, handler)
    if "error" in outcome:
        raise outcome["error"]
    return outcome["result"], outcome["why"]


if __name__ == "__main__":
    sys.exit(main())
