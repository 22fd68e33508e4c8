"""Deterministic solver of the kinetic equation with directions, d = 1, 2, 3, and no walls.

Written from the equations alone; it shares no code with the package. Lengths in nm, energies in meV
counted from mu_R = 0, temperatures in K. f±(x, E, c) is the occupation of right- and left-moving
states whose direction has the cosine c = |cos| to the channel; <> is the mean over the solid angle
of a half space (d = 3: int dc, d = 2: (2/pi) int dtheta, d = 1: c = 1), fm = (<f+> + <f->)/2:

    +- c df±/dx = (fm - f±)/l                         isotropising elastic collisions
                + (K(T_b) - f±)/path                  bath, direction kept
                + (F(E; mu, T_b) - f±)/path           bath, direction randomised
                + (K(T_e±) - f±)/path                 carriers, kept
                + (F(E; mu, T_e) - f±)/path           carriers, randomised
                + (1 - f±) (1/l_op) [(N+1) fm(E+w) + N fm(E-w)]
                - f± (1/l_op) [(N+1)(1 - fm(E-w)) + N (1 - fm(E+w))]      optical phonons

with n = int (f - theta(-E)) dE, u = int E (f - theta(-E)) dE, mu = n, (pi k T_e)^2/6 = u - mu^2/2;
mu±, T_e± of the half space, mu, T_e of the mean of both. All paths are along the flight.

`kept`. mu± and T_e± are the half space's, but an event must leave the number in every direction as
it is, and with carriers the energy. Two ways to distribute F(E; mu±, T) over the directions, which
are the same in d = 1, and for the mean over a half space:

- "linear": K = F + (n± - <n±>) dF/dn, for carriers + (u± - <u±>) dF/du: what F(E; n±, ...) with
  the direction's own number and energy is to first order about the half space's. It does not ask
  from which contact energies are counted.
- "scaled": K = F_r + n± B(E; mu±) + F(E; mu±, T) - F(E; mu±, T_b) with F_r = F(E; 0, T_b),
  B(E; m) = (F(E; m, T_b) - F_r)/m, n± from f± - F_r. This is what particles do that stand for the
  deviation from F_r, and take a new energy uniform in (mu_R, mu±) in an event. It depends on the
  choice of F_r: a channel and its mirror image with the bias reversed differ.

Planes pass T(E), or as thin tunnel barriers c^2/(c^2 + gamma), gamma = (1-T)/T, in the same
direction; they reflect like mirrors, or diffusely in proportion to (1-T) c. Voltage probes take a
carrier with a probability that does not depend on its direction and emit by the cosine law: f
behind = (1 - a) f before + a F(E; mu_p, T_p), with mu_p such that no net current flows.

Energy: an even grid whose step divides every phonon energy, see tests/reference_kinetic.py.

Directions: Gauss points of s, where c = s^2 (d = 3) or the angle to the plane is (pi/2) s^2
(d = 2), because f is not smooth at c = 0.

Place: f is linear in a cell, without continuity between cells (Reed & Hill 1973: discontinuous
Galerkin), which conserves number and energy exactly and errs in the third order of the cell's
width. Integrals over a cell by its two Gauss points, where f is kept. Cells are narrow at planes.

Iteration: given the means fm, n and u of each half space, the reading of each probe and what
comes to each plane from the right, one sweep to the right and one to the left give f, and with it
all of these anew. Anderson's mixing (J. ACM 12 (1965) 547) of the last sweeps finds where they
stay.
"""

from dataclasses import dataclass, field, replace
from functools import cached_property
from itertools import pairwise
from math import ceil, gcd, inf, nan, pi

import numpy as np
from numpy.polynomial import legendre
from scipy import constants
from scipy.interpolate import CubicSpline
from scipy.special import expit

BOLTZMANN = constants.k / constants.e * 1e3  # meV/K

STEP_PER_KT = 0.9  # steps of the energy grid, as in tests/reference_kinetic.py
STEP_PER_KT_PHONONS = 0.5
STEP_PER_KT_TABLES = 0.25
WINDOW_IN_KT = 20.0  # beyond the contacts' potentials
WINDOW_GROWTH = 1.5
LARGEST_AT_EDGE = 1e-8  # what may be missing from full below and from empty above
CELLS_PER_PATH = 2.0  # of the shortest path
CELLS_PER_SEGMENT = 12
DIRECTIONS = 8
GRADING = 2
TOLERANCE = 1e-8  # change of an occupation, or of a moment in units of bias + kT
SWEEPS, DEPTH = 1500, 25  # most of them, and how many are mixed


class NotConverged(RuntimeError):
    """The iteration did not get there."""


@dataclass(frozen=True)
class Plane:
    """Plane across the channel, also at 0 and L; transmission: a number or a table (energies,
    values); of a tunnel barrier the one at normal incidence."""

    position: float
    transmission: object
    tunnel: bool = False
    diffuse: bool = False


@dataclass(frozen=True)
class Bath:
    """Energy loss to the lattice."""

    path: float
    randomised: bool = False


@dataclass(frozen=True)
class Carriers:
    """Thermalisation of the carriers among themselves."""

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
    """What is solved; temperatures > 0. mean_free_path: between isotropising collisions."""

    length: float
    bias: float
    dimension: int
    temperature_left: float = 300.0
    temperature_right: float | None = None  # default the left one
    lattice_temperature: float | None = None  # default the right one
    mean_free_path: float = inf
    planes: tuple = ()
    mechanisms: tuple = ()  # Bath, Carriers, Phonon, in any number
    probes: tuple = ()
    directions: int = DIRECTIONS  # of each half space
    refinement: float = 1.0  # of the cells
    energy_step: float | None = None  # must divide every phonon energy
    window: float | None = None  # energies beyond 0 and the bias
    kept: str = "linear"  # or "scaled"

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
    """Fields at the Gauss points of the cells, shape (x, E), and totals for g M = 1 in units of
    e/h, with fluxes in parts of what a contact emits. f±: means over half spaces."""

    case: Case
    x: np.ndarray
    energy: np.ndarray
    f_plus: np.ndarray
    f_minus: np.ndarray
    number: np.ndarray  # (x, 2) n about theta(-E), which is mu±
    square: np.ndarray  # (x, 2) u about theta(-E), meV^2
    current: float  # int j dE in meV: I = (g M e/h) current
    heat_left: float  # meV^2
    heat_right: float
    lattice: float
    probe_heat: np.ndarray
    probe_mu: np.ndarray
    jumps: np.ndarray  # (planes and probes, 2) mu = (mu+ + mu-)/2 before and behind
    residual: float
    sweeps: int
    _segments: list = field(repr=False)  # edges of cells and slice of x, between planes
    _density: np.ndarray = field(repr=False)

    @property
    def transmission(self):
        """current/bias; for linear response take a bias of some 0.01 kT."""
        return self.current / self.case.bias if self.case.bias else nan

    @property
    def power(self):
        return self.current * self.case.bias

    @property
    def shares(self):
        """Parts of the power: left contact, right contact, lattice, probes together."""
        heats = self.heat_left, self.heat_right, self.lattice, float(np.sum(self.probe_heat))
        return np.array(heats) / self.power

    @property
    def imbalance(self):
        """What is missing in contacts + lattice + probes, as part of the power."""
        return float(np.sum(self.shares)) - 1.0

    def mean(self, start, end):
        """mu and T_e of right movers, left movers and both, (3,) each, from the mean number and
        energy between two places of one segment, as a run's cells give them."""
        n, u = self._between(self.number, start, end), self._between(self.square, start, end)
        n, u = (np.append(v, v.mean()) for v in (n, u))
        return n, _kelvin(n, u)

    def occupations(self, start, end):
        """Mean of f+ and f- between two places of one segment, (2, E)."""
        return np.array([self._between(f, start, end) for f in (self.f_plus, self.f_minus)])

    def lattice_between(self, start, end):
        """Mean power into the lattice per nm between two places of one segment, meV^2/nm."""
        return float(self._between(self._density, start, end))

    def _between(self, values, start, end):
        """Mean of a field between two places, from a spline through its integral up to each edge:
        means over cells are more accurate than values in them."""
        for edges, part in self._segments:
            if edges[0] <= start < end <= edges[-1]:
                cells = 0.5 * (values[part][::2] + values[part][1::2])
                width = np.diff(edges).reshape(-1, *[1] * (cells.ndim - 1))
                total = np.cumsum(np.insert(cells * width, 0, 0.0, axis=0), axis=0)
                first, last = CubicSpline(edges, total)([start, end])
                return (last - first) / (end - start)
        raise ValueError(f"{start} to {end}: not inside one segment")


def _kelvin(n, u):
    return np.sqrt(6 * np.maximum(u - n**2 / 2, 0.0)) / pi / BOLTZMANN


def solve(case):
    """Solution of a Case."""
    _check(case)
    case = replace(case, energy_step=_energy_step(case), window=case.window or _window(case))
    for _ in range(6):
        problem = _Problem(case)
        state, residual, sweeps = _settle(problem.sweep, problem.start(), problem.scales)
        mean = problem.split(state)["mean"]
        if max(np.max(1 - mean[:, 0]), np.max(mean[:, -1])) < LARGEST_AT_EDGE:
            return problem.solution(state, residual, sweeps)
        case = replace(case, window=WINDOW_GROWTH * case.window)
    raise NotConverged(f"a window of {case.window} meV is too small")


def _check(case):
    faults = []
    if case.dimension not in (1, 2, 3) or not case.length > 0:
        faults.append(f"dimension {case.dimension}, length {case.length}")
    if case.kept not in ("linear", "scaled"):
        faults.append(f"kept {case.kept}: linear or scaled")
    if not min(case.temperatures) > 0:
        faults.append(f"temperatures {case.temperatures}: must be > 0")
    for one in (*case.planes, *case.probes):
        if not 0 <= one.position <= case.length:
            faults.append(f"{one}: outside the channel")
    for one in case.mechanisms:
        if not isinstance(one, Bath | Carriers | Phonon) or not one.path > 0:
            faults.append(f"{one}: not a mechanism with a path > 0")
    if faults:
        raise ValueError("; ".join(faults))


def _settle(sweep, state, scales):
    """Where a sweep changes nothing, by Anderson's mixing; state, last change, sweeps."""
    places, changes = [], []
    for count in range(1, SWEEPS + 1):
        new = sweep(state)
        change = (new - state) / scales
        size = np.max(np.abs(change))
        if size < TOLERANCE:
            return new, size, count
        if not np.isfinite(size):
            break
        places, changes = [*places, state][-DEPTH:], [*changes, change][-DEPTH:]
        state = new
        if len(places) > 1:
            steps, gains = np.diff(places, axis=0), np.diff(changes, axis=0)
            weights = np.linalg.lstsq(gains.T, change, rcond=1e-11)[0]
            state = new - (steps + gains * scales).T @ weights
    raise NotConverged(f"occupations still change by {size:.2g}")


# --- set-up -----------------------------------------------------------------------------------


def _fermi(energy, mu, kT):
    return expit((mu - energy) / kT)


def directions(dimension, count):
    """Cosines, and weights that average over the solid angle of a half space."""
    if dimension == 1:
        return np.ones(1), np.ones(1)
    node, weight = legendre.leggauss(count)
    s = 0.5 * (1 + node)
    weight = 0.5 * weight * GRADING * s ** (GRADING - 1)
    angle = s**GRADING
    return (angle if dimension == 3 else np.sin(0.5 * pi * angle)), weight


def _kelvins(case):
    return [*case.temperatures, *(p.temperature for p in case.probes if p.temperature)]


def _energy_step(case):
    """The case's own, or one that divides every phonon energy."""
    if case.energy_step is not None:
        return case.energy_step
    phonons = case.of_kind(Phonon)
    part = STEP_PER_KT_PHONONS if phonons else STEP_PER_KT
    if any(np.ndim(p.transmission) for p in case.planes):
        part = STEP_PER_KT_TABLES
    step = part * BOLTZMANN * min(_kelvins(case))
    if phonons:
        whole = gcd(*(round(one.energy * 1e6) for one in phonons)) * 1e-6
        step = whole / ceil(whole / step)
    return step


def _window(case):
    """How far energies reach beyond 0 and the bias, to begin with."""
    hottest = BOLTZMANN * max(_kelvins(case))
    if case.of_kind(Carriers):  # hot carriers reach kT = sqrt(3)/(2 pi) bias
        hottest = np.hypot(hottest, np.sqrt(0.75) / pi * case.bias)
    return WINDOW_IN_KT * hottest


def _energies(case):
    """The energy grid and how many of its steps each phonon takes."""
    step = case.energy_step
    shifts = [round(one.energy / step) for one in case.of_kind(Phonon)]
    for one, shift in zip(case.of_kind(Phonon), shifts, strict=True):
        if abs(shift * step - one.energy) > 1e-6 * one.energy:
            raise ValueError(f"energy step {step} does not divide {one.energy}")
    first = -ceil((case.window - min(0.0, case.bias)) / step)
    last = ceil((case.window + max(0.0, case.bias)) / step)
    return np.arange(first, last + 1) * step, shifts


def _cells(case, start, end):
    """Edges of the cells of a segment, narrow at its ends."""
    rate = 1 / case.mean_free_path
    for one in case.mechanisms:
        often = 1.0
        if isinstance(one, Phonon):
            often += 2 / np.expm1(one.energy / (BOLTZMANN * case.temperatures[2]))
        rate += often / one.path
    wanted = case.refinement * max(CELLS_PER_SEGMENT, (end - start) * rate * CELLS_PER_PATH)
    edges = start + (end - start) * (1 - np.cos(np.linspace(0, pi, ceil(wanted) + 1))) / 2
    edges[-1] = end
    return edges


# At an end of a cell: the function that is 1 at the Gauss point nearby and 0 at the other, and the
# other one.
_NEAR, _FAR = (np.sqrt(3) + 1) / 2, (1 - np.sqrt(3)) / 2


class _Problem:
    """One case: sweeps, and what they tell. Fields (side, x, ...) with right movers first; x counts
    Gauss points, two a cell."""

    def __init__(self, case):
        self.case = case
        self.energy, shifts = _energies(case)
        self.step = case.energy_step
        self.cosine, self.weight = directions(case.dimension, case.directions)
        self.flux = self.weight * self.cosine / (self.weight @ self.cosine)
        self.k_d = 1 / (self.weight @ self.cosine)
        left, right, lattice = (BOLTZMANN * t for t in case.temperatures)
        self.kT = lattice
        self.emitted = _fermi(self.energy, case.bias, left), _fermi(self.energy, 0.0, right)
        self.reference = _fermi(self.energy, 0.0, lattice)
        self.jumps = sorted([*case.planes, *case.probes], key=lambda one: one.position)
        self._make_cells()
        self.phonons = [
            (1 / one.path, 1 / np.expm1(one.energy / lattice), shift)
            for one, shift in zip(case.of_kind(Phonon), shifts, strict=True)
        ]
        relaxers = [*case.of_kind(Bath), *case.of_kind(Carriers)]
        self.random = [one for one in relaxers if one.randomised]
        self.kept = [one for one in relaxers if not one.randomised]
        self.rate = 1 / case.mean_free_path + sum(1 / one.path for one in relaxers)
        self.scale = abs(case.bias) + BOLTZMANN * max(case.temperatures)
        e, k, x = self.energy.size, self.cosine.size, self.x.size
        self.shapes = {
            "mean": (x, e),
            "number": (2, x),
            "square": (2, x),
            "probe": (len(self.probes),),
            "back": (len(self.planes), e, k),
        }

    def _make_cells(self):
        edges, places, self.order = [0.0], {one.position for one in self.jumps}, []
        for place in sorted({*places, self.case.length} - {0.0}):
            edges += list(_cells(self.case, edges[-1], place)[1:])
        edges = np.array(edges)
        self.width = np.diff(edges)
        part = 0.5 / np.sqrt(3)
        middle = 0.5 * (edges[1:] + edges[:-1])
        self.x = (middle[:, None] + self.width[:, None] * np.array([-part, part])).ravel()
        # Cells and jumps from left to right.
        at = np.searchsorted(edges, [one.position for one in self.jumps])
        for cell in range(self.width.size + 1):
            self.order += [self.jumps[j] for j in np.flatnonzero(at == cell)]
            if cell < self.width.size:
                self.order.append(cell)
        cuts = sorted({0, *at, self.width.size})
        self.segments = [(edges[a : b + 1], slice(2 * a, 2 * b)) for a, b in pairwise(cuts)]
        self.planes = [one for one in self.jumps if isinstance(one, Plane)]
        self.probes = [one for one in self.jumps if isinstance(one, Probe)]

    @cached_property
    def passing(self):
        """Transmission of each plane, (E, c)."""
        result = {}
        for one in self.planes:
            t = one.transmission
            if np.ndim(t):
                t = np.interp(self.energy, *t)
            t = np.broadcast_to(t, self.energy.shape)[:, None] * np.ones(self.cosine.size)
            if one.tunnel:
                t = t * self.cosine**2 / (t * self.cosine**2 + 1 - t)
            result[one] = t
        return result

    # State: one vector

    def split(self, state):
        parts, at = {}, 0
        for name, shape in self.shapes.items():
            size = int(np.prod(shape))
            parts[name] = state[at : at + size].reshape(shape)
            at += size
        return parts

    @cached_property
    def scales(self):
        unit = {"mean": 1.0, "number": self.scale, "square": self.scale**2, "probe": self.scale}
        return np.concatenate(
            [np.full(int(np.prod(s)), unit.get(name, 1.0)) for name, s in self.shapes.items()]
        )

    def start(self):
        """Between the contacts, linear."""
        part = (1 - self.x / self.case.length)[:, None]
        mean = part * self.emitted[0] + (1 - part) * self.emitted[1]
        n, u = self.moments(mean - self.reference)
        parts = {
            "mean": mean,
            "number": np.broadcast_to(n, self.shapes["number"]),
            "square": np.broadcast_to(u, self.shapes["square"]),
            "probe": [self.case.bias * (1 - p.position / self.case.length) for p in self.probes],
            "back": np.broadcast_to(self.emitted[1][:, None], self.shapes["back"]),
        }
        return np.concatenate([np.ravel(parts[name]) for name in self.shapes]).astype(float)

    def moments(self, deviation):
        """n and u about the step at 0 of deviations (..., E) from the reference."""
        n = self.step * np.sum(deviation, axis=-1)
        u = self.step * deviation @ self.energy + (pi * self.kT) ** 2 / 6
        return n, u

    # What the sweeps meet

    def heated(self, n, u):
        """k T_e."""
        return np.sqrt(6 * np.maximum(u - n**2 / 2, (0.02 * self.kT) ** 2)) / pi

    def box(self, mu):
        """B(E; mu) for mu (...), (..., E)."""
        mu = mu[..., None]
        small = np.abs(mu) < 1e-5 * self.kT
        safe = np.where(small, self.kT, mu)
        difference = (_fermi(self.energy, safe, self.kT) - self.reference) / safe
        slope = self.reference * (1 - self.reference) / self.kT
        return np.where(small, slope, difference)

    def phonon_rates(self, mean):
        """Into every state that is empty and out of it, (x, E)."""
        into, out = np.zeros_like(mean), np.zeros_like(mean)
        for rate, number, shift in self.phonons:
            above, below = np.zeros_like(mean), np.ones_like(mean)
            above[:, :-shift] = mean[:, shift:]
            below[:, shift:] = mean[:, :-shift]
            into += rate * ((number + 1) * above + number * below)
            out += rate * ((number + 1) * (1 - below) + number * (1 - above))
        return into, out

    def targets(self, parts):
        """Rate times target: of all directions of a half space alike, (2, x, E); and what comes on
        top per number and per energy in the own direction, (q, 2, x, E) with q = 0, 1 or 2."""
        mean = parts["mean"] / self.case.mean_free_path
        given = np.broadcast_to(mean, (2, *mean.shape)).copy()
        n, u = parts["number"], parts["square"]
        for one in self.random:
            mu, kT = n.mean(axis=0)[:, None], self.kT
            if isinstance(one, Carriers):
                kT = self.heated(n.mean(axis=0), u.mean(axis=0))[:, None]
            given += _fermi(self.energy, mu, kT) / one.path
        hot = any(isinstance(one, Carriers) for one in self.kept)
        moments = 0 if not self.kept else 2 if hot and self.case.kept == "linear" else 1
        own = np.zeros((moments, *given.shape))
        for one in self.kept:
            hot = isinstance(one, Carriers)
            mu, kT = n[..., None], self.heated(n, u)[..., None] if hot else self.kT
            if self.case.kept == "scaled":
                warm = _fermi(self.energy, mu, kT) - _fermi(self.energy, mu, self.kT)
                given += (self.reference + warm) / one.path
                own[0] += self.box(n) / one.path
                continue
            z = (self.energy - mu) / kT
            by_mu = expit(z) * expit(-z) / kT
            by_u = by_mu * z * 3 / (pi**2 * kT) if hot else 0.0  # at given n
            by_n = by_mu - by_u * mu
            given += (expit(-z) - by_n * mu - by_u * u[..., None]) / one.path
            own[0] += by_n / one.path
            if hot:
                own[1] += by_u / one.path
        return given, own

    def sweep(self, state):
        """The state that follows from the occupations in the state's fields."""
        return self.collect(self.occupations(self.split(state)))

    def occupations(self, parts):
        """f (2, x, E, c); f before and behind each jump (jumps, 4, E, c): right movers before,
        left movers before, right movers behind, left movers behind; what leaves the channel to
        the right and to the left."""
        into, out = self.phonon_rates(parts["mean"])
        given, own = self.targets(parts)
        given += into
        loss = self.rate + into + out
        e, k = self.energy.size, self.cosine.size
        f = np.empty((2, self.x.size, e, k))
        at_jumps = np.empty((len(self.jumps), 4, e, k))
        left = []
        for side in (0, 1):
            now = np.repeat(self.emitted[side][:, None], k, axis=1)
            for one in self.order if side == 0 else reversed(self.order):
                if isinstance(one, Plane | Probe):
                    now = self._jump(side, one, now, parts, at_jumps)
                    continue
                pair = [2 * one, 2 * one + 1] if side == 0 else [2 * one + 1, 2 * one]
                rates = loss[pair], given[side, pair], own[:, side, pair]
                f[side, pair], now = self._through(self.width[one], *rates, now)
            left.append(now)
        return f, at_jumps, left

    def _through(self, width, loss, given, own, now):
        """Across a cell: f at its two Gauss points, (2, E, c), and at its far end.

        The equation times each of the linear functions that are 1 at one Gauss point and 0 at the
        other, integrated, with the occupation that comes from the cell before.
        """
        a = 2 * self.cosine / width
        first, second = a + loss[0][:, None], a + loss[1][:, None]
        up, down = 0.5 * (np.sqrt(3) - 1) * a, 0.5 * (np.sqrt(3) + 1) * a
        inverse = np.array([[second, -up + 0 * first], [down + 0 * first, first]])
        inverse /= first * second + up * down
        source = given[..., None] + a * np.multiply.outer([_NEAR, _FAR], now)
        f = np.einsum("ijec,jec->iec", inverse, source)
        if len(own):
            f += np.einsum("ijec,qje,qjc->iec", inverse, own, self._own_moments(inverse, own, f))
        return f, _FAR * f[0] + _NEAR * f[1]

    def _own_moments(self, inverse, own, f):
        """Number and energy in each direction, (q, 2, c), given f without what they bring: they
        bring themselves forth. To find them by repeated sweeps would take as many as there are
        paths along the channel, at small cosines thousands."""
        q = len(own)
        weight = self.step * np.stack([np.ones_like(self.energy), self.energy])[:q]
        known = np.einsum("pe,iec->cpi", weight, f - self.reference[:, None])
        if q == 2:
            known[:, 1] += (pi * self.kT) ** 2 / 6
        gain = np.einsum("pe,ijec,qje->cpiqj", weight, inverse, own, optimize=True)
        matrix = np.eye(2 * q) - gain.reshape(-1, 2 * q, 2 * q)
        found = np.linalg.solve(matrix, known.reshape(-1, 2 * q, 1))
        return found.reshape(-1, q, 2).transpose(1, 2, 0)

    def _jump(self, side, one, now, parts, at_jumps):
        """f behind a jump, given what comes; `at_jumps` keeps what is on both sides."""
        j = self.jumps.index(one)
        at_jumps[j, 0 if side == 0 else 3] = now
        if isinstance(one, Plane):
            t = self.passing[one]
            other = parts["back"][self.planes.index(one)] if side == 0 else at_jumps[j, 0]
            if one.diffuse:
                back = self.flux * (1 - t)
                total = np.maximum(back.sum(axis=1), 1e-300)
                other = (np.einsum("ek,ek->e", back, other) / total)[:, None]
            later = t * now + (1 - t) * other
        else:
            taken = one.couplings[side]
            later = (1 - taken) * now + taken * self.emission(one, parts)[:, None]
        at_jumps[j, 2 if side == 0 else 1] = later
        return later

    def emission(self, probe, parts):
        kT = self.kT if probe.temperature is None else BOLTZMANN * probe.temperature
        return _fermi(self.energy, parts["probe"][self.probes.index(probe)], kT)

    def collect(self, found):
        """The state that occupations tell."""
        f, at_jumps, _ = found
        half = f @ self.weight
        number, square = self.moments(half - self.reference)
        readings = [self.arrivals(at_jumps[self.jumps.index(p)], p) for p in self.probes]
        back = [at_jumps[self.jumps.index(p), 3] for p in self.planes]
        parts = {
            "mean": half.mean(axis=0),
            "number": number,
            "square": square,
            "probe": np.array(readings),
            "back": np.array(back),
        }
        return np.concatenate([np.ravel(parts[name]) for name in self.shapes])

    def arrivals(self, beside, probe):
        """The probe's potential: the mean of what comes from both sides, by flux."""
        come = np.stack([beside[0], beside[3]]) @ self.flux - self.reference
        return probe.couplings @ self.moments(come)[0] / probe.couplings.sum()

    # Results

    def solution(self, state, residual, sweeps):
        parts = self.split(state)
        f, at_jumps, (out_right, out_left) = self.occupations(parts)
        half = f @ self.weight
        number, square = self.moments(half - self.reference)
        j_left = self.emitted[0] - out_left @ self.flux
        j_right = out_right @ self.flux - self.emitted[1]
        density = self.k_d * self.lattice_density(parts, half)
        probe_heat = []
        for one in self.probes:
            beside = at_jumps[self.jumps.index(one)]
            own = self.emission(one, parts)
            come = np.stack([beside[0], beside[3]]) @ self.flux - own
            probe_heat.append(self.step * one.couplings @ come @ self.energy)
        beside = at_jumps @ self.weight - self.reference
        mu = self.moments(beside)[0].reshape(-1, 2, 2).mean(axis=-1)
        return Solution(
            case=self.case,
            x=self.x,
            energy=self.energy,
            f_plus=half[0],
            f_minus=half[1],
            number=number.T,
            square=square.T,
            current=float(self.step * np.sum(j_left)),
            heat_left=float(self.step * (self.case.bias - self.energy) @ j_left),
            heat_right=float(self.step * self.energy @ j_right),
            lattice=float(density @ np.repeat(0.5 * self.width, 2)),
            probe_heat=np.array(probe_heat),
            probe_mu=np.array(parts["probe"]),
            jumps=mu,
            residual=residual,
            sweeps=sweeps,
            _segments=self.segments,
            _density=density,
        )

    def lattice_density(self, parts, half):
        """Energy per path length that baths and phonons take, (x,)."""
        n, u = self.moments(half - self.reference)
        floor = (pi * self.kT) ** 2 / 6
        total = np.zeros(self.x.size)
        for one in self.case.of_kind(Bath):
            mean = n.mean(axis=0)
            kept = 2 * mean**2 if one.randomised else (n**2).sum(axis=0)
            total += (u.sum(axis=0) - 2 * floor - kept / 2) / one.path
        mean = parts["mean"]
        for rate, number, shift in self.phonons:
            low, high = mean[:, :-shift], mean[:, shift:]
            down = (number + 1) * high * (1 - low) - number * low * (1 - high)
            total += 2 * rate * shift * self.step**2 * down.sum(axis=1)
        return total


def refined(case, factor=2.0):
    """The same case with more cells, directions and energies, to show convergence."""
    return replace(
        case,
        directions=ceil(case.directions * factor),
        refinement=case.refinement * factor,
        energy_step=_energy_step(case) / ceil(factor),
    )
