"""Closed forms of numbers for inelastic relaxation in one dimension.

Stateless; arguments broadcast. Lengths in nm, energies in meV from mu_R = 0, temperatures in K. A
scenario with any mix of these is solved in number_transport.py and energy_transport.py.
Sources in full: see the package.
"""

import numpy as np

from carriersim import fermi
from carriersim.constants import AMPERE_PER_MEV, WATT_PER_MEV2
from carriersim.limits.formulas import two_step_temperature_K

# --- carriers: energy is shared


def hot_carrier_temperature_K(potential_fraction, bias_mV, temperature_K):
    """T_e in K of one direction, T_e^2 = T^2 + (3/pi^2) p (1 - p) (eV/k)^2, p = mu±/eV.

    Nagaev 1995; Kozub & Rudin 1995. Contacts at the same temperature, paths and transmissions
    independent of energy, and no mechanism but `carriers`. Then number and energy obey the same
    linear elastic equations (randomising events add their rate to both), so that T_e± defined by
    the number and energy of one direction are exact at any place and for any path and length; the
    occupation itself is a Fermi function of that temperature only where path << L.
    """
    return two_step_temperature_K(1.0 - potential_fraction, bias_mV, temperature_K, temperature_K)


# --- bath: energy goes to the lattice


def occupation_beside_scatterer(
    energy_meV, x_nm, place_nm, transmission, path_nm, bias_mV, temperature_K
):
    """(f+, f-) with one point scatterer and a bath that keeps the direction; shapes broadcast.

    Behind the scatterer f+ = F(mu+) + [T F_L + (1-T) F_R - F(mu+)] exp(-(x - x_s)/path), mu+ =
    T eV; before it f+ = F_L. f- mirrored. From the kinetic equation, whose bath term alone acts
    there; exact for contacts at the lattice's temperature and no other scattering or relaxation. At
    the scatterer itself what leaves it.
    """
    left = fermi.occupation(energy_meV, bias_mV, temperature_K)
    right = fermi.occupation(energy_meV, 0.0, temperature_K)
    from_scatterer = np.asarray(x_nm, float) - place_nm
    kept = np.exp(-np.abs(from_scatterer) / path_nm)

    def relaxed(passed, turned, potential_mV):
        local = fermi.occupation(energy_meV, potential_mV, temperature_K)
        return local + (transmission * passed + (1.0 - transmission) * turned - local) * kept

    plus = np.where(from_scatterer >= 0.0, relaxed(left, right, transmission * bias_mV), left)
    minus = np.where(
        from_scatterer <= 0.0, relaxed(right, left, (1.0 - transmission) * bias_mV), right
    )
    return plus, minus


def lattice_power_beside_scatterer_W_per_nm(
    x_nm, place_nm, transmission, path_nm, bias_mV, modes=1.0, degeneracy=2.0
):
    """Power that the lattice takes per nm at x, in W/nm; conditions of occupation_beside_scatterer.

    (g M/h) T (1-T) (eV)^2/2 exp(-|x - x_s|/path)/path: each direction leaves the scatterer with
    this much energy above a Fermi function of the same number, at any temperature.
    """
    excess_W = _excess_W(transmission, bias_mV, modes, degeneracy)
    return excess_W * np.exp(-np.abs(np.asarray(x_nm, float) - place_nm) / path_nm) / path_nm


def heat_of_one_scatterer_W(
    length_nm, place_nm, transmission, path_nm, bias_mV, modes=1.0, degeneracy=2.0
):
    """(left contact, lattice, right contact) in W, adding up to I V; same conditions.

    The lattice takes the integral of lattice_power_beside_scatterer_W_per_nm. Each contact gets
    (g M/h) T^2 (eV)^2/2, half of the ballistic resistance's heat, and what is not yet lost.
    """
    excess_W = _excess_W(transmission, bias_mV, modes, degeneracy)
    own_W = degeneracy * modes * WATT_PER_MEV2 * 0.5 * np.square(transmission * bias_mV)
    to_left = excess_W * np.exp(-np.asarray(place_nm, float) / path_nm)
    to_right = excess_W * np.exp(-(np.asarray(length_nm, float) - place_nm) / path_nm)
    return own_W + to_left, 2.0 * excess_W - to_left - to_right, own_W + to_right


def _excess_W(transmission, bias_mV, modes, degeneracy):
    """Energy of each direction beyond that of a Fermi function of its number."""
    excess_meV2 = 0.5 * transmission * (1.0 - transmission) * np.square(bias_mV)
    return degeneracy * modes * WATT_PER_MEV2 * excess_meV2


# --- randomised direction


def randomised_backscatter_path_nm(path_nm):
    """lam = 2 path in nm of bath or carriers events that make the direction random.

    Half of the events turn a carrier round. Exact for the number of carriers, and so for the
    resistance, where nothing depends on energy: the series law then holds with
    1/lam + 1/(2 path). Datta 1995; Buttiker 1986 (probes all along). Kept direction adds nothing.
    """
    return 2.0 * np.asarray(path_nm, float)


# --- coupled voltage probes


def probe_couplings(coupling, weight_right=0.5):
    """(a, b): probabilities that a probe absorbs a carrier moving right, left; each in 0..1.

    min(1, 2 w eps) and min(1, 2 (1-w) eps). It emits in the same proportion a : b, which is w : 1-w
    unless one of them is cut off at 1: else a probe in equilibrium would draw a current.
    """
    coupling, weight_right = np.asarray(coupling, float), np.asarray(weight_right, float)
    right = np.minimum(1.0, 2.0 * weight_right * coupling)
    return right, np.minimum(1.0, 2.0 * (1.0 - weight_right) * coupling)


def probe_transmission(coupling, weight_right=0.5):
    """T = 1 - ab/(a+b) of a voltage probe, (a, b) its probe_couplings; 1 - eps/2 for w = 1/2.

    Buttiker 1986, 1988: carriers that pass and those that are emitted onward. With the probe's
    potential floating it is, for the number of carriers, a point scatterer of this transmission in
    the series law, exact where nothing else depends on energy.
    """
    return 1.0 - _turned(*probe_couplings(coupling, weight_right))


def coupled_probe_reading(mu_plus, mu_minus, coupling, weight_right=0.5):
    """(a mu+ + b mu-)/(a + b) of what arrives, any unit of potential; for coupling > 0.

    Buttiker 1986, 1988: no net current. mu+ is that just left of the probe, mu- just right of it.
    """
    right, left = probe_couplings(coupling, weight_right)
    return (right * np.asarray(mu_plus) + left * np.asarray(mu_minus)) / (right + left)


def probe_heat_W(coupling, bias_mV, weight_right=0.5, modes=1.0, degeneracy=2.0):
    """Heat in W that a probe takes in a channel without scattering: (g M/h) ab/(a+b) (eV)^2/2.

    Buttiker 1986, 1988; I V/2 for full coupling. One probe, at the temperature of both contacts;
    between scatterers eV is mu+ - mu- of what arrives.
    """
    turned = _turned(*probe_couplings(coupling, weight_right))
    return degeneracy * modes * WATT_PER_MEV2 * 0.5 * turned * np.square(bias_mV)


def _turned(right, left):
    """ab/(a+b), the part of the carriers that a probe turns round; 0 without coupling."""
    both = right + left
    return right * left / np.where(both > 0.0, both, 1.0)


# --- optical phonons


def saturation_current_A(phonon_meV, modes=1.0, degeneracy=2.0):
    """I = g M (e/h) w in A, w = phonon_meV: 24.8 uA for two modes, two spins and 160 meV.

    Yao, Kane & Dekker 2000. Its limit is NO elastic scattering, eV > w, l_op -> 0 and kT -> 0 of
    contacts and lattice; elastic scattering keeps the current below. At finite L/l_op it is
    approached from above (eV/w = 2.5: 1.2 % at L/l_op = 25, 0.015 % at 50; eV/w = 5: 13 and 1.8 %).
    """
    return degeneracy * modes * AMPERE_PER_MEV * np.asarray(phonon_meV, float)
