"""The backscattering path of an endless channel (d = 2, 3) from the spread of carriers' walks.

In equilibrium all places and directions are equally likely. Carriers start so and walk; their mean
square displacement grows with the path length s as 2 D s (Einstein, Ann. Phys. 322 (1905) 549), and
D is the integral of the velocity's autocorrelation (Green, J. Chem. Phys. 22 (1954) 398; Kubo,
J. Phys. Soc. Jpn. 12 (1957) 570). The backscattering path is 2 k_d D: l/d gives (pi/2) l and
(4/3) l. The cost does not depend on the channel's length.

Walks are cut into steps of equal path length. With steps d_i of the coordinate xi (see
endless_coordinate.py), D_xi = [<d_0 d_0> + 2 sum_n <d_0 d_n>] / (2 step), n = 1 ... STEPS.
"""

import time
from dataclasses import dataclass
from itertools import chain

import numpy as np
from joblib import Parallel, delayed
from numba import njit

from carriersim.constants import AMPERE_PER_MEV
from carriersim.engine import flights, streams
from carriersim.engine.directions import fill_isotropic, fill_lambert, new_ray_stream
from carriersim.engine.endless_setup import setup_of
from carriersim.engine.endless_window import STEPS
from carriersim.engine.events import GOLDEN
from carriersim.engine.planes import passes_tunnel
from carriersim.engine.rays import FAR
from carriersim.engine.solve import EVENT_LIMIT, StopRequest, chunks, several
from carriersim.engine.space import OBLIQUE
from carriersim.engine.streams import BLOCK, ENDLESS, fill_exponentials, fill_uniforms
from carriersim.jackknife import jackknife
from carriersim.result import Estimate, LongChannel

BATCHES = 64
RECORDS = 12 * STEPS  # steps of one walk
FIRST_WALKS = 4  # of each batch in the first round
# Energies of a batch in a round where anything depends on energy, and walks of each.
ENERGIES, ENERGY_WALKS = (16, 256), 16
GROWTH = 3.0  # a round adds at most this many times the walks so far
DEFAULT_ERROR = 0.005  # relative
MOST_EVENTS = 3e7  # or those of the main run, if they are more
LEVELS = (STEPS, 2 * STEPS)  # steps over which correlations are added: the result, and a check
LONGER = 1e6  # walks: length of a ring where nothing marks a place

METHOD = (
    "mean square displacement of {walks} carriers' walks of {path:.4g} nm in an endless repetition "
    "of the channel, from the autocorrelation of their steps (Einstein 1905; Green 1954; Kubo 1957)"
)
INTERRUPTED = "interrupted before carriers had walked in the endless channel"
TOO_LONG = "carriers forget their direction only after {events:.1e} events"
NO_BULK = "without scattering in the bulk there is nothing to compare with"
SHEET = "in two dimensions the resistivity is that of a sheet"
NO_AREA = "it needs width_nm and height_nm, or bulk_resistivity_uohm_cm"
NO_WIDTH = "it needs width_nm"


@njit(cache=True, nogil=True, error_model="numpy")
def walk(first, walks, offset, dimension, step_nm, ring, walls, second, stream, out,
         work, stop, limit):  # fmt: skip
    """Follow carriers round a ring; out (walks, steps): how far each step brings them in xi.

    Starts are spread evenly along the ring: entries first, first + 1, ... of a Kronecker sequence
    shifted by `offset`.  limit: blocks of random
    numbers that one walk may use, times BLOCK.
    """
    # One function with its arrays at hand: see flights.fly.
    lanes, exponentials, uniforms = stream.lanes, stream.exponentials, stream.uniforms
    isotropic, lambert, position = stream.isotropic, stream.lambert, stream.position
    lengths, rates, slopes = ring.length_nm, ring.rate, ring.slope
    transmission, jump, tunnel, diffuse = ring.transmission, ring.jump, ring.tunnel, ring.diffuse
    steps = out.shape[1]
    segments = lengths.size
    whole = walls is not None
    ends = np.cumsum(lengths)
    e, q, i, j = position[0], position[1], position[2], position[3]
    events = 0
    uy, uz, y, z = 0.0, 0.0, 0.0, 0.0
    for w in range(walks):
        work[flights.HISTORY] = first + w
        work[flights.BUDGET] = limit
        place = np.float64(offset + np.uint64(first + w) * GOLDEN) * 2.0**-64 * ends[-1]
        segment = min(np.searchsorted(ends, place, side="right"), segments - 1)
        length, rate, slope = lengths[segment], rates[segment], slopes[segment]
        free = 1.0 / rate if rate > 0.0 else FAR
        x = min(max(place - (ends[segment] - length), 0.0), length)
        base = -slope * x  # xi where the segment begins
        record, last, left = 0, 0.0, step_nm
        born = True
        while True:
            # Every event uses at most four uniform numbers and one of each other kind.
            if (q > BLOCK - 4) | (e >= BLOCK) | (i >= BLOCK) | (j >= BLOCK):
                if stop[0]:
                    return flights.STOPPED
                work[flights.BUDGET] -= BLOCK
                if work[flights.BUDGET] < 0:
                    return flights.TOO_MANY_EVENTS
                if q > BLOCK - 4:
                    fill_uniforms(lanes, uniforms)
                    q = 0
                if e >= BLOCK:
                    fill_exponentials(lanes, exponentials)
                    e = 0
                if i >= BLOCK:
                    fill_isotropic(lanes, isotropic, dimension, whole)
                    i = 0
                if j >= BLOCK:
                    fill_lambert(lanes, lambert, dimension, whole)
                    j = 0
            events += 1
            if born:
                born = False
                ux = isotropic[0, i]
                if walls is not None:
                    uy, uz = isotropic[1, i], isotropic[2, i]
                    y = walls.size * uniforms[q]
                    q += 1
                    if second is not None:
                        z = second.size * uniforms[q]
                        q += 1
                i += 1
                tau = exponentials[e]
                e += 1
            # One flight: to a collision unless a wall or the segment's end comes first.
            far = tau * free
            new_x = x + far * ux
            inside = (new_x >= 0.0) & (new_x <= length)
            if walls is not None:
                new_y = y + far * uy
                inside &= (new_y >= 0.0) & (new_y <= walls.size)
                if second is not None:
                    new_z = z + far * uz
                    inside &= (new_z >= 0.0) & (new_z <= second.size)
            face = 0
            if not inside:
                far = (length - x) / ux if ux > 0.0 else -x / ux
                if walls is not None:
                    side = (walls.size - y) / max(uy, 1e-300) if uy > 0.0 else y / max(-uy, 1e-300)
                    if side < far:
                        far, face = side, 1
                    if second is not None:
                        side = (
                            (second.size - z) / max(uz, 1e-300)
                            if uz > 0.0
                            else z / max(-uz, 1e-300)
                        )
                        if side < far:
                            far, face = side, 2
                tau = max(tau - far * rate, 0.0)
            if left <= far:
                start, pace = base + slope * x, slope * ux
                while (left <= far) & (record < steps):
                    here = start + pace * left
                    out[w, record] = here - last
                    last = here
                    record += 1
                    left += step_nm
                if record == steps:
                    break
            left -= far
            if inside:
                x = new_x
                if walls is not None:
                    y = new_y
                    uy = isotropic[1, i]
                    if second is not None:
                        z = new_z
                    uz = isotropic[2, i]
                ux = isotropic[0, i]
                i += 1
                tau = exponentials[e]
                e += 1
                continue
            if walls is not None:
                y = min(max(y + far * uy, 0.0), walls.size)
                if second is not None:
                    z = min(max(z + far * uz, 0.0), second.size)
            if face == 0:
                right = ux > 0.0
                node = segment
                if right:
                    node = segment + 1 if segment + 1 < segments else 0
                chance = transmission[node]
                if chance < 1.0:
                    normal = chance
                    if tunnel[node]:
                        chance = passes_tunnel(chance, ux)
                    q += 1
                    if uniforms[q - 1] >= chance:
                        x = length if right else 0.0
                        if not diffuse[node]:
                            ux = -ux
                            continue
                        if tunnel[node]:
                            while True:
                                if q > BLOCK - 2:
                                    fill_uniforms(lanes, uniforms)
                                    q = 0
                                if j >= BLOCK:
                                    fill_lambert(lanes, lambert, dimension, whole)
                                    j = 0
                                q += 1
                                if uniforms[q - 1] < 1.0 - passes_tunnel(normal, lambert[0, j]):
                                    break
                                j += 1
                        ux = -lambert[0, j] if right else lambert[0, j]
                        if walls is not None:
                            uy, uz = lambert[1, j], lambert[2, j]
                        j += 1
                        continue
                if right:
                    base += slope * length + jump[node]
                    segment, x = node, 0.0
                else:
                    base -= jump[node]
                    segment = segment - 1 if segment > 0 else segments - 1
                    x = lengths[segment]
                length, rate, slope = lengths[segment], rates[segment], slopes[segment]
                if not right:
                    base -= slope * length
                free = 1.0 / rate if rate > 0.0 else FAR
                continue
            x = min(max(x + far * ux, 0.0), length)
            mirror = walls.specularity
            if second is not None:
                if face == 2:
                    mirror = second.specularity
            if mirror > 0.0:
                q += 1
                if uniforms[q - 1] < mirror:
                    if face == 1:
                        uy = -uy
                    else:
                        uz = -uz
                    continue
            ux = lambert[1, j]
            if face == 1:
                uy = -lambert[0, j] if uy > 0.0 else lambert[0, j]
                uz = lambert[2, j]
            else:
                uz = -lambert[0, j] if uz > 0.0 else lambert[0, j]
                uy = lambert[2, j]
            j += 1
    position[0], position[1], position[2], position[3] = e, q, i, j
    work[flights.TURNS] += events
    return flights.DONE


@njit(cache=True, nogil=True, error_model="numpy")
def correlate(steps):
    """Means over a walk of <d_0 d_n>, n = 0 ... 2 STEPS, summed over walks; steps (walks, n)."""
    result = np.zeros(2 * STEPS + 1)
    for w in range(steps.shape[0]):
        row = steps[w]
        for n in range(result.size):
            count = row.size - n
            total = 0.0
            for k in range(count):
                total += row[k] * row[k + n]
            result[n] += total / count
    return result


@dataclass
class Totals:
    """Sums over the walks of each batch."""

    sums: np.ndarray  # (BATCHES, levels) of D in nm
    walks: int = 0  # of each batch
    events: int = 0
    seconds: float = 0.0


class Batch:
    """The walks of one batch: its ring and random numbers."""

    def __init__(self, setup, number):
        seed = setup.problem.scenario.simulation.seed
        sequence = np.random.SeedSequence(seed, spawn_key=(ENDLESS, number, 0))
        self.generator = np.random.Generator(np.random.PCG64(sequence))
        self.setup = setup
        self.nodes = None if setup.even else setup.draw(self.generator)
        self.offset = self.generator.integers(2**64, dtype=np.uint64)
        self.stream = new_ray_stream(seed, number, ENDLESS)
        self.done = 0

    def run(self, walks, flag):
        """(sum of D in nm for each level, events) of new walks; None if stopped.

        walks: how many for each of how many energies.
        """
        each, energies = walks
        sums, events = np.zeros(len(LEVELS)), 0
        for energy in self.setup.some_energies(energies, self.generator.uniform()):
            window = self.setup.window(energy)
            ring, scale = self._ring(energy, window)
            steps = streams.apart((each, RECORDS))
            work = streams.apart((3,), np.int64)
            status = walk(
                self.done, each, self.offset, self.setup.dimension, window.step_nm, ring,
                *self.setup.walls, self.stream, steps, work, flag, EVENT_LIMIT,
            )  # fmt: skip
            if status != flights.DONE:
                return None
            self.done += each
            events += int(work[flights.TURNS])
            products = correlate(steps) / (2.0 * window.step_nm * scale)
            for level, last in enumerate(LEVELS):
                spread = products[0] + 2.0 * products[1 : last + 1].sum()
                sums[level] += spread + each * window.beyond_nm[level]
        return sums, events

    def _ring(self, energy, window):
        """The Ring at an energy, and what divides D_xi to give D.

        With S the mean slope of xi, D = D_xi/S^2 in this ring. Over many rings resistances add, so
        1/D is to be averaged, which is the mean of S times the mean of S/D_xi: that hardly differs
        from ring to ring, since xi counts resistance. With the expected S instead of the mean over
        rings, what the number of planes that happened to be drawn does to S stays out of D.
        """
        if self.setup.even:
            length = LONGER * RECORDS * window.step_nm
            ring, slope = self.setup.even_ring(length, energy)
            return ring, slope**2
        ring, slope = self.setup.ring(self.nodes, energy)
        return ring, slope * self.setup.grid.mean_slope[energy]


def long_channel(problem, stop=None, workers=1, main_events=0):
    """(LongChannel or None, reasons) for a problem in two or three dimensions.

    stop: StopRequest of the run; main_events: what the run took. reasons: why quantities are None,
    by the names of summary.json.
    """
    stop = stop or StopRequest()
    setup = setup_of(problem)
    found = INTERRUPTED if stop.flag[0] else setup.refusal()
    if found is None:
        asked = problem.scenario.simulation.target_relative_error or DEFAULT_ERROR
        found = estimate(setup, asked, max(MOST_EVENTS, main_events), stop, workers)
    if isinstance(found, str):
        return None, {"long_channel": found}
    return quantities(setup, found)


def estimate(setup, relative_error, most_events, stop, workers=1):
    """Totals of walks until D is known to relative_error or most_events are done; or why not."""
    first = _shared(setup, FIRST_WALKS)
    need = np.mean([RECORDS * setup.window(e).step_nm * setup.meetings(e) for e in _typical(setup)])
    if BATCHES * first[1] * need > most_events:
        return TOO_LONG.format(events=need * STEPS / RECORDS)
    batches = [Batch(setup, number) for number in range(BATCHES)]
    _compile(batches[0], stop)  # before threads start and the clock runs
    totals = Totals(np.zeros((BATCHES, len(LEVELS))))
    begin = time.perf_counter()
    with Parallel(n_jobs=workers, prefer="threads", return_as="generator", batch_size=1) as pool:
        walks = first if BATCHES * np.prod(first) * need < most_events else (1, first[1])
        while walks:
            try:
                samples = _round(batches, walks, stop, pool, workers)
            except BaseException:
                stop.set("interrupted")  # so that kernels in other threads end soon
                raise
            if any(sample is None for sample in samples):
                return INTERRUPTED
            totals.sums += [sums for sums, _ in samples]
            totals.events += sum(events for _, events in samples)
            totals.walks += walks[0] * walks[1]
            walks = _next_walks(setup, totals, relative_error, most_events)
    totals.seconds = time.perf_counter() - begin
    return totals


def compile_for(problem):
    """Load or compile the kernels that the endless channel of a problem needs, without a walk."""
    setup = setup_of(problem)
    if setup.refusal() is None:
        _compile(Batch(setup, 0), StopRequest())


def _compile(batch, stop):
    batch.run((0, 1), stop.flag)


def _typical(setup):
    """Some energies that stand for all, as indices into the Grid."""
    return setup.some_energies(ENERGIES[0], 0.5)


def _shared(setup, walks):
    """Walks of a batch as (walks of each energy, energies)."""
    energies = 1
    if setup.grid.weight.size > 1:
        energies = int(np.clip(walks // ENERGY_WALKS, *ENERGIES))
    return -(-walks // energies), energies


def _round(batches, walks, stop, pool, workers):
    """What each batch's run gives, in the order of the batches."""

    def run(batch):
        return batch.run(walks, stop.flag)

    tasks = [(batch,) for batch in batches]
    if workers == 1:
        return several(run, tasks)
    parts = pool(delayed(several)(run, tasks[chunk]) for chunk in chunks(len(tasks), workers))
    return list(chain.from_iterable(parts))


def _next_walks(setup, totals, relative_error, most_events):
    """The next round's walks, or None: a function of the totals alone."""
    each = totals.sums[:, 0] / totals.walks
    error = each.std(ddof=1) / np.sqrt(BATCHES) / abs(each.mean())
    room = totals.walks * (most_events / totals.events - 1.0)
    if error <= relative_error or room < 0.05 * totals.walks:
        return None
    missing = 1.05 * totals.walks * ((error / relative_error) ** 2 - 1.0)
    return _shared(setup, int(np.ceil(min(missing, GROWTH * totals.walks, room))))


def quantities(setup, totals):
    """(LongChannel, reasons) from the totals."""
    channel, bulk_nm = setup.problem.scenario.channel, setup.bulk_nm()
    path = _path(setup, totals)
    given, area, width = channel.bulk_resistivity_uohm_cm, channel.area_nm2, channel.width_nm
    ohm = 1e-3 / (AMPERE_PER_MEV * channel.degeneracy * setup.grid.mean_modes)  # of R_B
    ratio = resistivity = sheet = None
    why = {}
    if np.isfinite(bulk_nm):
        ratio = _over(bulk_nm, path)
    else:
        why["resistivity_ratio"] = NO_BULK
    if channel.dimension == 2:
        why["resistivity_uohm_cm"] = SHEET
    elif given is None and area is None:
        why["resistivity_uohm_cm"] = NO_AREA
    elif given is None:
        resistivity = _over(0.1 * ohm * area, path)  # 1 ohm nm is 0.1 micro-ohm cm
    elif ratio is None:
        why["resistivity_uohm_cm"] = NO_BULK
    else:
        resistivity = _over(given * bulk_nm, path)
    if width is None:
        why["sheet_ohm"] = NO_WIDTH
    elif given is None:
        sheet = _over(ohm * width, path)
    elif ratio is None:
        why["sheet_ohm"] = NO_BULK
    else:  # of the same material
        sheet = _over(10.0 * given * bulk_nm / channel.height_nm, path)
    steps = [RECORDS * setup.window(e).step_nm for e in _typical(setup)]
    method = METHOD.format(walks=totals.walks * BATCHES, path=np.mean(steps))
    reasons = {f"long_channel.{key}": reason for key, reason in why.items()}
    return LongChannel(ratio, resistivity, sheet, path, method), reasons


def _over(number, estimate_):
    """number/estimate as an Estimate."""
    value, factor = number / estimate_.value, number / estimate_.value**2
    bias = estimate_.systematic
    return Estimate(value, factor * estimate_.error, None if bias is None else factor * bias)


def _path(setup, totals):
    """The backscattering path in nm as an Estimate; systematic: what lies beyond the window."""

    def function(sums):
        d, twice = sums["sums"] / sums["walks"]
        return {"d": d, "change": twice - d}

    walks = np.full(BATCHES, float(totals.walks))
    value, error = jackknife(function, {"sums": totals.sums, "walks": walks})
    # Twice the change, where noise shows it: what fades like s^(-3/2), as where places are random,
    # holds about that much.
    change = np.sqrt(max(value["change"] ** 2 - (2.0 * error["change"]) ** 2, 0.0))
    bias = 2.0 * change + np.mean([setup.window(e).beyond_error_nm for e in _typical(setup)])
    factor = 2.0 * OBLIQUE[setup.dimension]
    systematic = float(factor * bias) if bias > 0.01 * error["d"] else None
    return Estimate(float(factor * value["d"]), float(factor * error["d"]), systematic)
