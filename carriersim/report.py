"""What the terminal shows: a run's numbers, closed forms, and progress.

Tables carry no colour codes when they are redirected, stack their columns on narrow terminals, and
fall back to ASCII where the encoding knows no Greek.
"""

import math
import time

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
    length_scale,
    order_parts,
    split_parts,
)

__all__ = ["NoProgress", "Progress", "format_estimate", "print_limits", "print_result", "progress"]

CAUTION = (
    "Currents and powers are values of the model (fixed lattice temperature, no self-heating), not "
    "a design rating: rely on measurement, applicable codes and licensed practice."
)

_NARROW = 60  # columns; below, each row of a table takes two lines
_WIDE = 100  # columns; from here on sources are shown
_MOST_PARTS, _KEPT_PARTS = 50, 10
_MOST_PAIRS = 15  # four-point resistances and probes
_MOST_LIMITS = 40
_FAR = 4.0  # standard errors from an exact form that deserve a mark

_STOPPED = {
    "relative_error": "asked error reached",
    "histories": "asked number of histories done",
    "max_seconds": "time limit reached",
    "event_limit": "limit of events reached",
    "interrupted": "interrupted",
}
_UNITS = (  # the first suffix that fits a key of summary.json
    ("_V_per_K", "V/K"),
    ("_W_per_K", "W/K"),
    ("_A2_per_Hz", "A²/Hz"),
    ("_ohm", "Ω"),
    ("_mV", "mV"),
    ("_A", "A"),
    ("_S", "S"),
    ("_W", "W"),
)
_NO_PREFIX = ("mV", "A²/Hz")


def print_result(result, console: Console) -> None:
    """Print everything a run found, compactly; numbers with one standard error."""
    page = _Page(console)
    page.line(_headline(result), "bold")
    if not result.converged:
        page.line(_not_converged(result), "bold")
    page.table("", _main_rows(result))
    _print_breakdown(result, page)
    _print_probes(result, page)
    heat_shown = _print_heat(result, page)
    _print_comparison(result.limits, page)
    _print_missing(result, page)
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
        self._plain = not _knows_greek(console.encoding)

    def text(self, text, style=""):
        return Text(ascii_text(text) if self._plain else text, style=style)

    def line(self, text, style=""):
        self.console.print(self.text(text, style))

    def table(self, title, rows, columns=None, right=()):
        """A table of texts; right: indices of the columns that end flush."""
        if not rows:
            return
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
        for index, name in enumerate(columns or [""] * len(rows[0])):
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


def _estimate(estimate, unit="", factor=1.0):
    """Value and error of an Estimate; an error that is missing reads n/a."""
    if estimate is None:
        return "n/a"
    error = math.nan if estimate.error is None else estimate.error * factor
    text = _scaled(estimate.value * factor, unit, error)
    if estimate.systematic:
        text += f", bias up to {_scaled(abs(estimate.systematic) * factor, unit, digits=2)}"
    return text


def _relative(estimate):
    """The relative error, such as '0.31 %'; 'exact' where nothing random enters."""
    if not estimate.value or estimate.error is None or not math.isfinite(estimate.error):
        return ""
    relative = estimate.error / abs(estimate.value)
    return "exact" if relative < ROUNDING else _percent(relative)


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
    if left == right:
        return f"{bias}, {format_number(left, 'K')}"
    return f"{bias}, {format_number(left, 'K')} left and {format_number(right, 'K')} right"


def _not_converged(result):
    if result.residual is None:
        return "Not converged: the asked error was not reached."
    residual = format_number(result.residual, digits=3)
    return f"Not converged (residual {residual}): values may still move by more than their errors."


def _main_rows(result):
    rows = []

    def add(name, estimate, unit="", text=None):
        if estimate is not None:
            rows.append([name, text or _estimate(estimate, unit), _relative(estimate)])

    resistance = result.resistance_ohm
    add("current", result.current_A, "A")
    if resistance is not None:
        error = math.nan if resistance.error is None else resistance.error
        kilo = format_estimate(resistance.value * 1e-3, error * 1e-3, "kΩ")
        add("resistance", resistance, text=kilo)
        rows.append(["", format_estimate(resistance.value, error, "Ω"), ""])
    if _differs(result.differential_resistance_ohm, resistance):
        add("differential resistance", result.differential_resistance_ohm, "Ω")
    add("conductance dI/dV", result.conductance_S, "S")
    add("transmission", result.transmission)
    rows.append(["ballistic resistance", _scaled(result.ballistic_resistance_ohm, "Ω"), "exact"])
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
    parts = order_parts(result.breakdown, length_nm)
    shown, rest = split_parts(parts, _MOST_PARTS, _KEPT_PARTS)
    rows = []
    for part in shown:
        value = part.resistance_ohm.value
        place = "" if part.kind == "interface" else format_place(part, length_nm)
        name = part.mechanism if part.kind == "piece" and part.mechanism else part.name
        if page.narrow:
            name, place = f"{name}, {place}" if place else name, ""
        text = _estimate(part.resistance_ohm, "Ω")
        rows.append([name, place, text, format_share(value, total)])
    if rest:
        value = sum(part.resistance_ohm.value for part in rest)
        name = f"the other {len(rest)} parts"
        rows.append([name, "", _scaled(value, "Ω", digits=4), format_share(value, total)])
    columns = ["part", "place", "resistance", "share"]
    page.table("Where the resistance sits", rows, columns, right=(1, 3))


def _print_probes(result, page):
    if not result.probes:
        return
    factor, unit = length_scale(result.scenario.channel.length_nm)
    potential_unit = "of the bias" if result.linear_response else "mV"
    rows = []
    for probe in result.probes[:_MOST_PAIRS]:
        place = format_number(probe.position_nm * factor, unit, 5)
        if probe.potential is None:
            rows.append([place, "n/a"])
            continue
        error = math.nan if probe.potential.error is None else probe.potential.error
        rows.append([place, format_estimate(probe.potential.value, error, potential_unit)])
    page.table("Voltage probes", rows, ["place", "potential"])
    _print_left_out(len(result.probes) - _MOST_PAIRS, page)
    rows = []
    for pair in (result.four_point or ())[:_MOST_PAIRS]:
        ends = [format_number(x * factor, digits=5) for x in (pair.from_nm, pair.to_nm)]
        rows.append([f"{ends[0]} – {ends[1]} {unit}", _estimate(pair.resistance_ohm, "Ω")])
    page.table("Four-point resistance", rows, ["between", "resistance"])
    _print_left_out(len(result.four_point or ()) - _MOST_PAIRS, page)


def _print_left_out(count, page):
    if count > 0:
        page.line(f"and {count} more in summary.json")


def _print_heat(result, page):
    """Print where the heat lands and the thermal numbers; return whether there was any."""
    rows = []
    heat = result.heat_W
    if heat is not None:
        rows += [
            ["heat in the left contact", _estimate(heat.left_contact, "W")],
            ["heat in the right contact", _estimate(heat.right_contact, "W")],
        ]
        inner = [("heat in the lattice", heat.lattice)]
        inner += [(f"heat in probe {i + 1}", probe) for i, probe in enumerate(heat.probes)]
        rows += [
            [name, _estimate(power, "W")]
            for name, power in inner
            if power is not None and (power.value or power.error)
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
    rows += [[name, _estimate(value, unit)] for name, value, unit in entries if value is not None]
    page.table("Heat", rows)
    return bool(rows)


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
    unasked = {"residual"} if result.scenario.noise else {"residual", "noise"}
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
