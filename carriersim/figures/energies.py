"""The energy axis of maps and cuts: which energies, in which unit, and pixels of a map."""

import numpy as np

from carriersim import fermi
from carriersim.constants import BOLTZMANN_MEV_PER_K
from carriersim.figures.style import STYLE, Style, ticks, write
from carriersim.formatting import unit_scale

_PIXELS = (300, 240)  # of a map, along x and along energy
_SHOWN = 0.005  # the energy axis ends where the contacts are this close to full or empty


def energy_unit(window):
    """Factor from meV and unit for energies in this window."""
    largest = max(abs(window[0]), abs(window[1]))
    if 1e-1 <= largest < 1e4:
        return 1.0, "meV"
    factor, unit = unit_scale(largest * 1e-3, "eV")
    return factor * 1e-3, unit


def energy_window(result):
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
        busy = np.nanmean(both, axis=1) > 0.02 * largest_slope(result)
    else:
        least = most = np.nanmean(both, axis=1)
        if result.relaxes:  # hot carriers may be in a few cells only
            least, most = np.nanpercentile(both, (5, 95), axis=1)
        busy = (most > 0.02) & (least < 0.98)
    if busy.any():
        low, high = min(low, energy[busy][0]), max(high, energy[busy][-1])
    ends = result.energy_edges_meV[[0, -1]]
    low, high = max(low, ends[0]), min(high, ends[1])
    return (low, high) if low < high else tuple(ends)


def largest_slope(result):
    """The largest df/d(eV) but for outliers, 1/meV."""
    top = max(np.nanpercentile(getattr(result, name), 99.8) for name in ("f_plus", "f_minus"))
    return float(top) if top > 0.0 else 1.0


def sample(result, values, window):
    """Values on an even grid of pixels: cells and energies may have any widths."""
    return values[np.ix_(pixel_rows(result, window), pixel_cells(result))]


def pixel_cells(result):
    """The cell of each column of pixels."""
    x = np.linspace(*result.cell_edges_nm[[0, -1]], 2 * _PIXELS[0] + 1)[1::2]
    return np.clip(np.searchsorted(result.cell_edges_nm, x) - 1, 0, result.x_nm.size - 1)


def pixel_rows(result, window):
    """The energy of each row of pixels, from the lowest, as an index."""
    e = np.linspace(*window, 2 * _PIXELS[1] + 1)[1::2]
    row = np.searchsorted(result.energy_edges_meV, e) - 1
    return np.clip(row, 0, result.energy_meV.size - 1)


def equilibrium(result, mu_meV, kelvin):
    """F(E; mu, T), (energies,), as the result gives occupations: the mean over each bin where
    energies relax, else the value at its centre.
    """
    if result.relaxes:
        return fermi.mean_occupation(result.energy_edges_meV, mu_meV, kelvin)
    return fermi.occupation(result.energy_meV, mu_meV, kelvin)


def colour_bar(figure, picture, ax, label, style: Style = STYLE, beside=-0.62):
    """Draw the colour bar of a map into `ax`; beside: inches from it to the label, negative."""
    bar = figure.colorbar(picture, cax=ax)
    bar.outline.set_visible(False)
    ax.tick_params(labelsize=style.small, length=3, width=0.8, color=style.soft)
    ticks(ax, y=4, steps=(1, 2, 5, 10))
    write(ax, style, y=label, beside=beside)


def power_of(value):
    """The power of ten to take out of numbers up to `value`."""
    return int(np.floor(np.log10(value)))


def times_ten(power):
    """'10⁻³' for -3."""
    return "10" + str(power).translate(str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹"))
