"""Measures carriersim's speed, one line per target: .venv/bin/python tools/bench

Speeds are ratios of what runs side by side on one pinned core, medians of interleaved pairs, so
that they can be compared between machines. Exit status 1: a target was missed, or a run failed.
"""

import argparse
import dataclasses
import json
import math
import os
import platform
import statistics
import sys
import tempfile
from collections.abc import Callable
from functools import partial
from pathlib import Path

import numpy as np

import numpy_elastic
import relaxing
import space
import twin
from adapters import (
    LEVEL,
    NotThereError,
    engine_flights,
    engine_relative_errors,
    engine_relaxing_errors,
    engine_seconds,
)
from measure import median_ratio, one_core, pairs, whole_process
from rows import FULL, QUICK, Effort, FailedError, Row

ROOT = Path(__file__).resolve().parents[2]

FIVE_POINTS = ((0.13, 0.8), (0.3, 0.55), (0.48, 0.9), (0.71, 0.4), (0.9, 0.7))
CASES = {
    "L/path 1": {"length": 1.0, "path": 1.0, "cells": 200},
    "L/path 20": {"length": 20.0, "path": 1.0, "cells": 200},
    "L/path 1 and five points": {"length": 1.0, "path": 1.0, "cells": 200, "points": FIVE_POINTS},
}
"""Problems on which the elastic kernels are compared; lengths in mean free paths."""


def resistance(case: dict) -> float:
    """R/R_B of a case: 1 + L/path + sum (1 - T)/T (Datta, Electronic Transport, 1995)."""
    points = case.get("points", ())
    return 1 + case["length"] / case["path"] + sum((1 - t) / t for _, t in points)


def histories_for(case: dict, flights: float) -> int:
    """About so many histories give that many flights: without points each has R/R_B on average."""
    return max(1, round(flights / resistance(case)))


# Each returns flights per second of one measurement.


def twin_speed(case: dict, histories: int) -> float:
    result = twin.elastic(**case, histories=histories, seed=1)
    return result["flights"] / result["seconds"]


def numpy_speed(case: dict, histories: int) -> float:
    result = numpy_elastic.simulate(**case, histories=histories, seed=1)
    return result["flights"] / result["seconds"]


def engine_speed(case: dict, histories: int) -> float:
    flights, seconds = engine_flights({"seed": 1, **case}, histories)
    return flights / seconds


# Each of these fills the row or rows that it is handed.


def compare(fast: Callable, slow: Callable, row: Row, effort: Effort) -> None:
    """The smallest ratio of the two speeds over the cases."""
    ratios, notes = {}, []
    with one_core():
        for name, case in CASES.items():
            histories = histories_for(case, effort.flights)
            fast(case, 1000)  # compile, load
            slow(case, 1000)
            above, below = pairs(
                partial(fast, case, histories), partial(slow, case, histories), effort.pairs
            )
            ratios[name] = median_ratio(above, below)
            speeds = [statistics.median(rates) / 1e6 for rates in (above, below)]
            notes.append(f"{name}: {ratios[name]:.2f} ({speeds[0]:.3g} / {speeds[1]:.3g})")
            row.details[name] = {"ratio": ratios[name], "flights_per_s": [above, below]}
    row.value = min(ratios.values())
    row.note = "; ".join(notes) + " million flights/s"


def tally_cost(row: Row, effort: Effort) -> None:
    with one_core():
        for name in ("L/path 1", "L/path 20"):
            few, many = ({**CASES[name], "cells": cells} for cells in (50, 1600))
            histories = histories_for(few, effort.flights)
            engine_speed(few, 1000)
            engine_speed(many, 1000)
            fast, slow = pairs(
                partial(engine_speed, few, histories),
                partial(engine_speed, many, histories),
                effort.pairs,
            )
            row.details[name] = median_ratio(fast, slow)
    row.value = max(row.details.values())
    row.note = "; ".join(f"{name}: {ratio:.3f}" for name, ratio in row.details.items())


def small_bias_error(relative_errors: Callable, row: Row, effort: Effort) -> None:
    """No timing. Medians over seeds: an error of 64 batches is itself uncertain by 9 %, and far
    more where the value could as well be zero."""
    seeds = range(1, 2 * effort.pairs + 1)
    histories = round(effort.flights / 200)
    small, large = (
        [relative_errors(bias, histories, seed) for seed in seeds] for bias in (0.01, 10)
    )
    for name in small[0]:
        above, below = (statistics.median(run[name] for run in runs) for runs in (small, large))
        row.details[name] = above / below
    row.value = max(row.details.values())
    row.note = "; ".join(f"{name}: {ratio:.2f}" for name, ratio in row.details.items())


def two_workers(row: Row, effort: Effort) -> None:
    if len(os.sched_getaffinity(0)) < 2:
        raise NotThereError("this machine has one core")
    histories = 64_000
    engine_seconds(histories, 1)
    # Also with both workers a run is to take a second.
    while (seconds := engine_seconds(histories, 1)) < 2.2:
        histories = math.ceil(histories * min(10, 2.6 / seconds))
    one, two = pairs(
        partial(engine_seconds, histories, 1), partial(engine_seconds, histories, 2), effort.pairs
    )
    row.value = median_ratio(one, two)
    row.details = {"histories": histories, "seconds": [one, two]}
    row.note = f"{statistics.median(one):.2f} s and {statistics.median(two):.2f} s"


def quick_start(warm: Row, first: Row, memory: Row, effort: Effort) -> None:
    """The shipped run as a whole process, as a user starts it: not pinned, figures included."""
    command = Path(sys.executable).with_name("carriersim")
    scenario = ROOT / "scenarios" / "quick-start.yaml"
    for needed in (command, scenario):
        if not needed.exists():
            raise NotThereError(f"{needed} is missing")
    with tempfile.TemporaryDirectory() as folder:
        # The compiled kernels and the font list that the first run leaves serve the later ones.
        environment = {
            **os.environ,
            "NUMBA_CACHE_DIR": f"{folder}/numba",
            "MPLCONFIGDIR": f"{folder}/matplotlib",
        }
        environment.pop("PYTHONDONTWRITEBYTECODE", None)
        log = f"{folder}/log"
        arguments = [str(command), "run", str(scenario), "--out", f"{folder}/result"]
        measured = []
        for _ in range(1 + effort.pairs):
            status, seconds, megabytes = whole_process(arguments, log, environment)
            if status:
                raise FailedError(f"exit status {status}: {Path(log).read_text()[-300:].strip()}")
            measured.append((seconds, megabytes))
    first.value = measured[0][0]
    warm.value = statistics.median(seconds for seconds, _ in measured[1:])
    warm.note = f"median of {effort.pairs}"
    memory.value = max(megabytes for _, megabytes in measured[1:])
    memory.note = f"warm; the first ever: {measured[0][1]:.0f} MB"
    for row in (warm, first, memory):
        row.details = {"seconds_and_MB": measured}


def table() -> dict[str, tuple[Callable, list[Row]]]:
    """What there is to measure: by short name, who fills which rows."""
    return {
        "elastic": (
            partial(compare, engine_speed, twin_speed),
            [Row("elastic d=1, flights/s, against C", ">=", 0.9)],
        ),
        "numpy": (
            partial(compare, engine_speed, numpy_speed),
            [Row("elastic d=1, flights/s, against numpy", ">=", 5)],
        ),
        "twin": (
            partial(compare, twin_speed, numpy_speed),
            [Row("for comparison: C against numpy")],
        ),
        "cells": (tally_cost, [Row("elastic d=1, time, 1600 cells against 50", "<=", 1.15)]),
        "relaxing": (relaxing.compare, [Row("relaxing d=1, events/s, against C", ">=", 0.9)]),
        "space": (
            partial(space.compare, space.FREE),
            [Row("elastic d=3 without walls, against C", ">=", 0.9)],
        ),
        "walls": (
            partial(space.compare, space.WALLED),
            [Row("elastic d=3 with walls, against C", ">=", 0.9)],
        ),
        "bias": (
            partial(small_bias_error, engine_relative_errors),
            [Row("relative error, eV = kT/100 against 10 kT", "<=", 1.2)],
        ),
        "bias-bath": (
            partial(small_bias_error, partial(engine_relaxing_errors, 0.5)),
            [Row("the same, no T(E) but a kept bath", "<=", 1.2)],
        ),
        "bias-both": (
            partial(small_bias_error, partial(engine_relaxing_errors, LEVEL)),
            [Row("the same, T(E) and a kept bath")],
        ),
        "workers": (two_workers, [Row("two workers against one, one run", ">=", 1.8)]),
        "start": (
            quick_start,
            [
                Row("quick start, whole process, warm", "<=", 2, " s"),
                Row("quick start, whole process, first ever", "<=", 25, " s"),
                Row("quick start, peak memory", "<=", 350, " MB"),
            ],
        ),
    }


def measure(fill: Callable, rows: list[Row], effort: Effort) -> None:
    """Fill the rows, or put the reason into them why they cannot be filled."""
    try:
        fill(*rows, effort=effort)
    except (NotThereError, twin.NoCompilerError, FailedError) as reason:
        for row in rows:
            row.note = str(reason)
            row.failed = isinstance(reason, FailedError)


def verify(histories: int = 50_000, seeds: int = 64) -> bool:
    """Hold the C twin and the numpy script against the closed form, within 4 standard errors.

    g+(x) = T (1 + what lies beyond x), g-(x) = g+(x) - T, averaged over each cell; errors from
    independent seeds.
    """
    good = True
    for name, case in CASES.items():
        total = 1 / resistance(case)
        cells, length = case["cells"], case["length"]
        chosen = [(cells - 1) * i // 4 for i in range(5)]
        expected = [total]
        for cell in chosen:
            low, high = (length * c / cells for c in (cell, cell + 1))
            beyond = (length - (low + high) / 2) / case["path"]
            for position, transmission in case.get("points", ()):
                share = min(max((position - low) / (high - low), 0.0), 1.0)
                beyond += share * (1 - transmission) / transmission
            expected += [total * (1 + beyond), total * beyond]
        for what, simulate in (("C", twin.elastic), ("numpy", numpy_elastic.simulate)):
            found = []
            for seed in range(seeds):
                run = simulate(**case, histories=histories, seed=seed)
                profile = run.get("profile") or [
                    (c, run["g_plus"][c], run["g_minus"][c]) for c in chosen
                ]
                found.append([run["transmission"], *np.ravel([entry[1:] for entry in profile])])
            mean = np.mean(found, axis=0)
            error = np.std(found, axis=0, ddof=1) / math.sqrt(seeds)
            worst = float(np.max(np.abs(mean - expected) / error))
            good &= worst < 4
            print(
                f"{name}, {what}: T = {mean[0]:.5f} +- {error[0]:.5f}, expected {total:.5f}; "
                f"largest |z| of {len(expected)} values {worst:.2f}"
            )
    return good


def main() -> int:
    targets = table()
    parser = argparse.ArgumentParser(prog="tools/bench", description=__doc__.splitlines()[0])
    parser.add_argument("--json", metavar="FILE", help="also write all measurements there")
    parser.add_argument("--quick", action="store_true", help="fewer and shorter measurements")
    parser.add_argument("--only", choices=targets, action="append", help="only this; repeatable")
    parser.add_argument(
        "--verify",
        action="store_true",
        help="only hold the C twin and the numpy script against the closed form",
    )
    options = parser.parse_args()
    if options.verify:
        good = [verify(), relaxing.verify()]
        return 0 if all(good) else 1
    effort = QUICK if options.quick else FULL
    done = []
    for name in options.only or targets:
        fill, rows = targets[name]
        measure(fill, rows, effort)
        for row in rows:
            print(row.line(), flush=True)
        done += rows
    if options.json:
        report = {
            "machine": {
                "processor": platform.processor() or platform.machine(),
                "cores": os.cpu_count(),
                "system": platform.platform(),
                "python": platform.python_version(),
                "numpy": np.__version__,
            },
            "pairs": effort.pairs,
            "rows": [{**dataclasses.asdict(row), "verdict": row.verdict} for row in done],
        }
        Path(options.json).write_text(json.dumps(report, indent=1) + "\n")
    return 1 if any(row.verdict in ("miss", "failed") for row in done) else 0


if __name__ == "__main__":
    sys.exit(main())
