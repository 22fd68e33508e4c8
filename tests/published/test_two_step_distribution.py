"""The distribution of electrons in a diffusive wire without relaxation: two steps.

Sources: K. E. Nagaev, Phys. Lett. A 169 (1992) 103; H. Pothier, S. Gueron, N. O. Birge, D. Esteve
and M. H. Devoret, Phys. Rev. Lett. 79 (1997) 3490, who saw it: f(x, E) = (1 - x/L) F_L + (x/L) F_R.
A wire of finite length, L/lam, has it with the filling g(x) worked out here by hand from the two
equations +- df+-/dx = (f-+ - f+-)/lam.
"""

from math import pi, sqrt

import numpy as np
import pytest
from scipy import integrate

from carriersim.result import Estimate
from tests.checks_of_numbers import (
    BOLTZMANN_MEV_PER_K,
    agree,
    agree_each,
    centre,
    fermi,
    integral,
    profile,
    simulate,
)

LENGTH, LAM = 1000.0, 80.0
PLACES = [250.0, 500.0, 750.0]


def wire(bias, left_K, right_K):
    return simulate(
        f"""
channel: {{length_nm: {LENGTH}}}
contacts:
  bias_mV: {bias}
  left: {{temperature_K: {left_K}}}
  right: {{temperature_K: {right_K}}}
scattering: {{backscatter_path_nm: {LAM}}}
simulation: {{histories: 6e+6, cells: 40}}
"""
    )


def fillings(place, length=LENGTH, lam=LAM):
    """g+ and g- of an occupied left and an empty right contact.

    The net flux g+ - g- is the same everywhere, so g+ falls linearly from 1, g- to 0 at the end.
    """
    flux = 1 / (1 + length / lam)
    return 1 - flux * place / lam, 1 - flux * (place / lam + 1)


@pytest.fixture(scope="module")
def cold():
    """Contacts at 0 K, as the steps are sharpest."""
    return wire(25.0, 0.0, 0.0)


@pytest.fixture(scope="module")
def warm():
    return wire(-30.0, 40.0, 90.0)


def occupation(result, name, place, energies):
    """Values and errors of f at the bins that hold the energies, and the bins' centres."""
    cell = np.searchsorted(result.cell_edges_nm, place, side="right") - 1
    rows = np.searchsorted(result.energy_edges_meV, energies, side="right") - 1
    values, errors = getattr(result, name), result.errors[name]
    return values[rows, cell], errors[rows, cell], result.energy_meV[rows]


@pytest.mark.parametrize("place", PLACES)
def test_height_of_the_step_between_the_contacts_levels(cold, place):
    """Plateau of f between mu_R = 0 and mu_L; full below, empty above."""
    for name, filling in zip(("f_plus", "f_minus"), fillings(centre(cold, place)), strict=True):
        f, error, _ = occupation(cold, name, place, [4.0, 12.0, 20.0])
        agree_each(f, error, filling)
        below, above = occupation(cold, name, place, [-1.0, 26.0])[0]
        assert below == 1.0 and above == 0.0


@pytest.mark.parametrize("place", PLACES)
def test_two_steps_of_the_long_wire(cold, place):
    """f = 1 - x/L, up to what the contacts' resistance takes, half of 1/(1 + L/lam) at most."""
    fraction = 1 - centre(cold, place) / LENGTH
    plus, plus_error, _ = occupation(cold, "f_plus", place, [12.0])
    minus, minus_error, _ = occupation(cold, "f_minus", place, [12.0])
    mean = Estimate(0.5 * (plus[0] + minus[0]), 0.5 * (plus_error[0] + minus_error[0]))
    agree(mean, fraction, systematic=0.5 / (1 + LENGTH / LAM))


@pytest.mark.parametrize("place", PLACES)
def test_superposition_of_two_warm_contacts(warm, place):
    """Linear in both contacts at every energy, also where they differ in temperature."""
    energies = [-60.0, -35.0, -20.0, -10.0, -2.0, 3.0, 10.0, 20.0]
    for name, filling in zip(("f_plus", "f_minus"), fillings(centre(warm, place)), strict=True):
        f, error, at = occupation(warm, name, place, energies)
        expected = [filling * fermi(e, -30, 40) + (1 - filling) * fermi(e, 0, 90) for e in at]
        agree_each(f, error, expected)


@pytest.mark.parametrize("place", PLACES)
@pytest.mark.parametrize("setting", ["cold", "warm"])
def test_carrier_temperature_of_the_two_steps(setting, place, request):
    """The k T_e with the same energy: T_e^2 = g T_L^2 + (1-g) T_R^2 + (3/pi^2) g (1-g) (eV/k)^2."""
    result = request.getfixturevalue(setting)
    bias, left, right = (25.0, 0.0, 0.0) if setting == "cold" else (-30.0, 40.0, 90.0)
    plus, minus = fillings(centre(result, place))
    for name, g in (
        ("carrier_temperature_plus_K", plus),
        ("carrier_temperature_minus_K", minus),
        ("carrier_temperature_K", 0.5 * (plus + minus)),
    ):
        heating = 3 / pi**2 * g * (1 - g) * (bias / BOLTZMANN_MEV_PER_K) ** 2
        agree(profile(result, name, place), sqrt(g * left**2 + (1 - g) * right**2 + heating))


def test_hottest_in_the_middle(cold):
    """sqrt(3)/(2 pi) eV/k for cold contacts, half way; the cell stands a little beside it."""
    at = centre(cold, 500.0)
    hottest = sqrt(3) / (2 * pi) * 25 / BOLTZMANN_MEV_PER_K
    off = sum(fillings(at)) / 2 - 0.5
    measured = profile(cold, "carrier_temperature_K", 500.0)
    agree(measured, hottest, systematic=hottest * 2 * off**2)


@pytest.mark.parametrize("place", [250.0, 500.0, 750.0])
def test_distance_from_local_equilibrium(warm, place):
    """Root of int (f - F(mu, T_e))^2 dE/(k T_e), with F of the same number and energy."""
    g = sum(fillings(centre(warm, place))) / 2
    mu = -30 * g
    kelvin = sqrt(
        g * 40**2 + (1 - g) * 90**2 + 3 / pi**2 * g * (1 - g) * (30 / BOLTZMANN_MEV_PER_K) ** 2
    )

    def squared(e):
        f = g * fermi(e, -30, 40) + (1 - g) * fermi(e, 0, 90)
        return (f - fermi(e, mu, kelvin)) ** 2

    square = integral(squared, (-30, 40), (0, 90), (mu, kelvin)) / (BOLTZMANN_MEV_PER_K * kelvin)
    # The engine sums over bins of a sixth of kT: what that leaves out is of second order.
    agree(profile(warm, "departure", place), sqrt(square), systematic=1e-3 * sqrt(square))


TABLE = [(0.0, 100.0), (5.0, 300.0), (20.0, 60.0)]  # meV, nm


@pytest.fixture(scope="module")
def selective():
    """Wire, 200 nm, with another path at each energy; cold contacts, 25 mV."""
    energies, values = zip(*TABLE, strict=True)
    return simulate(
        f"""
channel: {{length_nm: 200}}
contacts: {{bias_mV: 25, temperature_K: 0}}
scattering:
  backscatter_path_nm: {{energy_meV: {list(energies)}, value: {list(values)}}}
simulation: {{histories: 1.2e+7, cells: 20, energy_bins: 12}}
"""
    )


@pytest.mark.parametrize("place", [45.0, 95.0])
def test_step_height_follows_a_path_that_depends_on_energy(selective, place):
    """An elastic wire is a wire of its own at each energy; bins hold the mean over themselves.

    The file lists at least 200 energies: several of them share a bin of the run, and its mean.
    """
    first = np.append(0, 1 + np.flatnonzero(np.any(np.diff(selective.f_minus, axis=0), axis=1)))
    edges = np.append(selective.energy_edges_meV[first], selective.energy_edges_meV[-1])
    bins = np.flatnonzero((edges[:-1] > 0.1) & (edges[1:] < 24.9) & (np.diff(edges) > 0.1))
    assert bins.size >= 5
    energies, values = zip(*TABLE, strict=True)
    cell = np.searchsorted(selective.cell_edges_nm, place) - 1
    at = centre(selective, place)
    for i, name in enumerate(("f_plus", "f_minus")):

        def filling(e, i=i):
            return fillings(at, 200.0, np.interp(e, energies, values))[i]

        expected = [
            integrate.quad(filling, a, b)[0] / (b - a)
            for a, b in zip(edges[bins], edges[bins + 1], strict=True)
        ]
        values_of, errors = getattr(selective, name), selective.errors[name]
        agree_each(values_of[first[bins], cell], errors[first[bins], cell], expected)
