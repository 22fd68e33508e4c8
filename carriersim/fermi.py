"""Fermi functions and the integrals over them that carry number and energy.

Energies and electrochemical potentials in meV, temperatures in K. T = 0 gives step functions, with
the value 1/2 at the step.
"""

import numpy as np

from carriersim.constants import BOLTZMANN_MEV_PER_K


def occupation(energy_meV, mu_meV, temperature_K):
    """F(E; mu, T) = 1/(1 + exp((E - mu)/kT)); shapes broadcast. Fermi-Dirac statistics."""
    energy_meV, mu_meV, kT = np.broadcast_arrays(
        np.asarray(energy_meV, float), mu_meV, BOLTZMANN_MEV_PER_K * np.asarray(temperature_K)
    )
    cold = kT <= 0.0
    x = (energy_meV - mu_meV) / np.where(cold, 1.0, kT)
    warm_value = 0.5 * (1.0 - np.tanh(0.5 * x))
    # tanh keeps an absolute accuracy only; in the upper tail exp keeps the relative one.
    warm_value = np.where(x > 15.0, np.exp(-np.clip(x, 0.0, 745.0)), warm_value)
    step = np.where(x < 0.0, 1.0, np.where(x > 0.0, 0.0, 0.5))
    return np.where(cold, step, warm_value)


def mean_occupation(edges_meV, mu_meV, temperature_K):
    """Means of F(E; mu, T) over bins, (B, ...), from edges (B+1,), mu and T of shape (...).

    F is the slope of -kT ln(1 + exp((mu - E)/kT)), so bins may be wider than kT, also at 0 K. nan
    where T is nan.
    """
    mu, kT = np.broadcast_arrays(
        np.asarray(mu_meV, float), BOLTZMANN_MEV_PER_K * np.asarray(temperature_K, float)
    )
    edges = np.asarray(edges_meV, float).reshape(-1, *[1] * mu.ndim)
    cold = ~(kT > 0.0)
    warm = np.where(cold, 1.0, kT)
    filled = np.where(
        cold, np.maximum(mu - edges, 0.0), warm * np.logaddexp(0.0, (mu - edges) / warm)
    )
    return np.where(np.isnan(kT), np.nan, -np.diff(filled, axis=0) / np.diff(edges, axis=0))


def minus_slope(energy_meV, mu_meV, temperature_K):
    """-dF/dE in 1/meV for T > 0; shapes broadcast. At 0 K it is a Dirac delta at mu: ValueError."""
    kT = BOLTZMANN_MEV_PER_K * np.asarray(temperature_K, float)
    if np.any(kT <= 0.0):
        raise ValueError("-dF/dE is a Dirac delta at 0 K: integrate it, don't evaluate it")
    half = 0.5 * np.abs((np.asarray(energy_meV, float) - mu_meV) / kT)
    decay = np.exp(-2.0 * np.minimum(half, 350.0))
    return decay / (1.0 + decay) ** 2 / kT


def difference(energy_meV, mu_left_meV, temperature_left_K, mu_right_meV, temperature_right_K):
    """F_L - F_R without cancellation when the temperatures are equal; shape of energy_meV.

    For equal T: F_L - F_R = F_L (1 - F_R) (1 - exp(-(mu_L - mu_R)/kT)).
    """
    left = occupation(energy_meV, mu_left_meV, temperature_left_K)
    if temperature_left_K == temperature_right_K > 0.0:
        bias = (mu_left_meV - mu_right_meV) / (BOLTZMANN_MEV_PER_K * temperature_left_K)
        if bias < 0.0:
            right = occupation(energy_meV, mu_right_meV, temperature_right_K)
            empty_left = occupation(-np.asarray(energy_meV), -mu_left_meV, temperature_left_K)
            return right * empty_left * np.expm1(bias)
        empty_right = occupation(-np.asarray(energy_meV), -mu_right_meV, temperature_right_K)
        return -left * empty_right * np.expm1(-bias)
    return left - occupation(energy_meV, mu_right_meV, temperature_right_K)


def thermal_breaks(mu_meV, temperature_K):
    """Places that cut the energy axis finely enough to integrate over a contact's Fermi function.

    Steps of kT/2 out to 40 kT (exp(-40) = 4e-18); at 0 K the step alone.
    """
    kT = BOLTZMANN_MEV_PER_K * temperature_K
    if kT == 0.0:
        return np.array([mu_meV])
    return mu_meV + kT * np.linspace(-40.0, 40.0, 161)


def carrier_temperature(number_meV, energy_meV2):
    """T_e in K from n = int (f - theta(-E)) dE and u = int E (f - theta(-E)) dE.

    (pi k T_e)^2 / 6 = u - n^2/2 (Sommerfeld: exact for a Fermi function). Where noise makes the
    right side negative the result is 0.
    """
    squared = 6.0 / np.pi**2 * (np.asarray(energy_meV2) - 0.5 * np.asarray(number_meV) ** 2)
    return np.sqrt(np.maximum(squared, 0.0)) / BOLTZMANN_MEV_PER_K
