"""What every Result is made of: estimates, parts of the resistance, and why a number is missing.

Elastic and relaxing runs share this. An observer stands for engine.observe.Observer or
engine.observe_relaxed.RelaxedObserver.
"""

from dataclasses import replace

import numpy as np

from carriersim import __version__
from carriersim.result import (
    Estimate,
    FourPoint,
    Heat,
    Part,
    PartSum,
    ProbeReading,
    Result,
    Thermal,
)

FEWEST_SIGMA = 5.0  # below this many standard errors a current has no breakdown

ROUNDING = 1e-11  # relative; a smaller standard error is none

UNEQUAL = "the contacts have different temperatures: a current flows without a bias"
LINEAR = "bias 0: linear response, quantities per unit of the bias"
NOT_ASKED = "noise was not asked for"
NO_DIRECTIONS = "for d = 2 and 3 only"
NO_WIDTH = "only in two dimensions, where the width is given"
NOBODY = "no carrier reached the other contact: ask for more histories"


class Numbers:
    """Values, errors and biases by name; nan and infinite values have no estimate."""

    def __init__(self, value, error, systematic=None):
        self.value, self.error, self.systematic = value, error, systematic or {}

    def one(self, key):
        return self.many(key)[0]

    def many(self, key):
        values, errors = np.ravel(self.value[key]), np.ravel(self.error[key])
        estimates = [_estimate(v, e) for v, e in zip(values, errors, strict=True)]
        if key not in self.systematic:
            return estimates
        biases = np.ravel(self.systematic[key])
        return [_biased(e, b) for e, b in zip(estimates, biases, strict=True)]


def _estimate(value, error):
    if not np.isfinite(value):
        return None
    if not np.isfinite(error):
        return Estimate(float(value), None)
    if error <= ROUNDING * abs(value):  # the batches agree: what is left is the sum's rounding
        error = 0.0
    return Estimate(float(value) + 0.0, float(error))


def _biased(estimate, bias):
    if estimate is None or not np.isfinite(bias):
        return estimate
    return replace(estimate, systematic=float(bias))


def _scaled(estimate, factor):
    """A multiple of an Estimate or None."""
    if estimate is None:
        return None
    size = abs(factor)
    return Estimate(
        estimate.value * factor,
        None if estimate.error is None else estimate.error * size,
        None if estimate.systematic is None else estimate.systematic * size,
    )


def common_reasons(channel, window, numbers):
    """Why some quantities are null in a run of any kind; keys are those of summary.json."""
    why = {"noise": NOT_ASKED}
    if channel.dimension == 1:
        why["long_channel"] = NO_DIRECTIONS
    if channel.dimension != 2 or channel.width_nm is None:
        why["resistance_width_ohm_um"] = NO_WIDTH
    if window.linear:
        why |= {"current_A": LINEAR, "heat_W": LINEAR, "lattice_power_W_per_nm": LINEAR}
        if window.same_temperature:
            why["thermal.heat_current_left_W"] = why["thermal.heat_current_right_W"] = LINEAR
    if not window.same_temperature:
        names = ("resistance_ohm", "resistance_width_ohm_um", "breakdown", "four_point")
        why |= dict.fromkeys(names, UNEQUAL)
        if not window.linear:
            why["transmission"] = UNEQUAL
    else:
        value, error = numbers.value["resistance"], numbers.error["resistance"]
        if not np.isfinite(value):
            why |= dict.fromkeys(
                (
                    "resistance_ohm",
                    "resistance_width_ohm_um",
                    "differential_resistance_ohm",
                    "breakdown",
                    "four_point",
                ),
                NOBODY,
            )
        elif not error < value / FEWEST_SIGMA:
            why["breakdown"] = "the current is below five standard errors: ask for more histories"
    return why


def make_result(problem, observer, totals, scenario, numbers, why, **others):
    """The Result of a run, without closed forms; others: what differs between kinds of run."""
    return Result(
        scenario=scenario,
        version=__version__,
        events=totals.flights,
        seconds=totals.seconds,
        iterations=totals.rounds,
        converged=totals.converged,
        stopped_by=totals.stopped_by,
        trouble=totals.trouble or None,
        linear_response=problem.window.linear,
        ballistic_resistance_ohm=float(observer.ballistic_ohm),
        **_quantities(problem, observer, numbers, why),
        limits=(),
        why=why,
        **others,
    )


def _quantities(problem, observer, numbers, why):
    """The estimates of a Result, None where `why` says that one has no meaning."""
    scenario = problem.scenario

    def known(key, make):
        return None if key in why else make()

    return {
        "transmission": known("transmission", lambda: numbers.one("transmission")),
        "current_A": known("current_A", lambda: numbers.one("current")),
        "conductance_S": numbers.one("conductance"),
        "resistance_ohm": known("resistance_ohm", lambda: numbers.one("resistance")),
        "resistance_width_ohm_um": known(
            "resistance_width_ohm_um",
            lambda: _scaled(numbers.one("resistance"), 1e-3 * scenario.channel.width_nm),
        ),
        "differential_resistance_ohm": numbers.one("differential"),
        "breakdown": known("breakdown", lambda: _breakdown(problem, observer, numbers)),
        "breakdown_sums": known("breakdown", lambda: _breakdown_sums(observer, numbers)),
        "four_point": known(
            "four_point", lambda: _four_points(scenario, numbers.many("four_point"))
        ),
        "probes": tuple(
            ProbeReading(p.position_nm, _scaled(e, observer.full))
            for p, e in zip(scenario.probes, numbers.many("probe"), strict=True)
        ),
        "heat_W": known(
            "heat_W",
            lambda: Heat(
                numbers.one("left_power"),
                numbers.one("right_power"),
                numbers.one("lattice_power"),
                tuple(numbers.many("probe_power")),
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


def _four_points(scenario, estimates):
    places = [p.position_nm for p in scenario.probes]
    first, second = np.triu_indices(len(places), 1)
    return tuple(
        FourPoint(places[a], places[b], e) for a, b, e in zip(first, second, estimates, strict=True)
    )


def _breakdown(problem, observer, numbers):
    """Parts from left to right: interfaces, scatterers and coupled probes, pieces by mechanism."""
    nodes = problem.nodes_nm
    length = nodes[-1]
    left, right = numbers.many("interface")
    jumps = dict(zip(np.flatnonzero(observer.jumps), numbers.many("jumps"), strict=True))
    names = _jump_names(problem, jumps)
    pieces = iter(_without_rounding(numbers.many("pieces"), numbers.value["resistance"]))
    cuts = observer.cuts()
    parts = [Part("left interface", "interface", left, position_nm=0.0)]
    for cut, following in zip(cuts, [*cuts[1:], None], strict=True):
        if cut in jumps:
            parts.append(Part(*names[cut], jumps[cut], position_nm=float(nodes[cut])))
        if following is None:
            break
        start, stop = float(nodes[cut]), float(nodes[following])
        for mechanism in observer.turning(cut) or ["ballistic"]:
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


def _breakdown_sums(observer, numbers):
    """All parts of a kind together, with errors of their own."""
    # Parts err together: a sum is known better than the parts' errors would add up to.
    estimates = _without_rounding(numbers.many("sums"), numbers.value["resistance"])
    return tuple(
        PartSum(kind, mechanism, len(jumps) + len(pieces), estimate)
        for ((kind, mechanism), (jumps, pieces)), estimate in zip(
            observer.groups.items(), estimates, strict=True
        )
    )


def _jump_names(problem, jumps):
    """(name, kind) of the part at each of the nodes where the potential jumps."""
    names, scatterers = {}, 0
    probes = {node: number for number, node in enumerate(problem.probe_node, start=1)}
    for node in jumps:
        if node == 0:
            names[node] = "left contact barrier", "point"
        elif node == problem.nodes_nm.size - 1:
            names[node] = "right contact barrier", "point"
        elif problem.is_scatterer[node]:
            scatterers += 1
            names[node] = f"scatterer {scatterers}", "point"
        else:
            names[node] = f"probe {probes[node]}", "probe"
    return names


def _without_rounding(pieces, resistance):
    """Pieces where nothing scatters have the resistance 0; differences of sums may leave 1e-16."""
    least = ROUNDING * resistance
    return [Estimate(0.0, 0.0) if abs(p.value) + (p.error or 0.0) < least else p for p in pieces]


def field_arrays(problem, observer, value, error):
    """The arrays of a Result from its fields and their errors by name."""
    edges = problem.cell_edges_nm
    if problem.space is not None:
        space = problem.space
        angles = np.degrees(np.arccos(space.planes.view_edges))
        value = value | {
            "view_nm": problem.nodes_nm[space.view_nodes],
            "direction_deg": 0.5 * (angles[1:] + angles[:-1]),
        }
    return value | {
        "x_nm": 0.5 * (edges[1:] + edges[:-1]),
        "cell_edges_nm": edges,
        "energy_meV": observer.grid.centres,
        "energy_edges_meV": observer.grid.edges,
        "errors": error,
    }
