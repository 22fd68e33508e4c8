"""How hot the carriers are along the channel."""

import numpy as np

from carriersim.figures import along
from carriersim.figures.style import STYLE, Style, dress, new_figure, place, ticks, write
from carriersim.formatting import unit_scale

_RIGHT, _MEAN, _LEFT = "right-moving", "mean, with drift", "left-moving"
_LATTICE, _CONTACT = "lattice", "contact"
_LEGEND = (_RIGHT, _MEAN, _LEFT, along.CLOSED, _CONTACT, _LATTICE, along.PROBE, along.SECTION)
_FIELDS = ("carrier_temperature_plus_K", "carrier_temperature_K", "carrier_temperature_minus_K")
_LEAST_SPAN = 0.02  # of the vertical axis, as a share of the highest temperature
_FEWEST_ERRORS = 8.0  # the vertical axis spans at least so many standard errors


def make_figure(result, style: Style = STYLE):
    """A figure of its own for `draw`; None where no energies relax or no temperatures are known."""
    if not _known(result):
        return None
    figure = new_figure(style.width, 3.9, style)
    draw(place(figure, 0.68, 0.2, 1.02, 0.42), result, style)
    return figure


def _known(result):
    known = any(np.isfinite(getattr(result, name)).any() for name in _FIELDS)
    return result.relaxes and not result.linear_response and known


def draw(ax, result, style: Style = STYLE):
    """Draw T_e of both directions and of their mean, with bands of one standard error; return axes.

    In K with a prefix. Beside them the lattice, both contacts, the coupled probes and, where there
    is one, the closed form. Raises ValueError where there are no carrier temperatures.
    """
    if not _known(result):
        raise ValueError("no carrier temperatures: no relaxation, bias 0, or modes of energy")
    x = along.position_axis(result)
    low, high = _limits(result)
    factor, unit = unit_scale(high, "K")

    dress(ax, style)
    along.frame(ax, result, x, style)
    _references(ax, result, x, factor, style)
    for name, label, colour, dashes in zip(
        _FIELDS,
        (_RIGHT, _MEAN, _LEFT),
        (style.right_moving, style.mean, style.left_moving),
        (style.right_dashes, style.mean_dashes, style.left_dashes),
        strict=True,
    ):
        along.curve(ax, result, name, x, factor, style, color=colour, ls=dashes, label=label)

    along.closed_form(ax, result, _closed_form, x, factor, style)
    ax.set_ylim(low * factor, high * factor)
    ax.ticklabel_format(axis="y", useOffset=False)
    write(ax, style, x=f"position along the channel ({x.unit})", y=f"carrier temperature ({unit})")
    ticks(ax, x=5, y=5)
    along.legend_below(ax, _LEGEND, style)
    return ax


def _references(ax, result, x, factor, style):
    scenario = result.scenario
    left, right = scenario.left_temperature_K, scenario.right_temperature_K
    along.levels(ax, left * factor, right * factor, x, style, _CONTACT)
    bath = scenario.bath_temperature_K
    ax.plot([0.0, x.length], [bath * factor] * 2, color=style.lattice, lw=1.3, ls=(0, (4, 2)),
            label=_LATTICE, zorder=2)  # fmt: skip
    coupled = _coupled(scenario)
    if coupled:
        where, kelvin = np.array(coupled).T
        along.probes_at(ax, where * x.factor, kelvin * factor, None, style)


def _closed_form(scenario, x_nm):
    """(T_e+, T_e-) at x_nm. Raises ValueError where there is no closed form."""
    from carriersim import limits

    return limits.carrier_temperatures_K(scenario, x_nm)


def _coupled(scenario):
    """(place in nm, temperature in K) of every probe that takes carriers."""
    bath = scenario.bath_temperature_K
    return [
        (probe.position_nm, bath if probe.temperature_K is None else probe.temperature_K)
        for probe in scenario.probes
        if probe.coupling > 0.0
    ]


def _limits(result):
    """The ends of the vertical axis in K: noise around a flat curve does not fill it."""
    scenario = result.scenario
    fields = np.concatenate([getattr(result, name) for name in _FIELDS])
    errors = [result.errors[name] for name in _FIELDS if name in result.errors]
    errors = np.concatenate([np.ravel(e) for e in errors]) if errors else np.zeros(1)
    seen = [scenario.left_temperature_K, scenario.right_temperature_K, scenario.bath_temperature_K]
    seen += [kelvin for _, kelvin in _coupled(scenario)]
    low, high = min(*seen, np.nanmin(fields)), max(*seen, np.nanmax(fields))
    span = max(high - low, _LEAST_SPAN * high, _FEWEST_ERRORS * np.median(np.nan_to_num(errors)))
    room = 0.08 * span + 0.5 * (span - (high - low))
    return low - room, high + room or 1.0
