"""From the totals of a relaxing run to physical quantities; what observe.py is to elastic runs.

Totals are deviations from the reference F(E; mu_R, T_b), whose number is 0. `scalars`, `powers` and
`profiles` are called with all batches and with each batch left out (jackknife).
"""

from itertools import pairwise

import numpy as np

from carriersim.constants import AMPERE_PER_MEV, WATT_PER_MEV2
from carriersim.engine.energies import Bins, limited_slope
from carriersim.engine.mechanisms import (
    RANDOM_BATH,
    RANDOM_CARRIERS,
    edges_of,
    reference,
    temperatures,
)
from carriersim.engine.observe import (
    FEWEST_ENERGIES,
    ballistic_ohm,
    cut_in_parts,
    cuts_of,
    group_sums,
    pair_differences,
    part_groups,
    parts_of,
)
from carriersim.jackknife import jackknife
from carriersim.quantities import EnergyTable
from carriersim.result import Estimate

FEWEST_LEVELS = 3  # windows of different noise that the bias of noise is found from


class RelaxedObserver:
    """Turns sums over histories into the numbers of a result; see result.py for their meaning."""

    def __init__(self, problem, field_sum):
        """field_sum: (2, B, C), tells at which energies carriers are turned."""
        self.problem, self.window, self.relaxed = problem, problem.window, problem.relaxed
        self.bath_kelvin = problem.scenario.bath_temperature_K
        self.full = 1.0 if self.window.linear else self.window.mu_left_meV
        self.ballistic_ohm = ballistic_ohm(problem)
        self.ampere_per_meV = 1e-3 / self.ballistic_ohm
        self.watt_per_meV2 = self.ampere_per_meV * WATT_PER_MEV2 / AMPERE_PER_MEV
        self.coupled = self.relaxed.probes.from_left + self.relaxed.probes.from_right > 0.0
        self.jumps = problem.is_scatterer | self.coupled
        self.widths_nm = np.diff(problem.cell_edges_nm)
        axis = self.relaxed.axis
        self.edges_meV = edges_of(axis)
        self.finer = max(1, -(-FEWEST_ENERGIES // axis.bins))
        self.grid = Bins(cut_in_parts(self.edges_meV, self.finer), np.empty(0))
        self.pieces = self._piece_cells()
        self.rates = [self._rates(*piece, field_sum) for piece in self.pieces]
        self.groups = part_groups(self)

    # What stands where

    def cuts(self):
        """Nodes where the breakdown is cut: contacts, scatterers, coupled probes, section edges."""
        return cuts_of(self.problem, self.jumps)

    def turning(self, node):
        """Names of what turns carriers round in the piece that begins at a node."""
        mechanisms = self.relaxed.mechanisms
        names = [path.name for path in self.problem.segment_paths[node]]
        names += ["bath"] * bool(mechanisms.rates[RANDOM_BATH])
        names += ["carriers"] * bool(mechanisms.rates[RANDOM_CARRIERS])
        phonons = mechanisms.phonon_meV.size
        return names + ["optical phonon" if phonons == 1 else "optical phonons"] * bool(phonons)

    def _piece_cells(self):
        """(first node, slice of cells) of each piece."""
        first = np.append(self.problem.geometry.first_cell, self.problem.cells)
        return [(start, slice(first[start], first[stop])) for start, stop in pairwise(self.cuts())]

    def _rates(self, node, cells, field_sum):
        """Per nm, of each mechanism of a piece at the energies of the net flux; phonons: nan."""
        flux = (field_sum[0] - field_sum[1])[:, cells] @ self.widths_nm[cells]
        centres = 0.5 * (self.edges_meV[1:] + self.edges_meV[:-1])
        rates = []
        for path in self.problem.segment_paths[node]:
            if isinstance(path.value, EnergyTable) and flux.sum():
                rates.append(flux @ path.rate_per_nm(centres) / flux.sum())
            else:
                rates.append(float(path.rate_per_nm(0.0)))
        random = self.relaxed.mechanisms.rates[[RANDOM_BATH, RANDOM_CARRIERS]]
        rates += [0.5 * rate for rate in random if rate > 0.0]  # half of them go on as before
        return np.array(rates + [np.nan] * (len(self.turning(node)) - len(rates)))

    # Numbers; t: sums of the totals over the batches

    def scalars(self, t):
        """Numbers, probes and breakdown; sums of a tangent run, which gives dI/dV, may be there."""
        n = t["histories"]
        flux = t["current"] / n
        with np.errstate(divide="ignore", invalid="ignore"):
            conductance = 1e3 * self.ampere_per_meV * self._slope(t, flux)
            resistance = self.ballistic_ohm * self.full / flux
            numbers = {
                "transmission": flux / self.full,
                "current": np.nan if self.window.linear else self.ampere_per_meV * flux,
                "conductance": conductance,
                "resistance": resistance,
                "differential": 1.0 / conductance,
                "seebeck": np.nan,
                "thermal_conductance": np.nan,
            }
            parts = self.parts(t, resistance)
            parts["sums"] = group_sums(self.groups.values(), parts)
            return numbers | self.powers(t) | self._potentials(t) | parts

    def _slope(self, t, flux):
        """d(int j dE)/d(mu_L), nan where it is not known."""
        if "tangent" in t:
            return t["tangent"] / t["tangent_histories"]
        if self.window.linear or self.relaxed.setting.exact_energy:  # proportional to the bias
            return flux / self.full
        return np.nan

    def in_equilibrium(self):
        """Whether everything has one temperature: then nothing flows without a bias."""
        return self.relaxed.equilibrium

    def powers(self, t):
        """Heat in W: what each place takes up; they add up to I V."""
        energy = t["energy"] / t["histories"]
        left = self.full * t["current"] / t["histories"] - energy[0]
        probes = np.where(self.coupled, t["probe_heat"] / t["histories"], 0.0)
        watt = np.nan if self.window.linear else self.watt_per_meV2
        return {
            "left_power": watt * left,
            "right_power": watt * energy[1],
            "lattice_power": watt * t["heat"].sum() / t["histories"],
            "probe_power": watt * probes[self.problem.probe_node],
        }

    def _potentials(self, t):
        """What the probes read, as fraction of the bias, and the four-point resistances."""
        node = self.problem.probe_node
        weight = np.array([p.weight_right for p in self.problem.scenario.probes])
        a, b = self.relaxed.probes.from_left[node], self.relaxed.probes.from_right[node]
        weight = np.where(self.coupled[node], a / np.where(a + b > 0.0, a + b, 1.0), weight)
        arrivals = t["arrivals"][node] / t["histories"] / self.full
        reading = weight * arrivals[:, 0] + (1.0 - weight) * arrivals[:, 1]
        resistance = self.ballistic_ohm * self.full / (t["current"] / t["histories"])
        return {"probe": reading, "four_point": pair_differences(reading) * resistance}

    def parts(self, t, resistance):
        """Parts of the resistance."""
        before, after = self.beside_nodes(t)
        # At a contact that lets everybody pass nothing falls; a trial occupation knows it roughly.
        if not self.jumps[0]:
            after[0] = before[0]
        if not self.jumps[-1]:
            before[-1] = after[-1]
        return parts_of(before, after, self.cuts(), self.jumps, self._shares(t), resistance)

    def beside_nodes(self, t):
        """Mean potential of both directions left and right of each node, over the bias."""
        arrivals, departures = (t[key] / t["histories"] for key in ("arrivals", "departures"))
        before = 0.5 * (arrivals[:, 0] + departures[:, 1]) / self.full
        return before, 0.5 * (arrivals[:, 1] + departures[:, 0]) / self.full

    def _shares(self, t):
        """Share of each mechanism in the directed flux that is destroyed, for each piece."""
        number = t["cells"][..., 0]
        flux = (number[:, 0] - number[:, 1]) * self.widths_nm
        shares = []
        for (_, cells), rates in zip(self.pieces, self.rates, strict=True):
            if rates.size < 2:
                shares.append(np.ones(1))
                continue
            amounts = rates * flux[cells].sum()
            amounts = np.where(np.isnan(rates), t["turned"][cells].sum(), amounts)
            total = amounts.sum()
            shares.append(amounts / total if total else np.full(rates.size, 1.0 / rates.size))
        return shares

    # Fields

    def profiles(self, t):
        """mu, carrier temperatures and the lattice's power in every cell."""
        n = t["histories"]
        cells = t["cells"] / n
        cells = np.concatenate([cells, cells.mean(axis=1, keepdims=True)], axis=1)
        number = cells[..., 0]
        energy = cells[..., 2 if self.relaxed.setting.exact_energy else 1]
        power = self.watt_per_meV2 * t["heat"] / n / self.widths_nm
        if self.window.linear:  # the state itself is the equilibrium
            power = np.full_like(power, np.nan)
            kelvin = self.bath_kelvin if self.in_equilibrium() else np.nan
            kelvin = np.full_like(number, kelvin)
        else:
            kelvin = temperatures(number, energy, self.bath_kelvin)
        names = ("plus_meV", "minus_meV", "meV")
        result = {f"mu_{name}": number[:, i] for i, name in enumerate(names)}
        names = ("plus_K", "minus_K", "K")
        result |= {f"carrier_temperature_{name}": kelvin[:, i] for i, name in enumerate(names)}
        return result | {"lattice_power_W_per_nm": power}

    def occupation(self, deviation):
        """f, or df/d(eV), on the output grid from the deviations (..., B, C) in the run's bins."""
        fine = in_parts(deviation, self.finer)
        if self.window.linear:
            return fine
        return reference(self.relaxed.axis, self.bath_kelvin, self.finer)[:, None] + fine


def in_parts(value, parts):
    """Means over bins (..., B, C) as means over equal parts of them, (..., B parts, C).

    Inside a bin the value is linear, with a slope that stays in its neighbours' range.
    """
    step = np.diff(value, axis=-2)
    end = np.zeros_like(value[..., :1, :])
    below, above = np.concatenate([end, step], axis=-2), np.concatenate([step, end], axis=-2)
    slope = limited_slope(below, above)
    places = (np.arange(parts) + 0.5) / parts - 0.5
    fine = value[..., :, None, :] + slope[..., :, None, :] * places[:, None]
    return fine.reshape(*value.shape[:-2], -1, value.shape[-1])


# --- the bias that noise leaves -----------------------------------------------------------------


def batches_of(totals):
    """Histories and sums by name, leading axis = batches, as the jackknife takes them."""
    return {"histories": totals.histories.astype(float)} | totals.sums


def noise_bias(problem, totals, function, values):
    """How far the noise of frozen fields may have moved each of function(sums), by name.

    With noise of level v in the frozen fields a window gives q + b v; the windows have different
    levels, and a straight line through them gives b. Returns |b| times the level of the last two,
    0 where no frozen field enters, and nothing as long as there are too few windows. values: what
    function gives for the totals.
    """
    if problem.window.linear or problem.relaxed.setting.exact_energy:
        # Then frozen fields enter linearly at most, and they are independent of what they meet.
        return {key: np.zeros(np.shape(value)) for key, value in values.items()}
    windows = totals.windows
    if len(windows) < FEWEST_LEVELS:
        return {}
    level = np.array([x.noise / x.histories.sum() for x in windows])
    last = windows[-2:]
    now = sum(x.noise for x in last) / sum(x.histories.sum() for x in last)
    found = [jackknife(function, batches_of(x)) for x in windows]
    return {
        key: np.abs(now * _slope_of(level, *(np.array([f[i][key] for f in found]) for i in (0, 1))))
        for key in values
    }


def _slope_of(level, value, error):
    """Slope of a straight line through values (windows, ...) at levels, weighted with errors."""
    level = level.reshape(-1, *[1] * (value.ndim - 1))
    least = 1e-12 * np.abs(value).max(axis=0) + 1e-100
    weight = 1.0 / np.maximum(error, least) ** 2
    weight = weight / weight.sum(axis=0)
    away = level - (weight * level).sum(axis=0)
    square = (weight * away**2).sum(axis=0)
    return (weight * away * value).sum(axis=0) / np.where(square > 0.0, square, np.inf)


def heat_share(problem, totals):
    """The lattice's share of I V with its error, and the bias that noise leaves once there are
    enough windows; None where there is no power or nobody arrived."""
    if problem.window.linear:
        return None

    def share(t):
        with np.errstate(divide="ignore", invalid="ignore"):
            return {"share": t["heat"].sum() / (t["current"] * problem.window.mu_left_meV)}

    sums = {key: totals.sums[key] for key in ("heat", "current")}
    value, error = jackknife(share, {"histories": totals.histories.astype(float)} | sums)
    if not np.isfinite(value["share"]):
        return None
    bias = noise_bias(problem, totals, share, value).get("share")
    return Estimate(
        float(value["share"]), float(error["share"]), None if bias is None else float(bias)
    )
