"""What the terminal shows: a run's numbers, closed forms, and progress.

Tables carry no colour codes when they are redirected, stack their columns on narrow terminals, and
fall back to ASCII where the encoding knows no Greek.
"""

import math
import time

import numpy as np
from rich.console import Console
from rich.table import Table
from rich.text import Text

from carriersim.formatting import (
    ROUNDING,
    ascii_text,
    format_count,
    format_estimate,
    format_number,
    format_place,
    format_scaled,
    format_seconds,
    format_share,
    group_name,
    length_scale,
    order_parts,
    split_parts,
)

__all__ = [
    "NoProgress",
    "Progress",
    "format_estimate",
    "print_limits",
    "print_result",
    "progress",
    "unfinished",
]

CAUTION = (
    "Currents and powers are values of the model (fixed lattice temperature, no self-heating), not "
    "a design rating: rely on measurement, applicable codes and licensed practice."
)

_NARROW = 60  # columns; below, each row of a table takes two lines
_WIDE = 100  # columns; from here on sources are shown
_MOST_PARTS, _KEPT_PARTS = 50, 10
# Of too many parts those are listed one by one that are so large beside R and their like.
_LEAST_SHARE, _LEAST_RATIO = 0.03, 4.0
_LEAST_KILOHM = 0.1  # smaller resistances are given in Ω alone
_MOST_PAIRS = 15  # four-point resistances and probes
_MOST_LIMITS = 40
_FAR = 4.0  # standard errors from an exact form that deserve a mark
_SMALL_SHIFT = 0.1  # of the error; a smaller bias from noise is not worth a word

_STOPPED = {
    "relative_error": "asked error reached",
    "heat_share_error": "asked error of the heat share reached",
    "histories": "asked number of histories done",
    "max_seconds": "time limit reached",
    "windows": "longest run done",
    "event_limit": "limit of events reached",
    "interrupted": "interrupted",
}
_UNITS = (  # the first suffix that fits a key of summary.json
    ("_uohm_cm", "µΩ cm"),
    ("_ohm_um", "Ω µm"),
    ("_V_per_K", "V/K"),
    ("_W_per_K", "W/K"),
    ("_A2_per_Hz", "A²/Hz"),
    ("_ohm", "Ω"),
    ("_mV", "mV"),
    ("_A", "A"),
    ("_S", "S"),
    ("_W", "W"),
    ("_nm", "nm"),
)
_NO_PREFIX = ("mV", "nm", "A²/Hz")


# Quantities that have no meaning in one, two, three dimensions: not worth a reason.
_MEANINGLESS = {
    1: {"long_channel", "resistance_width_ohm_um"},
    2: {"long_channel.resistivity_uohm_cm"},
    3: {"resistance_width_ohm_um"},
}


def print_result(result, console: Console) -> None:
    """Print everything a run found, compactly; numbers with one standard error."""
    page = _Page(console)
    page.line(_headline(result), "bold")
    if not result.converged:
        page.line(f"Not converged: {unfinished(result)[0]}.", "bold")
    page.table("", _main_rows(result, page))
    _print_breakdown(result, page)
    _print_long_channel(result, page)
    _print_probes(result, page)
    _print_carriers(result, page)
    heat_shown = _print_heat(result, page)
    _print_comparison(result.limits, page)
    if page.shifted:
        page.line("")
        page.line(
            "off ≤: the noise of the frozen fields may have moved the value so far, besides ±"
        )
    _print_missing(result, page)
    _print_lattice_rise(result, page)
    if heat_shown or result.current_A is not None:
        page.line("")
        page.line(CAUTION, "italic")


def print_limits(scenario, limits, console: Console) -> None:
    """Print the closed forms that apply to a scenario, as `carriersim check` does."""
    page = _Page(console)
    page.line(f"{scenario.name}: {_conditions(scenario)}", "bold")
    if not limits:
        page.line("No closed form applies.")
        return
    sources = _Sources()
    rows = []
    for limit in limits[:_MOST_LIMITS]:
        expected = _scaled(limit.expected, _unit(limit.quantity))
        rows.append([limit.name, expected, _holds(limit), sources.mark(limit.source)])
    page.table("", rows, ["closed form", "expected", "", "source"], right=(1,))
    if len(limits) > _MOST_LIMITS:
        page.line(f"and {len(limits) - _MOST_LIMITS} more")
    sources.print(page)


# --- The page ---------------------------------------------------------------------------------


class _Page:
    """Lines and tables fitted to a console's width and encoding."""

    def __init__(self, console):
        self.console = console
        self.narrow = console.width < _NARROW
        self.wide = console.width >= _WIDE
        self.shifted = False  # whether a shift by noise was written
        self._plain = not _knows_greek(console.encoding)

    def text(self, text, style=""):
        return Text(ascii_text(text) if self._plain else text, style=style)

    def line(self, text, style=""):
        self.console.print(self.text(text, style))

    def table(self, title, rows, columns=None, right=()):
        """A table of texts; right: indices of the columns that end flush.

        Columns without a name and without a text are left out.
        """
        if not rows:
            return
        names = columns or [""] * len(rows[0])
        used = [i for i, name in enumerate(names) if name or any(row[i] for row in rows)]
        rows = [[row[i] for i in used] for row in rows]
        names, right = [names[i] for i in used], [used.index(i) for i in right if i in used]
        self.line("")
        if title:
            self.line(title, "bold")
        if self.narrow:
            self._stacked(rows)
            return
        table = Table(
            box=None, padding=(0, 2, 0, 0), show_header=bool(columns), header_style="dim",
            pad_edge=False,
        )  # fmt: skip
        for index, name in enumerate(names):
            table.add_column(
                self.text(name), justify="right" if index in right else "left",
                no_wrap=index > 0, overflow="fold",
            )  # fmt: skip
        for row in rows:
            table.add_row(*map(self.text, row))
        self.console.print(table)

    def _stacked(self, rows):
        for name, *others in rows:
            if name:
                self.line(name)
            line = ""
            for text in filter(None, others):
                if line and len(line) + 4 + len(text) > self.console.width:
                    self.line(f"  {line}")
                    line = ""
                line = f"{line}  {text}" if line else text
            self.line(f"  {line}")


def _knows_greek(encoding):
    try:
        "±Ωµ–₊²…".encode(encoding or "ascii")
    except (UnicodeEncodeError, LookupError):
        return False
    return True


class _Sources:
    """Sources by number, listed once below a table."""

    def __init__(self):
        self._numbers = {}

    def mark(self, source):
        return f"[{self._numbers.setdefault(source, len(self._numbers) + 1)}]"

    def print(self, page):
        page.line("")
        for source, number in self._numbers.items():
            page.line(f"[{number}] {source}", "dim")


# --- Numbers ----------------------------------------------------------------------------------


def _scaled(value, unit, error=None, digits=6):
    if not unit or unit in _NO_PREFIX or " " in unit:
        if error is None:
            return format_number(value, unit, digits)
        return format_estimate(value, error, unit)
    return format_scaled(value, error, unit, digits)


def _estimate(estimate, unit=""):
    """Value and error of an Estimate; an error that is missing reads n/a."""
    if estimate is None:
        return "n/a"
    error = math.nan if estimate.error is None else estimate.error
    return _scaled(estimate.value, unit, error)


def _shift(estimate, unit, page):
    """How far noise may have moved an Estimate, such as 'off ≤ 30 Ω', if beside its error that
    matters."""
    text = _shift_text(estimate, unit)
    page.shifted |= bool(text)
    return text


def _shift_text(estimate, unit):
    size = abs(estimate.systematic or 0.0) if estimate is not None else 0.0
    if size == 0.0 or size < _SMALL_SHIFT * (estimate.error or 0.0):
        return ""
    if size < ROUNDING * abs(estimate.value):
        return ""
    return f"off ≤ {_scaled(size, unit, digits=2)}"


def _relative(estimate):
    """The relative error, such as '0.31 %'; nothing where the value says that it is exact."""
    if not estimate.value or estimate.error is None or not math.isfinite(estimate.error):
        return ""
    relative = estimate.error / abs(estimate.value)
    return "" if relative < ROUNDING else _percent(relative)


def _percent(share):
    return f"{format_number(100.0 * share, digits=2)} %"


def _unit(quantity):
    """The unit of a key of summary.json, taken from its suffix."""
    key, comma, unit = quantity.partition(", ")
    if comma:
        return unit.replace("ohm", "Ω").replace("^2", "²")
    for part in reversed(key.split(".")):
        for suffix, unit in _UNITS:
            if part.endswith(suffix):
                return unit
    return ""


# --- Parts of the report ------------------------------------------------------------------------


def _headline(result):
    stopped = _STOPPED.get(result.stopped_by, result.stopped_by.replace("_", " "))
    return (
        f"{result.scenario.name}: {_conditions(result.scenario)}; "
        f"{format_count(result.histories)} histories in {format_seconds(result.seconds)}; {stopped}"
    )


def _conditions(scenario):
    bias = "linear response"
    if not scenario.linear_response:
        bias = f"bias {format_number(scenario.contacts.bias_mV, 'mV')}"
    left, right = scenario.left_temperature_K, scenario.right_temperature_K
    contacts = format_number(left, "K")
    if left != right:
        contacts = f"{contacts} left and {format_number(right, 'K')} right"
    return "; ".join([f"{bias}, {contacts}", *_shape(scenario.channel), *_relaxation(scenario)])


def _shape(channel):
    """Dimension and cross-section in words; nothing in one dimension."""
    if channel.dimension == 1:
        return []
    words = f"d = {channel.dimension}"
    if channel.width_nm is None:
        return [f"{words} without walls"]
    width, height = (format_number(p) for p in channel.face_specularity)
    words += f", {format_number(channel.width_nm, 'nm')}"
    if channel.dimension == 2:
        return [f"{words} wide, specularity {width}"]
    words += f" wide, {format_number(channel.height_nm, 'nm')} high, specularity {width}"
    return [words if width == height else f"{words} (width) and {height} (height)"]


def _relaxation(scenario):
    """What changes energies in the channel, in words; nothing in an elastic one."""
    mechanisms = [_mechanism(mechanism) for mechanism in scenario.relaxation.mechanisms]
    words = [f"relaxation by {', '.join(mechanisms)}"] if mechanisms else []
    coupled = sum(probe.coupling > 0.0 for probe in scenario.probes)
    if coupled:
        words.append(f"{coupled} coupled {'probe' if coupled == 1 else 'probes'}")
    if words:
        words.append(f"lattice {format_number(scenario.bath_temperature_K, 'K')}")
    return words


def _mechanism(mechanism):
    path = f"path {format_number(mechanism.path_nm, 'nm')}"
    if mechanism.kind == "optical_phonon":
        energy = format_number(mechanism.energy_meV, "meV")
        return f"optical phonons of {energy} ({path})"
    return f"{mechanism.kind} ({path}, direction {mechanism.direction or 'kept'})"


def unfinished(result):
    """Why a run has not converged, and what would help; two texts without a full stop."""
    asked = result.scenario.simulation
    reasons, keys = [], []
    if result.relaxes and result.residual is None:
        reasons.append("the run was too short to tell whether the fields are settled")
    elif result.relaxes and (limit := _allowed_drift()) < result.residual:
        what = result.drift or "a frozen field"
        size = format_number(result.drift_sigma, digits=3)
        reasons.append(
            f"the fields still drift, most of all {what}: by {size} standard errors from one "
            f"window of rounds to the next, where {format_number(limit)} are allowed"
        )
    for key, text in _missed(result, asked):
        reasons.append(f"the asked error was not reached{text}")
        keys.append(key)
    if not reasons and (asked.target_relative_error or asked.heat_share_error):
        reasons.append("the asked error was not reached")
        keys.append("simulation.relative_error")
    more = {
        "max_seconds": "raise simulation.max_seconds",
        "windows": "this is the longest run of so many batches: raise simulation.batches",
        "event_limit": f"{result.trouble or 'a carrier takes too many steps'}: paths are too short "
        "for the length of the channel",
    }
    helps = [more.get(result.stopped_by, "raise simulation.histories"), *keys]
    return "; ".join(reasons) or "stopped before its end", " or ".join(helps)


def _allowed_drift():
    from carriersim.engine import iterate  # compiled code, which only an unsettled run needs

    return iterate.DRIFT_SIGMA


def _missed(result, asked):
    """(key, words) of each asked error that the result is known to miss."""
    target = asked.target_relative_error
    known = result.resistance_ohm or (result.current_A if result.relaxes else None)
    known = known or result.conductance_S
    reached = True
    if target and known is not None and known.error is not None and known.value:
        error = known.error / abs(known.value)
        reached = error <= target
        if not reached:
            yield (
                "simulation.relative_error",
                f": {_percent(error)} of R, asked {_percent(target)}",
            )
    settled = result.residual is not None and result.residual <= _allowed_drift()
    if asked.heat_share_error and reached and settled:  # what else is left
        share = format_number(asked.heat_share_error)
        yield "simulation.heat_share_error", f": {share} of the lattice's share of I V"


def _main_rows(result, page):
    rows = []

    def add(name, estimate, unit="", text=None):
        if estimate is not None:
            text = text or _estimate(estimate, unit)
            rows.append([name, text, _relative(estimate), _shift(estimate, unit, page)])

    resistance = result.resistance_ohm
    add("current", result.current_A, "A")
    if resistance is not None and abs(resistance.value) < _LEAST_KILOHM * 1e3:
        add("resistance", resistance, "Ω")
    elif resistance is not None:
        error = math.nan if resistance.error is None else resistance.error
        kilo = format_estimate(resistance.value * 1e-3, error * 1e-3, "kΩ")
        add("resistance", resistance, "Ω", kilo)
        rows.append(["", format_estimate(resistance.value, error, "Ω"), "", ""])
    add("resistance × width", result.resistance_width_ohm_um, "Ω µm")
    if _differs(result.differential_resistance_ohm, resistance):
        add("differential resistance", result.differential_resistance_ohm, "Ω")
    add("conductance dI/dV", result.conductance_S, "S")
    add("transmission", result.transmission)
    ballistic = format_scaled(result.ballistic_resistance_ohm, 0.0, "Ω")
    rows.append(["ballistic resistance", ballistic, "", ""])
    return rows


def _differs(estimate, other):
    if estimate is None or other is None:
        return estimate is not None
    errors = [one.error or 0.0 for one in (estimate, other)]
    return abs(estimate.value - other.value) > max(*errors, 1e-9 * abs(other.value))


def _print_breakdown(result, page):
    if not result.breakdown:
        return
    length_nm = result.scenario.channel.length_nm
    total = sum(part.resistance_ohm.value for part in result.breakdown)
    shown, sums = _listed(result, total)
    rows = [_part_row(part, total, length_nm, page) for part in shown]
    if sums:
        ends = [row for row, part in zip(rows, shown, strict=True) if part.kind == "interface"]
        large = [row for row, part in zip(rows, shown, strict=True) if part.kind != "interface"]
        together = [_row(group_name(group), "", group, total, page) for group in sums]
        large = [[f"of these: {row[0]}", *row[1:]] for row in large]
        rows = [*ends[:1], *together, *ends[1:], *large]
    columns = ["part", "place", "resistance", "share", ""]
    page.table("Where the resistance sits", rows, columns, right=(1, 3))


def _part_row(part, total, length_nm, page):
    place = "" if part.kind == "interface" else format_place(part, length_nm)
    name = part.mechanism if part.kind == "piece" and part.mechanism else part.name
    if page.narrow:
        name, place = f"{name}, {place}" if place else name, ""
    return _row(name, place, part, total, page)


def _row(name, place, part, total, page):
    """name, place, resistance, share and shift of a Part or a PartSum."""
    estimate = part.resistance_ohm
    text, shift = _estimate(estimate, "Ω"), _shift(estimate, "Ω", page)
    return [name, place, text, format_share(estimate.value, total), shift]


def _listed(result, total):
    """Parts to list one by one, and the sums of breakdown_sums where there are too many parts.

    Of too many parts only the contacts and the largest are listed, if they stand out.
    """
    parts = order_parts(result.breakdown, result.scenario.channel.length_nm)
    shown, rest = split_parts(parts, _MOST_PARTS, _KEPT_PARTS)
    if not rest:
        return shown, ()
    sums = result.sums
    mean = {(s.kind, s.mechanism): abs(s.resistance_ohm.value) / s.count for s in sums}

    def stands_out(part):
        least = _LEAST_RATIO * mean.get((part.kind, part.mechanism), np.inf)
        return abs(part.resistance_ohm.value) >= max(_LEAST_SHARE * abs(total), least)

    return [p for p in parts if p.kind == "interface" or (p in shown and stands_out(p))], sums


def _print_long_channel(result, page):
    """What an endless channel of the same kind does, and how that was found."""
    channel, found = result.scenario.channel, result.long_channel
    if found is None:
        return
    rows = [
        [name, _estimate(value, unit), _relative(value), _shift_text(value, unit)]
        for name, value, unit in (
            ("resistivity / that of the bulk", found.resistivity_ratio, ""),
            ("resistivity", found.resistivity_uohm_cm, "µΩ cm"),
            ("sheet resistance", found.sheet_ohm, "Ω"),
            ("backscattering path", found.backscatter_path_nm, "nm"),
        )
        if value is not None
    ]
    page.table("An endless channel of this kind", rows)
    bulk = _bulk(channel, found)
    if bulk:
        page.line(bulk)
    page.line(f"Method: {found.method}.", "dim")
    if any(row[-1] for row in rows):
        page.line("off ≤: what longer walks may still change, besides ±", "dim")


def _bulk(channel, found):
    """What the bulk alone would have, and where that comes from, in words."""
    given, ratio = channel.bulk_resistivity_uohm_cm, found.resistivity_ratio
    if given is not None:
        return f"Bulk alone: {format_number(given, 'µΩ cm')}, as given."
    if ratio is None or not ratio.value:
        return ""
    if found.resistivity_uohm_cm is not None:
        value = format_number(found.resistivity_uohm_cm.value / ratio.value, "µΩ cm", 4)
        return f"Bulk alone: {value}, computed from R_B A and the path in the bulk."
    if found.sheet_ohm is not None:
        value = format_scaled(found.sheet_ohm.value / ratio.value, None, "Ω", 4)
        return f"Bulk alone: {value} a square, computed from R_B W and the path in the bulk."
    return ""


def _print_probes(result, page):
    if not result.probes:
        return
    factor, unit = length_scale(result.scenario.channel.length_nm)
    potential_unit = "of the bias" if result.linear_response else "mV"
    scenario, rows = result.scenario, []
    for i, probe in enumerate(result.probes[:_MOST_PAIRS]):
        place = format_number(probe.position_nm * factor, unit, 5)
        coupling = scenario.probes[i].coupling
        coupled = f"takes {format_share(coupling, 1.0)}" if coupling > 0.0 else ""
        text = "n/a"
        if probe.potential is not None:
            error = math.nan if probe.potential.error is None else probe.potential.error
            text = format_estimate(probe.potential.value, error, potential_unit)
        rows.append([f"probe {i + 1}", place, text, coupled])
    page.table("Voltage probes", rows, ["probe", "place", "potential", ""])
    _print_left_out(len(result.probes) - _MOST_PAIRS, page)
    rows = []
    for pair in (result.four_point or ())[:_MOST_PAIRS]:
        ends = [format_number(x * factor, digits=5) for x in (pair.from_nm, pair.to_nm)]
        text, shift = _estimate(pair.resistance_ohm, "Ω"), _shift(pair.resistance_ohm, "Ω", page)
        rows.append([f"{ends[0]} – {ends[1]} {unit}", text, shift])
    page.table("Four-point resistance", rows, ["between", "resistance", ""])
    _print_left_out(len(result.four_point or ()) - _MOST_PAIRS, page)


def _print_left_out(count, page):
    if count > 0:
        page.line(f"and {count} more in summary.json")


def _print_carriers(result, page):
    """The largest departure from local equilibrium and the hottest carriers, and where."""
    if result.linear_response:
        return  # departures from equilibrium are infinitely small
    rows = []
    for name, key, unit in (
        ("largest departure from local equilibrium", "departure", ""),
        ("hottest right-moving carriers", "carrier_temperature_plus_K", "K"),
        ("hottest left-moving carriers", "carrier_temperature_minus_K", "K"),
    ):
        found = _greatest(result, key)
        if found is not None:
            value, error, place = found
            rows.append([name, format_estimate(value, error, unit), place])
    page.table("Carriers inside", rows, ["", "", "at"])


def _greatest(result, key):
    """Value, error and place of the surest maximum of a profile; None if it is nowhere above 0.

    The one whose value less its error is greatest, or noise would choose.
    """
    values = getattr(result, key)
    errors = result.errors.get(key, np.full(values.shape, math.nan))
    sure = np.where(np.isfinite(errors), values - errors, values)
    if not np.isfinite(sure).any() or not np.nanmax(values) > 0.0:
        return None
    cell = int(np.nanargmax(sure))
    factor, unit = length_scale(result.scenario.channel.length_nm)
    place = format_number(result.x_nm[cell] * factor, unit, 4)
    return float(values[cell]), float(errors[cell]), place


def _print_lattice_rise(result, page):
    """How much warmer the lattice would get, if its contact to the substrate is known."""
    conductance = result.scenario.relaxation.substrate_conductance_W_per_K_m
    if conductance is None or not result.relaxes or result.heat_W is None:
        return
    greatest = _greatest(result, "lattice_power_W_per_nm")
    if greatest is None:
        return  # no mechanism gives power to the lattice
    per_metre = 1e9 / result.scenario.channel.length_nm / conductance
    lattice = result.heat_W.lattice
    error = math.nan if lattice.error is None else lattice.error
    mean = format_estimate(lattice.value * per_metre, error * per_metre, "K")
    value, error, place = greatest
    most = format_estimate(value * 1e9 / conductance, error * 1e9 / conductance, "K")
    page.line("")
    page.line(
        f"With {format_number(conductance)} W/(K m) to the substrate this power would warm the "
        f"lattice by {mean} on the mean of the channel and by {most} at most, near {place}. T_b "
        "itself stays fixed in the model; how warm a device gets is for measurement to tell."
    )


def _print_heat(result, page):
    """Print where the heat lands and the thermal numbers; return whether there was any."""
    rows = []
    heat = result.heat_W
    if heat is not None:
        places = [
            ("heat in the left contact", heat.left_contact),
            ("heat in the right contact", heat.right_contact),
        ]
        inner = [("heat in the lattice", heat.lattice)]
        inner += [(f"heat in probe {i + 1}", probe) for i, probe in enumerate(heat.probes)]
        places += [(n, power) for n, power in inner if power is not None and any(_size(power))]
        total = sum(power.value for _, power in places)
        rows += [
            [
                name,
                _estimate(power, "W"),
                format_share(power.value, total),
                _shift(power, "W", page),
            ]
            for name, power in places
        ]
    thermal, scenario = result.thermal, result.scenario
    entries = [
        ("thermal conductance at I = 0", thermal.conductance_W_per_K, "W/K"),
        ("Seebeck coefficient at I = 0", thermal.seebeck_V_per_K, "V/K"),
    ]
    # Between equal temperatures they repeat the heat of the contacts.
    if scenario.left_temperature_K != scenario.right_temperature_K:
        entries += [
            ("heat current out of the left contact", thermal.heat_current_left_W, "W"),
            ("heat current into the right contact", thermal.heat_current_right_W, "W"),
        ]
    rows += [
        [name, _estimate(value, unit), "", _shift(value, unit, page)]
        for name, value, unit in entries
        if value is not None
    ]
    columns = ["", "", "share of I V" if heat is not None else "", ""]
    page.table("Heat", rows, columns, right=(2,))
    return bool(rows)


def _size(estimate):
    return estimate.value, estimate.error


def _print_comparison(limits, page):
    rows, far, sources = [], False, _Sources()
    for row in limits[:_MOST_LIMITS]:
        unit = _unit(row.quantity)
        simulated = "n/a"
        if row.simulated is not None:
            error = math.nan if row.error is None else row.error
            simulated = _scaled(row.simulated, unit, error)
        z = "" if row.z is None else f"{row.z:+.1f}".replace("-0.0", "+0.0")
        if row.z is not None and abs(row.z) > _FAR and row.holds == "exact":
            z, far = f"{z} !", True
        if page.narrow:
            cells = [f"expected {_scaled(row.expected, unit)}", simulated, z and f"z {z}"]
        else:
            cells = [_scaled(row.expected, unit), simulated, z]
        source = [sources.mark(row.source)] if page.wide else []
        rows.append([row.name, *cells, _holds(row), *source])
    columns = ["closed form", "expected", "simulated", "z", "", *(["source"] if page.wide else [])]
    page.table("Beside closed forms", rows, columns, right=(1, 2, 3))
    _print_left_out(len(limits) - _MOST_LIMITS, page)
    if far:
        page.line(f"! more than {_FAR:g} standard errors from an exact form")
    if page.wide and rows:
        sources.print(page)


def _holds(row):
    return "exact" if row.holds == "exact" else "approx."


def _print_missing(result, page):
    """Each reason once, with the quantities that it takes away."""
    unasked = set() if result.scenario.noise else {"noise"}
    unasked |= _MEANINGLESS[result.scenario.channel.dimension]
    if not result.relaxes:  # an elastic run iterates nothing
        unasked |= {"residual", "drift", "drift_sigma"}
    by_reason = {}
    for name, reason in result.why.items():
        if name not in unasked:
            by_reason.setdefault(reason, []).append(name)
    if not by_reason:
        return
    page.line("")
    page.line("Without a value", "bold")
    for reason, names in by_reason.items():
        page.line(f"{', '.join(names)}: {reason}")


# --- Progress -----------------------------------------------------------------------------------


def progress(console: Console) -> "Progress | NoProgress":
    """A live line for a terminal, or an object of the same methods that does nothing."""
    return Progress(console) if console.is_terminal else NoProgress()


class NoProgress:
    """Takes the place of Progress where nobody watches."""

    def start(self, target=None):
        """Do nothing."""

    def update(self, histories, relative_error, target=None, seconds=0.0):
        """Do nothing."""

    def stop(self):
        """Do nothing."""


class Progress:
    """One line that is renewed in place and vanishes at the end.

    It appears only when work lasts longer than a moment, and is renewed a few times a second.
    """

    _FIRST_S = 0.4
    _EVERY_S = 0.1

    def __init__(self, console: Console):
        self._page = _Page(console)
        self._live = None
        self._target = None
        self._next = 0.0

    def start(self, target: float | None = None) -> None:
        """Begin. target: the relative error asked for, None if there is none."""
        self._target = target
        self._next = time.monotonic() + self._FIRST_S

    def update(
        self,
        histories: int,
        relative_error: float | None,
        target: float | None = None,
        seconds: float = 0.0,
    ) -> None:
        """Tell how far the work is: histories done, relative error of R, seconds of work."""
        now = time.monotonic()
        if now < self._next:
            return
        self._next = now + self._EVERY_S
        target = self._target if target is None else target
        text = self._page.text(_progress_text(histories, relative_error, target, seconds))
        text.no_wrap, text.overflow = True, "ellipsis" if not self._page._plain else "crop"
        if self._live is None:
            from rich.live import Live

            self._live = Live(
                console=self._page.console, auto_refresh=False, transient=True,
                redirect_stdout=False, redirect_stderr=False,
            )  # fmt: skip
            self._live.start()
        self._live.update(text, refresh=True)

    def stop(self) -> None:
        """End and wipe the line; may be called twice."""
        live, self._live = self._live, None
        if live is not None:
            live.stop()


def _progress_text(histories, relative_error, target, seconds):
    text = f"{format_count(histories)} histories, {format_seconds(seconds)}"
    if relative_error is None or not 0.0 < relative_error < math.inf:
        return text
    text += f"; R ± {_percent(relative_error)}"
    if not target:
        return text
    text += f", asked {_percent(target)}"
    # The error falls with the square root of the work.
    remaining = seconds * ((relative_error / target) ** 2 - 1.0)
    return f"{text}; about {format_seconds(remaining)} more" if remaining > 0.0 else text
