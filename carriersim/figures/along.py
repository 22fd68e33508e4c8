"""What panels with a position axis share: contacts, scatterers, probes, and curves over cells."""

from dataclasses import dataclass

import numpy as np

from carriersim.figures.style import STYLE, Style, spread, thin
from carriersim.formatting import format_number, length_scale

END = 0.035  # width of a contact, as a share of the channel
PROBE, SECTION, CONTACT, CLOSED = "probe", "section", "contact", "closed form"
_MAX_LABELS = 6  # point scatterers with their transmission written beside
_MAX_LINES = 60  # more of them become ticks at the upper edge
_DIAMOND = {"marker": "D", "mfc": "white", "mew": 1.5, "ms": 5.5}
_MAX_DIAMONDS = 40  # more probes get small marks


@dataclass(frozen=True)
class Along:
    """The position axis: drawn place = factor * nm; length: of the channel, as drawn."""

    factor: float
    unit: str
    length: float


def position_axis(result) -> Along:
    """The unit in which the channel of this result is described."""
    length_nm = result.scenario.channel.length_nm
    factor, unit = length_scale(length_nm)
    return Along(factor, unit, length_nm * factor)


def frame(ax, result, x: Along, style: Style = STYLE, *, labels=True) -> None:
    """Draw sections, contacts and point scatterers, and set the limits of the position axis.

    labels: write transmissions, or the number of scatterers, above the axes.
    """
    for index, section in enumerate(result.scenario.scattering.sections):
        start, end = section.from_nm * x.factor, section.to_nm * x.factor
        ax.axvspan(start, end, color=style.ground, lw=0, zorder=0,
                   label=None if index else SECTION)  # fmt: skip
    for start, end in ((-END, 0.0), (1.0, 1.0 + END)):
        ax.axvspan(start * x.length, end * x.length, color=style.faint, lw=0, zorder=0)
    _scatterers(ax, result, x, style, labels)
    ax.set_xlim(-END * x.length, (1.0 + END) * x.length)


def levels(ax, left, right, x: Along, style: Style = STYLE, label=CONTACT) -> None:
    """Draw what each contact imposes as a bar inside it."""
    ends = ((-END, 0.0, left), (1.0, 1.0 + END, right))
    for (start, end, level), name in zip(ends, (label, None), strict=True):
        ax.plot([start * x.length, end * x.length], [level, level], color=style.ink, lw=2.6,
                solid_capstyle="butt", label=name)  # fmt: skip


def _scatterers(ax, result, x, style, labels):
    contacts = result.scenario.contacts
    ends = ((0.0, contacts.left.transmission), (x.length, contacts.right.transmission))
    marks = [
        (point.position_nm * x.factor, point.transmission)
        for point in result.scenario.scattering.points
    ]
    marks += [(where, value) for where, value in ends if value != 1.0]
    if not marks:
        return
    marks.sort(key=lambda mark: mark[0])
    where = np.array([mark[0] for mark in marks])
    across = ax.get_xaxis_transform()
    few, some = len(marks) <= _MAX_LABELS, len(marks) <= _MAX_LINES
    ax.vlines(
        where[thin(where, 600)], 0.0 if some else 0.955, 1.0, transform=across, zorder=1,
        lw=0.9 if some else 0.5, color=style.soft if few or not some else style.faint,
        alpha=min(1.0, max(0.2, 300.0 / len(marks))),
    )  # fmt: skip
    if labels and few:
        _transmissions(ax, where / x.length, [value for _, value in marks], style)
    elif labels:
        name = "point scatterers" if result.scenario.channel.dimension == 1 else "planes"
        text = f"{len(marks)} {name} ({'grey lines' if some else 'ticks along the top'})"
        ax.text(0.5, 1.03, text, transform=ax.transAxes, ha="center", va="bottom",
                fontsize=style.small, color=style.soft)  # fmt: skip


def _transmissions(ax, places, values, style):
    texts = [_transmission(value) for value in values]
    room = 0.011 * max(len(text) for text in texts) + 0.03
    shares = (places + END) / (1.0 + 2.0 * END)
    height = ax.figure.get_size_inches()[1] * ax.get_position().height
    above = 1.0 + 0.16 / height
    for share, at, text in zip(shares, spread(shares, room, 0.04, 0.96), texts, strict=True):
        ax.annotate(
            text, (share, 1.0), (at, above), xycoords="axes fraction", textcoords="axes fraction",
            ha="center", va="bottom", fontsize=style.small, color=style.ink,
            arrowprops={"arrowstyle": "-", "color": style.soft, "lw": 0.8,
                        "shrinkA": 0, "shrinkB": 0, "relpos": (0.5, 0.0)},
        )  # fmt: skip


def _transmission(value):
    if isinstance(value, int | float):
        return f"T = {format_number(value, digits=3)}"
    return "T(E)"


def probes_at(ax, where, values, errors, style: Style = STYLE) -> None:
    """Draw diamonds with error bars (None: none) at drawn places and values."""
    ax.errorbar(where, values, errors, fmt="none", ecolor=style.probe, elinewidth=1.2,
                capsize=2.5, zorder=6)  # fmt: skip
    ax.plot(where, values, ls="", mec=style.probe, label=PROBE, zorder=6.1, **_DIAMOND)


def probes_on_edge(ax, result, x: Along, style: Style = STYLE) -> None:
    """Mark where probes sit by diamonds on the lower edge of the axes."""
    where = [probe.position_nm * x.factor for probe in result.scenario.probes]
    if where:
        mark = _DIAMOND if len(where) <= _MAX_DIAMONDS else {**_DIAMOND, "ms": 2.0, "mew": 0.8}
        ax.plot(where, np.zeros(len(where)), ls="", mec=style.probe, label=PROBE, zorder=6.1,
                transform=ax.get_xaxis_transform(), clip_on=False, **mark)  # fmt: skip


def curve(ax, result, name, x: Along, factor, style: Style = STYLE, **line):
    """Draw a field of cells, times factor, with a band of one standard error.

    line: its colour and style. Returns places and values as drawn.
    """
    where, value, error = to_edges(result, name, thin(result.x_nm))
    where, value = where * x.factor, value * factor
    ax.plot(where, value, **{"lw": style.line, "zorder": 3, **line})
    if error is not None:
        error = np.abs(error * factor)
        ax.fill_between(where, value - error, value + error, color=line["color"], alpha=0.3, lw=0)
    return where, value


def closed_form(ax, result, function, x: Along, factor, style: Style = STYLE) -> None:
    """Draw the curves of function(scenario, places in nm), times factor, as dashed lines.

    Nothing is drawn where there is no closed form: the function returns None or raises ValueError.
    """
    edges = result.cell_edges_nm
    edges = edges[thin(edges)]
    inset = 1e-6 * np.diff(edges)
    places = np.column_stack([edges[:-1] + inset, edges[1:] - inset]).ravel()
    try:
        curves = function(result.scenario, places)
    except ValueError:
        return
    for values, label in zip(curves or (), (CLOSED, None), strict=False):
        ax.plot(places * x.factor, np.asarray(values) * factor, color=style.ink, lw=0.9,
                ls=(0, (3.2, 3.2)), label=label, zorder=4)  # fmt: skip


def to_edges(result, name, keep):
    """Cell values at the centres, and once more at the ends of the channel and at each jump.

    A jump then stands upright where the scatterer or coupled probe is instead of leaning over two
    half cells. Returns places in nm, values, and errors or None.
    """
    edges, x = result.cell_edges_nm, result.x_nm
    values, errors = getattr(result, name), result.errors.get(name)
    jumps = [edges[0], edges[-1], *jump_places(result)]
    first, last = edges[keep], edges[keep + 1]
    left_ends, right_ends = np.isin(first, jumps), np.isin(last, jumps)
    index = np.concatenate([keep, keep[left_ends], keep[right_ends]])
    place_nm = np.concatenate([x[keep], first[left_ends], last[right_ends]])
    order = np.lexsort((index, place_nm))
    index, place_nm = index[order], place_nm[order]
    return place_nm, values[index], None if errors is None else np.nan_to_num(errors[index])


def jump_places(result) -> list[float]:
    """Where fields jump: places of point scatterers and coupled probes, nm."""
    places = [point.position_nm for point in result.scenario.scattering.points]
    return places + [p.position_nm for p in result.scenario.probes if p.coupling > 0.0]


def legend_below(ax, order=(), style: Style = STYLE, *, columns=None) -> None:
    """A legend below the axes, of two rows unless columns is given; labels in `order` first."""
    handles, labels = ax.get_legend_handles_labels()
    if not labels:
        return
    few = len(labels) <= 6
    rank = {label: index for index, label in enumerate(order)}
    sequence = sorted(range(len(labels)), key=lambda i: rank.get(labels[i], len(rank)))
    height = ax.figure.get_size_inches()[1] * ax.get_position().height
    ax.legend(
        [handles[i] for i in sequence],
        [labels[i] for i in sequence],
        loc="upper center",
        bbox_to_anchor=(0.5, -0.48 / height),
        ncols=columns or (3 if few else 4),
        fontsize=style.small,
        frameon=False,
        handlelength=2.4,
        columnspacing=1.6 if few else 1.2,
        labelcolor=style.ink,
    )
