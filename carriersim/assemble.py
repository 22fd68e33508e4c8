"""Totals -> Result: every number of a run with its standard error."""

from dataclasses import replace

import numpy as np

from carriersim import limits
from carriersim.assemble_relaxed import assemble_relaxed
from carriersim.constants import BOLTZMANN_MEV_PER_K
from carriersim.engine.observe import Observer, departure_of, root_of
from carriersim.engine.observe_space import SpaceObserver
from carriersim.engine.trajectories import sample_trajectories
from carriersim.estimates import NOBODY, Numbers, common_reasons, field_arrays, make_result
from carriersim.jackknife import jackknife

MODES = "the number of modes depends on energy: where there are no states, none is occupied"
NO_ITERATION = "nothing is iterated in an elastic channel"


def assemble(problem, totals, scenario, endless=None):
    """Result of a finished run.

    scenario: the one to save with it, with the histories that were done. endless: what
    engine.endless.long_channel gave, in two and three dimensions. Raises nothing: what has no
    meaning is None, and `why` tells the reason.
    """
    make = _elastic if problem.relaxed is None else assemble_relaxed
    result = make(problem, totals, scenario)
    if endless is not None:
        found, why = endless
        result = replace(result, long_channel=found, why=result.why | why)
    rows = limits.compare(limits.limits_for(problem.scenario), result)
    return result.with_limits(rows)


def _elastic(problem, totals, scenario):
    observer = Observer(problem) if problem.space is None else SpaceObserver(problem)
    batches = {"histories": totals.histories.astype(float)}
    responses = {"transmitted": totals.transmitted, "arrivals": totals.arrivals}
    value, error = jackknife(observer.scalars, batches | responses | totals.rays)
    for key in ("current", "conductance", "resistance", "differential", "transmission"):
        error[key] = _not_below_one_event(error[key], value[key], totals, problem)
    # A jump or a piece in which nobody was turned back is not known to be 0: one carrier's worth.
    one = abs(value["resistance"]) / totals.histories.sum()
    error["jumps"], error["sums"] = (np.maximum(error[key], one) for key in ("jumps", "sums"))
    if not problem.transparent:  # nor is what a probe reads where all batches agree
        error["probe"] = np.maximum(error["probe"], 1.0 / totals.histories.sum())
        error["four_point"] = np.maximum(error["four_point"], one)
    scatters = observer.piece_scatters()
    error["pieces"] = np.where(scatters, np.maximum(error["pieces"], one), error["pieces"])
    numbers = Numbers(value, error)
    return make_result(
        problem,
        observer,
        totals,
        scenario,
        numbers,
        _reasons(problem, numbers),
        histories=int(totals.histories.sum()),
        residual=None,
        trajectories=sample_trajectories(problem, problem.scenario.simulation.trajectories),
        **_fields(problem, observer, totals, batches, numbers),
    )


def _not_below_one_event(error, value, totals, problem):
    """At least the error that one more carrier going the rarer way would make.

    Batches that agree exactly because nobody went that way would claim certainty.
    """
    done = totals.histories.sum()
    rarer = min(totals.reached, done - totals.reached)
    if problem.transparent or rarer >= 25 or totals.reached == 0:
        return error
    return max(error, abs(value) * np.sqrt(rarer + 1.0) / totals.reached)


def _reasons(problem, numbers):
    """Why some quantities are null; keys are those of summary.json."""
    window = problem.window
    why = common_reasons(problem.scenario.channel, window, numbers)
    why |= dict.fromkeys(("residual", "drift", "drift_sigma"), NO_ITERATION)
    if not np.isfinite(numbers.value["seebeck"]):
        reason = "no bias without current was found in the energies covered"
        if window.mean_temperature_K == 0.0:
            reason = "not defined at 0 K"
        elif numbers.value["conductance"] == 0.0:
            reason = NOBODY
        why |= {"thermal.seebeck_V_per_K": reason, "thermal.conductance_W_per_K": reason}
    if problem.functionals.energy is None:
        names = ("carrier_temperature_plus_K", "carrier_temperature_minus_K")
        why |= dict.fromkeys((*names, "carrier_temperature_K", "departure"), MODES)
    return why


def _fields(problem, observer, totals, batches, numbers):
    """Profiles in every cell and occupations on the output grid, with errors."""
    value, error = jackknife(observer.profiles, batches | {"cells": totals.cells})
    if problem.space is not None:
        value["current_by_direction"] = numbers.value["by_direction"]
        error["current_by_direction"] = numbers.error["by_direction"]
    right, drive = observer.occupation_drive()
    if problem.bins is None:
        occupations, errors, departure, departure_error = _one_bin_fields(
            problem, observer, totals, batches, right, drive
        )
    else:
        occupations, errors, departure, departure_error = _binned_fields(
            problem, observer, totals, value, right, drive
        )
    names = ("f_plus", "f_minus")
    value |= dict(zip(names, occupations, strict=True))
    error |= dict(zip(names, errors, strict=True))
    value["departure"], error["departure"] = departure, departure_error
    power = np.full(problem.cells, np.nan if problem.window.linear else 0.0)
    value["lattice_power_W_per_nm"] = error["lattice_power_W_per_nm"] = power
    return field_arrays(problem, observer, value, error)


def _one_bin_fields(problem, observer, totals, batches, right, drive):
    """Occupations where one response serves every energy: f = F_R + (F_L - F_R) g."""
    full = problem.functionals.filling[0]

    def responses(sums):
        g = sums["cells"][0] / sums["histories"] / full
        return {"g": g, "mean": g.mean(axis=-1)}

    value, error = jackknife(responses, batches | {"cells": totals.cells})
    g, g_error = value["g"], error["g"]
    # The departure is a smooth function of one number per cell: no replicates of all energies.
    mean, mean_error = value["mean"], error["mean"]
    departure = _departure_from(problem, observer, mean)
    ends = [_departure_from(problem, observer, mean + side * mean_error) for side in (1, -1)]
    departure_error = 0.5 * np.abs(ends[0] - ends[1])
    occupations = [right[:, None] + drive[:, None] * g[:, i] for i in (0, 1)]
    errors = [np.abs(drive)[:, None] * g_error[:, i] for i in (0, 1)]
    return occupations, errors, departure, departure_error


def _departure_from(problem, observer, g):
    grid, window = observer.grid, problem.window
    number, energy = problem.functionals.number[0] * g, problem.functionals.energy[0] * g
    k = BOLTZMANN_MEV_PER_K
    background = (np.pi * k * window.temperature_right_K) ** 2 / 6
    squared = 6.0 / np.pi**2 * (background + energy - 0.5 * number**2)
    kelvin = np.sqrt(np.maximum(squared, 0.0)) / k
    right, drive = observer.state()
    f = right[:, None] + drive[:, None] * g
    square, _ = departure_of(f, grid.centres, np.diff(grid.edges), number, kelvin)
    return np.sqrt(square)


def _binned_fields(problem, observer, totals, value, right, drive):
    """Occupations bin by bin; their noise adds to the departure, so its variance is taken off."""
    n, k = float(totals.histories.sum()), totals.samples
    mean = totals.field_sum / n
    variance = np.maximum(totals.field_square - totals.field_sum**2 / n, 0.0) / (k - 1) / n
    # A bin that few visit would claim certainty: at least what one more visitor would change.
    least = 1.0 / (n * problem.share)[:, None]
    spread = np.repeat(np.maximum(np.sqrt(variance[:2]), least), observer.finer, axis=1)
    in_bins = variance[2]
    mean, variance = (np.repeat(a, observer.finer, axis=1) for a in (mean, variance))
    occupations = [right[:, None] + drive[:, None] * mean[i] for i in (0, 1)]
    errors = [np.abs(drive)[:, None] * spread[i] for i in (0, 1)]
    if problem.functionals.energy is None:
        nothing = np.full(problem.cells, np.nan)
        return occupations, errors, nothing, nothing
    widths = np.diff(observer.grid.edges)
    right, drive = observer.state()
    f = right[:, None] + drive[:, None] * mean[2]
    noise = drive[:, None] ** 2 * variance[2]
    kelvin = value["carrier_temperature_K"]
    number = (totals.cells.sum(axis=0)[1] / n).mean(axis=-1)
    square, derivative = departure_of(f, observer.grid.centres, widths, number, kelvin)
    scale = np.where(kelvin > 0.0, BOLTZMANN_MEV_PER_K * kelvin, 1.0)
    square = square - np.einsum("ec,e->c", noise, widths) / scale
    # The parts of one bin err together.
    pull = (derivative * drive[:, None]).reshape(-1, observer.finer, problem.cells).sum(axis=1)
    error = np.sqrt(np.einsum("bc,bc->c", pull**2, in_bins))
    return occupations, errors, *root_of(square, error)
