"""What a trial occupation lacks in the kinetic equation: the source of the particles.

With f = h + e the equation reads L_h e = r(h) + quadratic terms, L_h linearised at h. r is known at
every place and energy, so particles start from it with weights that carry its sign.
"""

from typing import NamedTuple

import numpy as np
from numba import njit

from carriersim.engine.events import passes_at, varying_rate
from carriersim.engine.mechanisms import (
    KEPT_BATH,
    KEPT_CARRIERS,
    RANDOM_BATH,
    RANDOM_CARRIERS,
)
from carriersim.engine.planes import passes_tunnel
from carriersim.engine.space import cosine_at

FLOOR = 0.05  # of the mean strength, for every entry: r may vanish where it was looked at
# Parts of a bin and of a cell where strengths are looked at.
_ENERGIES, _PLACES = (0.125, 0.375, 0.625, 0.875), (0.375, 0.875, 0.125, 0.625)


class Strengths(NamedTuple):
    """How strongly each entry emits, in meV; cumulative over all entries, ends at 1."""

    inside: np.ndarray  # (2 B C,) by direction, bin, cell
    nodes: np.ndarray  # (2 K B,) by direction, node, bin
    walls: np.ndarray  # (2 B C,) as inside; one entry where no wall scatters
    inside_each: np.ndarray  # (2 B C,)
    nodes_each: np.ndarray
    walls_each: np.ndarray


@njit(cache=True, error_model="numpy")
def fermi(energy, mu, kT):
    """Fermi function; a step at kT = 0."""
    if kT <= 0.0:
        return 1.0 if energy < mu else 0.0
    z = (energy - mu) / kT
    if z > 40.0:
        return np.exp(-z)
    return 1.0 / (1.0 + np.exp(z))


@njit(cache=True, error_model="numpy")
def deviation(side, energy, cell, part, trial):
    """h - F(E; mu_R, T_b) of a direction at an energy and a part of a cell."""
    at = (energy - trial.first_meV) / trial.step_meV
    if at < 0.0 or at >= trial.value.shape[1]:
        return 0.0
    b = np.int64(at)
    t = at - b - 0.5
    left = trial.value[side, b, cell, 0] + t * trial.slope[side, b, cell, 0]
    right = trial.value[side, b, cell, 1] + t * trial.slope[side, b, cell, 1]
    return left + part * (right - left)


@njit(cache=True, error_model="numpy")
def occupation(side, energy, cell, part, trial):
    """h of a direction at an energy and a part of a cell."""
    return fermi(energy, 0.0, trial.bath_kT) + deviation(side, energy, cell, part, trial)


@njit(cache=True, error_model="numpy")
def _mean(energy, cell, part, trial):
    return fermi(energy, 0.0, trial.bath_kT) + 0.5 * (
        deviation(0, energy, cell, part, trial) + deviation(1, energy, cell, part, trial)
    )


@njit(cache=True, error_model="numpy")
def _at(field, which, cell, part):
    """A field inside a cell, linear as h is: a constant would move carriers through the cell."""
    return field[which, cell, 0] + part * (field[which, cell, 1] - field[which, cell, 0])


@njit(cache=True, error_model="numpy")
def inside(side, energy, segment, cell, part, cosine, geometry, tables, mechanisms, trial):
    """r inside a segment, per nm of a flight at |u_x| = cosine (1 in one dimension)."""
    equilibrium = fermi(energy, 0.0, trial.bath_kT)
    own = equilibrium + deviation(side, energy, cell, part, trial)
    other = equilibrium + deviation(1 - side, energy, cell, part, trial)
    elastic = geometry.thickness[segment] / geometry.length_nm[segment]
    if tables is not None:
        elastic += varying_rate(segment, energy, tables)
    result = elastic * trial.turned * (other - own)
    for k in range(mechanisms.phonon_meV.size):
        w, n = mechanisms.phonon_meV[k], mechanisms.phonon_number[k]
        upper = _mean(energy + w, cell, part, trial)
        lower = _mean(energy - w, cell, part, trial)
        out = (n + 1.0) * (1.0 - lower) + n * (1.0 - upper)
        into = (n + 1.0) * upper + n * lower
        result += mechanisms.phonon_rate[k] * (into * (1.0 - own) - out * own)
    rates, bath_kT = mechanisms.rates, mechanisms.bath_meV
    if rates[KEPT_BATH] > 0.0:
        result += rates[KEPT_BATH] * (fermi(energy, _at(trial.mu, side, cell, part), bath_kT) - own)
    if rates[RANDOM_BATH] > 0.0:
        result += rates[RANDOM_BATH] * (fermi(energy, _at(trial.mu, 2, cell, part), bath_kT) - own)
    if rates[KEPT_CARRIERS] > 0.0:
        aim = fermi(energy, _at(trial.mu, side, cell, part), _at(trial.kT, side, cell, part))
        result += rates[KEPT_CARRIERS] * (aim - own)
    if rates[RANDOM_CARRIERS] > 0.0:
        aim = fermi(energy, _at(trial.mu, 2, cell, part), _at(trial.kT, 2, cell, part))
        result += rates[RANDOM_CARRIERS] * (aim - own)
    step = (
        deviation(side, energy, cell, 1.0, trial) - deviation(side, energy, cell, 0.0, trial)
    ) * (cosine * geometry.cells[segment] / geometry.length_nm[segment])
    return result - step if side == 0 else result + step


@njit(cache=True, error_model="numpy")
def at_wall(side, energy, cell, part, trial):
    """r of what walls send out, per nm along the channel; it falls as the cosine law does."""
    own = deviation(side, energy, cell, part, trial)
    return 0.5 * trial.wall_rate * (deviation(1 - side, energy, cell, part, trial) - own)


@njit(cache=True, error_model="numpy")
def leaving(side, energy, node, cosine, geometry, planes, tables, probes, trial):
    """Occupation that leaves a node to the right (0) or left (1), given what arrives there.

    cosine: |u_x|, which tunnel barriers ask for. Reflection of a half space that is full to the
    same degree gives (1 - T(u)), whether specular or diffuse (see planes.py).
    """
    last = geometry.transmission.size - 1
    before = fermi(energy, trial.mu_left, trial.left_kT)
    after = fermi(energy, 0.0, trial.right_kT)
    if node > 0:
        cell = geometry.first_cell[node - 1] + geometry.cells[node - 1] - 1
        before = occupation(0, energy, cell, 1.0, trial)
    if node < last:
        after = occupation(1, energy, geometry.first_cell[node], 0.0, trial)
    t = passes_at(node, energy, geometry, tables)
    if planes is not None:
        if planes.tunnel[node]:
            t = passes_tunnel(t, cosine)
    a, b = probes.from_left[node], probes.from_right[node]
    before, after = (1.0 - a) * before, (1.0 - b) * after
    result = t * before + (1.0 - t) * after if side == 0 else t * after + (1.0 - t) * before
    taken = a if side == 0 else b
    if taken > 0.0:
        result += taken * fermi(energy, trial.probe_mu[node], trial.probe_kT[node])
    return result


@njit(cache=True, error_model="numpy")
def at_node(side, energy, node, cosine, geometry, planes, tables, probes, trial):
    """r of what leaves a node into the channel at |u_x| = cosine."""
    if side == 0:
        own = occupation(0, energy, geometry.first_cell[node], 0.0, trial)
    else:
        cell = geometry.first_cell[node - 1] + geometry.cells[node - 1] - 1
        own = occupation(1, energy, cell, 1.0, trial)
    return leaving(side, energy, node, cosine, geometry, planes, tables, probes, trial) - own


@njit(cache=True, error_model="numpy")
def look_inside(geometry, tables, mechanisms, trial, cosines):
    """Mean |r| x path x step of every half space, bin and cell, in meV; cosines: (4,)."""
    bins, cells = trial.value.shape[1:3]
    result = np.zeros((2, bins, cells))
    for segment in range(geometry.cells.size):
        width = geometry.length_nm[segment] / geometry.cells[segment]
        first = geometry.first_cell[segment]
        for c in range(first, first + geometry.cells[segment]):
            for b in range(bins):
                for side in range(2):
                    total = 0.0
                    for i in range(4):
                        energy = trial.first_meV + (b + _ENERGIES[i]) * trial.step_meV
                        part = _PLACES[i]
                        r = inside(
                            side, energy, segment, c, part, cosines[i], geometry, tables,
                            mechanisms, trial,
                        )  # fmt: skip
                        total += abs(r)
                    path = width * trial.oblique
                    result[side, b, c] = 0.25 * total * path * trial.step_meV
    return result


@njit(cache=True, error_model="numpy")
def look_at_walls(geometry, trial):
    """The same for walls: |r| in the middle of cells x width x step."""
    bins, cells = trial.value.shape[1:3]
    result = np.zeros((2, bins, cells))
    for segment in range(geometry.cells.size):
        width = geometry.length_nm[segment] / geometry.cells[segment]
        first = geometry.first_cell[segment]
        for c in range(first, first + geometry.cells[segment]):
            for b in range(bins):
                energy = trial.first_meV + (b + 0.5) * trial.step_meV
                r = abs(at_wall(0, energy, c, 0.5, trial))
                result[:, b, c] = r * width * trial.step_meV
    return result


@njit(cache=True, error_model="numpy")
def look_at_nodes(geometry, planes, tables, probes, trial, cosines):
    """Mean |r| x step of every direction, node and bin, in meV; cosines: (8,) of crossings."""
    bins, nodes = trial.value.shape[1], geometry.transmission.size
    result = np.zeros((2, nodes, bins))
    for side in range(2):
        for node in range(0 if side == 0 else 1, nodes - 1 if side == 0 else nodes):
            for b in range(bins):
                total = 0.0
                for i in range(8):
                    energy = trial.first_meV + (b + (i + 0.5) / 8.0) * trial.step_meV
                    r = at_node(
                        side, energy, node, cosines[i], geometry, planes, tables, probes, trial
                    )
                    total += abs(r)
                result[side, node, b] = total / 8.0 * trial.step_meV
    return result


def strengths(problem, trial):
    """Strengths of all entries, and their sums inside, at nodes and at walls in meV."""
    relaxed, geometry, space = problem.relaxed, problem.geometry, problem.space
    dimension = 1 if space is None else space.dimension
    planes = None if space is None else space.planes
    body = look_inside(
        geometry, relaxed.tables, relaxed.mechanisms, trial, _cosines(4, dimension, crossing=False)
    ).ravel()
    nodes = look_at_nodes(
        geometry,
        planes,
        relaxed.tables,
        relaxed.probes,
        trial,
        _cosines(8, dimension, crossing=True),
    )
    body += FLOOR * body.mean()
    outward = np.zeros(nodes.shape, bool)
    outward[0, -1] = outward[1, 0] = True
    nodes[~outward] += FLOOR * nodes.mean()
    nodes = nodes.ravel()
    walls = np.zeros(1)
    if trial.wall_rate > 0.0:
        walls = look_at_walls(geometry, trial).ravel()
        walls += FLOOR * walls.mean()
    each = body, nodes, walls
    sums = (float(x.sum()) for x in each)
    return Strengths(*(cumulative(x) for x in each), *each), *sums


def _cosines(count, dimension, crossing):
    """|u_x| in the middle of equal shares of a half space, or of a flux by the cosine law.

    In an order that has little to do with that of energies.
    """
    if dimension == 1:
        return np.ones(count)
    share = (np.arange(count) + 0.5) / count
    order = np.argsort(np.arange(1, count + 1) * 0.6180339887 % 1.0)
    return cosine_at(share, dimension, crossing)[order]


def cumulative(strength):
    """Running share of the whole; ends at 1 where the last entry of any strength is."""
    total = strength.sum()
    if total == 0.0:
        return np.ones(max(strength.size, 1))
    result = np.cumsum(strength) / total
    result[np.flatnonzero(strength)[-1] :] = 1.0
    return result
