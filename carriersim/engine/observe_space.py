"""From totals to physical quantities in two and three dimensions; adds to observe.py.

Potentials just beside a node are means over all directions, from crossings that count 1/|u_x|; what
arrives at a node counts each carrier once, and gives the readings of probes.
"""

from itertools import pairwise

import numpy as np

from carriersim.constants import AMPERE_PER_MEV
from carriersim.engine.mechanisms import RANDOM_BATH, RANDOM_CARRIERS
from carriersim.engine.observe import Observer
from carriersim.engine.observe_relaxed import RelaxedObserver
from carriersim.engine.space import BACKSCATTER

WALLS = "walls"


class SpaceObserver(Observer):
    """An Observer where carriers have directions."""

    def _parts(self, totals, t, resistance):
        parts = super()._parts(totals, t, resistance)
        return parts | {"by_direction": self._by_direction(totals)}

    def beside_nodes(self, totals, t):
        return beside_nodes(totals, self.full)

    def turning(self, node):
        """Names of what turns carriers round in the piece that begins at a node."""
        return super().turning(node) + [WALLS] * self.problem.space.scatters

    def _mechanism_shares(self, totals, t):
        """For each piece the share of each mechanism in the directed motion that is destroyed.

        Collisions take u_x at the rate of the current over the mean free path; what walls take is
        counted.
        """
        problem = self.problem
        centres = problem.bins.centres if problem.bins else np.zeros(1)
        flux = self.drive * t
        factor = BACKSCATTER[problem.space.dimension]
        lost = totals["lost"] / totals["histories"]
        lengths = np.diff(problem.nodes_nm)
        cuts = self.cuts()
        shares = []
        for start, stop in pairwise(cuts):
            paths = problem.segment_paths[start]
            length = lengths[start:stop].sum()
            amounts = [factor * length * (flux @ p.rate_per_nm(centres)) for p in paths]
            if problem.space.scatters:
                amounts.append(lost[start:stop].sum())
            shares.append(in_proportion(amounts))
        return shares

    def _by_direction(self, totals):
        """See by_direction; conductance in S at bias 0 or unequal temperatures."""
        unit = AMPERE_PER_MEV * self.degeneracy
        if self.drive is self.problem.functionals.bias_slope:
            unit *= 1e3
        return unit * by_direction(self.problem, totals)


class RelaxedSpaceObserver(RelaxedObserver):
    """A RelaxedObserver where carriers have directions."""

    def turning(self, node):
        """Names of what turns carriers round in the piece that begins at a node."""
        return super().turning(node) + [WALLS] * self.problem.space.scatters

    def scalars(self, t):
        """Numbers, probes, breakdown and the current by direction."""
        unit = self.ampere_per_meV * (1e3 if self.window.linear else 1.0)
        return super().scalars(t) | {"by_direction": unit * by_direction(self.problem, t)}

    def beside_nodes(self, t):
        return beside_nodes(t, self.full)

    def _shares(self, t):
        """Share of each mechanism in the directed motion that is destroyed, for each piece."""
        problem, mechanisms = self.problem, self.relaxed.mechanisms
        factor = BACKSCATTER[problem.space.dimension]
        current = t["departures"][:-1, 0] - t["arrivals"][:-1, 1]  # in each segment
        amount = current * np.diff(problem.nodes_nm)
        random = mechanisms.rates[[RANDOM_BATH, RANDOM_CARRIERS]]
        shares, cuts = [], self.cuts()
        for (start, cells), stop, rates in zip(self.pieces, cuts[1:], self.rates, strict=True):
            paths = len(problem.segment_paths[start])
            whole = amount[start:stop].sum()
            amounts = [*(factor * rates[:paths] * whole), *(random[random > 0.0] * whole)]
            if mechanisms.phonon_meV.size:
                amounts.append(t["turned"][cells].sum())
            if problem.space.scatters:
                amounts.append(t["lost"][start:stop].sum())
            shares.append(in_proportion(amounts))
        return shares


def in_proportion(amounts):
    """Shares of amounts, equal ones if there is nothing to share; of nothing at all, one whole."""
    amounts = np.array(amounts or [1.0])
    total = amounts.sum()
    return amounts / total if total else np.full(amounts.size, 1.0 / amounts.size)


def beside_nodes(totals, full):
    """Mean potential of both directions left and right of each node, as fraction of the bias."""
    densities = totals["densities"] / totals["histories"] / full
    return densities[:, :2].mean(axis=1), densities[:, 2:].mean(axis=1)


def by_direction(problem, totals):
    """Carriers moving right and left per degree of their angle to the axis, (V, 2, D)."""
    edges = np.degrees(np.arccos(problem.space.planes.view_edges))
    return totals["views"] / totals["histories"] / np.diff(edges)
