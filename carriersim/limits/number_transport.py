"""The number of carriers under relaxation: again a row of resistances in series.

Where nothing depends on energy, the number moving each way obeys linear equations of its own:
mechanisms that keep the direction drop out, those that make it random scatter back, and a floating
voltage probe is a point scatterer.
"""

from dataclasses import replace
from itertools import pairwise

import numpy as np

from carriersim.limits.conductor import Stretch, read, read_line
from carriersim.limits.formulas import point_resistance, probe_reading, stretch_resistance
from carriersim.limits.potentials import profile_of
from carriersim.limits.relaxation import (
    probe_couplings,
    probe_transmission,
    randomised_backscatter_path_nm,
)

ELASTIC = "elastic"  # the mechanism of an unnamed path, beside those of relaxation


def energy_matters(scenario):
    """Whether the number of carriers depends on where their energies are.

    So it does with tables of energy and with optical phonons.
    """
    conductor = read(scenario)
    mechanisms = conductor.scenario.relaxation.mechanisms
    return conductor.depends_on_energy or any(m.kind == "optical_phonon" for m in mechanisms)


def number_transport(scenario):
    """The Conductor whose series law gives the number transport of a scenario with relaxation.

    Randomised mechanisms are stretches named after their kind with 1/(2 path) each, coupled probes
    are points with (1 - T)/T of `probe_transmission` (Datta 1995; Buttiker 1986, 1988). Current,
    resistance, conductance and `profile` of it are exact, at any bias and temperatures; `response`
    and `contact_heat_W` are not, since relaxation changes energies. Raises ValueError where
    energies matter: tables, optical phonons.
    """
    conductor = read_line(scenario)
    if conductor.with_relaxation:
        return conductor
    if energy_matters(conductor):
        message = "the number of carriers is linear only without tables of energy and phonons"
        raise ValueError(message)
    probes = conductor.scenario.probes
    added = [i for i, probe in enumerate(probes) if probe.coupling > 0.0]
    place_nm = np.append(conductor.place_nm, [probes[i].position_nm for i in added])
    amount = np.append(conductor.point_amount, [probe_resistance(probes[i]) for i in added])
    order = np.argsort(place_nm, kind="stable")
    index = np.argsort(order)[conductor.place_nm.size :].tolist()
    return replace(
        conductor,
        place_nm=place_nm[order],
        point_law=np.zeros(order.size, int),
        point_amount=amount[order],
        stretches=_with_randomised(conductor),
        with_relaxation=True,
        coupled=dict(zip(index, added, strict=True)),
        drives={},
    )


def has_coupled_probe(scenario):
    """Whether any probe of the scenario takes carriers."""
    return any(probe.coupling > 0.0 for probe in scenario.probes)


def probe_resistance(probe):
    """(1 - T)/T of a probe of the scenario; 0 without coupling."""
    return float(point_resistance(probe_transmission(probe.coupling, probe.weight_right)))


def readings(conductor, found):
    """What each probe of the scenario reads, (probes,), from number_transport and its levels.

    A coupled probe reads what arrives at it: mu+ just left of it and mu- just right of it.
    """
    probes = conductor.scenario.probes
    plus, minus = profile_of(found, conductor, np.array([p.position_nm for p in probes]))
    half_jump = 0.5 * found.between * np.array([probe_resistance(p) for p in probes])
    weights = np.array([p.weight_right for p in probes])
    for i, probe in enumerate(probes):
        if probe.coupling > 0.0:
            right, left = probe_couplings(probe.coupling, probe.weight_right)
            weights[i] = right / (right + left)
    return probe_reading(plus + half_jump, minus - half_jump, weights)


def randomised_rates(scenario):
    """{kind: sum of 1/path in 1/nm} of the mechanisms that make the direction random."""
    rates = {}
    for mechanism in scenario.relaxation.mechanisms:
        if mechanism.direction == "randomised":
            rates[mechanism.kind] = rates.get(mechanism.kind, 0.0) + 1.0 / mechanism.path_nm
    return rates


def _with_randomised(conductor):
    """The stretches of elastic scattering and, between the section edges, of randomised events."""
    rates = randomised_rates(conductor.scenario)
    if not rates:
        return conductor.stretches
    elastic = [replace(s, mechanism=s.mechanism or ELASTIC) for s in conductor.stretches]
    sections = conductor.scenario.scattering.sections
    edges = {0.0, conductor.length_nm, *(x for s in sections for x in (s.from_nm, s.to_nm))}
    randomised = [
        Stretch(low, high, kind, 0, float(stretch_resistance(1.0, lam)))
        for kind, rate in rates.items()
        for lam in [randomised_backscatter_path_nm(1.0 / rate)]
        for low, high in pairwise(sorted(edges))
    ]
    return (*elastic, *randomised)
