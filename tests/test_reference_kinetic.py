"""The deterministic reference solver against closed forms, finer grids and the equations.

What is exact up to the energy grid is asked for to 1e-6 and better; where a limit is approached,
the tolerance is the next order of the expansion.
"""

import numpy as np
import pytest

from tests.reference_kinetic import (
    BOLTZMANN,
    Bath,
    Carriers,
    Case,
    NotConverged,
    Phonon,
    Probe,
    Scatterer,
    Section,
    refined,
    replace,
    solve,
)

TUBE = Case(500, 100, 300, backscatter_path=300, mechanisms=(Phonon(15, 160),))
MIXTURE = Case(
    300,
    200,
    300,
    lattice_temperature=250,
    backscatter_path=300,
    scatterers=(Scatterer(100, ((0, 200), (0.3, 0.8))),),
    mechanisms=(Bath(100), Carriers(80), Phonon(40, 80), Phonon(60, 160)),
    probes=(Probe(220, 0.3, 0.6),),
)


def fermi(energy, mu, temperature):
    return 0.5 * (1 - np.tanh((energy - mu) / (2 * BOLTZMANN * temperature)))


def integral(values, energy):
    return np.sum(values, axis=-1) * (energy[1] - energy[0])


def close(value, expected, relative=1e-6):
    np.testing.assert_allclose(value, expected, rtol=relative, atol=relative)


@pytest.fixture(scope="module")
def mixture():
    return solve(MIXTURE)


# --- the equations themselves -----------------------------------------------------------------


def right_hand_side(solution, x):
    """R± at x, energy by energy, from the words of the equations."""
    case, energy = solution.case, solution.energy
    step = energy[1] - energy[0]
    f = [solution.at("f_plus", x), solution.at("f_minus", x)]
    mean = (f[0] + f[1]) / 2
    lattice = case.temperatures[2]

    def filling(one):
        n = step * sum(one - (energy < 0) - 0.5 * (energy == 0))
        # The kink of E theta(-E) on the grid: Euler-Maclaurin.
        u = step * sum(energy * (one - (energy < 0))) + step**2 / 12
        return n, np.sqrt(6 * (u - n * n / 2)) / (np.pi * BOLTZMANN)

    sides = []
    for own, other in (f, f[::-1]):
        rate = (other - own) / case.backscatter_path
        for one in case.mechanisms:
            if isinstance(one, Phonon):
                number = 1 / (np.exp(one.energy / (BOLTZMANN * lattice)) - 1)
                up = np.interp(energy + one.energy, energy, mean, right=0)
                down = np.interp(energy - one.energy, energy, mean, left=1)
                leave = (number + 1) * (1 - down) + number * (1 - up)
                enter = (number + 1) * up + number * down
                rate = rate + (enter * (1 - own) - leave * own) / one.path
                continue
            mu, temperature = filling(mean if one.randomised else own)
            if isinstance(one, Bath):
                temperature = lattice
            rate = rate + (fermi(energy, mu, temperature) - own) / one.path
        sides.append(rate)
    return sides


@pytest.mark.parametrize("randomised", [False, True])
def test_fields_satisfy_the_differential_equations(randomised):
    case = Case(
        200,
        200,
        300,
        lattice_temperature=250,
        backscatter_path=300,
        mechanisms=(Bath(100, randomised), Carriers(80, randomised), Phonon(40, 160)),
        refinement=2,
    )
    solution = solve(case)
    width = 1e-2
    for x in (30.0, 100.0, 190.0):
        for name, sign, side in zip(
            ("f_plus", "f_minus"), (1, -1), right_hand_side(solution, x), strict=True
        ):
            slope = (solution.at(name, x + width) - solution.at(name, x - width)) / (2 * width)
            # The largest side is some 5e-3 per nm; the spline is what limits.
            assert np.max(np.abs(sign * slope - side)) < 2e-7


def test_discrete_residual_and_energy_balance(mixture):
    assert mixture.residual < 1e-9
    assert abs(mixture.imbalance) < 1e-9
    assert mixture.lattice > 0
    j = integral(mixture.f_plus - mixture.f_minus, mixture.energy)
    before, after = mixture.x < 100, mixture.x > 220
    close(j[before], mixture.current, 1e-8)
    close(j[after], mixture.current, 1e-8)


def test_jump_conditions(mixture):
    at = np.flatnonzero(mixture.x == 100)
    plus, minus, energy = mixture.f_plus[at], mixture.f_minus[at], mixture.energy
    t = np.interp(energy, (0, 200), (0.3, 0.8))
    close(plus[1], t * plus[0] + (1 - t) * minus[1], 1e-11)
    close(minus[0], t * minus[1] + (1 - t) * plus[0], 1e-11)
    at = np.flatnonzero(mixture.x == 220)
    plus, minus = mixture.f_plus[at], mixture.f_minus[at]
    own = fermi(energy, mixture.probe_mu[0], 250)
    close(plus[1], 0.7 * plus[0] + 0.3 * own, 1e-9)
    close(minus[0], 0.4 * minus[1] + 0.6 * own, 1e-9)
    close(integral(0.3 * plus[0] + 0.6 * minus[1] - 0.9 * own, energy), 0.0, 1e-7)


def test_fourth_order_in_place():
    # At 0.25 the cells are as wide as the shortest path.
    case = replace(TUBE, length=200, bias=400)
    exact = solve(replace(case, refinement=3))
    errors = np.array(
        [
            [solution.current / exact.current - 1, solution.lattice_share - exact.lattice_share]
            for solution in (solve(replace(case, refinement=r)) for r in (0.25, 0.5, 1.0))
        ]
    )
    assert np.max(np.abs(errors[-1])) < 1e-7
    assert np.all(np.abs(errors[1]) < np.abs(errors[0]) / 8)


def test_finer_grids_change_nothing(mixture):
    # The kinks of the mixture's T(E) leave an error of second order in the energy step.
    for case, known, allowed in (
        (replace(TUBE, length=200), None, 1e-6),
        (MIXTURE, mixture, 1e-5),
    ):
        coarse, fine = known or solve(case), solve(refined(case, 1.5))
        assert abs(fine.current / coarse.current - 1) < allowed
        assert abs(fine.lattice_share - coarse.lattice_share) < allowed


def test_energy_grid_converges_exponentially():
    case = replace(TUBE, length=200, bias=400)
    exact = solve(replace(case, energy_step=5.0))
    errors = [
        abs(solve(replace(case, energy_step=step)).lattice_share - exact.lattice_share)
        for step in (80.0, 40.0, 20.0)
    ]
    assert errors[0] > 3e-4
    assert errors[1] < errors[0] / 10
    assert errors[2] < errors[1] / 10


def test_wider_window_changes_nothing():
    wide = solve(replace(TUBE, window=1000.0))
    close(solve(TUBE).lattice_share, wide.lattice_share, 1e-8)


def test_window_grows_until_wide_enough():
    case = replace(TUBE, length=50)
    close(solve(replace(case, window=100.0)).current, solve(case).current, 1e-7)


# --- without relaxation, or with none that acts -----------------------------------------------


def test_series_law():
    case = Case(
        300,
        50,
        100,
        backscatter_path=200,
        sections=(Section(100, 200, 50),),
        scatterers=(Scatterer(50, 0.3), Scatterer(250, 0.6)),
        interface_left=0.8,
        interface_right=0.5,
    )
    solution = solve(case)
    expected = 1 + 1 + 2 + 0.7 / 0.3 + 0.4 / 0.6 + 0.2 / 0.8 + 0.5 / 0.5
    close(1 / solution.transmission, expected, 1e-9)
    close(solution.lattice_share, 0.0, 1e-12)
    close(solution.heat_left, solution.current * 50 / 2)


def test_one_scatterer_drops_each_quasi_fermi_level_by_its_reflection():
    solution = solve(Case(10, 50, 100, scatterers=(Scatterer(5, 0.2),)))
    close(solution.mu_plus, np.where(np.arange(len(solution.x)) * 2 < len(solution.x), 50, 10))
    close(solution.mu_minus[0], 40)
    close(solution.mu_minus[-1], 0.0, 1e-7)


def test_energy_dependent_transmission_and_path():
    t = ((0, 30), (0.2, 0.8))
    path = ((-10, 40), (50.0, 400.0))
    solution = solve(Case(100, 30, 20, backscatter_path=path, scatterers=(Scatterer(40, t),)))
    energy = np.linspace(-120, 150, 200_001)
    resistance = 1 / np.interp(energy, *t) + 100 / np.interp(energy, *path)
    j = (fermi(energy, 30, 20) - fermi(energy, 0, 20)) / resistance
    close(solution.current, integral(j, energy), 2e-5)
    function = solve(
        Case(
            100,
            30,
            20,
            backscatter_path=lambda energy, x: np.interp(energy, *path),
            scatterers=(Scatterer(40, t),),
        )
    )
    close(function.current, solution.current, 1e-12)


def test_thermal_conductance():
    solution = solve(Case(100, 0, 60, 50, backscatter_path=100))
    expected = (np.pi * BOLTZMANN) ** 2 / 6 * (60**2 - 50**2) / 2
    close(solution.heat_right, expected)
    close(solution.heat_left, -expected)
    close(solution.current, 0.0, 1e-9)


def test_equilibrium_stays():
    solution = solve(replace(MIXTURE, bias=0, lattice_temperature=None))
    for f in (solution.f_plus, solution.f_minus):
        close(f, np.broadcast_to(fermi(solution.energy, 0, 300), f.shape), 1e-10)
    close([solution.current, solution.heat_left, solution.lattice], 0.0, 1e-8)


def test_linear_response_from_a_small_bias():
    small, smaller = (solve(replace(TUBE, bias=b)) for b in (0.5, 0.05))
    close(small.transmission, smaller.transmission, 1e-5)


@pytest.mark.parametrize("kind", [Bath, Carriers])
@pytest.mark.parametrize("path", [5.0, 100.0, 1e7])
def test_kept_adds_no_resistance(kind, path):
    case = Case(200, 60, 30, backscatter_path=150, scatterers=(Scatterer(80, 0.4),))
    solution = solve(replace(case, mechanisms=(kind(path),)))
    close(1 / solution.transmission, 1 + 200 / 150 + 0.6 / 0.4, 1e-7)
    elastic = solve(replace(case, energy_step=solution.energy[1] - solution.energy[0]))
    if path == 1e7:
        close(solution.heat_right, elastic.heat_right, 1e-4)


@pytest.mark.parametrize("kind", [Bath, Carriers])
def test_randomised_adds_half_its_rate_to_backscattering(kind):
    case = Case(200, 60, 30, backscatter_path=150, scatterers=(Scatterer(80, 0.4),))
    solution = solve(replace(case, mechanisms=(kind(70, randomised=True),)))
    close(1 / solution.transmission, 1 + 200 / 150 + 200 / 140 + 0.6 / 0.4, 1e-7)


def test_one_mechanism_equals_two_of_twice_the_path(mixture):
    halves = (Bath(200), Carriers(160), Phonon(80, 80), Phonon(120, 160))
    split = solve(replace(MIXTURE, mechanisms=halves + halves))
    close(split.current, mixture.current, 1e-8)
    close(split.lattice, mixture.lattice, 1e-8)


def test_exchanging_the_contacts():
    # Energies shift by the bias; a step that divides it leaves the grid at the same places.
    case = replace(MIXTURE, lattice_temperature=None, energy_step=8.0)
    mirrored = replace(
        case,
        bias=-case.bias,
        scatterers=(Scatterer(200, ((-200, 0), (0.3, 0.8))),),
        probes=(Probe(80, 0.6, 0.3),),
    )
    one, other = solve(case), solve(mirrored)
    close(other.current, -one.current, 1e-8)
    close([other.heat_left, other.heat_right], [one.heat_right, one.heat_left])
    close(other.probe_mu, one.probe_mu - 200, 1e-7)


# --- closed forms of relaxation ---------------------------------------------------------------


@pytest.mark.parametrize("path", [20.0, 60.0])
def test_distribution_and_heat_behind_one_scatterer_with_kept_bath(path):
    bias, temperature, t, place, length = 60.0, 30.0, 0.3, 50.0, 200.0
    solution = solve(
        Case(
            length,
            bias,
            temperature,
            scatterers=(Scatterer(place, t),),
            mechanisms=(Bath(path),),
            refinement=2,
        )
    )
    energy = solution.energy
    left, right = fermi(energy, bias, temperature), fermi(energy, 0, temperature)
    for beyond in (0.0, 7.0, 50.0, 150.0):
        mu = t * bias
        level = fermi(energy, mu, temperature)
        expected = level + (t * left + (1 - t) * right - level) * np.exp(-beyond / path)
        if beyond:
            close(solution.at("f_plus", place + beyond), expected)
        else:
            close(solution.f_plus[solution.x == place][1], expected)
    # Excess energy t(1-t) bias^2/2 of each direction; what is not yet lost goes to the contact.
    excess = t * (1 - t) * bias**2 / 2
    close(solution.lattice_density(120.0), excess / path * np.exp(-70 / path), 1e-5)
    close(solution.lattice_density(10.0), excess / path * np.exp(-40 / path), 1e-5)
    kept = np.exp(-(length - place) / path) + np.exp(-place / path)
    close(solution.lattice, excess * (2 - kept), 1e-5)


@pytest.mark.parametrize("path", [6.0, 200.0])
def test_hot_carriers(path):
    bias, temperature = 30.0, 20.0
    solution = solve(
        Case(600, bias, temperature, backscatter_path=100, mechanisms=(Carriers(path),))
    )
    for mu, hot in ((solution.mu_plus, solution.T_plus), (solution.mu_minus, solution.T_minus)):
        p = mu / bias
        close(hot**2, temperature**2 + 3 / np.pi**2 * p * (1 - p) * (bias / BOLTZMANN) ** 2)
    close(solution.lattice_share, 0.0, 1e-7)
    # Thermalised only if the path is short.
    middle = fermi(solution.energy, solution.at("mu_plus", 300), solution.at("T_plus", 300))
    departure = integral(np.abs(solution.at("f_plus", 300) - middle), solution.energy)
    assert (departure < 0.15) == (path == 6.0)


@pytest.mark.parametrize("coupling", [0.1, 0.5, 1.0])
def test_voltage_probe_in_a_ballistic_channel(coupling):
    solution = solve(Case(100, 40, 20, probes=(Probe(30, coupling),)))
    close(solution.transmission, 1 - coupling / 2, 1e-8)
    close(solution.probe_mu, 20.0)
    if coupling == 1:
        close(solution.probe_heat[0], solution.current * 40 / 2)
    assert abs(solution.imbalance) < 1e-8


def test_weak_probe_reads_its_own_mixture_of_directions():
    solution = solve(
        Case(100, 40, 20, scatterers=(Scatterer(50, 0.4),), probes=(Probe(30, 3e-6, 1e-6),))
    )
    close(solution.probe_mu, 0.75 * 40 + 0.25 * 24, 1e-5)


def test_several_probes_divide_the_voltage():
    # Full coupling cuts the channel into pieces in series, one contact resistance each.
    solution = solve(Case(100, 40, 20, probes=(Probe(20, 1.0), Probe(40, 1.0), Probe(70, 1.0))))
    close(solution.probe_mu, [30, 20, 10])
    close(solution.transmission, 0.25, 1e-8)


def test_probes_in_a_diffusive_channel():
    # Coupling a at one point: in series 1/(1 - a/2) of a ballistic piece, that is (a/2)/(1 - a/2).
    case = Case(200, 40, 20, backscatter_path=100, probes=(Probe(50, 0.5), Probe(150, 0.8)))
    close(1 / solve(case).transmission, 1 + 2 + 0.25 / 0.75 + 0.4 / 0.6, 1e-7)


# --- optical phonons --------------------------------------------------------------------------


@pytest.mark.parametrize(
    "bias, transmission, share",
    [(100, 0.3269, 0.4206), (400, 0.2338, 0.7156), (800, 0.1632, 0.8125)],
)
def test_published_rows(bias, transmission, share):
    # physics.md, section 7: another deterministic solution, printed to four digits.
    solution = solve(replace(TUBE, bias=bias))
    assert abs(solution.transmission - transmission) < 1e-4
    assert abs(solution.lattice_share - share) < 1e-4
    assert abs(solution.imbalance) < 1e-9


def test_saturation_current():
    # I -> g M (e/h) w without elastic scattering, from above as the channel gets longer than l_op.
    case = Case(50, 400, 40, mechanisms=(Phonon(2, 160),), energy_step=4.0)
    excess = [solve(replace(case, length=length)).current / 160 - 1 for length in (25, 50, 100)]
    assert 0 < excess[2] < 1e-3
    assert excess[2] < excess[1] / 5 < excess[0] / 25
    assert solve(replace(case, backscatter_path=100)).current < 0.9 * 160


def test_cold_carriers_below_the_phonon_energy_move_elastically():
    solution = solve(replace(TUBE, temperature_left=4, bias=140))
    close(solution.transmission, 300 / 800, 1e-9)
    close(solution.lattice_share, 0.0, 1e-9)


def test_one_emission_in_a_short_cold_channel():
    # f+ = 1, f- = 0 between 0 and eV: emission at the rate 1/(2 l_op) from each of eV - w energies.
    solution = solve(Case(1, 400, 4, mechanisms=(Phonon(2000, 160),)))
    close(solution.lattice / (160 * 240 / (2 * 2000)), 1.0, 1e-3)
    # Half of those that emit turn back; their final states were half empty: right movers are full.
    close((400 - solution.current) / (240 / (2 * 2000)), 1.0, 1e-3)


def test_two_phonons_of_one_energy_add_their_rates():
    one = solve(TUBE)
    two = solve(replace(TUBE, mechanisms=(Phonon(30, 160), Phonon(30, 160))))
    close(two.current, one.current, 1e-10)
    close(two.lattice_share, one.lattice_share, 1e-8)


# --- what is refused --------------------------------------------------------------------------


@pytest.mark.parametrize(
    "change, message",
    [
        ({"length": 0.0}, "length"),
        ({"temperature_left": 0.0}, "temperatures"),
        ({"scatterers": (Scatterer(600, 0.5),)}, "outside"),
        ({"probes": (Probe(100, 1.5),)}, "couplings"),
        ({"probes": (Probe(100, 0.0),)}, "without coupling"),
        ({"mechanisms": (Bath(0.0),)}, "path"),
        ({"mechanisms": (Phonon(15, 0.0),)}, "energy"),
        ({"mechanisms": ("bath",)}, "not a Bath"),
        ({"energy_step": 7.0}, "divide"),
    ],
)
def test_refused(change, message):
    with pytest.raises(ValueError, match=message):
        solve(replace(TUBE, **change))


def test_no_convergence_is_said(monkeypatch):
    monkeypatch.setattr("tests.reference_kinetic.FIELD_ITERATIONS", 2)
    with pytest.raises(NotConverged, match="residual"):
        solve(TUBE)


# --- values for tests of the package ----------------------------------------------------------


@pytest.mark.parametrize(
    "temperature, length, bias, transmission, share",
    [
        (300, 200, 400, 0.33265, 0.61737),
        (300, 500, 800, 0.16320, 0.81245),
        (4, 200, 100, 0.60000, 0.0),
        (4, 200, 400, 0.34929, 0.57177),
    ],
)
def test_reference_values(temperature, length, bias, transmission, share):
    case = replace(TUBE, length=length, bias=bias, temperature_left=temperature)
    solution = solve(case)
    assert abs(solution.transmission - transmission) < 6e-6
    assert abs(solution.lattice_share - share) < 6e-6


@pytest.mark.parametrize(
    "mechanisms, transmission, share",
    [
        ((), 0.195556, 0.0),
        ((Bath(100),), 0.239016, 0.643001),
        ((Bath(100, randomised=True),), 0.162837, 0.726241),
        ((Carriers(100),), 0.202628, 0.0),
    ],
)
def test_reference_values_between_energy_filters(mechanisms, transmission, share):
    filters = (Scatterer(100, ((0, 30), (0.2, 0.8))), Scatterer(250, ((0, 30), (0.9, 0.3))))
    case = Case(400, 30, 20, backscatter_path=200, scatterers=filters, mechanisms=mechanisms)
    solution = solve(replace(case, energy_step=0.5))
    assert abs(solution.transmission - transmission) < 1e-5
    assert abs(solution.lattice_share - share) < 1e-5
