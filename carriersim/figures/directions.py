"""Into which directions the current flows at some places, in two and three dimensions."""

import numpy as np

from carriersim.figures.style import STYLE, Style, dress, new_figure, place, ticks, write
from carriersim.formatting import format_number, length_scale

_RIGHT, _LEFT, _BALLISTIC = "right-moving", "left-moving", "ballistic: cosine law"
_COLUMNS = 3  # panels in a row
_MOST = 6  # places
_PANEL, _BETWEEN, _TOP, _BOTTOM = 1.75, 1.0, 0.46, 0.98  # heights in inches
_BEFORE, _AFTER, _GAP = 0.66, 0.18, 0.3  # widths in inches
_CAPTION = "Above each panel: area right − area left = net current, in % of the ballistic current."


def make_figure(result, style: Style = STYLE):
    """A figure of its own for `draw`; None where carriers have no directions."""
    if result.current_by_direction is None:
        return None
    rows = -(-_places(result).size // _COLUMNS)
    height = _TOP + rows * _PANEL + (rows - 1) * _BETWEEN + _BOTTOM
    figure = new_figure(style.width, height, style)
    draw(figure, result, style)
    return figure


def draw(figure, result, style: Style = STYLE):
    """Draw the current against the angle to the axis, a panel a place; return the axes.

    Per cent of the ballistic current per degree, with bands of one standard error: carriers that
    move right at angles up to 90 degrees, carriers that move left beyond. The right contact's own
    filling, which moves both ways alike, is left out. Right less left, as areas, is the
    transmission. At most six places. Raises ValueError where carriers have no directions.
    """
    if result.current_by_direction is None:
        raise ValueError(f"no directions: {result.why.get('long_channel', 'one dimension')}")
    shown = _places(result)
    values, errors = percent_per_degree(result)
    angle, law = cosine_law(result)
    low = min(0.0, 1.05 * values[shown].min())
    high = 1.08 * max(law.max(), (values + errors)[shown].max())
    width, height = figure.get_size_inches()
    columns = min(shown.size, _COLUMNS)
    room = (width - _BEFORE - _AFTER - (columns - 1) * _GAP) / columns
    axes = []
    for index, view in enumerate(shown):
        row, column = divmod(index, _COLUMNS)
        left, above = _BEFORE + column * (room + _GAP), _TOP + row * (_PANEL + _BETWEEN)
        ax = place(figure, left, width - left - room, height - above - _PANEL, above)
        dress(ax, style)
        _curves(ax, result.direction_deg, values[view], errors[view], style)
        ax.plot(angle, law, color=style.ink, lw=0.9, ls=(0, (3.2, 3.2)), label=_BALLISTIC, zorder=4)
        ax.axvline(90.0, color=style.faint, lw=0.8, zorder=0)
        ax.set_xlim(0.0, 180.0)
        ax.set_ylim(low, high)
        ax.set_xticks([0.0, 45.0, 90.0, 135.0, 180.0], ["0", "", "90", "", "180"])
        ticks(ax, y=4)
        if column:
            ax.tick_params(axis="y", labelleft=False)
        label = "" if column else "current per degree\n(% of the ballistic current)"
        write(ax, style, x="angle to axis (°)", y=label, beside=0.44, above=0.22,
              title=_title(result, view))  # fmt: skip
        ax.text(0.5, 1.0 + 0.05 / _PANEL, _areas(result, values[view]), transform=ax.transAxes,
                ha="center", va="bottom", fontsize=style.small, color=style.soft)  # fmt: skip
        axes.append(ax)
    handles, labels = axes[0].get_legend_handles_labels()
    figure.legend(
        handles, labels, loc="lower center", bbox_to_anchor=(0.5, 0.3 / height), ncols=3,
        fontsize=style.small, frameon=False, handlelength=2.4, columnspacing=1.6,
        borderaxespad=0.0, borderpad=0.0, labelcolor=style.ink,
    )  # fmt: skip
    figure.text(0.5, 0.08 / height, _CAPTION, ha="center", va="bottom", fontsize=style.small,
                color=style.soft)  # fmt: skip
    return axes


def percent_per_degree(result):
    """Current by direction and its standard error in per cent of the ballistic current per degree.

    (V, 2, D) each. The ballistic current is V/R_B; of dI/dV it is 1/R_B.
    """
    scenario = result.scenario
    unequal = scenario.left_temperature_K != scenario.right_temperature_K
    slope = result.linear_response or (unequal and not result.relaxes)
    volts = 1.0 if slope else 1e-3 * scenario.contacts.bias_mV
    factor = 100.0 * result.ballistic_resistance_ohm / volts
    values = result.current_by_direction
    errors = result.errors.get("current_by_direction", np.zeros_like(values))
    return factor * values, np.abs(factor) * np.nan_to_num(errors)


def cosine_law(result):
    """Angles in degrees, and the current per degree, in per cent, of carriers fresh from a contact.

    The flux into an angle goes as its cosine times the directions there are: cos in two
    dimensions, 2 sin cos in three, per radian.
    """
    angle = np.linspace(0.0, 90.0, 91)
    theta = np.radians(angle)
    density = np.cos(theta)
    if result.scenario.channel.dimension == 3:
        density = 2.0 * np.sin(theta) * np.cos(theta)
    return angle, 100.0 * np.radians(1.0) * density


def _places(result):
    """Indices of the views that are shown: all of them, or six spread over them."""
    count = result.view_nm.size
    return np.unique(np.linspace(0, count - 1, min(count, _MOST)).round().astype(int))


def _curves(ax, angle, values, errors, style):
    for side, where, label, colour, dashes in (
        (0, angle, _RIGHT, style.right_moving, style.right_dashes),
        (1, 180.0 - angle, _LEFT, style.left_moving, style.left_dashes),
    ):
        value, error = values[side], errors[side]
        ax.plot(where, value, color=colour, ls=dashes, lw=style.line, label=label, zorder=3)
        ax.fill_between(where, value - error, value + error, color=colour, alpha=0.3, lw=0)


def _title(result, view):
    where, length = result.view_nm[view], result.scenario.channel.length_nm
    if where == 0.0:
        return "left contact"
    if where == length:
        return "right contact"
    factor, unit = length_scale(length)
    return format_number(where * factor, unit, 4)


def _areas(result, values):
    """Areas under both curves and their difference, such as '88.1 − 49.5 = 38.6 %'."""
    right, left = values.sum(axis=1) * 90.0 / result.direction_deg.size
    sign = "−" if left >= 0.0 else "+"
    return f"{right:.1f} {sign} {abs(left):.1f} = {right - left:.1f} %".replace("-", "−")
