"""Occupation against position and energy, and why a filling is not an equilibrium."""

import numpy as np

from carriersim import fermi
from carriersim.constants import BOLTZMANN_MEV_PER_K
from carriersim.figures.along import jump_places
from carriersim.figures.energies import (
    colour_bar,
    energy_unit,
    energy_window,
    equilibrium,
    largest_slope,
    pixel_rows,
    power_of,
    sample,
    times_ten,
)
from carriersim.figures.style import (
    FILLING,
    MISSING_AND_EXTRA,
    STYLE,
    Style,
    dress,
    new_figure,
    place,
    ticks,
    write,
)
from carriersim.formatting import format_number, length_scale

_LETTERS = "abcde"
# From these biases on (in kT) occupations themselves are shown, in maps and in cuts.
_SMALL_BIAS_KT = 2.0
_WIDE_BIAS_KT = 8.0
_BOTH_SIGNS = 0.3  # differences of both signs, this much alike, get a colour for each sign


def make_figure(result, style: Style = STYLE):
    """A figure of its own for `draw`."""
    figure = new_figure(style.width, 5.6, style)
    draw(figure, result, style)
    return figure


def draw(figure, result, style: Style = STYLE, places_nm=None):
    """Draw two maps f(x, E), one a direction, and cuts at some places; return all axes.

    Energies run upwards in every panel. A cut shows both directions, with bands of one standard
    error, beside the Fermi function that holds as many carriers at the lattice temperature.
    places_nm: up to five places of cuts (default: the ends and the two sides of the largest jump,
    with relaxation one more). With bias 0 the maps are df/d(eV), 1/meV.
    """
    factor, unit = length_scale(result.scenario.channel.length_nm)
    cells = _cut_cells(result, places_nm)
    window = energy_window(result)
    e_factor, e_unit = energy_unit(window)
    extent = (
        result.cell_edges_nm[0] * factor,
        result.cell_edges_nm[-1] * factor,
        window[0] * e_factor,
        window[1] * e_factor,
    )
    energy_label = f"energy ({e_unit})"
    base, scale, label = _measure(result, _SMALL_BIAS_KT)
    images = [
        (sample(result, getattr(result, name), window) - _rows(result, base, window)) * scale
        for name in ("f_plus", "f_minus")
    ]
    colours = _colours(result, images, base)

    width, height = figure.get_size_inches()
    left, right, gap = 0.68, 0.88, 0.3
    room = 0.5 * (width - left - right - gap)
    maps = []
    titles = ("right-moving carriers, f₊", "left-moving carriers, f₋")
    for index, (image, title) in enumerate(zip(images, titles, strict=True)):
        start = left + index * (room + gap)
        ax = place(figure, start, width - start - room, height - 2.52, 0.42)
        dress(ax, style)
        picture = ax.imshow(image, origin="lower", aspect="auto", extent=extent,
                            interpolation="nearest", **colours)  # fmt: skip
        write(ax, style, x=f"position ({unit})", y="" if index else energy_label, title=title,
              above=0.2)  # fmt: skip
        ticks(ax, x=3, y=0 if index else 5)
        _mark_cuts(ax, result, cells, factor, style)
        maps.append(ax)
    bar = place(figure, width - right + 0.12, right - 0.25, height - 2.52, 0.42)
    colour_bar(figure, picture, bar, label, style)

    cuts = _cuts(figure, result, cells, window, (factor, unit), (e_factor, energy_label), style)
    return [*maps, bar, *cuts]


def _colours(result, images, base):
    """Colour map and the ends of its scale: nothing is pale, and 1 dark where f itself is shown."""
    if not result.linear_response and base is None:
        return {"cmap": FILLING, "vmin": 0.0, "vmax": 1.0}
    low, high = np.nanpercentile(np.concatenate(images), (0.2, 99.8))
    low, high = min(low, 0.0), max(high, 0.0)
    if min(-low, high) > _BOTH_SIGNS * max(-low, high):
        largest = max(-low, high)
        return {"cmap": MISSING_AND_EXTRA, "vmin": -largest, "vmax": largest}
    if -low > high:
        # Holes: the more are missing the darker.
        return {"cmap": FILLING.reversed(), "vmin": low, "vmax": 0.0 if high < 0.1 * -low else high}
    return {"cmap": FILLING, "vmin": 0.0 if -low < 0.1 * high else low, "vmax": high or 1.0}


def _rows(result, base, window):
    """A function of energy for every row of pixels; 0 for none."""
    return 0.0 if base is None else base[pixel_rows(result, window), None]


def _mark_cuts(ax, result, cells, factor, style):
    # Cuts on both sides of one scatterer lie a pixel apart: their letters lean away from it.
    x = result.x_nm[cells] * factor
    span = result.cell_edges_nm[-1] * factor
    across = ax.get_xaxis_transform()
    ax.vlines(x, 0, 1, transform=across, color="white", lw=1.6, zorder=3)
    ax.vlines(x, 0, 1, transform=across, color=style.ink, lw=0.8, ls=(0, (2, 2)), zorder=3.1)
    for index, where in enumerate(x):
        side = "center"
        if index + 1 < x.size and x[index + 1] - where < 0.06 * span:
            side = "right"
        elif index and where - x[index - 1] < 0.06 * span:
            side = "left"
        ax.text(
            where, 1.02, _LETTERS[index], transform=across, ha=side,
            va="bottom", fontsize=style.text, fontweight="bold", color=style.ink,
        )  # fmt: skip


def _slope_label(power):
    return f"df/d(eV) ({times_ten(power)} per meV)" if power else "df/d(eV) (1/meV)"


def _cut_cells(result, places_nm):
    cells, edges = result.x_nm.size, result.cell_edges_nm
    if places_nm is not None:
        where = np.sort(np.asarray(places_nm, float))[: len(_LETTERS)]
        return np.unique(np.clip(np.searchsorted(edges, where) - 1, 0, cells - 1))
    length = edges[-1] - edges[0]

    def at(share):
        return int(np.clip(np.searchsorted(edges, edges[0] + share * length) - 1, 0, cells - 1))

    jumps = np.abs(np.diff(result.mu_meV)) * np.isin(edges[1:-1], jump_places(result))
    whole = np.nanmax(result.mu_meV) - np.nanmin(result.mu_meV)
    if jumps.size and np.nanmax(jumps) > 0.15 * whole:
        largest = int(np.nanargmax(jumps))
        picks = {at(0.03), largest, largest + 1, at(0.97)}
        if result.relaxes:  # how far it has relaxed half way to the farther contact
            away = 0.5 if 2.0 * result.x_nm[largest] < edges[0] + edges[-1] else -0.5
            where = (edges[largest + 1] - edges[0]) / length
            picks.add(at(where + away * (1.0 - where if away > 0.0 else where)))
        return np.array(sorted(picks))
    shares = (0.03, 0.27, 0.5, 0.73, 0.97) if result.relaxes else (0.03, 0.35, 0.65, 0.97)
    return np.unique([at(share) for share in shares])


def _cuts(figure, result, cells, window, x_scale, e_scale, style):
    width, height = figure.get_size_inches()
    left, right, gap = 0.68, 0.2, 0.14
    room = (width - left - right - gap * (cells.size - 1)) / cells.size
    (factor, unit), (e_factor, energy_label) = x_scale, e_scale
    temperature = result.scenario.bath_temperature_K
    inside = (result.energy_meV >= window[0]) & (result.energy_meV <= window[1])
    energy = result.energy_meV[inside] * e_factor
    base, scale, label = _measure(result, _WIDE_BIAS_KT)
    base, label = 0.0 if base is None else base, f"{label} at a, b, …"
    same_label = f"Fermi function, same filling, {format_number(temperature, 'K', 4)}"
    axes = []
    for index, cell in enumerate(cells):
        start = left + index * (room + gap)
        ax = place(figure, start, width - start - room, 0.98, 3.42)
        dress(ax, style)
        for name, colour, dashes, direction in (
            ("f_plus", style.right_moving, style.right_dashes, "right-moving"),
            ("f_minus", style.left_moving, style.left_dashes, "left-moving"),
        ):
            values = getattr(result, name)[:, cell]
            shown = (values - base)[inside] * scale
            ax.plot(shown, energy, color=colour, ls=dashes, lw=style.line, label=direction)
            _band(ax, result, name, cell, inside, shown, energy, scale, colour)
            same = same_filling(result, values, temperature)
            if same is not None:
                shown = (same - base)[inside] * scale
                ax.plot(shown, energy, color=style.ink, ls=(0, (1.2, 1.4)), lw=1.1,
                        label=same_label if name == "f_minus" else None)  # fmt: skip
        place_text = format_number(result.x_nm[cell] * factor, unit, 4)
        write(ax, style, y="" if index else energy_label, title=f"{_LETTERS[index]}: {place_text}")
        if cells.size > 4:
            ax.title.set_fontsize(style.small)
        ax.set_ylim(window[0] * e_factor, window[1] * e_factor)
        ticks(ax, x=2, y=0 if index else 4)
        axes.append(ax)
    _share_axis(axes)
    figure.text(0.5 + 0.24 / width, 0.58 / height, label, ha="center", va="center",
                fontsize=style.text, color=style.ink)  # fmt: skip
    figure.legend(
        *axes[0].get_legend_handles_labels(), loc="lower center",
        bbox_to_anchor=(0.5, 0.08 / height), ncols=3, fontsize=style.small, frameon=False,
        handlelength=2.4, columnspacing=1.6, labelcolor=style.ink,
    )  # fmt: skip
    return axes


def _band(ax, result, name, cell, inside, shown, energy, scale, colour):
    """One standard error to both sides of a cut."""
    errors = result.errors.get(name)
    if errors is not None:
        error = np.abs(np.nan_to_num(errors[inside, cell])) * scale
        ax.fill_betweenx(energy, shown - error, shown + error, color=colour, alpha=0.3, lw=0)


def _measure(result, bias_kT):
    """What is shown: (occupation to take off, None for none; factor; label).

    At a bias of a few kT all occupations look alike: what the bias adds to them does not. It is
    shown at biases below bias_kT.
    """
    if result.linear_response:
        power = power_of(largest_slope(result))
        return None, 10.0**-power, _slope_label(power)
    scenario = result.scenario
    hottest = max(scenario.left_temperature_K, scenario.right_temperature_K)
    if abs(scenario.contacts.bias_mV) >= bias_kT * BOLTZMANN_MEV_PER_K * hottest:
        return None, 1.0, "occupation f"
    base = equilibrium(result, 0.0, scenario.right_temperature_K)
    largest = np.nanmax(np.abs(np.stack([result.f_plus, result.f_minus]) - base[:, None]))
    power = power_of(largest) if largest > 0.0 else 0
    label = "f − f of the right contact"
    if power >= -1:
        return base, 1.0, label
    return base, 10.0**-power, f"{label} ({times_ten(power)})"


def _share_axis(axes):
    lines = [line.get_xdata() for ax in axes for line in ax.lines]
    low = min(0.0, *(float(np.nanmin(x)) for x in lines))
    high = max(0.0, *(float(np.nanmax(x)) for x in lines))
    room = 0.06 * (high - low) or 0.1
    for ax in axes:
        ax.set_xlim(low - room, high + room)


def same_filling(result, values, temperature_K):
    """The Fermi function at this temperature that holds as many carriers as `values` (energies,).

    In linear response the change of it with the bias. None where it has no meaning: a derivative at
    0 K. The number is weighted with the modes where they depend on energy.
    """
    energy, scenario = result.energy_meV, result.scenario
    weight = _modes(scenario, energy) * np.diff(result.energy_edges_meV)
    if not np.all(np.isfinite(values)):
        return None
    if result.linear_response:
        if temperature_K <= 0.0:
            return None
        shape = fermi.minus_slope(energy, 0.0, temperature_K)
        whole = weight @ shape
        return shape * (weight @ values) / whole if whole > 0.0 else None

    def excess(mu):
        return weight @ (equilibrium(result, mu, temperature_K) - values)

    low, high = energy[0], energy[-1]
    if excess(low) > 0.0 or excess(high) < 0.0:
        return None
    # The step of the grid over 2000: finer than a line is wide.
    for _ in range(int(np.ceil(np.log2(2000.0 * energy.size)))):
        middle = 0.5 * (low + high)
        low, high = (middle, high) if excess(middle) < 0.0 else (low, middle)
    return equilibrium(result, 0.5 * (low + high), temperature_K)


def _modes(scenario, energy):
    modes = scenario.channel.resolved_modes
    if hasattr(modes, "energy_meV"):
        return np.interp(energy, modes.energy_meV, modes.value)
    return np.ones_like(energy)
