"""Rounds with frozen fields: from a Problem with relaxation to the totals of its batches.

What particles meet (potentials, temperatures, occupations) comes from the rounds before. Potentials
and temperatures belong to each batch, so that batches stay independent and their spread is the
whole error; occupations, which enter the phonon rates, are shared, because their noise leaves a
bias that falls with all histories.

Rounds come in windows; the histories of a round double from window to window. Fields are averages
over all rounds, weighted with histories and with the number of the round, so that the start is
forgotten. Results come from the last two windows; the drift between them tells convergence, and
the last three, whose fields are of three noise levels, tell the bias that noise leaves.
"""

import time
from dataclasses import dataclass, field

import numpy as np
from joblib import Parallel, delayed
from numba import njit

from carriersim.constants import BOLTZMANN_MEV_PER_K
from carriersim.engine import streams, tallies
from carriersim.engine import wander as w
from carriersim.engine.flights import DONE
from carriersim.engine.mechanisms import (
    FINE,
    KEPT_CARRIERS,
    OVERSHOOT,
    RANDOM_CARRIERS,
    heat_strength,
    reference,
    temperatures,
)
from carriersim.engine.solve import EVENT_LIMIT, NothingDone, StopRequest, new_stream, offset_of

FIRST_SIZE = 96  # histories of each batch in the rounds of the first window
FIRST_SIZE_PHONONS = 512  # with phonons, whose pair source amplifies noise
APPROACH_ROUNDS, APPROACH_GAIN = 40, 0.2  # with phonons: moving average from the elastic field
BLOCK_PATHS = 0.4  # of the phonons' path: frozen occupations are averaged over such blocks
ROUNDS = 6  # of each window
FIRST_WINDOWS = 3  # before a result is looked at
MOST_WINDOWS = 14
DRIFT_SIGMA = 3.5  # largest drift between the last two windows, in standard errors
SUMS = ("current", "energy", "arrivals", "departures", "cells", "heat", "probe_heat", "turned")


@dataclass
class Window:
    """Sums over the rounds of one window, leading axis = batches: (histories x value)."""

    histories: np.ndarray
    sums: dict
    field_sum: np.ndarray
    field_square: np.ndarray
    samples: int = 0
    noise: float = 0.0  # histories-weighted mean of 1/(histories behind the frozen fields)


@dataclass
class Fields:
    """Running averages that the next round meets."""

    cells: np.ndarray  # (batches, C, 2, 3) number, energy, kept energy, right and left
    probes: np.ndarray  # (batches, K) meV
    occupation: np.ndarray  # (2, B, C) deviations
    weight: float = 0.0
    square: float = 0.0  # sum of weight^2 / histories: noise of the average is square / weight^2

    def noise(self):
        return self.square / self.weight**2 if self.weight else np.inf


@dataclass
class RelaxedTotals:
    """What a relaxing run found; `sums` of the last two windows, see SUMS."""

    histories: np.ndarray
    sums: dict
    field_sum: np.ndarray
    field_square: np.ndarray
    samples: int
    windows: list = field(default_factory=list)
    flights: int = 0
    all_histories: int = 0
    rounds: int = 0
    seconds: float = 0.0
    stopped_by: str = ""
    converged: bool = False
    residual: float | None = None
    drift: str = ""  # which field drifts most and where, in words
    fields: Fields | None = None  # what the last round has left


def merge(windows):
    """Sums of several windows as one."""
    return Window(
        sum(x.histories for x in windows),
        {key: sum(x.sums[key] for x in windows) for key in windows[0].sums},
        sum(x.field_sum for x in windows),
        sum(x.field_square for x in windows),
        sum(x.samples for x in windows),
    )


def empty_tally(problem):
    """A tally at zero for one batch in one round."""
    nodes, cells = problem.nodes_nm.size, problem.cells
    return w.Tally(
        bins=np.zeros((problem.relaxed.axis.bins, cells, 4)),
        cells=np.zeros((cells, 12)),
        arrivals=np.zeros((nodes, 2)),
        departures=np.zeros((nodes, 2)),
        heat=np.zeros(cells),
        probe_heat=np.zeros(nodes),
        turned=np.zeros(cells),
        scalars=np.zeros(4),
    )


@njit(cache=True, nogil=True, error_model="numpy")
def spread_bins(bins, scale, field_):
    """Track lengths of every bin and cell from flight ends, times scale, into field_ (2, B, C)."""
    for b in range(bins.shape[0]):
        right = left = 0.0
        for c in range(bins.shape[1] - 1, -1, -1):
            field_[0, b, c] = scale * (right + bins[b, c, 1])
            field_[1, b, c] = scale * (left + bins[b, c, 3])
            right += bins[b, c, 0]
            left += bins[b, c, 2]


def spread_cells(cells):
    """Track lengths from flight ends, (C, 12) -> (C, 2, 3)."""
    ends = cells.reshape(-1, 2, 3, 2)
    behind = np.cumsum(ends[::-1, ..., 0], axis=0)[::-1]
    return behind - ends[..., 0] + ends[..., 1]


class Rounds:
    """Everything that stays the same from round to round."""

    def __init__(self, problem, workers, stop, tangent=False, frozen_fields=None):
        self.problem, self.relaxed = problem, problem.relaxed
        self.mechanisms = problem.relaxed.mechanisms
        self.workers, self.stop = workers, stop
        self.tangent = tangent
        simulation = problem.scenario.simulation
        self.batches = simulation.batches
        purpose = streams.TANGENT if tangent else streams.TRANSPORT
        self.streams = [new_stream(simulation.seed, b, purpose) for b in range(self.batches)]
        self.offsets = [offset_of(simulation.seed, b) for b in range(self.batches)]
        self.done = np.zeros(self.batches, np.int64)
        self.setting = self.relaxed.setting._replace(tangent=tangent)
        self.widths = np.diff(problem.cell_edges_nm)
        shape = (2, self.relaxed.axis.bins, problem.cells)
        self.fields = frozen_fields or Fields(
            np.zeros((self.batches, problem.cells, 2, 3)),
            np.zeros((self.batches, problem.nodes_nm.size)),
            np.zeros(shape),
        )
        self.fine = reference(self.relaxed.axis, problem.scenario.bath_temperature_K, FINE)
        self.pairs = _no_pairs()
        self.pair_strength = 0.0

    def prepare(self):
        """What all batches share in a round: occupations and the phonon pair source."""
        phonons = self.relaxed.mechanisms
        f_right = self.relaxed.reference[None, :, None]
        deviation = np.clip(self.coarse(), -OVERSHOOT - f_right, 1.0 + OVERSHOOT - f_right)
        self.occupation = deviation
        if phonons.phonon_meV.size and self.setting.newton and not self.problem.window.linear:
            self.pairs, strength = phonon_pairs(deviation, phonons, self.relaxed.axis, self.widths)
            self.pair_strength = self.setting.newton * strength

    def coarse(self):
        """Frozen deviations averaged over blocks of cells a fraction of the shortest path long.

        Finer detail is noise: phonon rates act over a path.
        """
        phonons = self.relaxed.mechanisms
        field_ = self.fields.occupation
        if not phonons.phonon_meV.size:
            return field_
        longest = BLOCK_PATHS / phonons.phonon_rate.max()
        starts = []
        for first, count in zip(
            self.problem.geometry.first_cell, self.problem.geometry.cells, strict=True
        ):
            merged = max(1, int(longest / self.widths[first]))
            starts.extend(range(first, first + count, merged))
        sums = np.add.reduceat(field_, starts, axis=-1)
        lengths = np.diff([*starts, field_.shape[-1]])
        return np.repeat(sums / lengths, lengths, axis=-1)

    def frozen(self, batch):
        """Frozen fields of one batch."""
        cells = self.fields.cells[batch]
        number = cells[..., 0]
        energy = cells[..., 2 if self.setting.exact_energy else 1]
        mean = 0.5 * (cells[:, 0] + cells[:, 1])
        bath = self.problem.scenario.bath_temperature_K
        linear = self.problem.window.linear
        kelvin = np.full((3, number.shape[0]), bath)
        mu = np.zeros((3, number.shape[0]))
        if not linear:
            mu[:2], mu[2] = number.T, mean[:, 0]
            mean_energy = mean[:, 2 if self.setting.exact_energy else 1]
            kelvin[:2] = temperatures(number, energy, bath).T
            kelvin[2] = temperatures(mean[:, 0], mean_energy, bath)
        probes = self.fields.probes[batch]
        return w.Frozen(
            mu=mu,
            temperature=BOLTZMANN_MEV_PER_K * kelvin,
            probe_mu=np.zeros_like(probes) if linear else probes.copy(),
            probe_kT=BOLTZMANN_MEV_PER_K * self.relaxed.probe_kelvin,
            occupation=self.occupation,
            reference=self.fine,
        ), kelvin

    def sources(self, kelvin):
        """Sources of one batch and their total strength in meV (or per unit of the bias)."""
        window, mechanisms = self.problem.window, self.relaxed.mechanisms
        bath = self.problem.scenario.bath_temperature_K
        strength = np.zeros(w.SOURCES)
        probe = np.zeros(self.relaxed.probe_kelvin.size)
        carriers = np.zeros_like(kelvin)
        strength[w.LEFT_NUMBER] = 1.0 if window.linear or self.tangent else abs(window.mu_left_meV)
        if not (window.linear or self.tangent):
            strength[w.LEFT_HEAT] = heat_strength(window.temperature_left_K, bath)
            strength[w.RIGHT_HEAT] = heat_strength(window.temperature_right_K, bath)
            taken = self.relaxed.probes.from_left + self.relaxed.probes.from_right
            probe = taken * heat_strength(self.relaxed.probe_kelvin, bath)
            carriers = heat_strength(kelvin, bath) * self.widths
            carriers[:2] *= mechanisms.rates[KEPT_CARRIERS]
            carriers[2] *= 2.0 * mechanisms.rates[RANDOM_CARRIERS]
            strength[w.PROBE_HEAT] = probe.sum()
            strength[w.CARRIER_HEAT] = carriers.sum()
            strength[w.PHONON_PAIR] = self.pair_strength
        return w.Sources(
            share=_cumulative(strength),
            probe=_cumulative(probe),
            carriers=_cumulative(carriers.ravel()),
            **self.pairs,
        ), strength.sum()

    def run(self, batch, histories):
        """One batch of a round: dict of values, or None if it was stopped."""
        frozen, kelvin = self.frozen(batch)
        sources, total = self.sources(kelvin)
        tally = empty_tally(self.problem)
        relaxed = self.relaxed
        status = w.wander(
            int(self.done[batch]), histories, self.offsets[batch], self.problem.geometry,
            relaxed.tables, self.mechanisms, relaxed.probes, frozen, sources, self.setting,
            self.streams[batch], tally, self.stop.flag, EVENT_LIMIT,
        )  # fmt: skip
        if status != DONE:
            return None
        scale = total / histories
        field_ = np.empty((2, relaxed.axis.bins, self.problem.cells))
        spread_bins(tally.bins, scale / relaxed.axis.step_meV, field_)
        scalars = tally.scalars
        return {
            "flights": int(scalars[w.FLIGHTS]),
            "field": field_,
            "current": scale * scalars[w.OUT_RIGHT],
            "energy": scale * np.array([scalars[w.ENERGY_LEFT], scalars[w.ENERGY_RIGHT]]),
            "arrivals": scale * tally.arrivals,
            "departures": scale * tally.departures,
            "cells": scale * self.lengths(tally.cells),
            "heat": scale * tally.heat,
            "probe_heat": scale * tally.probe_heat,
            "turned": scale * tally.turned,
        }

    def lengths(self, cells):
        """Track lengths (C, 2, 3); without carriers events kept energies are the energies."""
        lengths = spread_cells(cells)
        if not self.setting.carriers:
            lengths[..., 2] = lengths[..., 1]
        return lengths

    def one_round(self, size, pool, window):
        """Run a round, add it to the window and to the fields; (flights, whether it is whole)."""
        self.prepare()
        if self.workers == 1:
            results = (self.run(b, size) for b in range(self.batches))
        else:
            results = pool(delayed(self.run)(b, size) for b in range(self.batches))
        field_sum, field_square = np.zeros_like(window.field_sum), np.zeros_like(window.field_sum)
        kept, complete = [], True
        for result in results:
            if result is None:
                complete = False
            elif complete:
                tallies.add_field(size * result.pop("field"), size, field_sum, field_square)
                kept.append(result)
        if not complete:
            return 0, False
        self.done += size
        values = {key: np.array([r[key] for r in kept]) for key in SUMS}
        histories = size * self.batches
        window.noise += self.fields.noise() * histories if self.fields.weight else 0.0
        window.histories = window.histories + size
        for key in SUMS:
            window.sums[key] = window.sums[key] + size * values[key]
        window.field_sum += field_sum
        window.field_square += field_square
        window.samples += self.batches
        return (sum(r["flights"] for r in kept), values, field_sum / histories), True

    def learn(self, values, occupation, histories, gain=None, number=1):
        """Let the running averages take in a round, with a given gain or as a growing average."""
        fields = self.fields
        weight = histories * number
        if gain is None:
            gain = weight / (fields.weight + weight)
            fields.weight += weight
            fields.square += weight**2 / histories
        else:  # as if this many histories stood behind the average
            fields.weight = histories / gain
            fields.square = histories * 0.5 / gain
        fields.cells = fields.cells + gain * (values["cells"] - fields.cells)
        taken = self.relaxed.probes.from_left, self.relaxed.probes.from_right
        total = np.maximum(taken[0] + taken[1], 1e-300)
        arrivals = values["arrivals"]
        reading = (taken[0] * arrivals[..., 0] + taken[1] * arrivals[..., 1]) / total
        fields.probes = fields.probes + gain * (reading - fields.probes)
        fields.occupation = fields.occupation + gain * (occupation[:2] - fields.occupation)


def _cumulative(strength):
    total = strength.sum()
    if total == 0.0:
        return np.ones(max(strength.size, 1))
    result = np.cumsum(strength) / total
    # Rounding must not send a draw to an entry of no strength at the end.
    result[np.flatnonzero(strength)[-1] :] = 1.0
    return result


def _no_pairs():
    return {
        "pair": np.ones(1),
        "pair_place": np.zeros(1, np.int32),
        "pair_bin": np.zeros(1, np.int32),
        "pair_kind": np.zeros(1, np.int8),
        "pair_phonon": np.zeros(1, np.int8),
    }


def phonon_pairs(deviation, phonons, axis, widths_nm):
    """Newton's source of pairs, d_upper d_lower / (2 path), as a list to draw from."""
    strengths, places, bins, kinds, which = [], [], [], [], []
    for k, energy in enumerate(phonons.phonon_meV):
        steps = energy / axis.step_meV
        shift = steps - np.floor(steps + 1e-9)
        shift = 0.0 if shift < 1e-9 else shift
        for late in (0, 1) if shift else (0,):
            above = int(np.floor(steps + 1e-9)) + late
            part = (shift if late else 1.0 - shift) * axis.step_meV
            if above >= axis.bins:
                continue
            for upper in (0, 1):
                for lower in (0, 1):
                    product = deviation[upper, above:] * deviation[lower, : axis.bins - above]
                    strength = product * (0.5 * phonons.phonon_rate[k] * part * widths_nm)
                    bin_, cell = np.nonzero(strength)
                    value = strength[bin_, cell]
                    strengths.append(np.abs(value))
                    places.append(cell)
                    bins.append(bin_)
                    kinds.append(upper + 2 * lower + 4 * (value < 0.0) + 8 * late)
                    which.append(np.full(value.size, k))
    strength = np.concatenate(strengths) if strengths else np.zeros(0)
    if strength.sum() == 0.0:
        return _no_pairs(), 0.0
    return {
        "pair": _cumulative(strength),
        "pair_place": np.concatenate(places).astype(np.int32),
        "pair_bin": np.concatenate(bins).astype(np.int32),
        "pair_kind": np.concatenate(kinds).astype(np.int8),
        "pair_phonon": np.concatenate(which).astype(np.int8),
    }, float(strength.sum())


def _empty_window(problem, batches):
    shape = (3, problem.relaxed.axis.bins, problem.cells)
    zeros = {key: 0.0 for key in SUMS}
    return Window(np.zeros(batches, np.int64), zeros, np.zeros(shape), np.zeros(shape))


def relax(problem, goal, workers=1, stop=None, progress=None):
    """Run until the goal is met and the fields have converged; returns RelaxedTotals.

    Arguments as for solve.solve. Raises NothingDone if no window was completed.
    """
    stop = stop or StopRequest()
    rounds = Rounds(problem, workers, stop)
    begin = time.perf_counter()
    windows, number, flights = [], 0, 0
    size = FIRST_SIZE_PHONONS if problem.relaxed.mechanisms.phonon_meV.size else FIRST_SIZE
    stopped_by = ""
    with Parallel(n_jobs=workers, prefer="threads", return_as="generator") as pool:
        if problem.relaxed.mechanisms.phonon_meV.size and not problem.window.linear:
            if not _approach(rounds, size, pool):
                raise NothingDone(f"stopped before the first window ({stop.reason})")
        while not stopped_by:
            window = _empty_window(problem, rounds.batches)
            for _ in range(ROUNDS):
                outcome, whole = rounds.one_round(size, pool, window)
                if not whole:
                    stopped_by = stop.reason or "event_limit"
                    break
                made, values, occupation = outcome
                flights += made
                number += 1
                rounds.learn(values, occupation, size * rounds.batches, number=number)
            if stopped_by:
                break
            windows.append(window)
            totals = _totals(windows, flights, number, time.perf_counter() - begin)
            _judge(problem, totals, goal, progress)
            stopped_by = totals.stopped_by
            size *= 2
    if len(windows) < 2:
        raise NothingDone(f"stopped before two windows were complete ({stopped_by})")
    totals = _totals(windows, flights, number, time.perf_counter() - begin)
    _judge(problem, totals, goal, None)
    totals.stopped_by = stopped_by
    totals.fields = rounds.fields
    return totals


def _approach(rounds, size, pool):
    """Bring the fields near the solution, from the elastic field; False if it was stopped."""
    full = rounds.relaxed.mechanisms
    rounds.mechanisms = full._replace(
        rates=np.zeros(4), phonon_bound=np.zeros_like(full.phonon_bound), total=0.0
    )
    for number in range(APPROACH_ROUNDS + 1):
        scratch = _empty_window(rounds.problem, rounds.batches)
        outcome, whole = rounds.one_round(size, pool, scratch)
        if not whole:
            return False
        _, values, occupation = outcome
        gain = 1.0 if number == 0 else APPROACH_GAIN
        rounds.learn(values, occupation, size * rounds.batches, gain)
        rounds.mechanisms = full
    return True


def _totals(windows, flights, rounds, seconds):
    last = merge(windows[-2:])
    return RelaxedTotals(
        histories=last.histories,
        sums=last.sums,
        field_sum=last.field_sum,
        field_square=last.field_square,
        samples=last.samples,
        windows=windows,
        flights=flights,
        all_histories=int(sum(x.histories.sum() for x in windows)),
        rounds=rounds,
        seconds=seconds,
    )


def _judge(problem, totals, goal, progress):
    """Set stopped_by, converged and residual."""
    if len(totals.windows) < FIRST_WINDOWS:
        return
    current = totals.sums["current"] / totals.histories
    error = current.std(ddof=1) / np.sqrt(current.size) / abs(current.mean())
    totals.residual, totals.drift = drift(problem, totals.windows)
    settled = totals.residual <= DRIFT_SIGMA
    if progress is not None:
        progress.update(totals.all_histories, error, goal.relative_error, totals.seconds)
    if goal.relative_error and error <= goal.relative_error and settled:
        totals.stopped_by, totals.converged = "relative_error", True
    elif goal.histories and totals.all_histories >= goal.histories:
        totals.stopped_by = "histories"
        totals.converged = settled and not goal.relative_error
    elif goal.max_seconds and totals.seconds >= goal.max_seconds:
        totals.stopped_by = "max_seconds"
        totals.converged = settled and not goal.relative_error
    elif len(totals.windows) >= MOST_WINDOWS:
        totals.stopped_by = "windows"


def drift(problem, windows):
    """Largest drift between the last two windows in standard errors, and what drifts, in words."""
    last, before = windows[-1], windows[-2]
    x = problem.cell_edges_nm
    centres = 0.5 * (x[1:] + x[:-1])

    def means(window):
        n = window.histories.astype(float)
        cells = window.sums["cells"] / n[:, None, None, None]
        blocks = np.array_split(np.arange(centres.size), min(8, centres.size))
        coarse = np.array([cells[:, b].mean(axis=1) for b in blocks])  # (8, batches, 2, 3)
        heat = np.array([window.sums["heat"][:, b].sum(axis=1) / n for b in blocks])
        return {
            "the current": (window.sums["current"] / n)[None],
            "mu+": coarse[..., 0, 0],
            "mu-": coarse[..., 1, 0],
            "the energy of right-moving carriers": coarse[..., 0, 1],
            "the energy of left-moving carriers": coarse[..., 1, 1],
            "the lattice power": heat,
        }, [centres[b].mean() for b in blocks]

    (new, places), (old, _) = means(last), means(before)
    worst, words = 0.0, ""
    count = sum(value.shape[0] for value in new.values())
    for name, value in new.items():
        change = value.mean(axis=1) - old[name].mean(axis=1)
        error = np.sqrt(
            (value.var(axis=1, ddof=1) + old[name].var(axis=1, ddof=1)) / value.shape[1]
        )
        size = np.abs(change) / np.maximum(error, 1e-9 * np.abs(value).max() + 1e-300)
        if size.max() > worst:
            worst = float(size.max())
            place = "" if name == "the current" else f" near {places[int(size.argmax())]:.4g} nm"
            words = f"{name}{place} (largest of {count})"
    return worst, words
