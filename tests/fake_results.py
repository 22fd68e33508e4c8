"""Results made from closed forms plus noise, to try tables and figures without a run.

`fake_result`: elastic channels, from the series law. `relaxing_result`: one scatterer, relaxation
that keeps the direction, and probes that take every carrier. `space_result`: the series law in two
and three dimensions, with currents by the cosine law and carriers that were really followed.
"""

from dataclasses import dataclass, replace
from itertools import pairwise

import numpy as np

from carriersim import scenario as scenarios
from carriersim.constants import (
    AMPERE_PER_MEV,
    BOLTZMANN_MEV_PER_K,
    CONDUCTANCE_QUANTUM_S,
    WATT_PER_MEV2,
)
from carriersim.fermi import carrier_temperature, difference, minus_slope, occupation
from carriersim.result import (
    Estimate,
    FourPoint,
    Heat,
    LimitRow,
    LongChannel,
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

RELAXING = """
name: relaxing behind one defect
channel: {length_nm: 100}
contacts: {bias_mV: 100, temperature_K: 77}
scattering: {points: [{position_nm: 40, transmission: 0.4}]}
relaxation: {mechanisms: [{kind: bath, path_nm: 20, direction: kept}]}
"""

RIBBON = """
name: rough ribbon
channel: {length_nm: 300, dimension: 2, width_nm: 30, modes: 5, specularity: 0}
contacts: {bias_mV: 10, temperature_K: 300}
scattering:
  mean_free_path_nm: 100
  points: [{position_nm: 120, transmission: 0.4, angular: tunnel, reflection: diffuse}]
"""

WIRE = """
name: wire
channel:
  {length_nm: 500, dimension: 3, width_nm: 30, height_nm: 20, modes: 8, specularity: 0.2}
contacts: {bias_mV: 10, temperature_K: 300}
scattering: {mean_free_path_nm: 39}
"""


def fake_result(
    text=MIXED, changes=None, *, seed=0, noise=0.003, energies=240, hot_meV=0.0, **overrides
):
    """A Result of a scenario (YAML text), d = 1, whose paths and modes are plain numbers.

    noise: relative standard error of everything; hot_meV: additional energies on both sides;
    overrides: fields of Result.
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
    span = 0.0862 * max(hot, cold) * 12.0 + 0.1 * abs(bias) + 0.05 + hot_meV
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
    cuts |= {probe.position_nm for probe in scenario.probes if probe.coupling > 0.0}
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


def relaxing_result(changes=None, text=RELAXING, *, seed=0, noise=0.003, energies=400, **overrides):
    """A Result of a channel with relaxation: exact fields plus noise.

    One kept mechanism, bath or carriers (a phonon is taken for a bath), point scatterers no more
    than one between two stations; stations are contacts and coupled probes, which take all that
    arrives (coupling 1). For bias 0 the fields are those of the elastic channel.
    """
    scenario = scenarios.read_text(text, changes=changes)
    kinds = {mechanism.kind for mechanism in scenario.relaxation.mechanisms}
    # Carriers get as hot as k T_e = 0.28 eV.
    hot = 2.2 * abs(scenario.contacts.bias_mV) if "carriers" in kinds else 0.0
    result = fake_result(text, changes, seed=seed, noise=noise, hot_meV=hot, energies=energies)
    if not result.linear_response:
        rng = np.random.default_rng(seed + 1)
        result = replace(result, **_relaxed_quantities(result, noise, rng))
    return replace(result, **overrides)


def space_result(text=RIBBON, changes=None, *, noise=0.003, **overrides):
    """A Result of an elastic channel in two or three dimensions.

    Profiles and resistances are those of the series law in one dimension; where walls scatter, they
    take two fifths of each piece. Each place sends as much of the ballistic current right and left
    as its occupations say, by the cosine law.
    """
    from carriersim.engine.problem import build
    from carriersim.engine.trajectories import sample_trajectories

    result = fake_result(text, changes, noise=noise)
    scenario, channel = result.scenario, result.scenario.channel
    problem = build(scenario)
    full = scenario.contacts.bias_mV or 1.0
    unequal = scenario.left_temperature_K != scenario.right_temperature_K
    view = problem.nodes_nm[problem.space.view_nodes]
    edges = np.radians(np.linspace(0.0, 90.0, 19))
    # Carriers between two angles: int cos, and int 2 sin cos, over the angle.
    law = np.diff(np.sin(edges) ** (channel.dimension - 1)) / 5.0
    filled = [
        np.interp(view, result.x_nm, mu) / full for mu in (result.mu_plus_meV, result.mu_minus_meV)
    ]
    unit = (
        1.0 if result.linear_response or unequal else 1e-3 * full
    ) / result.ballistic_resistance_ohm
    current = unit * np.maximum(filled, 0.0).T[:, :, None] * law
    error = noise * np.abs(current)
    rng = np.random.default_rng(7)
    parts, walls = result.breakdown, problem.space.walls[0]
    if parts is not None and walls is not None:
        parts = tuple(part for old in parts for part in _with_walls(old))
    width, resistance = channel.width_nm, result.resistance_ohm
    has_area, plane = channel.area_nm2 is not None, channel.dimension == 2 and width is not None

    def times(estimate, factor):
        return Estimate(estimate.value * factor, estimate.error * factor)

    ratio = Estimate(1.5, 0.004, 0.001)
    endless = LongChannel(
        resistivity_ratio=ratio,
        resistivity_uohm_cm=times(ratio, 2.0) if has_area else None,
        sheet_ohm=times(ratio, 40.0) if width is not None else None,
        backscatter_path_nm=Estimate(80.0, 0.2),
        method="spread of 12800 carriers' walks of 900 nm",
    )
    values = {
        "breakdown": parts,
        "view_nm": view,
        "direction_deg": np.degrees(0.5 * (edges[1:] + edges[:-1])),
        "current_by_direction": current + error * rng.standard_normal(current.shape),
        "errors": result.errors | {"current_by_direction": error},
        "resistance_width_ohm_um": times(resistance, 1e-3 * width)
        if plane and resistance
        else None,
        "long_channel": endless,
        "trajectories": sample_trajectories(problem, scenario.simulation.trajectories),
    }
    return replace(result, **{**values, **overrides})


def _with_walls(part):
    if part.kind != "piece":
        return [part]
    size = part.resistance_ohm
    shares = {"elastic": 0.6, "walls": 0.4}
    return [
        replace(
            part, name=part.name.replace(part.mechanism, name), mechanism=name,
            resistance_ohm=Estimate(share * size.value, share * size.error),
        )
        for name, share in shares.items()
    ]  # fmt: skip


@dataclass(frozen=True)
class _Relaxing:
    """Fields of a relaxing channel: f, and the equilibria that f tends to, each (2, E, cells)."""

    f: np.ndarray
    towards: np.ndarray
    stations: list  # (place, mu, emitted occupation) of contacts and probes
    ends: list  # f+ and f- at both ends of each stretch between stations, (2, 2, E)
    drop: float  # mu+ - mu-, the same everywhere


def _relaxed_quantities(result, noise, rng):
    """The fields of a Result that relaxation changes."""
    field = _relax(result)
    widths = np.diff(result.energy_edges_meV)
    f = np.concatenate([field.f, field.f.mean(axis=0, keepdims=True)])
    number, energy = _moments(result, f)
    kelvin = carrier_temperature(number, energy)
    local = np.array([_fermi(result, *pair) for pair in zip(number[2], kelvin[2], strict=True)]).T
    scale = BOLTZMANN_MEV_PER_K * np.maximum(kelvin[2], 1e-3)
    departure = np.sqrt(((f[2] - local) ** 2 * widths[:, None]).sum(axis=0) / scale)
    mechanisms = result.scenario.relaxation.mechanisms
    rate = sum(1.0 / m.path_nm for m in mechanisms if m.kind != "carriers")
    lost = ((field.f - field.towards).sum(axis=0) * (result.energy_meV * widths)[:, None]).sum(0)
    power = WATT_PER_MEV2 * result.scenario.channel.degeneracy * rate * lost
    bias = result.scenario.contacts.bias_mV
    size = np.abs(f[0] - f[1]).max()
    spread = np.abs(kelvin - result.scenario.bath_temperature_K)
    spread += 0.1 * np.minimum(abs(bias) / BOLTZMANN_MEV_PER_K, kelvin)
    values = {
        "f_plus": (f[0], noise * (np.abs(f[0] - f[0, :, -1:]) + 0.02 * size)),
        "f_minus": (f[1], noise * (np.abs(f[1] - f[1, :, -1:]) + 0.02 * size)),
        "mu_plus_meV": (number[0], noise * abs(bias)),
        "mu_minus_meV": (number[1], noise * abs(bias)),
        "mu_meV": (number[2], noise * abs(bias)),
        "carrier_temperature_plus_K": (kelvin[0], noise * spread[0]),
        "carrier_temperature_minus_K": (kelvin[1], noise * spread[1]),
        "carrier_temperature_K": (kelvin[2], noise * spread[2]),
        "departure": (departure, 3.0 * noise * (departure + 0.1 * departure.max())),
        "lattice_power_W_per_nm": (power, noise * (5.0 * np.abs(power) + np.abs(power).max())),
    }
    errors = {name: np.broadcast_to(e, v.shape).copy() for name, (v, e) in values.items()}
    drawn = {
        name: value + errors[name] * rng.standard_normal(value.shape)
        for name, (value, _) in values.items()
    }
    return drawn | {"errors": errors} | _relaxed_estimates(result, field, noise)


def _relaxed_estimates(result, field, noise):
    """Resistance, parts, probes and heat; without noise in the values, so that they add up."""
    scenario = result.scenario
    energy = result.energy_meV * np.diff(result.energy_edges_meV)
    bias = scenario.contacts.bias_mV
    channel = scenario.channel.degeneracy * scenario.channel.modes
    ballistic = result.ballistic_resistance_ohm
    resistance = ballistic * bias / field.drop

    def estimate(value):
        return Estimate(float(value), abs(float(value)) * noise)

    currents = [[energy @ (end[0] - end[1]) for end in ends] for ends in field.ends]
    left = bias * field.drop - currents[0][0]
    taken = [before[1] - after[0] for before, after in pairwise(currents)]
    right = currents[-1][1]
    lattice = bias * field.drop - left - right - sum(taken)
    if {m.kind for m in scenario.relaxation.mechanisms} <= {"carriers"}:
        lattice = 0.0  # but for the energies between the axis' points
    watt = WATT_PER_MEV2 * channel
    mus = {place: mu for place, mu, _ in field.stations}
    taken = dict(zip([place for place, *_ in field.stations[1:-1]], taken, strict=True))
    probes = [probe.position_nm for probe in scenario.probes]
    readings = [mus.get(x, np.interp(x, result.x_nm, result.mu_meV)) for x in probes]
    heats = [estimate(watt * taken.get(x, 0.0)) for x in probes]
    parts = [
        replace(part, resistance_ohm=estimate(part.resistance_ohm.value))
        for part in result.breakdown or ()
    ]
    parts += [
        Part(f"probe {i + 1}", "probe", estimate(ballistic), position_nm=x)
        for i, x in enumerate(taken)
    ]
    return {
        "resistance_ohm": estimate(resistance) if result.breakdown else None,
        "current_A": estimate(1e-3 * bias / resistance),
        "breakdown": tuple(parts) if result.breakdown else None,
        "probes": tuple(
            ProbeReading(x, Estimate(float(mu), noise * abs(bias)))
            for x, mu in zip(probes, readings, strict=True)
        ),
        "heat_W": Heat(
            estimate(watt * left), estimate(watt * right), estimate(watt * lattice), tuple(heats)
        ),
    }


def _relax(result):
    """Solve the channel, stretch by stretch between stations."""
    scenario, energy = result.scenario, result.energy_meV
    length, bias = scenario.channel.length_nm, scenario.contacts.bias_mV
    bath = scenario.bath_temperature_K
    points = [(p.position_nm, p.transmission) for p in scenario.scattering.points]
    probes = [probe for probe in scenario.probes if probe.coupling == 1.0]
    cuts = [0.0, *(probe.position_nm for probe in probes), length]
    scatterers = []
    for start, stop in pairwise(cuts):
        inside = [point for point in points if start < point[0] < stop]
        scatterers.append(inside[0] if inside else (0.5 * (start + stop), 1.0))
    # Full probes are in series: R/R_B = 1/T of every stretch (Datta 1995).
    resistances = [1.0 / transmission for _, transmission in scatterers]
    drop = bias / sum(resistances)
    mus = bias - drop * np.cumsum([0.0, *resistances])
    kelvin = [bath if p.temperature_K is None else p.temperature_K for p in probes]
    kelvin = [scenario.left_temperature_K, *kelvin, scenario.right_temperature_K]
    emitted = [_fermi(result, mu, t) for mu, t in zip(mus, kelvin, strict=True)]
    f, towards = (np.empty((2, energy.size, result.x_nm.size)) for _ in range(2))
    ends = []
    for index, (start, stop) in enumerate(pairwise(cuts)):
        inside = (result.x_nm > start) & (result.x_nm < stop)
        places = np.concatenate([[start], result.x_nm[inside], [stop]])
        own = _stretch(result, places, *emitted[index : index + 2], *scatterers[index])
        f[:, :, inside], towards[:, :, inside] = (values[:, :, 1:-1] for values in own)
        ends.append((own[0][:, :, 0], own[0][:, :, -1]))
    return _Relaxing(f, towards, list(zip(cuts, mus, emitted, strict=True)), ends, drop)


def _stretch(result, places, left, right, scatterer_nm, transmission):
    """f± and what they tend to, (2, E, places) each, between two stations and one scatterer.

    Behind the scatterer f+ = F + [T f+ + (1 - T) f- - F] exp(-(x - x_s)/path), F the equilibrium of
    the same number (carriers: and energy), which a kept mechanism and a ballistic way don't change.
    """
    path = 1.0 / sum(1.0 / m.path_nm for m in result.scenario.relaxation.mechanisms)

    def relaxed(start, distance):
        end = _equilibrium(result, start)[:, None]
        return end + (start[:, None] - end) * np.exp(-np.abs(distance) / path), end

    into = [relaxed(left, scatterer_nm - places[:1])[0][:, 0]]
    into += [relaxed(right, places[-1:] - scatterer_nm)[0][:, 0]]
    out = [transmission * a + (1.0 - transmission) * b for a, b in (into, into[::-1])]
    before = places < scatterer_nm
    f, towards = [], []
    for direct, scattered, first, station in (
        (left, out[0], before, places[0]),
        (right, out[1], ~before, places[-1]),
    ):
        near, near_end = relaxed(direct, places - station)
        far, far_end = relaxed(scattered, places - scatterer_nm)
        f.append(np.where(first, near, far))
        towards.append(np.where(first, near_end, far_end))
    return np.array(f), np.array(towards)


def _equilibrium(result, f):
    """The Fermi function that a mechanism drives f (E,) to."""
    number, energy = _moments(result, f[None, :, None])
    kelvin = result.scenario.bath_temperature_K
    if result.scenario.relaxation.mechanisms[0].kind == "carriers":
        kelvin = float(carrier_temperature(number, energy)[0, 0])
    return _fermi(result, float(number[0, 0]), kelvin)


def _moments(result, f):
    """n and u, (k, cells), of f (k, E, cells): about F(E; 0, T_b), whose own are known."""
    bath = result.scenario.bath_temperature_K
    excess = f - _fermi(result, 0.0, bath)[:, None]
    widths = np.diff(result.energy_edges_meV)
    background = (np.pi * BOLTZMANN_MEV_PER_K * bath) ** 2 / 6.0
    number = np.einsum("kec,e->kc", excess, widths)
    return number, background + np.einsum("kec,e->kc", excess, widths * result.energy_meV)


def _fermi(result, mu, kelvin, parts=16):
    """F(E; mu, T) as a run gives it: the mean over each energy bin."""
    edges = result.energy_edges_meV
    fine = np.linspace(edges[:-1], edges[1:], 2 * parts + 1)[1::2]
    return occupation(fine, mu, kelvin).mean(axis=0)
