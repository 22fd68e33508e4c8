"""The particle kernel with relaxation, one dimension.

A particle stands for a piece of the deviation from a known occupation (see deviation.py), of
either sign; its energy changes in events. Frozen fields (potentials, temperatures) come from
earlier rounds. Positions count cell widths inside a segment; energies are exact, bins only for the
tallies.
"""

from typing import NamedTuple

import numpy as np
from numba import njit

from carriersim.engine.events import GOLDEN, passes_at, phonon_shift, varying_rate
from carriersim.engine.flights import DONE, STOPPED, TOO_MANY_EVENTS
from carriersim.engine.mechanisms import FINE, KEPT_BATH, RANDOM_BATH, RANDOM_CARRIERS
from carriersim.engine.residual import Strengths, at_node, deviation, inside
from carriersim.engine.streams import (
    BLOCK,
    fill_exponentials,
    fill_logistics,
    fill_uniforms,
    minus_log,
)

# What a source emits; the order of Sources.share.
(
    LEFT_NUMBER,
    LEFT_HEAT,
    RIGHT_HEAT,
    PROBE_HEAT,
    CARRIER_HEAT,
    PHONON_PAIR,
    TRIAL_INSIDE,
    TRIAL_NODE,
) = range(8)
SOURCES = 8
# Rows of Tally.scalars.
OUT_RIGHT, ENERGY_LEFT, ENERGY_RIGHT, FLIGHTS = range(4)
# What happens to a particle; BORN: it starts its first flight.
NOTHING, CHANGED, GONE, BORN = range(4)
ONE, TWO, THREE, FOUR, FIVE = (np.uint64(n) for n in range(1, 6))


class Base(NamedTuple):
    """Potentials and temperatures of the known occupation: the reference, or a trial; in meV."""

    mu: np.ndarray  # (3, C) right-moving, left-moving, mean; in the middle of cells
    mu_step: np.ndarray  # (3, C) its change across each cell
    kT: np.ndarray  # (3, C)
    probe_mu: np.ndarray  # (K,)
    probe_kT: np.ndarray  # (K,)


class Frozen(NamedTuple):
    """Fields of earlier rounds; C cells, B bins, K nodes."""

    mu: np.ndarray  # (3, C) right-moving, left-moving, mean, in meV; in the middle of cells
    mu_step: np.ndarray  # (3, C) its change across each cell
    kT: np.ndarray  # (3, C) of the carriers
    probe_mu: np.ndarray  # (K,)
    probe_kT: np.ndarray  # (K,) of what probes emit
    base: Base  # the same of what particles are the deviation from
    reference: np.ndarray  # (B FINE,) for phonons without a trial


class Sources(NamedTuple):
    """Where particles come from; shares are cumulative and end at 1."""

    share: np.ndarray  # (SOURCES,)
    probe: np.ndarray  # (K,) over nodes
    carriers: np.ndarray  # (3 C,) over direction (right, left, random) and cell
    pair: np.ndarray  # (n,) over the phonon pairs listed below
    pair_place: np.ndarray  # (n,) int32: cell
    pair_bin: np.ndarray  # (n,) int32: bin of the lower state
    pair_kind: np.ndarray  # (n,) int8: bits 0 upper leftward, 1 lower leftward, 2 negative, 3 late
    pair_phonon: np.ndarray  # (n,) int8
    strengths: Strengths | None  # of a trial's residual


class Setting(NamedTuple):
    """Numbers of a run that the kernel needs."""

    mu_left: float
    left_sign: float  # of the number that the left contact emits
    left_kT: float
    right_kT: float
    bath_kT: float
    first_meV: float
    step_meV: float
    exact_energy: bool  # no event depends on energy: kept energies are exact
    carriers: bool  # carriers events happen, so kept energies differ from energies
    tangent: bool  # follow a small change of the bias instead of the deviation itself


class Tally(NamedTuple):
    """What the kernel adds to."""

    bins: np.ndarray  # (B, C, 4): right (ends, places), left (ends, places)
    # (C, 12): for right, then for left: number, energy, and energy that carriers events keep, each
    # as (signed number of flight ends, sum of their places).
    cells: np.ndarray
    arrivals: np.ndarray  # (K, 2) signed arrivals from the left, from the right
    departures: np.ndarray  # (K, 2) signed departures to the right, to the left
    heat: np.ndarray  # (C,) energy given to the lattice
    probe_heat: np.ndarray  # (K,)
    turned: np.ndarray  # (C,) directed flux destroyed by phonons
    scalars: np.ndarray  # (4,)


@njit(cache=True, error_model="numpy", forceinline=True)
def _uniform(uniforms, lanes, position):
    """One uniform number in (0, 1]."""
    q = position[1]
    if q == BLOCK:
        fill_uniforms(lanes, uniforms)
        q = 0
    position[1] = q + 1
    return uniforms[q] + 1.1102230246251565e-16


@njit(cache=True, error_model="numpy", forceinline=True)
def _box(base, mu, kT, u, v):
    """Energy of the deviation F(mu) - F(base): uniform between the potentials, smeared by kT."""
    energy = base + (mu - base) * u
    if kT > 0.0:
        energy += kT * minus_log((1.0 - v) / v)
    return energy


@njit(cache=True, error_model="numpy", forceinline=True)
def _heat_energy(kT, bath_kT, uniforms, lanes, position):
    """Distance from mu of a member of F(mu, T) - F(mu, T_b).

    The difference is an integral over temperatures between the two of z sech^2(z/2)/4, z = e/kT:
    a gamma variable, accepted with probability 1/(1 + exp(-z))^2 (ln 2 on average).
    """
    between = bath_kT + (kT - bath_kT) * _uniform(uniforms, lanes, position)
    while True:
        product = _uniform(uniforms, lanes, position) * _uniform(uniforms, lanes, position)
        z = minus_log(product)
        if _uniform(uniforms, lanes, position) * (1.0 + product) ** 2 < 1.0:
            return between * z


class Particles(NamedTuple):
    """One or two particles that a source emits."""

    place: np.ndarray  # (2,) int64: its segment; for a particle at a node: the node
    numbers: np.ndarray  # (2, 5): place in the segment (cells), energy, kept energy, sign, heat
    flags: np.ndarray  # (2, 2) bool: moves right; starts at a node


@njit(cache=True, error_model="numpy", forceinline=True)
def _put(start, member, segment, place, energy, kept, sign, heat, right, at_node):
    start.place[member] = segment
    start.numbers[member, 0] = place
    start.numbers[member, 1] = energy
    start.numbers[member, 2] = kept
    start.numbers[member, 3] = sign
    start.numbers[member, 4] = heat
    start.flags[member, 0] = right
    start.flags[member, 1] = at_node


@njit(cache=True, error_model="numpy", forceinline=True)
def _segment_of(geometry, cell):
    return np.searchsorted(geometry.first_cell, cell, side="right") - 1


@njit(cache=True, error_model="numpy")
def _emit(
    kind, rest, geometry, tables, mechanisms, probes, frozen, trial, sources, setting, uniforms,
    lanes, position, tally, start,
):  # fmt: skip
    """Draw from a source; returns the number of particles put into start (1 or 2).

    rest: uniform number left over from choosing the source.
    """
    last = geometry.transmission.size - 1
    if trial is not None:
        if kind == TRIAL_INSIDE or kind == TRIAL_NODE:
            return _emit_residual(kind, rest, geometry, tables, mechanisms, probes, trial, sources,
                                  uniforms, lanes, position, start)  # fmt: skip
    if kind == PHONON_PAIR:
        return _emit_pair(rest, geometry, mechanisms, sources, setting, uniforms, lanes, position,
                          tally, start)  # fmt: skip
    if kind == LEFT_HEAT or kind == RIGHT_HEAT:
        left = kind == LEFT_HEAT
        mu, kT = (setting.mu_left, setting.left_kT) if left else (0.0, setting.right_kT)
        base_kT = setting.bath_kT
        segment, place, right, at_node, heat = (0 if left else last), 0.0, left, True, 1.0
    elif kind == PROBE_HEAT:
        segment = min(np.searchsorted(sources.probe, rest, side="right"), last)
        mu, kT = frozen.probe_mu[segment], frozen.probe_kT[segment]
        base_kT = frozen.base.probe_kT[segment]
        place, at_node, heat = 0.0, True, 2.0
        right = _uniform(uniforms, lanes, position) < probes.emits_right[segment]
    else:
        entry = min(
            np.searchsorted(sources.carriers, rest, side="right"), sources.carriers.size - 1
        )
        cells = frozen.mu.shape[1]
        which, cell = entry // cells, entry % cells
        mu, kT, base_kT = (
            frozen.mu[which, cell],
            frozen.kT[which, cell],
            frozen.base.kT[which, cell],
        )
        segment = _segment_of(geometry, cell)
        place = cell - geometry.first_cell[segment] + _uniform(uniforms, lanes, position)
        right = which == 0 or (which == 2 and _uniform(uniforms, lanes, position) < 0.5)
        at_node, heat = False, 1.0
    away = _heat_energy(kT, base_kT, uniforms, lanes, position)
    sign = 1.0 if kT > base_kT else -1.0
    for member in range(2):
        energy = mu + away if member == 0 else mu - away
        charge = sign if member == 0 else -sign
        kept = energy
        if kind == CARRIER_HEAT and setting.exact_energy:
            kept = 0.0
        if kind == PROBE_HEAT:
            tally.probe_heat[segment] -= charge * energy
        elif kind == LEFT_HEAT:
            tally.scalars[ENERGY_LEFT] += charge * energy
        elif kind == RIGHT_HEAT:
            tally.scalars[ENERGY_RIGHT] -= charge * energy
        _put(start, member, segment, place, energy, kept, charge, heat, right, at_node)
    return 2


@njit(cache=True, error_model="numpy")
def _emit_pair(
    rest, geometry, mechanisms, sources, setting, uniforms, lanes, position, tally, start
):  # fmt: skip
    """A pair of the quadratic source: + in the lower state, - above, times the pair's sign."""
    entry = min(np.searchsorted(sources.pair, rest, side="right"), sources.pair.size - 1)
    cell, kind = sources.pair_place[entry], sources.pair_kind[entry]
    w = mechanisms.phonon_meV[sources.pair_phonon[entry]]
    # Where the step does not divide w the upper state lies in one of two bins: early or late part.
    _, shift = phonon_shift(w, setting.step_meV)
    u = _uniform(uniforms, lanes, position)
    part = 1.0 - shift + shift * u if kind & 8 else (1.0 - shift) * u
    energy = setting.first_meV + (sources.pair_bin[entry] + part) * setting.step_meV
    segment = _segment_of(geometry, cell)
    place = cell - geometry.first_cell[segment] + _uniform(uniforms, lanes, position)
    sign = -1.0 if kind & 4 else 1.0
    tally.heat[cell] += sign * w
    _put(start, 0, segment, place, energy, energy, sign, 0.0, not kind & 2, False)
    upper = energy + w
    _put(start, 1, segment, place, upper, upper, -sign, 0.0, not kind & 1, False)
    return 2


@njit(cache=True, error_model="numpy")
def _emit_residual(
    kind, rest, geometry, tables, mechanisms, probes, trial, sources, uniforms, lanes, position,
    start,
):  # fmt: skip
    """A particle from the residual of the trial occupation; its weight carries the sign."""
    bins, cells = trial.value.shape[1:3]
    within = kind == TRIAL_INSIDE
    table = sources.strengths.inside if within else sources.strengths.nodes
    entry = min(np.searchsorted(table, rest, side="right"), table.size - 1)
    u = _uniform(uniforms, lanes, position)
    part = _uniform(uniforms, lanes, position)
    if within:
        cell, b, side = entry % cells, (entry // cells) % bins, entry // (cells * bins)
        energy = trial.first_meV + (b + u) * trial.step_meV
        segment = _segment_of(geometry, cell)
        r = inside(side, energy, segment, cell, part, geometry, tables, mechanisms, trial)
        weight = r * trial.step_meV * geometry.length_nm[segment] / geometry.cells[segment]
        weight /= sources.strengths.inside_each[entry]
        place = cell - geometry.first_cell[segment] + part
        _put(start, 0, segment, place, energy, energy, weight, 0.0, side == 0, False)
        return 1
    nodes = geometry.transmission.size
    b, node, side = entry % bins, (entry // bins) % nodes, entry // (bins * nodes)
    energy = trial.first_meV + (b + u) * trial.step_meV
    r = at_node(side, energy, node, geometry, tables, probes, trial)
    weight = r * trial.step_meV / sources.strengths.nodes_each[entry]
    _put(start, 0, node, 0.0, energy, energy, weight, 2.0, side == 0, True)
    return 1


@njit(cache=True, nogil=True, error_model="numpy")
def wander(
    first, histories, offset, geometry, tables, mechanisms, probes, frozen, trial, sources,
    setting, stream, tally, stop, event_limit,
):  # fmt: skip
    """Follow `histories` draws from the sources, each to its end; returns the kernel's outcome.

    Arguments as for flights.fly. A draw of a heat or phonon source makes a pair of particles of
    opposite sign, followed one after the other.
    """
    # One function with its arrays at hand: see flights.fly.
    lanes, uniforms, position = stream.lanes, stream.uniforms, stream.position
    exponentials = stream.exponentials
    bins, cells, scalars = tally.bins, tally.cells, tally.scalars
    arrivals, departures = tally.arrivals, tally.departures
    heat, probe_heat, turned = tally.heat, tally.probe_heat, tally.turned
    first_cell, cell_count = geometry.first_cell, geometry.cells
    thickness = geometry.thickness
    cell_nm = geometry.length_nm / geometry.cells
    mu, base_mu, base_kT = frozen.mu, frozen.base.mu, frozen.base.kT
    mu_step, base_step = frozen.mu_step, frozen.base.mu_step
    probe_mu, base_probe_mu = frozen.probe_mu, frozen.base.probe_mu
    base_probe_kT = frozen.base.probe_kT
    from_left, from_right, emits_right = probes.from_left, probes.from_right, probes.emits_right
    rates = mechanisms.rates
    phonon_meV, phonon_number = mechanisms.phonon_meV, mechanisms.phonon_number
    phonon_rate, phonon_bound = mechanisms.phonon_rate, mechanisms.phonon_bound
    share = sources.share
    reference = frozen.reference
    first_meV, per_step = setting.first_meV, 1.0 / setting.step_meV
    fine_per_meV = FINE * per_step
    elastic_of = thickness / geometry.length_nm
    any_phonons = phonon_meV.size > 0
    steady = rates.sum()
    rate_of = (elastic_of + steady) * cell_nm  # without what depends on energy
    free_of = 1.0 / rate_of
    whole = 0.5 if not setting.tangent else 1.0  # mean energy of a redraw, over its potential
    left_part = 1.0 / share[LEFT_NUMBER] if share[LEFT_NUMBER] > 0.0 else 0.0
    last = geometry.transmission.size - 1
    top = bins.shape[0]
    start = Particles(np.zeros(2, np.int64), np.zeros((2, 5)), np.zeros((2, 2), np.bool_))
    origin, numbers, flags = start.place, start.numbers, start.flags
    logistics = np.empty(BLOCK)
    p, q, r = position[0], position[1], BLOCK
    tau = 0.0
    made = 0
    for history in range(first, first + histories):
        quantile = np.float64(offset + np.uint64(history) * GOLDEN) * 2.0**-64
        if quantile < share[LEFT_NUMBER]:  # most draws: without a call
            if r == BLOCK:
                fill_logistics(lanes, logistics)
                r = 0
            u, kT = quantile * left_part, setting.bath_kT
            if setting.tangent:
                u, kT = 1.0, setting.left_kT
            new = setting.mu_left * u + kT * logistics[r]
            r += 1
            new_kept = new
            if setting.exact_energy:  # energies decide nothing: their mean has less noise
                new_kept = setting.mu_left * whole
            scalars[ENERGY_LEFT] += setting.left_sign * new_kept
            origin[0] = 0
            numbers[0, 1], numbers[0, 2] = new, new_kept
            numbers[0, 3], numbers[0, 4] = setting.left_sign, 0.0
            flags[0, 0] = flags[0, 1] = True
            members = 1
        else:
            kind = min(np.searchsorted(share, quantile, side="right"), SOURCES - 1)
            rest = (quantile - share[kind - 1]) / (share[kind] - share[kind - 1])
            position[1] = q
            members = _emit(
                kind, rest, geometry, tables, mechanisms, probes, frozen, trial, sources, setting,
                uniforms, lanes, position, tally, start,
            )  # fmt: skip
            q = position[1]
        for member in range(members):
            node = segment = origin[member]
            y, energy, kept = numbers[member, 0], numbers[member, 1], numbers[member, 2]
            sign, warm = numbers[member, 3], numbers[member, 4] > 0.0
            right, at_node = flags[member, 0], flags[member, 1]
            emitted = numbers[member, 4] == 2.0  # by a probe: does not arrive there
            forgets = warm and setting.exact_energy
            budget = event_limit
            bin_ = np.int64(np.floor((energy - first_meV) * per_step))
            if at_node:
                cell = first_cell[node] if node < last else cells.shape[0] - 1
                part = 0.0 if node < last else 1.0
            else:
                inner = min(np.int64(y), cell_count[segment] - 1)
                cell, part = first_cell[segment] + inner, y - inner
            outcome = BORN
            new, new_kept, onward = energy, kept, right
            if p >= BLOCK:
                fill_exponentials(lanes, exponentials)
                p = 0
            tau = exponentials[p]
            p += 1
            while True:
                # Flights that end or start here. Indices are unsigned: signed ones are tested.
                c, out = np.uint64(cell), np.uint64(0 if right else 2)
                step = sign if right else -sign
                if outcome == CHANGED:
                    turned_here = onward != right
                    begin = step if turned_here else -step
                    into = np.uint64(0 if onward else 2)
                    later = bin_
                    if new != energy:
                        later = np.int64(np.floor((new - first_meV) * per_step))
                    if 0 <= bin_ < top:
                        b = np.uint64(bin_)
                        bins[b, c, out] += step
                        bins[b, c, out + ONE] += step * part
                    if 0 <= later < top:
                        b = np.uint64(later)
                        bins[b, c, into] += begin
                        bins[b, c, into + ONE] += begin * part
                    bin_ = later
                    out, into = out * THREE, into * THREE
                    if turned_here:
                        cells[c, out] += step
                        cells[c, out + ONE] += step * part
                        cells[c, out + TWO] += step * energy
                        cells[c, out + THREE] += step * energy * part
                        cells[c, into] += begin
                        cells[c, into + ONE] += begin * part
                        cells[c, into + TWO] += begin * new
                        cells[c, into + THREE] += begin * new * part
                    else:  # the number goes on
                        given = step * (energy - new)
                        cells[c, out + TWO] += given
                        cells[c, out + THREE] += given * part
                    if setting.carriers:
                        cells[c, out + FOUR] += step * kept
                        cells[c, out + FIVE] += step * kept * part
                        cells[c, into + FOUR] += begin * new_kept
                        cells[c, into + FIVE] += begin * new_kept * part
                    energy, kept, right = new, new_kept, onward
                else:
                    if outcome == BORN:
                        step = -step
                    if 0 <= bin_ < top:
                        b = np.uint64(bin_)
                        bins[b, c, out] += step
                        bins[b, c, out + ONE] += step * part
                    out *= THREE
                    cells[c, out] += step
                    cells[c, out + ONE] += step * part
                    cells[c, out + TWO] += step * energy
                    cells[c, out + THREE] += step * energy * part
                    if setting.carriers:
                        cells[c, out + FOUR] += step * kept
                        cells[c, out + FIVE] += step * kept * part
                    if outcome == GONE:
                        break
                outcome = NOTHING
                while outcome == NOTHING:
                    if q > BLOCK - 8:  # an event uses fewer
                        budget -= BLOCK
                        if stop[0]:
                            return STOPPED
                        if budget < 0:
                            return TOO_MANY_EVENTS
                        fill_uniforms(lanes, uniforms)
                        q = 0
                    if at_node:
                        # A scatterer lets pass or turns round, a probe may absorb.
                        at_node = False
                        new, new_kept, onward = energy, kept, right
                        if not emitted:
                            made += 1
                            arrivals[node, 0 if right else 1] += sign
                            chance = passes_at(node, energy, geometry, tables)
                            if chance < 1.0:
                                if uniforms[q] >= chance:
                                    outcome, onward = CHANGED, not right
                                q += 1
                            taken = from_left[node] if right else from_right[node]
                            if taken > 0.0:
                                if uniforms[q] < taken:
                                    probe_heat[node] += sign * kept
                                    if forgets:  # its partner is taken too, and comes back alike
                                        outcome = GONE
                                        q += 1
                                        break
                                    u = 1.0 if setting.tangent else uniforms[q + 1]
                                    new = _box(
                                        base_probe_mu[node], probe_mu[node], base_probe_kT[node],
                                        u, uniforms[q + 2],
                                    )  # fmt: skip
                                    new_kept = new
                                    if setting.exact_energy:
                                        new_kept = probe_mu[node] * whole
                                    probe_heat[node] -= sign * new_kept
                                    onward = uniforms[q + 3] < emits_right[node]
                                    outcome = CHANGED
                                    q += 3
                                q += 1
                        emitted = False
                        departures[node, 0 if onward else 1] += sign
                        if node == (last if onward else 0):
                            if onward:
                                scalars[OUT_RIGHT] += sign
                                scalars[ENERGY_RIGHT] += sign * new_kept
                            else:
                                scalars[ENERGY_LEFT] -= sign * new_kept
                            outcome = GONE
                            break
                        segment = node if onward else node - 1
                        y = 0.0 if onward else np.float64(cell_count[segment])
                        continue
                    # On through the segment: to its end or to the next event.
                    elastic, rate, free = elastic_of[segment], rate_of[segment], free_of[segment]
                    if tables is not None:
                        elastic += varying_rate(segment, energy, tables)
                        rate = (elastic + steady) * cell_nm[segment]
                        free = 1.0 / rate
                    if any_phonons:
                        row = min(max(bin_ + 1, 0), top + 1)
                        rate += phonon_bound[-1, row] * cell_nm[segment]
                        free = 1.0 / rate
                    ahead = cell_count[segment] - y if right else y
                    if tau >= rate * ahead:
                        tau -= rate * ahead
                        node = segment + 1 if right else segment
                        part = 1.0 if right else 0.0
                        cell = first_cell[segment] + (cell_count[segment] - 1 if right else 0)
                        at_node = True
                        continue
                    y += tau * free if right else -tau * free
                    if p >= BLOCK:
                        fill_exponentials(lanes, exponentials)
                        p = 0
                    tau = exponentials[p]
                    p += 1
                    made += 1
                    inner = min(max(np.int64(y), 0), cell_count[segment] - 1)
                    cell, part = first_cell[segment] + inner, y - inner
                    v = rate / cell_nm[segment] * uniforms[q] - elastic
                    q += 1
                    new, new_kept, onward = energy, kept, right
                    if v < 0.0:
                        outcome, onward = CHANGED, not right
                        continue
                    which = 0
                    while which < 4 and v >= rates[which]:
                        v -= rates[which]
                        which += 1
                    if which < 4:
                        to_bath = which == KEPT_BATH or which == RANDOM_BATH
                        if forgets and (to_bath or kept == 0.0):  # both partners go on alike
                            if to_bath:
                                heat[cell] += sign * kept
                            outcome = GONE
                            continue
                        randomised = which == RANDOM_BATH or which == RANDOM_CARRIERS
                        field = 2 if randomised else (0 if right else 1)
                        u = 1.0 if setting.tangent else uniforms[q]
                        kT = setting.bath_kT if to_bath else base_kT[field, cell]
                        # A constant mu would hand energy on through the cell, unseen by any drift.
                        low = base_mu[field, cell] + (part - 0.5) * base_step[field, cell]
                        high = mu[field, cell] + (part - 0.5) * mu_step[field, cell]
                        if r == BLOCK:
                            fill_logistics(lanes, logistics)
                            r = 0
                        new = low + (high - low) * u + kT * logistics[r]
                        r += 1
                        if not setting.exact_energy:
                            new_kept = new
                        elif to_bath:
                            new_kept = high * whole
                        if to_bath:
                            heat[cell] += sign * (kept - new_kept)
                        if randomised:
                            onward = uniforms[q + 1] < 0.5
                        q += 2
                        outcome = CHANGED
                        continue
                    # Phonons: Newton's rates, down (N + 1 - f)/2 and up (N + f)/2 for each final
                    # direction, f the trial occupation there; full below the axis, empty above.
                    k = 0
                    row = min(max(bin_ + 1, 0), top + 1)
                    while k < phonon_meV.size - 1 and v >= phonon_bound[k, row]:
                        v -= phonon_bound[k, row]
                        k += 1
                    v /= 0.5 * phonon_rate[k]
                    for choice in range(4):
                        change = -phonon_meV[k] if choice < 2 else phonon_meV[k]
                        f = 1.0 if energy + change < first_meV else 0.0
                        fine = np.int64((energy + change - first_meV) * fine_per_meV)
                        if f == 0.0 and fine < reference.size:
                            f = reference[fine]
                        if trial is not None:
                            f += deviation(choice & 1, energy + change, cell, part, trial)
                        v -= phonon_number[k] + (1.0 - f if choice < 2 else f)
                        if v < 0.0:
                            new = energy + change
                            new_kept = new
                            onward = choice & 1 == 0
                            heat[cell] -= sign * change
                            if onward != right:
                                turned[cell] += sign if right else -sign
                            outcome = CHANGED
                            break
    position[0], position[1] = p, q
    scalars[FLIGHTS] += made
    return DONE
