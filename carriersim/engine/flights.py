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

from carriersim.engine.events import draw_energy, optical_thickness, passes
from carriersim.engine.streams import BLOCK, fill_exponentials, fill_uniforms

DONE, STOPPED, TOO_MANY_EVENTS = 0, 1, 2


class Geometry(NamedTuple):
    """Segments and nodes; K nodes, K - 1 segments."""

    length_nm: np.ndarray  # (K-1,)
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
    work: np.ndarray  # (3,) int64, see the indices below


TURNS, HISTORY, BUDGET = 0, 1, 2  # turns made; the history under way, the numbers it may still use


@njit(cache=True, nogil=True, error_model="numpy")
def fly(first, histories, offset, geometry, spectrum, stream, counts, stop, event_limit):
    """Follow `histories` carriers from the left contact until each reaches a contact.

    first: index of the first history of this call in its batch; offset: uint64 shift of the
    batch's energy sequence; spectrum: None when nothing depends on energy; stop: (1,) uint8, a
    non-zero value ends the call early; event_limit: random numbers that one history may use.
    Returns DONE, STOPPED or TOO_MANY_EVENTS; after anything but DONE the counts are not usable.
    """
    # Arrays are taken out of their groups here, and the loop over flights is not a function of its
    # own: handing arrays on counts references, which halves the speed.
    work, turns, arrivals, transmitted = (
        counts.work,
        counts.turns,
        counts.arrivals,
        counts.transmitted,
    )
    lanes, exponentials, uniforms = stream.lanes, stream.exponentials, stream.uniforms
    first_cell, cells = geometry.first_cell, geometry.cells
    last = geometry.transmission.size - 1
    p, q, tau = stream.position[0], stream.position[1], stream.flight[0]
    work[TURNS] -= p
    b, energy = 0, 0.0
    for history in range(first, first + histories):
        work[HISTORY] = history
        work[BUDGET] = event_limit
        if spectrum is not None:
            b, energy = draw_energy(history, offset, spectrum)
        node, rightward = 0, True
        while True:
            # At a node: pass on, turn back, or leave the channel.
            arrivals[b, node, 0 if rightward else 1] += 1.0
            chance = passes(node, b, energy, geometry, spectrum)
            if chance < 1.0:
                if q == BLOCK:
                    outcome = _may_go_on(work, stop)
                    if outcome != DONE:
                        return outcome
                    fill_uniforms(lanes, uniforms)
                    q = 0
                if uniforms[q] >= chance:
                    rightward = not rightward
                q += 1
            if node == (last if rightward else 0):
                break
            segment = node if rightward else node - 1
            # Through the segment in alternating flights; z and tau in backscattering paths.
            thick = optical_thickness(segment, b, energy, geometry, spectrum)
            base, count = first_cell[segment], cells[segment]
            per_tau = count / thick
            z = 0.0 if rightward else thick
            while True:
                if p >= BLOCK - 1:  # a pass uses up to two numbers
                    outcome = _may_go_on(work, stop)
                    if outcome != DONE:
                        return outcome
                    work[TURNS] += p
                    p = 0
                    fill_exponentials(lanes, exponentials)
                if rightward:
                    if tau >= thick - z:
                        tau -= thick - z
                        break
                    z += tau
                    tau = exponentials[p]
                    p += 1
                    cell, part = _place(z * per_tau, count)
                    turns[b, base + cell, 0] += 1.0
                    turns[b, base + cell, 1] += part
                if tau >= z:
                    tau -= z
                    rightward = False
                    break
                z -= tau
                tau = exponentials[p]
                p += 1
                rightward = True
                cell, part = _place(z * per_tau, count)
                turns[b, base + cell, 0] -= 1.0
                turns[b, base + cell, 1] -= part
            node = segment + 1 if rightward else segment
        if rightward:
            transmitted[b] += 1.0
    stream.position[0], stream.position[1], stream.flight[0] = p, q, tau
    work[TURNS] += p
    return DONE


@njit(cache=True, inline="always", error_model="numpy")
def _place(place, count):
    """Cell of a place in cell widths, and where in the cell; rounding may reach the far end."""
    cell = min(np.int64(place), count - 1)
    return cell, place - cell


@njit(cache=True, error_model="numpy")
def _may_go_on(work, stop):
    """Whether a history may draw another block of random numbers."""
    if stop[0]:
        return STOPPED
    work[BUDGET] -= BLOCK
    return DONE if work[BUDGET] >= 0 else TOO_MANY_EVENTS
