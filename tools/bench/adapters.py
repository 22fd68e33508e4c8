"""The only place where the bench knows carriersim's own interfaces."""

import json
import time

import numpy as np


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

    kT_meV = 8.617333262145e-2 * 100.0
    scenario = _load(
        {
            "channel": {"length_nm": 300},
            "contacts": {"bias_mV": bias_in_kT * kT_meV, "temperature_K": 100},
            "scattering": {
                "backscatter_path_nm": 200,
                "points": [
                    {
                        "position_nm": 120,
                        "transmission": {"energy_meV": [-10, 15, 40], "value": [0.05, 0.8, 0.05]},
                    }
                ],
            },
            "simulation": {"histories": histories, "seed": seed, "cells": 20},
        }
    )
    result = carriersim.simulate(scenario, workers=1)
    middle = result.x_nm.size // 2
    heat = result.heat_W.right_contact
    return {
        "R": result.resistance_ohm.error / result.resistance_ohm.value,
        "one mu": float(result.errors["mu_meV"][middle] / result.mu_meV[middle]),
        "contact heat": heat.error / abs(heat.value),
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
