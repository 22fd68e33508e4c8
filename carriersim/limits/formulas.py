"""Closed forms of numbers: resistances, probes, the two-step distribution, Wiedemann-Franz.

Stateless; arguments broadcast. Sources in full: see the package.
"""

import numpy as np

from carriersim import fermi
from carriersim.constants import (
    BOLTZMANN_J_PER_K,
    BOLTZMANN_MEV_PER_K,
    CONDUCTANCE_QUANTUM_S,
    ELEMENTARY_CHARGE_C,
)

LORENZ_NUMBER = np.pi**2 / 3.0 * (BOLTZMANN_J_PER_K / ELEMENTARY_CHARGE_C) ** 2  # W ohm/K^2


def ballistic_conductance_S(modes=1.0, degeneracy=2.0):
    """G_B = g M e^2/h in S; 2e^2/h = 7.748091730e-5 S for the defaults.

    Landauer 1957; Imry 1986. Exact for a channel without scattering between black-body contacts.
    """
    return degeneracy * modes * CONDUCTANCE_QUANTUM_S


def ballistic_resistance_ohm(modes=1.0, degeneracy=2.0):
    """R_B = h/(g M e^2) in ohm; 12906.40372 ohm for the defaults. See ballistic_conductance_S."""
    return 1.0 / ballistic_conductance_S(modes, degeneracy)


def point_resistance(transmission):
    """(1 - T)/T, the resistance of a point scatterer in units of R_B; 4 for T = 0.2.

    Landauer 1957, 1970: the four-point resistance of the scatterer itself, contacts excluded. Holds
    for any T in (0, 1], also among other scatterers as long as they add incoherently.
    """
    transmission = np.asarray(transmission, float)
    return (1.0 - transmission) / transmission


def stretch_resistance(length_nm, backscatter_path_nm):
    """L/lam, the resistance of distributed scattering in units of R_B.

    Datta 1995. lam is the backscattering path: twice the mean free path in one dimension.
    """
    return np.asarray(length_nm, float) / backscatter_path_nm


def series_transmission(resistances):
    """T = 1/(1 + sum of resistances), resistances in units of R_B, summed over the last axis.

    Datta 1995. Exact for incoherent scatterers in one dimension.
    """
    return 1.0 / (1.0 + np.sum(resistances, axis=-1))


def probe_reading(mu_plus, mu_minus, weight_right=0.5):
    """a mu+ + (1 - a) mu-, a = weight_right: what a weakly coupled voltage probe reads.

    Any unit of potential. Buttiker 1986; Engquist & Anderson 1981. Holds for coupling -> 0.
    """
    return weight_right * np.asarray(mu_plus) + (1.0 - weight_right) * np.asarray(mu_minus)


def four_point_resistance_ohm(potential_from_mV, potential_to_mV, current_A):
    """(V_from - V_to)/I in ohm from two probe readings in mV and the current in A.

    Buttiker 1986. Negative values are possible where the probes weigh the directions differently.
    """
    return 1e-3 * (potential_from_mV - potential_to_mV) / current_A


def two_step_distribution(energy_meV, fraction, bias_mV, temperature_left_K, temperature_right_K):
    """(1 - p) F_L + p F_R, p = x/L (fraction): occupation along a long diffusive wire.

    Nagaev 1992; Pothier et al. 1997. No energy relaxation, L >> lam; shapes broadcast. At finite
    length it holds for each direction with 1 - p = g of that direction (see `response`).
    """
    left = fermi.occupation(energy_meV, bias_mV, temperature_left_K)
    right = fermi.occupation(energy_meV, 0.0, temperature_right_K)
    return (1.0 - fraction) * left + fraction * right


def two_step_temperature_K(fraction, bias_mV, temperature_left_K, temperature_right_K):
    """Carrier temperature in K of the two-step distribution.

    T_e^2 = (1 - p) T_L^2 + p T_R^2 + (3/pi^2) p (1 - p) (eV/k)^2: from the number and the energy
    that the distribution holds, so it equals that of hot carriers (Nagaev 1995).
    """
    bias_K = np.asarray(bias_mV, float) / BOLTZMANN_MEV_PER_K
    squared = (
        (1.0 - fraction) * np.square(temperature_left_K)
        + fraction * np.square(temperature_right_K)
        + 3.0 / np.pi**2 * fraction * (1.0 - fraction) * bias_K**2
    )
    return np.sqrt(squared)


def wiedemann_franz_ratio(thermal_conductance_W_per_K, conductance_S, temperature_K):
    """K/(G T) in W ohm/K^2, to compare with LORENZ_NUMBER = (pi^2/3)(k/e)^2 = 2.443e-8.

    Wiedemann & Franz 1853; Sommerfeld 1928. Equality is exact where neither modes nor transmission
    depend on energy, and approximate where they vary little over a few kT.
    """
    return thermal_conductance_W_per_K / (conductance_S * temperature_K)
