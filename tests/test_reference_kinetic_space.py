"""The deterministic solver with directions against closed forms, that for d = 1, and finer grids.

Its own accuracy is asked for to 3e-4 and better, without any statistics.
"""

from dataclasses import replace
from math import pi

import numpy as np
import pytest
from scipy.integrate import quad
from scipy.special import expn

from tests import reference_angles as angles
from tests import reference_kinetic as line
from tests.reference_kinetic_space import (
    BOLTZMANN,
    Bath,
    Carriers,
    Case,
    NotConverged,
    Phonon,
    Plane,
    Probe,
    refined,
    solve,
)

TABLE = ((0.0, 30.0), (0.2, 0.8))
BACK = ((0.0, 30.0), (0.9, 0.3))
DIMENSIONS = pytest.mark.parametrize("dimension", [2, 3])

FILTERS = Case(
    100,
    30,
    3,
    40,
    mean_free_path=100,
    planes=(Plane(30, TABLE), Plane(60, BACK)),
    mechanisms=(Bath(80),),
)
MIXTURE = Case(
    100,
    60,
    3,
    100,
    temperature_right=80,
    lattice_temperature=60,
    mean_free_path=120,
    planes=(Plane(0, 0.8, tunnel=True, diffuse=True), Plane(30, ((0, 60), (0.3, 0.8)))),
    mechanisms=(Bath(150), Carriers(100), Carriers(300, True), Phonon(80, 30)),
    probes=(Probe(60, 0.4, 0.2, 90),),
)


def fermi(energy, mu, kelvin):
    return 0.5 * (1 - np.tanh((energy - mu) / (2 * BOLTZMANN * kelvin)))


def close(value, expected, relative=1e-6):
    np.testing.assert_allclose(value, expected, rtol=relative, atol=relative)


# --- one dimension: the other solver --------------------------------------------------------------

PHONONS = Case(500, 100, 1, 300, mean_free_path=150, mechanisms=(Phonon(15, 160),))
ON_A_LINE = {
    "kept bath": replace(FILTERS, dimension=1, temperature_left=20),
    "randomised bath": replace(
        FILTERS,
        dimension=1,
        temperature_left=20,
        temperature_right=30,
        lattice_temperature=25,
        mechanisms=(Bath(60, True),),
    ),
    "kept carriers": replace(FILTERS, dimension=1, mechanisms=(Carriers(50),)),
    "randomised carriers and a probe": replace(
        FILTERS, dimension=1, mechanisms=(Carriers(50, True),), probes=(Probe(80, 0.4, 0.8, 30),)
    ),
    "phonons": replace(PHONONS, bias=400),
    "cold phonons": replace(PHONONS, length=100, bias=200, temperature_left=4),
    "all": replace(
        MIXTURE,
        dimension=1,
        planes=(Plane(0, 0.8), Plane(30, ((0, 60), (0.3, 0.8)))),
        energy_step=1.25,
    ),
}


def on_a_line(case):
    """The same case for tests/reference_kinetic.py."""
    kinds = {Bath: line.Bath, Carriers: line.Carriers, Phonon: line.Phonon}
    inner = [p for p in case.planes if p.position > 0]
    return line.Case(
        length=case.length,
        bias=case.bias,
        temperature_left=case.temperature_left,
        temperature_right=case.temperature_right,
        lattice_temperature=case.lattice_temperature,
        backscatter_path=2 * case.mean_free_path,
        scatterers=tuple(line.Scatterer(p.position, p.transmission) for p in inner),
        interface_left=next((p.transmission for p in case.planes if p.position == 0), None),
        mechanisms=tuple(kinds[type(m)](**vars(m)) for m in case.mechanisms),
        probes=tuple(line.Probe(**vars(p)) for p in case.probes),
        energy_step=case.energy_step,
    )


@pytest.mark.parametrize("name", ON_A_LINE)
def test_one_dimension_is_the_other_solver(name):
    """With one direction everything is as in tests/reference_kinetic.py, totals and profiles."""
    case = ON_A_LINE[name]
    solution, known = solve(case), line.solve(on_a_line(case))
    close(solution.current, known.current, 5e-5)
    heats = known.heat_left, known.heat_right, known.lattice, np.sum(known.probe_heat)
    close(solution.shares, np.array(heats) / known.current / case.bias, 1e-4)
    close(solution.probe_mu / case.bias, known.probe_mu / case.bias, 1e-4)
    for x in (0.2, 0.45, 0.78):
        mu, kelvin = solution.mean(case.length * (x - 1e-3), case.length * (x + 1e-3))
        for k, side in enumerate(("plus", "minus")):
            expected = known.at(f"mu_{side}", x * case.length)
            assert abs(mu[k] - expected) < 3e-4 * case.bias, side
            assert abs(kelvin[k] / known.at(f"T_{side}", x * case.length) - 1) < 2e-3, side


@pytest.mark.parametrize(
    ("bias", "transmission", "share"),
    [(100, 0.3269, 0.4206), (400, 0.2338, 0.7156), (800, 0.1632, 0.8125)],
)
def test_table_of_optical_phonons(bias, transmission, share):
    """L = 500, lam = 300, l_op = 15 nm, w = 160 meV, 300 K: values of an earlier deterministic
    solution in d = 1, printed with four digits."""
    solution = solve(replace(PHONONS, bias=bias))
    assert abs(solution.transmission - transmission) < 6e-5
    assert abs(solution.shares[2] - share) < 6e-5


# --- without relaxation ---------------------------------------------------------------------------

# Transmission of a slab with isotropic scattering at L/l. d = 3: Heaslet & Warming, Int. J. Heat
# Mass Transfer 8 (1965) 979 (radiation between black walls; from memory to 2e-4), recomputed from
# the integral equation; d = 2: from its integral equation.
SLAB = {
    3: {0.1: 0.9157, 0.4: 0.7459, 1: 0.5534, 2: 0.3901, 5: 0.2077},
    2: {0.1: 0.930973, 0.4: 0.781098, 1: 0.597792, 2: 0.432178, 5: 0.236688},
}


@DIMENSIONS
def test_slabs(dimension):
    for thickness, expected in SLAB[dimension].items():
        solution = solve(Case(100 * thickness, 10, dimension, 100, mean_free_path=100))
        close(solution.transmission, expected, 1e-4 if dimension == 3 else 1e-5)
        close(solution.shares, [0.5, 0.5, 0, 0])


@DIMENSIONS
def test_planes(dimension):
    """Every kind of plane, against the solution that is exact along the channel."""
    planes = (
        (0, 0.7, True, True),
        (30, 0.4, False, False),
        (50, 0.6, True, False),
        (90, 0.8, True, True),
        (100, 0.9, False, True),
    )
    known = angles.solve(
        angles.Case(100, dimension, 80, planes=tuple(angles.Plane(*p) for p in planes))
    )
    case = Case(100, 10, dimension, 100, mean_free_path=80)
    solution = solve(replace(case, planes=tuple(Plane(*p) for p in planes)))
    close(solution.transmission, known.transmission, 1e-5)
    for k, plane in enumerate(planes):
        for side, name in enumerate(("left", "right")):
            expected = 0.5 * (known.f_plus(plane[0], name) + known.f_minus(plane[0], name))
            close(solution.jumps[k, side] / 10, expected, 1e-4)


@DIMENSIONS
def test_a_probe_in_a_clean_channel(dimension):
    """T = 1 - eps/2, and at eps = 1 half of the power for the probe, in any dimension: Buttiker,
    Phys. Rev. B 33 (1986) 3020."""
    case = Case(100, 30, dimension, 40, probes=(Probe(40, 0.6),))
    close(solve(case).transmission, 0.7)
    whole = solve(replace(case, probes=(Probe(40, 1.0),)))
    close(whole.transmission, 0.5)
    close(whole.shares, [0.25, 0.25, 0, 0.5])
    close(whole.probe_mu, [15.0])
    uneven = solve(replace(case, probes=(Probe(40, 0.9, 0.3),)))
    close(uneven.probe_mu, [0.75 * 30])


# --- conservation, equilibrium, refinement --------------------------------------------------------


def test_heats_add_up_to_the_power():
    solution = solve(MIXTURE)
    assert abs(solution.imbalance) < 1e-6
    assert min(solution.lattice, solution.probe_heat[0]) > 0.02 * solution.power


@DIMENSIONS
def test_equilibrium_stays(dimension):
    case = replace(
        MIXTURE,
        bias=0,
        dimension=dimension,
        temperature_right=None,
        lattice_temperature=None,
        probes=(Probe(60, 0.4, 0.2),),
    )
    solution = solve(case)
    for f in (solution.f_plus, solution.f_minus):
        close(f, np.broadcast_to(fermi(solution.energy, 0, 100), f.shape), 1e-7)
    heats = solution.heat_left, solution.lattice, solution.probe_heat[0]
    close(np.array(heats) / (BOLTZMANN * 100) ** 2, 0.0, 1e-6)
    close(solution.current, 0.0, 1e-6)


@pytest.mark.parametrize(
    "case",
    [
        FILTERS,
        pytest.param(replace(FILTERS, mechanisms=(Carriers(80),)), marks=pytest.mark.slow),
        pytest.param(MIXTURE, marks=pytest.mark.slow),
        Case(100, 50, 3, 100, mean_free_path=100, mechanisms=(Phonon(100, 30),)),
        Case(100, 50, 2, 4, mean_free_path=100, mechanisms=(Phonon(50, 30),)),
    ],
)
def test_finer_grids_change_nothing(case):
    coarse, fine = solve(case), solve(refined(case, 1.5))
    close(fine.transmission, coarse.transmission, 2e-4)
    close(fine.shares, coarse.shares, 2e-4)
    for x in (0.1, 0.9):
        places = (x - 0.01) * case.length, (x + 0.01) * case.length
        for one, other, size in zip(
            coarse.mean(*places), fine.mean(*places), (case.bias, np.inf), strict=True
        ):
            tolerance = 3e-4 * size if np.isfinite(size) else 3e-3 * other
            assert np.all(np.abs(one - other) < tolerance)


def test_third_order_along_the_channel():
    case = Case(200, 50, 3, 100, mean_free_path=30, mechanisms=(Phonon(30, 30),), directions=4)
    exact = solve(replace(case, refinement=3))
    errors = [
        abs(solve(replace(case, refinement=r)).transmission - exact.transmission)
        for r in (0.25, 0.5, 1.0)
    ]
    assert errors[1] < errors[0] / 6
    assert errors[2] < errors[1] / 6


# --- relaxation with directions -------------------------------------------------------------------


def average(dimension, value):
    """Mean of a function of the cosine over the directions of a half space."""
    if dimension == 3:
        return quad(value, 0, 1, epsabs=1e-9)[0]
    return 2 / pi * quad(lambda angle: value(np.cos(angle)), 0, pi / 2, epsabs=1e-9)[0]


def test_kept_bath_behind_a_plane():
    """f+ = F(mu+) + [T F_L + (1-T) F_R - F(mu+)] <exp(-x/(c path))>; the mean is E_2(x/path) in
    d = 3, and its integral -E_3."""
    case = Case(100, 30, 3, 40, planes=(Plane(20, 0.4),), mechanisms=(Bath(50),))
    solution = solve(replace(case, refinement=2))
    e = solution.energy
    first = 0.4 * fermi(e, 30, 40) + 0.6 * fermi(e, 0, 40)
    for x in (0, 10, 40, 70):
        left = (expn(3, x / 50) - expn(3, x / 50 + 0.1)) / 0.1
        expected = fermi(e, 12, 40) * (1 - left) + first * left
        close(solution.occupations(20 + x, 25 + x)[0], expected, 6e-5)


def expanded(energy, number, square, own_number, own_square, carriers):
    """F of the half space's number and energy plus its slopes times what a direction has more."""

    def occupation(n, u):
        kelvin = np.sqrt(6 * (u - n**2 / 2)) / pi / BOLTZMANN if carriers else 40
        return fermi(energy, n, kelvin)

    d = 1e-3
    by_n = (occupation(number + d, square) - occupation(number - d, square)) / (2 * d)
    by_u = (occupation(number, square + d) - occupation(number, square - d)) / (2 * d)
    away = by_n * (own_number - number) + by_u * (own_square - square)
    return occupation(number, square) + away


def scaled(energy, number, own_number):
    """The deviation F(mu+) - F_R in proportion to the number in a direction."""
    deviation = fermi(energy, number, 40) - fermi(energy, 0, 40)
    return fermi(energy, 0, 40) + own_number / number * deviation


@DIMENSIONS
@pytest.mark.parametrize("mechanism", [Bath(50), Carriers(50)])
def test_kept_behind_a_tunnel_plane(dimension, mechanism):
    """Behind it the number depends on the direction, and nothing changes it any more. Each
    direction goes exponentially to its target, over path times cosine."""
    planes = (Plane(20, 0.6, tunnel=True),)
    case = Case(100, 30, dimension, 40, planes=planes, mechanisms=(mechanism,), refinement=2)
    hot = isinstance(mechanism, Carriers)
    floor = (pi * BOLTZMANN * 40) ** 2 / 6

    def passing(c):
        return 0.6 * c**2 / (0.6 * c**2 + 0.4)

    def occupation(c, x, energy, kept):
        """Mean from x to x + 5 nm behind the plane."""
        n = 30 * passing(c)
        if kept == "linear":
            aim = expanded(energy, number, square, n, floor + 15 * n, hot)
        else:
            aim = scaled(energy, number, n)
        first = fermi(energy, 0, 40) + passing(c) * (fermi(energy, 30, 40) - fermi(energy, 0, 40))
        path = 50 * max(c, 1e-9)
        return aim + (first - aim) * path / 5 * (np.exp(-x / path) - np.exp(-(x + 5) / path))

    number = 30 * average(dimension, passing)
    square = floor + 15 * number
    for kept in ("linear",) if hot else ("linear", "scaled"):
        solution = solve(replace(case, kept=kept))
        for x in (0, 10, 40):
            plus = solution.occupations(20 + x, 25 + x)[0]
            for e in np.searchsorted(solution.energy, (-4.0, 8.0, 25.0)):
                given = x, solution.energy[e], kept
                expected = average(dimension, lambda c, given=given: occupation(c, *given))
                close(plus[e], expected, 6e-5)


@DIMENSIONS
@pytest.mark.parametrize("mechanism", [Bath(50, True), Carriers(50, True)])
def test_randomised_adds_to_the_rate_of_collisions(dimension, mechanism):
    """Where nothing depends on energy the number sees one isotropising rate 1/l + 1/path."""
    case = Case(100, 30, dimension, 40, mean_free_path=200, mechanisms=(mechanism,))
    slab = solve(Case(100, 30, dimension, 40, mean_free_path=40))
    close(solve(case).transmission, slab.transmission, 1e-6)


@DIMENSIONS
def test_soft_phonons_are_isotropising_collisions(dimension):
    """Phonons of energy << kT scatter at the rate (2N+1)/l_op at all energies; 1/kT is 1/43."""
    n = 1 / np.expm1(1 / (BOLTZMANN * 500))
    case = Case(100, 10, dimension, 500, mechanisms=(Phonon(50 * (2 * n + 1), 1.0),))
    slab = solve(Case(100, 10, dimension, 500, mean_free_path=50))
    close(solve(case).transmission, slab.transmission, 3e-4)


@DIMENSIONS
@pytest.mark.parametrize("mechanism", [Bath(80), Carriers(80)])
def test_kept_leaves_the_resistance(dimension, mechanism):
    case = replace(FILTERS, dimension=dimension, planes=(Plane(40, 0.5),), mechanisms=(mechanism,))
    solution, elastic = solve(case), solve(replace(case, mechanisms=()))
    close(solution.transmission, elastic.transmission)
    if isinstance(mechanism, Carriers):  # their energy goes on as well
        close(solution.shares, [0.5, 0.5, 0, 0])


@pytest.mark.parametrize("mechanism", [Bath(80), Carriers(80), Phonon(80, 15)])
def test_mirror_image(mechanism):
    """The channel seen from its other end, with the bias reversed, is the same channel; and full
    states from one contact are empty ones from the other. The scaled target of a kept bath is
    neither."""
    case = replace(FILTERS, planes=(Plane(0, 0.7, True), Plane(40, 0.5)), mechanisms=(mechanism,))
    mirror = replace(case, bias=-30, planes=(Plane(60, 0.5), Plane(100, 0.7, True)))
    close(solve(mirror).current, -solve(case).current, 1e-6)
    close(solve(mirror).shares[[1, 0, 2]], solve(case).shares[:3], 1e-6)
    even = replace(case, planes=(Plane(50, 0.5),))
    close(solve(even).heat_left, solve(even).heat_right, 1e-5)
    if isinstance(mechanism, Bath):
        scaled = solve(replace(even, kept="scaled"))
        assert scaled.heat_left - scaled.heat_right > 0.015 * scaled.power


def test_iteration_that_does_not_end(monkeypatch):
    monkeypatch.setattr("tests.reference_kinetic_space.SWEEPS", 3)
    with pytest.raises(NotConverged, match="still change"):
        solve(FILTERS)


@pytest.mark.parametrize(
    "fault",
    [
        {"dimension": 4},
        {"temperature_left": 0.0},
        {"planes": (Plane(101, 0.5),)},
        {"mechanisms": (Bath(0),)},
        {"kept": "other"},
    ],
)
def test_faults(fault):
    with pytest.raises(ValueError):
        solve(replace(FILTERS, **fault))
