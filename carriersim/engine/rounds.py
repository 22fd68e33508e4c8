"""Rounds of batches with frozen fields, and the running averages that the fields come from."""

from dataclasses import dataclass
from itertools import chain

import numpy as np
from joblib import delayed
from numba import njit

from carriersim.engine import sources as w
from carriersim.engine import streams
from carriersim.engine.flights import DONE, TOO_MANY_EVENTS
from carriersim.engine.pairs import no_pairs, phonon_pairs
from carriersim.engine.planes import Walls
from carriersim.engine.residual import cumulative
from carriersim.engine.solve import (
    EVENT_LIMIT,
    chunks,
    offset_of,
    several,
    stream_of,
    too_many,
)
from carriersim.engine.wander import wander

FIRST_SIZE = 96  # histories of each batch in the rounds of the first window, at least
FEW_EVENTS, MOST_FACTOR = 4.0, 16.0  # more of them, up to this factor, when more events feed back
TRUST = 3.0  # rounds that a trial occupation counts for
# Occupations get their errors from groups of batches: all batches would take too much memory, and
# rounds of one batch share its fields, so that they err together.
GROUPS = 16
MOST_PAIRS = 0.5  # strength of the pair source, over that of the residual
BLOCK_PATHS = 0.4  # of the phonons' path: frozen occupations are averaged over such blocks
NO_WALLS = Walls(1e200, 1.0)  # a second pair that nobody meets: one compiled variant for both
RAY_SUMS = ("densities", "lost", "views")  # only where carriers have directions
NO_SHAPES = (0, 4), (0,), (0, 2, 0)
SUMS = ("current", "energy", "arrivals", "departures", "cells", "heat", "probe_heat", "turned")


@dataclass
class Window:
    """Sums over the rounds of one window, leading axis = batches: (histories x value)."""

    histories: np.ndarray
    sums: dict
    field_sum: np.ndarray  # (2, B, C)
    # (GROUPS, 2, B, C) the same for each group of batches; None once it isn't needed any more.
    groups: np.ndarray | None
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


def first_size(problem):
    """Histories of each batch in the first rounds; noise of a field comes back at every event."""
    events = problem.nodes_nm[-1] * problem.relaxed.mechanisms.rates.sum()
    return int(FIRST_SIZE * min(max(events / FEW_EVENTS, 1.0), MOST_FACTOR))


def sums_of(problem):
    """Names of what is added up."""
    return SUMS if problem.space is None else SUMS + RAY_SUMS


def empty_window(problem, batches):
    shape = (2, problem.relaxed.axis.bins, problem.cells)
    groups = np.zeros((min(GROUPS, batches), *shape), np.float32)
    return Window(
        np.zeros(batches, np.int64), {key: 0.0 for key in sums_of(problem)}, np.zeros(shape), groups
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
        scalars=np.zeros(6),
        **_direction_tallies(problem),
    )


def _direction_tallies(problem):
    nodes, space = problem.nodes_nm.size, problem.space
    if space is None:
        return {key: np.zeros(shape) for key, shape in zip(RAY_SUMS, NO_SHAPES, strict=True)}
    shapes = (nodes, 4), (nodes - 1,), (space.view_nodes.size, 2, space.classes)
    return {key: np.zeros(shape) for key, shape in zip(RAY_SUMS, shapes, strict=True)}


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


@njit(cache=True, error_model="numpy")
def add_field(field_, histories, total, group):
    """Add a batch's field (2, B, C), times its histories, to a round's sum and to its group's."""
    for side in range(2):
        for b in range(field_.shape[1]):
            for c in range(field_.shape[2]):
                value = histories * field_[side, b, c]
                total[side, b, c] += value
                group[side, b, c] += value


def spread_cells(cells):
    """Track lengths from flight ends, (C, 12) -> (C, 2, 3)."""
    ends = cells.reshape(-1, 2, 3, 2)
    behind = np.cumsum(ends[::-1, ..., 0], axis=0)[::-1]
    return behind - ends[..., 0] + ends[..., 1]


class Rounds:
    """Everything that stays the same from round to round.

    deviation: what particles stand for, see deviation.py.
    """

    def __init__(self, problem, workers, stop, deviation):
        self.problem, self.relaxed, self.deviation = problem, problem.relaxed, deviation
        self.workers, self.stop = workers, stop
        simulation = problem.scenario.simulation
        self.batches = simulation.batches
        purpose = streams.TANGENT if deviation.tangent else streams.TRANSPORT
        seed = simulation.seed
        self.streams = [stream_of(problem, seed, b, purpose) for b in range(self.batches)]
        self.offsets = [offset_of(simulation.seed, b) for b in range(self.batches)]
        self.done = np.zeros(self.batches, np.int64)
        self.setting = self.relaxed.setting
        if deviation.tangent:
            self.setting = self.setting._replace(tangent=True, left_sign=1.0)
        self.widths = np.diff(problem.cell_edges_nm)
        self.oblique = 1.0 if problem.space is None else problem.space.oblique
        self.met = (None, None, None)  # planes and two pairs of walls
        if problem.space is not None:
            first, second = problem.space.walls
            if first is not None and second is None:
                second = NO_WALLS
            self.met = (problem.space.planes, first, second)
        self.fields = Fields(
            np.zeros((self.batches, problem.cells, 2, 3)),
            np.zeros((self.batches, problem.nodes_nm.size)),
            np.zeros((2, self.relaxed.axis.bins, problem.cells)),
        )
        deviation.start(self.fields)
        if deviation.part:
            self.fields.weight = TRUST * first_size(problem) * self.batches
        self.pairs, self.pair_strength = no_pairs(), 0.0
        self.trouble = ""  # which carrier went on for ever, and where
        self.strength = 0.0  # of all sources in the last round, in meV

    def prepare(self):
        """What all batches share in a round: the source of pairs that the linear form leaves out.

        It is quadratic in what the trial occupation lacks, which earlier rounds have told.
        """
        phonons = self.relaxed.mechanisms
        if self.deviation.part and phonons.phonon_meV.size:
            lacking = self.coarse(self.fields.occupation - self.deviation.part["field"])
            pairs, strength = phonon_pairs(
                lacking, phonons, self.relaxed.axis, self.widths * self.oblique
            )
            # Beyond this share it is noise squared, which would breed; what the trial occupation
            # really lacks is a thousandth, and its square nothing.
            if strength <= MOST_PAIRS * sum(self.deviation.emitted):
                self.pairs, self.pair_strength = pairs, strength
            else:
                self.pairs, self.pair_strength = no_pairs(), 0.0

    def coarse(self, field_):
        """A field averaged over blocks of cells a fraction of the shortest path long.

        Finer detail is noise: phonon rates act over a path.
        """
        phonons = self.relaxed.mechanisms
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

    def sources(self, warmer):
        """Sources of one batch and their total strength in meV (or per unit of the bias)."""
        strength, probe, carriers = self.deviation.emitters(warmer)
        strength[w.PHONON_PAIR] = self.pair_strength
        return w.Sources(
            share=cumulative(strength),
            probe=cumulative(probe),
            carriers=cumulative(carriers.ravel()),
            **self.pairs,
            strengths=self.deviation.strengths,
        ), strength.sum()

    def run(self, batch, histories):
        """One batch of a round: dict of values, or None if it was stopped."""
        frozen, warmer = self.deviation.frozen(self.fields.cells[batch], self.fields.probes[batch])
        sources, total = self.sources(warmer)
        tally = empty_tally(self.problem)
        relaxed = self.relaxed
        status = wander(
            int(self.done[batch]), histories, self.offsets[batch], self.problem.geometry,
            *self.met, relaxed.tables, self.deviation.mechanisms, relaxed.probes, frozen,
            self.deviation.trial, sources, self.setting, self.streams[batch], tally,
            self.stop.flag, EVENT_LIMIT,
        )  # fmt: skip
        if status == TOO_MANY_EVENTS:
            number, node = (int(tally.scalars[k]) for k in (w.HISTORY, w.NODE))
            self.trouble = too_many(number, batch, self.problem.nodes_nm[node])
        if status != DONE:
            return None
        scale = total / max(histories, 1)
        field_ = np.empty((2, relaxed.axis.bins, self.problem.cells))
        spread_bins(tally.bins, scale / self.oblique / relaxed.axis.step_meV, field_)
        scalars = tally.scalars
        values = {
            "flights": int(scalars[w.FLIGHTS]),
            "strength": total,
            "field": field_,
            "current": scale * scalars[w.OUT_RIGHT],
            "energy": scale * np.array([scalars[w.ENERGY_LEFT], scalars[w.ENERGY_RIGHT]]),
            "arrivals": scale * tally.arrivals,
            "departures": scale * tally.departures,
            "cells": scale / self.oblique * self.lengths(tally.cells),
            "heat": scale * tally.heat,
            "probe_heat": scale * tally.probe_heat,
            "turned": scale * tally.turned,
        }
        if self.problem.space is not None:
            values |= {
                "densities": scale / self.oblique * tally.densities,
                "lost": scale * tally.lost,
                "views": scale * tally.views,
            }
        for key, value in self.deviation.part.items():
            values[key] = values[key] + value
        return values

    def lengths(self, cells):
        """Track lengths (C, 2, 3); without carriers events kept energies are the energies."""
        lengths = spread_cells(cells)
        if not self.setting.carriers:
            lengths[..., 2] = lengths[..., 1]
        return lengths

    def one_round(self, size, pool, window):
        """Run a round and add it to the window; None if it was stopped.

        Returns flights, values by batch and the mean field, from which `learn` takes the next
        round's fields.
        """
        self.prepare()
        tasks = [(b, size) for b in range(self.batches)]
        if self.workers == 1:
            results = (self.run(*task) for task in tasks)
        else:
            parts = (tasks[chunk] for chunk in chunks(len(tasks), self.workers))
            results = chain.from_iterable(pool(delayed(several)(self.run, part) for part in parts))
        field_sum = np.zeros_like(window.field_sum)
        kept, complete = [], True
        for result in results:
            if result is None:
                complete = False
            elif complete:
                group = window.groups[len(kept) % len(window.groups)]
                add_field(result.pop("field"), float(size), field_sum, group)
                kept.append(result)
        if not complete:
            return None
        self.done += size
        self.strength = max(r["strength"] for r in kept)
        sums = sums_of(self.problem)
        values = {key: np.array([r[key] for r in kept]) for key in sums}
        histories = size * self.batches
        window.noise += self.fields.noise() * histories if self.fields.weight else 0.0
        window.histories = window.histories + size
        for key in sums:
            window.sums[key] = window.sums[key] + size * values[key]
        window.field_sum += field_sum
        return sum(r["flights"] for r in kept), values, field_sum / histories

    def learn(self, values, occupation, histories, number):
        """Let the running averages take in a round of some histories, the number-th."""
        fields = self.fields
        weight = histories * number
        fields.weight += weight
        fields.square += weight**2 / histories
        gain = weight / fields.weight
        fields.cells = fields.cells + gain * (values["cells"] - fields.cells)
        taken = self.relaxed.probes.from_left, self.relaxed.probes.from_right
        total = np.maximum(taken[0] + taken[1], 1e-300)
        arrivals = values["arrivals"]
        reading = (taken[0] * arrivals[..., 0] + taken[1] * arrivals[..., 1]) / total
        fields.probes = fields.probes + gain * (reading - fields.probes)
        fields.occupation = fields.occupation + gain * (occupation - fields.occupation)


def compile_for(rounds):
    """Load or compile the kernels that these rounds need, without a history."""
    rounds.prepare()
    rounds.run(0, 0)
