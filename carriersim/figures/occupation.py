"""Occupation against position and energy, and why a filling is not an equilibrium."""

import numpy as np

from carriersim import fermi
from carriersim.constants import BOLTZMANN_MEV_PER_K
from carriersim.figures.style import FILLING, STYLE, Style, dress, new_figure, place, ticks, write
from carriersim.formatting import format_number, length_scale, unit_scale

_PIXELS = (300, 240)  # of a map, along x and along energy
_SHOWN = 0.005  # the energy axis ends where the contacts are this close to full or empty
_LETTERS = "abcde"
# From these biases on (in kT) occupations themselves are shown, in maps and in cuts.
_SMALL_BIAS_KT = 2.0
_WIDE_BIAS_KT = 8.0


def make_figure(result, style: Style = STYLE):
    """A figure of its own for `draw`."""
    figure = new_figure(style.width, 5.6, style)
    draw(figure, result, style)
    return figure


def draw(figure, result, style: Style = STYLE, places_nm=None):
    """Draw two maps f(x, E), one a direction, and cuts at some places; return all axes.

    Energies run upwards in every panel. A cut shows both directions beside the Fermi function that
    holds as many carriers at the lattice temperature. places_nm: up to five places of cuts (default
    four: the ends and the two sides of the largest jump). With bias 0 the maps are df/d(eV), 1/meV.
    """
    factor, unit = length_scale(result.scenario.channel.length_nm)
    cells = _cut_cells(result, places_nm)
    window = _energy_window(result)
    e_factor, e_unit = _energy_unit(window)
    extent = (
        result.cell_edges_nm[0] * factor,
        result.cell_edges_nm[-1] * factor,
        window[0] * e_factor,
        window[1] * e_factor,
    )
    energy_label = f"energy ({e_unit})"
    base, scale, label = _measure(result, _SMALL_BIAS_KT)
    images = [
        (_sample(result, getattr(result, name), window) - _rows(result, base, window)) * scale
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
    _colour_bar(figure, picture, bar, label, style)

    cuts = _cuts(figure, result, cells, window, (factor, unit), (e_factor, energy_label), style)
    return [*maps, bar, *cuts]


def _top(result):
    """The largest df/d(eV) but for outliers, 1/meV."""
    top = max(np.nanpercentile(getattr(result, name), 99.8) for name in ("f_plus", "f_minus"))
    return float(top) if top > 0.0 else 1.0


def _colours(result, images, base):
    """Colour map and the ends of its scale: nothing is pale, and 1 dark where f itself is shown."""
    if not result.linear_response and base is None:
        return {"cmap": FILLING, "vmin": 0.0, "vmax": 1.0}
    low, high = np.nanpercentile(np.concatenate(images), (0.2, 99.8))
    low, high = min(low, 0.0), max(high, 0.0)
    if -low > high:
        # Holes: the more are missing the darker.
        return {"cmap": FILLING.reversed(), "vmin": low, "vmax": 0.0 if high < 0.1 * -low else high}
    return {"cmap": FILLING, "vmin": 0.0 if -low < 0.1 * high else low, "vmax": high or 1.0}


def _energy_unit(window):
    largest = max(abs(window[0]), abs(window[1]))
    if 1e-1 <= largest < 1e4:
        return 1.0, "meV"
    factor, unit = unit_scale(largest * 1e-3, "eV")
    return factor * 1e-3, unit


def _energy_window(result):
    """Energies (meV) between which something happens, inside the axis of the result."""
    energy, scenario = result.energy_meV, result.scenario
    levels = (scenario.contacts.bias_mV, 0.0)
    temperatures = (scenario.left_temperature_K, scenario.right_temperature_K)
    reach = np.log(1.0 / _SHOWN - 1.0) * BOLTZMANN_MEV_PER_K
    low = min(mu - reach * t for mu, t in zip(levels, temperatures, strict=True))
    high = max(mu + reach * t for mu, t in zip(levels, temperatures, strict=True))
    room = 0.08 * (high - low)
    low, high = low - room, high + room
    # Carriers may also be found outside, where something other than the contacts put them.
    both = np.concatenate([result.f_plus, result.f_minus], axis=1)
    if result.linear_response:
        busy = np.nanmean(both, axis=1) > 0.02 * _top(result)
    else:
        filling = np.nanmean(both, axis=1)
        busy = (filling > 0.02) & (filling < 0.98)
    if busy.any():
        low, high = min(low, energy[busy][0]), max(high, energy[busy][-1])
    ends = result.energy_edges_meV[[0, -1]]
    low, high = max(low, ends[0]), min(high, ends[1])
    return (low, high) if low < high else tuple(ends)


def _sample(result, values, window):
    """Values on an even grid of pixels: cells and energies may have any widths."""
    x = np.linspace(*result.cell_edges_nm[[0, -1]], 2 * _PIXELS[0] + 1)[1::2]
    cell = np.clip(np.searchsorted(result.cell_edges_nm, x) - 1, 0, values.shape[1] - 1)
    return values[np.ix_(_pixel_rows(result, window), cell)]


def _pixel_rows(result, window):
    e = np.linspace(*window, 2 * _PIXELS[1] + 1)[1::2]
    row = np.searchsorted(result.energy_edges_meV, e) - 1
    return np.clip(row, 0, result.energy_meV.size - 1)


def _rows(result, base, window):
    """A function of energy for every row of pixels; 0 for none."""
    return 0.0 if base is None else base[_pixel_rows(result, window), None]


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


def _colour_bar(figure, picture, ax, label, style):
    bar = figure.colorbar(picture, cax=ax)
    bar.outline.set_visible(False)
    ax.tick_params(labelsize=style.small, length=3, width=0.8, color=style.soft)
    ticks(ax, y=4, steps=(1, 2, 5, 10))
    write(ax, style, y=label, beside=-0.62)


def _power(value):
    """The power of ten to take out of numbers up to `value`."""
    return int(np.floor(np.log10(value)))


def _slope_label(power):
    return f"df/d(eV) (10{_superscript(power)} per meV)" if power else "df/d(eV) (1/meV)"


def _superscript(power):
    return str(power).translate(str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹"))


def _cut_cells(result, places_nm):
    cells, edges = result.x_nm.size, result.cell_edges_nm
    if places_nm is not None:
        where = np.sort(np.asarray(places_nm, float))[: len(_LETTERS)]
        return np.unique(np.clip(np.searchsorted(edges, where) - 1, 0, cells - 1))
    length = edges[-1] - edges[0]

    def at(share):
        return int(np.clip(np.searchsorted(edges, edges[0] + share * length) - 1, 0, cells - 1))

    spaced = [at(share) for share in (0.03, 0.35, 0.65, 0.97)]
    scatterers = [point.position_nm for point in result.scenario.scattering.points]
    borders = np.flatnonzero(np.isin(edges[1:-1], scatterers))
    if borders.size:
        jumps = np.abs(np.diff(result.mu_meV))[borders]
        largest = int(borders[np.argmax(np.nan_to_num(jumps))])
        whole = np.nanmax(result.mu_meV) - np.nanmin(result.mu_meV)
        if jumps.max() > 0.15 * whole:
            picks = {at(0.03), largest, largest + 1, at(0.97)}
            return np.array(sorted(picks))
    return np.unique(spaced)


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
            same = same_filling(result, values, temperature)
            if same is not None:
                shown = (same - base)[inside] * scale
                ax.plot(shown, energy, color=style.ink, ls=(0, (1.2, 1.4)), lw=1.1,
                        label=same_label if name == "f_minus" else None)  # fmt: skip
        place_text = format_number(result.x_nm[cell] * factor, unit, 4)
        write(ax, style, y="" if index else energy_label, title=f"{_LETTERS[index]}: {place_text}")
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


def _measure(result, bias_kT):
    """What is shown: (occupation to take off, None for none; factor; label).

    At a bias of a few kT all occupations look alike: what the bias adds to them does not. It is
    shown at biases below bias_kT.
    """
    if result.linear_response:
        power = _power(_top(result))
        return None, 10.0**-power, _slope_label(power)
    scenario = result.scenario
    hottest = max(scenario.left_temperature_K, scenario.right_temperature_K)
    if abs(scenario.contacts.bias_mV) >= bias_kT * BOLTZMANN_MEV_PER_K * hottest:
        return None, 1.0, "occupation f"
    base = fermi.occupation(result.energy_meV, 0.0, scenario.right_temperature_K)
    largest = np.nanmax(np.abs(np.stack([result.f_plus, result.f_minus]) - base[:, None]))
    power = _power(largest) if largest > 0.0 else 0
    label = "f − f of the right contact"
    if power >= -1:
        return base, 1.0, label
    return base, 10.0**-power, f"{label} (10{_superscript(power)})"


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
        return weight @ (fermi.occupation(energy, mu, temperature_K) - values)

    low, high = energy[0], energy[-1]
    if excess(low) > 0.0 or excess(high) < 0.0:
        return None
    # The step of the grid over 2000: finer than a line is wide.
    for _ in range(int(np.ceil(np.log2(2000.0 * energy.size)))):
        middle = 0.5 * (low + high)
        low, high = (middle, high) if excess(middle) < 0.0 else (low, middle)
    return fermi.occupation(energy, 0.5 * (low + high), temperature_K)


def _modes(scenario, energy):
    modes = scenario.channel.modes
    if hasattr(modes, "energy_meV"):
        return np.interp(energy, modes.energy_meV, modes.value)
    return np.ones_like(energy)
