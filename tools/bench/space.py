"""The kernel of d = 3 against its C twin, with and without walls: cases, agreement, speed."""

import math
from functools import partial

import numpy as np

import twin
from adapters import SpaceKernel
from measure import median_ratio, one_core, pairs
from rows import Effort, FailedError, Row

PIECES = 3
"""Pairs are so much shorter and so many times more: other work on the machine comes in spells."""
RUNS = 32
LARGEST_Z = 4.5  # some 17 values from 32 runs of both: beyond it by chance once in 1000 times

FREE = {
    "L/l 1": {"length": 100.0, "path": 100.0, "cells": 200},
    "L/l 20": {"length": 2000.0, "path": 100.0, "cells": 200},
    "L/l 2 and three planes": {
        "length": 200.0,
        "path": 100.0,
        "cells": 200,
        "planes": ((50.0, 0.7, False), (100.0, 0.5, True), (150.0, 0.8, False)),
    },
}
WALLED = {
    "wire L/l 20": {"length": 2000.0, "path": 100.0, "cells": 200, "side": 100.0},
    "wire L/l 5, p = 0.5": {
        "length": 500.0,
        "path": 100.0,
        "cells": 200,
        "side": 100.0,
        "specularity": 0.5,
    },
    "wire L/l 10 and 49 planes": {
        "length": 1000.0,
        "path": 100.0,
        "cells": 200,
        "side": 100.0,
        "planes": tuple((20.0 * i, 0.8, False) for i in range(1, 50)),
    },
}


class Pair:
    """The kernel and its twin on one case."""

    def __init__(self, case: dict):
        self.case = case
        self.kernel = SpaceKernel(case)
        self.events_per_history = self._twin(2000, 0)["events"] / 2000

    def _twin(self, histories: int, seed: int) -> dict:
        return twin.space(**self.case, histories=histories, seed=seed)

    def histories_for(self, events: float) -> int:
        return max(1, round(events / self.events_per_history))

    # Both return histories per second of processor time: events are not counted alike.

    def kernel_speed(self, histories: int) -> float:
        return histories / self.kernel.seconds(histories)

    def twin_speed(self, histories: int) -> float:
        return histories / self._twin(histories, 1)["seconds"]

    def agreement(self, events: float) -> tuple[float, np.ndarray, np.ndarray]:
        """Largest distance of the two in standard errors, and the means of what both give."""
        histories = self.histories_for(events / RUNS)
        kernel = np.array([self.kernel.run(histories, batch) for batch in range(RUNS)])
        other = np.array([_values(self._twin(histories, seed)) for seed in range(RUNS)])
        means = kernel.mean(axis=0), other.mean(axis=0)
        errors = [x.std(axis=0, ddof=1) / math.sqrt(RUNS) for x in (kernel, other)]
        z = np.abs(means[0] - means[1]) / np.maximum(np.hypot(*errors), 1e-12)
        return float(z.max()), *means


def _values(run: dict) -> list[float]:
    """Transmission; f+ and f- in five cells; arrivals at the middle node, and occupations there."""
    cells = run["profile"]
    chosen = [cells[(len(cells) - 1) * i // 4] for i in range(5)]
    node = run["crossings"][len(run["crossings"]) // 2]
    total = run["histories"]
    return [
        run["transmission"],
        *np.ravel(chosen),
        node[0] / total,
        node[1] / total,
        node[2],
        node[4],
    ]


def compare(cases: dict[str, dict], row: Row, effort: Effort) -> None:
    """Worst ratio of histories/s, after the two were seen to agree."""
    ratios = {}
    for name, case in cases.items():
        pair = Pair(case)
        largest, *means = pair.agreement(effort.flights)
        if not largest < LARGEST_Z:
            raise FailedError(
                f"{name}: the kernel and its twin differ by {largest:.1f} standard errors; "
                f"transmission {means[0][0]:.5g} and {means[1][0]:.5g}"
            )
        histories = pair.histories_for(effort.flights / PIECES)
        with one_core():
            pair.kernel_speed(histories)
            speeds = pairs(
                partial(pair.kernel_speed, histories),
                partial(pair.twin_speed, histories),
                effort.pairs * PIECES,
            )
        ratios[name] = median_ratio(*speeds)
    worst = min(ratios, key=ratios.get)
    row.value = ratios[worst]
    row.note = "; ".join(f"{name} {ratio:.2f}" for name, ratio in ratios.items())
    row.details = {"ratios": ratios}
