"""Where the resistance sits."""

import numpy as np

from carriersim.figures.rows import COLUMNS, SHOWN_ERROR, error_of, value_of, write_columns
from carriersim.figures.style import STYLE, Style, dress, new_figure, place, thin, ticks, write
from carriersim.formatting import (
    format_place,
    group_name,
    length_scale,
    order_parts,
    split_parts,
    unit_scale,
)

_MOST_ROWS = 12
_MOST_SEGMENTS = 2000  # of more parts only the outline is drawn along the channel
_TOP, _ROW, _BETWEEN, _LOWER, _BOTTOM = 0.3, 0.26, 0.78, 1.75, 0.5  # heights in inches
_LONGEST_NAME = 34  # letters of a part with its place; of longer names the end is cut
_LETTER = 0.065  # inches


def make_figure(result, style: Style = STYLE):
    """A figure of its own: the parts one below the other, and their sum along the channel.

    None where the result has no breakdown or no resistance to break down.
    """
    if not _has_parts(result):
        return None
    parts = order_parts(result.breakdown, result.scenario.channel.length_nm)
    rows = _rows(parts, result)
    block = len(rows) * _ROW
    left = min(0.12 + _LETTER * max(len(label) for label, *_ in rows), 2.25)
    height = _TOP + block + _BETWEEN + _LOWER + _BOTTOM
    figure = new_figure(style.width, height, style)
    draw(place(figure, left, COLUMNS, height - _TOP - block, _TOP), result, style)
    draw_along(place(figure, 0.72, 0.2, _BOTTOM, _TOP + block + _BETWEEN), result, style)
    return figure


def _has_parts(result):
    return bool(result.breakdown) and sum(_values(result.breakdown)) != 0.0


def _values(parts):
    return [part.resistance_ohm.value for part in parts]


def _scale(parts):
    return unit_scale(abs(sum(_values(parts))), "Ω")


def _rows(parts, result):
    """(label, estimate, kind) of each row; of many parts the sums of each kind."""
    length = result.scenario.channel.length_nm
    with_resistance, rest = split_parts(parts, _MOST_ROWS, _MOST_ROWS)
    if not rest:
        return [(_label(part, length), part.resistance_ohm, part.kind) for part in with_resistance]
    sums = [(group_name(s), s.resistance_ohm, s.kind) for s in result.sums]
    ends = [(p.name, p.resistance_ohm, p.kind) for p in parts if p.kind == "interface"]
    return [*ends[:1], *sums, *ends[1:]]


def _label(part, length_nm):
    where = format_place(part, length_nm)
    if part.kind == "interface":
        return part.name
    name = part.mechanism if part.kind == "piece" and part.mechanism else part.name
    room = _LONGEST_NAME - len(where)
    if len(name) > room:
        name = name.replace("optical phonon", "phonon")
    if len(name) > room:
        name = name[: max(room - 1, 3)] + "…"
    return f"{name}, {where}"


def draw(ax, result, style: Style = STYLE):
    """Draw the parts as steps of one staircase from 0 to R; return the axes.

    One row for each part from left to right along the channel, with value, error and share; of more
    than 12 parts the contacts and the sum of each kind. Whiskers: one standard error. Raises
    ValueError where the result has no breakdown.
    """
    if not _has_parts(result):
        raise ValueError(f"no breakdown: {result.why.get('breakdown', 'there is no resistance')}")
    parts = order_parts(result.breakdown, result.scenario.channel.length_nm)
    rows = _rows(parts, result)
    total = sum(_values(parts))
    factor, unit = _scale(parts)
    dress(ax, style)
    reached = 0.0
    starts, sizes, errors, colours = [], [], [], []
    for _, estimate, kind in rows:
        starts.append(reached * factor)
        sizes.append(value_of(estimate) * factor)
        errors.append(error_of(estimate) * factor)
        colours.append(style.colour_of(kind))
        reached += value_of(estimate)
    at = np.arange(len(rows))
    ends = np.add(starts, sizes)
    ax.barh(at, sizes, left=starts, height=0.66, color=colours, ec=style.ink, lw=0.6,
                   zorder=3)  # fmt: skip
    ax.vlines(ends[:-1], at[:-1] + 0.33, at[1:] - 0.33, color=style.soft, lw=0.7)
    seen = np.nan_to_num(errors) > SHOWN_ERROR * total * factor
    if seen.any():
        ax.errorbar(ends[seen], at[seen], xerr=np.array(errors)[seen], fmt="none",
                    ecolor=style.ink, elinewidth=1.0, capsize=2.0, zorder=4)  # fmt: skip
    write_columns(ax, [estimate for _, estimate, _ in rows], total, "Ω", style)
    ax.set_ylim(len(rows) - 0.45, -0.55)
    low, high = min(0.0, ends.min()), max(0.0, ends.max())
    ax.set_xlim(low, high + 0.02 * (high - low))
    ax.spines["left"].set_position(("data", 0.0))
    ax.tick_params(axis="y", length=0)
    ax.set_yticks(at, [label for label, *_ in rows])
    ticks(ax, x=4)
    write(ax, style, x=f"resistance, added up from the left ({unit})", below=0.34)
    return ax


def draw_along(ax, result, style: Style = STYLE):
    """Draw the resistance between the left contact and x, in ohm with a prefix; return the axes.

    Upright steps are contacts, scatterers and probes, slopes are distributed scattering. Raises
    ValueError where the result has no breakdown.
    """
    if not _has_parts(result):
        raise ValueError(f"no breakdown: {result.why.get('breakdown', 'there is no resistance')}")
    length_nm = result.scenario.channel.length_nm
    parts = order_parts(result.breakdown, length_nm)
    factor, unit = _scale(parts)
    x_factor, x_unit = length_scale(length_nm)
    dress(ax, style)
    x, height, kinds = _staircase(parts)
    x, height = x * x_factor, height * factor
    if len(parts) > _MOST_SEGMENTS:
        x, height = x.ravel(), height.ravel()
        keep = thin(x)
        ax.plot(x[keep], height[keep], color=style.ink, lw=style.line)
    else:
        for kind, (label, colour) in _legend(style).items():
            own = np.flatnonzero(kinds == kind)
            if own.size:
                ax.plot(_broken(x, own), _broken(height, own), color=colour, lw=style.line + 0.6,
                        solid_capstyle="butt", label=label)  # fmt: skip
        ax.legend(loc="upper left", fontsize=style.small, frameon=False, labelcolor=style.ink,
                  handlelength=1.6, borderaxespad=0.2)  # fmt: skip
    length, total = length_nm * x_factor, sum(_values(parts)) * factor
    ax.set_xlim(-0.02 * length, 1.02 * length)
    ax.set_ylim(min(0.0, 1.05 * total), max(0.0, 1.05 * total))
    ticks(ax, x=5, y=4)
    write(ax, style, x=f"position along the channel ({x_unit})",
          y=f"resistance left of it ({unit})")  # fmt: skip
    return ax


def _legend(style):
    return {
        "interface": ("contact", style.soft),
        "point": ("point scatterer", style.point),
        "probe": ("probe", style.probe),
        "piece": ("distributed", style.piece),
        "ballistic": ("ballistic", style.faint),
    }


def _staircase(parts):
    """Ends of the segments, (parts, 2) each: place in nm, resistance reached in ohm; and kinds.

    Mechanisms that share a piece rise together along it.
    """
    places, heights, kinds = [], [], []
    reached, index = 0.0, 0
    while index < len(parts):
        part = parts[index]
        span = (part.from_nm, part.to_nm)
        size = part.resistance_ohm.value
        index += 1
        if part.kind == "piece":
            while index < len(parts) and (parts[index].from_nm, parts[index].to_nm) == span:
                size += parts[index].resistance_ohm.value
                index += 1
        else:
            span = (part.position_nm, part.position_nm)
        places.append(span)
        heights.append((reached, reached + size))
        kinds.append("ballistic" if size == 0.0 and part.kind == "piece" else part.kind)
        reached += size
    return np.array(places, float), np.array(heights), np.array(kinds)


def _broken(values, own):
    """The segments `own` one after the other with gaps between."""
    return np.column_stack([values[own], np.full(own.size, np.nan)]).ravel()
