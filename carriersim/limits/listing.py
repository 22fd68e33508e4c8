"""The closed forms that apply to a scenario, and their comparison with a run."""

from collections.abc import Callable, Iterable
from dataclasses import dataclass
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
from carriersim.limits.thermal import without_current
from carriersim.result import Estimate, LimitRow, Result

LANDAUER = "Landauer 1957, 1970; Imry 1986"
SERIES = "Datta, Electronic Transport in Mesoscopic Systems, 1995"
THERMAL = "Sivan & Imry, Phys. Rev. B 33 (1986) 551"
PROBES = "Buttiker, Phys. Rev. Lett. 57 (1986) 1761; Engquist & Anderson 1981"
OHM = "Ohm's law as the long-channel limit; Datta 1995"
WIEDEMANN_FRANZ = "Wiedemann & Franz 1853; Sommerfeld 1928"

MOST_LISTED = 12  # parts of one kind; of more, only their sum and the largest
LONG = 10.0  # L/lam above which the contacts are left out as an approximation
NEARLY_TRANSPARENT = 0.05  # largest R/R_B - 1 at which the ballistic limit is worth a line
ROUNDING = 1e-8  # relative difference between two exact ways to the same number


@dataclass(frozen=True)
class Limit:
    """A closed form that applies to a scenario.

    quantity is the key in summary.json, with its unit. holds: exact or approximate. select takes
    the number out of a Result, None where the run has none. scale: natural size of the quantity, in
    the unit of expected, against which a difference counts as rounding where expected is 0.
    """

    name: str
    quantity: str
    expected: float
    source: str
    holds: str
    select: Callable[[Result], Estimate | None]
    scale: float = 0.0


def limits_for(scenario) -> tuple[Limit, ...]:
    """The closed forms that apply to a scenario whose random scatterers are drawn.

    Empty for what has no closed form here: d = 2 or 3, relaxation, coupled probes.
    """
    if not _applies(scenario):
        return ()
    conductor = read(scenario)
    found = levels(conductor)
    rows = [
        *_conduction(conductor),
        *_approximate(conductor),
        *_breakdown(conductor, found),
        *_probes(conductor, found),
        *_heat(conductor),
        *_thermal(conductor),
    ]
    return tuple(limit for limit in rows if np.isfinite(limit.expected))


def compare(limits: Iterable[Limit], result: Result) -> tuple[LimitRow, ...]:
    """One LimitRow for each limit: z = (simulated - expected)/error.

    z is None without a simulated value or without an error; where the error is 0 because the method
    gives the number exactly, agreement to 1e-8 of its size shows as z = 0.
    """
    return tuple(_row(limit, limit.select(result)) for limit in limits)


def _row(limit, estimate):
    value = error = z = None
    if estimate is not None:
        value, error = estimate.value, estimate.error
        z = _z(limit, value, error)
    return LimitRow(
        limit.name, limit.quantity, limit.expected, value, error, z, limit.source, limit.holds
    )


def _z(limit, value, error):
    if error is None:
        return None
    size = max(abs(limit.expected), limit.scale)
    if error > 1e-12 * size:
        return (value - limit.expected) / error
    return 0.0 if abs(value - limit.expected) <= ROUNDING * size else None


def _applies(scenario):
    return (
        scenario.channel.dimension == 1
        and not scenario.relaxation.mechanisms
        and all(probe.coupling == 0.0 for probe in scenario.probes)
    )


def _of_result(name, quantity, expected, source, holds="exact", scale=0.0):
    """A limit on the number that a Result holds under the same name as summary.json."""
    select = partial(selecting.attribute, quantity)
    return Limit(name, quantity, expected, source, holds, select, scale)


def _ballistic_ohm(conductor):
    quantum_ohm = ballistic_resistance_ohm(degeneracy=conductor.degeneracy)
    return ratio(quantum_ohm, mean_modes(conductor))


def _conduction(conductor):
    yield Limit(
        "ballistic resistance",
        "ballistic_resistance_ohm",
        _ballistic_ohm(conductor),
        LANDAUER,
        "exact",
        selecting.ballistic_resistance,
    )
    if conductor.same_temperature:
        expected = resistance_ohm(conductor)
        yield _of_result("resistance, series law", "resistance_ohm", expected, SERIES)
    if conductor.same_temperature or conductor.bias_mV == 0.0:
        expected = mean_transmission(conductor)
        yield _of_result("transmission, series law", "transmission", expected, SERIES)
    if conductor.bias_mV != 0.0:
        yield _of_result("current", "current_A", current_A(conductor), LANDAUER)
    yield _of_result("conductance dI/dV", "conductance_S", conductance_S(conductor), LANDAUER)


def _approximate(conductor):
    if conductor.depends_on_energy or not conductor.same_temperature:
        return
    ballistic = _ballistic_ohm(conductor)
    whole, points = conductor.amounts[0], conductor.point_amount.sum()
    spread = whole - points
    if spread > LONG * (1.0 + points):
        name, expected = "resistance of a long channel, contacts left out", ballistic * spread
        yield _of_result(name, "resistance_ohm", expected, OHM, "approximate")
    if 0.0 < whole < NEARLY_TRANSPARENT:
        name = "resistance without any scattering"
        yield _of_result(name, "resistance_ohm", ballistic, LANDAUER, "approximate")


def _breakdown(conductor, found):
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
    pieces = _pieces(conductor, ohm_by_law)
    yield from _all_or_sum(pieces, "pieces between", "piece", SERIES)


def _part(name, expected, source, select):
    return Limit(name, "breakdown.resistance_ohm", expected, source, "exact", select)


def _points(conductor, ohm_by_law):
    """(name, resistance in ohm, select) of each point scatterer."""
    scatters = conductor.point_amount > 0.0
    falls = conductor.point_amount * ohm_by_law[conductor.point_law]
    last = conductor.place_nm.size - 1
    barriers = {0: "left contact barrier", last: "right contact barrier"}
    columns = np.flatnonzero(scatters), conductor.place_nm[scatters], falls[scatters]
    for i, place_nm, ohm in zip(*(column.tolist() for column in columns), strict=True):
        name = barriers.get(i, f"scatterer at {place_nm:g} nm")
        yield name, ohm, partial(selecting.part_at, "point", place_nm)


def _pieces(conductor, ohm_by_law):
    """(name, resistance in ohm, select) of each piece and mechanism that scatters."""
    cuts_nm = conductor.place_nm[conductor.point_amount > 0.0]
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


def _probes(conductor, found):
    probes = conductor.scenario.probes
    if not probes:
        return
    places = np.array([probe.position_nm for probe in probes])
    weights = np.array([probe.weight_right for probe in probes])
    readings = probe_reading(*profile_of(found, conductor, places), weights)
    unit = "potential_mV" if conductor.bias_mV != 0.0 else "potential per unit of the bias"
    bias = abs(conductor.bias_mV) or 1.0
    for i, (place_nm, reading) in enumerate(zip(places, readings, strict=True)):
        yield Limit(
            f"probe at {place_nm:g} nm",
            f"probes[{i}].{unit}",
            float(reading),
            PROBES,
            "exact",
            partial(selecting.probe, i),
            scale=bias,
        )
    if not conductor.same_temperature:
        return
    ohm = ohm_per_level(conductor)
    for count, (a, b) in enumerate(combinations(range(places.size), 2)):
        yield Limit(
            f"four-point, {places[a]:g} to {places[b]:g} nm",
            f"four_point[{count}].resistance_ohm",
            float((readings[a] - readings[b]) * ohm),
            PROBES,
            "exact",
            partial(selecting.four_point, count),
            scale=bias * abs(ohm),
        )


def _heat(conductor):
    left, right = contact_heat_W(conductor)
    rows = []
    if conductor.bias_mV != 0.0:
        rows += [
            ("heat in the left contact", "heat_W.left_contact", left),
            ("heat in the right contact", "heat_W.right_contact", right),
        ]
    if not conductor.same_temperature:
        rows += [
            ("heat current out of the left contact", "thermal.heat_current_left_W", -left),
            ("heat current into the right contact", "thermal.heat_current_right_W", right),
        ]
    scale = max(abs(left), abs(right))
    for name, quantity, expected in rows:
        yield _of_result(name, quantity, expected, THERMAL, scale=scale)


def _thermal(conductor):
    seebeck, conductance = without_current(conductor)
    scale = BOLTZMANN_J_PER_K / ELEMENTARY_CHARGE_C
    name, quantity = "Seebeck coefficient at I = 0", "thermal.seebeck_V_per_K"
    yield _of_result(name, quantity, seebeck, THERMAL, scale=scale)
    name, quantity = "thermal conductance at I = 0", "thermal.conductance_W_per_K"
    yield _of_result(name, quantity, conductance, THERMAL)
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
