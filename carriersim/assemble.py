"""Totals -> Result: every number of a run with its standard error."""

import numpy as np

from carriersim import __version__, limits
from carriersim.constants import BOLTZMANN_MEV_PER_K
from carriersim.engine.observe import Observer, departure_of
from carriersim.jackknife import jackknife
from carriersim.result import (
    Estimate,
    FourPoint,
    Heat,
    Part,
    ProbeReading,
    Result,
    Thermal,
)

FEWEST_SIGMA = 5.0  # below this many standard errors a current has no breakdown

ROUNDING = 1e-11  # relative; a smaller standard error is none

UNEQUAL = "the contacts have different temperatures: a current flows without a bias"
LINEAR = "bias 0: linear response, quantities per unit of the bias"
MODES = "the number of modes depends on energy: where there are no states, none is occupied"
NOT_ASKED = "noise was not asked for"
NO_ITERATION = "nothing is iterated in an elastic channel"


def assemble(problem, totals, scenario):
    """Result of a finished run.

    scenario: the one to save with it, with the histories that were done. Raises nothing: what has
    no meaning is None, and `why` tells the reason.
    """
    observer = Observer(problem)
    batches = {"histories": totals.histories.astype(float)}
    value, error = jackknife(
        observer.scalars,
        batches | {"transmitted": totals.transmitted, "arrivals": totals.arrivals},
    )
    for key in ("current", "conductance", "resistance", "differential", "transmission"):
        error[key] = _not_below_one_event(error[key], value[key], totals, problem)
    # A jump or a piece in which nobody was turned back is not known to be 0: one carrier's worth.
    one = abs(value["resistance"]) / totals.histories.sum()
    error["jumps"] = np.maximum(error["jumps"], one)
    scatters = observer.piece_scatters()
    error["pieces"] = np.where(scatters, np.maximum(error["pieces"], one), error["pieces"])
    numbers = _Numbers(value, error)
    why = _reasons(problem, numbers)
    result = Result(
        scenario=scenario,
        version=__version__,
        histories=int(totals.histories.sum()),
        events=totals.flights,
        seconds=totals.seconds,
        iterations=totals.rounds,
        converged=totals.converged,
        residual=None,
        stopped_by=totals.stopped_by,
        linear_response=problem.window.linear,
        ballistic_resistance_ohm=float(observer.ballistic_ohm),
        **_quantities(problem, observer, numbers, why),
        limits=(),
        why=why,
        **_fields(problem, observer, totals, batches),
    )
    rows = limits.compare(limits.limits_for(problem.scenario), result)
    return result.with_limits(rows)


class _Numbers:
    """Values and errors by name; nan and infinite values have no estimate."""

    def __init__(self, value, error):
        self.value, self.error = value, error

    def one(self, key):
        return _estimate(self.value[key], self.error[key])

    def many(self, key):
        pairs = zip(np.ravel(self.value[key]), np.ravel(self.error[key]), strict=True)
        return [_estimate(v, e) for v, e in pairs]


def _estimate(value, error):
    if not np.isfinite(value):
        return None
    if not np.isfinite(error):
        return Estimate(float(value), None)
    if error <= ROUNDING * abs(value):  # the batches agree: what is left is the sum's rounding
        error = 0.0
    return Estimate(float(value) + 0.0, float(error))


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
    why = {"noise": NOT_ASKED}
    why |= dict.fromkeys(("residual", "drift", "drift_sigma"), NO_ITERATION)
    window = problem.window
    if window.linear:
        why |= {"current_A": LINEAR, "heat_W": LINEAR, "lattice_power_W_per_nm": LINEAR}
        if window.same_temperature:
            why["thermal.heat_current_left_W"] = why["thermal.heat_current_right_W"] = LINEAR
    if not window.same_temperature:
        why |= {"resistance_ohm": UNEQUAL, "breakdown": UNEQUAL, "four_point": UNEQUAL}
        if not window.linear:
            why["transmission"] = UNEQUAL
    else:
        value, error = numbers.value["resistance"], numbers.error["resistance"]
        if not np.isfinite(value):
            nobody = "no carrier reached the other contact: ask for more histories"
            why |= dict.fromkeys(
                ("resistance_ohm", "differential_resistance_ohm", "breakdown", "four_point"), nobody
            )
        elif not error < value / FEWEST_SIGMA:
            why["breakdown"] = "the current is below five standard errors: ask for more histories"
    if not np.isfinite(numbers.value["seebeck"]):
        reason = "no bias without current was found in the energies covered"
        if window.mean_temperature_K == 0.0:
            reason = "not defined at 0 K"
        elif numbers.value["conductance"] == 0.0:
            reason = "no carrier reached the other contact: ask for more histories"
        why |= {"thermal.seebeck_V_per_K": reason, "thermal.conductance_W_per_K": reason}
    if problem.functionals.energy is None:
        names = ("carrier_temperature_plus_K", "carrier_temperature_minus_K")
        why |= dict.fromkeys((*names, "carrier_temperature_K", "departure"), MODES)
    return why


def _quantities(problem, observer, numbers, why):
    """The named quantities of a Result; None where `why` has the key."""

    def known(key, make):
        return None if key in why else make()

    zero = Estimate(0.0, 0.0)
    scenario = problem.scenario
    four_point = numbers.many("four_point")
    return {
        "transmission": known("transmission", lambda: numbers.one("transmission")),
        "current_A": known("current_A", lambda: numbers.one("current")),
        "conductance_S": numbers.one("conductance"),
        "resistance_ohm": known("resistance_ohm", lambda: numbers.one("resistance")),
        "differential_resistance_ohm": numbers.one("differential"),
        "breakdown": known("breakdown", lambda: _breakdown(problem, observer, numbers)),
        "four_point": known("four_point", lambda: _four_points(scenario, four_point)),
        "probes": tuple(
            ProbeReading(p.position_nm, _scaled(e, observer.full))
            for p, e in zip(scenario.probes, numbers.many("probe"), strict=True)
        ),
        "heat_W": known(
            "heat_W",
            lambda: Heat(
                numbers.one("left_power"),
                numbers.one("right_power"),
                zero,
                tuple(zero for _ in scenario.probes),
            ),
        ),
        "thermal": Thermal(
            numbers.one("thermal_conductance"),
            numbers.one("seebeck"),
            known("thermal.heat_current_left_W", lambda: _scaled(numbers.one("left_power"), -1.0)),
            known("thermal.heat_current_right_W", lambda: numbers.one("right_power")),
        ),
        "noise": None,
    }


def _scaled(estimate, factor):
    return Estimate(estimate.value * factor, estimate.error * abs(factor))


def _four_points(scenario, estimates):
    places = [p.position_nm for p in scenario.probes]
    first, second = np.triu_indices(len(places), 1)
    return tuple(
        FourPoint(places[a], places[b], e) for a, b, e in zip(first, second, estimates, strict=True)
    )


def _breakdown(problem, observer, numbers):
    """Parts from left to right: interfaces, point scatterers, pieces by mechanism."""
    nodes = problem.nodes_nm
    length = nodes[-1]
    left, right = numbers.many("interface")
    jumps = dict(zip(np.flatnonzero(problem.is_scatterer), numbers.many("jumps"), strict=True))
    pieces = iter(_without_rounding(numbers.many("pieces"), numbers.value["resistance"]))
    cuts = observer.cuts()
    parts = [Part("left interface", "interface", left, position_nm=0.0)]
    scatterers = 0
    for cut, following in zip(cuts, [*cuts[1:], None], strict=True):
        if cut in jumps:
            name = {0: "left contact barrier", nodes.size - 1: "right contact barrier"}.get(cut)
            if name is None:
                scatterers += 1
                name = f"scatterer {scatterers}"
            parts.append(Part(name, "point", jumps[cut], position_nm=float(nodes[cut])))
        if following is None:
            break
        start, stop = float(nodes[cut]), float(nodes[following])
        for mechanism in [p.name for p in problem.segment_paths[cut]] or ["ballistic"]:
            parts.append(
                Part(
                    f"{mechanism} {start:g} to {stop:g} nm",
                    "piece",
                    next(pieces),
                    from_nm=start,
                    to_nm=stop,
                    mechanism=mechanism,
                )
            )
    parts.append(Part("right interface", "interface", right, position_nm=float(length)))
    return tuple(parts)


def _without_rounding(pieces, resistance):
    """Pieces where nothing scatters have the resistance 0; differences of sums may leave 1e-16."""
    least = ROUNDING * resistance
    return [Estimate(0.0, 0.0) if abs(p.value) + p.error < least else p for p in pieces]


def _fields(problem, observer, totals, batches):
    """Profiles in every cell and occupations on the output grid, with errors."""
    value, error = jackknife(observer.profiles, batches | {"cells": totals.cells})
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
    edges = problem.cell_edges_nm
    return value | {
        "x_nm": 0.5 * (edges[1:] + edges[:-1]),
        "cell_edges_nm": edges,
        "energy_meV": observer.grid.centres,
        "energy_edges_meV": observer.grid.edges,
        "errors": error,
    }


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
    departure = np.sqrt(np.maximum(square, 0.0))
    # d sqrt(s) = ds / (2 sqrt(s)); near zero the root of the error bounds it instead.
    bound = 2.0 * np.maximum(departure, np.sqrt(error))
    departure_error = np.divide(error, bound, out=np.zeros_like(error), where=bound > 0.0)
    return occupations, errors, departure, departure_error
