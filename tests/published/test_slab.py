"""A slab that scatters isotropically between two contacts, in two and three dimensions.

In d = 3 this is radiation between black walls: M. A. Heaslet & R. F. Warming, Int. J. Heat Mass
Transfer 8 (1965) 979 (printed values from memory). All else is computed here by discrete ordinates
(tests/reference_angles.py; S. Chandrasekhar, Radiative Transfer, 1950), good to 1e-8.
"""

from math import pi, sqrt

import pytest

from carriersim.result import Estimate
from tests.channels_in_space import follow, over_cells, yaml_of
from tests.checks_of_numbers import agree, agree_each, exactly, part
from tests.reference_angles import Case, solve

PATH, BIAS, CELLS = 10.0, 10.0, 12
LARGEST = 0.003  # relative standard error
# Printed to 4 digits; in d = 2 from the integral equation in two dimensions, two methods.
PRINTED = {
    2: {
        0.1: 0.930973, 0.2: 0.873759, 0.4: 0.781098, 0.6: 0.707885, 0.8: 0.647973, 1: 0.597792,
        1.5: 0.501456, 2: 0.432178, 2.5: 0.379823, 3: 0.338819, 5: 0.236688,
    },
    3: {
        0.1: 0.9157, 0.2: 0.8492, 0.4: 0.7459, 0.6: 0.6673, 0.8: 0.6047, 1: 0.5534,
        1.5: 0.4573, 2: 0.3901, 2.5: 0.3402, 3: 0.3016, 5: 0.2077,
    },
}  # fmt: skip
LAST_DIGIT = {2: 1e-6, 3: 1e-4}
BACKSCATTER = {2: pi / 2, 3: 4 / 3}  # lam/l
# What a thick slab has in addition, in mean free paths: Milne's problem. d = 3: twice Hopf's
# 0.710446 (Mathematical Problems of Radiative Equilibrium, 1934); d = 2: 1 + 2/pi.
EXTRA = {2: 1.636620, 3: 1.420892}
# Part of a contact for a thick slab, <mu>/(2 sqrt(<mu^2>)) (Hopf & Bronstein; Chandrasekhar 1950).
CONTACT = {2: sqrt(2) / pi, 3: sqrt(3) / 4}
# Histories by thickness: so that R, and at 3 the parts of R too, are known well enough.
HISTORIES = {0.1: 2e5, 0.2: 2e5, 0.4: 2e5, 0.6: 3e5, 0.7: 1e6, 3: 2.6e6, 10: 1.4e6, 20: 2e6}
QUICK = (0.1, 0.7, 3, 10)
SLABS = [
    pytest.param((d, t), id=f"{d}-{t}", marks=[] if t in QUICK else pytest.mark.slow)
    for d in (2, 3)
    for t in sorted({*PRINTED[2], *HISTORIES})
]
CLOSE = 3  # L/l that is thick enough and yet lets enough carriers through


class Slab:
    """A simulated slab and its exact solution."""

    def __init__(self, dimension, thickness):
        self.dimension, self.thickness = dimension, thickness
        self.length = PATH * thickness
        case = Case(self.length, dimension, mean_free_path=PATH)
        histories = HISTORIES.get(thickness, 6e5)
        self.result = follow(yaml_of(case, BIAS, histories=histories, cells=CELLS, seed=dimension))
        self.exact = solve(case)

    def in_units(self, estimate):
        """A resistance in units of R_B."""
        ballistic = self.result.ballistic_resistance_ohm
        return Estimate(estimate.value / ballistic, estimate.error / ballistic)

    @property
    def resistance(self):
        return self.in_units(self.result.resistance_ohm)

    def mean(self, x):
        """Exact mean of both directions."""
        return 0.5 * (self.exact.f_plus(x) + self.exact.f_minus(x))

    @property
    def contact(self):
        """Exact part of either contact."""
        return (1 - self.mean(0)) / self.exact.transmission

    def in_cells(self, function):
        """Mean of a function of the place over each cell."""
        return over_cells(function, self.result.cell_edges_nm)


_known = {}


def slab_of(dimension, thickness):
    key = dimension, thickness
    if key not in _known:
        _known[key] = Slab(*key)
    return _known[key]


@pytest.fixture(params=SLABS)
def slab(request):
    return slab_of(*request.param)


@pytest.fixture(params=[2, 3])
def thick(request):
    return slab_of(request.param, CLOSE)


def test_transmission(slab):
    agree(slab.result.transmission, slab.exact.transmission, LARGEST)
    agree(slab.resistance, 1 / slab.exact.transmission, LARGEST)


@pytest.mark.parametrize(
    ("dimension", "thickness"),
    [
        pytest.param(d, t, marks=[] if t in QUICK else pytest.mark.slow)
        for d in (2, 3)
        for t in PRINTED[d]
    ],
)
def test_printed_values(dimension, thickness):
    found = slab_of(dimension, thickness).result.transmission
    rounding = 0.6 * LAST_DIGIT[dimension]
    agree(found, PRINTED[dimension][thickness], LARGEST, systematic=rounding)


@pytest.mark.parametrize("dimension", [2, 3])
def test_backscattering_path_is_this_many_mean_free_paths(dimension):
    """lam = (pi/2) l or (4/3) l: the same walks, whichever is given."""
    results = []
    for path in (
        f"mean_free_path_nm: {PATH}",
        f"backscatter_path_nm: {BACKSCATTER[dimension] * PATH:.17g}",
    ):
        text = yaml_of(Case(5 * PATH, dimension), scattering=path, histories=3000, cells=4)
        results.append(follow(text))
    one, other = results
    assert one.events == other.events
    exactly(one.resistance_ohm.value, other.resistance_ohm.value)


def test_thick_slab(thick):
    """R/R_B = (L/l + constant)/(lam/l), but for 0.05 % of the constant."""
    resistance, factor = thick.resistance, BACKSCATTER[thick.dimension]
    constant = Estimate(factor * resistance.value - thick.thickness, factor * resistance.error)
    expected = EXTRA[thick.dimension]
    known = factor / thick.exact.transmission - thick.thickness - expected
    assert abs(known) < 6e-4 * expected
    agree(constant, expected, systematic=abs(known))


@pytest.mark.parametrize("thickness", [10, pytest.param(20, marks=pytest.mark.slow)])
@pytest.mark.parametrize("dimension", [2, 3])
def test_thicker_slabs(dimension, thickness):
    slab = slab_of(dimension, thickness)
    agree(slab.resistance, (thickness + EXTRA[dimension]) / BACKSCATTER[dimension], LARGEST)


def test_contacts_of_a_thick_slab(thick):
    expected = CONTACT[thick.dimension]
    known = abs(thick.contact - expected)
    assert known < 5e-4 * expected
    for place in (0.0, thick.length):
        one = thick.in_units(part(thick.result, "interface", place))
        agree(one, expected, systematic=known)


@pytest.mark.parametrize("thickness", [0.7, CLOSE, 10])
@pytest.mark.parametrize("dimension", [2, 3])
def test_parts(dimension, thickness):
    """Contacts and what lies between."""
    slab = slab_of(dimension, thickness)
    between = slab.in_units(part(slab.result, "piece", slab.length / 2))
    agree(between, 1 / slab.exact.transmission - 2 * slab.contact)
    for place in (0.0, slab.length):
        one = slab.in_units(part(slab.result, "interface", place))
        agree(one, slab.contact, 0.0035 if thickness <= CLOSE else 0.03)
    parts = [p.resistance_ohm.value for p in slab.result.breakdown]
    exactly(sum(parts), slab.result.resistance_ohm.value)


def test_half_space_means_along_a_slab(thick):
    """f+ everywhere; f- where it is not so small that its relative error is large."""
    result = thick.result
    plus, minus = thick.in_cells(thick.exact.f_plus), thick.in_cells(thick.exact.f_minus)
    agree_each(result.mu_plus_meV / BIAS, result.errors["mu_plus_meV"] / BIAS, plus)
    first = slice(CELLS // 2 + 1)
    found, errors = result.mu_minus_meV / BIAS, result.errors["mu_minus_meV"] / BIAS
    agree_each(found[first], errors[first], minus[first])
    agree_each(found, errors, minus, largest_relative_error=0.02)
    both, errors = result.mu_meV / BIAS, result.errors["mu_meV"] / BIAS
    agree_each(both[first], errors[first], 0.5 * (plus + minus)[first])


# Relative error of the series law R/R_B = 1 + L/lam, which is largest here.
@pytest.mark.parametrize(("dimension", "percent"), [(2, 2.3), (3, 3.4)])
def test_simple_formula_is_off_by_this_much(dimension, percent):
    slab = slab_of(dimension, 0.7)
    simple = 1 + slab.thickness / BACKSCATTER[dimension]
    off, error = slab.resistance.value / simple - 1, slab.resistance.error / simple
    assert error < 0.001
    assert abs(100 * off - percent) < 100 * 4 * error + 0.06
