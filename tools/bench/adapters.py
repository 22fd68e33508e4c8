"""The only place where the bench knows carriersim's own interfaces."""

import json
import math
import time

import numpy as np

LEVEL = {"energy_meV": [-10, 15, 40], "value": [0.05, 0.8, 0.05]}
"""A level in a barrier; at 100 K it lies 2 kT above the right contact."""


class NotThereError(Exception):
    """The program does not (yet) have what a row of the bench needs."""


def engine_flights(scenario_kwargs: dict, histories: int) -> tuple[int, float]:
    """Run the elastic d = 1 kernel on one thread, compiled beforehand.

    scenario_kwargs: length, path (backscattering), cells, seed, points ((position, transmission),
    ...), all in one unit of length, as `numpy_elastic.simulate` takes them. Returns the flights
    (defined as in twin_elastic.c) and the seconds of the kernel, its random numbers and its
    tallies included.
    """
    from carriersim.engine import flights, tallies
    from carriersim.engine.problem import build
    from carriersim.engine.solve import EVENT_LIMIT, compile_for, new_stream

    problem = build(_scenario(scenario_kwargs))
    compile_for(problem)
    stream = new_stream(scenario_kwargs["seed"], 0)
    goes_on = np.zeros(1, np.uint8)
    started = time.perf_counter()
    counts = tallies.empty_counts(problem)
    flights.fly(
        0, histories, np.uint64(0), problem.geometry, None, stream, counts, goes_on, EVENT_LIMIT
    )
    sample = tallies.reduce(problem, counts, histories)
    return sample.flights, time.perf_counter() - started


def engine_relative_errors(bias_in_kT: float, histories: int, seed: int = 1) -> dict[str, float]:
    """Relative standard errors at a bias of that many kT/e, with T(E) a table.

    A level in a barrier, 2 kT above the right contact: currents of both biases pass it, and the
    heat of the small one is no small difference of what flows above and below the Fermi level.
    (With a barrier that opens slowly it is, and that costs histories with any method.) At least
    the keys "R", "one mu" and "contact heat"; the same histories for every bias.
    """
    import carriersim

    scenario = _load(_small_bias(LEVEL, bias_in_kT, histories, seed))
    result = carriersim.simulate(scenario, workers=1)
    middle = result.x_nm.size // 2
    heat = result.heat_W.right_contact
    return {
        "R": result.resistance_ohm.error / result.resistance_ohm.value,
        "one mu": float(result.errors["mu_meV"][middle] / result.mu_meV[middle]),
        "contact heat": heat.error / abs(heat.value),
    }


def _small_bias(transmission: float | dict, bias_in_kT: float, histories: int, seed: int) -> dict:
    kT_meV = 8.617333262145e-2 * 100.0
    return {
        "channel": {"length_nm": 300},
        "contacts": {"bias_mV": bias_in_kT * kT_meV, "temperature_K": 100},
        "scattering": {
            "backscatter_path_nm": 200,
            "points": [{"position_nm": 120, "transmission": transmission}],
        },
        "simulation": {"histories": histories, "seed": seed, "cells": 20},
    }


class RelaxingKernel:
    """The relaxing d = 1 kernel on one thread, in frozen fields, with the left contact's source.

    What baths aim at comes from a short run, what phonons meet is the trial occupation.
    """

    def __init__(self, scenario: dict, histories: int):
        from carriersim.engine.deviation import FromReference
        from carriersim.engine.iterate import relax
        from carriersim.engine.problem import build
        from carriersim.engine.rounds import Rounds
        from carriersim.engine.solve import Goal, StopRequest
        from carriersim.engine.trial import solve_trial

        self.problem = build(_load(scenario))
        self.phonons = self.problem.relaxed.mechanisms.phonon_meV.size > 0
        trial = solve_trial(self.problem) if self.phonons else None
        deviation = FromReference(self.problem, trial)
        self.rounds = Rounds(self.problem, 1, StopRequest(), deviation)
        if not self.phonons:
            fields = relax(self.problem, Goal(None, histories, None), 1).fields
            self.rounds.fields.cells[:] = fields.cells.mean(axis=0)  # every batch meets the same

    def seconds(self, histories: int, batch: int = 0) -> float:
        """Processor time of one batch, its random numbers and its tallies included."""
        started = time.thread_time()
        self.rounds.run(batch, histories)
        return time.thread_time() - started

    def run(self, histories: int, batch: int) -> dict:
        """One batch, with the keys and units of what the twin prints."""
        result = self.rounds.run(batch, histories)
        mu = self.problem.window.mu_left_meV
        ends = result["cells"] / mu
        binned = result["field"].sum(axis=(0, 1)) * self.problem.relaxed.axis.step_meV / mu
        cells = ends.shape[0]
        return {
            "events": result["flights"],
            "transmission": result["current"] / mu,
            "energy_left": result["energy"][0] / mu,
            "energy_right": result["energy"][1] / mu,
            "heat": result["heat"].sum() / mu,
            "profile": [
                [c, *ends[c, :, 0], *ends[c, :, 1], binned[c]]
                for c in ((cells - 1) * i // 4 for i in range(5))
            ],
        }

    def for_twin(self) -> dict:
        """The same problem and fields in the order in which twin_relaxing.c reads them."""
        from carriersim.engine.mechanisms import FINE

        problem, relaxed = self.problem, self.problem.relaxed
        deviation, fields = self.rounds.deviation, self.rounds.fields
        frozen, _ = deviation.frozen(fields.cells[0], fields.probes[0])
        length, axis, m = problem.nodes_nm[-1], relaxed.axis, relaxed.mechanisms
        rate, quantum = (m.phonon_rate[0], m.phonon_meV[0]) if self.phonons else (0.0, 0.0)
        parts = {
            "sizes": [problem.cells, axis.bins, problem.nodes_nm.size - 2, FINE],
            "length": length,
            "axis": [axis.first_meV, axis.step_meV],
            "source": [problem.window.mu_left_meV, relaxed.setting.bath_kT],
            "rates": [problem.geometry.thickness.sum() / length, m.rates[0], m.rates[1], rate],
            "quantum": quantum,
            "edge": problem.nodes_nm * problem.cells / length,
            "transmission": problem.geometry.transmission,
            "frozen_mu": frozen.mu,
            "mu_step": frozen.mu_step,
        }
        if self.phonons:
            parts["reference"] = deviation.fine
            parts |= {"value": deviation.trial.value, "slope": deviation.trial.slope}
        return parts


def engine_relaxing_errors(
    transmission: float | dict, bias_in_kT: float, histories: int, seed: int = 1
) -> dict[str, float]:
    """As `engine_relative_errors`, with a kept bath along the whole channel."""
    from carriersim.engine.iterate import relax
    from carriersim.engine.problem import build
    from carriersim.engine.solve import Goal

    scenario = _small_bias(transmission, bias_in_kT, histories, seed)
    scenario["relaxation"] = {"mechanisms": [{"kind": "bath", "path_nm": 150, "direction": "kept"}]}
    problem = build(_load(scenario))
    totals = relax(problem, Goal(None, histories, None), 1)
    sums = totals.sums
    each = {
        "R": sums["current"],
        "one mu": sums["cells"][:, problem.cells // 2, :, 0].mean(axis=1),
        "contact heat": sums["energy"][:, 1],
    }
    # All batches have the same number of histories.
    return {
        name: float(value.std(ddof=1) / math.sqrt(value.size) / abs(value.mean()))
        for name, value in each.items()
    }


class SpaceKernel:
    """The elastic d = 3 kernel on one thread, compiled beforehand; case: as twin.space takes it."""

    def __init__(self, case: dict):
        from carriersim.engine.problem import build
        from carriersim.engine.solve import compile_for

        self.problem = build(_load(_space_scenario(case)))
        compile_for(self.problem)
        self.cells = case["cells"]

    def _sample(self, histories: int, batch: int):
        from carriersim.engine.directions import new_ray_stream
        from carriersim.engine.solve import kernel_of, offset_of

        stream, flag = new_ray_stream(1, batch), np.zeros(1, np.uint8)
        kernel = kernel_of(self.problem)
        started = time.thread_time()
        *_, sample = kernel(0, histories, offset_of(1, batch), stream, flag)
        return sample, time.thread_time() - started

    def seconds(self, histories: int) -> float:
        """Processor time of one batch, its random numbers and its tallies included."""
        return self._sample(histories, 0)[1]

    def run(self, histories: int, batch: int) -> list[float]:
        """The values that space._values takes out of what the twin prints."""
        sample, _ = self._sample(histories, batch)
        full = self.problem.functionals.filling[0]
        field = sample.cells[0] / histories / full
        places = [(field.shape[0] - 1) * i // 4 for i in range(5)]
        # The twin has no node in the middle unless a plane stands there; ours has one.
        drawn = self.problem.is_scatterer
        nodes = [0, *np.flatnonzero(drawn), drawn.size - 1]
        node = nodes[len(nodes) // 2]
        arriving = sample.rays["densities"][node, [0, 2]] / histories / full
        return [
            sample.transmitted[0] / histories,
            *field[places].ravel(),
            *(sample.arrivals[node] / histories / full),
            *arriving,
        ]


def _space_scenario(case: dict) -> dict:
    side = case.get("side", 0.0)
    channel = {"length_nm": case["length"], "dimension": 3}
    if side:
        channel |= {"width_nm": side, "height_nm": side}
        channel |= {"specularity": case.get("specularity", 0.0)}
    points = [
        {"position_nm": x, "transmission": t, "angular": "tunnel" if tunnel else "constant"}
        for x, t, tunnel in case.get("planes", ())
    ]
    return {
        "channel": channel,
        "contacts": {"bias_mV": 1, "temperature_K": 300},
        "scattering": {"mean_free_path_nm": case["path"], "points": points},
        "simulation": {"cells": case["cells"]},
    }


def _scenario(kwargs: dict):
    points = [{"position_nm": x, "transmission": t} for x, t in kwargs.get("points", ())]
    return _load(
        {
            "channel": {"length_nm": kwargs["length"]},
            "contacts": {"bias_mV": 1, "temperature_K": 300},
            "scattering": {"backscatter_path_nm": kwargs["path"], "points": points},
            "simulation": {"cells": kwargs["cells"]},
        }
    )


def _load(scenario: dict):
    try:
        from carriersim.scenario import read_text
    except ImportError as error:
        raise NotThereError(f"carriersim cannot be imported: {error}") from None

    return read_text(json.dumps(scenario))  # JSON is YAML


def engine_seconds(histories: int, workers: int) -> float:
    """Wall time of one run, d = 1, L/path = 20, without files and figures."""
    import carriersim

    scenario = {
        "channel": {"length_nm": 2000},
        "contacts": {"bias_mV": 1, "temperature_K": 300},
        "scattering": {"backscatter_path_nm": 100},
        "simulation": {"histories": histories},
    }
    loaded = _load(scenario)
    started = time.perf_counter()
    carriersim.simulate(loaded, workers=workers)
    return time.perf_counter() - started
