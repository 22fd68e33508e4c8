"""A chain of points and stretches that scatter, lose and emit: its two opposite fluxes.

It is eliminated from left to right, as one composes scattering matrices: stable for any length.
"""

from typing import NamedTuple

import numpy as np


class Response(NamedTuple):
    """Elements of a chain: to the right leave through_right v+ + back v- + source_right."""

    through_right: np.ndarray
    through_left: np.ndarray
    back: np.ndarray
    source_right: np.ndarray
    source_left: np.ndarray


def stretches(length_nm, c, k, q):
    """Response of stretches to +- dv±/dx = c (v∓ - v±) - k v± + q, arrays but for k.

    Even and odd parts of v in x relax separately (two-flux solution, Schuster 1905).
    z = tanh(kappa l/2)/kappa with kappa^2 = k (k + 2c): no cancellation for k -> 0, no overflow.
    """
    kappa = np.sqrt(k * (k + 2.0 * c))
    z = 0.5 * length_nm
    lossy = kappa > 0.0
    z[lossy] = np.tanh(kappa[lossy] * z[lossy]) / kappa[lossy]
    even = (1.0 - k * z) / (1.0 + k * z)
    odd = (1.0 - (k + 2.0 * c) * z) / (1.0 + (k + 2.0 * c) * z)
    through, back = 0.5 * (even + odd), 0.5 * (even - odd)
    source = q * 2.0 * z / (1.0 + k * z)
    return Response(through, through, back, source, source)


def eliminate(points, stretches, first, last):
    """(v+, v-) before and after each of P points with stretches between, each (P, 2).

    first, last: what enters from the left and the right.
    """
    elements = [_alternate(p, s) for p, s in zip(points, stretches, strict=True)]
    states = _states(elements, first, last)
    return states[::2], states[1::2]


def _alternate(points, stretches):
    """Point, stretch, point, ..., point."""
    both = np.empty(points.size + stretches.size)
    both[::2], both[1::2] = points, stretches
    return both.tolist()


def _states(elements, first, last):
    """(v+, v-) between the elements, shape (elements + 1, 2).

    Up to each place v+ = reflection v- + source, found from the left; then v- from the right.
    """
    reflection, source = [0.0], [first]
    for through_right, through_left, back, to_right, to_left in zip(*elements, strict=True):
        multiple = 1.0 / (1.0 - reflection[-1] * back)
        into = multiple * (source[-1] + reflection[-1] * to_left)
        source.append(to_right + through_right * into)
        reflection.append(back + through_right * multiple * reflection[-1] * through_left)
    states = [(reflection[-1] * last + source[-1], last)]
    right_to_left = zip(*(column[::-1] for column in elements), strict=True)
    for i, (_, through_left, back, _, to_left) in enumerate(right_to_left, start=2):
        from_right = through_left * states[-1][1] + to_left
        plus = (reflection[-i] * from_right + source[-i]) / (1.0 - reflection[-i] * back)
        states.append((plus, from_right + back * plus))
    return np.array(states[::-1])
