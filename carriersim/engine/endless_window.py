"""How long carriers in an endless channel remember their direction: the window of correlations."""

from typing import NamedTuple

import numpy as np
from scipy.special import expn

STEPS = 8  # of a window
MEMORIES = 8.0  # decay lengths in a window: exp(-8) = 3e-4
# The same where memory fades like a power of the path: carriers that meet planes seldom, because
# they fly across the channel, or strong planes at frozen |u_x|.
SLOW_MEMORIES = 30.0
GAPS = 15.0  # spaces between planes in a window, if nothing else mixes directions
WEAK = 0.8  # transmission from which on reflections hardly follow each other
EVEN = 3.0  # planes are everywhere if no gap is longer than so many mean ones
# Widths of the room between walls, on average and of the wider pair, beyond which the few carriers
# that fly on are known.
WIDTHS, WIDEST = 60.0, 20.0
# Relative error of what is known about them, without and with planes in their way.
KNOWN, ROUGHLY_KNOWN = 0.02, 0.3


class Window(NamedTuple):
    """Steps, and the integral of <u_x(0) u_x(s)> beyond one and beyond two windows, in nm."""

    step_nm: float
    beyond_nm: tuple[float, float]
    beyond_error_nm: float


def window_of(setup, energy):
    """The Window at one energy, an index into the setup's Grid.

    Collisions forget the direction, so that correlations are at most exp(-s/l). Planes that are
    everywhere shorten that, and walls leave few carriers that remember: see _beyond.
    """
    mean, held = setup.grid.mean_rate[energy], setup.grid.held[energy]
    everywhere = held > 0.0 and setup.gap_nm * sum(p.count for p in setup.planes) <= (
        EVEN * setup.period_nm
    )
    longest = np.inf
    if mean > 0.0:
        weak = 2.0 * held if everywhere and _weak_barriers(setup, energy) else 0.0
        longest = MEMORIES / (1.0 / _longest_memory(setup, energy) + weak)
    if held and (everywhere or mean == 0.0):
        longest = min(longest, max(SLOW_MEMORIES / (2.0 * held), GAPS * setup.gap_nm))
    pairs = setup.pairs
    known = len(setup.stretches) == 1 and (not setup.planes or len(pairs) == 2)
    if not known:
        return Window(longest / STEPS, (0.0, 0.0), 0.0)
    # Mirrors unfold a room: with p^n for n walls met it counts as size (1 + p)/(1 - p).
    widths = [size * (1.0 + p) / (1.0 - p) for size, p in pairs]
    room = float(np.prod(widths))
    if pairs:
        longest = min(longest, max(WIDTHS * room ** (1.0 / len(pairs)), WIDEST * max(widths)))
    step = longest / STEPS
    tails = [
        _beyond((n + 0.5) * step, mean + 2.0 * held, room, setup.dimension, len(pairs))
        for n in (STEPS, 2 * STEPS)
    ]
    return Window(step, tuple(tails), (ROUGHLY_KNOWN if setup.planes else KNOWN) * tails[0])


def _longest_memory(setup, energy):
    """Path length in nm to a collision, in the stretches where it is longest."""
    memory = 1.0 / setup.grid.mean_rate[energy]
    if len(setup.stretches) == 1:
        return memory
    rates = np.maximum(setup.grid.rate[:, energy], 1e-300)
    return max(memory, np.minimum(1.0 / rates, 2.0 * setup.lengths_nm).max())


def _weak_barriers(setup, energy):
    """Whether all planes are tunnel barriers that reflect seldom; grazing carriers more often."""
    energy_meV = setup.grid.energy_meV[[energy]]
    least = min(plane.transmissions(energy_meV)[0].min() for plane in setup.planes)
    return least >= WEAK and all(plane.tunnel for plane in setup.planes)


def _beyond(path_nm, rate, room, dimension, pairs):
    """Integral of <u_x(0) u_x(s)> from a path length to infinity, in nm.

    What is left has met neither a collision nor a diffuse reflection. The share of directions that
    fly a path s between walls at a distance w goes as w/s for each pair: w/(pi s) in two
    dimensions, w/(4 s) for a film, with the mean of u_x^2, and w w'/(2 pi s^2) for a wire.
    """
    share = 1.0 / dimension
    if pairs == 1:
        share = room / (np.pi if dimension == 2 else 4.0)
    elif pairs == 2:
        share = room / (2.0 * np.pi)
    return float(share * path_nm ** (1 - pairs) * expn(pairs, path_nm * rate))
