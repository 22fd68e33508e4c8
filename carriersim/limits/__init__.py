"""Closed forms: what theory says a run must give, each with its source and where it holds.

Units: nm, meV, K, A, ohm, W, V/K. Energies are total energies, counted from mu_R = 0; mu_L = eV is
the bias in meV. g is the degeneracy, M(E) the number of modes, T(E) the transmission of the whole
channel, F_L and F_R the Fermi functions of the contacts.

Functions of a scenario hold for elastic scattering in one dimension, at any bias and any
temperatures, with the random scatterers drawn. They also take the Conductor that `read` makes of a
scenario, which keeps the integrals done so far. Nothing here shares integration with the engine.

Sources
-------
Landauer, IBM J. Res. Dev. 1 (1957) 223 and Phil. Mag. 21 (1970) 863; Imry, in Directions in
Condensed Matter Physics (1986); Datta, Electronic Transport in Mesoscopic Systems (1995), ch. 2;
Sivan & Imry, Phys. Rev. B 33 (1986) 551; Buttiker, Phys. Rev. Lett. 57 (1986) 1761; Engquist &
Anderson, Phys. Rev. B 24 (1981) 1151; Nagaev, Phys. Lett. A 169 (1992) 103 and Phys. Rev. B 52
(1995) 4740; Pothier et al., Phys. Rev. Lett. 79 (1997) 3490; Wiedemann & Franz, Ann. Phys. 165
(1853) 497, with Sommerfeld's factor, Z. Phys. 47 (1928) 1.
"""

from carriersim.limits.conductor import Conductor, read, transmission
from carriersim.limits.formulas import (
    LORENZ_NUMBER,
    ballistic_conductance_S,
    ballistic_resistance_ohm,
    four_point_resistance_ohm,
    point_resistance,
    probe_reading,
    series_transmission,
    stretch_resistance,
    two_step_distribution,
    two_step_temperature_K,
    wiedemann_franz_ratio,
)
from carriersim.limits.landauer import (
    conductance_S,
    contact_heat_W,
    current_A,
    mean_modes,
    mean_transmission,
    resistance_ohm,
)
from carriersim.limits.listing import Limit, compare, limits_for
from carriersim.limits.potentials import profile, response
from carriersim.limits.thermal import (
    nearly_equal_temperatures,
    seebeck_V_per_K,
    thermal_conductance_W_per_K,
    thermoelectric_integrals,
)

__all__ = [
    "LORENZ_NUMBER",
    "Conductor",
    "Limit",
    "ballistic_conductance_S",
    "ballistic_resistance_ohm",
    "compare",
    "conductance_S",
    "contact_heat_W",
    "current_A",
    "four_point_resistance_ohm",
    "limits_for",
    "mean_modes",
    "mean_transmission",
    "nearly_equal_temperatures",
    "point_resistance",
    "probe_reading",
    "profile",
    "read",
    "resistance_ohm",
    "response",
    "seebeck_V_per_K",
    "series_transmission",
    "stretch_resistance",
    "thermal_conductance_W_per_K",
    "thermoelectric_integrals",
    "transmission",
    "two_step_distribution",
    "two_step_temperature_K",
    "wiedemann_franz_ratio",
]
