"""Where the power I V lands: lattice, contacts and probes."""

import numpy as np

from carriersim.figures import along
from carriersim.figures.rows import COLUMNS, SHOWN_ERROR, error_of, value_of, write_columns
from carriersim.figures.style import STYLE, Style, dress, new_figure, place, ticks, write
from carriersim.formatting import format_number, unit_scale

_POWER = "lattice (area: its share)"
_MOST_ROWS = 12
_KEPT_PROBES = 8  # of more probes, the others are summed
_TOP, _ROW, _BETWEEN, _LOWER, _BOTTOM = 0.3, 0.26, 0.95, 2.0, 0.8  # heights in inches
_LARGEST_SHARE = 10.0  # where a part exceeds the whole more than so many times, no shares
_FEWEST_SIGMA = 5.0  # shares of a whole known less well than this are not shown


def make_figure(result, style: Style = STYLE):
    """A figure of its own: shares of the power above, and power to the lattice along the channel.

    None where no energies relax or no power is known.
    """
    if not _known(result):
        return None
    along_too = _lattice_takes(result)
    block = len(_rows(result)) * _ROW
    lower = _BETWEEN + _LOWER + _BOTTOM if along_too else 0.75
    height = _TOP + block + lower
    figure = new_figure(style.width, height, style)
    draw_shares(place(figure, 1.5, COLUMNS, height - _TOP - block, _TOP), result, style)
    if along_too:
        draw(place(figure, 0.72, 0.2, _BOTTOM, _TOP + block + _BETWEEN), result, style)
    return figure


def _known(result):
    heat = result.heat_W
    if not result.relaxes or result.linear_response or heat is None:
        return False
    parts = (heat.left_contact, heat.lattice, heat.right_contact)
    return all(part is not None for part in parts) and any(part.value for part in parts)


def _lattice_takes(result):
    kinds = {mechanism.kind for mechanism in result.scenario.relaxation.mechanisms}
    power = result.lattice_power_W_per_nm
    return bool(kinds & {"bath", "optical_phonon"}) and bool(np.isfinite(power).any())


def _rows(result):
    """(label, estimate or value, colour's name) of each row, from the left contact to the right."""
    heat, scenario = result.heat_W, result.scenario
    x = along.position_axis(result)
    probes = [
        (f"probe, {format_number(probe.position_nm * x.factor, digits=5)} {x.unit}", part, "probe")
        for probe, part in zip(scenario.probes, heat.probes, strict=False)
        if probe.coupling > 0.0 and part is not None
    ]
    if len(probes) + 3 > _MOST_ROWS:
        ranks = sorted(range(len(probes)), key=lambda i: -abs(probes[i][1].value))
        kept = sorted(ranks[:_KEPT_PROBES])
        rest = sum(probes[i][1].value for i in ranks[_KEPT_PROBES:])
        others = f"the other {len(probes) - len(kept)} probes"
        probes = [*(probes[i] for i in kept), (others, rest, "probe")]
    lattice = [("lattice", heat.lattice, "lattice")] if _lattice_takes(result) else []
    return [
        ("left contact", heat.left_contact, "interface"),
        *lattice,
        *probes,
        ("right contact", heat.right_contact, "interface"),
    ]


def _whole(rows):
    """I V in W if shares of it mean something, else None."""
    values = [value_of(part) for _, part, _ in rows]
    error = np.sqrt(sum(np.nan_to_num(error_of(part)) ** 2 for _, part, _ in rows))
    whole = sum(values)
    least = max(_FEWEST_SIGMA * error, max(abs(value) for value in values) / _LARGEST_SHARE)
    return whole if whole > least else None


def draw_shares(ax, result, style: Style = STYLE):
    """Draw one bar for each place where power lands, in per cent of I V; return the axes.

    Contacts, lattice and coupled probes, with value, error and share. Bars are in W with a prefix
    where I V is no measure, as between contacts of different temperatures. Whiskers: one standard
    error. Raises ValueError where no power is known.
    """
    _demand(result)
    rows = _rows(result)
    whole = _whole(rows)
    if whole is None:
        factor, unit = unit_scale(max(abs(value_of(part)) for _, part, _ in rows), "W")
        label = f"power that lands there ({unit})"
    else:
        factor, label = 100.0 / whole, "share of I V (%)"
    values = factor * np.array([value_of(part) for _, part, _ in rows])
    errors = factor * np.nan_to_num([error_of(part) for _, part, _ in rows])
    at = np.arange(len(rows))
    dress(ax, style)
    ax.barh(at, values, height=0.66, color=[style.colour_of(kind) for *_, kind in rows],
            ec=style.ink, lw=0.6, zorder=3)  # fmt: skip
    seen = errors > SHOWN_ERROR * np.abs(values).max()
    if seen.any():
        ax.errorbar(values[seen], at[seen], xerr=errors[seen], fmt="none", ecolor=style.ink,
                    elinewidth=1.0, capsize=2.0, zorder=4)  # fmt: skip
    write_columns(ax, [part for _, part, _ in rows], whole, "W", style)
    low, high = min(0.0, (values - errors).min()), max(0.0, (values + errors).max())
    ax.set_xlim(low - (0.02 * (high - low) if low < 0.0 else 0.0), high + 0.02 * (high - low))
    ax.set_ylim(len(rows) - 0.45, -0.55)
    if low < 0.0:
        ax.axvline(0.0, color=style.soft, lw=0.8, zorder=2)
    ax.tick_params(axis="y", length=0)
    ax.set_yticks(at, [name for name, *_ in rows])
    ticks(ax, x=4)
    write(ax, style, x=label, below=0.34)
    return ax


def draw(ax, result, style: Style = STYLE):
    """Draw the power that the lattice takes per length, with a band of one standard error.

    Returns the axes. Raises ValueError where no power is known.
    """
    _demand(result)
    x = along.position_axis(result)
    power = result.lattice_power_W_per_nm / x.factor
    prefix, unit = unit_scale(float(np.nanmax(np.abs(power), initial=0.0)), "W")
    factor = prefix / x.factor
    dress(ax, style)
    along.frame(ax, result, x, style)
    name, colour = "lattice_power_W_per_nm", style.lattice
    where, value = along.curve(ax, result, name, x, factor, style, color=colour, label=_POWER)
    ax.fill_between(where, 0.0, value, color=colour, alpha=0.16, lw=0)
    along.closed_form(ax, result, _closed_form, x, factor, style)
    low, high = _power_limits(result, factor)
    ax.set_ylim(low, high)
    if low < 0.0:
        ax.axhline(0.0, color=style.soft, lw=0.8, zorder=1)
    along.probes_on_edge(ax, result, x, style)
    ticks(ax, x=5, y=4)
    write(ax, style, x=f"position along the channel ({x.unit})",
          y=f"power to the lattice ({unit}/{x.unit})")  # fmt: skip
    along.legend_below(ax, (_POWER, along.CLOSED), style, columns=4)
    return ax


def _closed_form(scenario, x_nm):
    """One curve: the lattice's power at x_nm. Raises ValueError where there is no closed form."""
    from carriersim import limits

    return (limits.lattice_power_W_per_nm(scenario, x_nm),)


def _power_limits(result, factor):
    power = result.lattice_power_W_per_nm * factor
    error = result.errors.get("lattice_power_W_per_nm")
    error = 0.0 if error is None else np.abs(np.nan_to_num(error * factor))
    low = min(0.0, float(np.nanmin(power - error)))
    high = max(0.0, float(np.nanmax(power + error)))
    room = 0.06 * (high - low) or 1.0
    return (low - room if low < 0.0 else 0.0), high + room


def _demand(result):
    if not _known(result):
        reason = result.why.get("heat_W", "no energies relax")
        raise ValueError(f"no power to show: {reason}")
