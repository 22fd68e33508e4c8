"""The energy axis of a run: bins, the share of histories each gets, and integrals over the bins.

An elastic channel is an independent transport problem at each energy. Histories are spread over
the energies by importance; every bin average of a response is then an unbiased estimate, and each
result is a sum over bins of (response) x (an integral known in advance). Inside a bin the response
is taken as linear, its slope from the neighbours, so what is left out is of third order in the
bin width.
"""

from dataclasses import dataclass
from itertools import pairwise

import numpy as np

from carriersim import fermi
from carriersim.constants import BOLTZMANN_MEV_PER_K

SMALLEST_AXIS = 240  # bins: enough for a smooth map of f(x, E)
MOST_BREAKS = 3000  # tables with more nodes are taken as linear between bin edges
FINEST_KT = 6.0  # bins per kT near a contact's electrochemical potential
REACH_KT = 20.0  # the axis ends here beyond the contacts: exp(-20) = 2e-9
TABLE_STEP = 0.12  # largest relative change of a tabulated quantity across a bin
FLOOR_SHARE = 0.1  # of the histories, spread evenly over the bins, so that none is empty

_POINTS, _WEIGHTS = np.polynomial.legendre.leggauss(8)


@dataclass(frozen=True)
class Window:
    """What the contacts ask for, in meV and K."""

    mu_left_meV: float
    temperature_left_K: float
    temperature_right_K: float

    @property
    def linear(self):
        """Bias 0: responses per unit of the bias."""
        return self.mu_left_meV == 0.0

    @property
    def same_temperature(self):
        return self.temperature_left_K == self.temperature_right_K

    @property
    def mean_temperature_K(self):
        return 0.5 * (self.temperature_left_K + self.temperature_right_K)

    def breaks(self):
        """Places that cut the energy axis finely enough for both Fermi functions."""
        return np.concatenate(
            [
                fermi.thermal_breaks(self.mu_left_meV, self.temperature_left_K),
                fermi.thermal_breaks(0.0, self.temperature_right_K),
            ]
        )

    def difference(self, energy_meV):
        """F_L - F_R, the drive of the current at a finite bias."""
        return fermi.difference(
            energy_meV, self.mu_left_meV, self.temperature_left_K, 0.0, self.temperature_right_K
        )


def axis(window, tables, bins=None):
    """Edges of the energy bins in meV, shape (B+1,), increasing.

    tables: EnergyTable objects whose values must be resolved; bins: asked number (None: as many as
    the contacts and tables need, at least SMALLEST_AXIS).
    """
    fixed, density = _resolution(window, tables)
    spans = [_span(low, high, density) for low, high in pairwise(fixed)]
    need = sum(count for count, _, _ in spans)
    scale = (bins or max(SMALLEST_AXIS, min(need, 4000))) / need
    edges = [fixed[:1]]
    for (count, grid, cumulative), high in zip(spans, fixed[1:], strict=True):
        number = max(1, round(count * scale))
        targets = cumulative[-1] * np.arange(1, number) / number
        edges.append(np.interp(targets, cumulative, grid))
        edges.append(np.array([high]))
    return np.concatenate(edges)


def _resolution(window, tables):
    """Places where bins must be cut, and the wanted number of bins per meV as a function of E."""
    mu = window.mu_left_meV
    kTs = [BOLTZMANN_MEV_PER_K * t for t in (window.temperature_left_K, window.temperature_right_K)]
    hottest = max(kTs)
    low, high = min(mu, 0.0) - REACH_KT * hottest, max(mu, 0.0) + REACH_KT * hottest
    if hottest == 0.0:
        margin = 0.1 * abs(mu) or 1.0
        low, high = low - margin, high + margin
    elif not window.same_temperature:
        low, high = low - 0.5 * REACH_KT * hottest, high + 0.5 * REACH_KT * hottest
    cuts = {low, high}
    for place, kT in ((mu, kTs[0]), (0.0, kTs[1])):
        if kT == 0.0:  # a step: an edge there, and two thin bins for the value at the step
            thin = 1e-3 * (high - low)
            cuts.update((place - thin, place, place + thin))
    nodes = sorted({e for table in tables for e in table.energy_meV if low < e < high})
    if len(nodes) <= MOST_BREAKS:
        cuts.update(nodes)
    fixed = np.array(sorted(c for c in cuts if low <= c <= high))

    def density(energy):
        result = np.full(np.shape(energy), 100.0 / (high - low))
        for place, kT in ((mu, kTs[0]), (0.0, kTs[1])):
            if kT > 0.0:
                away = np.abs(energy - place) / (3.0 * kT)
                result = np.maximum(result, FINEST_KT / kT / np.maximum(1.0, away))
        return np.maximum(result, _table_density(energy, tables))

    return fixed, density


def _table_density(energy, tables):
    """Bins per meV that keep each table's relative change per bin below TABLE_STEP."""
    result = np.zeros(np.shape(energy))
    for table in tables:
        nodes, values = np.array(table.energy_meV), np.array(table.value)
        if nodes.size < 2:
            continue
        slopes = np.diff(values) / np.diff(nodes)
        place = np.searchsorted(nodes, energy) - 1
        inside = (place >= 0) & (place < slopes.size)
        slope = np.where(inside, slopes[np.clip(place, 0, slopes.size - 1)], 0.0)
        value = np.interp(energy, nodes, values)
        tiny = 1e-6 * values.max()
        result = np.maximum(result, np.abs(slope) / np.maximum(value, tiny) / TABLE_STEP)
    return result


def _span(low, high, density):
    """Wanted number of bins between two cuts, with the grid and cumulative count behind it."""
    grid = np.linspace(low, high, 401)
    middle = density(0.5 * (grid[1:] + grid[:-1]))
    cumulative = np.concatenate([[0.0], np.cumsum(middle * np.diff(grid))])
    return max(cumulative[-1], 1e-9), grid, cumulative


class Bins:
    """Integrals over the bins of an axis.

    `functional(weight)` gives c, shape (B,), so that integral of weight(E) y(E) dE = c @ y for bin
    averages y, exact where y is linear across a bin and its neighbours.
    """

    def __init__(self, edges_meV, breaks_meV):
        self.edges = np.asarray(edges_meV, float)
        self.centres = 0.5 * (self.edges[1:] + self.edges[:-1])
        inner = breaks_meV[(breaks_meV > self.edges[0]) & (breaks_meV < self.edges[-1])]
        cuts = np.union1d(self.edges, inner)
        half = 0.5 * np.diff(cuts)[:, None]
        self.points = (0.5 * (cuts[1:] + cuts[:-1])[:, None] + half * _POINTS).ravel()
        self._weights = (half * _WEIGHTS).ravel()
        self._bin = np.repeat(np.searchsorted(self.edges, cuts[:-1], side="right") - 1, 8)

    @property
    def count(self):
        return self.centres.size

    def moments(self, weight):
        """Integral over each bin of weight and of weight (E - centre); two arrays (B,)."""
        values = weight(self.points) * self._weights
        zeroth = np.bincount(self._bin, values, self.count)
        lever = self.points - self.centres[self._bin]
        return zeroth, np.bincount(self._bin, values * lever, self.count)

    def functional(self, weight):
        """c of the integral of weight(E) y(E) dE = c @ y; weight takes energies in meV."""
        return self.with_slopes(*self.moments(weight))

    def with_slopes(self, zeroth, first):
        """c from the moments of a weight: slopes are central differences of the neighbours."""
        c = zeroth.copy()
        if self.count > 1:
            below = np.maximum(np.arange(self.count) - 1, 0)
            above = np.minimum(np.arange(self.count) + 1, self.count - 1)
            part = first / (self.centres[above] - self.centres[below])
            np.add.at(c, above, part)
            np.add.at(c, below, -part)
        return c

    def slope_functional(self, mu_meV, temperature_K, factor, power=0):
        """c for the weight factor(E) E**power (-dF/dE); at 0 K the value at the step."""
        if temperature_K > 0.0:
            return self.functional(
                lambda e: factor(e) * e**power * fermi.minus_slope(e, mu_meV, temperature_K)
            )
        c = np.zeros(self.count)
        place = np.searchsorted(self.edges, mu_meV)
        # Equal thin bins stand on both sides of a step (see axis): their mean is the value there.
        c[[max(place - 1, 0), min(place, self.count - 1)]] += 0.5
        return c * float(factor(np.array([mu_meV]))[0]) * mu_meV**power


def shares(bins, drives):
    """Share of the histories for each bin, shape (B,), sum 1, from the sizes of the drives.

    drives: functionals (B,) that the results need, equally important.
    """
    total = np.full(bins.count, FLOOR_SHARE / bins.count)
    useful = [np.abs(d) / np.abs(d).sum() for d in drives if np.abs(d).sum() > 0.0]
    for drive in useful:
        total += (1.0 - FLOOR_SHARE) * drive / len(useful)
    return total / total.sum()


def limited_slope(below, above):
    """Change across a bin from the steps to its neighbours: their mean, but never beyond either.

    0 at an extremum. Van Leer, J. Comput. Phys. 23 (1977) 276.
    """
    most = 2.0 * np.minimum(np.abs(below), np.abs(above))
    return np.clip(0.5 * (below + above), -most, most) * (below * above > 0.0)
