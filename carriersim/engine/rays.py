"""The particle kernel in two and three dimensions: flights along straight lines.

What flights.py is to one dimension. A carrier has a direction; it flies until it collides (its
direction becomes random), meets a side wall, or reaches the node at the end of its segment. Only
the component u_x along the channel matters unless walls scatter.

The occupation of a half space of directions, averaged over the solid angle, follows from path
lengths: a flight adds its path in a cell over the cell's width, 1/|u_x| for a whole crossing. So
every flight leaves 1/|u_x| at its start and at its end, and sums along the channel give the profile
(ray_tallies.py). At nodes crossings count 1/|u_x| as well, see planes.crossing_weight.
"""

from typing import NamedTuple

import numpy as np
from numba import njit

from carriersim.engine.directions import fill_isotropic, fill_lambert
from carriersim.engine.events import draw_energy, optical_thickness, passes
from carriersim.engine.flights import (
    BUDGET,
    DONE,
    HISTORY,
    STOPPED,
    TOO_MANY_EVENTS,
)
from carriersim.engine.planes import crossing_weight, passes_tunnel
from carriersim.engine.streams import BLOCK, fill_exponentials, fill_uniforms

EVENTS, NODE = 3, 4  # more entries of RayCounts.work: events made, node last met
ROOT_TWO = np.uint64(0x6A09E667F3BCC908)  # 2**64 (sqrt(2) - 1)
SHIFT = np.uint64(0xD1342543DE82EF95)  # odd
FAR = 1e280  # nm, a flight that nothing ends
TINY = 1e-300  # in place of a component 0: no wall is met
# Columns of RayCounts.crossings.
FROM_LEFT, FROM_RIGHT, RIGHT_BEFORE, LEFT_BEFORE, LEFT_BEHIND, RIGHT_BEHIND = range(6)
# What a sample trajectory records besides places.
STARTED, COLLIDED, MIRRORED, SCATTERED, PASSED, REFLECTED, ENDED = range(7)


class RayCounts(NamedTuple):
    """What the kernel adds to; B bins (1 when nothing depends on energy), K nodes."""

    tracks: np.ndarray  # (B, cells, 4): for right, then left: sum of +-1/|u_x|, and of its place
    # (B, K, 6): arrivals from the left and from the right; then sums of 1/|u_x| over carriers that
    # move right before the node, left before it, left behind it, right behind it.
    crossings: np.ndarray
    # (B, 2) of these the carriers fresh from the left contact: behind it, and sent back at once.
    fresh: np.ndarray
    lost: np.ndarray  # (B, K-1): sum of u_x of carriers that a wall scatters
    views: np.ndarray  # (V, 2, D): carriers moving right, left, by direction, times `drive`
    transmitted: np.ndarray  # (B,) histories that reached the right contact
    work: np.ndarray  # (5,) int64, see the indices in flights.py and above


@njit(cache=True, nogil=True, error_model="numpy")
def cross(
    first, histories, offset, geometry, planes, walls, second, spectrum, drive, stream, counts,
    stop, event_limit, record,
):  # fmt: skip
    """Follow `histories` carriers from the left contact until each reaches a contact.

    Arguments as for flights.fly; geometry.thickness counts mean free paths. walls, second: pairs of
    faces, None where none scatters. drive: (B,) weight of a carrier in the views. record: None, or
    (when not compiled) a function that takes an event, its segment and its place, x counted from
    the segment's start.
    """
    # One function with its arrays at hand: see flights.fly.
    tracks, crossings, lost = counts.tracks, counts.crossings, counts.lost
    fresh = counts.fresh
    views, transmitted, work = counts.views, counts.transmitted, counts.work
    lanes, exponentials, uniforms = stream.lanes, stream.exponentials, stream.uniforms
    isotropic, lambert, position = stream.isotropic, stream.lambert, stream.position
    first_cell, cells, length_nm = geometry.first_cell, geometry.cells, geometry.length_nm
    per_nm_of = cells / length_nm
    rate_of = geometry.thickness / length_nm
    free_of = 1.0 / np.maximum(rate_of, 1.0 / FAR)
    tunnel, diffuse = planes.tunnel, planes.diffuse
    view, view_edges, view_first = planes.looked_at, planes.view_edges, planes.view_first
    last = geometry.transmission.size - 1
    dimension, whole = planes.dimension, walls is not None
    e, q, i, j = position[0], position[1], position[2], position[3]
    events = 0
    b, energy = 0, 0.0
    ux, uy, uz, y, z = 1.0, 0.0, 0.0, 0.0, 0.0
    for history in range(first, first + histories):
        work[HISTORY] = history
        work[BUDGET] = event_limit
        if spectrum is not None:
            b, energy = draw_energy(history, offset, spectrum)
        ux = emitted_cosine(history, offset, dimension)
        if walls is not None:
            if j >= BLOCK:
                fill_lambert(lanes, lambert, dimension, whole)
                j = 0
            if q > BLOCK - 2:
                fill_uniforms(lanes, uniforms)
                q = 0
            # The same turn about the axis as the direction in the block.
            wider = np.sqrt(1.0 - ux * ux) / np.hypot(lambert[1, j], lambert[2, j])
            uy, uz = wider * lambert[1, j], wider * lambert[2, j]
            y = walls.size * uniforms[q]
            q += 1
            if second is not None:
                z = second.size * uniforms[q]
                q += 1
            j += 1
        if e >= BLOCK:
            fill_exponentials(lanes, exponentials)
            e = 0
        tau = exponentials[e]
        e += 1
        node, segment, right, born = 0, 0, True, True
        weight, x = 1.0 / ux, 0.0
        grazes = False
        if record is not None:
            record(STARTED, 0, 0.0, y, z)
        while True:
            # At a node: pass on, turn back, or leave the channel.
            events += 1
            crossings[b, node, FROM_LEFT if right else FROM_RIGHT] += 1.0
            counted = crossing_weight(weight)
            crossings[b, node, RIGHT_BEFORE if right else LEFT_BEHIND] += counted
            seen = view[node]
            chance = passes(node, b, energy, geometry, spectrum)
            turned = False
            # Looked at just behind a node, at the last one just before it.
            if seen >= 0 and (chance == 1.0 or right == (node == last)):
                row = direction_class(abs(ux), view_edges, view_first)
                views[seen, 0 if right else 1, row] += drive[b]
            if chance < 1.0:
                if q >= BLOCK:
                    outcome = _may_go_on(work, stop, node)
                    if outcome != DONE:
                        return outcome
                    fill_uniforms(lanes, uniforms)
                    q = 0
                normal = chance
                if tunnel[node]:
                    chance = passes_tunnel(chance, ux)
                turned = uniforms[q] >= chance
                q += 1
                if turned:
                    if record is not None:
                        record(REFLECTED, segment, x, y, z)
                    # The flight ends at the edge of the cell in front of the node.
                    if not born:
                        c = first_cell[segment]
                        if right:
                            c += cells[segment] - 1
                            tracks[b, c, 0] += weight
                            tracks[b, c, 1] += weight
                        else:
                            tracks[b, c, 2] -= weight
                    right = not right
                    ux = -ux
                    if diffuse[node]:
                        while True:  # in proportion to (1 - T) u
                            if j >= BLOCK:
                                fill_lambert(lanes, lambert, dimension, whole)
                                j = 0
                            if not tunnel[node]:
                                break
                            if q >= BLOCK:
                                fill_uniforms(lanes, uniforms)
                                q = 0
                            q += 1
                            if uniforms[q - 1] < 1.0 - passes_tunnel(normal, lambert[0, j]):
                                break
                            j += 1
                        ux = lambert[0, j] if right else -lambert[0, j]
                        if walls is not None:
                            uy, uz = lambert[1, j], lambert[2, j]
                        j += 1
                        weight = 1.0 / abs(ux)
                        grazes = False
                counted = crossing_weight(weight)
                crossings[b, node, RIGHT_BEHIND if right else LEFT_BEFORE] += counted
                if seen >= 0 and right != (node == last):
                    row = direction_class(abs(ux), view_edges, view_first)
                    views[seen, 0 if right else 1, row] += drive[b]
            if born:
                fresh[b, 0 if right else 1] += counted
            if node == (last if right else 0):
                if record is not None:
                    record(ENDED, segment, x, y, z)
                break
            if record is not None and not turned and not born:
                record(PASSED, segment, x, y, z)
            segment = node if right else node - 1
            length, base, count = length_nm[segment], first_cell[segment], cells[segment]
            per_nm, rate = per_nm_of[segment], rate_of[segment]
            free = free_of[segment]
            if spectrum is not None:
                rate = optical_thickness(segment, b, energy, geometry, spectrum) / length
                free = 1.0 / rate if rate > 0.0 else FAR
            x = 0.0 if right else length
            before = weight
            if walls is None and (grazes or rate == 0.0):
                # Without collisions or walls nothing bounds the path in a cell: as at nodes.
                weight = 1.0 / abs(ux)
                grazes = rate == 0.0
                if grazes:
                    weight = crossing_weight(weight)
            if turned or weight != before:
                if not turned and not born:  # it goes on with another weight
                    if right:
                        tracks[b, base - 1, 0] += before
                        tracks[b, base - 1, 1] += before
                    else:
                        tracks[b, base + count, 2] -= before
                if right:
                    tracks[b, base, 0] -= weight
                else:
                    tracks[b, base + count - 1, 2] += weight
                    tracks[b, base + count - 1, 3] += weight
            born = False
            while True:
                # One flight: to a collision unless a wall or the segment's end comes first.
                far = tau * free
                new_x = x + far * ux
                inside = (new_x >= 0.0) & (new_x <= length)
                if walls is not None:
                    new_y = y + far * uy
                    inside &= (new_y >= 0.0) & (new_y <= walls.size)
                    if second is not None:
                        new_z = z + far * uz
                        inside &= (new_z >= 0.0) & (new_z <= second.size)
                if inside:
                    x = new_x
                    if walls is not None:
                        y = new_y
                        if second is not None:
                            z = new_z
                    if record is not None:
                        record(COLLIDED, segment, x, y, z)
                    if e >= BLOCK:
                        outcome = _may_go_on(work, stop, node)
                        if outcome != DONE:
                            return outcome
                        fill_exponentials(lanes, exponentials)
                        e = 0
                    tau = exponentials[e]
                    e += 1
                    if i >= BLOCK:
                        fill_isotropic(lanes, isotropic, dimension, whole)
                        i = 0
                    new_ux = isotropic[0, i]
                    if walls is not None:
                        uy, uz = isotropic[1, i], isotropic[2, i]
                    i += 1
                else:
                    ahead = (length - x) / ux if right else -x / ux
                    face = 0
                    if walls is not None:
                        side = walls.size - y if uy > 0.0 else y
                        side /= max(abs(uy), TINY)
                        if side < ahead:
                            ahead, face = side, 1
                        if second is not None:
                            side = second.size - z if uz > 0.0 else z
                            side /= max(abs(uz), TINY)
                            if side < ahead:
                                ahead, face = side, 2
                        y = min(max(y + ahead * uy, 0.0), walls.size)
                        if second is not None:
                            z = min(max(z + ahead * uz, 0.0), second.size)
                    tau = max(tau - ahead * rate, 0.0)
                    if face == 0:
                        node = segment + 1 if right else segment
                        x = length if right else 0.0
                        break
                    x = min(max(x + ahead * ux, 0.0), length)
                    if walls is not None:
                        mirror = walls.specularity
                        if second is not None:
                            if face == 2:
                                mirror = second.specularity
                        if mirror > 0.0:
                            if q >= BLOCK:
                                outcome = _may_go_on(work, stop, node)
                                if outcome != DONE:
                                    return outcome
                                fill_uniforms(lanes, uniforms)
                                q = 0
                            q += 1
                            if uniforms[q - 1] < mirror:
                                if face == 1:
                                    uy = -uy
                                else:
                                    uz = -uz
                                events += 1
                                if record is not None:
                                    record(MIRRORED, segment, x, y, z)
                                continue
                    if record is not None:
                        record(SCATTERED, segment, x, y, z)
                    lost[b, segment] += ux
                    if j >= BLOCK:
                        outcome = _may_go_on(work, stop, node)
                        if outcome != DONE:
                            return outcome
                        fill_lambert(lanes, lambert, dimension, whole)
                        j = 0
                    new_ux = lambert[1, j]
                    if face == 1:
                        uy = -lambert[0, j] if uy > 0.0 else lambert[0, j]
                        uz = lambert[2, j]
                    else:
                        uz = -lambert[0, j] if uz > 0.0 else lambert[0, j]
                        uy = lambert[2, j]
                    j += 1
                # The old flight ends and a new one starts at the same place.
                events += 1
                cell = min(np.int64(x * per_nm), count - 1)
                part = x * per_nm - cell
                cell += base
                onward = new_ux > 0.0
                new_weight = 1.0 / abs(new_ux)
                end = weight if right else -weight
                begin = -new_weight if onward else new_weight
                out, into = 0 if right else 2, 0 if onward else 2
                tracks[b, cell, out] += end
                tracks[b, cell, out + 1] += end * part
                tracks[b, cell, into] += begin
                tracks[b, cell, into + 1] += begin * part
                ux, weight, right = new_ux, new_weight, onward
        if right:
            c = first_cell[last - 1] + cells[last - 1] - 1
            tracks[b, c, 0] += weight
            tracks[b, c, 1] += weight
            transmitted[b] += 1.0
    position[0], position[1], position[2], position[3] = e, q, i, j
    work[EVENTS] += events
    return DONE


@njit(cache=True, inline="always", error_model="numpy")
def emitted_cosine(history, offset, dimension):
    """u_x of a history at the left contact, by the cosine law.

    An additive sequence like that of the energies (events.draw_energy), so that any number of
    histories spreads evenly over the directions; a multiple of the batch's shift shifts it.
    """
    turn = offset * SHIFT + np.uint64(history) * ROOT_TWO
    quantile = (np.float64(turn >> np.uint64(11)) + 0.5) * 2.0**-53
    if dimension == 3:
        return np.sqrt(quantile)
    sine = 2.0 * quantile - 1.0
    return np.sqrt(1.0 - sine * sine)


@njit(cache=True, error_model="numpy")
def _may_go_on(work, stop, node):
    """Whether a history may draw another block of random numbers."""
    if stop[0]:
        return STOPPED
    work[BUDGET] -= BLOCK
    work[NODE] = node
    return DONE if work[BUDGET] >= 0 else TOO_MANY_EVENTS


@njit(cache=True, inline="always", error_model="numpy")
def direction_class(cosine, edges, first):
    """Class of a cosine between decreasing edges; first: see Planes.view_first."""
    row = first[np.int64(cosine * (first.size - 1))]
    while row < edges.size - 2 and cosine <= edges[row + 1]:
        row += 1
    return row
