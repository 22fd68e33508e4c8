"""Sample trajectories: the ways of a few carriers in two and three dimensions, to look at.

They are followed by the kernel's own source as plain Python, which records every event. Faces that
only mirror are there too, so that places across the channel are true. Sample carriers have random
numbers of their own, and count in no tally.
"""

from contextlib import suppress

import numpy as np

from carriersim.engine import ray_tallies, rays
from carriersim.engine.directions import new_ray_stream
from carriersim.engine.planes import Walls
from carriersim.engine.solve import EVENT_LIMIT
from carriersim.engine.streams import TRAJECTORIES
from carriersim.result import Trajectory

MOST_EVENTS = 2000  # recorded of one carrier, which is then left where it is
MOST_IN_ALL = 20_000  # events after which no more carriers are tried: about 0.2 s
MOST_CARRIERS = 1000  # that are tried
# Distance of the mirrors that stand for open space, in lengths of the channel: one carrier in some
# ten million comes near one, and y is known to 1e-9 of the length.
OPEN = 1e7


class _Enough(Exception):
    """The record of a carrier is full."""


def sample_trajectories(problem, count):
    """At most `count` Trajectories of an elastic problem in two or three dimensions, else none.

    Half of them are the first carriers that reach the right contact; the others are those that
    come farthest among the carriers tried which don't: they return, or are left after MOST_EVENTS
    events. Where there are too few of one kind, more of the other take their place. Energies follow
    the current of a ballistic channel. Without walls y and z count from the start.
    """
    if problem.space is None or problem.relaxed is not None or count < 1:
        return ()
    follow = _follower(problem)
    half = count if problem.transparent else (count + 1) // 2
    through, others = [], []
    tried = number = 0
    while tried < MOST_IN_ALL and number < MOST_CARRIERS:
        if len(through) >= half and len(others) >= count - half:
            break
        number += 1
        trajectory = follow(number)
        tried += trajectory.kinds.size
        (through if _arrives(problem, trajectory) else others).append(trajectory)
    others.sort(key=lambda trajectory: -trajectory.places_nm[:, 0].max())
    through = through[: max(half, count - len(others))]
    return tuple(through + others[: count - len(through)])


def _arrives(problem, trajectory):
    """Whether a carrier reaches the right contact."""
    ended = trajectory.kinds[-1] == rays.ENDED
    return bool(ended and trajectory.places_nm[-1, 0] > 0.5 * problem.nodes_nm[-1])


def _follower(problem):
    """A function from the number of a carrier (1, 2, ...) to its Trajectory."""
    space, nodes = problem.space, problem.nodes_nm
    faces, is_open = space.faces, space.faces[0] is None
    if is_open:
        far = Walls(OPEN * float(nodes[-1]), 1.0)
        faces = far, (far if space.dimension == 3 else None)
    spectrum, drive = _by_current(problem), ray_tallies.drive_of(problem)
    counts = ray_tallies.empty_counts(problem)  # which nobody reads
    seed, stop = problem.scenario.simulation.seed, np.zeros(1, np.uint8)
    offset = _offset(seed)

    def follow(number):
        places, kinds = [], []

        def record(kind, segment, x, y, z):
            places.append((nodes[segment] + x, y, z))
            kinds.append(kind)
            if len(kinds) >= MOST_EVENTS:
                raise _Enough

        stream = new_ray_stream(seed, number, TRAJECTORIES)
        with suppress(_Enough):
            rays.cross.py_func(
                number, 1, offset, problem.geometry, space.planes, *faces, spectrum, drive,
                stream, counts, stop, EVENT_LIMIT, record,
            )  # fmt: skip
        places = np.array(places, float)
        if is_open:
            places[:, 1:] -= places[0, 1:]
        return Trajectory(places, np.array(kinds, np.int64))

    return follow


def _offset(seed):
    """Shift of the sequence that spreads energies and first directions, uint64."""
    sequence = np.random.SeedSequence(seed, spawn_key=(TRAJECTORIES,))
    return sequence.generate_state(1, np.uint64)[0]


def _by_current(problem):
    """The spectrum with energies drawn by their share of the current, None without energies."""
    if problem.spectrum is None:
        return None
    share = np.abs(problem.functionals.transport(problem.window))
    cumulative = np.concatenate([[0.0], np.cumsum(share) / share.sum()])
    cumulative[-1] = 1.0
    return problem.spectrum._replace(cumulative=cumulative)
