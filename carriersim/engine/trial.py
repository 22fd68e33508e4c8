"""A trial occupation near the solution, from which optical phonons are simulated.

Where optical phonons act, the deviation from one Fermi function is large, and its square, which
Pauli blocking brings in, would make particles of both signs in great number. So the particles stand
for the small difference between the solution and a trial occupation h(x, E), and the kinetic
equation is linearised at h: Newton's form, whose rates are never negative. h only has to be near:
what it lacks is its residual in the kinetic equation, from which particles start (residual Monte
Carlo: Halton, SIAM Review 4 (1962) 88; Evans, Urbatsch, Lichtenstein & Morel, J. Comput. Phys. 189
(2003) 539). Nothing of the mesh of h is left in the result to first order.

Here h is found on the run's own bins and cells. Every sweep solves the two streams of each energy
with the occupations of the other energies held. Both streams then stay between 0 and 1, and sweeps
converge from any start, because more carriers anywhere never mean fewer elsewhere.
"""

from typing import NamedTuple

import numpy as np
from numba import njit

from carriersim.constants import BOLTZMANN_MEV_PER_K
from carriersim.engine.energies import limited_slope
from carriersim.engine.events import passes_at, phonon_shift, varying_rate
from carriersim.engine.mechanisms import (
    KEPT_BATH,
    KEPT_CARRIERS,
    RANDOM_BATH,
    RANDOM_CARRIERS,
    edges_of,
    temperatures,
)
from carriersim.engine.planes import mean_passing_flux
from carriersim.engine.space import BACKSCATTER
from carriersim.fermi import mean_occupation

MOST_SWEEPS = 3000
CLOSE = 1e-6  # largest change of an occupation in the last sweep
MOST_MIXINGS, DEPTH = 100, 12  # repetitions, and how many of them are mixed
TARGETS_EVERY = 4  # sweeps between two updates of what baths, carriers and probes aim at


class Trial(NamedTuple):
    """h = F(E; mu_R, T_b) + a deviation of right- (0) and left-moving (1) states.

    The deviation is given at the left and right edge of cells; inside a cell it is linear in x,
    inside a bin linear in E. So without a bias h is the equilibrium, exactly.
    """

    value: np.ndarray  # (2, B, C, 2) deviation, mean over the bin
    slope: np.ndarray  # (2, B, C, 2) its change across the bin
    mu: np.ndarray  # (3, C, 2) right-moving, left-moving, mean; meV
    kT: np.ndarray  # (3, C, 2) of the carriers
    probe_mu: np.ndarray  # (K,)
    left_kT: float
    right_kT: float
    mu_left: float
    probe_kT: np.ndarray  # (K,)
    first_meV: float
    step_meV: float
    bath_kT: float
    oblique: float  # path of a flight per length along the channel, see space.OBLIQUE; 1 in d = 1
    turned: float  # share of carriers that an elastic event takes to the other half space
    wall_rate: float  # per nm: carriers of a half space that walls scatter


class Medium(NamedTuple):
    """What the sweeps meet; S segments."""

    elastic: np.ndarray  # (B, S) per nm
    passing: np.ndarray  # (B, K)
    from_left: np.ndarray  # (K,) taken by a probe
    from_right: np.ndarray
    left: np.ndarray  # (B,) of the contacts
    right: np.ndarray
    first_cell: np.ndarray
    cells: np.ndarray
    widths: np.ndarray  # (C,) nm
    shift: np.ndarray  # (P,) bins below a phonon's energy
    part: np.ndarray  # (P,) what is left, in bins
    rate: np.ndarray  # (P,) per nm
    number: np.ndarray  # (P,)
    balance: np.ndarray  # (B,) per nm, what bins alone would change in the equilibrium
    oblique: float  # see Trial; here h is the same for all directions of a half space


def solve_trial(problem):
    """The Trial of a problem with relaxation."""
    relaxed, window = problem.relaxed, problem.window
    axis, setting = relaxed.axis, relaxed.setting
    edges = edges_of(axis)
    medium = medium_of(problem, edges)
    value = np.empty((2, axis.bins, problem.cells, 2))
    value[:] = mean_occupation(
        edges, 0.5 * window.mu_left_meV, problem.scenario.bath_temperature_K
    )[:, None, None]
    rates = relaxed.mechanisms.rates
    targets = np.zeros_like(value)
    probe = np.zeros((axis.bins, problem.nodes_nm.size))
    moves = bool(rates.any() or medium.from_left.any() or medium.from_right.any())
    if medium.rate.size or not moves:
        every = TARGETS_EVERY if moves else MOST_SWEEPS
        for sweep in range(MOST_SWEEPS):
            if moves and sweep % every == 0:
                targets, probe = _targets(problem, edges, _moments(problem, value))
            change = _sweep(value, targets, probe, float(rates.sum()), medium)
            if change < CLOSE and (not moves or sweep % every == 0):
                break
    else:
        _settle(problem, edges, value, medium)
    np.clip(value, 0.0, 1.0, out=value)
    mu, kT, probe_mu = _moments(problem, value)
    deviation = value - relaxed.reference[:, None, None]
    return Trial(
        value=deviation,
        slope=_slopes(deviation),
        mu=mu,
        kT=kT,
        probe_mu=probe_mu,
        left_kT=setting.left_kT,
        right_kT=setting.right_kT,
        mu_left=setting.mu_left,
        probe_kT=BOLTZMANN_MEV_PER_K * relaxed.probe_kelvin,
        first_meV=axis.first_meV,
        step_meV=axis.step_meV,
        bath_kT=setting.bath_kT,
        oblique=1.0 if problem.space is None else problem.space.oblique,
        turned=1.0 if problem.space is None else 0.5,
        wall_rate=0.0 if problem.space is None else problem.space.wall_rate,
    )


def _settle(problem, edges, value, medium):
    """Moments that repeat themselves, where given these one sweep solves every energy.

    Plain repetition creeps when a path is short against the channel; Anderson's mixing (J. ACM 12
    (1965) 547) of the last repetitions does not.
    """
    extra = float(problem.relaxed.mechanisms.rates.sum())
    mu, kT, probe_mu = _moments(problem, value)
    at, size = np.concatenate([mu.ravel(), kT.ravel(), probe_mu]), mu.size
    scale = max(abs(problem.window.mu_left_meV), problem.relaxed.setting.bath_kT)
    places, steps = [], []
    for _ in range(MOST_MIXINGS):
        mu, kT = at[:size].reshape(mu.shape), at[size : 2 * size].reshape(mu.shape)
        moments = mu, np.maximum(kT, 0.0), at[2 * size :]
        targets, probe = _targets(problem, edges, moments)
        _sweep(value, targets, probe, extra, medium)
        new = np.concatenate([x.ravel() for x in _moments(problem, value)])
        places.append(at)
        steps.append(new - at)
        if np.abs(steps[-1]).max() < CLOSE * scale:
            break
        places, steps = places[-DEPTH:], steps[-DEPTH:]
        at = _mixed(np.array(places), np.array(steps))


def _mixed(places, steps):
    """The combination of the last places, one step on, whose step is smallest."""
    if len(places) == 1:
        return places[0] + steps[0]
    differences = np.diff(steps, axis=0).T
    weights = np.linalg.lstsq(differences, steps[-1], rcond=1e-10)[0]
    along = np.diff(places, axis=0).T + differences
    return places[-1] + steps[-1] - along @ weights


def medium_of(problem, edges):
    """The Medium of a problem on the bins between the given edges."""
    relaxed, geometry, window = problem.relaxed, problem.geometry, problem.window
    centres = 0.5 * (edges[1:] + edges[:-1])
    nodes = geometry.transmission.size
    passing = np.array(
        [[passes_at(k, e, geometry, relaxed.tables) for k in range(nodes)] for e in centres]
    )
    space = problem.space
    oblique = 1.0 if space is None else space.oblique
    if space is not None:
        for k in np.flatnonzero(space.planes.tunnel):
            passing[:, k] = mean_passing_flux(passing[:, k], True, space.dimension)
    elastic = np.tile(geometry.thickness / geometry.length_nm, (centres.size, 1))
    if relaxed.tables is not None:
        elastic += np.array(
            [[varying_rate(s, e, relaxed.tables) for s in range(nodes - 1)] for e in centres]
        )
    if space is not None:  # mean free paths; walls take as much again from each half space
        elastic = elastic / BACKSCATTER[space.dimension] + 0.5 * space.wall_rate
    phonons = relaxed.mechanisms
    shifts = [phonon_shift(w, relaxed.axis.step_meV) for w in phonons.phonon_meV]
    shift, part = np.array(shifts, float).reshape(-1, 2).T
    medium = Medium(
        elastic=elastic,
        passing=passing,
        from_left=relaxed.probes.from_left,
        from_right=relaxed.probes.from_right,
        left=mean_occupation(edges, window.mu_left_meV, window.temperature_left_K),
        right=mean_occupation(edges, 0.0, window.temperature_right_K),
        first_cell=geometry.first_cell,
        cells=geometry.cells,
        widths=np.diff(problem.cell_edges_nm),
        shift=shift.astype(np.int64),
        part=part.copy(),
        rate=phonons.phonon_rate,
        number=phonons.phonon_number,
        balance=np.zeros(centres.size),
        oblique=oblique,
    )
    still = np.broadcast_to(relaxed.reference[None, :, None, None], (2, centres.size, 1, 2))
    return medium._replace(balance=balance_of(np.ascontiguousarray(still), medium))


def number_and_energy(problem, deviation, slope=None):
    """n and u about the reference from deviations (2, B, C, n), shapes (2, C, n)."""
    axis = problem.relaxed.axis
    step = axis.step_meV
    centres = axis.first_meV + step * (np.arange(axis.bins) + 0.5)
    number = step * deviation.sum(axis=1)
    energy = step * np.einsum("sbcn,b->scn", deviation, centres)
    if slope is not None:
        energy += step**2 / 12.0 * slope.sum(axis=1)
    return number, energy


def _moments(problem, value):
    """mu (3, C, 2), kT (3, C, 2) at the edges of cells, and the probes' potentials (K,)."""
    number, energy = number_and_energy(problem, value - problem.relaxed.reference[:, None, None])
    bath = problem.scenario.bath_temperature_K
    mu, energy = (np.concatenate([a, a.mean(axis=0, keepdims=True)]) for a in (number, energy))
    kT = BOLTZMANN_MEV_PER_K * temperatures(mu, energy, bath)
    return mu, kT, _probe_potentials(problem, number)


def _probe_potentials(problem, number):
    probes = problem.relaxed.probes
    first, cells = problem.geometry.first_cell, problem.geometry.cells
    result = np.zeros(problem.nodes_nm.size)
    for k in range(1, result.size - 1):
        a, b = probes.from_left[k], probes.from_right[k]
        if a + b > 0.0:
            before, after = first[k - 1] + cells[k - 1] - 1, first[k]
            result[k] = (a * number[0, before, 1] + b * number[1, after, 0]) / (a + b)
    return result


def _targets(problem, edges, moments):
    """Rates x occupations that baths and carriers aim at, and the occupation probes emit with."""
    mu, kT, probe_mu = moments
    rates, bath = problem.relaxed.mechanisms.rates, problem.scenario.bath_temperature_K
    carriers = kT / BOLTZMANN_MEV_PER_K
    result = np.zeros((2, edges.size - 1, mu.shape[1], 2))
    for kind, random, kelvin in (
        (KEPT_BATH, False, np.full_like(kT, bath)),
        (RANDOM_BATH, True, np.full_like(kT, bath)),
        (KEPT_CARRIERS, False, carriers),
        (RANDOM_CARRIERS, True, carriers),
    ):
        for side in (0, 1) if rates[kind] else ():
            field = 2 if random else side
            result[side] += rates[kind] * mean_occupation(edges, mu[field], kelvin[field])
    return result, mean_occupation(edges, probe_mu, problem.relaxed.probe_kelvin)


def _slopes(value):
    """Change across each bin, limited, so that steps between bins, as at 0 K, stay steps."""
    steps = np.diff(np.pad(value, ((0, 0), (1, 1), (0, 0), (0, 0))), axis=1)
    return limited_slope(steps[:, :-1], steps[:, 1:])


@njit(cache=True, error_model="numpy")
def _sweep(value, targets, probe, extra, medium):
    """One pass over all energies from the top; returns the largest change of an occupation."""
    bins, cells = value.shape[1], value.shape[2]
    decay, source = np.empty((cells, 2)), np.empty((2, cells, 2))
    work = np.empty((4, cells))
    largest = 0.0
    for b in range(bins - 1, -1, -1):
        _rates(b, value, targets, extra, medium, decay, source)
        largest = max(largest, _two_streams(b, value, probe, medium, decay, source, work))
    return largest


@njit(cache=True, error_model="numpy")
def _mean_at(b, part, c, edge, value):
    """Mean occupation of both directions, part of a bin above bin b."""
    total = 0.0
    for late in range(2):
        weight = part if late else 1.0 - part
        at = b + late
        if weight > 0.0 and at < value.shape[1]:
            if at < 0:
                total += weight
            else:
                total += weight * 0.5 * (value[0, at, c, edge] + value[1, at, c, edge])
    return total


@njit(cache=True, error_model="numpy")
def balance_of(value, medium):
    """df/dx that phonons cause in the first cell, (B,)."""
    bins = value.shape[1]
    decay, source = np.empty((1, 2)), np.empty((2, 1, 2))
    result = np.empty(bins)
    for b in range(bins):
        _rates(b, value, np.zeros((2, bins, 1, 2)), 0.0, medium, decay, source)
        result[b] = source[0, 0, 0] - decay[0, 0] * value[0, b, 0, 0]
    return result


@njit(cache=True, error_model="numpy")
def _rates(b, value, targets, extra, medium, decay, source):
    """decay: d f/dx = ... - decay f + source, from relaxation, at both edges of each cell."""
    for c in range(value.shape[2]):
        for edge in range(2):
            out, into = 0.0, 0.0
            for k in range(medium.rate.size):
                shift, part = medium.shift[k], medium.part[k]
                upper = _mean_at(b + shift, part, c, edge, value)
                if part > 0.0:
                    lower = _mean_at(b - shift - 1, 1.0 - part, c, edge, value)
                else:
                    lower = _mean_at(b - shift, 0.0, c, edge, value)
                n, rate = medium.number[k], medium.rate[k]
                out += rate * ((n + 1.0) * (1.0 - lower) + n * (1.0 - upper))
                into += rate * ((n + 1.0) * upper + n * lower)
            along = medium.oblique
            decay[c, edge] = along * (out + into + extra)
            for side in range(2):
                given = along * (into + targets[side, b, c, edge])
                source[side, c, edge] = given - medium.balance[b]


@njit(cache=True, error_model="numpy")
def _two_streams(b, value, probe, medium, decay, source, work):
    """Both streams of one energy along the channel, by elimination from left to right.

    Everywhere right = p left + s, as one composes scattering matrices; `work` holds what gives the
    stream that moves left from the one at the right edge.
    """
    last = medium.first_cell.size
    nodes = np.zeros(
        (4, last)
    )  # behind each node: right = p left + s; before it: left = q left + r
    p, s = 0.0, 0.0
    for k in range(last):
        t = medium.passing[b, k]
        if k == 0:
            p, s = 1.0 - t, t * medium.left[b]
        else:
            a, c_ = 1.0 - medium.from_left[k], 1.0 - medium.from_right[k]
            down = 1.0 / (1.0 - (1.0 - t) * a * p)
            nodes[2, k] = t * c_ * down
            nodes[3, k] = ((1.0 - t) * a * s + (1.0 - c_) * probe[b, k]) * down
            s = t * a * (p * nodes[3, k] + s) + (1.0 - a) * probe[b, k]
            p = t * a * p * nodes[2, k] + (1.0 - t) * c_
        nodes[0, k], nodes[1, k] = p, s
        for c in range(medium.first_cell[k], medium.first_cell[k] + medium.cells[k]):
            p, s = _cell(c, medium.elastic[b, k], medium.widths[c], decay, source, p, s, work)
    t = medium.passing[b, last]
    left = (t * medium.right[b] + (1.0 - t) * s) / (1.0 - (1.0 - t) * p)
    return _back(b, value, medium, work, nodes, left)


@njit(cache=True, error_model="numpy", forceinline=True)
def _cell(c, elastic, width, decay, source, p, s, work):
    """Across a cell: trapezoidal rule where it is fine enough to keep occupations positive."""
    a = elastic * width
    g_left, g_right = a + decay[c, 0] * width, a + decay[c, 1] * width
    steepest = max(g_left, g_right)
    late = 0.5 if steepest < 2.0 else 1.0 - 1.0 / steepest
    early = 1.0 - late
    q_left = width * (late * source[1, c, 0] + early * source[1, c, 1])
    q_right = width * (late * source[0, c, 1] + early * source[0, c, 0])
    down = 1.0 / (1.0 + late * g_left - late * a * p)
    rest = (late * a * s + q_left) * down
    by_left = (1.0 - early * g_right) * down
    by_right = early * a * down
    keep = 1.0 - early * g_left
    carry = p * keep + early * a
    down = 1.0 / (1.0 + late * g_right - carry * by_right)
    new_p = (late * a + carry * by_left) * down
    new_s = (s * keep + q_right + carry * rest) * down
    work[0, c], work[1, c] = new_p, new_s
    work[2, c] = rest + by_right * new_s
    work[3, c] = by_left + by_right * new_p
    return new_p, new_s


@njit(cache=True, error_model="numpy")
def _back(b, value, medium, work, nodes, left):
    """Both streams from right to left, given the one that comes from the right contact."""
    largest = 0.0
    for k in range(nodes.shape[1] - 1, -1, -1):
        first = medium.first_cell[k]
        for c in range(first + medium.cells[k] - 1, first - 1, -1):
            right = work[0, c] * left + work[1, c]
            largest = max(largest, abs(value[0, b, c, 1] - right), abs(value[1, b, c, 1] - left))
            value[0, b, c, 1], value[1, b, c, 1] = right, left
            left = work[2, c] + work[3, c] * left
            value[1, b, c, 0] = left
            if c > first:
                value[0, b, c, 0] = work[0, c - 1] * left + work[1, c - 1]
        value[0, b, first, 0] = nodes[0, k] * left + nodes[1, k]
        left = nodes[2, k] * left + nodes[3, k]
    return largest
