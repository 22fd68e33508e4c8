"""The endless channel in two and three dimensions (result.long_channel) against published values.

Every number is good to 0.35 % and may lie four standard errors from the expectation.

Films: K. Fuchs, Proc. Cambridge Phil. Soc. 34 (1938) 100; E. H. Sondheimer, Adv. Phys. 1 (1952) 1
(from memory). Ribbons: the same derivation on a circle. Wires: the integral over cross-section and
directions that D. K. C. MacDonald & K. Sarginson, Proc. R. Soc. A 203 (1950) 223, treat. Planes:
A. F. Mayadas & M. Shatzkes, Phys. Rev. B 1 (1970) 1382 (from memory), and the deterministic solver
of tests/reference_angles.py.
"""

from pathlib import Path

import numpy as np
import pytest
from scipy.integrate import dblquad, quad

from carriersim.disorder import draw_random_points
from carriersim.engine.endless import long_channel
from carriersim.engine.problem import build
from carriersim.scenario import read_text
from tests.checks_of_numbers import agree
from tests.reference_angles import Case, Plane, solve

L = 100.0  # mean free path in nm
BULK = {2: np.pi / 2 * L, 3: 4 / 3 * L}
ERROR = 0.0033
MOST_EVENTS = 2e8


def endless(channel, scattering=f"mean_free_path_nm: {L}", length=1000, seed=1):
    """LongChannel of a scenario; the channel's length only matters for what repeats with it."""
    text = f"""
channel: {{length_nm: {length}, {channel}}}
contacts: {{bias_mV: 0, temperature_K: 300}}
scattering: {{{scattering}}}
simulation: {{relative_error: {ERROR}, seed: {seed}}}
"""
    problem = build(draw_random_points(read_text(text, Path("published.yaml"))))
    found, _ = long_channel(problem, workers=2, main_events=MOST_EVENTS)
    return found


def holds(estimate, expected):
    agree(estimate, expected, systematic=estimate.systematic or 0.0)


def film(kappa, p):
    """rho0/rho of a film, d = 3, thickness kappa l."""

    def integrand(t):
        decay = np.exp(-kappa * t)
        return (t**-3 - t**-5) * (1 - decay) / (1 - p * decay)

    return 1 - 1.5 * (1 - p) / kappa * quad(integrand, 1, np.inf, limit=200)[0]


def ribbon(kappa, p):
    """The same in two dimensions, width kappa l."""

    def integrand(angle):
        decay = np.exp(-kappa / np.sin(angle))
        return np.cos(angle) ** 2 * np.sin(angle) * (1 - decay) / (1 - p * decay)

    return 1 - 4 * (1 - p) / (np.pi * kappa) * quad(integrand, 0, np.pi / 2)[0]


def wire(width, height, rate=1.0):
    """Backscattering path of a wire with p = 0; rate: of collisions per length.

    Through a cross-section, for flights of the direction (sin a, cos a) across, (width - x)
    (height - y) starting points let a carrier fly x, y across: D = <u_x^2 int exp(-rate s)
    (1 - x/width) (1 - y/height) ds>.
    """

    def inner(a, mu):
        sine = np.sqrt(1 - mu**2)
        b, c = sine * np.cos(a) / width, sine * np.sin(a) / height
        end = 1 / max(b, c)
        if rate == 0.0:
            moments = end, end**2 / 2, end**3 / 3
        else:
            s = rate * end
            rest = np.exp(-s)
            moments = (
                (1 - rest) / rate,
                (1 - rest * (1 + s)) / rate**2,
                (2 - rest * (2 + 2 * s + s**2)) / rate**3,
            )
        return mu**2 * (moments[0] - (b + c) * moments[1] + b * c * moments[2])

    return 4 * dblquad(inner, 0, 1, 0, np.pi / 2, epsabs=1e-7)[0] / (np.pi / 2)


def test_formulas_give_the_values_in_print():
    printed = {0.1: 4.78166, 0.3: 2.46587, 1: 1.46229, 3: 1.14140, 10: 1.03896}
    for kappa, value in printed.items():
        assert 1 / film(kappa, 0) == pytest.approx(value, rel=5e-6)
    assert 1 / ribbon(1, 0) == pytest.approx(1.53062, rel=5e-6)
    assert 4 / 3 / wire(1, 1) == pytest.approx(1.932775, rel=5e-6)


@pytest.mark.parametrize("dimension", [2, 3])
def test_bulk_alone(dimension):
    found = endless(f"dimension: {dimension}")
    holds(found.resistivity_ratio, 1)
    holds(found.backscatter_path_nm, BULK[dimension])


@pytest.mark.parametrize("specularity", [0, 0.5, 0.9])
@pytest.mark.parametrize("kappa", [0.1, 0.3, 1, 3, 10])
def test_film(kappa, specularity):
    faces = f"{{width: 1, height: {specularity}}}"
    sides = f"width_nm: 50, height_nm: {kappa * L}"
    found = endless(f"dimension: 3, {sides}, specularity: {faces}")
    holds(found.resistivity_ratio, 1 / film(kappa, specularity))


@pytest.mark.parametrize("kappa, specularity", [(1, 0), (0.2, 0.3), (4, 0.7)])
def test_ribbon(kappa, specularity):
    found = endless(f"dimension: 2, width_nm: {kappa * L}, specularity: {specularity}")
    holds(found.resistivity_ratio, 1 / ribbon(kappa, specularity))


@pytest.mark.parametrize("width, height", [(1, 1), (2, 1), (0.3, 0.15)])
def test_wire(width, height):
    sides = f"width_nm: {width * L}, height_nm: {height * L}"
    found = endless(f"dimension: 3, {sides}, specularity: 0")
    holds(found.resistivity_ratio, 4 / 3 / wire(width, height))
    holds(found.backscatter_path_nm, L * wire(width, height))


def test_wire_without_collisions():
    """Long flights along a wire are so rare that the path stays finite."""
    found = endless("dimension: 3, width_nm: 100, height_nm: 50, specularity: 0", "")
    holds(found.backscatter_path_nm, 100 * wire(1, 0.5, rate=0))


def mayadas_shatzkes(alpha):
    """rho0/rho of many planes at distances far below l, d = 3."""
    return 1 - 1.5 * alpha + 3 * alpha**2 - 3 * alpha**3 * np.log(1 + 1 / alpha)


def barrier(spacing, alpha):
    """T0 of planes with alpha = 2 (l/D) gamma, gamma = (1 - T0)/T0."""
    return 1 / (1 + alpha * spacing / (2 * L))


@pytest.mark.parametrize("alpha, printed", [(0.5, 1.70062), (2, 3.71972)])
def test_many_barriers_at_equal_distances(alpha, printed):
    """With the 2 in alpha = 2 (l/D) gamma.

    The formula is the limit D/l -> 0: what D = l/10 makes of it is computed below, 1e-4.
    """
    expected = 1 / mayadas_shatzkes(alpha)
    assert expected == pytest.approx(printed, rel=5e-6)
    spacing, transmission = 10, barrier(10, alpha)
    path = reference(spacing, [Plane(spacing / 2, transmission, tunnel=True)], 3, (100, 200))
    assert BULK[3] / path == pytest.approx(expected, rel=2e-4)
    point = f"{{position_nm: {spacing / 2}, transmission: {transmission}, angular: tunnel}}"
    found = endless("dimension: 3", f"mean_free_path_nm: {L}, points: [{point}]", spacing)
    holds(found.resistivity_ratio, expected)


@pytest.mark.parametrize("alpha", [0.5, 2])
def test_many_barriers_at_random_places(alpha):
    spacing = 5
    group = f"{{count: 400, transmission: {barrier(spacing, alpha)}, angular: tunnel}}"
    scattering = f"mean_free_path_nm: {L}, random: [{group}]"
    found = endless("dimension: 3", scattering, 400 * spacing)
    holds(found.resistivity_ratio, 1 / mayadas_shatzkes(alpha))


def reference(period, planes, dimension, periods=(8, 16), path=L):
    """Backscattering path in nm of planes that repeat: the slope of the resistance with length."""
    resistances = []
    for count in periods:
        repeated = [
            Plane(k * period + p.position, p.transmission, p.tunnel, p.diffuse)
            for k in range(count)
            for p in planes
        ]
        case = Case(count * period, dimension, path, planes=tuple(repeated), directions=24)
        resistances.append(1 / solve(case).transmission)
    return (periods[1] - periods[0]) * period / (resistances[1] - resistances[0])


STRONG = {
    "mirrors": [Plane(10, 0.1)],
    "diffuse": [Plane(10, 0.1, diffuse=True)],
    "barriers": [Plane(10, 0.1, tunnel=True)],
    "mixture": [Plane(3, 0.3), Plane(8, 0.5, tunnel=True, diffuse=True), Plane(150, 0.2)],
}


@pytest.mark.parametrize("dimension", [2, 3])
@pytest.mark.parametrize("name", STRONG)
def test_strong_planes_that_repeat(name, dimension):
    """Planes l/5 apart, and unequal ones: carriers come back to the same plane again and again."""
    period = 20 if name != "mixture" else 200
    points = ", ".join(
        f"{{position_nm: {p.position}, transmission: {p.transmission},"
        f" angular: {'tunnel' if p.tunnel else 'constant'},"
        f" reflection: {'diffuse' if p.diffuse else 'specular'}}}"
        for p in STRONG[name]
    )
    found = endless(
        f"dimension: {dimension}", f"mean_free_path_nm: {L}, points: [{points}]", period
    )
    holds(found.backscatter_path_nm, reference(period, STRONG[name], dimension))


def test_planes_that_stay_and_planes_drawn_anew_at_every_meeting():
    """Control: only planes that stay hold carriers up by (1 - T)/T each.

    Drawn anew, they turn a carrier at the rate (1 - T) |mu|/D, so that D = <mu^2/(1/l + 2 (1 - T)
    |mu|/D)>. The walk from collision to collision below does just that.
    """
    spacing, transmission = 20.0, 0.5
    anew, error = _drawn_anew(spacing, transmission, 400_000)
    rate = 2 * (1 - transmission) / spacing
    expected = 4 * quad(lambda mu: mu**2 / (1 / L + rate * mu), 0, 1)[0]
    assert abs(anew - expected) < 4 * error < 0.02 * expected
    group = f"{{count: 500, transmission: {transmission}}}"
    scattering = f"mean_free_path_nm: {L}, random: [{group}]"
    stay = endless("dimension: 3", scattering, 500 * spacing).backscatter_path_nm
    # Mirrors keep |mu|, so that (1 - T)/T holds direction by direction where planes are dense.
    rate = 2 * (1 - transmission) / transmission / spacing
    dense = 4 * quad(lambda mu: mu**2 / (1 / L + rate * mu), 0, 1)[0]
    assert stay.value == pytest.approx(dense, rel=0.01)  # D = l/5 is not quite dense
    assert stay.value < 0.7 * anew


def _drawn_anew(spacing, transmission, walks):
    """Backscattering path in nm and its error, d = 3; independent of the package.

    After each collision nothing is remembered: D = <x^2>/(2 l), x from one collision to the next.
    """
    random = np.random.default_rng(5)
    left = random.exponential(L, walks)
    u = random.uniform(-1, 1, walks)
    x = np.zeros(walks)
    while left.any():
        free = random.exponential(spacing, walks) / np.abs(u)  # to the next plane
        step = np.minimum(free, left)
        x += u * step
        turned = (free < left) & (random.uniform(size=walks) > transmission)
        u[turned] *= -1
        left -= step
    square = 2 * x**2 / L  # 2 k D, k = 2
    return square.mean(), square.std() / np.sqrt(walks)


def test_random_planes_of_unequal_transmission():
    """Quenched disorder: the mean resistance of drawn channels, solved one by one."""
    random = np.random.default_rng(3)
    count, spacing = 200, 50
    resistances = []
    for _ in range(6):
        places = np.sort(random.uniform(0, count * spacing, count))
        # Evenly spread over the range: its mean is exact in every channel.
        values = 0.1 + 0.8 * random.permutation((np.arange(count) + 0.5) / count)
        planes = tuple(Plane(x, t) for x, t in zip(places, values, strict=True))
        case = Case(count * spacing, 3, L, planes=planes, directions=16)
        resistances.append(1 / solve(case).transmission - 1.0)  # contacts: 1 within 0.1
    spread = np.std(resistances, ddof=1) / np.sqrt(6) / np.mean(resistances)
    assert spread < 3e-4
    expected = count * spacing / np.mean(resistances)
    group = f"{{count: {count}, transmission: {{low: 0.1, high: 0.9}}}}"
    scattering = f"mean_free_path_nm: {L}, random: [{group}]"
    found = endless("dimension: 3", scattering, count * spacing).backscatter_path_nm
    agree(found, expected, systematic=(found.systematic or 0.0) + 5e-4 * expected)


@pytest.mark.parametrize("dimension", [2, 3])
def test_planes_alone(dimension):
    """Mirrors keep |mu|: the series law in every direction, all directions side by side.

    Series law: Datta, Electronic Transport in Mesoscopic Systems, 1995. Per direction D T/(1 - T),
    averaged over the flux.
    """
    spacing = 50
    point = "{position_nm: 20, transmission: 0.5, angular: tunnel}"
    found = endless(f"dimension: {dimension}", f"points: [{point}]", spacing)
    # T/(1 - T) = mu^2/gamma, gamma = 1; <mu^2> over the flux: 1/2 (d = 3), 2/3.
    holds(found.backscatter_path_nm, spacing * {2: 2 / 3, 3: 1 / 2}[dimension])
