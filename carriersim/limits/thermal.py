"""Thermoelectric coefficients without current: Seebeck coefficient and thermal conductance."""

import numpy as np

from carriersim.constants import BOLTZMANN_MEV_PER_K, WATT_PER_MEV2
from carriersim.limits.conductor import read
from carriersim.limits.energies import bias_drive, slope_drive
from carriersim.limits.landauer import contact_heat_W

SMALL_DIFFERENCE = 0.01  # (T_L - T_R)/T up to which the linear coefficients stand for the finite


def nearly_equal_temperatures(scenario):
    """Whether |T_L - T_R| <= 1 % of their mean, so that the linear coefficients are used."""
    conductor = read(scenario)
    return abs(conductor.left_K - conductor.right_K) <= SMALL_DIFFERENCE * conductor.mean_K


def thermoelectric_integrals(scenario):
    """(L0, L1, L2), L_n = integral of M T E^n (-dF/dE) dE in meV^n, at mu = 0.

    Sivan & Imry 1986. The temperature is the mean of the two contacts.
    """
    conductor = read(scenario)
    drive = slope_drive(conductor, 0.0, conductor.mean_K)
    return tuple(float(drive.energy_meV**n @ drive.transmitted) for n in range(3))


def seebeck_V_per_K(scenario):
    """S = ((mu_L - mu_R)/e)/(T_L - T_R) in V/K at I = 0, whatever the scenario's bias.

    Sivan & Imry 1986: S = -L1/(e T L0), negative when carriers above mu dominate. Where the
    temperatures differ by more than 1 % the bias that stops the current is found instead. nan at
    0 K and where there is no such bias.
    """
    return without_current(scenario)[0]


def thermal_conductance_W_per_K(scenario):
    """Heat current over T_L - T_R in W/K at I = 0, whatever the scenario's bias.

    Sivan & Imry 1986: (g/h)(L2 - L1^2/L0)/T. Where the temperatures differ by more than 1 % it is
    the heat current at the bias that stops the current. nan where seebeck_V_per_K is.
    """
    return without_current(scenario)[1]


def without_current(scenario):
    """(Seebeck coefficient, thermal conductance), see the functions of these names."""
    conductor = read(scenario)
    kelvin = conductor.mean_K
    if kelvin == 0.0:
        return np.nan, np.nan
    factor = conductor.degeneracy * WATT_PER_MEV2
    if not conductor.depends_on_energy:
        # Exact and without rounding: L1 = 0 and L2 = (pi^2/3)(kT)^2 L0, and for a finite
        # difference T_L^2 - T_R^2 = 2 T (T_L - T_R).
        second = np.pi**2 / 3.0 * (BOLTZMANN_MEV_PER_K * kelvin) ** 2
        zeroth = float(conductor.modes(0.0) * conductor.transmission(0.0))
        return 0.0, factor * zeroth * second / kelvin
    if nearly_equal_temperatures(conductor):
        zeroth, first, second = thermoelectric_integrals(conductor)
        if zeroth == 0.0:
            return np.nan, np.nan
        seebeck = -1e-3 * first / (kelvin * zeroth)
        return seebeck, factor * (second - first**2 / zeroth) / kelvin
    bias_mV = _stopping_bias_mV(conductor)
    if bias_mV is None:
        return np.nan, np.nan
    difference_K = conductor.left_K - conductor.right_K
    heat_right_W = contact_heat_W(conductor, bias_mV)[1]
    return 1e-3 * bias_mV / difference_K, heat_right_W / difference_K


def _stopping_bias_mV(conductor):
    """The bias in mV at which I = 0, None without one; I grows with the bias, so one at most.

    Newton's steps, with halving where they leave the bracket. (scipy.optimize takes longer to
    import than a quick run takes.)
    """
    kT = BOLTZMANN_MEV_PER_K * max(conductor.left_K, conductor.right_K)
    bias, low, high = 0.0, -np.inf, np.inf
    for _ in range(200):
        current = bias_drive(conductor, bias).transmitted.sum()
        slope = slope_drive(conductor, bias, conductor.left_K).transmitted.sum()
        if current == 0.0:
            return bias if slope > 0.0 else None  # no states at all: nothing stops there
        low, high = (bias, high) if current < 0.0 else (low, bias)
        step = 4.0 * kT
        if abs(current) < step * slope:
            step = abs(current) / slope
        following = bias - np.copysign(step, current)
        close = 1e-13 * max(kT, abs(bias))
        if step > close and not low < following < high:
            following = 0.5 * (low + high)
        if abs(following - bias) <= close:
            return following
        bias = following
    return None
