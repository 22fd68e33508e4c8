"""SI constants and unit conversion, once. All four are exact since the 2019 revision of the SI."""

ELEMENTARY_CHARGE_C = 1.602176634e-19
PLANCK_J_S = 6.62607015e-34
BOLTZMANN_J_PER_K = 1.380649e-23

CONDUCTANCE_QUANTUM_S = ELEMENTARY_CHARGE_C**2 / PLANCK_J_S  # e^2/h: one mode, one spin
BOLTZMANN_MEV_PER_K = BOLTZMANN_J_PER_K / ELEMENTARY_CHARGE_C * 1e3

# Currents: integral over meV times e^2/h gives A when the integrand is a number of carriers per
# energy (eV in meV is 1e-3 V); powers carry the energy once more, also in meV.
AMPERE_PER_MEV = CONDUCTANCE_QUANTUM_S * 1e-3
WATT_PER_MEV2 = CONDUCTANCE_QUANTUM_S * 1e-6
