"""Electrochemical potentials along the channel."""

from dataclasses import dataclass

import numpy as np

from carriersim.figures.style import (
    STYLE,
    Style,
    dress,
    new_figure,
    place,
    spread,
    thin,
    ticks,
    write,
)
from carriersim.formatting import format_number, length_scale, unit_scale

_MAX_LABELS = 6  # point scatterers with their transmission written beside
_MAX_LINES = 60  # more of them become ticks at the upper edge
_END = 0.035  # width of a contact, as a share of the channel
_RIGHT, _MEAN, _LEFT = "right-moving, μ₊", "mean of both", "left-moving, μ₋"
_CLOSED, _CONTACT, _PROBE, _SECTION = "closed form", "contact level", "probe", "section"
_LEGEND = (_RIGHT, _MEAN, _LEFT, _CLOSED, _CONTACT, _PROBE, _SECTION)


@dataclass(frozen=True)
class _Scales:
    x: float
    y: float
    length: float  # of the channel, as drawn


def make_figure(result, style: Style = STYLE):
    """A figure of its own for `draw`."""
    figure = new_figure(style.width, 3.9, style)
    draw(place(figure, 0.68, 0.2, 1.02, 0.42), result, style)
    return figure


def draw(ax, result, style: Style = STYLE):
    """Draw mu+, mu- and their mean with bands of one standard error; return the axes.

    Potentials in meV (with a prefix for small and large biases), for bias 0 per unit of the bias.
    Scatterers, sections, probes, both contacts and, where there is one, the closed form.
    """
    length_nm = result.scenario.channel.length_nm
    x_factor, x_unit = length_scale(length_nm)
    left_level = 1.0 if result.linear_response else result.scenario.contacts.bias_mV
    y_factor, y_label = _potential_unit(result, left_level)
    scales = _Scales(x_factor, y_factor, length_nm * x_factor)

    dress(ax, style)
    _sections(ax, result, scales, style)
    _contacts(ax, left_level * y_factor, scales, style)
    _scatterers(ax, result, scales, style)
    _curves(ax, result, scales, style)
    _closed_form(ax, result, scales, style)
    _probes(ax, result, scales, style)

    ax.set_xlim(-_END * scales.length, (1.0 + _END) * scales.length)
    ax.set_ylim(*_limits(result, left_level, y_factor))
    write(ax, style, x=f"position along the channel ({x_unit})", y=y_label)
    ticks(ax, x=5, y=5)
    handles, labels = ax.get_legend_handles_labels()
    order = sorted(range(len(labels)), key=lambda i: _LEGEND.index(labels[i]))
    ax.legend(
        [handles[i] for i in order],
        [labels[i] for i in order],
        loc="upper center",
        bbox_to_anchor=(0.5, -0.19),
        ncols=3,
        fontsize=style.small,
        frameon=False,
        handlelength=2.4,
        columnspacing=1.6,
        labelcolor=style.ink,
    )
    return ax


def _potential_unit(result, left_level):
    if result.linear_response:
        return 1.0, "potential per unit of the bias"
    largest = max(abs(left_level), float(np.nanmax(np.abs(result.mu_meV), initial=0.0)))
    factor, unit = unit_scale(largest * 1e-3, "eV")
    # meV and mV are what bias and probes are given in: keep them over a wide range.
    if 1e-2 <= largest < 1e4:
        factor, unit = 1e3, "meV"
    return factor * 1e-3, f"electrochemical potential ({unit})"


def _limits(result, left_level, factor):
    curves = (result.mu_plus_meV, result.mu_minus_meV)
    seen = [0.0, left_level, *(getattr(np, f)(c) for c in curves for f in ("nanmin", "nanmax"))]
    low, high = min(seen) * factor, max(seen) * factor
    room = 0.06 * (high - low) or 1.0
    return low - room, high + room


def _sections(ax, result, scales, style):
    sections = result.scenario.scattering.sections
    for index, section in enumerate(sections):
        start, end = section.from_nm * scales.x, section.to_nm * scales.x
        label = _SECTION if index == 0 else None
        ax.axvspan(start, end, color=style.ground, lw=0, zorder=0, label=label)


def _contacts(ax, left, scales, style):
    ends = ((-_END, 0.0, left), (1.0, 1.0 + _END, 0.0))
    for (start, end, level), label in zip(ends, (_CONTACT, None), strict=True):
        start, end = start * scales.length, end * scales.length
        ax.axvspan(start, end, color=style.faint, lw=0, zorder=0)
        ax.plot([start, end], [level, level], color=style.ink, lw=2.6, solid_capstyle="butt",
                label=label)  # fmt: skip


def _scatterers(ax, result, scales, style):
    contacts = result.scenario.contacts
    marks = [(point.position_nm, point.transmission) for point in result.scenario.scattering.points]
    ends = ((0.0, contacts.left.transmission), (scales.length, contacts.right.transmission))
    marks = [(where * scales.x, value) for where, value in marks]
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
    if not few:
        text = f"{len(marks)} point scatterers ({'grey lines' if some else 'ticks along the top'})"
        ax.text(0.5, 1.03, text, transform=ax.transAxes, ha="center", va="bottom",
                fontsize=style.small, color=style.soft)  # fmt: skip
        return
    labels = [_transmission(value) for _, value in marks]
    room = 0.011 * max(len(label) for label in labels) + 0.03
    shares = (where / scales.length + _END) / (1.0 + 2.0 * _END)
    for share, at, label in zip(shares, spread(shares, room, 0.04, 0.96), labels, strict=True):
        ax.annotate(
            label, (share, 1.0), (at, 1.065), xycoords="axes fraction", textcoords="axes fraction",
            ha="center", va="bottom", fontsize=style.small, color=style.ink,
            arrowprops={"arrowstyle": "-", "color": style.soft, "lw": 0.8,
                        "shrinkA": 0, "shrinkB": 0, "relpos": (0.5, 0.0)},
        )  # fmt: skip


def _transmission(value):
    if isinstance(value, int | float):
        return f"T = {format_number(value, digits=3)}"
    return "T(E)"


def _curves(ax, result, scales, style):
    curves = (
        ("mu_plus_meV", _RIGHT, style.right_moving, style.right_dashes),
        ("mu_meV", _MEAN, style.mean, style.mean_dashes),
        ("mu_minus_meV", _LEFT, style.left_moving, style.left_dashes),
    )
    keep = thin(result.x_nm)
    for name, label, colour, dashes in curves:
        x, value, error = _to_edges(result, name, keep)
        x, value = x * scales.x, value * scales.y
        ax.plot(x, value, color=colour, ls=dashes, lw=style.line, label=label, zorder=3)
        if error is not None:
            error = error * scales.y
            ax.fill_between(x, value - error, value + error, color=colour, alpha=0.3, lw=0)


def _to_edges(result, name, keep):
    """Cell values at the centres, and once more at the ends of the channel and at each scatterer.

    A jump then stands upright where the scatterer is instead of leaning over two half cells.
    """
    edges, x = result.cell_edges_nm, result.x_nm
    values, errors = getattr(result, name), result.errors.get(name)
    points = {point.position_nm for point in result.scenario.scattering.points}
    points |= {edges[0], edges[-1]}
    first, last = edges[keep], edges[keep + 1]
    left_ends = np.isin(first, list(points))
    right_ends = np.isin(last, list(points))
    index = np.concatenate([keep, keep[left_ends], keep[right_ends]])
    place_nm = np.concatenate([x[keep], first[left_ends], last[right_ends]])
    order = np.lexsort((index, place_nm))
    index, place_nm = index[order], place_nm[order]
    return place_nm, values[index], None if errors is None else np.nan_to_num(errors[index])


def _closed_form(ax, result, scales, style):
    edges = result.cell_edges_nm
    edges = edges[thin(edges)]
    inset = 1e-6 * np.diff(edges)
    x = np.column_stack([edges[:-1] + inset, edges[1:] - inset]).ravel()
    curves = _closed_potentials(result.scenario, x)
    if curves is None:
        return
    for curve, label in zip(curves, (_CLOSED, None), strict=True):
        ax.plot(x * scales.x, np.asarray(curve) * scales.y, color=style.ink, lw=0.9,
                ls=(0, (3.2, 3.2)), label=label, zorder=4)  # fmt: skip


def _closed_potentials(scenario, x_nm):
    """(mu+, mu-) of the closed form at x_nm, or None where there is none."""
    from carriersim import limits

    return limits.profile(scenario, x_nm)


def _probes(ax, result, scales, style):
    read = [probe for probe in result.probes if probe.potential is not None]
    if not read:
        return
    where = [probe.position_nm * scales.x for probe in read]
    values = [probe.potential.value * scales.y for probe in read]
    errors = [abs(np.nan_to_num(probe.potential.error or 0.0)) * scales.y for probe in read]
    ax.errorbar(where, values, errors, fmt="D", ms=5.5, mfc="white", mec=style.probe, mew=1.5,
                ecolor=style.probe, elinewidth=1.2, capsize=2.5, label=_PROBE,
                zorder=6)  # fmt: skip
