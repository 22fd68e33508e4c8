"""Where the potential falls: the response at one energy, the profile, the fall across each part."""

from dataclasses import dataclass

import numpy as np

from carriersim.limits.conductor import read, read_line
from carriersim.limits.energies import main_drive
from carriersim.limits.landauer import mean_modes


def response(scenario, x_nm, energy_meV):
    """g+ and g-, both of shape (energies, places): f± = F_R + (F_L - F_R) g±.

    g± is the mean potential of each direction per unit of the drive: g+ - g- = T(E), and the mean
    falls by T/2 at each contact, by T (1 - T_i)/T_i at a scatterer and by T dx/lam in between
    (Landauer 1970; Datta 1995). x_nm in [0, L], just inside the interfaces; exactly at a scatterer
    the mean of both sides.
    """
    conductor = read_line(scenario)
    energy_meV = np.atleast_1d(np.asarray(energy_meV, float))
    by_law = np.array([law(energy_meV) for law in conductor.laws])
    resistance = by_law.T @ conductor.amounts_up_to(np.atleast_1d(x_nm))
    total = conductor.transmission(energy_meV)[:, None]
    mean = 1.0 - total * (0.5 + resistance)
    return mean + 0.5 * total, mean - 0.5 * total


@dataclass(frozen=True)
class Levels:
    """The main drive split into potentials: meV, or per unit of the bias when the bias is 0.

    top: level of the left contact. by_law: the fall across the amount 1 of each law of the
    conductor; that of the constant is mu+ - mu-, the same at all places.
    """

    top: float
    by_law: np.ndarray

    @property
    def between(self):
        """mu+ - mu-."""
        return self.by_law[0]


def levels(scenario):
    """The Levels of a scenario; nan where there are no modes."""
    conductor = read(scenario)
    drive = main_drive(conductor)
    modes = mean_modes(conductor)
    if modes == 0.0:
        return Levels(np.nan, np.full(len(conductor.laws), np.nan))
    top = conductor.bias_mV or 1.0
    if not conductor.same_temperature and not conductor.modes_are_constant:
        top = float(drive.weight.sum()) / modes
    shares = drive.transmitted / modes
    return Levels(top, np.array([law(drive.energy_meV) @ shares for law in conductor.laws]))


def profile(scenario, x_nm):
    """(mu_plus, mu_minus) at the places x_nm: meV, or per unit of the bias when the bias is 0.

    mu± = integral of (M/mean M)(F_L - F_R) g± dE, see `response` (Datta 1995). Each has the shape
    of x_nm, 0 <= x <= L just inside the interfaces; at a scatterer the mean of both sides. Time is
    proportional to scatterers + places, with one integral for each different table.
    """
    conductor = read_line(scenario)
    return profile_of(levels(conductor), conductor, x_nm)


def profile_of(found, conductor, x_nm):
    """The same from Levels found before."""
    resisted = np.tensordot(found.by_law, conductor.amounts_up_to(x_nm), axes=1)
    mean = found.top - 0.5 * found.between - resisted
    return mean + 0.5 * found.between, mean - 0.5 * found.between
