"""The relaxing kernel against its C twin: cases, agreement, speed."""

import math
import statistics
from functools import partial

import numpy as np

import twin
from adapters import RelaxingKernel
from measure import median_ratio, one_core, pairs
from rows import Effort, FailedError, Row

FIELD_HISTORIES = 300_000
"""Histories of the run that gives the frozen fields."""
PIECES = 5
"""Pairs are so much shorter and so many times more: other work on the machine comes in spells."""
RUNS = 32
LARGEST_Z = 4.5  # 29 values from 32 runs of both: beyond it by chance once in 1000 times


def _bath(direction: str) -> dict:
    """L/lam = 2, a path of L/4, one scatterer, 200 cells, about 200 bins."""
    return {
        "channel": {"length_nm": 400},
        "contacts": {"bias_mV": 100, "temperature_K": 300},
        "scattering": {
            "backscatter_path_nm": 200,
            "points": [{"position_nm": 160, "transmission": 0.5}],
        },
        "relaxation": {
            "mechanisms": [{"kind": "bath", "path_nm": 100, "direction": direction}],
        },
        "simulation": {"cells": 200, "energy_bins": 200},
    }


CASES = {
    "kept bath": _bath("kept"),
    "optical phonon": {
        "channel": {"length_nm": 500},
        "contacts": {"bias_mV": 400, "temperature_K": 300},
        "scattering": {"backscatter_path_nm": 300},
        "relaxation": {
            "mechanisms": [{"kind": "optical_phonon", "path_nm": 15, "energy_meV": 160}],
        },
        "simulation": {"cells": 200, "energy_bins": 200},
    },
    "randomised bath": _bath("randomised"),
}


class Pair:
    """The kernel and its twin on one case, with the same frozen fields."""

    def __init__(self, name: str):
        self.name = name
        self.kernel = RelaxingKernel(CASES[name], FIELD_HISTORIES)
        self.file = twin.problem_file(self.kernel.for_twin())
        self.events_per_history = self._twin(10_000, 0)["events"] / 10_000

    def _twin(self, histories: int, seed: int) -> dict:
        return twin.relaxing(self.file, histories, seed)

    def histories_for(self, events: float) -> int:
        return max(1, round(events / self.events_per_history))

    # Both return histories per second of processor time: the kernel may come to need fewer events.

    def kernel_speed(self, histories: int) -> float:
        return histories / self.kernel.seconds(histories)

    def twin_speed(self, histories: int) -> float:
        return histories / self._twin(histories, 1)["seconds"]

    def agreement(self, events: float) -> dict:
        """Largest distance of the two in standard errors over all that the twin prints."""
        histories = self.histories_for(events / RUNS)
        kernel = [self.kernel.run(histories, batch) for batch in range(RUNS)]
        other = [self._twin(histories, seed) for seed in range(RUNS)]
        self.events_per_history = sum(run["events"] for run in other) / (RUNS * histories)
        values = [np.array([_values(run) for run in runs]) for runs in (kernel, other)]
        means = [value.mean(axis=0) for value in values]
        errors = [value.std(axis=0, ddof=1) / math.sqrt(RUNS) for value in values]
        z = np.abs(means[0] - means[1]) / np.hypot(*errors)
        return {
            "largest_z": float(z.max()),
            "transmission": [
                [float(m[0]), float(e[0])] for m, e in zip(means, errors, strict=True)
            ],
            "heat_meV": [[float(m[1]), float(e[1])] for m, e in zip(means, errors, strict=True)],
            "events_per_history": [
                sum(run["events"] for run in runs) / (RUNS * histories) for runs in (kernel, other)
            ],
        }


def _values(run: dict) -> list[float]:
    ends = [value for entry in run["profile"] for value in entry[1:]]
    return [run["transmission"], run["heat"], run["energy_left"], run["energy_right"], *ends]


def _both(estimates: list) -> str:
    return " and ".join(f"{value:.5g} +- {error:.2g}" for value, error in estimates)


def agree(pair: Pair, events: float) -> dict:
    """Refuse to go on where the kernel and its twin find different currents, heats or profiles."""
    found = pair.agreement(events)
    if not found["largest_z"] < LARGEST_Z:
        raise FailedError(
            f"{pair.name}: the kernel and its twin differ by {found['largest_z']:.1f} standard "
            f"errors; transmission {_both(found['transmission'])}, heat {_both(found['heat_meV'])}"
        )
    return found


def verify(histories: int = 50_000, seeds: int = 64) -> bool:
    """Hold the twin alone against the series law, within 4 standard errors, and energy to rounding.

    Neither bath changes the law but for 1/(2 path) that a randomised one adds to 1/lam.
    """
    good = True
    for name, thickness in (("kept bath", 2.0), ("randomised bath", 4.0)):
        file = twin.problem_file(RelaxingKernel(CASES[name], 1).for_twin())
        runs = [twin.relaxing(file, histories, seed) for seed in range(seeds)]
        found = np.array([run["transmission"] for run in runs])
        mean, error = found.mean(), found.std(ddof=1) / math.sqrt(seeds)
        expected = 1 / (1 + thickness + 0.5 / 0.5)
        rest = max(abs(r["energy_left"] - r["energy_right"] - r["heat"]) for r in runs)
        good &= abs(mean - expected) < 4 * error and rest < 1e-9
        print(
            f"{name}, C: T = {mean:.5f} +- {error:.5f}, expected {expected:.5f}; "
            f"energy that is missing {rest:.1e} meV per history"
        )
    return good


def compare(row: Row, effort: Effort) -> None:
    """The smallest ratio of the speeds over the cases, where both find the same."""
    notes = []
    with one_core():
        for name in CASES:
            pair = Pair(name)
            found = agree(pair, 5 * effort.flights)
            histories = pair.histories_for(effort.flights / PIECES)
            above, below = pairs(
                partial(pair.kernel_speed, histories),
                partial(pair.twin_speed, histories),
                PIECES * effort.pairs,
            )
            ratio = median_ratio(above, below)
            million = pair.events_per_history / 1e6
            speeds = [statistics.median(rates) * million for rates in (above, below)]
            notes.append(f"{name}: {ratio:.2f} ({speeds[0]:.3g} / {speeds[1]:.3g})")
            row.details[name] = {"ratio": ratio, "histories_per_s": [above, below], **found}
    row.value = min(entry["ratio"] for entry in row.details.values())
    row.note = "; ".join(notes) + " million events/s"
