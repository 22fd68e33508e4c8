"""The particle kernel with relaxation.

A particle stands for a piece of the deviation from a known occupation (see deviation.py), of
either sign; its energy changes in events. Frozen fields (potentials, temperatures) come from
earlier rounds. Positions count cell widths inside a segment; energies are exact, bins only for the
tallies.

In two and three dimensions particles have directions, and a flight counts 1/|u_x| (see rays.py);
what only these need stands under `if planes is not None`, which compiles to nothing in d = 1.
"""

import numpy as np
from numba import njit

from carriersim.engine.directions import fill_isotropic, fill_lambert
from carriersim.engine.events import GOLDEN, passes_at, varying_rate
from carriersim.engine.flights import DONE, STOPPED, TOO_MANY_EVENTS
from carriersim.engine.mechanisms import FINE, KEPT_BATH, RANDOM_BATH, RANDOM_CARRIERS
from carriersim.engine.planes import crossing_weight, passes_tunnel
from carriersim.engine.rays import FAR, direction_class
from carriersim.engine.residual import deviation
from carriersim.engine.sources import (
    ENERGY_LEFT,
    ENERGY_RIGHT,
    FLIGHTS,
    HISTORY,
    LEFT_NUMBER,
    NODE,
    OUT_RIGHT,
    SOURCES,
    Particles,
    aim_from,
    emit,
)
from carriersim.engine.streams import (
    BLOCK,
    fill_exponentials,
    fill_logistics,
    fill_uniforms,
    minus_log,
)

# What happens to a particle; BORN: it starts its first flight.
NOTHING, CHANGED, GONE, BORN = range(4)
ONE, TWO, THREE, FOUR, FIVE = (np.uint64(n) for n in range(1, 6))


@njit(cache=True, error_model="numpy", forceinline=True)
def _box(base, mu, kT, u, v):
    """Energy of the deviation F(mu) - F(base): uniform between the potentials, smeared by kT."""
    energy = base + (mu - base) * u
    if kT > 0.0:
        energy += kT * minus_log((1.0 - v) / v)
    return energy


@njit(cache=True, nogil=True, error_model="numpy")
def wander(
    first, histories, offset, geometry, planes, walls, second, tables, mechanisms, probes, frozen,
    trial, sources, setting, stream, tally, stop, event_limit,
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
    half = 0.5 if not setting.tangent else 1.0  # mean energy of a redraw, over its potential
    left_part = 1.0 / share[LEFT_NUMBER] if share[LEFT_NUMBER] > 0.0 else 0.0
    last = geometry.transmission.size - 1
    top = bins.shape[0]
    start = Particles(
        np.zeros(2, np.int64), np.zeros((2, 5)), np.zeros((2, 2), np.bool_), np.zeros((2, 5))
    )
    origin, numbers, flags, aim = start.place, start.numbers, start.flags, start.aim
    logistics = np.empty(BLOCK)
    p, q, r = position[0], position[1], BLOCK
    ux = new_ux = weight = new_weight = 1.0
    redirected = False
    if planes is not None:
        isotropic, lambert = stream.isotropic, stream.lambert
        densities, lost, views = tally.densities, tally.lost, tally.views
        tunnel, diffuse = planes.tunnel, planes.diffuse
        looked_at, view_edges = planes.looked_at, planes.view_edges
        view_first = planes.view_first
        whole = walls is not None
        i, j = position[2], position[3]
        uy = uz = across = above = 0.0
        # Without walls or events nothing bounds the path in a cell: as at nodes.
        grazes = walls is None and tables is None and rate_of.max() == 0.0 and not any_phonons
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
                new_kept = setting.mu_left * half
            scalars[ENERGY_LEFT] += setting.left_sign * new_kept
            origin[0] = 0
            numbers[0, 1], numbers[0, 2] = new, new_kept
            numbers[0, 3], numbers[0, 4] = setting.left_sign, 0.0
            flags[0, 0] = flags[0, 1] = True
            members = 1
            if planes is not None:
                position[1], position[2], position[3] = q, i, j
                aim_from(0, True, True, planes, walls, second, stream, start)
                q, i, j = position[1], position[2], position[3]
        else:
            kind = min(np.searchsorted(share, quantile, side="right"), SOURCES - 1)
            rest = (quantile - share[kind - 1]) / (share[kind] - share[kind - 1])
            position[1] = q
            if planes is not None:
                position[2], position[3] = i, j
            members = emit(
                kind, rest, geometry, planes, walls, second, tables, mechanisms, probes, frozen,
                trial, sources, setting, stream, tally, start,
            )  # fmt: skip
            q = position[1]
            if planes is not None:
                i, j = position[2], position[3]
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
            redirected = False
            if planes is not None:
                ux, uy, uz = aim[member, 0], aim[member, 1], aim[member, 2]
                across, above = aim[member, 3], aim[member, 4]
                weight = 1.0 / abs(ux)
                if grazes:
                    weight = crossing_weight(weight)
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
                    if planes is not None:
                        step *= weight
                        begin *= new_weight if redirected else weight
                        turned_here = redirected
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
                    if planes is not None and redirected:
                        ux, weight, redirected = new_ux, new_weight, False
                else:
                    if planes is not None:
                        step *= weight
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
                            scalars[HISTORY], scalars[NODE] = history, node
                            return TOO_MANY_EVENTS
                        fill_uniforms(lanes, uniforms)
                        q = 0
                    if planes is not None:  # a node uses up to two of the second kind
                        if i >= BLOCK:
                            fill_isotropic(lanes, isotropic, planes.dimension, whole)
                            i = 0
                        if j > BLOCK - 2:
                            fill_lambert(lanes, lambert, planes.dimension, whole)
                            j = 0
                    if at_node:
                        # A scatterer lets pass or turns round, a probe may absorb.
                        at_node = False
                        new, new_kept, onward = energy, kept, right
                        if not emitted:
                            made += 1
                            arrivals[node, 0 if right else 1] += sign
                            chance = passes_at(node, energy, geometry, tables)
                            if planes is not None:
                                densities[node, 0 if right else 2] += sign * crossing_weight(weight)
                                if looked_at[node] >= 0 and right == (node == last):
                                    row = direction_class(abs(ux), view_edges, view_first)
                                    views[looked_at[node], 0 if right else 1, row] += sign
                                normal = chance
                                if chance < 1.0 and tunnel[node]:
                                    chance = passes_tunnel(chance, ux)
                            if chance < 1.0:
                                if uniforms[q] >= chance:
                                    outcome, onward = CHANGED, not right
                                    if planes is not None:
                                        redirected = True
                                        new_ux, new_weight = -ux, weight
                                        if diffuse[node]:
                                            if tunnel[node]:  # in proportion to (1 - T) u
                                                while True:
                                                    if j > BLOCK - 2:
                                                        fill_lambert(
                                                            lanes, lambert, planes.dimension, whole
                                                        )
                                                        j = 0
                                                    if q > BLOCK - 8:
                                                        fill_uniforms(lanes, uniforms)
                                                        q = 0
                                                    q += 1
                                                    back = passes_tunnel(normal, lambert[0, j])
                                                    if uniforms[q] < 1.0 - back:
                                                        break
                                                    j += 1
                                            new_ux = lambert[0, j] if onward else -lambert[0, j]
                                            new_weight = 1.0 / abs(new_ux)
                                            if walls is not None:
                                                uy, uz = lambert[1, j], lambert[2, j]
                                            j += 1
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
                                        new_kept = probe_mu[node] * half
                                    probe_heat[node] -= sign * new_kept
                                    onward = uniforms[q + 3] < emits_right[node]
                                    outcome = CHANGED
                                    if planes is not None:
                                        redirected = True
                                        new_ux = lambert[0, j] if onward else -lambert[0, j]
                                        new_weight = 1.0 / abs(new_ux)
                                        if walls is not None:
                                            uy, uz = lambert[1, j], lambert[2, j]
                                        j += 1
                                    q += 3
                                q += 1
                        emitted = False
                        departures[node, 0 if onward else 1] += sign
                        if planes is not None:
                            leaves, slant = ux, weight
                            if redirected:
                                if grazes:
                                    new_weight = crossing_weight(new_weight)
                                leaves, slant = new_ux, new_weight
                            densities[node, 3 if onward else 1] += sign * crossing_weight(slant)
                            if looked_at[node] >= 0 and onward != (node == last):
                                row = direction_class(abs(leaves), view_edges, view_first)
                                views[looked_at[node], 0 if onward else 1, row] += sign
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
                    if planes is not None:
                        # Along the flight, in nm: to the end of the segment, a wall, an event.
                        width = cell_nm[segment]
                        face, slant = 0, 1.0 / abs(ux)
                        path = ahead * width * slant
                        if walls is not None:
                            side = walls.size - across if uy > 0.0 else across
                            side /= max(abs(uy), 1e-300)
                            if side < path:
                                path, face = side, 1
                            if second is not None:
                                side = second.size - above if uz > 0.0 else above
                                side /= max(abs(uz), 1e-300)
                                if side < path:
                                    path, face = side, 2
                        until = tau * free * width if rate > 0.0 else FAR
                        occurs = until < path
                        if occurs:
                            path, face = until, -1
                        tau = 0.0 if occurs else max(tau - path * rate / width, 0.0)
                        if walls is not None:
                            across = min(max(across + path * uy, 0.0), walls.size)
                            if second is not None:
                                above = min(max(above + path * uz, 0.0), second.size)
                        if face == 0:
                            node = segment + 1 if right else segment
                            part = 1.0 if right else 0.0
                            cell = first_cell[segment] + (cell_count[segment] - 1 if right else 0)
                            at_node = True
                            continue
                        y = min(max(y + path * ux / width, 0.0), np.float64(cell_count[segment]))
                        made += 1
                        if walls is not None:
                            if face > 0:
                                mirror = walls.specularity
                                if second is not None:
                                    if face == 2:
                                        mirror = second.specularity
                                q += 1
                                if uniforms[q - 1] < mirror:
                                    if face == 1:
                                        uy = -uy
                                    else:
                                        uz = -uz
                                    continue
                                lost[segment] += sign * ux
                                inner = min(np.int64(y), cell_count[segment] - 1)
                                cell, part = first_cell[segment] + inner, y - inner
                                new, new_kept = energy, kept
                                new_ux = lambert[1, j]
                                if face == 1:
                                    uy = -lambert[0, j] if uy > 0.0 else lambert[0, j]
                                    uz = lambert[2, j]
                                else:
                                    uz = -lambert[0, j] if uz > 0.0 else lambert[0, j]
                                    uy = lambert[2, j]
                                j += 1
                                new_weight, onward = 1.0 / abs(new_ux), new_ux > 0.0
                                outcome, redirected = CHANGED, True
                                continue
                    else:
                        if tau >= rate * ahead:
                            tau -= rate * ahead
                            node = segment + 1 if right else segment
                            part = 1.0 if right else 0.0
                            cell = first_cell[segment] + (cell_count[segment] - 1 if right else 0)
                            at_node = True
                            continue
                        y += tau * free if right else -tau * free
                        made += 1
                    if p >= BLOCK:
                        fill_exponentials(lanes, exponentials)
                        p = 0
                    tau = exponentials[p]
                    p += 1
                    inner = min(max(np.int64(y), 0), cell_count[segment] - 1)
                    cell, part = first_cell[segment] + inner, y - inner
                    v = rate / cell_nm[segment] * uniforms[q] - elastic
                    q += 1
                    new, new_kept, onward = energy, kept, right
                    if v < 0.0:
                        outcome, onward = CHANGED, not right
                        if planes is not None:
                            redirected, new_ux = True, isotropic[0, i]
                            new_weight, onward = 1.0 / abs(new_ux), new_ux > 0.0
                            if walls is not None:
                                uy, uz = isotropic[1, i], isotropic[2, i]
                            i += 1
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
                            new_kept = high * half
                        if to_bath:
                            heat[cell] += sign * (kept - new_kept)
                        if randomised:
                            onward = uniforms[q + 1] < 0.5
                            if planes is not None:
                                redirected, new_ux = True, isotropic[0, i]
                                new_weight, onward = 1.0 / abs(new_ux), new_ux > 0.0
                                if walls is not None:
                                    uy, uz = isotropic[1, i], isotropic[2, i]
                                i += 1
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
                            if planes is not None:
                                redirected, new_ux = True, isotropic[0, i]
                                if (new_ux > 0.0) != onward:
                                    new_ux = -new_ux
                                new_weight = 1.0 / abs(new_ux)
                                turned[cell] += sign * (ux - new_ux)
                                if walls is not None:
                                    uy, uz = isotropic[1, i], isotropic[2, i]
                                i += 1
                            elif onward != right:
                                turned[cell] += sign if right else -sign
                            outcome = CHANGED
                            break
    position[0], position[1] = p, q
    if planes is not None:
        position[2], position[3] = i, j
    scalars[FLIGHTS] += made
    return DONE
