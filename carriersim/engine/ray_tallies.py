"""From the counts of the kernel with directions to responses; what tallies.py is to d = 1."""

import numpy as np
from numba import njit

from carriersim.engine.planes import mean_passing
from carriersim.engine.rays import (
    EVENTS,
    FROM_LEFT,
    LEFT_BEFORE,
    LEFT_BEHIND,
    RIGHT_BEFORE,
    RIGHT_BEHIND,
    RayCounts,
)
from carriersim.engine.streams import apart
from carriersim.engine.tallies import Sample, cell_functionals


def empty_counts(problem):
    """Counts at zero for one call of the kernel."""
    bins, nodes = problem.share.size, problem.nodes_nm.size
    space = problem.space
    return RayCounts(
        tracks=apart((bins, problem.cells, 4)),
        crossings=apart((bins, nodes, 6)),
        fresh=apart((bins, 2)),
        lost=apart((bins, nodes - 1)),
        views=apart((space.view_nodes.size, 2, space.planes.view_edges.size - 1)),
        transmitted=apart((bins,)),
        work=apart((5,), np.int64),
    )


def drive_of(problem):
    """Weight of a carrier of each bin in what is asked of the current as a whole, (B,)."""
    return problem.functionals.transport(problem.window) / problem.share


def reduce(problem, counts, histories):
    """Sample of one batch from its counts."""
    weight = 1.0 / problem.share
    oblique = problem.space.oblique
    crossings = counts.crossings * weight[:, None, None]
    densities = crossings[:, :, RIGHT_BEFORE:] / oblique
    passed = ~problem.is_scatterer
    densities[:, passed, RIGHT_BEHIND - RIGHT_BEFORE] = densities[:, passed, 0]
    densities[:, passed, LEFT_BEFORE - RIGHT_BEFORE] = densities[
        :, passed, LEFT_BEHIND - RIGHT_BEFORE
    ]
    if problem.space.walls[0] is not None or not problem.freely_entered:
        fresh = counts.fresh * weight[:, None] / oblique
        _state_emission(problem, densities[:, 0], fresh, float(histories))
    weights = cell_functionals(problem)
    cells = np.zeros((weights.shape[0], problem.cells, 2))
    several = problem.bins is not None
    field = np.empty((2, weight.size if several else 0, problem.cells))
    _track_lengths(counts.tracks, weight / oblique, weights, cells, field)
    filling = problem.functionals.filling
    drive = problem.functionals.transport(problem.window) * weight
    return Sample(
        histories=histories,
        flights=int(counts.work[EVENTS]),
        reached=int(counts.transmitted.sum()),
        transmitted=counts.transmitted * weight,
        arrivals=np.tensordot(filling, crossings[:, :, FROM_LEFT : FROM_LEFT + 2], 1),
        cells=cells,
        field=field if several else None,
        rays={
            "densities": np.tensordot(filling, densities, 1),
            "lost": drive @ counts.lost,
            "views": counts.views.copy(),
        },
    )


def _state_emission(problem, densities, fresh, histories):
    """Put the mean of carriers fresh from the left contact, which is known, in place of their sum.

    densities: (B, 4) at the contact; fresh: (B, 2), see RayCounts. Not where they fly freely to the
    next node: there the same carriers count, and nothing may fall on the way.
    """
    space, spectrum = problem.space, problem.spectrum
    chance = np.full(densities.shape[0], problem.geometry.transmission[0])
    if spectrum is not None and spectrum.node_table[0] >= 0:
        chance = spectrum.values[:, spectrum.node_table[0], 0]
    passing = mean_passing(chance, space.planes.tunnel[0], space.dimension)
    behind, back = histories * passing - fresh[:, 0], histories * (1.0 - passing) - fresh[:, 1]
    densities[:, RIGHT_BEFORE - RIGHT_BEFORE] = histories
    densities[:, LEFT_BEFORE - RIGHT_BEFORE] += back
    densities[:, RIGHT_BEHIND - RIGHT_BEFORE] += behind


@njit(cache=True, nogil=True, error_model="numpy")
def _track_lengths(tracks, weight, functionals, cells, field):
    """Fill cells (F, C, 2) and field (2, B, C) from starts and ends of flights, (B, C, 4).

    A flight of weight v that ends at part r of a cell has crossed r of it and all cells behind;
    what lies behind its start is taken off likewise.
    """
    rows = functionals.shape[0]
    for b in range(weight.size):
        right = left = 0.0
        for c in range(tracks.shape[1] - 1, -1, -1):
            g_right = weight[b] * (right + tracks[b, c, 1])
            g_left = weight[b] * (left + tracks[b, c, 3])
            right += tracks[b, c, 0]
            left += tracks[b, c, 2]
            for row in range(rows):
                cells[row, c, 0] += functionals[row, b] * g_right
                cells[row, c, 1] += functionals[row, b] * g_left
            if field.shape[1]:
                field[0, b, c], field[1, b, c] = g_right, g_left
