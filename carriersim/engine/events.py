"""What a carrier meets: its energy, the chance to pass a node, the thickness of a segment."""

from typing import NamedTuple

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


class Tables(NamedTuple):
    """Tables against energy, linear between their entries and constant outside."""

    first: np.ndarray  # (tables+1,) int64, entries of table t are first[t] to first[t+1]
    energy_meV: np.ndarray  # all entries
    value: np.ndarray
    node_table: np.ndarray  # (K,) int64, transmission table of each node, -1 for none
    path_first: np.ndarray  # (K,) int64, segment s uses path_index[path_first[s]:path_first[s+1]]
    path_index: np.ndarray  # int64, which path table


@njit(cache=True, error_model="numpy")
def table_value(table, energy, tables):
    """Value of a table at a total energy in meV."""
    low, high = tables.first[table], tables.first[table + 1] - 1
    if energy <= tables.energy_meV[low]:
        return tables.value[low]
    if energy >= tables.energy_meV[high]:
        return tables.value[high]
    while high - low > 1:
        middle = (low + high) // 2
        if tables.energy_meV[middle] <= energy:
            low = middle
        else:
            high = middle
    part = (energy - tables.energy_meV[low]) / (tables.energy_meV[high] - tables.energy_meV[low])
    return tables.value[low] + part * (tables.value[high] - tables.value[low])


@njit(cache=True, inline="always", error_model="numpy")
def passes_at(node, energy, geometry, tables):
    """Transmission of a node at a total energy; tables: None when nothing depends on energy."""
    if tables is not None:
        table = tables.node_table[node]
        if table >= 0:
            return table_value(table, energy, tables)
    return geometry.transmission[node]


@njit(cache=True, error_model="numpy")
def varying_rate(segment, energy, tables):
    """Backscattering events per nm from paths that depend on energy, at a total energy."""
    rate = 0.0
    for i in range(tables.path_first[segment], tables.path_first[segment + 1]):
        rate += 1.0 / table_value(tables.path_index[i], energy, tables)
    return rate


@njit(cache=True, error_model="numpy")
def phonon_shift(phonon_meV, step_meV):
    """Whole bins in a phonon's energy, and what is left as a part of a bin; rounding is nothing."""
    steps = phonon_meV / step_meV
    whole = np.int64(np.floor(steps + 1e-9))
    part = steps - whole
    return whole, part if part > 1e-9 else 0.0
