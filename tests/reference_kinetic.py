"""Deterministic solver of the kinetic equation in d = 1, the reference of the relaxation tests.

Written from the equations alone; it shares no code with the package. Lengths in nm, energies in meV
counted from mu_R = 0, temperatures in K.

    +- df±/dx = (f∓ - f±)/lam(E, x)                      distributed elastic scattering
              + (F(E; mu±, T_b) - f±)/path                bath, direction kept
              + (F(E; mu, T_b) - f±)/path                 bath, direction randomised
              + (F(E; mu±, T_e±) - f±)/path               carriers, kept (randomised: mu, T_e)
              + optical phonons with Pauli blocking, final direction random

with n = int (f - theta(-E)) dE, u = int E (f - theta(-E)) dE, mu = n, (pi k T_e)^2/6 = u - mu^2/2.
Point scatterers, interfaces (point scatterers at 0 and L) and coupled voltage probes are jump
conditions between two nodes at the same place.

Energy. A uniform grid that holds E = 0 and whose step divides every phonon energy. Occupations are
smooth on the scale kT, so that sums over the grid converge exponentially in kT/step; only the kinks
of a tabulated T(E) or lam(E) leave an error of second order. Optical phonons couple an energy to
those a whole number of phonon energies away: a `ladder`. Ladders know of each other only through
the moments n±, u±. Without carriers, baths and probes equal ladders are solved once. The cost grows
as the cube of the energies in a ladder: two phonons whose energies have a small common divisor are
expensive (100 and 160 meV: a minute; 80 and 160: a second). Expensive too: a path of a hundredth
of the length and below, and hot carriers in a cold lattice with tables, unless `energy_step` is
given (0.9 kT serves where kinks may cost 1e-5).

Place. Hermite-Simpson collocation (Lobatto IIIA, fourth order) on nodes uniform between scatterers.
It conserves number and energy exactly. Newton's matrix is that of the trapezoidal rule: it is block
bidiagonal in x, and the few per cent by which it differs cost a few more iterations. It is
eliminated from left to right with df+ = P df- + s, as one composes scattering matrices, which is
stable for any length.

Moments. The targets F(E; mu, T_e) are taken at given moments m(x) at the nodes; given m, the field
f is solved for, and m is then found by Newton's method for m = moments of f(m), with GMRES for the
linear system. The targets are Fermi functions at every stage: at 4 K a linearised one would not be.
"""

from copy import copy
from dataclasses import dataclass, field, replace
from functools import cached_property
from math import ceil, gcd, inf, nan, pi

import numpy as np
from scipy import constants
from scipy.interpolate import CubicSpline
from scipy.sparse.linalg import LinearOperator, gmres
from scipy.special import expit

BOLTZMANN = constants.k / constants.e * 1e3  # meV/K

# Steps of the energy grid as part of the smallest kT: sums of Fermi functions are then exact to
# exp(-2 pi^2/0.9) = 3e-10. Phonons make occupations vary faster: at 300 K, 100 mV the step 0.9 kT
# is wrong by 1e-4 of the heat, 0.5 kT by 1e-7. With tables the kinks decide.
STEP_PER_KT = 0.9
STEP_PER_KT_PHONONS = 0.5
STEP_PER_KT_TABLES = 0.25
WINDOW_IN_KT = 25.0  # beyond the contacts' potentials, of the hottest lead or lattice
WINDOW_GROWTH = 1.5
LARGEST_AT_EDGE = 1e-9  # what may be missing from full below and from empty above
CELLS_PER_PATH = 4.0  # of the shortest path of the place
CELLS_PER_SEGMENT = 16

FIELD_TOLERANCE = 1e-12  # residual of f, which is of order 1
# Accepted if rounding stops the descent there: for cold channels of 100 phonon paths the matrix is
# close to singular, and the residual stays at 3e-10.
FIELD_ROUNDING = 1e-8
MOMENT_TOLERANCE = 1e-10  # of the moments, relative to bias + kT
FIELD_ITERATIONS = 80
MOMENT_ITERATIONS = 60


class NotConverged(RuntimeError):
    """The iteration did not get there, or the energy window is too small."""


@dataclass(frozen=True)
class Scatterer:
    """Point scatterer; transmission: a number or a table (energies, values), clamped beyond."""

    position: float
    transmission: object


@dataclass(frozen=True)
class Section:
    """Part of the channel with a backscattering mean free path of its own."""

    start: float
    end: float
    backscatter_path: object


@dataclass(frozen=True)
class Bath:
    """Energy loss to the lattice."""

    path: float
    randomised: bool = False


@dataclass(frozen=True)
class Carriers:
    """Thermalisation of the carriers among themselves: number and energy conserved."""

    path: float
    randomised: bool = False


@dataclass(frozen=True)
class Phonon:
    """Optical phonon; path is l_op."""

    path: float
    energy: float


@dataclass(frozen=True)
class Probe:
    """Voltage probe: takes right movers with probability `coupling`, left movers with
    `left_coupling` (default the same), and emits as much as it would take in equilibrium."""

    position: float
    coupling: float
    left_coupling: float | None = None
    temperature: float | None = None  # default the lattice temperature

    @property
    def couplings(self):
        left = self.coupling if self.left_coupling is None else self.left_coupling
        return np.array([self.coupling, left])


@dataclass(frozen=True)
class Case:
    """What is solved. Temperatures > 0, also between the contacts and the lattice unequal.

    Paths: a number (inf: none), or for the backscattering path also a table (energies, values) or a
    function of (energy, x). Numerical settings: `refinement` multiplies the number of cells;
    `energy_step` must divide every phonon energy.
    """

    length: float
    bias: float
    temperature_left: float = 300.0
    temperature_right: float | None = None  # default the left one
    lattice_temperature: float | None = None  # default the right one
    backscatter_path: object = inf
    sections: tuple = ()
    scatterers: tuple = ()
    interface_left: object = None  # transmission
    interface_right: object = None
    mechanisms: tuple = ()  # Bath, Carriers, Phonon, in any number
    probes: tuple = ()
    refinement: float = 1.0
    energy_step: float | None = None
    window: float | None = None  # energies beyond 0 and the bias; grows if it proves too small

    @property
    def temperatures(self):
        """Left contact, right contact, lattice."""
        left = self.temperature_left
        right = left if self.temperature_right is None else self.temperature_right
        lattice = right if self.lattice_temperature is None else self.lattice_temperature
        return left, right, lattice

    def of_kind(self, kind):
        return [one for one in self.mechanisms if isinstance(one, kind)]


@dataclass(frozen=True)
class Solution:
    """Fields on the nodes, shape (x, E), and totals for g M = 1 in units of e/h.

    Places with a scatterer or a probe occur twice in x, with the values on both sides.
    """

    case: Case
    x: np.ndarray
    energy: np.ndarray
    f_plus: np.ndarray
    f_minus: np.ndarray
    mu_plus: np.ndarray
    mu_minus: np.ndarray
    T_plus: np.ndarray  # carrier temperatures in K, from number and energy
    T_minus: np.ndarray
    current: float  # int j dE in meV: I = (g M e/h) current
    heat_left: float  # meV^2
    heat_right: float
    lattice: float
    probe_heat: np.ndarray
    probe_mu: np.ndarray
    residual: float
    iterations: int
    _segments: list = field(repr=False)  # first and last node between two jumps
    _density: np.ndarray = field(repr=False)

    @property
    def transmission(self):
        """current/bias; for linear response take a bias of some 0.01 kT."""
        return self.current / self.case.bias if self.case.bias else nan

    @property
    def lattice_share(self):
        power = self.current * self.case.bias
        return self.lattice / power if power else nan

    @property
    def imbalance(self):
        """What is missing in contacts + lattice + probes, as part of current * bias."""
        heats = self.heat_left + self.heat_right + self.lattice + np.sum(self.probe_heat)
        power = self.current * self.case.bias
        return (heats - power) / power if power else nan

    def lattice_density(self, x):
        """Power into the lattice per nm, meV^2/nm."""
        return self._interpolate(self._density, x)

    def at(self, name, x):
        """Any field at x (f_plus, mu_plus, T_plus, ...); at a jump the side towards the left."""
        return self._interpolate(getattr(self, name), x)

    def _interpolate(self, values, x):
        x = np.asarray(x, dtype=float)
        out = np.full(x.shape + values.shape[1:], nan)
        for first, last in reversed(self._segments):
            inside = (x >= self.x[first]) & (x <= self.x[last])
            if inside.any():
                nodes = slice(first, last + 1)
                out[inside] = CubicSpline(self.x[nodes], values[nodes])(x[inside])
        return out


def solve(case):
    """Solution of a Case."""
    _check(case)
    window = case.window or _window(case)
    for _ in range(12):
        problem = _Problem(case, window)
        f, moments, iterations = problem.solve()
        edges = max(np.max(1 - f[..., 0, 0]), np.max(f[..., -1, -1]))
        if edges < LARGEST_AT_EDGE:
            return problem.solution(f, moments, iterations)
        window *= WINDOW_GROWTH
    raise NotConverged(f"occupations at the edges of the window off by {edges:.2g}")


def refined(case, factor=2.0):
    """The same case on a grid finer in place and in energy, to show convergence."""
    step = case.energy_step or _energy_step(case)
    return replace(case, refinement=case.refinement * factor, energy_step=step / ceil(factor))


# --- set-up -----------------------------------------------------------------------------------


def _check(case):
    faults = []
    if not case.length > 0:
        faults.append(f"length {case.length}: must be > 0")
    temperatures = [*case.temperatures, *(p.temperature for p in case.probes)]
    if any(t is not None and not t > 0 for t in temperatures):
        faults.append(f"temperatures {temperatures}: must be > 0")
    for one in (*case.scatterers, *case.probes):
        if not 0 <= one.position <= case.length:
            faults.append(f"{one}: position outside the channel")
    for probe in case.probes:
        if not (np.all(probe.couplings >= 0) and np.all(probe.couplings <= 1)):
            faults.append(f"{probe}: couplings must lie between 0 and 1")
        if not np.sum(probe.couplings) > 0:
            faults.append(f"{probe}: a probe without coupling has no potential of its own")
    for one in case.mechanisms:
        if not isinstance(one, Bath | Carriers | Phonon):
            faults.append(f"{one}: not a Bath, Carriers or Phonon")
        elif not one.path > 0:
            faults.append(f"{one}: path must be > 0")
        elif isinstance(one, Phonon) and not one.energy > 0:
            faults.append(f"{one}: energy must be > 0")
    if faults:
        raise ValueError("; ".join(faults))


def _fermi(energy, mu, kT):
    return expit((mu - energy) / kT)


def _at_energy(value, energy, x=None):
    """A number, table or function of (energy, x) on the grid of energies."""
    if callable(value):
        return np.broadcast_to(value(energy, x), energy.shape)
    if np.ndim(value) == 0:
        return np.full(energy.shape, float(value))
    energies, values = value
    return np.interp(energy, energies, values)


def _common_step(energies, resolution=1e-6):
    """Largest energy that divides all of them."""
    return gcd(*(round(energy / resolution) for energy in energies)) * resolution


def _varies(case):
    """Whether a transmission or path depends on energy."""
    values = [
        case.backscatter_path,
        case.interface_left,
        case.interface_right,
        *(s.backscatter_path for s in case.sections),
        *(s.transmission for s in case.scatterers),
    ]
    return any(callable(value) or np.ndim(value) > 0 for value in values if value is not None)


def _energy_step(case):
    temperatures = [*case.temperatures, *(p.temperature for p in case.probes if p.temperature)]
    phonons = case.of_kind(Phonon)
    part = STEP_PER_KT_PHONONS if phonons else STEP_PER_KT
    if _varies(case):
        part = STEP_PER_KT_TABLES
    largest = part * BOLTZMANN * min(temperatures)
    if not phonons:
        return largest
    rung = _common_step([one.energy for one in phonons])
    return rung / ceil(rung / largest)


def _window(case):
    """How far the energies reach beyond 0 and the bias, to begin with."""
    hottest = BOLTZMANN * max(case.temperatures)
    if case.of_kind(Carriers):
        # Hot carriers reach kT = sqrt(3)/(2 pi) bias; phonons keep them far below that.
        part = 0.05 if case.of_kind(Phonon) else np.sqrt(0.75) / pi
        hottest = np.hypot(hottest, part * case.bias)
    return WINDOW_IN_KT * hottest


class _Energies:
    """The energy grid as ladders x rungs: E[l, r] = E_first + l step + r rung."""

    def __init__(self, case, window):
        self.step = case.energy_step or _energy_step(case)
        phonons = case.of_kind(Phonon)
        bottom, top = min(0.0, case.bias), max(0.0, case.bias)
        first = -ceil((window - bottom) / self.step)
        count = ceil((window + top) / self.step) - first + 1
        self.shifts = []
        self.ladders, self.rungs = count, 1
        if phonons:
            rung = _common_step([one.energy for one in phonons])
            self.ladders = round(rung / self.step)
            if abs(self.ladders * self.step - rung) > 1e-6 * rung:
                raise ValueError(f"energy step {self.step} does not divide {rung}")
            self.rungs = ceil(count / self.ladders)
            self.shifts = [round(one.energy / rung) for one in phonons]
        index = np.arange(self.ladders * self.rungs).reshape(self.rungs, self.ladders).T
        self.value = (first + index) * self.step

    def flat(self, f):
        """(..., ladders, rungs) in the order of energy."""
        return np.swapaxes(f, -1, -2).reshape(*f.shape[:-2], -1)


class _Mesh:
    """Nodes, and the links between neighbours: cells of some width, or jumps (width 0)."""

    def __init__(self, case, transmissions):
        jumps = sorted([*case.scatterers, *case.probes], key=lambda one: one.position)
        if case.interface_left is not None:
            jumps.insert(0, Scatterer(0.0, case.interface_left))
        if case.interface_right is not None:
            jumps.append(Scatterer(case.length, case.interface_right))
        for edge in sorted({x for s in case.sections for x in (s.start, s.end)}):
            if 0 < edge < case.length and all(edge != one.position for one in jumps):
                jumps.append(Scatterer(edge, 1.0))
        jumps.sort(key=lambda one: one.position)
        x, self.width, self.jumps, self.segments = [0.0], [], {}, []
        for one in [*jumps, None]:
            end = case.length if one is None else one.position
            if end > x[-1]:
                nodes = np.linspace(x[-1], end, self._cells(case, x[-1], end, transmissions) + 1)
                self.segments.append((len(x) - 1, len(x) - 1 + len(nodes) - 1))
                self.width += list(np.diff(nodes))
                x += list(nodes[1:])
            if one is not None:
                self.jumps[len(self.width)] = one
                self.width.append(0.0)
                x.append(x[-1])
        self.x = np.array(x)
        self.width = np.array(self.width)

    @staticmethod
    def _cells(case, start, end, energy):
        inverse = [0.0]
        for one in case.mechanisms:
            inverse.append(1 / one.path)
            if isinstance(one, Phonon):
                inverse[-1] *= 1 + 2 / np.expm1(one.energy / (BOLTZMANN * case.temperatures[2]))
        rate = max(inverse) * CELLS_PER_PATH
        if rate > 0:
            # Without relaxation the field is linear in x and exact on any mesh.
            middle = 0.5 * (start + end)
            rate = max(rate, 2 / np.min(_at_energy(_path_at(case, middle), energy, middle)))
        return ceil(case.refinement * max(CELLS_PER_SEGMENT, (end - start) * rate))


def _path_at(case, x):
    for one in case.sections:
        if one.start < x < one.end:
            return one.backscatter_path
    return case.backscatter_path


# --- the linear system ------------------------------------------------------------------------


class _Elimination:
    """A_i d_i + C_i d_(i+1) = b_i over the links, d+ given on the left and d- on the right.

    A and C act on (d+, d-), 2n components for each ladder.
    """

    def __init__(self, links):
        self.steps = []
        reflection = None
        for left, right in links:
            n = left.shape[-1] // 2
            if reflection is None:
                reflection = np.zeros((len(left), n, n))
            matrix = np.concatenate(
                [left[:, :, :n] @ reflection + left[:, :, n:], right[:, :, :n]], axis=2
            )
            inverse = np.linalg.inv(matrix)
            passed = -inverse @ right[:, :, n:]
            self.steps.append((inverse, left[:, :, :n].copy(), reflection, passed[:, :n]))
            reflection = passed[:, n:]
        self.last_reflection = reflection

    def solve(self, right_side, left_contact, right_contact):
        """right_side (links, ladders, 2n), contacts (ladders, n) -> (nodes, 2, ladders, n)."""
        n = left_contact.shape[-1]
        out = np.empty((len(self.steps) + 1, 2, *left_contact.shape))
        partial = [left_contact]
        backward = []
        for b, (inverse, left, _, _) in zip(right_side, self.steps, strict=True):
            y = _apply(inverse, b - _apply(left, partial[-1]))
            backward.append(y[:, :n])
            partial.append(y[:, n:])
        minus = right_contact
        out[-1, 1] = minus
        out[-1, 0] = _apply(self.last_reflection, minus) + partial[-1]
        for i in range(len(self.steps) - 1, -1, -1):
            _, _, reflection, passed = self.steps[i]
            minus = _apply(passed, minus) + backward[i]
            out[i, 1] = minus
            out[i, 0] = _apply(reflection, minus) + partial[i]
        return out


def _apply(matrix, vector):
    if matrix.shape[-1] == 1:
        return matrix[..., 0] * vector
    return (matrix @ vector[..., None])[..., 0]


# --- the equations ----------------------------------------------------------------------------


class _Problem:
    """Residual, Newton matrix and moments of one case.

    Arrays: f (nodes, 2, ladders, rungs) with + first; moments (nodes, 4): n+, n-, u+, u-.
    """

    def __init__(self, case, window):
        self.case = case
        self.grid = _Energies(case, window)
        self.energy = self.grid.value
        self.mesh = _Mesh(case, self.energy)
        self.kT_lattice = BOLTZMANN * case.temperatures[2]
        self.baths = case.of_kind(Bath)
        self.carriers = case.of_kind(Carriers)
        self.phonons = [
            (one.path, 1 / np.expm1(one.energy / self.kT_lattice), shift)
            for one, shift in zip(case.of_kind(Phonon), self.grid.shifts, strict=True)
        ]
        self.relaxers = [*self.baths, *self.carriers]
        self.cells = np.flatnonzero(self.mesh.width > 0)
        self.probes = [i for i, one in self.mesh.jumps.items() if isinstance(one, Probe)]
        self.coupled = bool(self.relaxers or self.probes)
        self.scale = abs(case.bias) + BOLTZMANN * max(case.temperatures)
        left, right, _ = (BOLTZMANN * t for t in case.temperatures)
        self.coldest = min(left, right, self.kT_lattice)
        self.emitted = (_fermi(self.energy, case.bias, left), _fermi(self.energy, 0.0, right))
        self.reference = _fermi(self.energy, 0.0, self.kT_lattice)

    @cached_property
    def backscattering(self):
        """1/lam at the nodes and in the middle of the cells, (nodes or cells, ladders, rungs)."""
        mesh, case = self.mesh, self.case
        at_nodes = np.zeros((len(mesh.x), *self.energy.shape))
        in_cells = np.zeros((len(mesh.width), *self.energy.shape))
        for first, last in mesh.segments:
            path = _path_at(case, 0.5 * (mesh.x[first] + mesh.x[last]))
            for i in range(first, last + 1):
                at_nodes[i] = 1 / _at_energy(path, self.energy, mesh.x[i])
            for i in range(first, last):
                middle = 0.5 * (mesh.x[i] + mesh.x[i + 1])
                in_cells[i] = 1 / _at_energy(path, self.energy, middle)
        return at_nodes, in_cells[self.cells]

    @cached_property
    def transmissions(self):
        return {
            i: _at_energy(one.transmission, self.energy)
            for i, one in self.mesh.jumps.items()
            if isinstance(one, Scatterer)
        }

    # Moments

    def moments(self, f):
        """n+, n-, u+, u- of a field."""
        m = self.sums(f - self.reference)
        m[..., 2:] += (pi * self.kT_lattice) ** 2 / 6
        return m

    def sums(self, f):
        """The same of a difference of fields."""
        n = np.sum(f, axis=(-2, -1))
        u = np.einsum("...lr,lr->...", f, self.energy)
        return self.grid.step * np.concatenate([n, u], axis=-1)

    def kT_carriers(self, n, u):
        return np.sqrt(6 * np.maximum(u - n**2 / 2, (0.02 * self.coldest) ** 2)) / pi

    def probe_mu(self, i, m):
        weights = self.mesh.jumps[i].couplings
        return (weights @ np.array([m[i, 0], m[i + 1, 1]])) / np.sum(weights)

    def probe_kT(self, i):
        own = self.mesh.jumps[i].temperature
        return self.kT_lattice if own is None else BOLTZMANN * own

    def _target_parameters(self, one, m):
        """mu, kT of a relaxer's targets for both directions, each (points, 2)."""
        n, u = m[:, :2], m[:, 2:]
        if one.randomised:
            n, u = (np.repeat(v.mean(axis=1, keepdims=True), 2, axis=1) for v in (n, u))
        if isinstance(one, Bath):
            return n, np.full_like(n, self.kT_lattice)
        return n, self.kT_carriers(n, u)

    def targets(self, m):
        """sum F/path over the relaxers, (points, 2, ladders, rungs)."""
        out = np.zeros((len(m), 2, *self.energy.shape))
        for one in self.relaxers:
            mu, kT = (v[:, :, None, None] for v in self._target_parameters(one, m))
            out += _fermi(self.energy, mu, kT) / one.path
        return out

    def target_slopes(self, m):
        """d targets / d moments: (points, 2, 4, ladders, rungs)."""
        out = np.zeros((len(m), 2, 4, *self.energy.shape))
        for one in self.relaxers:
            mu, kT = (v[:, :, None, None] for v in self._target_parameters(one, m))
            z = (self.energy - mu) / kT
            by_mu = expit(z) * expit(-z) / kT / one.path
            by_u = np.zeros_like(by_mu)
            if isinstance(one, Carriers):
                by_u = by_mu * z * (3 / (pi**2 * kT))
                by_mu = by_mu - by_u * mu
            for s in (0, 1):
                for t, weight in ((0, 0.5), (1, 0.5)) if one.randomised else ((s, 1.0),):
                    out[:, s, t] += weight * by_mu[:, s]
                    out[:, s, 2 + t] += weight * by_u[:, s]
        return out

    # Collisions

    def _phonon_factors(self, fm):
        """(path, N, occupation above, room above, below, room below, shift) for each phonon.

        No transition leads out of the window: there neither occupation nor room is counted.
        """
        for path, number, shift in self.phonons:
            above, room_above, below, room_below = (np.zeros_like(fm) for _ in range(4))
            above[..., :-shift] = fm[..., shift:]
            room_above[..., :-shift] = 1 - fm[..., shift:]
            below[..., shift:] = fm[..., :-shift]
            room_below[..., shift:] = 1 - fm[..., :-shift]
            yield path, number, above, room_above, below, room_below, shift

    def collisions(self, f, backscattering, targets):
        """R±: what adds to right and left movers per nm."""
        out = backscattering[:, None] * (f[:, ::-1] - f)
        rate = sum(1 / one.path for one in self.relaxers)
        if self.relaxers:
            out += targets - rate * f
        fm = f.mean(axis=1)
        for path, number, above, room_above, below, room_below, _ in self._phonon_factors(fm):
            gain = ((number + 1) * above + number * below) / path
            loss = ((number + 1) * room_below + number * room_above) / path
            out += (1 - f) * gain[:, None] - f * loss[:, None]
        return out

    def collision_slopes(self, f, backscattering):
        """dR/df at given targets, (points, ladders, 2n, 2n)."""
        points, _, ladders, n = f.shape
        out = np.zeros((points, ladders, 2, n, 2, n))
        r = np.arange(n)
        rate = sum(1 / one.path for one in self.relaxers)
        for s in (0, 1):
            out[:, :, s, r, s, r] -= backscattering + rate
            out[:, :, s, r, 1 - s, r] += backscattering
        fm = f.mean(axis=1)
        for path, number, above, room_above, below, room_below, k in self._phonon_factors(fm):
            total = (number + 1) * (above + room_below) + number * (below + room_above)
            up, down = np.arange(n - k), np.arange(k, n)
            for s in (0, 1):
                out[:, :, s, r, s, r] -= total / path
                by_above = number + 1 - f[:, s]
                by_below = number + f[:, s]
                for t in (0, 1):
                    out[:, :, s, up, t, up + k] += by_above[..., :-k] / (2 * path)
                    out[:, :, s, down, t, down - k] += by_below[..., k:] / (2 * path)
        return out.reshape(points, ladders, 2 * n, 2 * n)

    # Residual

    def middle(self, f, m):
        """R at the nodes and in the middle of the cells."""
        cells, h = self.cells, self.mesh.width[self.cells]
        at_nodes, in_cells = self.backscattering
        node = self.collisions(f, at_nodes, self.targets(m) if self.relaxers else None)
        slope = node * np.array([1.0, -1.0])[:, None, None]
        difference = slope[cells] - slope[cells + 1]
        f_mid = 0.5 * (f[cells] + f[cells + 1]) + (h / 8)[:, None, None, None] * difference
        targets = None
        if self.relaxers:
            m_mid = 0.5 * (m[cells] + m[cells + 1]) + (h / 8)[:, None] * self.sums(difference)
            targets = self.targets(m_mid)
        return node, self.collisions(f_mid, in_cells, targets)

    def residual(self, f, m):
        """Of the links (links, 2, ladders, rungs), of the left and of the right contact."""
        out = np.empty((len(self.mesh.width), *f.shape[1:]))
        cells, h = self.cells, self.mesh.width[self.cells]
        node, mid = self.middle(f, m)
        change = f[cells + 1] - f[cells]
        change[:, 1] *= -1
        integral = (h / 6)[:, None, None, None] * (node[cells] + 4 * mid + node[cells + 1])
        out[cells] = change - integral
        for i, t in self.transmissions.items():
            out[i, 0] = f[i + 1, 0] - t * f[i, 0] - (1 - t) * f[i + 1, 1]
            out[i, 1] = f[i, 1] - t * f[i + 1, 1] - (1 - t) * f[i, 0]
        for i in self.probes:
            right, left = self.mesh.jumps[i].couplings
            own = _fermi(self.energy, self.probe_mu(i, m), self.probe_kT(i))
            out[i, 0] = f[i + 1, 0] - (1 - right) * f[i, 0] - right * own
            out[i, 1] = f[i, 1] - (1 - left) * f[i + 1, 1] - left * own
        return out, f[0, 0] - self.emitted[0], f[-1, 1] - self.emitted[1]

    def links(self, f):
        """Newton matrices of the links, one after the other."""
        n = self.grid.rungs
        eye = np.eye(n)
        signs = np.kron(np.diag([1.0, -1.0]), eye)
        at_nodes = self.backscattering[0]
        slopes = None
        for i, h in enumerate(self.mesh.width):
            if h > 0:
                if slopes is None:
                    slopes = self.collision_slopes(f[i : i + 1], at_nodes[i : i + 1])[0]
                after = self.collision_slopes(f[i + 1 : i + 2], at_nodes[i + 1 : i + 2])[0]
                yield -signs - h / 2 * slopes, signs - h / 2 * after
                slopes = after
                continue
            slopes = None
            left, right = (np.zeros((self.grid.ladders, 2, n, 2, n)) for _ in range(2))
            left[:, 1, :, 1, :] = eye
            right[:, 0, :, 0, :] = eye
            if i in self.transmissions:
                t = self.transmissions[i][:, :, None] * eye
                left[:, 0, :, 0, :] = right[:, 1, :, 1, :] = -t
                left[:, 1, :, 0, :] = right[:, 0, :, 1, :] = t - eye
            else:
                by_right, by_left = self.mesh.jumps[i].couplings
                left[:, 0, :, 0, :] = (by_right - 1) * eye
                right[:, 1, :, 1, :] = (by_left - 1) * eye
            shape = (self.grid.ladders, 2 * n, 2 * n)
            yield left.reshape(shape), right.reshape(shape)

    @staticmethod
    def _linear(elimination, links, left, right):
        """Solve for a right side given like a residual."""
        side = np.swapaxes(links, 1, 2)
        return elimination.solve(side.reshape(*side.shape[:2], -1), left, right)

    # Iteration

    def solve(self):
        f = self._elastic()
        m = self.moments(f)
        if not self.coupled:
            f, iterations = self._distinct_ladders(f)
            return f, self.moments(f), iterations
        iterations, elimination = 0, None
        scales = np.array([self.scale] * 2 + [self.scale**2] * 2)
        for _ in range(MOMENT_ITERATIONS):
            f, elimination, count = self._field(f, m, elimination)
            iterations += count
            gap = (self.moments(f) - m) / scales
            if np.max(np.abs(gap)) < MOMENT_TOLERANCE:
                return f, m, iterations
            change = self._moment_step(elimination, m, gap, scales)
            m = self._safe(m, change * scales)
        raise NotConverged(f"moments still off by {np.max(np.abs(gap)):.2g} of bias + kT")

    def _elastic(self):
        """Field without relaxation, and probes that read the mean: a place to start from."""
        start = copy(self)
        start.phonons, start.relaxers = [], []
        f = np.broadcast_to(self.reference, (len(self.mesh.x), 2, *self.energy.shape)).copy()
        m = np.zeros((len(self.mesh.x), 4))
        m[:, :2] = self.case.bias * (1 - self.mesh.x / self.case.length)[:, None]
        return start._field(f, m, None)[0]

    def _field(self, f, m, elimination):
        """f at given moments; the elimination last used; number of iterations.

        The matrix depends on f through the phonons alone, and little once f settles: it is made
        anew only while f is far off or the steps gain less than a factor 4.
        """
        last = inf
        for count in range(FIELD_ITERATIONS):
            residual = self.residual(f, m)
            size = max(np.max(np.abs(part)) for part in residual)
            done = size < FIELD_TOLERANCE or last < size < FIELD_ROUNDING
            if done and elimination is not None:
                return f, elimination, count
            slow = size > 1e-3 if count == 0 else size > 0.25 * last
            if elimination is None or (self.phonons and slow):
                elimination = _Elimination(self.links(f))
            last = size
            f = f - self._linear(elimination, *residual)
            if self.phonons:
                f = np.clip(f, 0.0, 1.0)
        raise NotConverged(f"residual of the occupations still {size:.2g}")

    def _distinct_ladders(self, f):
        """Without moments ladders are apart from each other: solve equal ones once."""
        columns = [*self.emitted, *self.transmissions.values(), *self.backscattering[0]]
        table = np.concatenate([np.round(c, 13) for c in columns], axis=1)
        _, kept, back = np.unique(table, axis=0, return_index=True, return_inverse=True)
        part = copy(self)
        part.grid = _Part(self.grid, len(kept))
        part.energy = self.energy[kept]
        part.emitted = tuple(one[kept] for one in self.emitted)
        part.transmissions = {i: t[kept] for i, t in self.transmissions.items()}
        part.backscattering = tuple(one[:, kept] for one in self.backscattering)
        solved, _, count = part._field(f[:, :, kept], None, None)
        return solved[:, :, np.ravel(back)], count

    def _moment_step(self, elimination, m, gap, scales):
        """Newton's change of the moments, in units of the scales."""
        slopes = self.target_slopes(m) if self.relaxers else None
        half = 0.5 * self.mesh.width[self.cells]
        nothing = np.zeros(self.energy.shape)
        own = {}
        for i in self.probes:
            z = (self.energy - self.probe_mu(i, m)) / self.probe_kT(i)
            own[i] = expit(z) * expit(-z) / self.probe_kT(i)

        def response(a):
            change = a.reshape(m.shape) * scales
            links = np.zeros((len(self.mesh.width), 2, *self.energy.shape))
            if self.relaxers:
                source = np.einsum("kscLr,kc->ksLr", slopes, change)
                both = source[self.cells] + source[self.cells + 1]
                links[self.cells] = half[:, None, None, None] * both
            for i, slope in own.items():
                shift = slope * self.probe_mu(i, change)
                for s, coupling in enumerate(self.mesh.jumps[i].couplings):
                    links[i, s] = coupling * shift
            answer = self._linear(elimination, links, nothing, nothing)
            return a - (self.sums(answer) / scales).ravel()

        operator = LinearOperator((gap.size, gap.size), matvec=response)
        change, _ = gmres(operator, gap.ravel(), rtol=1e-5, restart=200, maxiter=2)
        return change.reshape(m.shape)

    def _safe(self, m, change):
        """As much of the change as leaves every carrier temperature real."""
        if not self.carriers:
            return m + change
        for _ in range(20):
            new = m + change
            n, u = new[:, :2], new[:, 2:]
            wide = np.concatenate([u - n**2 / 2, u.mean(1, keepdims=True)], axis=1)
            wide[:, 2] -= n.mean(axis=1) ** 2 / 2
            if np.min(wide) > (0.1 * pi * self.coldest) ** 2 / 6:
                return new
            change = change / 2
        return new

    # Results

    def solution(self, f, m, iterations):
        step, energy, mesh, bias = self.grid.step, self.energy, self.mesh, self.case.bias
        residual = max(np.max(np.abs(part)) for part in self.residual(f, self.moments(f)))
        node, mid = self.middle(f, m)
        density, density_mid = (-step * np.einsum("kslr,lr->k", r, energy) for r in (node, mid))
        h, cells = mesh.width[self.cells], self.cells
        lattice = np.sum(h / 6 * (density[cells] + 4 * density_mid + density[cells + 1]))
        probe_mu = np.array([self.probe_mu(i, m) for i in self.probes])
        probe_heat = []
        for i, mu in zip(self.probes, probe_mu, strict=True):
            right, left = mesh.jumps[i].couplings
            own = _fermi(energy, mu, self.probe_kT(i))
            taken = right * (f[i, 0] - own) + left * (f[i + 1, 1] - own)
            probe_heat.append(step * np.sum(energy * taken))
        j = f[[0, -1], 0] - f[[0, -1], 1]
        T = self.kT_carriers(m[:, :2], m[:, 2:]) / BOLTZMANN
        flat = self.grid.flat(f)
        return Solution(
            case=self.case,
            x=mesh.x,
            energy=self.grid.flat(energy),
            f_plus=flat[:, 0],
            f_minus=flat[:, 1],
            mu_plus=m[:, 0],
            mu_minus=m[:, 1],
            T_plus=T[:, 0],
            T_minus=T[:, 1],
            current=float(step * np.sum(j[0])),
            heat_left=float(step * np.sum((bias - energy) * j[0])),
            heat_right=float(step * np.sum(energy * j[1])),
            lattice=float(lattice),
            probe_heat=np.array(probe_heat),
            probe_mu=probe_mu,
            residual=float(residual),
            iterations=iterations,
            _segments=mesh.segments,
            _density=density,
        )


@dataclass(frozen=True)
class _Part:
    """Stands for the energy grid while only some ladders are solved."""

    whole: _Energies
    ladders: int

    @property
    def rungs(self):
        return self.whole.rungs
