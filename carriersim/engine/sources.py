"""Where particles come from: contacts, probes, carriers warmer than the lattice, phonon pairs, and
what a trial occupation lacks. Also the groups of arrays that the kernel of wander.py takes.
"""

from typing import NamedTuple

import numpy as np
from numba import njit

from carriersim.engine.directions import fill_isotropic, fill_lambert
from carriersim.engine.events import phonon_shift
from carriersim.engine.residual import Strengths, at_node, at_wall, inside
from carriersim.engine.streams import BLOCK, fill_uniforms, minus_log

# What a source emits; the order of Sources.share.
(
    LEFT_NUMBER,
    LEFT_HEAT,
    RIGHT_HEAT,
    PROBE_HEAT,
    CARRIER_HEAT,
    PHONON_PAIR,
    TRIAL_INSIDE,
    TRIAL_NODE,
    TRIAL_WALL,
) = range(9)
SOURCES = 9
# Rows of Tally.scalars.
OUT_RIGHT, ENERGY_LEFT, ENERGY_RIGHT, FLIGHTS, HISTORY, NODE = range(6)


class Base(NamedTuple):
    """Potentials and temperatures of the known occupation: the reference, or a trial; in meV."""

    mu: np.ndarray  # (3, C) right-moving, left-moving, mean; in the middle of cells
    mu_step: np.ndarray  # (3, C) its change across each cell
    kT: np.ndarray  # (3, C)
    probe_mu: np.ndarray  # (K,)
    probe_kT: np.ndarray  # (K,)


class Frozen(NamedTuple):
    """Fields of earlier rounds; C cells, B bins, K nodes."""

    mu: np.ndarray  # (3, C) right-moving, left-moving, mean, in meV; in the middle of cells
    mu_step: np.ndarray  # (3, C) its change across each cell
    kT: np.ndarray  # (3, C) of the carriers
    probe_mu: np.ndarray  # (K,)
    probe_kT: np.ndarray  # (K,) of what probes emit
    base: Base  # the same of what particles are the deviation from
    reference: np.ndarray  # (B FINE,) for phonons without a trial


class Sources(NamedTuple):
    """Where particles come from; shares are cumulative and end at 1."""

    share: np.ndarray  # (SOURCES,)
    probe: np.ndarray  # (K,) over nodes
    carriers: np.ndarray  # (3 C,) over direction (right, left, random) and cell
    pair: np.ndarray  # (n,) over the phonon pairs listed below
    pair_place: np.ndarray  # (n,) int32: cell
    pair_bin: np.ndarray  # (n,) int32: bin of the lower state
    pair_kind: np.ndarray  # (n,) int8: bits 0 upper leftward, 1 lower leftward, 2 negative, 3 late
    pair_phonon: np.ndarray  # (n,) int8
    strengths: Strengths | None  # of a trial's residual


class Setting(NamedTuple):
    """Numbers of a run that the kernel needs."""

    mu_left: float
    left_sign: float  # of the number that the left contact emits
    left_kT: float
    right_kT: float
    bath_kT: float
    first_meV: float
    step_meV: float
    exact_energy: bool  # no event depends on energy: kept energies are exact
    carriers: bool  # carriers events happen, so kept energies differ from energies
    tangent: bool  # follow a small change of the bias instead of the deviation itself


class Tally(NamedTuple):
    """What the kernel adds to."""

    bins: np.ndarray  # (B, C, 4): right (ends, places), left (ends, places)
    # (C, 12): for right, then for left: number, energy, and energy that carriers events keep, each
    # as (signed number of flight ends, sum of their places).
    cells: np.ndarray
    arrivals: np.ndarray  # (K, 2) signed arrivals from the left, from the right
    departures: np.ndarray  # (K, 2) signed departures to the right, to the left
    heat: np.ndarray  # (C,) energy given to the lattice
    probe_heat: np.ndarray  # (K,)
    turned: np.ndarray  # (C,) directed flux destroyed by phonons
    scalars: np.ndarray  # (6,)
    # With directions: (K, 4) signed sums of 1/|u_x| over carriers that move right before a node,
    # left before it, left behind it, right behind it; (K-1,) u_x that walls take; (V, 2, D) signed
    # crossings by direction, see rays.RayCounts.
    densities: np.ndarray
    lost: np.ndarray
    views: np.ndarray


@njit(cache=True, error_model="numpy", forceinline=True)
def uniform(uniforms, lanes, position):
    """One uniform number in (0, 1]."""
    q = position[1]
    if q == BLOCK:
        fill_uniforms(lanes, uniforms)
        q = 0
    position[1] = q + 1
    return uniforms[q] + 1.1102230246251565e-16


@njit(cache=True, error_model="numpy", forceinline=True)
def _heat_energy(kT, bath_kT, uniforms, lanes, position):
    """Distance from mu of a member of F(mu, T) - F(mu, T_b).

    The difference is an integral over temperatures between the two of z sech^2(z/2)/4, z = e/kT:
    a gamma variable, accepted with probability 1/(1 + exp(-z))^2 (ln 2 on average).
    """
    between = bath_kT + (kT - bath_kT) * uniform(uniforms, lanes, position)
    while True:
        product = uniform(uniforms, lanes, position) * uniform(uniforms, lanes, position)
        z = minus_log(product)
        if uniform(uniforms, lanes, position) * (1.0 + product) ** 2 < 1.0:
            return between * z


class Particles(NamedTuple):
    """One or two particles that a source emits."""

    place: np.ndarray  # (2,) int64: its segment; for a particle at a node: the node
    numbers: np.ndarray  # (2, 5): place in the segment (cells), energy, kept energy, sign, heat
    flags: np.ndarray  # (2, 2) bool: moves right; starts at a node
    aim: np.ndarray  # (2, 5): direction, and y and z in nm where walls scatter


@njit(cache=True, error_model="numpy")
def aim_from(member, right, at_node, planes, walls, second, stream, start):
    """Draw the direction of a new particle and its place across the channel; returns |u_x|.

    At a node by the cosine law, inside the channel all directions of the half space alike.
    """
    if planes is None:
        return 1.0
    lanes, position = stream.lanes, stream.position
    whole = walls is not None
    if position[2] >= BLOCK:
        fill_isotropic(lanes, stream.isotropic, planes.dimension, whole)
        position[2] = 0
    if position[3] >= BLOCK:
        fill_lambert(lanes, stream.lambert, planes.dimension, whole)
        position[3] = 0
    k = 3 if at_node else 2
    block = stream.lambert if at_node else stream.isotropic
    cosine = abs(block[0, position[k]])
    start.aim[member, 0] = cosine if right else -cosine
    if walls is not None:
        start.aim[member, 1], start.aim[member, 2] = block[1, position[k]], block[2, position[k]]
        start.aim[member, 3] = walls.size * uniform(stream.uniforms, lanes, position)
        if second is not None:
            start.aim[member, 4] = second.size * uniform(stream.uniforms, lanes, position)
    position[k] += 1
    return cosine


@njit(cache=True, error_model="numpy")
def _aim_from_wall(member, right, planes, walls, second, stream, start):
    """The same for a particle that a wall sends out by the cosine law, into one half space."""
    aim_from(member, right, True, planes, walls, second, stream, start)
    normal, along = abs(start.aim[member, 0]), abs(start.aim[member, 1])
    other = start.aim[member, 2]
    face, size = 1, walls.size
    if second is not None:
        of_first = (1.0 - walls.specularity) / walls.size
        both = of_first + (1.0 - second.specularity) / second.size
        if uniform(stream.uniforms, stream.lanes, stream.position) * both > of_first:
            face, size = 2, second.size
    near = uniform(stream.uniforms, stream.lanes, stream.position) < 0.5
    start.aim[member, 0] = along if right else -along
    start.aim[member, face] = normal if near else -normal
    start.aim[member, 3 - face] = other
    start.aim[member, 2 + face] = 0.0 if near else size


@njit(cache=True, error_model="numpy", forceinline=True)
def _put(start, member, segment, place, energy, kept, sign, heat, right, at_node):
    start.place[member] = segment
    start.numbers[member, 0] = place
    start.numbers[member, 1] = energy
    start.numbers[member, 2] = kept
    start.numbers[member, 3] = sign
    start.numbers[member, 4] = heat
    start.flags[member, 0] = right
    start.flags[member, 1] = at_node


@njit(cache=True, error_model="numpy", forceinline=True)
def _segment_of(geometry, cell):
    return np.searchsorted(geometry.first_cell, cell, side="right") - 1


@njit(cache=True, error_model="numpy")
def emit(
    kind, rest, geometry, planes, walls, second, tables, mechanisms, probes, frozen, trial,
    sources, setting, stream, tally, start,
):  # fmt: skip
    """Draw from a source; returns the number of particles put into start (1 or 2).

    rest: uniform number left over from choosing the source.
    """
    last = geometry.transmission.size - 1
    uniforms, lanes, position = stream.uniforms, stream.lanes, stream.position
    if trial is not None:
        if kind >= TRIAL_INSIDE:
            return _emit_residual(
                kind, rest, geometry, planes, walls, second, tables, mechanisms, probes, trial,
                sources, stream, start,
            )  # fmt: skip
    if kind == PHONON_PAIR:
        return _emit_pair(
            rest,
            geometry,
            planes,
            walls,
            second,
            mechanisms,
            sources,
            setting,
            stream,
            tally,
            start,
        )
    if kind == LEFT_HEAT or kind == RIGHT_HEAT:
        left = kind == LEFT_HEAT
        mu, kT = (setting.mu_left, setting.left_kT) if left else (0.0, setting.right_kT)
        base_kT = setting.bath_kT
        segment, place, right, at_node, heat = (0 if left else last), 0.0, left, True, 1.0
    elif kind == PROBE_HEAT:
        segment = min(np.searchsorted(sources.probe, rest, side="right"), last)
        mu, kT = frozen.probe_mu[segment], frozen.probe_kT[segment]
        base_kT = frozen.base.probe_kT[segment]
        place, at_node, heat = 0.0, True, 2.0
        right = uniform(uniforms, lanes, position) < probes.emits_right[segment]
    else:
        entry = min(
            np.searchsorted(sources.carriers, rest, side="right"), sources.carriers.size - 1
        )
        cells = frozen.mu.shape[1]
        which, cell = entry // cells, entry % cells
        mu, kT, base_kT = (
            frozen.mu[which, cell],
            frozen.kT[which, cell],
            frozen.base.kT[which, cell],
        )
        segment = _segment_of(geometry, cell)
        place = cell - geometry.first_cell[segment] + uniform(uniforms, lanes, position)
        right = which == 0 or (which == 2 and uniform(uniforms, lanes, position) < 0.5)
        at_node, heat = False, 1.0
    away = _heat_energy(kT, base_kT, uniforms, lanes, position)
    sign = 1.0 if kT > base_kT else -1.0
    for member in range(2):
        energy = mu + away if member == 0 else mu - away
        charge = sign if member == 0 else -sign
        kept = energy
        if kind == CARRIER_HEAT and setting.exact_energy:
            kept = 0.0
        if kind == PROBE_HEAT:
            tally.probe_heat[segment] -= charge * energy
        elif kind == LEFT_HEAT:
            tally.scalars[ENERGY_LEFT] += charge * energy
        elif kind == RIGHT_HEAT:
            tally.scalars[ENERGY_RIGHT] -= charge * energy
        aim_from(member, right, at_node, planes, walls, second, stream, start)
        _put(start, member, segment, place, energy, kept, charge, heat, right, at_node)
    return 2


@njit(cache=True, error_model="numpy")
def _emit_pair(
    rest, geometry, planes, walls, second, mechanisms, sources, setting, stream, tally, start
):
    """A pair of the quadratic source: + in the lower state, - above, times the pair's sign."""
    uniforms, lanes, position = stream.uniforms, stream.lanes, stream.position
    entry = min(np.searchsorted(sources.pair, rest, side="right"), sources.pair.size - 1)
    cell, kind = sources.pair_place[entry], sources.pair_kind[entry]
    w = mechanisms.phonon_meV[sources.pair_phonon[entry]]
    # Where the step does not divide w the upper state lies in one of two bins: early or late part.
    _, shift = phonon_shift(w, setting.step_meV)
    u = uniform(uniforms, lanes, position)
    part = 1.0 - shift + shift * u if kind & 8 else (1.0 - shift) * u
    energy = setting.first_meV + (sources.pair_bin[entry] + part) * setting.step_meV
    segment = _segment_of(geometry, cell)
    place = cell - geometry.first_cell[segment] + uniform(uniforms, lanes, position)
    sign = -1.0 if kind & 4 else 1.0
    tally.heat[cell] += sign * w
    aim_from(0, not kind & 2, False, planes, walls, second, stream, start)
    _put(start, 0, segment, place, energy, energy, sign, 0.0, not kind & 2, False)
    upper = energy + w
    aim_from(1, not kind & 1, False, planes, walls, second, stream, start)
    _put(start, 1, segment, place, upper, upper, -sign, 0.0, not kind & 1, False)
    return 2


@njit(cache=True, error_model="numpy")
def _emit_residual(
    kind, rest, geometry, planes, walls, second, tables, mechanisms, probes, trial, sources,
    stream, start,
):  # fmt: skip
    """A particle from the residual of the trial occupation; its weight carries the sign."""
    uniforms, lanes, position = stream.uniforms, stream.lanes, stream.position
    bins, cells = trial.value.shape[1:3]
    nodes = geometry.transmission.size
    if kind == TRIAL_NODE:
        table = sources.strengths.nodes
    elif kind == TRIAL_WALL:
        table = sources.strengths.walls
    else:
        table = sources.strengths.inside
    entry = min(np.searchsorted(table, rest, side="right"), table.size - 1)
    u = uniform(uniforms, lanes, position)
    part = uniform(uniforms, lanes, position)
    if kind == TRIAL_NODE:
        b, node, side = entry % bins, (entry // bins) % nodes, entry // (bins * nodes)
        energy = trial.first_meV + (b + u) * trial.step_meV
        cosine = aim_from(0, side == 0, True, planes, walls, second, stream, start)
        r = at_node(side, energy, node, cosine, geometry, planes, tables, probes, trial)
        weight = r * trial.step_meV / sources.strengths.nodes_each[entry]
        _put(start, 0, node, 0.0, energy, energy, weight, 2.0, side == 0, True)
        return 1
    cell, b, side = entry % cells, (entry // cells) % bins, entry // (cells * bins)
    energy = trial.first_meV + (b + u) * trial.step_meV
    segment = _segment_of(geometry, cell)
    width = geometry.length_nm[segment] / geometry.cells[segment]
    if kind == TRIAL_WALL:
        if walls is not None:
            _aim_from_wall(0, side == 0, planes, walls, second, stream, start)
        r = at_wall(side, energy, cell, part, trial)
        each = sources.strengths.walls_each[entry]
    else:
        cosine = aim_from(0, side == 0, False, planes, walls, second, stream, start)
        r = inside(side, energy, segment, cell, part, cosine, geometry, tables, mechanisms, trial)
        r *= trial.oblique
        each = sources.strengths.inside_each[entry]
    weight = r * trial.step_meV * width / each
    place = cell - geometry.first_cell[segment] + part
    _put(start, 0, segment, place, energy, energy, weight, 0.0, side == 0, False)
    return 1
