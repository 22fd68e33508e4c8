"""Closed forms: what theory says a run must give, each with its source and where it holds.

Units: nm, meV, K, A, ohm, W, V/K. Energies are total energies, counted from mu_R = 0; mu_L = eV is
the bias in meV. g is the degeneracy, M(E) the number of modes, T(E) the transmission of the whole
channel, F_L and F_R the Fermi functions of the contacts.

Functions of a scenario hold for elastic scattering in one dimension, at any bias and any
temperatures, with the random scatterers drawn. They also take the Conductor that `read` makes of a
scenario, which keeps the integrals done so far. For relaxation `number_transport` makes the
Conductor, and carrier_temperatures_K, lattice_power_W_per_nm and heat_W take the scenario. In two
and three dimensions only limits_for takes one. Nothing here shares integration with the engine.

Sources
-------
Landauer, IBM J. Res. Dev. 1 (1957) 223 and Phil. Mag. 21 (1970) 863; Imry, in Directions in
Condensed Matter Physics (1986); Datta, Electronic Transport in Mesoscopic Systems (1995), ch. 2;
Sivan & Imry, Phys. Rev. B 33 (1986) 551; Buttiker, Phys. Rev. Lett. 57 (1986) 1761; Engquist &
Anderson, Phys. Rev. B 24 (1981) 1151; Nagaev, Phys. Lett. A 169 (1992) 103 and Phys. Rev. B 52
(1995) 4740; Pothier et al., Phys. Rev. Lett. 79 (1997) 3490; Wiedemann & Franz, Ann. Phys. 165
(1853) 497, with Sommerfeld's factor, Z. Phys. 47 (1928) 1. Relaxation: Kozub & Rudin, Phys. Rev. B
52 (1995) 7853; Buttiker, Phys. Rev. B 33 (1986) 3020 and IBM J. Res. Dev. 32 (1988) 63 (probes);
Yao, Kane & Dekker, Phys. Rev. Lett. 84 (2000) 2941. Two and three dimensions: Heaslet & Warming,
Int. J. Heat Mass Transfer 8 (1965) 979; Hopf, Mathematical Problems of Radiative Equilibrium
(1934); Fuchs, Proc. Cambridge Phil. Soc. 34 (1938) 100; Sondheimer, Adv. Phys. 1 (1952) 1;
MacDonald & Sarginson, Proc. R. Soc. A 203 (1950) 223; Mayadas & Shatzkes, Phys. Rev. B 1 (1970)
1382.
"""

from carriersim.limits.conductor import Conductor, read, transmission
from carriersim.limits.dispatch import limits_for
from carriersim.limits.energy_transport import (
    HeatBalance,
    carrier_temperatures_K,
    heat_W,
    lattice_power_W_per_nm,
)
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
from carriersim.limits.grains import (
    grain_alpha,
    mayadas_shatzkes_ratio,
    planes_parts,
    planes_transmission,
)
from carriersim.limits.landauer import (
    conductance_S,
    contact_heat_W,
    current_A,
    mean_modes,
    mean_transmission,
    resistance_ohm,
)
from carriersim.limits.listing_space import space_profile
from carriersim.limits.number_transport import number_transport
from carriersim.limits.potentials import profile, response
from carriersim.limits.relaxation import (
    coupled_probe_reading,
    heat_of_one_scatterer_W,
    hot_carrier_temperature_K,
    lattice_power_beside_scatterer_W_per_nm,
    occupation_beside_scatterer,
    probe_couplings,
    probe_heat_W,
    probe_transmission,
    randomised_backscatter_path_nm,
    saturation_current_A,
)
from carriersim.limits.rows import Limit, compare
from carriersim.limits.slab import (
    interface_part,
    simple_error,
    simple_transmission,
    slab_profile,
    slab_transmission,
    thick_slab_transmission,
)
from carriersim.limits.thermal import (
    nearly_equal_temperatures,
    seebeck_V_per_K,
    thermal_conductance_W_per_K,
    thermoelectric_integrals,
)
from carriersim.limits.walls import (
    film_conductivity_ratio,
    ribbon_conductivity_ratio,
    wire_conductivity_ratio,
)

__all__ = [
    "LORENZ_NUMBER",
    "Conductor",
    "HeatBalance",
    "Limit",
    "ballistic_conductance_S",
    "ballistic_resistance_ohm",
    "carrier_temperatures_K",
    "compare",
    "conductance_S",
    "contact_heat_W",
    "coupled_probe_reading",
    "current_A",
    "film_conductivity_ratio",
    "four_point_resistance_ohm",
    "grain_alpha",
    "heat_W",
    "heat_of_one_scatterer_W",
    "hot_carrier_temperature_K",
    "interface_part",
    "lattice_power_W_per_nm",
    "lattice_power_beside_scatterer_W_per_nm",
    "limits_for",
    "mayadas_shatzkes_ratio",
    "mean_modes",
    "mean_transmission",
    "nearly_equal_temperatures",
    "number_transport",
    "occupation_beside_scatterer",
    "planes_parts",
    "planes_transmission",
    "point_resistance",
    "probe_couplings",
    "probe_heat_W",
    "probe_reading",
    "probe_transmission",
    "profile",
    "randomised_backscatter_path_nm",
    "read",
    "resistance_ohm",
    "response",
    "ribbon_conductivity_ratio",
    "saturation_current_A",
    "seebeck_V_per_K",
    "series_transmission",
    "simple_error",
    "simple_transmission",
    "slab_profile",
    "slab_transmission",
    "space_profile",
    "stretch_resistance",
    "thermal_conductance_W_per_K",
    "thermoelectric_integrals",
    "thick_slab_transmission",
    "transmission",
    "two_step_distribution",
    "two_step_temperature_K",
    "wiedemann_franz_ratio",
    "wire_conductivity_ratio",
]
