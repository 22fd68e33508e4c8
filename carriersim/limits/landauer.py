"""Landauer's integrals: current, conductance, resistance, and the heat in the contacts."""

import numpy as np

from carriersim.constants import AMPERE_PER_MEV, CONDUCTANCE_QUANTUM_S, WATT_PER_MEV2
from carriersim.limits.conductor import read
from carriersim.limits.energies import bias_drive, main_drive, slope_drive


def mean_modes(scenario):
    """The number of modes M that stands for M(E); ballistic resistance is h/(g e^2 mean_modes).

    M(E) averaged over F_L - F_R; for bias 0 over -dF_L/dE; for unequal temperatures at a bias,
    where F_L - F_R has no fixed sign, over -dF_R/dE. A convention, except where M is constant.
    """
    conductor = read(scenario)
    if conductor.modes_are_constant:
        return float(conductor.scenario.channel.resolved_modes)
    if conductor.bias_mV == 0.0 or conductor.same_temperature:
        return float(main_drive(conductor).weight.sum()) / (conductor.bias_mV or 1.0)
    return float(slope_drive(conductor, 0.0, conductor.right_K).weight.sum())


def current_A(scenario):
    """I = (g e/h) integral of M T (F_L - F_R) dE in A, positive from left to right.

    Landauer 1957, 1970; Imry 1986. 0 for bias 0 at equal temperatures.
    """
    conductor = read(scenario)
    drive = bias_drive(conductor, conductor.bias_mV)
    return float(conductor.degeneracy * AMPERE_PER_MEV * drive.transmitted.sum())


def conductance_S(scenario):
    """dI/dV = (g e^2/h) integral of M T (-dF_L/dE) dE in S, at the bias of the scenario.

    Landauer 1957, 1970; Imry 1986. The left potential moves, the right one stays.
    """
    conductor = read(scenario)
    drive = slope_drive(conductor, conductor.bias_mV, conductor.left_K)
    return float(conductor.degeneracy * CONDUCTANCE_QUANTUM_S * drive.transmitted.sum())


def resistance_ohm(scenario):
    """V/I in ohm (bias 0: 1 over conductance_S).

    Landauer 1957, 1970. For T_L = T_R; at unequal temperatures V/I is no property of the conductor.
    """
    conductor = read(scenario)
    return ohm_per_level(conductor) * (conductor.bias_mV or 1.0)


def ohm_per_level(scenario):
    """Ohm for each meV (bias 0: each unit of the bias) that a potential falls."""
    conductor = read(scenario)
    if conductor.bias_mV == 0.0:
        return ratio(1.0, conductance_S(conductor))
    return ratio(1e-3, current_A(conductor))


def mean_transmission(scenario):
    """Integral of M T (F_L - F_R) over that of M (F_L - F_R); bias 0: with -dF_L/dE.

    Landauer 1957, 1970. Between 0 and 1 for bias 0 or T_L = T_R; else it means little.
    """
    drive = main_drive(read(scenario))
    return float(ratio(drive.transmitted.sum(), drive.weight.sum()))


def contact_heat_W(scenario, bias_mV=None):
    """(P_L, P_R) in W: heat that lands in each contact, P_L + P_R = I V; at the scenario's bias.

    P_L = (g/h) integral of M T (mu_L - E) (F_L - F_R) dE, P_R = (g/h) integral of M T E (F_L - F_R)
    dE. Sivan & Imry 1986. Negative where carriers cool a contact.
    """
    conductor = read(scenario)
    if bias_mV is None:
        bias_mV = conductor.bias_mV
    drive = bias_drive(conductor, bias_mV)
    factor = conductor.degeneracy * WATT_PER_MEV2
    left = float(factor * ((bias_mV - drive.energy_meV) @ drive.transmitted))
    right = float(factor * (drive.energy_meV @ drive.transmitted))
    return left, right


def ratio(numerator, denominator):
    """The quotient, nan where the denominator is 0."""
    return numerator / denominator if denominator != 0.0 else np.nan
