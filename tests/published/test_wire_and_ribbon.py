"""Side walls, by following carriers from contact to contact, in two and three dimensions.

Sources: P. Clausing, Ann. Phys. 12 (1932) 961, for diffuse walls without other scattering, solved
in tests/reference_slot.py; S. Blanco & R. Fournier, Europhys. Lett. 61 (2003) 168, for the mean
path; and carriers followed by plain numpy, from the rules alone (tests/reference_angles.py). Long
wires and ribbons: D. K. C. MacDonald & K. Sarginson, Proc. R. Soc. A 203 (1950) 223; K. Fuchs,
Proc. Camb. Phil. Soc. 34 (1938) 100, in two dimensions.
"""

from math import inf, pi

import numpy as np
import pytest

from carriersim.result import Estimate
from tests.channels_in_space import follow, yaml_of
from tests.checks_of_numbers import agree, agree_together, part
from tests.reference_angles import Case, Plane, Section, plain_wire
from tests.reference_slot import Slot

SMALL = 0.003  # relative standard error of a transmission
BIAS = 10.0
# Length of a path per length along the channel, carriers of all directions alike.
OBLIQUE = {2: pi / 2, 3: 2.0}
HEIGHTS = pytest.mark.parametrize("height", [None, 1.5], ids=["2", "3"])


def channel(length, width, height=None, specularity=0.0, path=inf, planes=(), **simulation):
    """Result of a channel with walls; arguments as for plain_wire."""
    mirror = specularity
    if isinstance(mirror, tuple):
        mirror = f"{{width: {mirror[0]}, height: {mirror[1]}}}"
    walls = f"width_nm: {width}, specularity: {mirror}"
    if height is not None:
        walls += f", height_nm: {height}"
    case = Case(
        length,
        2 if height is None else 3,
        mean_free_path=None if path == inf else path,
        planes=planes,
    )
    return follow(yaml_of(case, BIAS, channel=walls, **simulation))


def in_units(result, estimate):
    """A resistance in units of R_B."""
    ballistic = result.ballistic_resistance_ohm
    return Estimate(estimate.value / ballistic, estimate.error / ballistic)


# --- walls and nothing else ---------------------------------------------------------------------


@HEIGHTS
@pytest.mark.parametrize("specularity", [0.0, 0.5])
def test_two_walls_that_scatter(height, specularity):
    """Mirrors above and below leave the motion between the walls as it is in two dimensions."""
    exact = Slot(3, specularity)
    sides = specularity if height is None else (specularity, 1)
    result = channel(6, 2, height, sides, histories=1e6, cells=10, seed=21)
    agree(result.transmission, exact.transmission, SMALL)
    agree(in_units(result, part(result, "piece", 3.0, "walls")), exact.walls_part)
    contact = 0.5 * (1 - exact.returning) / exact.transmission
    agree(in_units(result, part(result, "interface", 6.0)), contact)
    agree(in_units(result, part(result, "interface", 0.0)), contact, 0.006)


@pytest.mark.parametrize("almost", [1, 0.9999])
def test_which_pair_of_walls_scatters_is_the_same(almost):
    """Side walls that are mirrors, or miss being that by less than can be seen."""
    exact = Slot(3, 0.5).transmission
    result = channel(3, 2, 1, (almost, 0.5), histories=1e6, cells=5, seed=22)
    agree(result.transmission, exact, SMALL, systematic=5 * (1 - almost) * exact)


@HEIGHTS
def test_walls_that_are_mirrors_are_no_walls(height):
    """Bit for bit the channel without them."""
    planes = (Plane(2, 0.5, True, True),)
    one = channel(5, 1, height, 1, 4, planes, histories=2e4, cells=5)
    dimension = 2 if height is None else 3
    other = follow(yaml_of(Case(5, dimension, 4, planes=planes), BIAS, histories=2e4, cells=5))
    assert one.resistance_ohm == other.resistance_ohm and one.breakdown == other.breakdown
    np.testing.assert_array_equal(one.mu_plus_meV, other.mu_plus_meV)


# --- against the plain walk ---------------------------------------------------------------------

BARRIERS = (Plane(0, 0.8, True, True), Plane(1.5, 0.7, True, True), Plane(4, 0.7))
WIRES = {  # length, width, height, specularity, path, planes
    "ribbon": (6, 2, None, 0.3, 4, ()),
    "ribbon with planes": (4, 2, None, 0.5, 4, BARRIERS),
    "clean wire": (4, 2, 1.5, 0.0, inf, ()),
    "wire": (5, 2, 3, (1.0, 0.3), 4, ()),
    "rough wire": (3, 2, 1.5, 0.0, 4, ()),
    "wire with planes": (4, 2, 3, 0.5, 4, BARRIERS),
}


@pytest.mark.parametrize("wire", WIRES.values(), ids=WIRES)
def test_against_a_plain_walk(wire):
    """Transmission and the mean path, which adds up all occupations along the channel."""
    plain = plain_wire(*wire, histories=400_000, seed=31)
    result = channel(*wire, histories=5e5, cells=4, seed=23)
    agree_together(result.transmission, Estimate(plain.transmission, plain.error))
    size = OBLIQUE[2 if wire[2] is None else 3] * np.diff(result.cell_edges_nm) * 2 / BIAS
    path = size @ result.mu_meV
    error = size @ result.errors["mu_meV"]  # at most, whatever the correlations
    agree_together(Estimate(path, error), Estimate(plain.path, plain.path_error))


@HEIGHTS
def test_mean_path_does_not_depend_on_what_happens_in_a_channel(height):
    """pi L/2 (d = 2) or 2 L (d = 3) whatever scatters, if both ends look the same (Blanco &
    Fournier): 4 V/S and pi A/P, S and P what carriers come through."""
    planes = (Plane(0, 0.7, True, True), Plane(3, 0.7, True, True))
    result = channel(3, 2, height, 0.3, 2, planes, histories=1e6, cells=1, seed=24)
    # Over OBLIQUE L: what the left contact fills; the right one fills as much, and all is full.
    # Errors of the two cells as if they were the same.
    size = 2 * np.diff(result.cell_edges_nm) / 3 / BIAS
    agree(Estimate(size @ result.mu_meV, size @ result.errors["mu_meV"]), 1.0)


# --- momentum -----------------------------------------------------------------------------------


def mean_cosine(edges, dimension):
    """Mean of the cosine between neighbouring cosines, for an occupation that is even there."""
    high, low = edges[:-1], edges[1:]
    if dimension == 3:  # flux per cosine goes as the cosine
        return (high**3 - low**3) / 1.5 / (high**2 - low**2)
    angle, sine = np.arccos(edges), np.sqrt(1 - edges**2)
    return (np.diff(angle) + np.diff(sine * edges)) / 2 / np.diff(sine)


@HEIGHTS
def test_walls_and_collisions_share_a_piece_by_the_momentum_they_take(height):
    """Collisions take the current over l per length; walls take the rest of what is lost.

    What flows in with carriers at one end less what flows out at the other, from the angular
    distribution there; its classes are 5 degrees wide, which leaves some 1e-3.
    """
    dimension = 2 if height is None else 3
    result = channel(4, 2, height, 0.2, 20, histories=1.5e6, cells=4, seed=25)
    cosine = mean_cosine(np.cos(np.radians(np.linspace(0, 90, 19))), dimension)
    flux, errors = 5 * result.current_by_direction, 5 * result.errors["current_by_direction"]
    both_ways = flux.sum(axis=1) @ cosine
    noise = np.sqrt(np.sum((errors[[0, -1]] * cosine) ** 2))
    unit = result.current_A.value * 4 / 20  # what collisions take
    lost = Estimate((both_ways[0] - both_ways[-1]) / unit, noise / unit)
    walls, collisions = (part(result, "piece", 2.0, name).value for name in ("walls", "elastic"))
    expected = 1 + walls / collisions
    assert expected > 4
    agree(lost, expected, systematic=0.001 * expected)


# --- long channels ------------------------------------------------------------------------------


def slope(lengths, histories, **walls):
    """Resistivity to that of bulk scattering with l = 1, from two lengths."""
    results = [
        channel(length, path=1, histories=n, cells=2, seed=26, **walls)
        for length, n in zip(lengths, histories, strict=True)
    ]
    low, high = (in_units(r, r.resistance_ohm) for r in results)
    factor = {2: pi / 2, 3: 4 / 3}[results[0].scenario.channel.dimension]
    factor /= lengths[1] - lengths[0]
    return Estimate(factor * (high.value - low.value), factor * np.hypot(low.error, high.error))


@pytest.mark.slow
def test_resistivity_of_a_square_wire():
    """p = 0, side = l: 1.932775, the integral over the cross-section (MacDonald & Sarginson)."""
    found = slope((4, 16), (2e6, 1.2e7), width=1, height=1)
    agree(found, 1.932775)


@pytest.mark.slow
def test_resistivity_of_a_ribbon_and_who_causes_it():
    """p = 0, width = l: 1.53062 (Fuchs, in two dimensions); walls have what is beyond 1."""
    found = slope((4, 16), (2e6, 1.0e7), width=1)
    agree(found, 1.53062)
    # In the middle, as nothing but a section with the same path cuts it out.
    text = yaml_of(
        Case(12, 2, 1, sections=(Section(4, 8, 1),)),
        channel="width_nm: 1, specularity: 0",
        histories=1.2e7,
        cells=3,
        seed=27,
    )
    middle = {
        name: in_units(result, part(result, "piece", 6.0, name))
        for result in [follow(text)]
        for name in ("elastic", "walls")
    }
    agree(middle["elastic"], 4 / (pi / 2), 0.0035)
    agree(middle["walls"], 0.53062 * 4 / (pi / 2), 0.006)
