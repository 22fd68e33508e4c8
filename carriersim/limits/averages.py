"""Averages over directions by quadrature, for closed forms in two and three dimensions.

mu is the cosine between a direction and the axis, 0..1 over a half space.
"""

import numpy as np


def _unit_interval(steps=64, span=3.6):
    """Nodes and weights on (0, 1), exact to rounding also for what varies near 0 on any scale.

    Double exponential rule (Takahasi & Mori, Publ. RIMS 9 (1974) 721): u = 1/(1 + exp(-pi sinh t)).
    """
    t = np.arange(-round(span * steps), round(span * steps) + 1) / steps
    node = 1.0 / (1.0 + np.exp(-np.pi * np.sinh(t)))
    return node, np.pi * np.cosh(t) * node * node[::-1] / steps


NODES, WEIGHTS = _unit_interval()


def angle_mean(function, dimension):
    """Mean of function(mu) over the solid angle of a half space.

    function takes mu (U,) and gives (..., U).
    """
    return function(_AT_ANGLE[dimension]) @ WEIGHTS


def flux_mean(function, dimension):
    """Mean of function(mu) weighted by mu, over the carriers that cross a plane; see angle_mean."""
    return function(_AT_FLUX[dimension]) @ WEIGHTS


# Nodes count from mu = 0, near which they are densest: uniform in angle or mu; in 1 - sin or mu^2.
_AT_ANGLE = {2: np.sin(0.5 * np.pi * NODES), 3: NODES}
_AT_FLUX = {2: np.sqrt(NODES * (2.0 - NODES)), 3: np.sqrt(NODES)}
