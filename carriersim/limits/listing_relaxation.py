"""The closed forms that apply to a scenario with relaxation or coupled probes."""

from functools import partial
from itertools import pairwise
from math import copysign

import numpy as np

from carriersim.constants import BOLTZMANN_MEV_PER_K
from carriersim.limits import listing, selecting
from carriersim.limits.conductor import read
from carriersim.limits.energy_transport import carrier_temperatures_K, heat_W
from carriersim.limits.number_transport import (
    energy_matters,
    has_coupled_probe,
    number_transport,
    randomised_rates,
    readings,
)
from carriersim.limits.potentials import levels, profile_of
from carriersim.limits.relaxation import saturation_current_A
from carriersim.limits.rows import Limit, of_result

MOMENTS = "number and energy balance of the kinetic equation; Nagaev, PRB 52 (1995) 4740"
HOT_CARRIERS = "Nagaev, PRB 52 (1995) 4740; Kozub & Rudin, PRB 52 (1995) 7853"
SATURATION = "Yao, Kane & Dekker, Phys. Rev. Lett. 84 (2000) 2941"

# Where the saturation current holds to some 2 %. The excess above it falls with the number of
# events that each step down in energy has room for, and thermal carriers blur the onset.
COLD = 1.0 / 25.0  # kT/w at most
BEYOND_ONSET_KT = 4.0  # |eV| - w at least
PATHS_PER_STEP = 10.0  # L/l_op at least, for each w in eV
FEWEST_PATHS = 25.0  # L/l_op at least


def relaxation_limits(scenario):
    """The closed forms of a scenario in d = 1 that relaxes."""
    elastic = read(scenario)
    yield listing.ballistic(elastic)
    if energy_matters(elastic):
        yield from _saturation(elastic)
        return
    conductor = number_transport(elastic)
    found = levels(conductor)
    yield from listing.conduction(conductor, _law(conductor))
    yield from listing.approximate(conductor)
    yield from listing.breakdown(conductor, found)
    source = listing.COUPLED_PROBES if conductor.coupled else listing.PROBES
    yield from listing.probes(conductor, readings(conductor, found), source)
    place_nm = middle_cell_nm(conductor.scenario)
    yield from _potentials(conductor, found, place_nm)
    if conductor.bias_mV != 0.0:
        yield from _temperatures(conductor, place_nm)
    yield from _heat(conductor)


def middle_cell_nm(scenario):
    """Centre in nm of the cell nearest to the middle of the channel.

    Profiles are cut at scatterers, probes and section edges; each part has whole cells, in
    proportion to its length.
    """
    length_nm = scenario.channel.length_nm
    sections = scenario.scattering.sections
    inner = [p.position_nm for p in (*scenario.scattering.points, *scenario.probes)]
    inner += [x for s in sections for x in (s.from_nm, s.to_nm)]
    centres = []
    for low, high in pairwise(sorted({0.0, length_nm, *inner})):
        cells = max(1, round((high - low) / length_nm * scenario.simulation.cells))
        edges = np.linspace(low, high, cells + 1)
        centres.append(0.5 * (edges[1:] + edges[:-1]))
    centres = np.concatenate(centres)
    return float(centres[np.argmin(np.abs(centres - 0.5 * length_nm))])


def _law(conductor):
    parts = []
    if randomised_rates(conductor.scenario):
        parts.append("randomising relaxation")
    if conductor.coupled:
        parts.append("coupled probes")
    return " with ".join(["series law", " and ".join(parts)]) if parts else "series law"


def _potentials(conductor, found, place_nm):
    plus, minus = profile_of(found, conductor, np.array([place_nm]))
    bias = abs(conductor.bias_mV) or 1.0
    for name, key, (value,) in (
        ("right movers", "mu_plus_meV", plus),
        ("left movers", "mu_minus_meV", minus),
    ):
        yield Limit(
            f"potential of {name} at {place_nm:g} nm",
            key if conductor.bias_mV != 0.0 else f"{key}, per unit of the bias",
            float(value),
            listing.SERIES,
            "exact",
            partial(selecting.in_cell, key, place_nm),
            scale=bias,
        )


def _temperatures(conductor, place_nm):
    alone = all(m.kind == "carriers" for m in conductor.scenario.relaxation.mechanisms)
    source = HOT_CARRIERS if alone and not conductor.coupled else MOMENTS
    kelvin = carrier_temperatures_K(conductor, place_nm)
    keys = "carrier_temperature_plus_K", "carrier_temperature_minus_K"
    for name, key, expected in zip(("right movers", "left movers"), keys, kelvin, strict=True):
        yield Limit(
            f"temperature of {name} at {place_nm:g} nm",
            key,
            float(expected),
            source,
            "exact",
            partial(selecting.in_cell, key, place_nm),
        )


def _heat(conductor):
    balance = heat_W(conductor)
    total = sum(abs(heat) for heat in (*balance[:3], *balance.probes))
    contacts = balance.left_contact, balance.right_contact
    yield from listing.heat(conductor, *contacts, MOMENTS, total)
    if conductor.bias_mV == 0.0:
        return
    name, quantity = "heat in the lattice", "heat_W.lattice"
    yield of_result(name, quantity, balance.lattice, MOMENTS, scale=total)
    for index in conductor.coupled.values():
        yield Limit(
            f"heat in the probe at {conductor.scenario.probes[index].position_nm:g} nm",
            f"heat_W.probes[{index}]",
            balance.probes[index],
            listing.COUPLED_PROBES,
            "exact",
            partial(selecting.probe_heat, index),
            scale=total,
        )


def _saturation(conductor):
    """The saturation current, where the conditions of its limit are nearly met."""
    mechanisms = conductor.scenario.relaxation.mechanisms
    undisturbed = conductor.amounts[0] == 0.0 and not conductor.depends_on_energy
    if len(mechanisms) != 1 or not undisturbed or has_coupled_probe(conductor.scenario):
        return
    phonon_meV, path_nm = mechanisms[0].energy_meV, mechanisms[0].path_nm
    bias = conductor.bias_mV
    hottest = max(conductor.left_K, conductor.right_K, conductor.scenario.bath_temperature_K)
    kT, paths = BOLTZMANN_MEV_PER_K * hottest, conductor.length_nm / path_nm
    if kT > COLD * phonon_meV or abs(bias) < phonon_meV + BEYOND_ONSET_KT * kT:
        return
    if paths < max(FEWEST_PATHS, PATHS_PER_STEP * abs(bias) / phonon_meV):
        return
    channel = conductor.scenario.channel
    size = saturation_current_A(phonon_meV, float(channel.resolved_modes), channel.degeneracy)
    name, quantity = "saturation current at the phonon energy", "current_A"
    yield of_result(name, quantity, copysign(float(size), bias), SATURATION, "approximate")
