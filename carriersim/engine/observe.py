"""From totals to physical quantities: a pure function of summed responses.

`Observer.scalars` and `Observer.profiles` are called once with all batches and once for each batch
left out (jackknife), so they hold no statistics, only physics.
"""

import numpy as np

from carriersim import fermi
from carriersim.constants import AMPERE_PER_MEV, BOLTZMANN_MEV_PER_K, WATT_PER_MEV2
from carriersim.engine.energies import Bins, axis

FEWEST_ENERGIES = 200  # in the files
ROOT_STEP_KT = 0.25  # half width of the slopes at the bias without current
SMALL_TEMPERATURE_DIFFERENCE = 0.01  # up to here the thermal block gives linear coefficients


class Observer:
    """Turns sums over histories into the numbers of a result; see result.py for their meaning."""

    def __init__(self, problem):
        self.problem = problem
        self.window = problem.window
        self.degeneracy = problem.scenario.channel.degeneracy
        self.jumps = problem.is_scatterer
        self.full = 1.0 if self.window.linear else self.window.mu_left_meV
        self.drive = problem.functionals.transport(self.window)
        self.ballistic_ohm = ballistic_ohm(problem)
        # The output grid; with several bins it is the run's own, each cut into `finer` parts.
        self.finer = 1
        self.grid = problem.bins or Bins(axis(self.window, []), self.window.breaks())
        if self.grid.count < FEWEST_ENERGIES:
            self.finer = -(-FEWEST_ENERGIES // self.grid.count)
            self.grid = Bins(cut_in_parts(self.grid.edges, self.finer), self.window.breaks())
        self.root_meV, self.root_functionals = None, None
        self.groups = part_groups(self)

    def scalars(self, totals):
        """Numbers, probes and breakdown; totals: histories, transmitted (B,), arrivals (K, 2)."""
        f = self.problem.functionals
        t = totals["transmitted"] / totals["histories"]
        conductance = AMPERE_PER_MEV * 1e3 * self.degeneracy * (f.bias_slope @ t)
        current = AMPERE_PER_MEV * self.degeneracy * (f.current @ t)
        heat = WATT_PER_MEV2 * self.degeneracy * (f.heat @ t)
        power = current * self.window.mu_left_meV * 1e-3
        with np.errstate(divide="ignore", invalid="ignore"):
            if self.window.linear:
                resistance = 1.0 / conductance
            else:
                resistance = self.window.mu_left_meV * 1e-3 / current
            result = {
                "transmission": (self.drive @ t) / self.drive.sum(),
                "current": current,
                "conductance": conductance,
                "resistance": resistance,
                "differential": 1.0 / conductance,
                "left_power": power - heat,
                "right_power": heat,
                "lattice_power": 0.0,
                "probe_power": np.zeros(self.problem.probe_node.size),
            }
            result |= self._thermal(t)
            result |= self._parts(totals, t, resistance)
        result["sums"] = group_sums(self.groups.values(), result)
        return result

    def _thermal(self, t):
        """Seebeck coefficient and heat conductance at I = 0; Sivan & Imry, PRB 33 (1986) 551."""
        kelvin = self.window.mean_temperature_K
        left, right = self.window.temperature_left_K, self.window.temperature_right_K
        if abs(left - right) > SMALL_TEMPERATURE_DIFFERENCE * kelvin:
            return self._thermal_by_root(t)
        if kelvin == 0.0:
            return {"seebeck": np.nan, "thermal_conductance": np.nan}
        l0, l1, l2 = (c @ t for c in self.problem.functionals.thermal)
        return {
            "seebeck": -l1 / l0 / kelvin * 1e-3,
            "thermal_conductance": WATT_PER_MEV2 * self.degeneracy * (l2 - l1**2 / l0) / kelvin,
        }

    def _thermal_by_root(self, t):
        """The same where the temperatures differ much: the bias at which no current flows."""
        if self.root_functionals is None:
            self._find_root(t)
        if self.root_meV is None:
            return {"seebeck": np.nan, "thermal_conductance": np.nan}
        current, slope, heat, heat_slope = (c @ t for c in self.root_functionals)
        # One Newton step from the root of all batches: replicates lie close to it.
        step = -current / slope
        difference = self.window.temperature_left_K - self.window.temperature_right_K
        power = heat + heat_slope * step
        return {
            "seebeck": (self.root_meV + step) * 1e-3 / difference,
            "thermal_conductance": WATT_PER_MEV2 * self.degeneracy * power / difference,
        }

    def _functionals_at(self, mu_meV):
        """Weights of current, its slope, heat and its slope, for another bias."""
        w = self.window
        left, right = w.temperature_left_K, w.temperature_right_K
        modes = self.problem.modes
        if self.problem.bins is None:
            m = float(modes(np.zeros(1))[0])
            thermal = (np.pi * BOLTZMANN_MEV_PER_K) ** 2 / 6 * (left**2 - right**2)
            return m * np.array([[mu_meV], [1.0], [mu_meV**2 / 2 + thermal], [mu_meV]])
        # Slopes over a part of the hotter contact's kT: a cold contact's own step would hang on
        # the histories of two bins.
        delta = ROOT_STEP_KT * BOLTZMANN_MEV_PER_K * max(left, right)
        places = (mu_meV, mu_meV + delta, mu_meV - delta)
        middle, above, below = (self._current_and_heat(mu, modes) for mu in places)
        slopes = (above - below) / (2.0 * delta)
        return np.array([middle[0], slopes[0], middle[1], slopes[1]])

    def _current_and_heat(self, mu_meV, modes):
        """Weights of current and heat for another bias, (2, B)."""
        w = self.window
        left = w.temperature_left_K
        breaks = np.concatenate([fermi.thermal_breaks(mu_meV, left), w.breaks()])
        bins = Bins(self.problem.bins.edges, breaks)

        def drive(e):
            return modes(e) * fermi.difference(e, mu_meV, left, 0.0, w.temperature_right_K)

        return np.array([bins.functional(drive), bins.functional(lambda e: e * drive(e))])

    def _find_root(self, t):
        """Bias without current for the response t, by safeguarded Newton steps from 0."""
        edges = self.grid.edges
        mu, low, high = 0.0, edges[0], edges[-1]
        self.root_functionals = ()
        for _ in range(60):
            functionals = self._functionals_at(mu)
            current, slope = functionals[0] @ t, functionals[1] @ t
            low, high = (mu, high) if current < 0.0 else (low, mu)
            step = -current / slope if slope > 0.0 else np.inf
            if abs(step) < 1e-9 * (high - low + abs(mu)) or current == 0.0:
                self.root_meV, self.root_functionals = mu, functionals
                return
            mu = mu + step if low < mu + step < high else 0.5 * (low + high)

    def _parts(self, totals, t, resistance):
        """Probe readings (fraction of the bias) and the parts of the resistance."""
        arrivals = totals["arrivals"] / totals["histories"] / self.full
        probes = self.problem.probe_node
        weight = np.array([p.weight_right for p in self.problem.scenario.probes])
        reading = weight * arrivals[probes, 0] + (1.0 - weight) * arrivals[probes, 1]
        before, after = self.beside_nodes(totals, t)
        shares = self._mechanism_shares(totals, t)
        parts = parts_of(before, after, self.cuts(), self.jumps, shares, resistance)
        return parts | {
            "probe": reading,
            "four_point": pair_differences(reading) * resistance,
        }

    def beside_nodes(self, totals, t):
        """Mean potential of both directions left and right of each node, over the bias."""
        arrivals = totals["arrivals"] / totals["histories"] / self.full
        through = self.problem.functionals.filling @ t / self.full
        return arrivals[:, 0] - 0.5 * through, arrivals[:, 1] + 0.5 * through

    def piece_scatters(self):
        """For each piece and mechanism of the breakdown, whether anything scatters there."""
        turning = [self.turning(node) for node in self.cuts()[:-1]]
        return np.array([bool(names) for names in turning for _ in names or [None]])

    def cuts(self):
        """Nodes where the breakdown is cut: contacts, point scatterers, section edges."""
        return cuts_of(self.problem, self.jumps)

    def turning(self, node):
        """Names of what turns carriers round in the piece that begins at a node."""
        return [path.name for path in self.problem.segment_paths[node]]

    def _mechanism_shares(self, totals, t):
        """For each piece the share of the backscattered flux that each of its paths destroys."""
        centres = self.problem.bins.centres if self.problem.bins else np.zeros(1)
        flux = np.abs(self.drive * t)
        known = {}
        shares = []
        for node in self.cuts()[:-1]:
            paths = self.problem.segment_paths[node]
            if paths not in known:
                rates = np.array([flux @ p.rate_per_nm(centres) for p in paths] or [1.0])
                known[paths] = rates / rates.sum()
            shares.append(known[paths])
        return shares

    def profiles(self, totals):
        """mu and carrier temperatures in every cell; totals: histories, cells (F, C, 2)."""
        cells = totals["cells"] / totals["histories"]
        cells = np.concatenate([cells, cells.mean(axis=-1, keepdims=True)], axis=-1)
        mu = cells[0]
        result = {"mu_plus_meV": mu[:, 0], "mu_minus_meV": mu[:, 1], "mu_meV": mu[:, 2]}
        if self.problem.functionals.energy is None:
            kelvin = np.full_like(mu, np.nan)
        else:
            background = (np.pi * BOLTZMANN_MEV_PER_K * self.window.temperature_right_K) ** 2 / 6
            kelvin = fermi.carrier_temperature(cells[1], background + cells[2])
        names = ("plus_K", "minus_K", "K")
        result |= {f"carrier_temperature_{n}": kelvin[:, i] for i, n in enumerate(names)}
        return result

    def occupation_drive(self):
        """F_R and the factor of g in f, both (E,), on the output grid."""
        e, w = self.grid.centres, self.window
        if not w.linear:
            return self.state()
        if w.temperature_left_K > 0.0:
            return np.zeros_like(e), fermi.minus_slope(e, 0.0, w.temperature_left_K)
        delta = self.grid.slope_functional(0.0, 0.0, np.ones_like)
        return np.zeros_like(e), delta / np.diff(self.grid.edges)

    def state(self):
        """F_R and F_L - F_R, both (E,): the state itself, at bias 0 that of no bias."""
        e, w = self.grid.centres, self.window
        return fermi.occupation(e, 0.0, w.temperature_right_K), w.difference(e)


def ballistic_ohm(problem):
    """Resistance of the channel if nothing scattered."""
    quantum = AMPERE_PER_MEV * problem.scenario.channel.degeneracy
    return 1e-3 / (quantum * problem.functionals.mean_modes)


def cuts_of(problem, jumps):
    """Nodes where the breakdown is cut: contacts, section edges and where potentials jump."""
    cut = jumps | problem.is_section_edge
    cut[[0, -1]] = True
    return np.flatnonzero(cut)


def parts_of(before, after, cuts, jumps, shares, resistance):
    """Interfaces, jumps and pieces of a resistance.

    before, after: mean potential of both directions left and right of each node, as fraction of
    the bias; jumps: (K,) bool; shares: of each mechanism, for each piece between two cuts.
    """
    pieces = after[cuts[:-1]] - before[cuts[1:]]
    return {
        "interface": np.array([1.0 - before[0], after[-1]]) * resistance,
        "jumps": (before - after)[jumps] * resistance,
        "pieces": np.concatenate([p * s for p, s in zip(pieces, shares, strict=True)]) * resistance,
    }


def part_groups(observer):
    """Which jumps and pieces of a breakdown belong together: {(kind, mechanism): (jumps, pieces)}.

    jumps, pieces: indices into these arrays of parts_of. In the order in which they are met.
    """
    groups = {}
    for index, node in enumerate(np.flatnonzero(observer.jumps)):
        kind = "point" if observer.problem.is_scatterer[node] else "probe"
        groups.setdefault((kind, None), ([], []))[0].append(index)
    piece = 0
    for node in observer.cuts()[:-1]:
        for mechanism in observer.turning(node) or [None]:
            if mechanism is not None:  # nothing falls where nothing scatters
                groups.setdefault(("piece", mechanism), ([], []))[1].append(piece)
            piece += 1
    return groups


def group_sums(groups, parts):
    """Resistance of each of part_groups, from the arrays of parts_of."""
    return np.array([parts["jumps"][j].sum() + parts["pieces"][p].sum() for j, p in groups])


def pair_differences(reading):
    """Reading of the left probe less that of the right one, for every pair."""
    first, second = np.triu_indices(reading.size, 1)
    return reading[first] - reading[second]


def cut_in_parts(edges, parts):
    """Each interval cut into equal parts."""
    inner = np.linspace(edges[:-1], edges[1:], parts, endpoint=False)
    return np.append(inner.T.ravel(), edges[-1])


def departure_of(f, centres, widths, mu_meV, kelvin, local=None):
    """Squared distance from local equilibrium and its derivative; shapes (E, C), results (C,).

    int (f - F(E; mu, T_e))^2 dE / (k T_e), with F of the same number and energy as f. Also returns
    the derivative with respect to f in each bin, (E, C), F moving along. local: F where it is more
    than its value at the centres, for instance its mean over wide bins.
    """
    kT = BOLTZMANN_MEV_PER_K * kelvin
    cold = kT <= 0.0
    kT = np.where(cold, 1.0, kT)
    if local is None:
        local = fermi.occupation(centres[:, None], mu_meV, np.where(cold, 0.0, kelvin))
    gap = np.where(cold, 0.0, f - local)
    x = (centres[:, None] - mu_meV) / kT
    slope = local * (1.0 - local) / kT  # dF/dmu; dF/d(kT) = x dF/dmu
    square = np.einsum("ec,e->c", gap**2, widths) / kT
    by_mu = -2.0 * np.einsum("ec,e->c", gap * slope, widths) / kT
    by_kT = -2.0 * np.einsum("ec,e->c", gap * slope * x, widths) / kT - square / kT
    # mu = n and (pi kT)^2/6 = u - mu^2/2 give dmu and dkT per change of f in one bin.
    to_kT = 3.0 / (np.pi**2 * kT) * (centres[:, None] - mu_meV)
    derivative = (2.0 * gap / kT + by_mu + by_kT * to_kT) * widths[:, None]
    return square, np.where(cold, 0.0, derivative)


def root_of(square, error):
    """Square root of an estimate that noise may have made negative, and its error."""
    root = np.sqrt(np.maximum(square, 0.0))
    # d sqrt(s) = ds / (2 sqrt(s)); near zero the root of the error bounds it instead.
    bound = 2.0 * np.maximum(root, np.sqrt(error))
    return root, np.divide(error, bound, out=np.zeros_like(error), where=bound > 0.0)
