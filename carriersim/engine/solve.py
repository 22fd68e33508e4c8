"""Batches, rounds and stopping: from a Problem to the totals of its batches.

A run has a fixed number of batches, each with its own random stream. A round adds some histories
to every batch; whether to go on is decided after whole rounds only, from the batches' totals, in a
fixed order. So the result depends on the seed, not on the number of workers.
"""

import time
from dataclasses import dataclass, field
from itertools import chain

import numpy as np
from joblib import Parallel, delayed

from carriersim.engine import flights, ray_tallies, rays, streams, tallies
from carriersim.engine.directions import new_ray_stream
from carriersim.engine.straight import is_straight, normalise, solve_straight

FIRST_ROUND = 16  # histories of each batch in the first round
FIRST_ROUND_BINNED = 160  # the same with several energies, where adding up a round costs more
FIRST_STRAIGHT = 1024  # where a history is a direction, and its occupations are solved for
GROWTH = 0.6  # a round adds at most this share of the histories so far
ROUND_FLIGHTS = 6e7  # at most about this many flights in a round: half a second on one core
CHUNKS = 6  # pieces of a round for each worker
EVENT_LIMIT = 10**10  # random numbers that one history may use before the run is given up
FEW_EVENTS = 200  # both outcomes must have been seen this often before an error is believed
MANY_HISTORIES = 4_000_000  # an outcome not seen in so many histories doesn't matter


class NothingDone(RuntimeError):
    """A run was stopped before its first round was complete."""


class StopRequest:
    """Lets a signal handler or another thread end a run; kernels look at `flag`."""

    def __init__(self):
        self.flag = np.zeros(1, np.uint8)
        self.reason = ""

    def set(self, reason):
        """End the run after the last whole round; reason goes into `stopped_by`."""
        self.reason = reason
        self.flag[0] = 1


@dataclass(frozen=True)
class Goal:
    """When to stop: whichever of these comes first. None = not asked."""

    relative_error: float | None
    histories: int | None
    max_seconds: float | None
    heat_share_error: float | None = None  # absolute, of the lattice's share of I V


@dataclass
class Totals:
    """Sums over all rounds; leading axis = batches. Divide by `histories`."""

    histories: np.ndarray  # (batches,) int64
    transmitted: np.ndarray  # (batches, B)
    arrivals: np.ndarray  # (batches, K, 2)
    cells: np.ndarray  # (batches, F, C, 2)
    flights: int = 0
    reached: int = 0
    rounds: int = 0
    seconds: float = 0.0
    stopped_by: str = ""
    converged: bool = False
    # g+, g-, mean g in each bin and cell: sum, and sum of squares over the number of histories,
    # over all (batch, round) samples; None for one bin.
    field_sum: np.ndarray | None = None
    field_square: np.ndarray | None = None
    samples: int = 0
    rays: dict = field(default_factory=dict)  # sums of Sample.rays, leading axis = batches
    trouble: str = ""  # which carrier went on for ever, and where

    @property
    def all_histories(self):
        """Histories of the whole run."""
        return int(self.histories.sum())


def solve(problem, goal, workers=1, stop=None, progress=None):
    """Run until the goal is met; returns Totals. Raises NothingDone if no round was completed.

    workers: threads (the kernels release the interpreter lock). stop: StopRequest. progress: an
    object with update(histories, relative_error, target, seconds), or None.
    """
    stop = stop or StopRequest()
    simulation = problem.scenario.simulation
    batches = [stream_of(problem, simulation.seed, b) for b in range(simulation.batches)]
    offsets = [offset_of(simulation.seed, b) for b in range(simulation.batches)]
    totals = _empty_totals(problem, simulation.batches)
    run = _batch_runner(problem, batches, offsets, stop)
    compile_for(problem)  # once, before threads start and the clock runs
    begin = time.perf_counter()
    with Parallel(n_jobs=workers, prefer="threads", return_as="generator", batch_size=1) as pool:
        while not totals.stopped_by:
            sizes = _next_round(totals, goal, problem)
            try:
                ok = _one_round(problem, totals, sizes, run, pool, workers)
            except BaseException:
                stop.set("interrupted")  # so that kernels in other threads end soon
                raise
            totals.seconds = time.perf_counter() - begin
            if not ok:
                totals.stopped_by = stop.reason or "event_limit"
                break
            error = relative_error(problem, totals)
            if progress is not None:
                done = int(totals.histories.sum())
                progress.update(done, error, goal.relative_error, totals.seconds)
            _decide(problem, totals, goal, error)
    if totals.rounds == 0:
        why = totals.trouble or totals.stopped_by
        raise NothingDone(f"stopped before the first round was complete ({why})")
    return totals


def relative_error(problem, totals):
    """Relative standard error of the current (of dI/dV for bias 0 or unequal temperatures).

    inf while too few histories have taken the rarer way to say.
    """
    weight = problem.functionals.transport(problem.window)
    done = totals.histories.sum()
    rarer = min(totals.reached, done - totals.reached)
    if rarer < FEW_EVENTS and done < MANY_HISTORIES and not problem.transparent:
        return np.inf
    each = totals.transmitted @ weight / totals.histories
    mean = np.average(each, weights=totals.histories)
    if mean == 0.0:
        return np.inf
    return float(each.std(ddof=1) / np.sqrt(each.size) / abs(mean))


def stream_of(problem, seed, batch, purpose=streams.TRANSPORT):
    """Random numbers of one batch of a problem, with directions where it has any."""
    new = new_stream if problem.space is None else new_ray_stream
    return new(seed, batch, purpose)


def new_stream(seed, batch, purpose=streams.TRANSPORT):
    """Random numbers of one batch, at their beginning."""
    lanes = streams.apart((4 * streams.BLOCK,), np.uint64)
    lanes[:] = streams.seed_lanes(seed, batch, purpose)
    exponentials, uniforms = streams.apart((streams.BLOCK,)), streams.apart((streams.BLOCK,))
    streams.fill_exponentials(lanes, exponentials)
    position, flight = streams.apart((2,), np.int64), streams.apart((1,))
    position[:] = 1, streams.BLOCK
    flight[0] = exponentials[0]
    return flights.Stream(lanes, exponentials, uniforms, position, flight)


def offset_of(seed, batch):
    """Shift of a batch's low-discrepancy sequence, uint64."""
    return np.uint64(int(streams.unit_offset(seed, batch) * 2**64))


def _empty_totals(problem, batches):
    bins, nodes, cells = problem.share.size, problem.nodes_nm.size, problem.cells
    rows = tallies.cell_functionals(problem).shape[0]
    totals = Totals(
        histories=np.zeros(batches, np.int64),
        transmitted=np.zeros((batches, bins)),
        arrivals=np.zeros((batches, nodes, 2)),
        cells=np.zeros((batches, rows, cells, 2)),
    )
    if problem.bins is not None:
        totals.field_sum = np.zeros((3, bins, cells))
        totals.field_square = np.zeros((3, bins, cells))
    return totals


def _batch_runner(problem, batches, offsets, stop):
    """A function (batch, first, histories) -> Sample, or words on why it is not whole."""
    kernel = kernel_of(problem)

    def run(batch, first, histories):
        stream = batches[batch]
        status, counts, sample = kernel(first, histories, offsets[batch], stream, stop.flag)
        if status == flights.TOO_MANY_EVENTS:
            return _lost_in(problem, batch, counts)
        return sample if status == flights.DONE else ""

    return run


def kernel_of(problem):
    """A function (first, histories, offset, stream, stop flag) -> outcome, counts, Sample."""
    space, geometry, spectrum = problem.space, problem.geometry, problem.spectrum
    module = tallies if space is None else ray_tallies
    drive = None if space is None else ray_tallies.drive_of(problem)

    def one_dimension(first, histories, offset, stream, counts, flag):
        return flights.fly(
            first, histories, offset, geometry, spectrum, stream, counts, flag, EVENT_LIMIT
        )

    def directions(first, histories, offset, stream, counts, flag):
        return rays.cross(
            first, histories, offset, geometry, space.planes, *space.walls, spectrum, drive,
            stream, counts, flag, EVENT_LIMIT, None,
        )  # fmt: skip

    def straight(first, histories, offset, stream, counts, flag):
        status = solve_straight(
            first, histories, offset, geometry, space.planes, spectrum, drive, counts, flag
        )
        normalise(counts, space.oblique)
        return status

    follow = one_dimension if space is None else straight if is_straight(problem) else directions

    def run(first, histories, offset, stream, flag):
        counts = module.empty_counts(problem)
        status = follow(first, histories, offset, stream, counts, flag)
        done = status == flights.DONE
        return status, counts, module.reduce(problem, counts, histories) if done else None

    return run


def _lost_in(problem, batch, counts):
    """Words on a carrier that took more events than one may."""
    place = None if problem.space is None else problem.nodes_nm[counts.work[rays.NODE]]
    return too_many(counts.work[flights.HISTORY], batch, place)


def too_many(history, batch, place_nm):
    """Words on a carrier that took more events than one may; place_nm: of the node last met."""
    where = "" if place_nm is None else f", last seen at {place_nm:g} nm,"
    return f"carrier {history} of batch {batch}{where} used up {EVENT_LIMIT:.0e} random numbers"


def compile_for(problem):
    """Load or compile the variant of the kernels that a problem needs, without a history."""
    stream = stream_of(problem, 0, 0)
    flag = np.zeros(1, np.uint8)
    *_, sample = kernel_of(problem)(0, 0, np.uint64(0), stream, flag)
    if sample.field is not None:
        sums = np.zeros((3, *sample.field.shape[1:]))
        tallies.add_field(sample.field, 1, sums, sums.copy())


def _one_round(problem, totals, sizes, run, pool, workers):
    """Add one round to the totals; False (and totals unchanged) if it was stopped in the middle."""
    tasks = [(b, int(totals.histories[b]), int(n)) for b, n in enumerate(sizes) if n > 0]
    if workers == 1:
        results = (run(*task) for task in tasks)
    else:
        results = chain.from_iterable(
            pool(delayed(several)(run, tasks[chunk]) for chunk in chunks(len(tasks), workers))
        )
    samples = []
    sums = None
    if totals.field_sum is not None:
        sums = np.zeros_like(totals.field_sum), np.zeros_like(totals.field_square)
    complete = True
    for sample in results:  # in the order of the batches, whoever finished first
        if isinstance(sample, str):
            complete = False
            totals.trouble = totals.trouble or sample
        elif complete:
            if sums is not None:
                tallies.add_field(sample.field, sample.histories, *sums)
                sample.field = None
            samples.append(sample)
    if not complete:
        return False
    for (batch, _, _), sample in zip(tasks, samples, strict=True):
        totals.histories[batch] += sample.histories
        totals.transmitted[batch] += sample.transmitted
        totals.arrivals[batch] += sample.arrivals
        totals.cells[batch] += sample.cells
        for key, value in sample.rays.items():
            if key not in totals.rays:
                totals.rays[key] = np.zeros((totals.histories.size, *value.shape))
            totals.rays[key][batch] += value
        totals.flights += sample.flights
        totals.reached += sample.reached
    if sums is not None:
        totals.field_sum += sums[0]
        totals.field_square += sums[1]
    totals.samples += len(samples)
    totals.rounds += 1
    return True


def chunks(tasks, workers):
    """Slices of tasks, a few for each worker: handing over each batch alone costs too much."""
    size = max(1, -(-tasks // (CHUNKS * workers)))
    return [slice(start, start + size) for start in range(0, tasks, size)]


def several(run, tasks):
    return [run(*task) for task in tasks]


def _next_round(totals, goal, problem):
    """Histories for each batch in the next round: a function of the totals alone, not of time."""
    batches = totals.histories.size
    done = int(totals.histories.sum())
    first = FIRST_ROUND if problem.bins is None else FIRST_ROUND_BINNED
    wanted = (FIRST_STRAIGHT if is_straight(problem) else first) * batches
    if done:
        wanted = max(wanted, int(GROWTH * done))
        error = relative_error(problem, totals)
        if goal.relative_error and np.isfinite(error):
            missing = done * ((error / goal.relative_error) ** 2 - 1.0)
            wanted = min(wanted, max(int(1.02 * missing), done // 20, batches))
        most = int(ROUND_FLIGHTS / max(totals.flights / done, 1.0))
        wanted = max(min(wanted, most), batches)
    if goal.histories:
        wanted = min(wanted, goal.histories - done)
    even, rest = divmod(wanted, batches)
    return even + (np.arange(batches) < rest)


def _decide(problem, totals, goal, error):
    """Set stopped_by and converged when a goal has been reached."""
    if goal.relative_error and error <= goal.relative_error:
        totals.stopped_by, totals.converged = "relative_error", True
    elif goal.histories and totals.histories.sum() >= goal.histories:
        totals.stopped_by, totals.converged = "histories", not goal.relative_error
    elif goal.max_seconds and totals.seconds >= goal.max_seconds:
        totals.stopped_by, totals.converged = "max_seconds", not goal.relative_error
