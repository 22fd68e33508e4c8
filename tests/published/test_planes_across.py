"""Planes across the channel in two and three dimensions: thin barriers that mirror or scatter.

Without scattering between them mirror planes add up direction by direction, each like the series of
incoherent scatterers (S. Datta, Electronic Transport in Mesoscopic Systems, Cambridge 1995, from
memory): 1/T(mu) = 1 + sum (1 - T_k(mu))/T_k(mu), averaged over the emitted flux by scipy's quad.
Everything else is held against discrete ordinates (tests/reference_angles.py; S. Chandrasekhar,
Radiative Transfer, 1950), good to 1e-8.
"""

from dataclasses import replace
from itertools import product
from math import pi

import numpy as np
import pytest
from scipy.integrate import quad

from carriersim.result import Estimate
from tests import reference_angles
from tests.channels_in_space import Run, follow, mean, over_cells, parts_of, yaml_of
from tests.checks_of_numbers import agree, agree_each, exactly, part, profile
from tests.reference_angles import Case, Plane, Section

BIAS = 10.0
SMALL = 0.003  # relative standard error of a transmission
DIMENSIONS = pytest.mark.parametrize("dimension", [2, 3])
BACKSCATTER = {2: pi / 2, 3: 4 / 3}  # lam/l
EDGES = np.cos(np.linspace(0, pi / 2, 19))  # classes of direction of a result


class Simulated(Run):
    """A run of a Case, and its exact solution."""

    def __init__(self, case, histories, probes=(), cells=20, **more):
        self.case = case
        self.exact = reference_angles.solve(case)
        super().__init__(
            yaml_of(case, BIAS, probes=probes, histories=histories, cells=cells, **more)
        )

    def in_units(self, estimate):
        """A resistance in units of R_B."""
        ballistic = self.result.ballistic_resistance_ohm
        return Estimate(estimate.value / ballistic, estimate.error / ballistic)

    def part(self, kind, place):
        inside = sum(place) / 2 if kind == "piece" else place
        return self.in_units(part(self.result, kind, inside))

    def check_parts(self):
        """Each part of R, known to 0.35 % of R."""
        expected = parts_of(self.exact)
        assert len(self.result.breakdown) == len(expected)
        for (kind, place), value in expected.items():
            found = self.part(kind, place)
            if kind == "piece" and self.problem.segment_paths[self.node(place[0])] == ():
                assert abs(found.value) < 1e-12 and abs(value) < 1e-9
            else:
                agree(found, value, abs(0.0035 / self.exact.transmission / value))

    def check_total(self):
        agree(self.result.transmission, self.exact.transmission, SMALL)
        agree(self.in_units(self.result.resistance_ohm), 1 / self.exact.transmission, SMALL)
        total = sum(p.resistance_ohm.value for p in self.result.breakdown)
        exactly(total, self.result.resistance_ohm.value)

    def node(self, place):
        return int(np.searchsorted(self.problem.nodes_nm, place))

    def beside(self, name, columns):
        """Values and errors of sums at nodes, (K, columns) each, from the batches."""
        found = self.totals.rays[name] if name in self.totals.rays else getattr(self.totals, name)
        each = found / self.totals.histories[:, None, None] / BIAS
        assert each.shape[2] == columns
        return each.mean(axis=0), each.std(axis=0, ddof=1) / np.sqrt(len(each))


# --- one plane ----------------------------------------------------------------------------------

KINDS = {
    "constant": (False, False),
    "constant diffuse": (False, True),
    "tunnel": (True, False),
    "tunnel diffuse": (True, True),
}
SINGLES = list(product([2, 3], KINDS))
PLACE = 8.0


@pytest.fixture(scope="module", params=SINGLES, ids=lambda p: f"{p[0]} {p[1]}")
def single(request):
    dimension, kind = request.param
    case = Case(20, dimension, 80, planes=(Plane(PLACE, 0.4, *KINDS[kind]),))
    return Simulated(case, 1.5e6, seed=3)


def test_one_plane_in_a_channel_that_scatters(single):
    single.check_total()
    single.check_parts()
    agree(single.part("point", PLACE), parts_of(single.exact)["point", PLACE])


def test_half_space_means_in_the_cells_beside_a_plane(single):
    """f+ and f- are different before and behind the plane, and close to it they are curved."""
    edges = single.result.cell_edges_nm
    for name, function in (
        ("mu_plus_meV", single.exact.f_plus),
        ("mu_minus_meV", single.exact.f_minus),
    ):
        expected = over_cells(function, edges)
        for place in (PLACE - 0.5, PLACE + 0.5):
            found = profile(single.result, name, place)
            one = BIAS * expected[np.searchsorted(edges, place) - 1]
            agree(found, one, 0.015)


# A contact's barrier is a plane at the contact.
CONTACTS = {
    "diffuse": (Plane(0, 0.4, True, True), Plane(20, 0.6, False, True)),
    "mixed": (Plane(0, 0.6, True, False), Plane(20, 0.4, True, True)),
}


@pytest.mark.parametrize("planes", CONTACTS)
@DIMENSIONS
def test_barriers_at_contacts(dimension, planes):
    run = Simulated(Case(20, dimension, 80, planes=CONTACTS[planes]), 1.5e6, seed=4)
    run.check_total()
    run.check_parts()
    expected = parts_of(run.exact)
    for place in (0.0, 20.0):
        if expected["point", place] > 2:
            agree(run.part("point", place), expected["point", place])


# --- planes and nothing else --------------------------------------------------------------------


def over_flux(dimension, function):
    """Mean of a function of the cosine over the emitted flux, by scipy's quad."""
    if dimension == 3:
        return quad(lambda mu: 2 * mu * function(mu), 0, 1)[0]
    return quad(lambda angle: np.cos(angle) * function(np.cos(angle)), 0, pi / 2)[0]


@DIMENSIONS
@pytest.mark.parametrize("tunnel", [False, True])
def test_mirror_planes_add_up_direction_by_direction(dimension, tunnel):
    chances = {0: 0.9, 30: 0.5, 60: 0.6, 100: 0.8}
    planes = tuple(Plane(x, t, tunnel) for x, t in chances.items())

    def passes(mu):
        back = sum((1 - t) / t for t in chances.values())
        return 1 / (1 + (back / mu**2 if tunnel else back))

    run = Simulated(Case(100, dimension, planes=planes), 4e5, seed=5)
    agree(run.result.transmission, over_flux(dimension, passes), SMALL)
    run.check_parts()


@DIMENSIONS
def test_diffuse_planes_of_constant_transmission_add_up_as_in_one_dimension(dimension):
    """Each forgets the direction of what it reflects: R/R_B = 1 + sum (1-T)/T (Datta 1995)."""
    planes = tuple(Plane(x, t, diffuse=True) for x, t in ((0, 0.9), (30, 0.5), (100, 0.6)))
    run = Simulated(Case(100, dimension, planes=planes), 4e5, seed=6)
    agree(run.in_units(run.result.resistance_ohm), 1 + 0.1 / 0.9 + 1 + 0.4 / 0.6, SMALL)


@DIMENSIONS
def test_diffuse_tunnel_planes_without_scattering(dimension):
    planes = (Plane(30, 0.6, True, True), Plane(50, 0.5, True, True), Plane(100, 0.8, True, True))
    run = Simulated(Case(100, dimension, planes=planes), 1e6, seed=7)
    run.check_total()
    run.check_parts()


# --- everything together ------------------------------------------------------------------------

MIXED = Case(
    100,
    3,
    mean_free_path=40,
    sections=(Section(20, 50, 15), Section(50, 60, None)),
    planes=(
        Plane(0, 0.7, tunnel=True, diffuse=True),
        Plane(20, 0.8),
        Plane(35, 0.6, tunnel=True),
        Plane(70, 0.5, tunnel=True, diffuse=True),
        Plane(85, 0.7, diffuse=True),
        Plane(100, 0.8, tunnel=True),
    ),
)
PROBES = ((28, 1), (28, 0), (60, 1), (60, 0), (93, 0.5))
# 1/40 in two mechanisms, which must share the pieces outside sections one to two.
NAMED = "mean_free_path_nm: [{name: a, mean_free_path_nm: 120}, {name: b, mean_free_path_nm: 60}]"


@pytest.fixture(scope="module", params=[2, 3])
def mixed(request):
    return Simulated(replace(MIXED, dimension=request.param), 2.4e6, PROBES, cells=50, seed=8)


def test_total_and_parts(mixed):
    mixed.check_total()
    mixed.check_parts()


def test_half_space_means_at_both_sides_of_every_plane(mixed):
    values, errors = mixed.beside("densities", 4)
    exact = mixed.exact
    for plane in mixed.case.planes:
        x, node = plane.position, mixed.node(plane.position)
        expected = np.array(
            [
                exact.f_plus(x, "left"),
                exact.f_minus(x, "left"),
                exact.f_minus(x, "right"),
                exact.f_plus(x, "right"),
            ]
        )
        free = np.array([True, True, x < 100, True])
        assert np.all(values[node][~free] == 0.0)  # the right reservoir is empty
        # Known to 0.5 % of the drop over the channel.
        sizes = 0.005 / expected[free]
        for value, error, one, size in zip(
            values[node][free], errors[node][free], expected[free], sizes, strict=True
        ):
            agree(Estimate(value, error), one, size)


def test_half_space_means_along_the_channel(mixed):
    result, edges = mixed.result, mixed.result.cell_edges_nm
    for name, function in (
        ("mu_plus_meV", mixed.exact.f_plus),
        ("mu_minus_meV", mixed.exact.f_minus),
    ):
        expected = BIAS * over_cells(function, edges)
        agree_each(
            getattr(result, name), result.errors[name], expected, largest_relative_error=0.03
        )
        first = edges[1:] <= 50
        found, errors = getattr(result, name)[first], result.errors[name][first]
        agree_each(found, errors, expected[first], largest_relative_error=0.006)


def test_probes_read_what_arrives(mixed):
    """Flux-weighted, unlike the mean occupation: (28, 0) sees what comes from the right."""
    right = {x: mixed.exact.directions.flux @ mixed.exact.occupations(x)[0] for x, _ in PROBES}
    left = {x: mixed.exact.directions.flux @ mixed.exact.occupations(x)[1] for x, _ in PROBES}
    for (x, weight), probe in zip(PROBES, mixed.result.probes, strict=True):
        expected = weight * right[x] + (1 - weight) * left[x]
        agree(probe.potential, BIAS * expected, 0.006 if x > 90 else 0.0035)
    four = {(q.from_nm, q.to_nm): q.resistance_ohm for q in mixed.result.four_point}
    expected = (right[28] - 0.5 * (right[93] + left[93])) / mixed.exact.transmission
    found = [q.resistance_ohm for q in mixed.result.four_point][3]  # from (28, 1) to (93, 1/2)
    assert (28, 93) in four
    agree(mixed.in_units(found), expected)


def test_current_by_direction(mixed):
    """Each class of 5 degrees, and together what passes to either side."""
    result = mixed.result
    np.testing.assert_array_equal(result.view_nm, [0, 28, 60, 93, 100])
    np.testing.assert_allclose(result.direction_deg, 5 * np.arange(18) + 2.5, atol=1e-9)
    emitted = 1e-3 * BIAS / result.ballistic_resistance_ohm
    found = 5 * result.current_by_direction / emitted
    errors = 5 * result.errors["current_by_direction"] / emitted
    for view, x in enumerate(result.view_nm):
        expected = mixed.exact.fluxes(x, EDGES, "right" if x < 100 else "left")
        for moving in (0, 1):
            if x == 100 and moving == 1:  # what the barrier there sends back
                agree_each(found[view, 1], errors[view, 1], expected[1], largest_relative_error=0.1)
            else:
                agree_each(
                    found[view, moving],
                    errors[view, moving],
                    expected[moving],
                    largest_relative_error=0.04,
                )
    # Nobody is lost between the classes.
    readings = {
        (p.position_nm, w): p.potential.value
        for p, (_, w) in zip(result.probes, PROBES, strict=True)
    }
    for view, x in ((1, 28), (2, 60)):
        exactly(found[view, 0].sum(), readings[x, 1] / BIAS)
        exactly(found[view, 1].sum(), readings[x, 0] / BIAS)
    for view in range(5):
        exactly(found[view, 0].sum() - found[view, 1].sum(), result.transmission.value)


def test_mechanisms_share_a_piece_by_their_rates():
    case = replace(MIXED, sections=(), planes=MIXED.planes[1:3])
    result = follow(yaml_of(case, BIAS, scattering=NAMED, histories=2e4, cells=5))
    for inside in (10.0, 27.5, 60.0):
        a, b = (part(result, "piece", inside, name).value for name in "ab")
        exactly(2 * a, b)
    plain = follow(yaml_of(case, BIAS, histories=2e4, cells=5))
    exactly(result.resistance_ohm.value, plain.resistance_ohm.value)  # the same walks


@DIMENSIONS
def test_cells_change_no_jump(dimension):
    """The same bits with 5 and with 400 cells in all that is no profile."""
    case = replace(MIXED, dimension=dimension)
    one, other = (
        follow(yaml_of(case, BIAS, probes=PROBES, histories=2e4, cells=cells)) for cells in (5, 400)
    )
    assert other.x_nm.size > 5 * one.x_nm.size
    assert one.resistance_ohm == other.resistance_ohm and one.transmission == other.transmission
    assert one.breakdown == other.breakdown and one.probes == other.probes
    np.testing.assert_array_equal(one.current_by_direction, other.current_by_direction)


# --- energy -------------------------------------------------------------------------------------

# At 0 K the current flows from 0 to the bias. Steps cut that into three windows of constants.
WINDOWS = ((0.25, 0.3, 30), (0.25, 0.8, 30), (0.5, 0.8, 60))
STEPS = """
channel: {{length_nm: 40, dimension: {dimension}}}
contacts: {{bias_mV: 4, temperature_K: 0}}
scattering:
  mean_free_path_nm: {{energy_meV: [2, 2.0001], value: [30, 60]}}
  points:
    - position_nm: 15
      transmission: {{energy_meV: [1, 1.0001], value: [0.3, 0.8]}}
      angular: tunnel
      reflection: {reflection}
probes: [{{position_nm: 25}}]
simulation: {{histories: 1.6e+6, cells: 8, energy_bins: 40, seed: {dimension}}}
"""


@pytest.mark.parametrize(("dimension", "reflection"), [(2, "specular"), (3, "diffuse")])
def test_tables_that_are_steps_are_constants_in_windows_of_energy(dimension, reflection):
    result = follow(STEPS.format(dimension=dimension, reflection=reflection))
    solutions = []
    for _, chance, path in WINDOWS:
        plane = Plane(15, chance, True, reflection == "diffuse")
        solutions.append(reference_angles.solve(Case(40, dimension, path, planes=(plane,))))
    share = np.array([window[0] for window in WINDOWS])
    each = np.array([s.transmission for s in solutions])
    total = share @ each
    slope = 1e-4  # of the steps' own width
    agree(result.transmission, total, SMALL, systematic=slope)
    ballistic = result.ballistic_resistance_ohm
    drop = share @ [mean(s, 15, "left") - mean(s, 15, "right") for s in solutions]
    jump = part(result, "point", 15.0)
    agree(Estimate(jump.value / ballistic, jump.error / ballistic), drop / total, 0.006, slope)
    # mu+- and the probe add up over energies.
    edges = result.cell_edges_nm
    for name in ("f_plus", "f_minus"):
        cells = np.array([over_cells(getattr(s, name), edges) for s in solutions])
        mu = {"f_plus": "mu_plus_meV", "f_minus": "mu_minus_meV"}[name]
        first = edges[1:] <= 20
        limits = {"largest_relative_error": 0.006, "systematic": slope}
        found, errors = getattr(result, mu)[first], result.errors[mu][first]
        agree_each(found, errors, 4 * (share @ cells)[first], **limits)
        for energy, one in zip((0.5, 1.5, 3.0), cells, strict=True):
            row = np.searchsorted(result.energy_edges_meV, energy) - 1
            f, error = getattr(result, name)[row], result.errors[name][row]
            agree_each(f, error, one, largest_relative_error=0.1)
    flux = [
        s.directions.flux @ (s.occupations(25)[0] + s.occupations(25)[1]) / 2 for s in solutions
    ]
    agree(result.probes[0].potential, 4 * (share @ flux), systematic=slope)
    # And so does the current by direction at its end.
    found = 5 * result.current_by_direction[-1, 0] / (4e-3 / ballistic)
    errors = 5 * result.errors["current_by_direction"][-1, 0] / (4e-3 / ballistic)
    expected = share @ [s.fluxes(40, EDGES)[0] for s in solutions]
    agree_each(found, errors, expected, largest_relative_error=0.05, systematic=slope)
    exactly(found.sum(), result.transmission.value)
