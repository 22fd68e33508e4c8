"""Totals of a relaxing run -> Result."""

import numpy as np

from carriersim.constants import BOLTZMANN_MEV_PER_K
from carriersim.engine.observe import departure_of, group_sums, root_of
from carriersim.engine.observe_relaxed import (
    RelaxedObserver,
    batches_of,
    noise_bias,
)
from carriersim.engine.observe_space import RelaxedSpaceObserver
from carriersim.estimates import Numbers, common_reasons, field_arrays, make_result
from carriersim.fermi import mean_occupation
from carriersim.jackknife import jackknife

NOT_ALONG = (
    "with relaxation energy leaves the carriers on the way: no one heat current belongs to the "
    "channel"
)
NO_ROOT = "with relaxation it needs a run of its own at the bias without current"
NO_SLOPE = "it needs a run of its own that follows a small change of the bias"
NO_SLOPE_YET = "in d = 2, 3 not computed yet where relaxation depends on energy"
NOT_IN_EQUILIBRIUM = (
    "bias 0 while temperatures differ: this run holds the response to a bias, not the state itself"
)
TOO_EARLY = "stopped before three windows of rounds were complete"


def assemble_relaxed(problem, totals, scenario):
    """Result of a finished run with relaxation or coupled probes, without closed forms."""
    kind = RelaxedObserver if problem.space is None else RelaxedSpaceObserver
    observer = kind(problem, totals.field_sum)
    batches = batches_of(totals)
    value, error = jackknife(observer.scalars, batches | _tangent(totals))
    _widen(problem, observer, totals, value, error)
    numbers = Numbers(value, error, _systematic(problem, observer, totals, value))
    return make_result(
        problem,
        observer,
        totals,
        scenario,
        numbers,
        _reasons(problem, observer, totals, numbers),
        histories=totals.all_histories,
        residual=totals.residual,
        drift=totals.drift or None,
        drift_sigma=totals.residual,
        **_fields(problem, observer, totals, batches, numbers),
    )


def _tangent(totals):
    """The sums of the run that gives dI/dV, where there was one."""
    tangent = totals.tangent
    if tangent is None:
        return {}
    return {
        "tangent": tangent.sums["current"],
        "tangent_histories": tangent.histories.astype(float),
    }


def _widen(problem, observer, totals, value, error):
    """Add to the errors what the batches' spread doesn't show.

    Where nobody was turned back, or everybody, batches agree: one carrier's worth. And a piece is
    split at the energies of the net flux, which is known for windows only.
    """
    one = 1.0 / totals.histories.sum()
    resistance = abs(value["resistance"])
    turning = [observer.turning(node) for node, _ in observer.pieces]
    scatters = np.array([bool(names) for names in turning for _ in names or [None]])
    if scatters.any() or observer.jumps.any():
        for key in ("current", "conductance", "resistance", "differential", "transmission"):
            error[key] = np.maximum(error[key], one * np.abs(value[key]))
        error["probe"] = np.maximum(error["probe"], one)
        error["four_point"] = np.maximum(error["four_point"], one * resistance)
    error["jumps"] = np.maximum(error["jumps"], one * resistance)
    split = _split_error(problem, observer, totals, value["resistance"])
    pieces = np.hypot(error["pieces"], split)
    parts = {"jumps": np.zeros_like(error["jumps"]), "pieces": split + np.zeros_like(pieces)}
    sums = np.hypot(error["sums"], group_sums(observer.groups.values(), parts))
    error["sums"] = np.maximum(sums, one * resistance)
    error["pieces"] = np.where(scatters, np.maximum(pieces, one * resistance), pieces)


def _split_error(problem, observer, totals, resistance):
    """Error of the pieces from the energies of the net flux: the spread over windows."""
    windows = totals.windows
    if len(windows) < 2:
        return 0.0
    sums = {key: array.sum(axis=0) for key, array in batches_of(totals).items()}
    pieces = np.array(
        [type(observer)(problem, x.field_sum).parts(sums, resistance)["pieces"] for x in windows]
    )
    weight = np.array([float(x.histories.sum()) for x in windows])
    mean = weight @ pieces / weight.sum()
    square = weight @ (pieces - mean) ** 2 / (len(windows) - 1)
    return np.sqrt(square / totals.histories.sum())


def _systematic(problem, observer, totals, value):
    """The bias that noisy frozen fields leave in currents and powers, by name."""

    def function(sums):
        return observer.powers(sums) | {"flux": sums["current"] / sums["histories"]}

    batches = batches_of(totals)
    values = function({key: array.sum(axis=0) for key, array in batches.items()})
    bias = noise_bias(problem, totals, function, values)
    if "flux" not in bias:
        return {}
    flux = bias.pop("flux") / np.abs(values["flux"]) if values["flux"] else np.nan
    names = ("current", "conductance", "resistance", "differential", "transmission")
    return bias | {name: flux * np.abs(value[name]) for name in names}


def _reasons(problem, observer, totals, numbers):
    """Why some quantities are null; keys are those of summary.json."""
    why = common_reasons(problem.scenario.channel, problem.window, numbers)
    why |= {"thermal.conductance_W_per_K": NOT_ALONG, "thermal.seebeck_V_per_K": NO_ROOT}
    if problem.window.linear:
        why |= {key: why["heat_W"] for key in _HEAT_CURRENTS}
        if not observer.in_equilibrium():
            why |= dict.fromkeys((*_TEMPERATURES, "departure"), NOT_IN_EQUILIBRIUM)
    if not np.isfinite(numbers.value["conductance"]):
        reason = NO_SLOPE if problem.space is None else NO_SLOPE_YET
        why |= dict.fromkeys(("conductance_S", "differential_resistance_ohm"), reason)
    elif not np.isfinite(numbers.value["differential"]):
        why.setdefault("differential_resistance_ohm", "no current flows: ask for more histories")
    if totals.residual is None:
        why |= dict.fromkeys(("residual", "drift", "drift_sigma"), TOO_EARLY)
    elif not totals.drift:
        why["drift"] = "nothing drifts"
    return why


_HEAT_CURRENTS = ("thermal.heat_current_left_W", "thermal.heat_current_right_W")
_TEMPERATURES = (
    "carrier_temperature_plus_K",
    "carrier_temperature_minus_K",
    "carrier_temperature_K",
)


def _fields(problem, observer, totals, batches, numbers):
    """Profiles in every cell and occupations on the output grid, with errors."""
    sums = {key: batches[key] for key in ("histories", "cells", "heat")}
    value, error = jackknife(observer.profiles, sums)
    if problem.space is not None:
        value["current_by_direction"] = numbers.value["by_direction"]
        error["current_by_direction"] = numbers.error["by_direction"]
    n = float(totals.histories.sum())
    mean = totals.field_sum / n
    mean = np.concatenate([mean, mean.mean(axis=0, keepdims=True)])
    variance = totals.field_variance
    # What a single particle that crosses a cell adds to a bin there.
    one = totals.strength / n / problem.relaxed.axis.step_meV
    spread = np.hypot(np.maximum(np.sqrt(variance), one), _inside_bins(mean))
    occupation = observer.occupation(mean)
    spread = np.repeat(spread, observer.finer, axis=-2)
    for i, name in enumerate(("f_plus", "f_minus")):
        value[name], error[name] = occupation[i], spread[i]
    value["departure"], error["departure"] = _departure(
        observer, mean[2], variance[2], value["mu_meV"], value["carrier_temperature_K"]
    )
    return field_arrays(problem, observer, value, error)


def _inside_bins(deviation):
    """How far f at one energy may lie from what bins tell: a bend of f inside a bin, (.., B, C).

    Means over bins are free of it. A parabola is at most 1/12 of its second difference away from
    the straight line of the same mean.
    """
    padded = np.pad(deviation, ((0, 0), (1, 1), (0, 0)))
    return np.abs(np.diff(padded, n=2, axis=1)) / 12.0


def _departure(observer, deviation, variance, mu_meV, kelvin):
    """Distance from local equilibrium and its error; noise adds to it, so it is taken off."""
    if observer.window.linear:
        nothing = 0.0 if observer.in_equilibrium() else np.nan
        return np.full_like(kelvin, nothing), np.full_like(kelvin, nothing)
    edges = observer.edges_meV
    centres, widths = 0.5 * (edges[1:] + edges[:-1]), np.diff(edges)
    f = observer.relaxed.reference[:, None] + deviation
    local = mean_occupation(edges, mu_meV, kelvin)
    square, derivative = departure_of(f, centres, widths, mu_meV, kelvin, local)
    scale = np.where(kelvin > 0.0, BOLTZMANN_MEV_PER_K * kelvin, 1.0)
    square = square - np.einsum("ec,e->c", variance, widths) / scale
    return root_of(square, np.sqrt(np.einsum("ec,ec->c", derivative**2, variance)))
