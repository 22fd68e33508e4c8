"""Random directions against the laws that they shall follow.

Moments and distribution functions of the circle and the sphere are elementary: a component u of an
isotropic direction is uniform in d = 3 and the cosine of a uniform angle in d = 2; by the cosine
law u^2 is uniform along the normal in d = 3, and the sine in d = 2.
"""

from dataclasses import replace
from itertools import pairwise
from math import gamma, pi, sqrt

import numpy as np
import pytest
from scipy import stats
from scipy.integrate import quad

from carriersim.engine import rays
from carriersim.engine.directions import fill_isotropic, fill_lambert
from carriersim.engine.problem import build
from carriersim.engine.solve import Goal, offset_of, solve
from carriersim.engine.streams import BLOCK, seed_lanes
from carriersim.scenario import read_text
from tests.channels_in_space import yaml_of
from tests.reference_angles import Case, Plane

BLOCKS = 6000
DIMENSIONS = pytest.mark.parametrize("dimension", [2, 3])
WHOLE = pytest.mark.parametrize(("dimension", "whole"), [(2, True), (3, False), (3, True)])


def directions(fill, dimension, whole=True, blocks=BLOCKS, seed=5):
    """Many blocks of directions, (3, blocks * BLOCK)."""
    lanes = seed_lanes(seed, 0)
    found = np.zeros((blocks, 3, BLOCK))
    for block in found:
        fill(lanes, block, dimension, whole)
    return np.hstack(found)


def agrees(sample, expected):
    """The mean within 4 of its standard errors, which must be small enough to notice 2 %."""
    error = sample.std() / sqrt(sample.size)
    assert error < 0.0035 * expected
    assert abs(sample.mean() - expected) < 4 * error, (sample.mean(), expected, error)


def follows(sample, cumulative):
    """Kolmogorov's test at 6e-5, which is 4 standard errors of a normal number."""
    assert stats.kstest(sample, cumulative).pvalue > 6e-5


def moment(dimension, power, along=True):
    """<|u|^n> of a component of an isotropic direction; of the cosine law <u^n>, along or across.

    From the integrals of powers of sine and cosine (Euler's beta function).
    """
    if along:
        return (
            gamma(dimension / 2)
            * gamma((power + 1) / 2)
            / sqrt(pi)
            / gamma((dimension + power) / 2)
        )
    return (
        gamma((dimension + 1) / 2)
        * gamma((power + 1) / 2)
        / sqrt(pi)
        / gamma((dimension + power + 1) / 2)
    )


@WHOLE
def test_isotropic_moments(dimension, whole):
    u = directions(fill_isotropic, dimension, whole)
    components = range(dimension if whole else 1)
    for k in components:
        for power in (1, 2, 3, 4, 6):
            agrees(np.abs(u[k]) ** power, moment(dimension, power))
        assert abs(u[k].mean()) < 4 * u[k].std() / sqrt(u[k].size)
    for k in components:  # signs and sizes are independent
        for other in range(k):
            for product in (u[k] * u[other], u[k] ** 3 * u[other]):
                assert abs(product.mean()) < 4 * product.std() / sqrt(product.size)


@WHOLE
def test_cosine_law_moments(dimension, whole):
    u = directions(fill_lambert, dimension, whole)
    for power in (1, 2, 3, 4, 6):
        # u times the solid angle, over <u>
        agrees(u[0] ** power, moment(dimension, power + 1) / moment(dimension, 1))
    for k in range(1, dimension if whole else 1):
        for power in (2, 4):
            agrees(u[k] ** power, moment(dimension, power, along=False))
        assert abs(u[k].mean()) < 4 * u[k].std() / sqrt(u[k].size)
        product = u[k] * u[0]
        assert abs(product.mean()) < 4 * product.std() / sqrt(product.size)


def test_moments_of_this_file():
    """<|u|> and <u^2> of the circle and the sphere; <u> and <u^2> of the cosine law."""
    for dimension, one, two, emitted, across in (
        (2, 2 / pi, 1 / 2, pi / 4, 1 / 3),
        (3, 1 / 2, 1 / 3, 2 / 3, 1 / 4),
    ):
        assert moment(dimension, 1) == pytest.approx(one)
        assert moment(dimension, 2) == pytest.approx(two)
        assert moment(dimension, 2) / moment(dimension, 1) == pytest.approx(emitted)
        assert moment(dimension, 2, along=False) == pytest.approx(across)


@WHOLE
def test_distributions(dimension, whole):
    free, emitted = (directions(f, dimension, whole, 800) for f in (fill_isotropic, fill_lambert))
    if dimension == 3:
        for k in range(3 if whole else 1):
            follows(free[k], stats.uniform(-1, 2).cdf)
        follows(emitted[0] ** 2, stats.uniform.cdf)
        if whole:
            follows(np.arctan2(emitted[2], emitted[1]), stats.uniform(-pi, 2 * pi).cdf)
    else:
        follows(np.arctan2(free[1], free[0]), stats.uniform(-pi, 2 * pi).cdf)
        follows(emitted[1], stats.uniform(-1, 2).cdf)
    # Neighbours in a block and in the stream know nothing of each other.
    for u in (free[0], emitted[0]):
        for lag in (1, BLOCK):
            pair = (u[lag:] - u.mean()) * (u[:-lag] - u.mean())
            assert abs(pair.mean()) < 4 * pair.std() / sqrt(pair.size)


@pytest.mark.parametrize("fill", [fill_isotropic, fill_lambert])
@DIMENSIONS
def test_lengths_are_one_and_no_component_along_x_is_zero(fill, dimension):
    u = directions(fill, dimension)
    assert np.abs(np.sqrt(np.sum(u**2, axis=0)) - 1).max() <= 1e-15
    assert np.all(u[0] != 0) and np.abs(u).max() <= 1
    if fill is fill_lambert:
        assert np.all(u[0] > 0)
    if dimension == 2:
        assert np.all(u[2] == 0)


def _bits(fraction):
    """Lanes whose next numbers are as near to a fraction of the largest as xoshiro256++ allows.

    Its output is rotl(a + d, 23) + a, which is `a` where d = -a.
    """
    a = min(int(fraction * 2.0**64), 2**64 - 1)
    lanes = np.zeros(4 * BLOCK, np.uint64)
    lanes[:BLOCK], lanes[3 * BLOCK :] = a, -a % 2**64
    return lanes


@pytest.mark.parametrize("fraction", [0.0, 2.0**-53, 0.25, 0.5, 0.75, 1 - 2.0**-53, 1.0])
@pytest.mark.parametrize("fill", [fill_isotropic, fill_lambert])
@DIMENSIONS
def test_extreme_random_numbers(fill, dimension, fraction):
    """Along the axis and across it 1/|u_x| stays finite and the length one."""
    block = np.zeros((3, BLOCK))
    fill(_bits(fraction), block, dimension, False)
    assert np.all(np.abs(block[0]) >= 1e-16) and np.isfinite(1 / block[0]).all()
    assert np.abs(block[0]).max() <= 1
    block[:] = 0
    fill(_bits(fraction), block, dimension, True)
    assert np.abs(np.sqrt(np.sum(block**2, axis=0)) - 1).max() <= 2e-15


# --- directions that the kernel makes itself ----------------------------------------------------


@DIMENSIONS
def test_emission_at_the_left_contact(dimension):
    """By the cosine law, more evenly than at random, in every batch."""
    for batch in range(3):
        offset = offset_of(9, batch)
        cosine = np.array([rays.emitted_cosine(h, offset, dimension) for h in range(4000)])
        quantile = cosine**2 if dimension == 3 else np.sqrt(1 - cosine**2)
        assert cosine.min() > 0 and cosine.max() <= 1
        # The discrepancy of sqrt(2)'s multiples is below some 3/4000; at random it is 14/1000.
        assert stats.kstest(quantile, stats.uniform.cdf).statistic < 1e-3


def sent_back(dimension, plane, classes, histories=6e5):
    """Histogram of the cosine of what a plane at the end of a ballistic channel sends back.

    Classes are equal in the cosine, from 1 to 0.
    """
    case = Case(1, dimension, planes=(plane,))
    problem = build(read_text(yaml_of(case, 1.0, kelvin=1.0, cells=1, seed=6)))
    edges = np.linspace(1, 0, classes + 1)
    view_edges = problem.space.planes._replace(
        view_edges=edges, view_first=np.zeros_like(problem.space.planes.view_first)
    )
    problem = replace(problem, space=replace(problem.space, planes=view_edges))
    totals = solve(problem, Goal(None, int(histories), None))
    views = totals.rays["views"].sum(axis=0)[-1]
    assert views[0].sum() == pytest.approx(histories)  # everybody arrives
    return views[1]


@pytest.mark.parametrize("tunnel", [False, True])
@DIMENSIONS
def test_diffuse_reflection_at_a_plane(dimension, tunnel):
    """In proportion to (1 - T) u over the solid angle."""
    plane, classes = Plane(1, 0.4, tunnel, diffuse=True), 60

    def density(u):
        circle = sqrt(1 - u**2) if dimension == 2 else 1
        return float(plane.reflects(u)) * u / circle

    edges = np.linspace(1, 0, classes + 1)
    shares = np.array([quad(density, b, a)[0] for a, b in pairwise(edges)])
    total = shares.sum()
    arriving = quad(lambda u: density(u) / float(plane.reflects(u)), 0, 1)[0]
    counts = sent_back(dimension, plane, classes)
    assert stats.chisquare(counts, counts.sum() * shares / total).pvalue > 6e-5
    reflected = counts.sum() / 6e5
    noise = sqrt(reflected * (1 - reflected) / 6e5)
    assert noise < 0.0035 * reflected and abs(reflected - total / arriving) < 4 * noise
