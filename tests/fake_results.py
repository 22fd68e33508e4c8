"""Results made from the closed series law plus noise, to try tables and figures without a run."""

from itertools import pairwise

import numpy as np

from carriersim import scenario as scenarios
from carriersim.constants import AMPERE_PER_MEV, CONDUCTANCE_QUANTUM_S, WATT_PER_MEV2
from carriersim.fermi import difference, minus_slope, occupation
from carriersim.result import (
    Estimate,
    FourPoint,
    Heat,
    LimitRow,
    Part,
    ProbeReading,
    Result,
    Thermal,
)

MIXED = """
name: one defect
channel: {length_nm: 100}
contacts: {bias_mV: 20, temperature_K: 300}
scattering:
  backscatter_path_nm: 400
  points: [{position_nm: 40, transmission: 0.4}, {position_nm: 70, transmission: 0.7}]
"""


def fake_result(text=MIXED, changes=None, *, seed=0, noise=0.003, energies=240, **overrides):
    """A Result of a scenario (YAML text), d = 1, whose paths and modes are plain numbers.

    noise: relative standard error of everything; overrides: fields of Result.
    """
    scenario = scenarios.read_text(text, changes=changes)
    rng = np.random.default_rng(seed)
    length = scenario.channel.length_nm
    bias = scenario.contacts.bias_mV
    hot, cold = scenario.left_temperature_K, scenario.right_temperature_K
    cells = scenario.simulation.cells
    points = [(point.position_nm, point.transmission) for point in scenario.scattering.points]
    points += [(0.0, scenario.contacts.left.transmission)]
    points += [(length, scenario.contacts.right.transmission)]
    edges = np.unique(
        np.concatenate(
            [
                np.linspace(0.0, length, cells + 1),
                [place for place, _ in points],
                [probe.position_nm for probe in scenario.probes],
                [s.from_nm for s in scenario.scattering.sections],
                [s.to_nm for s in scenario.scattering.sections],
            ]
        )
    )
    centres = 0.5 * (edges[1:] + edges[:-1])
    span = 0.0862 * max(hot, cold) * 12.0 + 0.1 * abs(bias) + 0.05
    energy = np.linspace(min(bias, 0.0) - span, max(bias, 0.0) + span, energies)

    rate = np.full(centres.size, 1.0 / (_path(scenario.scattering) or np.inf))
    for section in scenario.scattering.sections:
        inside = (centres > section.from_nm) & (centres < section.to_nm)
        rate[inside] = 1.0 / _path(section)
    pieces = rate * np.diff(edges)
    jumps = np.zeros((energy.size, edges.size))
    for place, value in points:
        transmission = _at(value, energy)
        jumps[:, np.argmin(abs(edges - place))] += (1.0 - transmission) / transmission
    total = 1.0 / (1.0 + pieces.sum() + jumps.sum(axis=1))
    before = np.cumsum(jumps[:, :-1], axis=1) + np.concatenate([[0.0], np.cumsum(pieces)])[:-1]
    mean = 1.0 - total[:, None] * (0.5 + before + 0.5 * pieces)
    g_plus, g_minus = mean + 0.5 * total[:, None], mean - 0.5 * total[:, None]

    if bias:
        window = difference(energy, bias, hot, 0.0, cold)
        base = occupation(energy, 0.0, cold)[:, None]
    else:
        window = minus_slope(energy, 0.0, hot)
        base = 0.0
    step = energy[1] - energy[0]
    f_noise = noise * np.abs(window[:, None]) * np.ones_like(mean) * 3.0
    f_plus = base + window[:, None] * g_plus + f_noise * rng.standard_normal(mean.shape)
    f_minus = base + window[:, None] * g_minus + f_noise * rng.standard_normal(mean.shape)
    number = abs(window.sum() * step) or 1.0
    mu_noise = np.full(centres.size, noise * number)

    def potential(g):
        return window @ g * step + mu_noise * rng.standard_normal(centres.size)

    def estimate(value):
        return Estimate(float(value * (1 + noise * rng.standard_normal())), abs(value) * noise)

    weights = window / window.sum()
    transmission = float(weights @ total)
    quantum = scenario.channel.degeneracy * CONDUCTANCE_QUANTUM_S
    modes = scenario.channel.modes if isinstance(scenario.channel.modes, float | int) else 1.0
    ballistic = 1.0 / (quantum * modes)
    resistance = ballistic / transmission
    equal = hot == cold
    current = quantum * modes / CONDUCTANCE_QUANTUM_S * AMPERE_PER_MEV * (window @ total) * step
    breakdown = _breakdown(scenario, points, ballistic, estimate) if equal else None
    mu_plus, mu_minus, mu = potential(g_plus), potential(g_minus), potential(mean)
    readings = tuple(
        ProbeReading(
            probe.position_nm,
            Estimate(float(np.interp(probe.position_nm, centres, mu)), noise * number),
        )
        for probe in scenario.probes
    )
    four_point = tuple(
        FourPoint(
            a.position_nm,
            b.position_nm,
            Estimate(
                (a.potential.value - b.potential.value) / number * resistance, noise * resistance
            ),
        )
        for i, a in enumerate(readings)
        for b in readings[i + 1 :]
    )
    power = quantum * modes / CONDUCTANCE_QUANTUM_S * WATT_PER_MEV2
    flow = window * total
    heat = Heat(
        estimate(power * ((bias - energy) * flow).sum() * step),
        estimate(power * (energy * flow).sum() * step),
        Estimate(0.0, 0.0),
    )
    reasons = {"noise": "not asked for (noise: false)"}
    if not bias:
        reasons["current_A"] = reasons["heat_W"] = "linear response (bias 0)"
    if not equal:
        reason = "the contacts have different temperatures"
        reasons["resistance_ohm"] = reasons["breakdown"] = reason
        reasons["transmission"] = reason
    temperature = np.full(centres.size, float(max(hot, cold)))
    values = {
        "scenario": scenario,
        "version": "0.1.0",
        "histories": 1_280_000,
        "events": 5_000_000,
        "seconds": 0.42,
        "iterations": 1,
        "converged": True,
        "residual": None,
        "stopped_by": "relative_error",
        "linear_response": not bias,
        "transmission": estimate(transmission) if equal else None,
        "current_A": estimate(current) if bias else None,
        "conductance_S": estimate(1.0 / resistance),
        "resistance_ohm": estimate(resistance) if equal else None,
        "differential_resistance_ohm": estimate(resistance),
        "ballistic_resistance_ohm": ballistic,
        "breakdown": breakdown,
        "four_point": four_point if equal else None,
        "probes": readings,
        "heat_W": heat if bias else None,
        "thermal": Thermal(
            estimate(2.1e-10), estimate(-1.3e-5), estimate(-heat.left_contact.value), None
        ),
        "noise": None,
        "limits": (
            limit_row("series law", "resistance_ohm", resistance, noise, rng),
            limit_row("ballistic channel", "transmission", transmission, noise, rng),
            limit_row("hot carriers", "current_A", current * 1.02, noise, rng, "approximate"),
        ),
        "why": reasons,
        "x_nm": centres,
        "cell_edges_nm": edges,
        "energy_meV": energy,
        "energy_edges_meV": np.linspace(energy[0] - step / 2, energy[-1] + step / 2, energies + 1),
        "f_plus": f_plus,
        "f_minus": f_minus,
        "mu_plus_meV": mu_plus,
        "mu_minus_meV": mu_minus,
        "mu_meV": mu,
        "carrier_temperature_plus_K": temperature,
        "carrier_temperature_minus_K": temperature,
        "carrier_temperature_K": temperature,
        "departure": np.zeros(centres.size),
        "lattice_power_W_per_nm": np.zeros(centres.size),
        "errors": {
            "f_plus": f_noise,
            "f_minus": f_noise,
            "mu_plus_meV": mu_noise,
            "mu_minus_meV": mu_noise,
            "mu_meV": mu_noise,
        },
    }
    return Result(**{**values, **overrides})


def limit_row(name, quantity, expected, noise, rng, holds="exact"):
    """A row of the table of limits; the source has a sign outside ASCII."""
    z = float(rng.standard_normal())
    error = abs(expected) * noise
    source = "Datta, Electronic Transport in Mesoscopic Systems, 1995; Büttiker 1986"
    return LimitRow(name, quantity, expected, expected + z * error, error, z, source, holds)


def _path(scattering):
    if scattering.backscatter_path_nm is not None:
        return scattering.backscatter_path_nm
    return 2.0 * scattering.mean_free_path_nm if scattering.mean_free_path_nm else None


def _at(value, energy):
    if hasattr(value, "energy_meV"):
        return np.interp(energy, value.energy_meV, value.value)
    return np.full(energy.size, float(value))


def _breakdown(scenario, points, ballistic, estimate):
    length = scenario.channel.length_nm
    parts = [
        Part("left interface", "interface", estimate(0.5 * ballistic), position_nm=0.0),
        Part("right interface", "interface", estimate(0.5 * ballistic), position_nm=length),
    ]
    for place, value in points:
        if not hasattr(value, "energy_meV") and value < 1.0:
            resistance = estimate(ballistic * (1.0 - value) / value)
            name = f"scatterer {len(parts) - 1}"
            parts.append(Part(name, "point", resistance, position_nm=place))
    sections = scenario.scattering.sections
    cuts = {place for place, _ in points} | {0.0, length}
    cuts |= {place for s in sections for place in (s.from_nm, s.to_nm)}
    cuts = sorted(cuts)
    for start, end in pairwise(cuts):
        path = _path(scenario.scattering)
        for section in sections:
            if section.from_nm <= start and end <= section.to_nm:
                path = _path(section)
        value = estimate(ballistic * (end - start) / path) if path else Estimate(0.0, 0.0)
        mechanism = "backscattering" if path else "ballistic"
        name = f"{mechanism} {start:g} to {end:g} nm"
        parts.append(Part(name, "piece", value, None, start, end, mechanism))
    return tuple(parts)
