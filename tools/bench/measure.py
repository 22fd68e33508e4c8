"""How the bench measures: pinned, in interleaved pairs, and whole processes with their memory."""

import contextlib
import json
import os
import statistics
import subprocess
import sys
from collections.abc import Callable, Iterator

# A process of its own starts the child: the peak memory that the system reports for a child counts
# what its parent held when it was started, and the bench itself holds numpy and numba.
_LAUNCHER = """
import json, os, subprocess, sys, time
with open(sys.argv[1], "wb") as log:
    started = time.perf_counter()
    child = subprocess.Popen(sys.argv[2:], stdin=subprocess.DEVNULL, stdout=log, stderr=log)
    _, status, usage = os.wait4(child.pid, 0)
    seconds = time.perf_counter() - started
print(json.dumps([os.waitstatus_to_exitcode(status), seconds, usage.ru_maxrss / 1024]))
"""


@contextlib.contextmanager
def one_core() -> Iterator[None]:
    """Keep this process, and what it starts, on one core (the last that it may use)."""
    allowed = os.sched_getaffinity(0)
    os.sched_setaffinity(0, {max(allowed)})
    try:
        yield
    finally:
        os.sched_setaffinity(0, allowed)


def pairs(
    first: Callable[[], float], second: Callable[[], float], number: int
) -> tuple[list[float], list[float]]:
    """Call both in turn, `number` times each, the order changing from pair to pair."""
    results: tuple[list[float], list[float]] = ([], [])
    for index in range(number):
        for which in (0, 1) if index % 2 == 0 else (1, 0):
            results[which].append((first, second)[which]())
    return results


def median_ratio(numerators: list[float], denominators: list[float]) -> float:
    """Median of the ratios of the pairs: a slow spell of the machine hits both of a pair."""
    return statistics.median(a / b for a, b in zip(numerators, denominators, strict=True))


def whole_process(
    arguments: list[str], log: str, environment: dict[str, str]
) -> tuple[int, float, float]:
    """Run a command with its output in the file `log`: exit status, seconds, peak memory in MB."""
    done = subprocess.run(
        [sys.executable, "-I", "-S", "-c", _LAUNCHER, log, *arguments],
        env=environment,
        stdout=subprocess.PIPE,
        check=True,
    )
    status, seconds, megabytes = json.loads(done.stdout)
    return status, seconds, megabytes
