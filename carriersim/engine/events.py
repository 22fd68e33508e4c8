"""What a carrier meets: its energy, the chance to pass a node, the thickness of a segment."""

import numpy as np
from numba import njit

GOLDEN = np.uint64(0x9E3779B97F4A7C15)  # 2**64 / golden ratio


@njit(cache=True, inline="always", error_model="numpy")
def draw_energy(history, offset, spectrum):
    """Energy of a history: its bin, and meV from the bin's centre.

    The additive (Kronecker) sequence of the golden ratio, shifted at random for each batch, spreads
    any number of histories evenly over the shares of the bins.
    """
    quantile = np.float64(offset + np.uint64(history) * GOLDEN) * 2.0**-64
    b = np.searchsorted(spectrum.cumulative, quantile, side="right") - 1
    b = min(max(b, 0), spectrum.cumulative.size - 2)
    low = spectrum.cumulative[b]
    part = (quantile - low) / (spectrum.cumulative[b + 1] - low)
    return b, (part - 0.5) * (spectrum.edges_meV[b + 1] - spectrum.edges_meV[b])


@njit(cache=True, inline="always", error_model="numpy")
def passes(node, b, energy, geometry, spectrum):
    """Transmission of a node for energy `energy` (meV from the centre of bin b)."""
    if spectrum is not None:
        table = spectrum.node_table[node]
        if table >= 0:
            return spectrum.values[b, table, 0] + spectrum.values[b, table, 1] * energy
    return geometry.transmission[node]


@njit(cache=True, inline="always", error_model="numpy")
def optical_thickness(segment, b, energy, geometry, spectrum):
    """Length of a segment over its backscattering path; paths of several tables add as rates."""
    thickness = geometry.thickness[segment]
    if spectrum is not None:
        for i in range(spectrum.path_first[segment], spectrum.path_first[segment + 1]):
            table = spectrum.path_index[i]
            path = spectrum.values[b, table, 0] + spectrum.values[b, table, 1] * energy
            thickness += geometry.length_nm[segment] / path
    return thickness
