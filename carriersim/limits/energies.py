"""Integrals over energy: Gauss-Legendre points, refined by halving where T(E) is steep.

The simulation has its own integrals (engine/energies.py); the comparison must not share them.
"""

from dataclasses import dataclass

import numpy as np

from carriersim import fermi

# Points for each piece of the energy axis. The nearest pole of a Fermi function is pi kT away, so
# that 6 points on a piece of kT/2 leave about 1e-16.
_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(6)
_TOLERANCE = 1e-13  # relative, for halving a piece of the axis where T(E) varies
_MOST_HALVINGS = 50


@dataclass(frozen=True)
class Drive:
    """Energies with quadrature weights: the integral of w(E) y(E) dE is weight @ y(energy_meV).

    w is F_L - F_R or -dF/dE, times M; `transmitted` is weight * T.
    """

    energy_meV: np.ndarray
    weight: np.ndarray
    transmitted: np.ndarray


def main_drive(conductor):
    """What drives the run: F_L - F_R, or its limit for a vanishing bias."""
    if conductor.bias_mV == 0.0:
        return slope_drive(conductor, 0.0, conductor.left_K)
    return bias_drive(conductor, conductor.bias_mV)


def bias_drive(conductor, bias_mV):
    """The drive F_L - F_R at a bias, in meV after integration."""
    key = ("F_L - F_R", bias_mV)
    if key not in conductor.drives:
        left, right = conductor.left_K, conductor.right_K
        breaks = np.union1d(fermi.thermal_breaks(bias_mV, left), fermi.thermal_breaks(0.0, right))
        energy, weight = quadrature(conductor.transmission, breaks, conductor.entries_meV)
        weight *= fermi.difference(energy, bias_mV, left, 0.0, right)
        conductor.drives[key] = _drive(conductor, energy, weight)
    return conductor.drives[key]


def slope_drive(conductor, mu_meV, temperature_K):
    """The drive -dF/dE; at 0 K a Dirac delta."""
    key = ("-dF/dE", mu_meV, temperature_K)
    if key not in conductor.drives:
        if temperature_K == 0.0:
            energy, weight = np.array([mu_meV]), np.ones(1)
        else:
            breaks = fermi.thermal_breaks(mu_meV, temperature_K)
            energy, weight = quadrature(conductor.transmission, breaks, conductor.entries_meV)
            weight *= fermi.minus_slope(energy, mu_meV, temperature_K)
        conductor.drives[key] = _drive(conductor, energy, weight)
    return conductor.drives[key]


def _drive(conductor, energy_meV, weight):
    weight = weight * conductor.modes(energy_meV)
    return Drive(energy_meV, weight, weight * conductor.transmission(energy_meV))


def quadrature(function, breaks_meV, entries_meV):
    """Energies and weights that integrate function(E) times a smooth weight over the breaks.

    The axis from the first to the last of the increasing breaks is cut at the breaks and at the
    entries of tables; a piece is halved until the integral of the function (which is not negative)
    stands still, since T may be steep next to an entry.
    """
    edges = np.union1d(breaks_meV, entries_meV)
    edges = edges[(edges >= breaks_meV[0]) & (edges <= breaks_meV[-1])]
    low, high = edges[:-1], edges[1:]
    whole, _ = _integral(function, low, high)
    done = []
    for _ in range(_MOST_HALVINGS):
        middle = 0.5 * (low + high)
        left, left_range = _integral(function, low, middle)
        right, right_range = _integral(function, middle, high)
        # Energies are rounded, so a steep function has steps that no halving removes.
        rounding = 2.0 * np.spacing(np.abs(middle)) * (left_range + right_range)
        bad = np.abs(left + right - whole) > _TOLERANCE * whole + rounding
        done.append(_points(low[~bad], high[~bad]))
        low, high = np.append(low[bad], middle[bad]), np.append(middle[bad], high[bad])
        whole = np.append(left[bad], right[bad])
        if low.size == 0:
            break
    done.append(_points(low, high))
    energy, weight = (np.concatenate(parts).ravel() for parts in zip(*done, strict=True))
    return energy, weight


def _points(low, high):
    """Energies and weights, shape (pieces, 6)."""
    half = 0.5 * (high - low)[:, None]
    return 0.5 * (high + low)[:, None] + half * _NODES, half * _WEIGHTS


def _integral(function, low, high):
    """Integral over each piece, and the range of values that it met there."""
    energy, weight = _points(low, high)
    value = function(energy)
    return (value * weight).sum(axis=1), np.ptp(value, axis=1)
