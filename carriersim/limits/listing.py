"""The closed forms that apply to an elastic scenario; relaxation lists some of them too."""

from functools import partial
from itertools import combinations, pairwise

import numpy as np

from carriersim.constants import BOLTZMANN_J_PER_K, ELEMENTARY_CHARGE_C
from carriersim.limits import selecting
from carriersim.limits.conductor import read
from carriersim.limits.formulas import LORENZ_NUMBER, ballistic_resistance_ohm, probe_reading
from carriersim.limits.landauer import (
    conductance_S,
    contact_heat_W,
    current_A,
    mean_modes,
    mean_transmission,
    ohm_per_level,
    ratio,
    resistance_ohm,
)
from carriersim.limits.potentials import levels, profile_of
from carriersim.limits.rows import Limit, of_result
from carriersim.limits.thermal import without_current

LANDAUER = "Landauer 1957, 1970; Imry 1986"
SERIES = "Datta, Electronic Transport in Mesoscopic Systems, 1995"
THERMAL = "Sivan & Imry, Phys. Rev. B 33 (1986) 551"
PROBES = "Buttiker, Phys. Rev. Lett. 57 (1986) 1761; Engquist & Anderson 1981"
COUPLED_PROBES = "Buttiker, Phys. Rev. B 33 (1986) 3020; IBM J. Res. Dev. 32 (1988) 63"
OHM = "Ohm's law as the long-channel limit; Datta 1995"
WIEDEMANN_FRANZ = "Wiedemann & Franz 1853; Sommerfeld 1928"

MOST_LISTED = 12  # parts of one kind; of more, only their sum and the largest
LONG = 10.0  # L/lam above which the contacts are left out as an approximation
NEARLY_TRANSPARENT = 0.05  # largest R/R_B - 1 at which the ballistic limit is worth a line


def elastic_limits(scenario):
    """The closed forms of an elastic scenario in d = 1."""
    conductor = read(scenario)
    found = levels(conductor)
    yield ballistic(conductor)
    yield from conduction(conductor)
    yield from approximate(conductor)
    yield from breakdown(conductor, found)
    yield from probes(conductor, _readings(conductor, found), PROBES)
    yield from heat(conductor, *contact_heat_W(conductor), THERMAL)
    yield from _thermal(conductor)


def ballistic(conductor):
    """The ballistic resistance."""
    return Limit(
        "ballistic resistance",
        "ballistic_resistance_ohm",
        _ballistic_ohm(conductor),
        LANDAUER,
        "exact",
        selecting.ballistic_resistance,
    )


def _ballistic_ohm(conductor):
    quantum_ohm = ballistic_resistance_ohm(degeneracy=conductor.degeneracy)
    return ratio(quantum_ohm, mean_modes(conductor))


def conduction(conductor, law="series law"):
    """Resistance, transmission, current, conductance; law: its name in the rows."""
    if conductor.same_temperature:
        expected = resistance_ohm(conductor)
        yield of_result(f"resistance, {law}", "resistance_ohm", expected, SERIES)
    if conductor.same_temperature or conductor.bias_mV == 0.0:
        expected = mean_transmission(conductor)
        yield of_result(f"transmission, {law}", "transmission", expected, SERIES)
    if conductor.bias_mV != 0.0:
        yield of_result("current", "current_A", current_A(conductor), LANDAUER)
    yield of_result("conductance dI/dV", "conductance_S", conductance_S(conductor), LANDAUER)


def approximate(conductor):
    """Long and nearly transparent channels."""
    if conductor.depends_on_energy or not conductor.same_temperature:
        return
    ballistic_ohm = _ballistic_ohm(conductor)
    whole, points = conductor.amounts[0], conductor.point_amount.sum()
    spread = whole - points
    if spread > LONG * (1.0 + points):
        name, expected = "resistance of a long channel, contacts left out", ballistic_ohm * spread
        yield of_result(name, "resistance_ohm", expected, OHM, "approximate")
    if 0.0 < whole < NEARLY_TRANSPARENT:
        name = "resistance without any scattering"
        yield of_result(name, "resistance_ohm", ballistic_ohm, LANDAUER, "approximate")


def breakdown(conductor, found):
    """Interfaces, points and pieces of the resistance."""
    if not conductor.same_temperature:
        return
    ohm = ohm_per_level(conductor)
    half = float(0.5 * found.between * ohm)
    for name, place_nm in (("left interface", 0.0), ("right interface", conductor.length_nm)):
        select = partial(selecting.part_at, "interface", place_nm)
        yield _part(f"{name}, half of ballistic", half, LANDAUER, select)
    ohm_by_law = found.by_law * ohm
    points = _points(conductor, ohm_by_law)
    yield from _all_or_sum(points, "point scatterers", "point", LANDAUER)
    coupled = _coupled(conductor, ohm_by_law)
    yield from _all_or_sum(coupled, "coupled probes", "probe", COUPLED_PROBES)
    pieces = _pieces(conductor, ohm_by_law)
    yield from _all_or_sum(pieces, "pieces between", "piece", SERIES)


def _part(name, expected, source, select):
    return Limit(name, "breakdown.resistance_ohm", expected, source, "exact", select)


def _points(conductor, ohm_by_law):
    """(name, resistance in ohm, select) of each point scatterer."""
    scatters = conductor.point_amount > 0.0
    scatters[list(conductor.coupled)] = False
    falls = conductor.point_amount * ohm_by_law[conductor.point_law]
    last = conductor.place_nm.size - 1
    barriers = {0: "left contact barrier", last: "right contact barrier"}
    columns = np.flatnonzero(scatters), conductor.place_nm[scatters], falls[scatters]
    for i, place_nm, ohm in zip(*(column.tolist() for column in columns), strict=True):
        name = barriers.get(i, f"scatterer at {place_nm:g} nm")
        yield name, ohm, partial(selecting.part_at, "point", place_nm)


def _coupled(conductor, ohm_by_law):
    """(name, resistance in ohm, select) of each coupled probe."""
    for i in conductor.coupled:
        place_nm = float(conductor.place_nm[i])
        ohm = float(conductor.point_amount[i] * ohm_by_law[0])
        yield (
            f"coupled probe at {place_nm:g} nm",
            ohm,
            partial(selecting.part_at, "probe", place_nm),
        )


def _pieces(conductor, ohm_by_law):
    """(name, resistance in ohm, select) of each piece and mechanism that scatters."""
    cuts = conductor.point_amount > 0.0
    cuts[list(conductor.coupled)] = True
    cuts_nm = conductor.place_nm[cuts]
    for stretch in conductor.stretches:
        inner = cuts_nm[(cuts_nm > stretch.from_nm) & (cuts_nm < stretch.to_nm)]
        edges = [stretch.from_nm, *inner.tolist(), stretch.to_nm]
        ohm_per_nm = float(stretch.amount * ohm_by_law[stretch.law])
        label = f", {stretch.mechanism}" if stretch.mechanism else ""
        for low, high in pairwise(edges):
            select = partial(selecting.piece, low, high, stretch.mechanism)
            yield f"{low:g} to {high:g} nm{label}", ohm_per_nm * (high - low), select


def _all_or_sum(parts, name, kind, source):
    """Every part as a Limit, or only the sum and the largest if there are many."""
    parts = list(parts)
    if len(parts) > MOST_LISTED:
        total = sum(ohm for _, ohm, _ in parts)
        select = partial(selecting.sum_of_kind, kind)
        yield _part(f"{len(parts)} {name}, sum", total, SERIES, select)
        label, ohm, select = max(parts, key=lambda part: abs(part[1]))
        parts = [(f"{label}, the largest", ohm, select)]
    for label, ohm, select in parts:
        yield _part(label, ohm, source, select)


def _readings(conductor, found):
    """What each probe reads, (probes,)."""
    places = np.array([probe.position_nm for probe in conductor.scenario.probes])
    weights = np.array([probe.weight_right for probe in conductor.scenario.probes])
    return probe_reading(*profile_of(found, conductor, places), weights)


def probes(conductor, readings, source):
    """Each probe's reading, and the four-point resistance of each pair."""
    places = [probe.position_nm for probe in conductor.scenario.probes]
    bias = abs(conductor.bias_mV) or 1.0
    for i, (place_nm, reading) in enumerate(zip(places, readings, strict=True)):
        yield Limit(
            f"probe at {place_nm:g} nm",
            f"probes[{i}].{potential_key(conductor)}",
            float(reading),
            source,
            "exact",
            partial(selecting.probe, i),
            scale=bias,
        )
    if not conductor.same_temperature:
        return
    ohm = ohm_per_level(conductor)
    for count, (a, b) in enumerate(combinations(range(len(places)), 2)):
        yield Limit(
            f"four-point, {places[a]:g} to {places[b]:g} nm",
            f"four_point[{count}].resistance_ohm",
            float((readings[a] - readings[b]) * ohm),
            source,
            "exact",
            partial(selecting.four_point, count),
            scale=bias * abs(ohm),
        )


def potential_key(conductor):
    """The key of a potential, with the unit that it has at this bias."""
    return "potential_mV" if conductor.bias_mV != 0.0 else "potential per unit of the bias"


def heat(conductor, left_W, right_W, source, scale=0.0):
    """The heat in the contacts; scale: in W, at least."""
    rows = []
    if conductor.bias_mV != 0.0:
        rows += [
            ("heat in the left contact", "heat_W.left_contact", left_W),
            ("heat in the right contact", "heat_W.right_contact", right_W),
        ]
    if not conductor.same_temperature:
        rows += [
            ("heat current out of the left contact", "thermal.heat_current_left_W", -left_W),
            ("heat current into the right contact", "thermal.heat_current_right_W", right_W),
        ]
    scale = max(abs(left_W), abs(right_W), scale)
    for name, quantity, expected in rows:
        yield of_result(name, quantity, expected, source, scale=scale)


def _thermal(conductor):
    seebeck, conductance = without_current(conductor)
    scale = BOLTZMANN_J_PER_K / ELEMENTARY_CHARGE_C
    name, quantity = "Seebeck coefficient at I = 0", "thermal.seebeck_V_per_K"
    yield of_result(name, quantity, seebeck, THERMAL, scale=scale)
    name, quantity = "thermal conductance at I = 0", "thermal.conductance_W_per_K"
    yield of_result(name, quantity, conductance, THERMAL)
    # With energy dependence G at a finite bias belongs to other energies than K at I = 0.
    if conductor.mean_K > 0.0 and (conductor.bias_mV == 0.0 or not conductor.depends_on_energy):
        yield Limit(
            "Wiedemann-Franz ratio K/(G T)",
            "thermal.conductance_W_per_K / (conductance_S * T), W ohm/K^2",
            LORENZ_NUMBER,
            WIEDEMANN_FRANZ,
            "approximate" if conductor.depends_on_energy else "exact",
            partial(selecting.wiedemann_franz, conductor.mean_K),
        )
