"""The reference solutions for two and three dimensions against published values and the equations.

The deterministic solver is exact but for the number of directions, and converges fast: it is asked
for 1e-8 where the expectation is a closed form, else for the digits that a table has.
"""

from dataclasses import replace
from itertools import pairwise
from math import inf, pi, sqrt

import numpy as np
import pytest
from numpy.polynomial import legendre
from scipy.integrate import quad

from tests.reference_angles import (
    Case,
    Plane,
    Section,
    isotropic,
    lambert,
    plain_wire,
    solve,
)

TUNNEL = Plane(35, 0.4, tunnel=True)
DIFFUSE_TUNNEL = Plane(70, 0.3, tunnel=True, diffuse=True)
MIXTURE = Case(
    100,
    3,
    mean_free_path=40,
    sections=(Section(20, 50, 15), Section(50, 60, None)),
    planes=(
        Plane(0, 0.6, tunnel=True, diffuse=True),
        Plane(20, 0.8),
        TUNNEL,
        DIFFUSE_TUNNEL,
        Plane(85, 0.5, diffuse=True),
        Plane(100, 0.7, tunnel=True),
    ),
)
PLACES = (0, 7, 20, 28, 35, 50, 55, 60, 70, 76, 85, 93, 100)
HEIGHTS = pytest.mark.parametrize("height", [None, 1.7])  # d = 2, d = 3
DIMENSIONS = pytest.mark.parametrize("dimension", [2, 3])


@pytest.fixture(scope="module", params=[2, 3])
def mixture(request):
    return solve(replace(MIXTURE, dimension=request.param))


def close(value, expected, tolerance=1e-8):
    np.testing.assert_allclose(value, expected, rtol=tolerance, atol=tolerance)


def agree(value, error, expected):
    """Within 4 standard errors, which must be small enough to notice 2 %."""
    assert error < 0.0035 * expected
    assert abs(value - expected) < 4 * error


def over_flux(dimension, function):
    """Mean of a function of the cosine over the emitted flux, by scipy's quad."""
    if dimension == 3:
        return quad(lambda mu: 2 * mu * function(mu), 0, 1, epsabs=1e-12)[0]
    return quad(lambda angle: np.cos(angle) * function(np.cos(angle)), 0, pi / 2, epsabs=1e-12)[0]


# --- published values ---------------------------------------------------------------------------

THICKNESSES = (0.1, 0.2, 0.4, 0.6, 0.8, 1, 1.5, 2, 2.5, 3, 5)
# Heaslet & Warming, Int. J. Heat Mass Transfer 8 (1965) 979: radiation between black walls, values
# from memory, recomputed from the integral equation.
SLAB_3 = (0.9157, 0.8492, 0.7459, 0.6673, 0.6047, 0.5534, 0.4573, 0.3901, 0.3402, 0.3016, 0.2077)
# The integral equation in two dimensions, two methods.
SLAB_2 = (
    *(0.930973, 0.873759, 0.781098, 0.707885, 0.647973, 0.597792),
    *(0.501456, 0.432178, 0.379823, 0.338819, 0.236688),
)


@pytest.mark.parametrize(("dimension", "table", "digit"), [(2, SLAB_2, 1e-6), (3, SLAB_3, 1e-4)])
def test_slab(dimension, table, digit):
    for thickness, expected in zip(THICKNESSES, table, strict=True):
        solution = solve(Case(7 * thickness, dimension, mean_free_path=7))
        assert abs(solution.transmission - expected) <= 0.6 * digit


# Milne's problem: twice the extrapolation length. d = 3: 0.71044609 (Hopf, Mathematical Problems of
# Radiative Equilibrium, 1934); d = 2: computed from the integral equation.
@pytest.mark.parametrize(("dimension", "constant"), [(3, 2 * 0.71044609), (2, 1.636620)])
def test_thick_slab(dimension, constant):
    per_path = {2: pi / 2, 3: 4 / 3}[dimension]
    for thickness in (20, 60):
        solution = solve(Case(thickness, dimension, mean_free_path=1))
        close(per_path / solution.transmission - thickness, constant, 1e-6)


# The H function of conservative isotropic scattering has <H> = 2 and <mu H> = 2 sqrt(<mu^2>)
# (Chandrasekhar, Radiative Transfer, 1950, chapter V; d = 3: Hopf and Bronstein). Carriers leave in
# proportion to H, so the drop at a contact is <mu>/(2 sqrt(<mu^2>)) of R_B: sqrt(3)/4, sqrt(2)/pi.
@pytest.mark.parametrize(("dimension", "expected"), [(3, sqrt(3) / 4), (2, sqrt(2) / pi)])
def test_interface_part_of_a_thick_channel(dimension, expected):
    solution = solve(Case(3000, dimension, mean_free_path=100))
    for x, reservoir in ((0, 1), (3000, 0)):
        inside = (solution.f_plus(x) + solution.f_minus(x)) / 2
        close(abs(reservoir - inside) / solution.transmission, expected)


def test_carriers_leave_a_thick_slab_by_the_law_of_darkening():
    """f+(L, mu) = (sqrt(3)/4) T H(mu); H by the integral of Stibbs & Weir, MNRAS 119 (1959) 512."""

    def exponent(angle, mu):
        ratio = np.sin(angle) ** 2 / (1 - angle / np.tan(angle))
        return np.log(ratio) / (np.cos(angle) ** 2 + (mu * np.sin(angle)) ** 2)

    def h(mu):
        return (1 + mu) * np.exp(mu / pi * quad(exponent, 0, pi / 2, args=(mu,))[0])

    close(h(1), 2.90781, 1e-5)  # Chandrasekhar's table, from memory
    solution = solve(Case(25, 3, mean_free_path=1))
    plus, minus = solution.occupations(25)
    expected = [sqrt(3) / 4 * solution.transmission * h(mu) for mu in solution.directions.cosine]
    close(plus, expected, 1e-7)
    close(minus, 0)


# Mayadas & Shatzkes, Phys. Rev. B 1 (1970) 1382, in the limit of many thin planes.
@pytest.mark.parametrize("a", [0.5, 2])
def test_many_tunnel_planes(a):
    spacing, path = 2.0, 100.0
    gamma = a * spacing / (2 * path)

    def resistance(planes):
        chance = 1 / (1 + gamma)
        places = (np.arange(planes) + 0.5) * spacing
        row = tuple(Plane(x, chance, tunnel=True) for x in places)
        case = Case(planes * spacing, 3, path, planes=row, directions=20)
        return 1 / solve(case).transmission

    bulk = 1 - 1.5 * a + 3 * a**2 - 3 * a**3 * np.log(1 + 1 / a)
    slope = (resistance(500) - resistance(400)) / (100 * spacing)
    # The next order in spacing/path is its square.
    close(slope * 4 / 3 * path * bulk, 1, 2e-5)


# --- planes without scattering ------------------------------------------------------------------


@DIMENSIONS
def test_mirror_planes_in_a_ballistic_channel_add_up_direction_by_direction(dimension):
    planes = (Plane(0, 0.9), Plane(30, 0.5, tunnel=True), Plane(60, 0.02, tunnel=True))

    def passes(mu):  # 1/T = 1 + sum (1-T_k)/T_k
        return 1 / (1 + 0.1 / 0.9 + 1 / mu**2 + 0.98 / 0.02 / mu**2)

    solution = solve(Case(100, dimension, planes=planes))
    close(solution.transmission, over_flux(dimension, passes))


@DIMENSIONS
def test_diffuse_planes_of_constant_transmission_add_up_as_a_whole(dimension):
    planes = tuple(Plane(x, t, diffuse=True) for x, t in ((0, 0.9), (30, 0.5), (100, 0.02)))
    solution = solve(Case(100, dimension, planes=planes))
    close(1 / solution.transmission, 1 + 0.1 / 0.9 + 1 + 49)


@DIMENSIONS
def test_two_diffuse_tunnel_planes(dimension):
    """The sum over what is thrown to and fro; a plane forgets the direction of what it reflects."""
    chances = (0.6, 0.2)

    def passing(k):
        return lambda mu: mu**2 / (mu**2 + (1 - chances[k]) / chances[k])

    def mean(*functions):
        return over_flux(dimension, lambda mu: np.prod([f(mu) for f in functions]))

    one, two = passing(0), passing(1)
    back_one, back_two = (lambda mu: 1 - one(mu)), (lambda mu: 1 - two(mu))
    to_left = mean(back_two, back_one) / mean(back_two)  # reflected by two, then by one
    to_right = mean(back_one, back_two) / mean(back_one)
    thrown = mean(one, back_two) * to_left / (1 - to_left * to_right)
    expected = mean(one, two) + thrown * mean(back_one, two) / mean(back_one)
    planes = (
        Plane(30, chances[0], tunnel=True, diffuse=True),
        Plane(50, chances[1], tunnel=True, diffuse=True),
    )
    close(solve(Case(100, dimension, planes=planes)).transmission, expected)


# --- the equations themselves -------------------------------------------------------------------


@pytest.mark.parametrize(("x", "path"), [(7, 40), (28, 15), (55, inf), (93, 40)])
def test_fields_satisfy_the_kinetic_equation(mixture, x, path):
    cosine, width = mixture.directions.cosine, 1e-3
    plus, minus = mixture.occupations(x)
    mean = (mixture.f_plus(x) + mixture.f_minus(x)) / 2
    before, after = mixture.occupations(x - width), mixture.occupations(x + width)
    oblique = cosine > 0.1  # the others change too fast for differences
    for sign, f, low, high in (
        (1, plus, before[0], after[0]),
        (-1, minus, before[1], after[1]),
    ):
        slope = sign * cosine * (high - low) / (2 * width)
        close(slope[oblique], ((mean - f) / path)[oblique], 1e-9)


def test_planes_pass_and_reflect_as_they_should(mixture):
    cosine, weight = mixture.directions.cosine, mixture.directions.weight
    for plane in MIXTURE.planes:
        into_right, out_left = mixture.occupations(plane.position, "left")
        out_right, into_left = mixture.occupations(plane.position, "right")
        chance = np.full(cosine.size, plane.transmission)
        if plane.tunnel:
            gamma = (1 - plane.transmission) / plane.transmission
            chance = cosine**2 / (cosine**2 + gamma)
        for arriving, beyond, out in (
            (into_right, into_left, out_left),
            (into_left, into_right, out_right),
        ):
            back = arriving
            if plane.diffuse:
                share = weight * cosine * (1 - chance)
                back = (share @ arriving) / share.sum()
            close(out, chance * beyond + (1 - chance) * back, 1e-11)


def test_contacts(mixture):
    close(mixture.occupations(0, "left")[0], 1, 1e-12)
    close(mixture.occupations(100, "right")[1], 0, 1e-12)
    close(1 - mixture.directions.flux @ mixture.occupations(0, "left")[1], mixture.transmission)


def test_particles_are_conserved(mixture):
    for x in PLACES:
        for side in ("left", "right"):
            close(mixture.current(x, side), mixture.transmission, 1e-12)


def test_detailed_balance_and_reversal(mixture):
    """Full from both contacts is full everywhere, and either direction passes the same."""
    mirrored = solve(mixture.case.mirrored)
    close(mirrored.transmission, mixture.transmission, 1e-11)
    for x in PLACES:
        for side, other in (("left", "right"), ("right", "left")):
            plus, minus = mixture.occupations(x, side)
            from_right_minus, from_right_plus = mirrored.occupations(100 - x, other)
            close(plus + from_right_plus, 1, 1e-10)
            close(minus + from_right_minus, 1, 1e-10)


def test_more_directions_change_nothing(mixture):
    finer = solve(replace(mixture.case, directions=56))
    close(mixture.transmission, finer.transmission)
    for x in PLACES:
        for name in ("f_plus", "f_minus"):
            for side in ("left", "right"):
                close(getattr(mixture, name)(x, side), getattr(finer, name)(x, side), 1e-7)


@DIMENSIONS
def test_what_a_plane_does_not_do_and_where_a_piece_is_cut_does_not_matter(dimension):
    plain = solve(Case(50, dimension, mean_free_path=20))
    planes = (Plane(10, 1, diffuse=True), Plane(25, 1, tunnel=True))
    cut = solve(Case(50, dimension, sections=(Section(0, 50, 20),), planes=planes))
    for x in (0, 5, 10, 30, 50):
        close(cut.f_plus(x), plain.f_plus(x), 1e-11)
        close(cut.f_minus(x), plain.f_minus(x), 1e-11)


# --- angular distribution -----------------------------------------------------------------------


@DIMENSIONS
def test_fluxes_by_direction(dimension):
    """Emitted by the cosine law; behind a tunnel barrier what it passes; together the current."""
    solution = solve(Case(50, dimension, planes=(Plane(25, 0.3, tunnel=True),)))
    edges = np.cos(np.linspace(0, pi / 2, 7))  # decreasing
    emitted = np.diff(1 - edges**2) if dimension == 3 else np.diff(np.sqrt(1 - edges**2))

    def in_class(low, high):
        def passes(mu):
            return mu**2 / (mu**2 + 7 / 3)

        if dimension == 3:
            return quad(lambda mu: 2 * mu * passes(mu), low, high)[0]
        return quad(lambda t: np.cos(t) * passes(np.cos(t)), np.arccos(high), np.arccos(low))[0]

    passed = np.array([in_class(b, a) for a, b in pairwise(edges)])
    close(solution.fluxes(0, edges), [emitted, emitted - passed])
    close(solution.fluxes(25, edges, "right"), [passed, 0 * passed])
    close(solution.fluxes(50, edges[::-1]), [passed[::-1], 0 * passed])


def test_fluxes_in_a_scattering_channel_add_up(mixture):
    edges = np.cos(np.linspace(0, pi / 2, 19))
    for x in PLACES:
        right, left = mixture.fluxes(x, edges)
        close(right.sum() - left.sum(), mixture.transmission)


def test_what_is_not_there_is_refused(mixture):
    with pytest.raises(ValueError, match="dimension"):
        solve(Case(10, 1))
    with pytest.raises(ValueError, match="outside"):
        solve(Case(10, 2, planes=(Plane(12, 0.5),)))
    with pytest.raises(ValueError, match="not a place"):
        mixture.f_plus(101)


# --- the plain Monte Carlo ----------------------------------------------------------------------


def slot(ratio, specularity):
    """Transmission of a channel of diffuse walls without scattering, by Clausing's equation.

    Clausing, Ann. Phys. 12 (1932) 961, for the slot between parallel plates, with specularity: a
    path that is mirrored n times is a straight one that crosses n images. Width 1, length `ratio`.
    """
    n = np.arange(200)
    survive = specularity**n
    node, weight = legendre.leggauss(60)
    x, weight = ratio * (1 + node) / 2, ratio * weight / 2

    def sine(along, images):  # of the angle to the wall's normal
        return along / np.hypot(along, images)

    # From wall to wall: from x to dx', diffuse at the (n+1)th encounter.
    apart = (x - x[:, None])[..., None]
    image = n + 1.0
    kernel = image**2 / (image**2 + apart**2) ** 1.5 @ survive * (1 - specularity) / 2
    # From x beyond the right end, and from the left contact to dx.
    left = (ratio - x)[:, None]
    direct = (sine(left, n) - sine(left, n + 1)) @ survive / 2
    arriving = (sine(x[:, None], n) - sine(x[:, None], n + 1)) @ survive * (1 - specularity)
    escape = np.linalg.solve(np.eye(x.size) - kernel * weight, direct)
    return 1 - (weight * arriving) @ (1 - escape)


@pytest.mark.parametrize("ratio", [0.5, 1, 2])
def test_slot_of_the_reference(ratio):
    """Berman's closed form, J. Appl. Phys. 36 (1965) 3356 (from memory): right to some 1e-5."""
    root = np.hypot(1, ratio)
    less = 1.5 * (ratio - np.arcsinh(ratio)) ** 2
    less /= ratio**3 + 3 * ratio**2 + 4 - (ratio**2 + 4) * root
    close(slot(ratio, 0), (1 + root - ratio) / 2 - less, 3e-5)


@DIMENSIONS
def test_random_directions(dimension):
    """Moments of a component u: <|u|>, <u^2>, <u^4> of the circle or sphere; <u> of the cosine law
    along its normal, <u^2> across it."""
    moments, across = {
        2: ((2 / pi, 1 / 2, 3 / 8, pi / 4), 1 / 3),
        3: ((1 / 2, 1 / 3, 1 / 5, 2 / 3), 1 / 4),
    }[dimension]
    random = np.random.default_rng(15)
    free, emitted = (draw(random, dimension, 400_000) for draw in (isotropic, lambert))
    for unit in (free, emitted):
        close(np.sum(unit**2, axis=0), 1, 1e-12)
    samples = [np.abs(u) ** n for u in free for n in (1, 2, 4)] + [emitted[0]]
    expected = [*(moments[:3] * dimension), moments[3]]
    samples += [u**2 for u in emitted[1:]]
    expected += [across] * (dimension - 1)
    for sample, value in zip(samples, expected, strict=True):
        agree(sample.mean(), sample.std() / sqrt(sample.size), value)


# Mirrors above and below leave motion in a plane whose directions keep the cosine law.
@HEIGHTS
@pytest.mark.parametrize("specularity", [0, 0.5])
def test_wire_with_diffuse_walls(height, specularity):
    sides = specularity if height is None else (specularity, 1)
    wire = plain_wire(6, 2, height, sides, histories=200_000, seed=11)
    agree(wire.transmission, wire.error, slot(3, specularity))


@HEIGHTS
def test_wire_with_mirrors_is_the_channel_of_the_solver(height):
    planes = (
        Plane(0, 0.9, tunnel=True),
        Plane(0.5, 0.8, tunnel=True, diffuse=True),
        Plane(1.2, 0.8),
        Plane(2, 0.9, diffuse=True),
    )
    case = Case(2, 2 if height is None else 3, mean_free_path=1.5, planes=planes)
    wire = plain_wire(2, 1, height, 1, 1.5, planes, histories=250_000, seed=12)
    agree(wire.transmission, wire.error, solve(case).transmission)


@HEIGHTS
def test_scattering_wire_with_mirrors(height):
    case = Case(4, 2 if height is None else 3, mean_free_path=1)
    wire = plain_wire(4, 3, height, 1, 1, histories=600_000, seed=14)
    agree(wire.transmission, wire.error, solve(case).transmission)


@HEIGHTS
def test_mean_path_in_a_wire_does_not_depend_on_what_happens_in_it(height):
    """4 V/S (d = 3) and pi A/P (d = 2), S and P what carriers come through: both ends.

    Blanco & Fournier, Europhys. Lett. 61 (2003) 168. Any law of scattering, of walls or of planes
    that broke equilibrium would show. The planes lie symmetrically: one end speaks for both.
    """
    planes = tuple(Plane(x, 0.5, tunnel=True, diffuse=True) for x in (0.5, 1.5))
    wire = plain_wire(2, 1, height, 0.3, 1, planes, histories=200_000, seed=13)
    agree(wire.path, wire.path_error, pi if height is None else 4)
