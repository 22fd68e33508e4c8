"""Electrochemical potentials along the channel."""

import numpy as np

from carriersim.figures import along
from carriersim.figures.style import STYLE, Style, dress, new_figure, place, ticks, write
from carriersim.formatting import unit_scale

_RIGHT, _MEAN, _LEFT = "right-moving, μ₊", "mean of both", "left-moving, μ₋"
_CONTACT = "contact level"
_LEGEND = (_RIGHT, _MEAN, _LEFT, along.CLOSED, _CONTACT, along.PROBE, along.SECTION)


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
    x = along.position_axis(result)
    left_level = 1.0 if result.linear_response else result.scenario.contacts.bias_mV
    factor, y_label = _potential_unit(result, left_level)

    dress(ax, style)
    along.frame(ax, result, x, style)
    along.levels(ax, left_level * factor, 0.0, x, style, _CONTACT)
    _curves(ax, result, x, factor, style)
    along.closed_form(ax, result, _closed_form, x, factor, style)
    _probes(ax, result, x, factor, style)

    ax.set_ylim(*_limits(result, left_level, factor))
    write(ax, style, x=f"position along the channel ({x.unit})", y=y_label)
    ticks(ax, x=5, y=5)
    along.legend_below(ax, _LEGEND, style)
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


def _curves(ax, result, x, factor, style):
    for name, label, colour, dashes in (
        ("mu_plus_meV", _RIGHT, style.right_moving, style.right_dashes),
        ("mu_meV", _MEAN, style.mean, style.mean_dashes),
        ("mu_minus_meV", _LEFT, style.left_moving, style.left_dashes),
    ):
        along.curve(ax, result, name, x, factor, style, color=colour, ls=dashes, label=label)


def _closed_form(scenario, x_nm):
    """(mu+, mu-) at x_nm. Raises ValueError where relaxation leaves no closed form."""
    from carriersim import limits

    if scenario.channel.dimension != 1:
        return limits.space_profile(scenario, x_nm)
    coupled = any(probe.coupling > 0.0 for probe in scenario.probes)
    if coupled or scenario.relaxation.mechanisms:
        scenario = limits.number_transport(scenario)
    return limits.profile(scenario, x_nm)


def _probes(ax, result, x, factor, style):
    read = [probe for probe in result.probes if probe.potential is not None]
    if not read:
        return
    where = [probe.position_nm * x.factor for probe in read]
    values = [probe.potential.value * factor for probe in read]
    errors = [abs(np.nan_to_num(probe.potential.error or 0.0)) * factor for probe in read]
    along.probes_at(ax, where, values, errors, style)
