"""The energy of carriers under relaxation: where the heat goes, exactly.

Where nothing depends on energy, n± and u± of each direction obey closed equations (the first two
moments of the kinetic equation). With v± = u± - mu±^2/2 - (pi k T_b)^2/6 = (pi k)^2 (T_e±^2 -
T_b^2)/6, the energy beyond that of a Fermi function of the same number at the lattice's
temperature, and j = mu+ - mu-, the same at all places:

    +- dv±/dx = c (v∓ - v±) - k v± + q,      q = (c/2 + k_r/8) j^2

c: backscattering per nm of elastic scattering and randomised carriers, k: the bath's 1/path, k_r
its randomised part. A point of resistance r adds r j^2/2 to each direction: heat arises where the
potential falls. Contacts and probes emit v = (pi k)^2 (T^2 - T_b^2)/6. The lattice takes
k (v+ + v-) + k_r j^2/4 per nm. Nagaev 1995 has the same for long wires; the probes are Buttiker's
(1986, 1988).

Energies here are in meV^2 (energy x energy range), for one mode.
"""

from typing import NamedTuple

import numpy as np

from carriersim.constants import BOLTZMANN_MEV_PER_K, WATT_PER_MEV2
from carriersim.limits import two_flux
from carriersim.limits.conductor import Conductor
from carriersim.limits.number_transport import number_transport, randomised_rates
from carriersim.limits.relaxation import probe_couplings


class HeatBalance(NamedTuple):
    """Power in W that lands in each place, adding up to I V; probes: all of the scenario's."""

    left_contact: float
    right_contact: float
    lattice: float
    probes: tuple[float, ...]


def carrier_temperatures_K(scenario, x_nm):
    """(T_e+, T_e-) in K, each of the shape of x_nm, from the number and energy of one direction.

    Exact without tables of energy and optical phonons (ValueError), for any paths and temperatures,
    bath and carriers in both forms and coupled probes. 0 <= x <= L (ValueError); at a scatterer or
    coupled probe from the mean energy of both sides. With carriers alone it is
    two_step_temperature_K.
    """
    chain = _chain(scenario, x_nm)
    energy = _at(chain, x_nm) * 6.0 / (np.pi * BOLTZMANN_MEV_PER_K) ** 2
    kelvin = np.sqrt(np.maximum(chain.bath_K**2 + energy, 0.0))
    return kelvin[..., 0], kelvin[..., 1]


def lattice_power_W_per_nm(scenario, x_nm):
    """Power that the lattice takes per nm in W/nm, shape of x_nm; see carrier_temperatures_K."""
    chain = _chain(scenario, x_nm)
    both = _at(chain, x_nm).sum(axis=-1)
    return chain.watts * (chain.loss * both + chain.random_loss * chain.current**2 / 4.0)


def heat_W(scenario):
    """The HeatBalance of a scenario at its bias; see carrier_temperatures_K.

    Negative where carriers cool a place.
    """
    chain = _chain(scenario, [])
    before, after, j = chain.before, chain.after, chain.current
    # A contact's own v in, the channel's v out, and half of the ballistic resistance's heat.
    left = 0.5 * j**2 + before[0, 1] - _emitted(chain.conductor.left_K, chain.bath_K)
    right = 0.5 * j**2 + after[-1, 0] - _emitted(chain.conductor.right_K, chain.bath_K)
    lattice = 0.0
    if chain.loss > 0.0:
        made_per_nm = 2.0 * chain.made_per_nm + chain.random_loss * j**2 / 4.0
        gained = before[1:] - after[:-1]
        lattice = np.diff(chain.place_nm) @ made_per_nm - (gained[:, 0] - gained[:, 1]).sum()
    probes = [0.0] * len(chain.conductor.scenario.probes)
    for point, index in chain.conductor.coupled.items():
        probes[index] = _probe_heat(chain, point)
    left, right, lattice, *rest = (float(chain.watts * h) for h in (left, right, lattice, *probes))
    return HeatBalance(left, right, lattice, tuple(rest))


class _Chain(NamedTuple):
    """Points (some without effect) at P places with stretches between them; v± on both sides."""

    conductor: Conductor
    place_nm: np.ndarray  # (P,)
    before: np.ndarray  # (P, 2) v+ and v- just left of each place
    after: np.ndarray  # (P, 2) just right of it
    made_per_nm: np.ndarray  # (P - 1,) q
    current: float  # j in meV
    loss: float  # k per nm
    random_loss: float  # its randomised part
    bath_K: float
    watts: float  # W per meV^2


def _chain(scenario, x_nm):
    conductor = number_transport(scenario)
    scenario = conductor.scenario
    baths = [m for m in scenario.relaxation.mechanisms if m.kind == "bath"]
    loss = sum(1.0 / m.path_nm for m in baths)
    random_loss = randomised_rates(scenario).get("bath", 0.0)
    j = conductor.bias_mV * float(conductor.transmission(0.0))
    ends = [x for s in conductor.stretches for x in (s.from_nm, s.to_nm)]
    place_nm = np.unique(np.concatenate([conductor.place_nm, ends, np.ravel(x_nm)]))
    if place_nm[0] < 0.0 or place_nm[-1] > conductor.length_nm:
        raise ValueError(f"places outside the channel, 0 to {conductor.length_nm:g} nm")
    backscattering = _backscattering(conductor, place_nm) - 0.5 * random_loss
    made_per_nm = (0.5 * backscattering + 0.125 * random_loss) * j**2
    bath_K = scenario.bath_temperature_K
    before, after = two_flux.eliminate(
        _points(conductor, place_nm, j),
        two_flux.stretches(np.diff(place_nm), backscattering, loss, made_per_nm),
        _emitted(conductor.left_K, bath_K),
        _emitted(conductor.right_K, bath_K),
    )
    watts = conductor.degeneracy * float(conductor.modes(0.0)) * WATT_PER_MEV2
    return _Chain(
        conductor, place_nm, before, after, made_per_nm, j, loss, random_loss, bath_K, watts
    )


def _emitted(kelvin, bath_K):
    """v of a reservoir."""
    return (np.pi * BOLTZMANN_MEV_PER_K) ** 2 / 6.0 * (kelvin**2 - bath_K**2)


def _backscattering(conductor, place_nm):
    """1/lam between the places, all mechanisms together."""
    middle = 0.5 * (place_nm[1:] + place_nm[:-1])
    per_nm = np.zeros(middle.size)
    for stretch in conductor.stretches:
        per_nm[(middle > stretch.from_nm) & (middle < stretch.to_nm)] += stretch.amount
    return per_nm


def _points(conductor, place_nm, j):
    """Point scatterers and probes; places without either let everything pass."""
    r = np.zeros(place_nm.size)
    index = np.searchsorted(place_nm, conductor.place_nm)
    r[index] = conductor.point_amount
    through, back, source = 1.0 / (1.0 + r), r / (1.0 + r), 0.5 * r * j**2
    points = two_flux.Response(through, through.copy(), back, source, source.copy())
    for i in conductor.coupled:
        at = index[i]
        a, b, emitted, away_right, away_left = _probe(conductor, i, j)
        points.through_right[at], points.through_left[at], points.back[at] = 1.0 - a, 1.0 - b, 0.0
        points.source_right[at] = a * emitted + 0.5 * a * (1.0 - a) * away_right**2
        points.source_left[at] = b * emitted + 0.5 * b * (1.0 - b) * away_left**2
    return points


def _probe(conductor, i, j):
    """(a, b, v that it emits, mu+ - mu_p, mu- - mu_p of what arrives) of the probe at point i."""
    probe = conductor.scenario.probes[conductor.coupled[i]]
    a, b = (float(part) for part in probe_couplings(probe.coupling, probe.weight_right))
    bath_K = conductor.scenario.bath_temperature_K
    kelvin = bath_K if probe.temperature_K is None else probe.temperature_K
    between = j * (1.0 + conductor.point_amount[i])  # j = T (mu+ - mu-)
    return a, b, _emitted(kelvin, bath_K), b / (a + b) * between, -a / (a + b) * between


def _probe_heat(chain, i):
    """What the probe at point i absorbs less what it emits."""
    at = np.searchsorted(chain.place_nm, chain.conductor.place_nm[i])
    a, b, emitted, away_right, away_left = _probe(chain.conductor, i, chain.current)
    taken = a * (chain.before[at, 0] - emitted + 0.5 * away_right**2)
    return taken + b * (chain.after[at, 1] - emitted + 0.5 * away_left**2)


def _at(chain, x_nm):
    """v± at places, shape (*x_nm.shape, 2), the mean of both sides."""
    index = np.searchsorted(chain.place_nm, x_nm)
    return 0.5 * (chain.before[index] + chain.after[index])
