"""Which number of a Result a closed form belongs to; None where the run has none.

Each function ends in the Result: what comes before is bound with `functools.partial`.
"""

from math import isclose, isfinite

import numpy as np

from carriersim.limits.formulas import wiedemann_franz_ratio
from carriersim.result import Estimate


def attribute(path, result):
    """The Estimate under a dotted name."""
    found = result
    for name in path.split("."):
        found = getattr(found, name) if found is not None else None
    return found


def ballistic_resistance(result):
    """The ballistic resistance, which the run has without error."""
    return Estimate(result.ballistic_resistance_ohm, 0.0)


def part_at(kind, place_nm, result):
    """The interface or point scatterer at a place."""
    for part in result.breakdown or ():
        if part.kind == kind and _same_place(part.position_nm, place_nm):
            return part.resistance_ohm
    return None


def piece(from_nm, to_nm, mechanism, result):
    """The piece between two places that belongs to a mechanism; None is the only one there."""
    for part in result.breakdown or ():
        if part.kind == "piece" and mechanism in (None, part.mechanism):
            if _same_place(part.from_nm, from_nm) and _same_place(part.to_nm, to_nm):
                return part.resistance_ohm
    return None


def _same_place(a, b):
    return a is not None and isclose(a, b, rel_tol=1e-9)


def sum_of_kind(kind, result):
    """The sum over the parts of one kind; they are correlated, so the error is an upper bound.

    The smaller of two bounds: the errors of these parts added up, or that of R and those of all the
    other parts. Without any error the sum has none.
    """
    if not result.breakdown:
        return None
    parts = [(part.kind == kind, part.resistance_ohm) for part in result.breakdown]
    if any(estimate is None for _, estimate in parts):
        return None
    value = sum(estimate.value for own, estimate in parts if own)
    if any(estimate.error is None for _, estimate in parts):
        return Estimate(value, None)
    bound = sum(estimate.error for own, estimate in parts if own)
    whole = result.resistance_ohm
    if whole is not None and whole.error is not None:
        bound = min(bound, whole.error + sum(e.error for own, e in parts if not own))
    return Estimate(value, bound)


def probe(index, result):
    """The reading of a probe."""
    return result.probes[index].potential if index < len(result.probes) else None


def probe_heat(index, result):
    """The heat that a probe takes."""
    taken = result.heat_W.probes if result.heat_W is not None else ()
    return taken[index] if index < len(taken) else None


def in_cell(name, place_nm, result):
    """The value of a profile in the cell whose centre is at a place; None where no centre is."""
    cell = int(np.argmin(np.abs(result.x_nm - place_nm)))
    value = float(getattr(result, name)[cell])
    if not _same_place(float(result.x_nm[cell]), place_nm) or not isfinite(value):
        return None
    error = float(result.errors[name][cell]) if name in result.errors else np.nan
    return Estimate(value, error if isfinite(error) else None)


def four_point(index, result):
    """The resistance between a pair of probes."""
    pairs = result.four_point or ()
    return pairs[index].resistance_ohm if index < len(pairs) else None


def wiedemann_franz(temperature_K, result):
    """K/(G T); K and G are correlated, so the error is an upper bound."""
    heat, charge = result.thermal.conductance_W_per_K, result.conductance_S
    if heat is None or charge is None or charge.value == 0.0 or heat.value == 0.0:
        return None
    ratio = wiedemann_franz_ratio(heat.value, charge.value, temperature_K)
    if heat.error is None or charge.error is None:
        return Estimate(ratio, None)
    relative = heat.error / abs(heat.value) + charge.error / abs(charge.value)
    return Estimate(ratio, abs(ratio) * relative)
