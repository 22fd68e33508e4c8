"""Planes across the channel that reflect like mirrors (grain boundaries), d = 2 and 3.

A plane of transmission T adds (1 - T)/T for each |mu| by itself, since neither its passage nor its
reflection changes |mu|, the cosine to the axis: the series law holds direction by direction. A thin
tunnel plane has T(mu) = mu^2/(mu^2 + gamma), so that (1 - T)/T = gamma/mu^2, gamma = (1 - T0)/T0
with T0 at normal incidence.
"""

import numpy as np

from carriersim.limits.averages import angle_mean, flux_mean
from carriersim.limits.formulas import point_resistance

# --- many planes among bulk scattering


def grain_alpha(mean_free_path_nm, spacing_nm, gamma):
    """alpha = 2 (l/D) gamma of tunnel planes at the mean spacing D; gamma their mean.

    Planes in series turn carriers of one |mu| round at the rate (1 - T)/(T D) = gamma/(D mu^2) per
    length along the axis (series law), which is gamma/(D |mu|) per length of their way. A turn
    changes f(mu) - f(-mu) by twice its value, so the Boltzmann equation has 1/l_eff = 1/l +
    2 gamma/(D |mu|) = (1/l)(1 + alpha/|mu|). Mayadas & Shatzkes, Phys. Rev. B 1 (1970) 1382, whose
    text has alpha = (l/D) R/(1-R), without the 2.
    """
    return 2.0 * gamma * mean_free_path_nm / spacing_nm


def mayadas_shatzkes_ratio(alpha, dimension=3, constant=0.0):
    """sigma/sigma0 = rho0/rho of a bulk with planes, <mu^2/(1 + alpha/mu)>/<mu^2>; broadcasts.

    alpha: see grain_alpha. d = 3: 1 - 3a/2 + 3a^2 - 3a^3 ln(1 + 1/a) (Mayadas & Shatzkes 1970);
    1/1.70062 at a = 0.5, 1/3.71972 at a = 2. d = 2, the same on a circle: 1 - 4a/pi + 2a^2 -
    (4/pi) a^3 I, I = ln((1 + s)/a)/s with s = sqrt(1 - a^2) for a < 1, arccos(1/a)/sqrt(a^2 - 1)
    for a > 1; 1/1.60939 at a = 0.5. By quadrature, since these cancel for large a.
    constant: 2 (l/D) times the mean (1 - T)/T of planes that pass all angles alike and so turn
    carriers round at a rate per length along the axis: 1 + alpha/mu + constant * mu. For D << l;
    rho of evenly spaced planes is lower than this by up to 1 % at D = l and 3 % at D = 5 l.
    """
    alpha, constant = (np.asarray(number, float)[..., None] for number in (alpha, constant))
    return dimension * angle_mean(lambda mu: mu**3 / (mu + alpha + constant * mu**2), dimension)


# --- planes alone


def planes_transmission(transmissions, tunnel, dimension):
    """T of planes without any other scattering: mean of 1/(1 + sum of (1 - T_i)/T_i) over the flux.

    transmissions (P,), at normal incidence for those that are a thin tunnel barrier; tunnel (P,):
    which are, else T_i is the same for all angles. Landauer 1957, 1970, direction by direction.
    Without tunnel barriers: the series law. One barrier: 1 - g ln(1 + 1/g) in d = 3, 0.306853 for
    T0 = 0.5; 1 - g arctanh(1/h)/h with h = sqrt(1 + g) in d = 2, 0.376775.
    """
    _, passing = _together(transmissions, tunnel)
    return float(flux_mean(passing, dimension))


def planes_parts(transmissions, tunnel, dimension):
    """(each contact, each plane (P,)): the parts of 1/T of planes alone, see planes_transmission.

    2 * the first and all planes make 1/T. A part is a step of mu, the mean of f+ and f- over the
    solid angle; the angles share the flux as they pass.
    """
    resistance, passing = _together(transmissions, tunnel)
    flux = flux_mean(passing, dimension)
    flat = angle_mean(passing, dimension) / flux
    steep = angle_mean(lambda mu: passing(mu) / mu**2, dimension) / flux
    return 0.5 * float(flat), resistance * np.where(tunnel, steep, flat)


def _together(transmissions, tunnel):
    """((1 - T_i)/T_i at normal incidence, T(mu) of all planes)."""
    resistance = point_resistance(transmissions)
    gamma = np.sum(resistance, where=np.asarray(tunnel, bool))
    flat = 1.0 + np.sum(resistance) - gamma
    return resistance, lambda mu: mu**2 / (flat * mu**2 + gamma)
