"""Planes across the channel and walls along it, as kernels with directions see them.

A thin tunnel barrier passes T(u) = u^2/(u^2 + gamma), gamma = (1 - T0)/T0, u the cosine between
the direction and the axis. Diffuse reflection sends carriers back in proportion to (1 - T(u)) u, so
that an equilibrium stays one; for a constant T that is the cosine law.
"""

from typing import NamedTuple

import numpy as np
from numba import njit

GRAZING = 0.01  # cosine below which 1/|u| is replaced by its mean there


class Planes(NamedTuple):
    """How nodes transmit and reflect; K nodes. Kernels get None in one dimension."""

    dimension: int
    tunnel: np.ndarray  # (K,) bool: T depends on the angle
    diffuse: np.ndarray  # (K,) bool
    looked_at: np.ndarray  # (K,) int64: which view of the angular distribution, -1 for none
    view_edges: np.ndarray  # (D+1,) cosines, decreasing: classes of direction there
    view_first: np.ndarray  # (n+1,) int64: where to start looking for the class of int(n cosine)


class Walls(NamedTuple):
    """A pair of faces along the channel. Kernels take two pairs, None where none scatters."""

    size: float  # nm from one to the other
    specularity: float


@njit(cache=True, inline="always", error_model="numpy")
def passes_tunnel(chance, cosine):
    """Transmission of a tunnel barrier of normal transmission `chance` at a cosine."""
    square = chance * cosine * cosine
    return square / (square + (1.0 - chance))


@njit(cache=True, inline="always", error_model="numpy")
def crossing_weight(weight):
    """1/|u| of a crossing, as it counts for the occupation at a plane.

    Carriers that graze would give it an infinite variance. Where the occupation does not change
    over |u| < GRAZING, their mean of 1/|u| is 2/GRAZING, which is what they count.
    """
    return weight if weight * GRAZING <= 1.0 else 2.0 / GRAZING


def mean_passing(chance, tunnel, dimension):
    """Transmission averaged over the solid angle of a half space; `chance` for normal incidence.

    Constant or a tunnel barrier, arrays broadcast; integrals of u^2/(u^2 + gamma).
    """
    chance = np.asarray(chance, float)
    if not tunnel:
        return chance
    gamma = (1.0 - chance) / chance
    root = np.sqrt(gamma)
    if dimension == 2:
        return 1.0 - root / np.sqrt(1.0 + gamma)
    return 1.0 - root * np.arctan2(1.0, root)


def mean_passing_flux(chance, tunnel, dimension):
    """Transmission averaged over a flux by the cosine law; arguments as for mean_passing."""
    chance = np.asarray(chance, float)
    if not tunnel:
        return chance
    gamma = np.maximum((1.0 - chance) / chance, 1e-300)
    if dimension == 2:
        root = np.sqrt(1.0 + gamma)
        # artanh(1/root) = ln(1/gamma)/2 + ln(1 + root), which keeps its digits for small gamma.
        return 1.0 - gamma / root * (np.log1p(root) - 0.5 * np.log(gamma))
    return 1.0 - gamma * np.log1p(1.0 / gamma)
