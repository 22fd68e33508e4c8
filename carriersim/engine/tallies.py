"""From the kernel's counts to responses: arrivals at nodes, track lengths in cells.

Notation: g+(x, E), g-(x, E) are the occupations of right- and left-moving states that a full left
and an empty right contact would cause; f± = F_R + (F_L - F_R) g±.
"""

from dataclasses import dataclass
from dataclasses import field as dataclass_field

import numpy as np
from numba import njit

from carriersim.engine.flights import TURNS, Counts
from carriersim.engine.streams import apart


@dataclass
class Sample:
    """What one batch found in one round, summed over its histories (divide by their number).

    Shapes: B bins, K nodes, C cells, F functionals.
    """

    histories: int
    flights: int
    reached: int  # histories that arrived at the right contact
    transmitted: np.ndarray  # (B,)
    arrivals: np.ndarray  # (K, 2) filling that arrives at each node from the left, from the right
    cells: np.ndarray  # (F, C, 2) mean over each cell of the integrals over g+ and g-
    field: np.ndarray | None  # (2, B, C): g+ and g-; None for one bin
    # Only with directions: 'densities' (K, 4) filling of right- and left-moving states before each
    # node, left- and right-moving behind it; 'lost' (K-1,) mean u_x that walls take in each segment
    # and 'views' (V, 2, D) crossings by direction, both weighted with the drive of the current.
    rays: dict = dataclass_field(default_factory=dict)


def empty_counts(problem):
    """Counts at zero for one call of the kernel."""
    bins, nodes = problem.share.size, problem.nodes_nm.size
    return Counts(
        turns=apart((bins, problem.cells, 2)),
        arrivals=apart((bins, nodes, 2)),
        transmitted=apart((bins,)),
        work=apart((3,), np.int64),
    )


def reduce(problem, counts, histories):
    """Sample of one batch from its counts."""
    weight = 1.0 / problem.share
    transmitted = counts.transmitted * weight
    arrivals = counts.arrivals * weight[:, None, None]
    weights = cell_functionals(problem)
    cells = np.zeros((weights.shape[0], problem.cells, 2))
    several = problem.bins is not None
    field = np.empty((2, weight.size if several else 0, problem.cells))
    shape = problem.geometry.first_cell, problem.geometry.cells
    _track_lengths(counts, weight, weights, *shape, cells, field)
    return Sample(
        histories=histories,
        flights=int(counts.work[TURNS] + counts.arrivals.sum()),
        reached=int(counts.transmitted.sum()),
        transmitted=transmitted,
        arrivals=np.tensordot(problem.functionals.filling, arrivals, 1),
        cells=cells,
        field=field if several else None,
    )


def cell_functionals(problem):
    """Rows (F, B): filling, number in meV, and energy in meV^2 (absent if modes vary)."""
    f = problem.functionals
    rows = [f.filling] if f.energy is None else [f.filling, f.number, f.energy]
    return np.array(rows)


@njit(cache=True, nogil=True, error_model="numpy")
def _track_lengths(counts, weight, functionals, first_cell, cell_count, cells, field):
    """Fill cells (F, C, 2) and field (2, B, C) from the counts of one call of the kernel.

    A turn at place r of cell c bounds a flight on its left: it adds r to the track length in its
    own cell and a whole width to the cells of the segment on its left. A history that leaves the
    segment rightward has crossed every cell once more: it is counted as arrival at the node at the
    right end. The net flux is the same everywhere (elastic), and is what reaches the right contact.
    """
    rows = functionals.shape[0]
    for b in range(weight.size):
        net = counts.transmitted[b]
        for segment in range(first_cell.size):
            length = counts.arrivals[b, segment + 1, 0]
            base = first_cell[segment]
            for c in range(base + cell_count[segment] - 1, base - 1, -1):
                right = (length + counts.turns[b, c, 1]) * weight[b]
                left = right - net * weight[b]
                length += counts.turns[b, c, 0]
                for row in range(rows):
                    cells[row, c, 0] += functionals[row, b] * right
                    cells[row, c, 1] += functionals[row, b] * left
                if field.shape[1]:
                    field[0, b, c] = right
                    field[1, b, c] = left


@njit(cache=True, nogil=True, error_model="numpy")
def add_field(field, histories, total, square):
    """Add a sample's field (2, B, C) to sums of g+, g- and their mean, and of their squares."""
    for b in range(field.shape[1]):
        for c in range(field.shape[2]):
            right, left = field[0, b, c], field[1, b, c]
            mean = 0.5 * (right + left)
            total[0, b, c] += right
            total[1, b, c] += left
            total[2, b, c] += mean
            square[0, b, c] += right * right / histories
            square[1, b, c] += left * left / histories
            square[2, b, c] += mean * mean / histories
