"""The particle kernel in one dimension: free flights, turns, and what happens at a node.

The channel is a row of segments between nodes (contacts, point scatterers, section edges, probes).
Inside a segment the position is measured in units of the backscattering path, so that a flight is
one exponential number and needs no multiplication; a segment without scattering has thickness 0.

In one dimension an isotropising collision that matters turns the carrier round, so a channel is
walked in alternating flights. A turn ends a flight in one direction and starts one in the other at
the same place: it adds the same amount to the track lengths of both, and one pair of numbers per
cell (see tallies.py) serves both directions.
"""

from typing import NamedTuple

import numpy as np
from numba import njit

from carriersim.engine.events import optical_thickness, passes
from carriersim.engine.streams import BLOCK, fill_exponentials, fill_uniforms

DONE, STOPPED, TOO_MANY_EVENTS = 0, 1, 2

GOLDEN = np.uint64(0x9E3779B97F4A7C15)  # 2**64 / golden ratio: the additive (Kronecker) sequence


class Geometry(NamedTuple):
    """Segments and nodes; K nodes, K - 1 segments."""

    thickness: np.ndarray  # (K-1,) optical thickness L_segment/lam of the part constant in energy
    first_cell: np.ndarray  # (K-1,) int64
    cells: np.ndarray  # (K-1,) int64, cells of equal width in each segment
    transmission: np.ndarray  # (K,) of each node where it doesn't depend on energy


class Spectrum(NamedTuple):
    """Energies: B bins, and what depends on energy, linear inside every bin.

    A table value at energy E in bin b is values[b, t, 0] + values[b, t, 1] * (E - centre of b).
    """

    edges_meV: np.ndarray  # (B+1,)
    cumulative: np.ndarray  # (B+1,) share of histories below each edge, 0 to 1
    node_table: np.ndarray  # (K,) int64, transmission table of each node, -1 for none
    path_first: np.ndarray  # (K,) int64, segment s uses path_index[path_first[s]:path_first[s+1]]
    path_index: np.ndarray  # int64, which path table
    values: np.ndarray  # (B, tables, 2): transmissions, and backscattering paths in nm
    length_nm: np.ndarray  # (K-1,) of each segment


class Stream(NamedTuple):
    """Random numbers of one batch, kept between rounds."""

    lanes: np.ndarray  # (4 * BLOCK,) uint64
    exponentials: np.ndarray  # (BLOCK,)
    uniforms: np.ndarray  # (BLOCK,)
    position: np.ndarray  # (2,) int64: next unused exponential, next unused uniform
    flight: np.ndarray  # (1,) what is left of the flight that the last history did not use up


class Counts(NamedTuple):
    """What the kernel adds to; B bins (1 when nothing depends on energy)."""

    turns: np.ndarray  # (B, cells, 2): signed number of turns, and sum of their place in the cell
    arrivals: np.ndarray  # (B, K, 2): arrivals at each node from the left and from the right
    transmitted: np.ndarray  # (B,) histories that reached the right contact
    work: np.ndarray  # (2,) int64: turns, status detail (index of the history)


@njit(cache=True, nogil=True, error_model="numpy")
def fly(first, histories, offset, geometry, spectrum, stream, counts, stop, event_limit):
    """Follow `histories` carriers from the left contact until each reaches a contact.

    first: index of the first history of this call in its batch; offset: uint64 shift of the
    batch's energy sequence; spectrum: None when nothing depends on energy; stop: (1,) uint8, a
    non-zero value ends the call early. Returns DONE, STOPPED or TOO_MANY_EVENTS; after anything
    but DONE the counts are not usable.
    """
    lanes, exponentials, uniforms = stream.lanes, stream.exponentials, stream.uniforms
    first_cell, cells = geometry.first_cell, geometry.cells
    turns, arrivals, transmitted = counts.turns, counts.arrivals, counts.transmitted
    last = geometry.transmission.size - 1
    p = stream.position[0]
    q = stream.position[1]
    tau = stream.flight[0]
    drawn = -p
    spent = 0
    b = 0
    energy = 0.0
    for history in range(first, first + histories):
        allowed = spent + event_limit
        if spectrum is not None:
            quantile = np.float64(offset + np.uint64(history) * GOLDEN) * 2.0**-64
            b = np.searchsorted(spectrum.cumulative, quantile, side="right") - 1
            b = min(max(b, 0), spectrum.cumulative.size - 2)
            low = spectrum.cumulative[b]
            part = (quantile - low) / (spectrum.cumulative[b + 1] - low)
            energy = (part - 0.5) * (spectrum.edges_meV[b + 1] - spectrum.edges_meV[b])
        node = 0
        rightward = True
        while True:
            # At a node: pass on, turn back, or leave the channel.
            if rightward:
                arrivals[b, node, 0] += 1.0
            else:
                arrivals[b, node, 1] += 1.0
            chance = passes(node, b, energy, geometry, spectrum)
            if chance < 1.0:
                if q == BLOCK:
                    spent += BLOCK
                    if stop[0]:
                        return STOPPED
                    if spent > allowed:
                        counts.work[1] = history
                        return TOO_MANY_EVENTS
                    fill_uniforms(lanes, uniforms)
                    q = 0
                if uniforms[q] >= chance:
                    rightward = not rightward
                q += 1
            if rightward:
                if node == last:
                    transmitted[b] += 1.0
                    break
                segment = node
            else:
                if node == 0:
                    break
                segment = node - 1
            # Through the segment, in alternating flights.
            thick = optical_thickness(segment, b, energy, geometry, spectrum)
            if tau >= thick:
                tau -= thick
                node += 1 if rightward else -1
                continue
            count = cells[segment]
            base = first_cell[segment]
            per_tau = count / thick
            z = 0.0 if rightward else thick
            while True:
                if p >= BLOCK - 1:  # a pass below uses up to two numbers
                    spent += BLOCK
                    if stop[0]:
                        return STOPPED
                    if spent > allowed:
                        counts.work[1] = history
                        return TOO_MANY_EVENTS
                    drawn += p
                    p = 0
                    fill_exponentials(lanes, exponentials)
                if rightward:
                    if tau >= thick - z:
                        tau -= thick - z
                        node = segment + 1
                        break
                    z += tau
                    tau = exponentials[p]
                    p += 1
                    place = z * per_tau
                    c = min(np.int64(place), count - 1)
                    turns[b, base + c, 0] += 1.0
                    turns[b, base + c, 1] += place - c
                if tau >= z:
                    tau -= z
                    node = segment
                    rightward = False
                    break
                z -= tau
                tau = exponentials[p]
                p += 1
                rightward = True
                place = z * per_tau
                c = min(np.int64(place), count - 1)
                turns[b, base + c, 0] -= 1.0
                turns[b, base + c, 1] -= place - c
    stream.position[0] = p
    stream.position[1] = q
    stream.flight[0] = tau
    counts.work[0] += drawn + p
    return DONE
