"""Closed forms in two and three dimensions against independent solutions.

The slab: its integral equation, on a mesh, with scipy's kernels. Walls: the published integrals by
mpmath, flights traced from point to point. Planes: mpmath, and the deterministic solver of
tests/reference_angles.py. Check values of published work are named where they stand.
"""

from functools import cache
from types import SimpleNamespace

import mpmath
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import constants, integrate, special

from carriersim import limits
from carriersim.result import Estimate, LongChannel, Part
from carriersim.scenario import read_text
from tests.reference_angles import Case, Plane, Section, solve

BACKSCATTER = {2: np.pi / 2, 3: 4 / 3}
R_B = constants.h / (2 * constants.e**2)
both = pytest.mark.parametrize("d", [2, 3])


def approx(expected, rel=1e-6, abs=0.0):
    """pytest.approx without its absolute tolerance of 1e-12."""
    return pytest.approx(expected, rel=rel, abs=abs)


# --- the slab: its integral equation by collocation


def _kernels(d):
    """First to third integral, from the distance to infinity, of the kernel of S(t).

    d = 3: E1/2; d = 2: K0/pi, whose integrals are Bickley's functions (Abramowitz & Stegun 11.2).
    """
    if d == 3:
        return [lambda x, n=n: special.expn(n, x) / 2 for n in (2, 3, 4)]

    def bickley(x, order):
        x = np.maximum(x, 1e-300)
        one = np.pi / 2 - special.iti0k0(x)[1]
        two = x * (special.k1(x) - one)
        return (one, two, (one + x * (special.k0(x) - two)) / 2)[order] / np.pi

    return [lambda x, order=order: bickley(x, order) for order in range(3)]


def _weights(first, second, edges):
    """Weights of S at the edges in the integral of kernel times S, S linear between edges.

    first, second: the kernel's integrals along t', (..., N).
    """
    slope = np.diff(second) / np.diff(edges)
    ends = slope[..., :1] - first[..., :1], first[..., -1:] - slope[..., -1:]
    return np.concatenate([ends[0], np.diff(slope), ends[1]], axis=-1)


def _collocation(thickness, d, cells):
    """(T, S(0), S at a quarter) with S linear in cells that are finest at the contacts."""
    first, second, third = _kernels(d)
    u = np.linspace(0, 1, cells + 1)
    t = thickness * u**3 / (u**3 + (1 - u) ** 3)
    apart = t - t[:, None]
    signed = np.sign(apart) * (first(0.0) - first(abs(apart)))
    twice = abs(apart) * first(0.0) + second(abs(apart)) - second(0.0)
    s = np.linalg.solve(np.eye(t.size) - _weights(signed, twice, t), first(t))
    out = _weights(second(thickness - t), third(thickness - t), t) @ s
    quarter = int(np.argmin(abs(u - 0.25)))
    return np.array([(second(thickness) + out) / second(0.0), s[0], s[quarter]]), t[quarter]


@cache
def slab(thickness, d):
    """((T, S(0), S), place of the last): the error falls as cells^-2, so two meshes give it."""
    coarse, _ = _collocation(thickness, d, 160)
    fine, place = _collocation(thickness, d, 320)
    return (4 * fine - coarse) / 3, place / thickness


@both
@pytest.mark.parametrize("thickness", [0.01, 0.1, 0.7, 1.0, 2.5, 8.0])
def test_slab_solves_the_integral_equation(thickness, d):
    (t, s0, s), fraction = slab(thickness, d)
    assert limits.slab_transmission(thickness, d) == approx(t, 3e-7)
    assert limits.interface_part(thickness, d) == approx((1 - s0) / t, 8e-6)
    plus, minus = limits.slab_profile(thickness, d, [0.0, fraction, 1.0])
    assert (plus + minus) / 2 == approx([s0, s, 1 - s0], 6e-6)
    assert (plus[0], minus[-1]) == approx((1.0, 0.0), 4e-6, 4e-6)


# L/l, then T: Heaslet & Warming 1965 (printed values, from memory, agree to 2e-4; these were
# recomputed from the integral equation by two methods), and the same in two dimensions.
THICKNESS = (0.1, 0.2, 0.4, 0.6, 0.8, 1, 1.5, 2, 2.5, 3, 5)
PRINTED = {
    3: (0.9157, 0.8492, 0.7459, 0.6673, 0.6047, 0.5534, 0.4573, 0.3901, 0.3402, 0.3016, 0.2077),
    2: (0.930973, 0.873759, 0.781098, 0.707885, 0.647973, 0.597792, 0.501456, 0.432178, 0.379823,
        0.338819, 0.236688),
}  # fmt: skip


@both
def test_slab_gives_the_printed_values(d):
    found = [limits.slab_transmission(thickness, d) for thickness in THICKNESS]
    assert found == approx(PRINTED[d], 0, {2: 6e-7, 3: 6e-5}[d])


def test_slab_docstring():
    assert limits.slab_transmission(1, 2) == approx(0.597792, 0, 5e-7)
    assert limits.slab_transmission(1, 3) == approx(0.553406, 0, 5e-7)


@both
def test_slab_agrees_with_the_reference_solver(d):
    for length in (0.003, 0.3, 30.0):
        found = solve(Case(length, d, 1.0, directions=48)).transmission
        assert limits.slab_transmission(length, d) == approx(found, 1e-7)


@both
def test_thin_slab_scatters_once(d):
    # Of the carriers, the mean path over L is 1/<mu> of the flux: 2 (d = 3), pi/2 (d = 2); half of
    # those that collide return. The next order is L^2 ln L.
    oblique = {2: np.pi / 2, 3: 2.0}[d]
    for thickness, tolerance in ((1e-2, 4e-2), (1e-4, 6e-4)):
        lost = 1 - limits.slab_transmission(thickness, d)
        assert lost == approx(oblique * thickness / 2, tolerance)
    assert limits.slab_transmission(0, d) == approx(1.0, 1e-11)
    assert limits.interface_part(0, d) == approx(0.5, 1e-11)


@both
def test_thick_slab_is_two_milne_problems(d):
    # The extrapolation length from the kernel's Fourier transform k(q) by Wiener and Hopf's method
    # (Hopf 1934), c q^2 the start of 1 - k; atan(q)/q on a sphere, 1/sqrt(1 + q^2) on a circle.
    transform = {2: lambda q: 1 / mpmath.sqrt(1 + q * q), 3: lambda q: mpmath.atan(q) / q}[d]

    def integrand(angle):
        q = mpmath.tan(angle)
        kernel = (1 - transform(q)) * (1 + half_moment * q * q) / (half_moment * q * q)
        return mpmath.log(kernel) / mpmath.sin(angle) ** 2

    with mpmath.workdps(50):
        half_moment = mpmath.mpf(1) / d
        start, stop = mpmath.mpf("1e-12"), mpmath.pi / 2 - mpmath.mpf("1e-12")
        area = mpmath.quad(integrand, [start, 0.1, 1, 1.4, 1.55, stop])
        extrapolation = mpmath.sqrt(half_moment) - area / mpmath.pi
    assert float(extrapolation) == approx({2: 0.5 + 1 / np.pi, 3: 0.7104460896}[d], 1e-9)
    for thickness in (20.0, 1e4):
        expected = BACKSCATTER[d] / (thickness + 2 * float(extrapolation))
        assert limits.thick_slab_transmission(thickness, d) == approx(expected, 1e-8)
        assert limits.slab_transmission(thickness, d) == approx(expected, 1e-8)
    for thickness, error in ((1, 5e-3), (3, 2e-4), (7, 1e-6)):
        exact = limits.slab_transmission(thickness, d)
        assert limits.thick_slab_transmission(thickness, d) == approx(exact, error)
    assert limits.thick_slab_transmission(0.0, 3) == approx(4 / 3 / 1.420892)
    assert limits.thick_slab_transmission(0.0, 2) == approx(np.pi / 2 / 1.636620)


@both
def test_interface_of_a_thick_slab(d):
    # S(0) of Milne's problem is 1/sqrt(3) of the slope (Hopf 1934), 1/sqrt(2) on a circle.
    expected = {2: 0.450158, 3: 0.433013}[d]
    assert limits.interface_part(1e3, d) == approx(expected, 1e-6)
    assert expected == approx({2: np.sqrt(2) / np.pi, 3: np.sqrt(3) / 4}[d], 1e-6)


@both
@given(data=st.data())
@settings(max_examples=30, deadline=None)
def test_slab_properties(d, data):
    thickness = data.draw(st.floats(1e-6, 1e5))
    t = limits.slab_transmission(thickness, d)
    assert limits.slab_transmission(1.01 * thickness, d) < t < 1
    # Ohm's law with contacts: R is at least that of the channel, at most that and R_B.
    assert 1 + thickness / BACKSCATTER[d] < 1 / t < 1.04 * (1 + thickness / BACKSCATTER[d])
    fraction = np.sort(np.array(data.draw(st.lists(st.floats(0, 1), min_size=2, max_size=9))))
    plus, minus = limits.slab_profile(thickness, d, fraction)
    assert np.all(np.diff(plus) <= 1e-9) and np.all(np.diff(minus) <= 1e-9)
    assert np.all(plus > minus) or thickness > 1e3
    turned = limits.slab_profile(thickness, d, 1 - fraction)
    assert turned[0] + minus == approx(np.ones(fraction.size), 1e-9)


def test_simple_formula_and_its_error():
    assert limits.simple_transmission(2.0, 3) == approx(1 / (1 + 1.5), 1e-12)
    assert limits.simple_transmission(2.0, 2) == approx(1 / (1 + 4 / np.pi), 1e-12)
    for d, largest in ((2, 0.023), (3, 0.034)):
        errors = [limits.simple_error(thickness, d) for thickness in np.linspace(0.4, 1.0, 61)]
        assert max(errors) == approx(largest, 0, 5e-4)
        assert abs(0.4 + 0.01 * np.argmax(errors) - 0.7) < 0.07
        assert abs(limits.simple_error(1e-5, d)) < 1e-4 > abs(limits.simple_error(1e5, d))
    (t, _, _), _ = slab(1.0, 3)
    assert limits.simple_error(1.0, 3) == approx(4 / 7 / t - 1, 1e-5)


# --- films and ribbons


def fuchs(kappa, p):
    """Sondheimer, Adv. Phys. 1 (1952) 1: the film, by mpmath."""
    with mpmath.workdps(25):
        k = mpmath.mpf(kappa)

        def integrand(t):
            decay = mpmath.exp(-k * t)
            return (t**-3 - t**-5) * (1 - decay) / (1 - p * decay)

        area = mpmath.quad(integrand, [1, 2, 10, 100, 1e4, 1e6, mpmath.inf])
        return float(1 - 3 / (2 * k) * (1 - p) * area)


def on_a_circle(kappa, p):
    """The same derivation in two dimensions."""
    with mpmath.workdps(25):
        k = mpmath.mpf(kappa)

        def integrand(a):
            decay = mpmath.exp(-k / mpmath.sin(a))
            across = mpmath.cos(a) ** 2 * mpmath.sin(a)
            return across * (1 - decay) / (1 - p * decay)

        cuts = [0, *(cut for cut in (1e-3, 1e-2, 0.1, 0.5)), mpmath.pi / 2]
        return float(1 - 4 * (1 - p) / (mpmath.pi * k) * mpmath.quad(integrand, cuts))


@pytest.mark.parametrize("p", [0.0, 0.3, 0.9])
@pytest.mark.parametrize("kappa", [0.01, 0.3, 2.0, 50.0])
def test_film_and_ribbon_are_the_published_integrals(kappa, p):
    assert limits.film_conductivity_ratio(kappa, p) == approx(fuchs(kappa, p), 1e-9)
    assert limits.ribbon_conductivity_ratio(kappa, p) == approx(on_a_circle(kappa, p), 1e-9)


def test_film_check_values():
    # rho/rho0 for p = 0 (Fuchs 1938; Sondheimer 1952), thickness over mean free path
    found = 1 / limits.film_conductivity_ratio([0.1, 0.3, 1, 3, 10])
    assert found == approx([4.78166, 2.46587, 1.46229, 1.14140, 1.03896], 0, 6e-6)
    assert 1 / limits.ribbon_conductivity_ratio(1) == approx(1.53062, 0, 6e-6)
    # p = 0 in exponential integrals: 1 - (3/2k)(1/4 - E3 + E5)
    kappa = np.array([0.05, 0.7, 4.0])
    closed = 1 - 1.5 / kappa * (0.25 - special.expn(3, kappa) + special.expn(5, kappa))
    assert limits.film_conductivity_ratio(kappa) == approx(closed, 1e-11)


@pytest.mark.parametrize("p", [0.0, 0.4])
def test_thick_and_thin_films(p):
    # Sondheimer 1952: 1 - 3(1-p)/(8k); (3k/4)((1+p)/(1-p))(ln(1/k) + 0.4228), for p = 0 exactly.
    film, ribbon = limits.film_conductivity_ratio, limits.ribbon_conductivity_ratio
    assert 1 - film(1e3, p) == approx(0.375e-3 * (1 - p), 1e-9)
    assert 1 - ribbon(1e3, p) == approx(4e-3 / (3 * np.pi) * (1 - p), 1e-9)
    if p == 0.0:
        assert film(1e-7) == approx(0.75e-7 * (np.log(1e7) + 1 - np.euler_gamma), 1e-6)
        assert 1 - np.euler_gamma == approx(0.4228, 1e-4)
    else:
        leading = 0.75 * (1 + p) / (1 - p)
        ratio = film(1e-7, p) / 1e-7 - film(1e-9, p) / 1e-9
        assert ratio == approx(leading * -np.log(100), 1e-4)


@pytest.mark.parametrize(
    "ratio", [limits.film_conductivity_ratio, limits.ribbon_conductivity_ratio]
)
def test_films_and_ribbons_at_the_ends(ratio):
    assert ratio([1e-3, 1.0, 50.0], 1.0) == approx([1, 1, 1], 1e-12)
    assert ratio(np.inf, 0.3) == approx(1.0, 1e-12) and ratio(0.0, 0.3) == 0.0
    assert 0 < ratio(1e-12) < 1e-10
    kappa, p = np.geomspace(1e-6, 1e4, 60), np.linspace(0, 1, 30)
    assert np.all(np.diff(ratio(kappa, 0.2)) > 0) and np.all(np.diff(ratio(0.3, p)) > 0)
    assert ratio(kappa[:, None], p).shape == (60, 30)


# --- wires


def wire_by_directions(width, height, points=60):
    """p = 0: mean over directions of the mean over the cross-section of 1 - exp(-distance).

    From a random point the way back to the wall along a direction is longer than s with probability
    (1 - s/W)(1 - s/H), W and H the ways from face to face.
    """
    node, weight = np.polynomial.legendre.leggauss(points)
    polar, along = np.pi / 4 * (1 + node), np.pi / 4 * weight
    corner, found = np.arctan2(height, width), 0.0
    for low, high in ((0.0, corner), (corner, np.pi / 2)):
        # Denser towards the corner and the faces, where the ways become long.
        u = 0.5 * (1 + node)
        angle = low + (high - low) * u**2 * (3 - 2 * u)
        around = (high - low) * 3 * weight * u * (1 - u)
        across = np.sin(polar)[:, None]
        w, h = width / (across * np.cos(angle)), height / (across * np.sin(angle))
        nearest = np.minimum(w, h)
        a, b = 1 / w, 1 / h
        e = np.exp(-nearest)
        moments = 1 - e, 1 - e * (1 + nearest), 2 - e * (2 + 2 * nearest + nearest**2)
        kept = moments[0] - (a + b) * moments[1] + a * b * moments[2]
        found += (along * np.cos(polar) ** 2 * np.sin(polar)) @ kept @ around
    return 6 / np.pi * found


@pytest.mark.parametrize(
    ("width", "height"), [(1, 1), (0.1, 0.1), (0.3, 2.0), (5, 4), (0.02, 1.0), (30, 30)]
)
def test_wire_is_the_mean_over_directions(width, height):
    expected = wire_by_directions(width, height)
    assert limits.wire_conductivity_ratio(width, height) == approx(expected, 1e-6)
    assert limits.wire_conductivity_ratio(height, width) == approx(expected, 1e-6)


def test_square_wire_check_value():
    # rho/rho0 for p = 0 and side = l: the case of MacDonald & Sarginson 1950; the value was
    # confirmed by simulation.
    assert 1 / limits.wire_conductivity_ratio(1, 1) == approx(1.932775, 0, 6e-7)


def test_thin_square_wire():
    # To first order in the side every carrier flies from wall to wall: 3/2 of the mean distance
    # integral, int int (1-y)(1-z)/sqrt(y^2 + z^2) over the unit square.
    def ways(z, y):
        return (1 - y) * (1 - z) / np.hypot(y, z)

    area, _ = integrate.dblquad(ways, 0, 1, lambda y: 0, lambda y: y, epsabs=1e-9)
    assert limits.wire_conductivity_ratio(1e-6, 1e-6) == approx(1.5e-6 * 2 * area, 2e-5)


def traced(width, height, p, q, points=14, walls=40):
    """Any p: flights traced back wall by wall from Gauss points in the cross-section."""
    node, weight = np.polynomial.legendre.leggauss(points)
    u, w = 0.5 * (1 + node), 0.5 * weight
    y, z, cosine, angle = np.meshgrid(u * width, u * height, u, np.pi / 2 * u, indexing="ij")
    shares = np.multiply.outer(np.multiply.outer(w, w), np.multiply.outer(3 * w * u**2, w))
    sine = np.sqrt(1 - cosine**2)
    hits = np.arange(walls)
    to_width = (y[..., None] + width * hits) / (sine * np.cos(angle))[..., None]
    to_height = (z[..., None] + height * hits) / (sine * np.sin(angle))[..., None]
    ways = np.concatenate([to_width, to_height], axis=-1)
    order = np.argsort(ways, axis=-1)
    kept = np.where(order < walls, p, q)
    after = np.cumprod(kept, axis=-1)
    before = np.concatenate([np.ones((*y.shape, 1)), after[..., :-1]], axis=-1)
    lost = np.exp(-np.take_along_axis(ways, order, axis=-1)) * (before - after)
    return float(np.sum(shares * (1 - lost.sum(axis=-1))))


@pytest.mark.parametrize(
    "case", [(1, 1, 0, 0), (0.5, 1.5, 0.3, 0.7), (0.3, 0.4, 0.6, 0.0), (2, 0.5, 0.5, 0.8)]
)
def test_wire_is_the_mean_over_traced_flights(case):
    assert limits.wire_conductivity_ratio(*case) == approx(traced(*case), 2e-3)


@pytest.mark.parametrize("case", [(1, 1, 0.1, 0.1), (0.1, 0.4, 0.2, 0.1), (0.6, 0.05, 0.05, 0.2)])
def test_specular_wire_is_a_sum_over_rough_ones(case):
    # Flights between diffuse reflections at n-th walls are those of a wire n times as wide:
    # (1-p)^2 sum of n p^(n-1) (Sondheimer 1952), for each pair of faces.
    width, height, p, q = case
    n = np.arange(1, 12)
    first, second = ((1 - share) ** 2 * n * share ** (n - 1.0) for share in (p, q))
    total = sum(
        of_one * of_other * limits.wire_conductivity_ratio(a * width, b * height)
        for a, of_one in zip(n, first, strict=True)
        for b, of_other in zip(n, second, strict=True)
        if of_one * of_other > 1e-8
    )
    assert limits.wire_conductivity_ratio(*case) == approx(total, 1e-6)


def test_wire_between_mirrors_is_a_film():
    for kappa, p in ((0.3, 0.0), (2.0, 0.4)):
        film = float(limits.film_conductivity_ratio(kappa, p))
        assert limits.wire_conductivity_ratio(kappa, 0.7, p, 1.0) == approx(film, 1e-12)
        assert limits.wire_conductivity_ratio(0.7, kappa, 1.0, p) == approx(film, 1e-12)
        assert limits.wire_conductivity_ratio(kappa, 1e7, p, 0.0) == approx(film, 1e-6)
        assert limits.wire_conductivity_ratio(kappa, np.inf, p, 0.0) == approx(film, 1e-6)
        nearly = limits.wire_conductivity_ratio(kappa, 0.7, p, 0.99999)
        assert nearly == approx(film, 1e-4) and nearly < film
    assert limits.wire_conductivity_ratio(0.2, 0.3, 1.0, 1.0) == approx(1.0, 1e-12)


def test_thick_wire():
    # Far from the edges each face takes 3/(16 kappa), as in a thick film.
    found = 1 - limits.wire_conductivity_ratio(2e3, 3e3)
    assert found == approx(0.375 * (1 / 2e3 + 1 / 3e3), 1e-3)


@given(st.floats(0.02, 20), st.floats(0.02, 20), st.floats(0, 0.9), st.floats(0, 0.9))
@settings(max_examples=15, deadline=None)
def test_wire_properties(width, height, p, q):
    found = limits.wire_conductivity_ratio(width, height, p, q)
    film = limits.film_conductivity_ratio([width, height], [p, q])
    assert film[0] * film[1] < found < min(film) * (1 + 1e-6)
    assert limits.wire_conductivity_ratio(1.05 * width, height, p, q) > found
    assert limits.wire_conductivity_ratio(width, height, p, q + 0.05) > found


# --- planes


def mayadas_shatzkes(a, d):
    with mpmath.workdps(60):
        a = mpmath.mpf(a)
        if d == 3:
            return float(1 - 3 * a / 2 + 3 * a**2 - 3 * a**3 * mpmath.log(1 + 1 / a))
        s = mpmath.sqrt(abs(1 - a * a))
        last = mpmath.log((1 + s) / a) / s if a < 1 else mpmath.acos(1 / a) / s
        return float(1 - 4 * a / mpmath.pi + 2 * a**2 - 4 / mpmath.pi * a**3 * last)


@both
def test_mayadas_shatzkes(d):
    alpha = np.array([1e-9, 1e-4, 0.03, 0.5, 0.9, 1.1, 2.0, 30.0, 1e4, 1e8])
    expected = [mayadas_shatzkes(a, d) for a in alpha]
    assert limits.mayadas_shatzkes_ratio(alpha, d) == approx(expected, 1e-12)
    assert limits.mayadas_shatzkes_ratio(0.0, d) == approx(1.0, 1e-12)
    leading = {2: 4 / np.pi, 3: 1.5}[d]  # and 3/(4a), 8/(3 pi a) for large a
    assert 1 - limits.mayadas_shatzkes_ratio(1e-6, d) == approx(1e-6 * leading, 1e-5)
    large = {2: 8 / (3 * np.pi), 3: 0.75}[d]
    assert limits.mayadas_shatzkes_ratio(1e8, d) * 1e8 == approx(large, 1e-7)
    assert np.all(np.diff(limits.mayadas_shatzkes_ratio(np.geomspace(1e-6, 1e6, 99), d)) < 0)


def test_mayadas_shatzkes_check_values():
    # rho/rho0 of Mayadas & Shatzkes 1970, evaluated; and on a circle
    found = 1 / limits.mayadas_shatzkes_ratio([0.5, 2.0])
    assert found == approx([1.70062, 3.71972], 0, 6e-6)
    assert 1 / limits.mayadas_shatzkes_ratio(0.5, 2) == approx(1.60939, 0, 6e-6)


def resistivity(d, spacing, plane):
    """rho/rho0 of evenly spaced planes from two lengths (l = 1), by the reference solver."""
    counts = (40, 60) if spacing < 0.5 else (20, 30)
    resistance = []
    for n in counts:
        planes = tuple(Plane((i + 0.5) * spacing, *plane) for i in range(n))
        case = Case(n * spacing, d, 1.0, planes=planes)
        resistance.append(1 / solve(case).transmission)
    added = (counts[1] - counts[0]) * spacing
    return (resistance[1] - resistance[0]) / added * BACKSCATTER[d]


@both
def test_many_tunnel_planes_need_the_factor_two(d):
    spacing, gamma = 0.1, 0.025
    alpha = limits.grain_alpha(1.0, spacing, gamma)
    assert alpha == approx(0.5, 1e-12)
    expected = 1 / limits.mayadas_shatzkes_ratio(alpha, d)
    assert resistivity(d, spacing, (1 / (1 + gamma), True)) == approx(expected, 2e-4)
    without = 1 / limits.mayadas_shatzkes_ratio(alpha / 2, d)
    assert without < 0.85 * expected


@both
@pytest.mark.parametrize("spacing", [0.1, 1.0, 5.0])
@pytest.mark.parametrize("tunnel", [True, False])
def test_many_planes_further_apart(spacing, tunnel, d):
    strength = limits.grain_alpha(1.0, spacing, 1.0)
    gamma = 2.0 / strength
    alpha, constant = (2.0, 0.0) if tunnel else (0.0, 2.0)
    expected = 1 / limits.mayadas_shatzkes_ratio(alpha, d, constant)
    found = resistivity(d, spacing, (1 / (1 + gamma), tunnel))
    excess = expected / found - 1
    assert -1e-5 < excess < {0.1: 2e-4, 1.0: 0.01, 5.0: 0.03}[spacing]


def planes_of(transmissions, tunnel):
    kinds = zip(transmissions, tunnel, strict=True)
    return tuple(Plane(0.1 * (i + 1), *kind) for i, kind in enumerate(kinds))


@both
@pytest.mark.parametrize(
    ("transmissions", "tunnel"),
    [([0.5], [True]), ([0.3, 0.8, 0.6], [True, False, True]), ([0.2, 0.7], [False, False])],
)
def test_planes_alone(transmissions, tunnel, d):
    found = limits.planes_transmission(transmissions, tunnel, d)
    interface, parts = limits.planes_parts(transmissions, tunnel, d)
    # Directly from the definition: the mean over the flux, and steps of each angle.
    steps = [
        (lambda mu, t=t: (1 - t) / t / mu**2) if own else (lambda mu, t=t: (1 - t) / t)
        for t, own in zip(transmissions, tunnel, strict=True)
    ]

    def passing(mu):
        return 1 / (1 + sum(step(mu) for step in steps))

    def mean(function, power):
        def integrand(angle):
            mu = np.sin(angle)
            return function(mu) * mu**power * (np.cos(angle) if d == 3 else 1.0)

        whole = {(2, 0): np.pi / 2, (2, 1): 1.0, (3, 0): 1.0, (3, 1): 0.5}[d, power]
        return integrate.quad(integrand, 0, np.pi / 2, epsabs=1e-12)[0] / whole

    assert found == approx(mean(passing, 1), 1e-9)
    assert 2 * interface * found == approx(mean(passing, 0), 1e-9)
    for part, step in zip(parts, steps, strict=True):
        expected = mean(lambda mu, step=step: passing(mu) * step(mu), 0)
        assert part * found == approx(expected, 1e-9)
    assert 2 * interface + parts.sum() == approx(1 / found, 1e-12)
    # And against the reference solver, whose angles are independent.
    solution = solve(Case(1.0, d, planes=planes_of(transmissions, tunnel), directions=64))
    assert found == approx(solution.transmission, 1e-6)
    before = solution.f_plus(0.1, "left") + solution.f_minus(0.1, "left")
    after = solution.f_plus(0.1, "right") + solution.f_minus(0.1, "right")
    assert parts[0] * found == approx((before - after) / 2, 1e-4)


def test_planes_closed_forms():
    assert limits.planes_transmission([0.5], [True], 3) == approx(0.306853, 0, 5e-7)
    assert limits.planes_transmission([0.5], [True], 2) == approx(0.376775, 0, 5e-7)
    with mpmath.workdps(60):
        for t in (1e-8, 0.01, 0.5, 0.9999):
            gamma = (1 - mpmath.mpf(t)) / mpmath.mpf(t)
            root = mpmath.sqrt(1 + gamma)
            sphere = float(1 - gamma * mpmath.log(1 + 1 / gamma))
            circle = float(1 - gamma * mpmath.atanh(1 / root) / root)
            assert limits.planes_transmission([t], [True], 3) == approx(sphere, 1e-12)
            assert limits.planes_transmission([t], [True], 2) == approx(circle, 1e-12)


@both
def test_constant_planes_follow_the_series_law(d):
    # Datta 1995: angles do not matter, and each contact takes half of R_B.
    transmissions = [0.2, 0.5, 1.0]
    assert limits.planes_transmission(transmissions, [False] * 3, d) == approx(1 / 6, 1e-12)
    interface, parts = limits.planes_parts(transmissions, [False] * 3, d)
    assert (interface, *parts) == approx((0.5, 4.0, 1.0, 0.0), 1e-12)
    assert limits.planes_transmission([], [], d) == approx(1.0, 1e-12)
    assert limits.planes_parts([], [], d)[0] == approx(0.5, 1e-12)
    assert limits.planes_transmission([1.0], [True], d) == approx(1.0, 1e-12)


# --- which of them apply


def scenario(channel, scattering="{}", contacts="", more="", bias=10.0):
    return read_text(
        f"channel: {{{channel}}}\n"
        f"contacts: {{bias_mV: {bias}, temperature_K: 4{contacts}}}\n"
        f"scattering: {scattering}\n{more}"
    )


def rows(*arguments, **named):
    return limits.limits_for(scenario(*arguments, **named))


def by_quantity(found, holds="exact"):
    """{quantity: expected} of the rows that stand once."""
    return {row.quantity: row.expected for row in found if row.holds == holds}


def by_name(found):
    return {row.name: row.expected for row in found}


def quantities(found):
    return {row.quantity for row in found}


@both
def test_rows_of_a_slab(d):
    found = rows(f"length_nm: 100, dimension: {d}", "{mean_free_path_nm: 50}")
    (t, s0, _), _ = slab(2.0, d)
    expected = by_quantity(found)
    assert expected["transmission"] == approx(t, 1e-6)
    assert expected["resistance_ohm"] == approx(R_B / t, 1e-6)
    assert expected["current_A"] == approx(0.01 * t / R_B, 1e-6)
    assert expected["conductance_S"] == approx(t / R_B, 1e-6)
    assert expected["ballistic_resistance_ohm"] == approx(R_B, 1e-9)
    assert expected["heat_W.left_contact"] == approx(0.01**2 * t / R_B / 2, 1e-5)
    lorenz = np.pi**2 / 3 * (constants.k / constants.e) ** 2
    assert expected["thermal.conductance_W_per_K"] == approx(lorenz * 4 * t / R_B, 1e-5)
    assert expected["thermal.seebeck_V_per_K"] == 0.0
    parts = by_name(found)
    assert parts["left interface"] == approx(R_B * (1 - s0) / t, 1e-5)
    assert parts["right interface"] == approx(R_B * (1 - s0) / t, 1e-5)
    assert parts["0 to 100 nm"] == approx(R_B * (2 * s0 - 1) / t, 1e-5)
    simple = by_quantity(found, "approximate")["resistance_ohm"]
    assert simple == approx(R_B * (1 + 2 / BACKSCATTER[d]), 1e-9)


@both
def test_only_mean_free_paths_count(d):
    named = (
        "{mean_free_path_nm: [{name: a, mean_free_path_nm: 100}, "
        f"{{name: b, backscatter_path_nm: {BACKSCATTER[d] * 100}}}]}}"
    )
    found = rows(f"length_nm: 100, dimension: {d}", named)
    (t, s0, _), _ = slab(2.0, d)
    assert by_quantity(found)["transmission"] == approx(t, 1e-6)
    inside = by_name(found)
    assert inside["0 to 100 nm, a"] == approx(R_B * (s0 - 0.5) / t, 1e-5)
    assert inside["0 to 100 nm, b"] == approx(R_B * (s0 - 0.5) / t, 1e-5)
    # Sections, one of them ballistic, and mirrors: 40/100 + 20/12.5 = 2 free paths in all.
    sections = "[{from_nm: 0, to_nm: 40}, {from_nm: 40, to_nm: 60, mean_free_path_nm: 12.5}]"
    cross = ", width_nm: 9" + (", height_nm: 7" if d == 3 else "")
    found = rows(
        f"length_nm: 100, dimension: {d}{cross}",
        f"{{mean_free_path_nm: 100, sections: {sections}}}",
    )
    assert by_quantity(found)["transmission"] == approx(t, 1e-6)
    assert not any(name.startswith("0 to") for name in by_name(found))
    reference = Case(
        100.0, d, 100.0, (Section(0.0, 40.0, None), Section(40.0, 60.0, 12.5)), directions=48
    )
    assert solve(reference).transmission == approx(t, 1e-6)
    assert not any(quantity.startswith("long_channel") for quantity in quantities(found))


@both
def test_rows_of_planes(d):
    points = (
        "{points: [{position_nm: 20, transmission: 0.4, angular: tunnel}, "
        "{position_nm: 70, transmission: 0.5}, {position_nm: 80, transmission: 1.0}]}"
    )
    found = rows(f"length_nm: 100, dimension: {d}", points, ", left: {transmission: 0.7}")
    transmissions, tunnel = [0.7, 0.4, 0.5], [False, True, False]
    t = limits.planes_transmission(transmissions, tunnel, d)
    interface, parts = limits.planes_parts(transmissions, tunnel, d)
    assert by_quantity(found)["transmission"] == approx(t, 1e-9)
    names = ["left interface", "right interface"]
    names += ["left contact barrier", "plane at 20 nm", "plane at 70 nm"]
    expected = R_B * np.array([interface, interface, *parts])
    assert [by_name(found)[name] for name in names] == approx(expected, 1e-9)
    flux = limits.planes_transmission([0.4], [True], d)
    simple = by_quantity(found, "approximate")["resistance_ohm"]
    assert simple == approx(R_B * (1 + 3 / 7 + 1 + (1 - flux) / flux), 1e-9)


def test_rows_where_diffuse_reflection_mixes_nothing():
    def points(*planes):
        return "{points: [" + ", ".join(planes) + "]}"

    flat = "{position_nm: 20, transmission: 0.4, reflection: diffuse}"
    steep = "{position_nm: 30, transmission: 0.4, angular: tunnel}"
    both_ways = "{position_nm: 50, transmission: 0.5, angular: tunnel, reflection: diffuse}"
    channel = "length_nm: 100, dimension: 3"
    series = rows(channel, points(flat, "{position_nm: 70, transmission: 0.5}"))
    assert by_quantity(series)["transmission"] == approx(1 / 3.5, 1e-9)
    assert not by_quantity(series, "approximate")
    alone = rows(channel, points(both_ways))
    assert by_quantity(alone)["transmission"] == approx(0.306853, 2e-6)
    case = Case(100.0, 3, planes=(Plane(50.0, 0.5, True, True),), directions=64)
    assert solve(case).transmission == approx(0.306853, 2e-6)
    for pair in ((flat, steep), (flat, both_ways), (steep, both_ways)):
        found = rows(channel, points(*pair))
        assert "transmission" not in quantities(found)
        assert "resistance_ohm" in by_quantity(found, "approximate")


def test_many_planes_are_summed():
    planes = ", ".join(
        f"{{position_nm: {i + 1}, transmission: 0.9, angular: tunnel}}" for i in range(40)
    )
    found = rows("length_nm: 100, dimension: 2", f"{{points: [{planes}]}}")
    (row,) = [row for row in found if row.name == "40 planes, sum"]
    _, parts = limits.planes_parts([0.9] * 40, [True] * 40, 2)
    assert row.expected == approx(R_B * parts.sum(), 1e-9)
    one = Part("plane", "point", Estimate(2.0, 0.1), position_nm=1.0)
    other = Part("contact", "interface", Estimate(5.0, 0.1), position_nm=0.0)
    whole = SimpleNamespace(breakdown=(one, one, other), resistance_ohm=Estimate(9.0, 0.1))
    assert row.select(whole).value == 4.0


def test_ballistic_channel():
    found = by_quantity(rows("length_nm: 100, dimension: 3"))
    assert found["transmission"] == approx(1.0, 1e-9)
    assert found["resistance_ohm"] == approx(R_B, 1e-9)


def test_modes_of_the_cross_section():
    # Datta 1995: k W/pi and k^2 W H/(4 pi) modes
    ribbon = rows("length_nm: 100, dimension: 2, width_nm: 30, fermi_wavenumber_per_nm: 2")
    assert by_quantity(ribbon)["ballistic_resistance_ohm"] == approx(R_B * np.pi / 60, 1e-9)
    assert by_quantity(ribbon)["resistance_ohm"] == approx(R_B * np.pi / 60, 1e-9)
    sides = "width_nm: 20, height_nm: 30, fermi_wavenumber_per_nm: 2"
    wire = rows(f"length_nm: 100, dimension: 3, {sides}, degeneracy: 4")
    expected = R_B / 2 * 4 * np.pi / (4 * 600)
    assert by_quantity(wire)["ballistic_resistance_ohm"] == approx(expected, 1e-9)


def test_bulk_resistivity_is_that_of_free_electrons():
    # Drude's sigma = n e^2 l/(hbar k) with n = k^3/(3 pi^2), k^2/(2 pi): k = 13.6/nm, l = 39 nm is
    # near copper's 1.7 micro-ohm cm.
    k, path = 13.6e9, 39e-9
    sides = "width_nm: 20, height_nm: 30, fermi_wavenumber_per_nm: 13.6"
    found = by_quantity(rows(f"length_nm: 100, dimension: 3, {sides}", "{mean_free_path_nm: 39}"))
    sigma = k**2 * constants.e**2 * path / (3 * np.pi**2 * constants.hbar)
    assert found["long_channel.resistivity_uohm_cm"] == approx(1e8 / sigma, 1e-8)
    assert found["long_channel.resistivity_ratio"] == 1.0
    assert found["long_channel.backscatter_path_nm"] == approx(52.0, 1e-12)
    sides = "width_nm: 20, fermi_wavenumber_per_nm: 0.3"
    found = by_quantity(rows(f"length_nm: 100, dimension: 2, {sides}", "{mean_free_path_nm: 39}"))
    sheet = 2 * np.pi * constants.hbar / (0.3e9 * constants.e**2 * path)
    assert found["long_channel.sheet_ohm"] == approx(sheet, 1e-8)
    assert found["long_channel.backscatter_path_nm"] == approx(39 * np.pi / 2, 1e-12)


def test_rows_of_endless_channels():
    path = "{mean_free_path_nm: 100}"
    size = "length_nm: 3000, dimension: 3, width_nm: 10, height_nm: 100"
    film = rows(f"{size}, specularity: {{width: 1, height: 0}}, bulk_resistivity_uohm_cm: 2", path)
    expected = by_quantity(film)
    assert expected["long_channel.resistivity_ratio"] == approx(1.46229, 4e-6)
    assert expected["long_channel.resistivity_uohm_cm"] == approx(2 * 1.46229, 4e-6)
    assert expected["long_channel.backscatter_path_nm"] == approx(400 / 3 / 1.46229, 4e-6)
    assert "transmission" not in quantities(film)
    square = size.replace("width_nm: 10,", "width_nm: 100,")
    wire = by_quantity(rows(f"{square}, specularity: 0", path))
    assert wire["long_channel.resistivity_ratio"] == approx(1.932775, 1e-6)
    simple = by_quantity(rows(f"{square}, specularity: 0", path), "approximate")
    assert simple["resistance_ohm"] == approx(R_B * (1 + 22.5 * 1.932775), 1e-6)
    partly = by_quantity(rows(f"{size}, specularity: {{width: 0.4, height: 0.7}}", path))
    ratio = limits.wire_conductivity_ratio(0.1, 1.0, 0.4, 0.7)
    assert partly["long_channel.resistivity_ratio"] == approx(1 / ratio, 1e-9)
    flat = "length_nm: 3000, dimension: 2, width_nm: 100, specularity: 0"
    ribbon = by_quantity(rows(flat, path))
    assert ribbon["long_channel.resistivity_ratio"] == approx(1.53062, 4e-6)


def test_long_channel_rows_find_their_numbers():
    found = rows(
        "length_nm: 300, dimension: 2, width_nm: 100, specularity: 0", "{mean_free_path_nm: 100}"
    )
    values = [Estimate(float(i), 0.1) for i in range(4)]
    long_channel = LongChannel(*values, method="")
    names = ("resistivity_ratio", "resistivity_uohm_cm", "sheet_ohm", "backscatter_path_nm")
    own = {f"long_channel.{name}": value for name, value in zip(names, values, strict=True)}
    listed = [row for row in found if row.quantity in own]
    assert len(listed) == 3
    for row in listed:
        assert row.select(SimpleNamespace(long_channel=long_channel)) is own[row.quantity]
        assert row.select(SimpleNamespace(long_channel=None)) is None


@both
def test_many_planes_in_a_long_channel(d):
    def channel(count, angular="tunnel", reflection="specular", more=""):
        kind = f"angular: {angular}, reflection: {reflection}"
        points = ", ".join(
            f"{{position_nm: {(i + 0.5) * 1000 / count}, transmission: 0.9, {kind}}}"
            for i in range(count)
        )
        text = f"{{mean_free_path_nm: 100, points: [{points}]}}"
        return rows(f"length_nm: 1000, dimension: {d}{more}", text)

    alpha = 2 * 10 / 9  # (l/D) = 10, gamma = 1/9
    for angular, strengths in (("tunnel", (alpha, 0.0)), ("constant", (0.0, alpha))):
        found = by_quantity(channel(100, angular), "approximate")
        ratio = limits.mayadas_shatzkes_ratio(strengths[0], d, strengths[1])
        assert found["long_channel.resistivity_ratio"] == approx(1 / ratio, 1e-9)
        expected = R_B * (1 + 10 / BACKSCATTER[d] / ratio)
        assert found["resistance_ohm"] == approx(expected, 1e-9)
    rough = ", width_nm: 50, specularity: 0" + (", height_nm: 50" if d == 3 else "")
    for other in (channel(3), channel(100, reflection="diffuse"), channel(100, more=rough)):
        assert not any(quantity.startswith("long_channel") for quantity in quantities(other))


TABLE = "{energy_meV: [-5, 5], value: [0.2, 0.4]}"
TUNNEL_TABLE = f"{{points: [{{position_nm: 50, transmission: {TABLE}, angular: tunnel}}]}}"


@pytest.mark.parametrize(
    ("scattering", "more"),
    [
        ("{mean_free_path_nm: {energy_meV: [-5, 5], value: [20, 40]}}", ""),
        (TUNNEL_TABLE, ""),
        ("{mean_free_path_nm: 50}", "probes: [{position_nm: 50, coupling: 0.5}]\n"),
        (
            "{mean_free_path_nm: 50}",
            "relaxation: {mechanisms: [{kind: bath, path_nm: 9, direction: randomised}]}\n",
        ),
    ],
)
def test_only_the_ballistic_resistance_is_left(scattering, more):
    (row,) = rows("length_nm: 100, dimension: 3, modes: 4", scattering, more=more)
    assert (row.quantity, row.expected) == ("ballistic_resistance_ohm", approx(R_B / 4, 1e-9))


def test_modes_that_depend_on_energy():
    modes = "{energy_meV: [-1000, 1000], value: [1, 3]}"
    (row,) = rows(f"length_nm: 100, dimension: 2, modes: {modes}")
    assert row.expected == approx(R_B / 2.005, 1e-6)  # M is linear, and the window's middle is 5


def test_unequal_temperatures_have_no_resistance():
    found = rows(
        "length_nm: 100, dimension: 3", "{mean_free_path_nm: 50}", ", left: {temperature_K: 9}"
    )
    assert not quantities(found) & {"resistance_ohm", "breakdown.resistance_ohm", "transmission"}
    assert {"current_A", "thermal.heat_current_right_W", "conductance_S"} <= quantities(found)


def test_walls_that_scatter_leave_a_finite_channel_unknown():
    size = "length_nm: 100, dimension: 2, width_nm: 50, specularity: 0.5"
    assert not quantities(rows(size)) & {"transmission", "resistance_ohm", "current_A"}
    mirrors = rows(size.replace("0.5", "1"), "{mean_free_path_nm: 50}")
    assert "transmission" in quantities(mirrors)
    # sections, too: there is no single ratio for them
    sections = "{mean_free_path_nm: 50, sections: [{from_nm: 0, to_nm: 40}]}"
    assert "resistance_ohm" not in quantities(rows(size, sections))
