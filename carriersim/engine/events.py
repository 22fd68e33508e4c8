"""What a carrier meets: the chance to pass a node, the optical thickness of a segment."""

from numba import njit


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
            thickness += spectrum.length_nm[segment] / path
    return thickness
