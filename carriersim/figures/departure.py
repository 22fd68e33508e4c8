"""How far the carriers are from a local equilibrium, and at which energies."""

import numpy as np

from carriersim.constants import BOLTZMANN_MEV_PER_K
from carriersim.fermi import mean_occupation
from carriersim.figures import along
from carriersim.figures.energies import (
    colour_bar,
    energy_unit,
    energy_window,
    pixel_cells,
    pixel_rows,
    power_of,
    times_ten,
)
from carriersim.figures.style import (
    MISSING_AND_EXTRA,
    STYLE,
    Style,
    dress,
    new_figure,
    place,
    ticks,
    write,
)

_LEFT, _BESIDE = 0.86, 0.6  # inches from the panels to the figure's edge and to their labels
_MEAN = "μ of both directions"
_LEAST_LIMIT = 1e-9  # of the colours: smaller differences are rounding
_FEWEST_ERRORS = 3.0  # the colours reach at least so many standard errors: noise stays pale


def make_figure(result, style: Style = STYLE):
    """A figure of its own for `draw`; None where no energies relax or nothing is known."""
    if not _known(result):
        return None
    figure = new_figure(style.width, 5.2, style)
    draw(figure, result, style)
    return figure


def _known(result):
    fields = (result.departure, result.carrier_temperature_K, result.mu_meV)
    known = all(np.isfinite(field).any() for field in fields)
    return result.relaxes and not result.linear_response and known


def draw(figure, result, style: Style = STYLE):
    """Draw the departure along the channel above a map of where it comes from; return all axes.

    The map: mean occupation of both directions less the Fermi function of the same number and
    energy, F(E; mu, T_e). The departure (no unit) is the root of the integral of its square over
    energy, in units of k T_e. Raises ValueError where either is not known.
    """
    if not _known(result):
        raise ValueError("no departure: no relaxation, bias 0, or modes of energy")
    height = figure.get_size_inches()[1]
    x = along.position_axis(result)
    top = place(figure, _LEFT, 0.95, height - 1.5, 0.42)
    _curve(top, result, x, style)
    lower = place(figure, _LEFT, 0.95, 0.82, 1.62)
    dress(lower, style)
    picture, error, label = _map(lower, result, x, style)
    bar = place(figure, figure.get_size_inches()[0] - 0.83, 0.7, 0.82, 1.62)
    colour_bar(figure, picture, bar, label, style, beside=-0.6)
    if error > 0.0:
        bar.errorbar([0.5], [0.0], [error], fmt="none", ecolor=style.ink, elinewidth=1.0,
                     capsize=2.0, label="standard error (typical)")  # fmt: skip
    _legend(lower, bar, style)
    return [top, lower, bar]


def _curve(ax, result, x, style):
    dress(ax, style)
    along.frame(ax, result, x, style)
    scale, unit = _scale(np.nanmax(result.departure))
    along.curve(ax, result, "departure", x, scale, style, color=style.mean)
    _, end = ax.get_ylim()
    ax.set_ylim(0.0, end if end > 0.0 else 1.0)
    ticks(ax, x=5, y=3)
    ax.tick_params(axis="x", labelbottom=False)
    write(ax, style, y="departure from\nlocal equilibrium", beside=_BESIDE)
    if unit:
        ax.text(-0.015, 1.03, unit, transform=ax.transAxes, ha="right", va="bottom",
                fontsize=style.small, color=style.ink)  # fmt: skip


def _scale(largest):
    """Factor and power of ten for numbers up to this, where they are inconveniently small."""
    power = power_of(largest) if largest > 0.0 else 0
    return (1.0, "") if power >= -1 else (10.0**-power, times_ten(power))


def _map(ax, result, x, style):
    """Draw the map; return its picture, a typical standard error and the label, as drawn."""
    window = energy_window(result)
    e_factor, e_unit = energy_unit(window)
    image, error = _difference(result, window)
    limit = max(float(np.nanpercentile(np.abs(image), 99.8)), _FEWEST_ERRORS * error, _LEAST_LIMIT)
    scale, unit = _scale(limit)
    edges = result.cell_edges_nm[[0, -1]] * x.factor
    picture = ax.imshow(
        image * scale, origin="lower", aspect="auto", interpolation="nearest",
        extent=(*edges, window[0] * e_factor, window[1] * e_factor),
        cmap=MISSING_AND_EXTRA, vmin=-limit * scale, vmax=limit * scale, zorder=0.5,
    )  # fmt: skip
    along.frame(ax, result, x, style, labels=False)
    along.curve(ax, result, "mu_meV", x, e_factor, style, color=style.mean,
                ls=style.mean_dashes, lw=1.3, label=_MEAN)  # fmt: skip
    along.probes_on_edge(ax, result, x, style)
    ax.set_ylim(window[0] * e_factor, window[1] * e_factor)
    ticks(ax, x=5, y=5)
    write(ax, style, x=f"position along the channel ({x.unit})", y=f"energy ({e_unit})",
          beside=_BESIDE)  # fmt: skip
    label = "mean f − F(E; μ, Tₑ)"
    return picture, error * scale, f"{label} ({unit})" if unit else label


def _difference(result, window):
    """Pixels of mean f - F(E; mu, T_e), and the root mean square of their standard errors."""
    cells, columns = np.unique(pixel_cells(result), return_inverse=True)
    rows = pixel_rows(result, window)
    local = mean_occupation(
        result.energy_edges_meV, result.mu_meV[cells], result.carrier_temperature_K[cells]
    )
    mean = 0.5 * (result.f_plus[:, cells] + result.f_minus[:, cells])
    variance = _variance(result, local, cells)[np.ix_(rows, columns)]
    return (mean - local)[np.ix_(rows, columns)], float(np.sqrt(variance.mean()))


def _variance(result, local, cells):
    """Squared standard errors of mean f - F, (E, cells), as if those of f, mu, T_e were apart."""

    def error(name):
        known = result.errors.get(name)
        return 0.0 if known is None else np.nan_to_num(known[..., cells])

    kT = BOLTZMANN_MEV_PER_K * np.nan_to_num(result.carrier_temperature_K[cells])
    kT = np.maximum(kT, np.diff(result.energy_edges_meV).min())  # no bin resolves a steeper step
    by_mu = local * (1.0 - local) / kT
    by_kT = by_mu * (result.energy_meV[:, None] - result.mu_meV[cells]) / kT
    of_local = (by_mu * error("mu_meV")) ** 2
    of_local += (by_kT * BOLTZMANN_MEV_PER_K * error("carrier_temperature_K")) ** 2
    square = 0.25 * (error("f_plus") ** 2 + error("f_minus") ** 2) + of_local
    return np.nan_to_num(square)


def _legend(lower, bar, style):
    """One legend for what is drawn in the map and on the colour bar."""
    drawn = [axes.get_legend_handles_labels() for axes in (lower, bar)]
    handles, labels = (drawn[0][i] + drawn[1][i] for i in (0, 1))
    height = lower.figure.get_size_inches()[1]
    lower.figure.legend(
        handles, labels, loc="lower center", bbox_to_anchor=(0.5, 0.06 / height),
        ncols=4, fontsize=style.small, frameon=False, handlelength=2.0, columnspacing=1.4,
        labelcolor=style.ink,
    )  # fmt: skip
