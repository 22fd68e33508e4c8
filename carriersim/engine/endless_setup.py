"""The endless channel that repeats a channel: its stretches and planes, and rings to walk on.

The contacts' barriers and the probes are left out. Random planes are drawn anew in every period, so
each batch walks on a ring of its own of some periods; what is given stays in its place.
"""

from dataclasses import dataclass
from functools import cached_property
from itertools import pairwise
from typing import NamedTuple

import numpy as np

from carriersim.constants import BOLTZMANN_MEV_PER_K
from carriersim.engine.endless_coordinate import Coordinate
from carriersim.engine.endless_window import window_of
from carriersim.engine.mechanisms import RANDOM_BATH, RANDOM_CARRIERS
from carriersim.engine.problem import at_energy
from carriersim.engine.space import BACKSCATTER
from carriersim.quantities import EnergyTable
from carriersim.schema import TransmissionRange

FEWEST_PLANES = 200  # random ones in a ring
MOST_NODES = 2000  # in a ring of several periods
MOST_PERIODS = 1e15
LEAST_RATE = 1e-6  # of collisions per width, for the coordinate along one pair of faces
ENERGIES = 4096  # where anything depends on energy

NOTHING = "nothing scatters carriers in the channel"
LOGARITHM = (
    "without scattering in the bulk carriers fly along the one pair of faces that scatters: the "
    "backscattering path grows with the logarithm of the channel's length"
)
SOME_ENERGIES = "at some energies nothing scatters carriers in the channel"
PHONONS = "with optical phonons the resistance depends on the bias and on the place"
TABLES = "with relaxation a path or a transmission that depends on energy has no one value"

_POINTS, _WEIGHTS = np.polynomial.legendre.leggauss(32)


class Ring(NamedTuple):
    """A closed row of S segments; node s is where segment s begins."""

    length_nm: np.ndarray
    rate: np.ndarray  # isotropising collisions per nm
    slope: np.ndarray  # of xi per nm
    transmission: np.ndarray  # of the node
    jump: np.ndarray  # of xi at the node
    tunnel: np.ndarray
    diffuse: np.ndarray


class Nodes(NamedTuple):
    """The nodes of a ring, by place, and the segments behind them."""

    kind: np.ndarray  # index into Setup.planes, -1 where only paths change
    transmission: np.ndarray  # of random planes
    tunnel: np.ndarray
    diffuse: np.ndarray
    length_nm: np.ndarray
    stretch: np.ndarray


@dataclass(frozen=True)
class Stretch:
    """A part of the channel with one set of paths."""

    from_nm: float
    to_nm: float
    paths: tuple


@dataclass(frozen=True)
class Plane:
    """A given plane, or a group of random ones (place_nm None) between span_nm."""

    transmission: object  # a number, a table or a TransmissionRange
    tunnel: bool
    diffuse: bool
    count: float = 1.0  # in a period, on average
    place_nm: float | None = None
    span_nm: tuple[float, float] | None = None
    exact: bool = True  # the number is the same in every period

    @property
    def ranged(self):
        """Whether each plane draws its own transmission."""
        return isinstance(self.transmission, TransmissionRange)

    def transmissions(self, energy_meV):
        """Transmissions and their weights at energies (G,): one each, or Gauss points of a range.

        Two arrays that broadcast to (points, G).
        """
        if self.ranged:
            low, high = self.transmission.low, self.transmission.high
            points = 0.5 * (low + high) + 0.5 * (high - low) * _POINTS
            return points[:, None], 0.5 * _WEIGHTS[:, None]
        return at_energy(self.transmission, energy_meV)[None, :], np.ones((1, 1))


class Grid(NamedTuple):
    """What depends on energy, at G energies (one if nothing does)."""

    energy_meV: np.ndarray
    weight: np.ndarray  # M (-dF/dE), sum 1
    mean_modes: float
    rate: np.ndarray  # (stretches, G) isotropising collisions per nm
    mean_rate: np.ndarray  # (G,) on average along the channel
    held: np.ndarray  # (G,) planes' reflections per nm at normal incidence, on average
    slope: np.ndarray  # (stretches, G) of xi per nm
    factor: np.ndarray  # (G,) of weak planes
    mean_slope: np.ndarray  # (G,) of xi per nm with jumps, averaged over all rings


@dataclass(frozen=True)
class Setup:
    """The endless channel of a problem in two or three dimensions."""

    problem: object
    stretches: tuple[Stretch, ...]
    planes: tuple[Plane, ...]
    turning: float  # per nm: relaxation that makes directions random

    @property
    def dimension(self):
        return self.problem.space.dimension

    @property
    def walls(self):
        """Two pairs of faces as kernels take them."""
        return self.problem.space.walls

    @property
    def period_nm(self):
        return self.stretches[-1].to_nm

    @cached_property
    def lengths_nm(self):
        """Of the stretches."""
        return np.array([s.to_nm - s.from_nm for s in self.stretches])

    @cached_property
    def pairs(self):
        """(size in nm, specularity) of each pair of faces that scatters."""
        return tuple((pair.size, pair.specularity) for pair in self.walls if pair is not None)

    @cached_property
    def coordinate(self):
        return Coordinate(self.dimension, self.pairs)

    @cached_property
    def varies(self):
        """Whether anything depends on energy."""
        values = [plane.transmission for plane in self.planes]
        values += [path.value for stretch in self.stretches for path in stretch.paths]
        values.append(self.problem.scenario.channel.resolved_modes)
        return any(isinstance(value, EnergyTable) for value in values)

    def refusal(self):
        """Why this channel has no backscattering path that simulation could give, or None."""
        if self.problem.relaxed is not None:
            mechanisms = self.problem.relaxed.mechanisms
            if mechanisms.phonon_meV.size:
                return PHONONS
            if mechanisms.rates.any() and self.varies:
                return TABLES
        if len(self.pairs) == 2 or self.grid.mean_rate.all() or self.grid.held.all():
            return None
        if self.grid.held.any():
            return SOME_ENERGIES
        return LOGARITHM if self.pairs else NOTHING

    # --- energies

    @cached_property
    def grid(self):
        """The Grid: F about mu_R = 0 at the contacts' mean temperature.

        What a small field does in a long channel.
        """
        kelvin = self.problem.window.mean_temperature_K
        energy = np.zeros(1)
        if self.varies and kelvin > 0.0:
            part = (np.arange(ENERGIES) + 0.5) / ENERGIES
            energy = BOLTZMANN_MEV_PER_K * kelvin * np.log(part / (1.0 - part))
        modes = at_energy(self.problem.scenario.channel.resolved_modes, energy)
        rate = self._rates(energy)
        mean_rate = self.lengths_nm @ rate / self.period_nm
        held = np.zeros(energy.size)
        for plane in self.planes:
            values, weights = plane.transmissions(energy)
            held += plane.count / self.period_nm * np.sum(weights * (1.0 - values), axis=0)
        slope, factor = self._local(rate, mean_rate, held)
        mean_slope = self.lengths_nm @ slope
        for plane in self.planes:
            values, weights = plane.transmissions(energy)
            jumps = self.coordinate.jump(values, plane.tunnel, factor)
            mean_slope += plane.count * np.sum(weights * jumps, axis=0)
        return Grid(
            energy_meV=energy,
            weight=modes / modes.sum(),
            mean_modes=float(modes.mean()),
            rate=rate,
            mean_rate=mean_rate,
            held=held,
            slope=slope,
            factor=factor,
            mean_slope=mean_slope / self.period_nm,
        )

    def some_energies(self, count, shift):
        """Indices into the Grid, a list, of `count` energies, spread evenly by weight.

        shift: in [0, 1), moves them all; any number is the same if nothing depends on energy.
        """
        if self.grid.weight.size == 1:
            return [0]
        ends = np.cumsum(self.grid.weight)
        quantile = (np.arange(count) + shift) / count * ends[-1]
        found = np.searchsorted(ends, quantile, side="right")
        return np.minimum(found, ends.size - 1).tolist()

    def _rates(self, energy_meV):
        """Isotropising collisions per nm in each stretch, (stretches, G)."""
        none = np.zeros(energy_meV.size)
        paths = [
            sum((path.rate_per_nm(energy_meV) for path in stretch.paths), none)
            for stretch in self.stretches
        ]
        return BACKSCATTER[self.dimension] * np.array(paths) + self.turning

    def _local(self, rate, mean_rate, held):
        """Slopes of xi in each stretch and the factor of weak planes; see Grid."""
        if not self.pairs:  # the path is l times a number
            ones = np.ones(1)
            (path,), (factor,) = self.coordinate.path_and_factor(ones)
            return rate / path, np.full(mean_rate.size, factor)
        # Along one pair of faces only planes bound the path where nothing collides.
        least = 0.0
        if len(self.pairs) == 1:
            least = np.maximum(1e-3 * held, LEAST_RATE / self.pairs[0][0])
        know = self.coordinate.path_and_factor
        slopes = [1.0 / know(np.maximum(row, least))[0] for row in rate]
        return np.array(slopes), know(np.maximum(mean_rate, least))[1]

    def bulk_nm(self):
        """Backscattering path without walls and planes; inf if nothing scatters at some energy."""
        grid, factor = self.grid, BACKSCATTER[self.dimension]
        if not grid.mean_rate.all():
            return np.inf
        return float(factor * (grid.weight @ (1.0 / grid.mean_rate)))

    # --- planes

    @cached_property
    def gap_nm(self):
        """The longest way without a plane that is common."""
        length = self.period_nm
        gaps = [max(length, length / sum(plane.count for plane in self.planes))]
        for plane in self.planes:
            if plane.span_nm == (0.0, length):
                gaps.append(length / plane.count)
        places = np.sort([plane.place_nm for plane in self.planes if plane.place_nm is not None])
        if places.size:
            gaps.append(np.diff(places, append=places[0] + length).max())
        return float(min(gaps))

    def meetings(self, energy):
        """Events per nm of path, about."""
        nodes = sum(plane.count for plane in self.planes) + len(self.cuts_nm)
        walls = sum(0.5 / size for size, _ in self.pairs)
        return self.grid.mean_rate[energy] + walls + 0.5 * nodes / self.period_nm

    def window(self, energy):
        """The Window at one energy, an index into the Grid."""
        if energy not in self._windows:
            self._windows[energy] = window_of(self, energy)
        return self._windows[energy]

    @cached_property
    def _windows(self):
        return {}

    # --- rings

    @cached_property
    def cuts_nm(self):
        """Places in a period where the paths change."""
        if len(self.stretches) == 1:
            return ()
        inner = tuple(stretch.from_nm for stretch in self.stretches[1:])
        closed = self.stretches[0].paths == self.stretches[-1].paths
        return inner if closed else (0.0, *inner)

    @cached_property
    def periods(self):
        """Of a ring: one, or as many as hold enough random planes."""
        random = sum(plane.count for plane in self.planes if plane.place_nm is None)
        if random == 0.0:
            return 1
        given = len(self.cuts_nm) + sum(plane.place_nm is not None for plane in self.planes)
        most = max(MOST_NODES // (random + given), 1.0)
        return int(min(max(np.ceil(FEWEST_PLANES / random), 1.0), most, MOST_PERIODS))

    def draw(self, generator):
        """The Nodes of a ring.

        By arrays and not as the points of a scenario: to make these takes longer than to walk past.
        """
        rows = [self._repeated(cut, -1) for cut in self.cuts_nm]
        for kind, plane in enumerate(self.planes):
            given = plane.place_nm is not None
            rows.append(
                self._repeated(plane.place_nm, kind) if given else self._random(kind, generator)
            )
        place, kind, transmission = (np.concatenate(column) for column in zip(*rows, strict=True))
        order = np.argsort(place, kind="stable")
        place, kind = place[order], kind[order]
        length = np.diff(place, append=place[0] + self.period_nm * self.periods)
        middle = (place + 0.5 * length) % self.period_nm
        inner = [stretch.from_nm for stretch in self.stretches[1:]]
        return Nodes(
            kind=kind,
            transmission=transmission[order],
            tunnel=np.array([*(plane.tunnel for plane in self.planes), False])[kind],
            diffuse=np.array([*(plane.diffuse for plane in self.planes), False])[kind],
            length_nm=length,
            stretch=np.searchsorted(inner, middle, side="right"),
        )

    def _repeated(self, place_nm, kind):
        place = place_nm + self.period_nm * np.arange(self.periods)
        return place, np.full(place.size, kind), np.ones(place.size)

    def _random(self, kind, generator):
        plane = self.planes[kind]
        if plane.exact:
            period = np.repeat(np.arange(self.periods), int(plane.count))
        else:
            number = generator.poisson(plane.count * self.periods)
            period = generator.integers(self.periods, size=number)
        place = self.period_nm * period + generator.uniform(*plane.span_nm, period.size)
        if plane.ranged:
            low, high = plane.transmission.low, plane.transmission.high
            return place, np.full(place.size, kind), generator.uniform(low, high, place.size)
        return place, np.full(place.size, kind), np.full(place.size, plane.transmission)

    def ring(self, nodes, energy):
        """The Ring of drawn nodes at one energy, and the mean slope of xi in it."""
        grid = self.grid
        transmission, jump = nodes.transmission.copy(), np.zeros(nodes.kind.size)
        for number, plane in enumerate(self.planes):
            these = nodes.kind == number
            if plane.place_nm is not None:
                transmission[these] = at_energy(plane.transmission, grid.energy_meV[energy])
            jump[these] = self.coordinate.jump(
                transmission[these], plane.tunnel, grid.factor[energy]
            )
        ring = Ring(
            length_nm=nodes.length_nm,
            rate=grid.rate[nodes.stretch, energy],
            slope=grid.slope[nodes.stretch, energy],
            transmission=transmission,
            jump=jump,
            tunnel=nodes.tunnel,
            diffuse=nodes.diffuse,
        )
        return ring, float((ring.slope @ ring.length_nm + jump.sum()) / ring.length_nm.sum())

    def even_ring(self, length_nm, energy):
        """A Ring for a channel that is the same everywhere, and the slope of xi."""
        one, no = np.ones(1), np.zeros(1, bool)
        rate, slope = (column[:, energy].copy() for column in (self.grid.rate, self.grid.slope))
        return Ring(length_nm * one, rate, slope, one, 0.0 * one, no, no), float(slope[0])

    @property
    def even(self):
        """Nothing marks a place along the channel."""
        return not self.planes and not self.cuts_nm


def setup_of(problem):
    """The Setup of a problem in two or three dimensions."""
    turning = 0.0
    if problem.relaxed is not None:
        turning = float(problem.relaxed.mechanisms.rates[[RANDOM_BATH, RANDOM_CARRIERS]].sum())
    return Setup(problem, _stretches(problem), tuple(_planes(problem.scenario)), turning)


def _stretches(problem):
    nodes = problem.nodes_nm
    found = []
    for start, stop in pairwise([nodes[0], *nodes[problem.is_section_edge], nodes[-1]]):
        segment = np.searchsorted(nodes, 0.5 * (start + stop)) - 1
        paths = problem.segment_paths[segment]
        if found and found[-1].paths == paths:
            start = found.pop().from_nm
        found.append(Stretch(float(start), float(stop), paths))
    return tuple(found)


def _planes(scenario):
    """Planes that reflect: given ones, then random groups."""
    for point in scenario.scattering.points:
        if point.group is None and point.transmission != 1.0:
            kind = point.angular == "tunnel", point.reflection == "diffuse"
            yield Plane(point.transmission, *kind, place_nm=point.position_nm)
    for group in scenario.scattering.random:
        low = 0.0 if group.from_nm is None else group.from_nm
        high = scenario.channel.length_nm if group.to_nm is None else group.to_nm
        exact = group.count is not None
        count = group.count if exact else group.density_per_um * (high - low) / 1000.0
        if count and group.transmission != 1.0:
            kind = group.angular == "tunnel", group.reflection == "diffuse"
            yield Plane(group.transmission, *kind, float(count), None, (low, high), exact)
