"""Directions that nothing mixes: every direction is a chain of scatterers of its own.

Without collisions, rough walls and diffuse planes a carrier keeps |u_x|, so what becomes of it is
known: the series law at its own angle. Following it would be exact too, but no good: between two
tunnel barriers grazing carriers go to and fro without end, and what they count has an infinite
variance. Here each history is one direction (and energy) with its occupations.
"""

import numpy as np
from numba import njit

from carriersim.engine.events import draw_energy, passes
from carriersim.engine.flights import DONE, STOPPED
from carriersim.engine.planes import crossing_weight, passes_tunnel
from carriersim.engine.rays import (
    EVENTS,
    FROM_LEFT,
    FROM_RIGHT,
    LEFT_BEFORE,
    LEFT_BEHIND,
    RIGHT_BEFORE,
    RIGHT_BEHIND,
    direction_class,
    emitted_cosine,
)


def is_straight(problem):
    """Whether nothing in a problem mixes directions."""
    space = problem.space
    return (
        space is not None
        and problem.relaxed is None
        and not any(problem.segment_paths)
        and not space.scatters
        and not (space.planes.diffuse & problem.is_scatterer).any()
    )


@njit(cache=True, nogil=True, error_model="numpy")
def solve_straight(
    first, histories, offset, geometry, planes, spectrum, drive, counts, stop
):  # fmt: skip
    """Add the occupations of `histories` directions, as rays.cross adds its carriers'.

    With r = (1 - T)/T of each node, in series: in all T = 1/(1 + sum r), and left-movers are the
    right-movers less T (Datta, Electronic Transport in Mesoscopic Systems, 1995).
    """
    nodes = geometry.transmission.size
    last = nodes - 1
    first_cell, cells = geometry.first_cell, geometry.cells
    tracks, crossings, fresh = counts.tracks, counts.crossings, counts.fresh
    views, transmitted = counts.views, counts.transmitted
    resistance = np.empty(nodes)
    b, energy = 0, 0.0
    for history in range(first, first + histories):
        if stop[0]:
            return STOPPED
        if spectrum is not None:
            b, energy = draw_energy(history, offset, spectrum)
        ux = emitted_cosine(history, offset, planes.dimension)
        row = direction_class(ux, planes.view_edges, planes.view_first)
        weight = crossing_weight(1.0 / ux)
        total = 1.0
        for k in range(nodes):
            chance = passes(k, b, energy, geometry, spectrum)
            if planes.tunnel[k] and chance < 1.0:
                chance = passes_tunnel(chance, ux)
            resistance[k] = (1.0 - chance) / chance
            total += resistance[k]
        through = 1.0 / total
        right = 1.0  # right-movers before a node; left-movers: less `through`
        for k in range(nodes):
            behind = max(right - through * resistance[k], through)
            crossings[b, k, FROM_LEFT] += right
            crossings[b, k, FROM_RIGHT] += behind - through
            crossings[b, k, RIGHT_BEFORE] += weight * right
            crossings[b, k, LEFT_BEFORE] += weight * (right - through)
            crossings[b, k, LEFT_BEHIND] += weight * (behind - through)
            crossings[b, k, RIGHT_BEHIND] += weight * behind
            seen = planes.looked_at[k]
            if seen >= 0:
                at = right if k == last else behind
                views[seen, 0, row] += drive[b] * at
                views[seen, 1, row] += drive[b] * (at - through)
            if k < last:
                end = first_cell[k] + cells[k] - 1
                # A flight that starts at one end of the segment and stops at the other.
                _cross_segment(tracks, b, first_cell[k], end, weight * behind, 0)
                _cross_segment(tracks, b, first_cell[k], end, weight * (behind - through), 2)
            right = behind
        fresh[b, 0] += weight * (1.0 / (1.0 + resistance[0]))
        fresh[b, 1] += weight * (1.0 - 1.0 / (1.0 + resistance[0]))
        transmitted[b] += through
    counts.work[EVENTS] += histories * nodes
    return DONE


def normalise(counts, oblique):
    """Let occupations count in units of a full contact's, bin by bin, as these directions see it.

    The mean of 1/|u_x| is known, but its sum scatters, and in all occupations alike.
    """
    full = counts.fresh.sum(axis=1)
    number = counts.crossings[:, 0, FROM_LEFT]
    scale = np.divide(oblique * number, full, out=np.ones_like(full), where=full > 0.0)
    counts.tracks[:] *= scale[:, None, None]
    counts.crossings[:, :, RIGHT_BEFORE:] *= scale[:, None, None]
    counts.fresh[:] *= scale[:, None]


@njit(cache=True, inline="always", error_model="numpy")
def _cross_segment(tracks, b, start, end, weight, side):
    """Marks of a flight through all cells of a segment, see rays.py."""
    tracks[b, end, side] += weight
    tracks[b, end, side + 1] += weight
    tracks[b, start, side] -= weight
