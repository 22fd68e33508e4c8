"""Scenario -> Problem: the flat arrays that the kernels read, and what turns counts into results.

The only module that knows both the scenario's keys and the kernel's arrays.
"""

from dataclasses import dataclass
from itertools import pairwise

import numpy as np

from carriersim.constants import BOLTZMANN_MEV_PER_K
from carriersim.engine.energies import Bins, Window, axis, shares
from carriersim.engine.events import Tables
from carriersim.engine.flights import Geometry, Spectrum
from carriersim.engine.mechanisms import (
    KEPT_CARRIERS,
    RANDOM_CARRIERS,
    Axis,
    Mechanisms,
    Probes,
    axis_of,
    mechanisms_of,
    probes_of,
    reference,
)
from carriersim.engine.sources import Setting
from carriersim.engine.space import BACKSCATTER, Space, space_of
from carriersim.quantities import EnergyTable

LEAST_SPREAD = 0.15  # of the greatest, 1/2 at T = 1/2: rare outcomes need histories to show at all


@dataclass(frozen=True)
class Path:
    """One named backscattering path of a section: number or table in nm."""

    name: str
    value: float | EnergyTable

    def rate_per_nm(self, energy_meV):
        """1/lam at the given energies."""
        if isinstance(self.value, EnergyTable):
            return 1.0 / at_energy(self.value, energy_meV)
        return np.full(np.shape(energy_meV), 1.0 / self.value)


@dataclass(frozen=True)
class Functionals:
    """Weights c, shape (B,): a result is c @ (bin averages of a response). Units in brackets."""

    current: np.ndarray  # M (F_L - F_R) [meV]
    bias_slope: np.ndarray  # M (-dF_L/dE) [1]
    heat: np.ndarray  # M E (F_L - F_R) [meV^2]
    filling: np.ndarray  # gives mu in meV, or per unit of the bias when the bias is 0
    number: np.ndarray  # F_L - F_R [meV]
    energy: np.ndarray | None  # E (F_L - F_R) [meV^2]; None where modes depend on energy
    thermal: tuple[np.ndarray, np.ndarray, np.ndarray]  # M E^n (-dF/dE), n = 0, 1, 2
    mean_modes: float  # averaged over the energies that carry the current

    def transport(self, window):
        """What the run is about: the current, or its slope at bias 0 and unequal temperatures."""
        if window.same_temperature and not window.linear:
            return self.current
        return self.bias_slope


@dataclass(frozen=True)
class Relaxed:
    """What a problem with relaxation or coupled probes has on top."""

    axis: Axis
    setting: Setting
    mechanisms: Mechanisms
    probes: Probes
    tables: Tables | None
    reference: np.ndarray  # (B,) F_r averaged over each bin
    probe_kelvin: np.ndarray  # (K,)
    equilibrium: bool  # without a bias nothing flows: all temperatures are equal


@dataclass(frozen=True)
class Problem:
    """Everything a run needs, built once. K nodes, K-1 segments, C cells, B energy bins."""

    scenario: object
    window: Window
    geometry: Geometry
    spectrum: Spectrum | None
    bins: Bins | None
    share: np.ndarray  # (B,)
    functionals: Functionals
    nodes_nm: np.ndarray  # (K,)
    cell_edges_nm: np.ndarray  # (C+1,)
    segment_paths: tuple[tuple[Path, ...], ...]
    is_scatterer: np.ndarray  # (K,) bool: a point scatterer or an interface that can reflect
    is_section_edge: np.ndarray  # (K,) bool
    probe_node: np.ndarray  # (probes,) int64
    transparent: bool  # nothing can turn a carrier back
    relaxed: Relaxed | None = None  # what relaxation and coupled probes need; None without them
    space: Space | None = None  # planes and walls in d = 2, 3

    @property
    def cells(self):
        return self.cell_edges_nm.size - 1

    def modes(self, energy_meV):
        """M at the given energies."""
        return modes_at(self.scenario, energy_meV)

    @property
    def freely_entered(self):
        """Whether nothing scatters in the first segment."""
        return not self.segment_paths[0]


def at_energy(value, energy_meV):
    """A number or an EnergyTable (linear, clamped at its ends) at the given energies."""
    if isinstance(value, EnergyTable):
        return np.interp(energy_meV, value.energy_meV, value.value)
    return np.full(np.shape(energy_meV), float(value))


def modes_at(scenario, energy_meV):
    """M at the given energies."""
    return at_energy(scenario.channel.resolved_modes, energy_meV)


def build(scenario):
    """The Problem of a validated scenario whose random scatterers have been drawn."""
    window = Window(
        scenario.contacts.bias_mV, scenario.left_temperature_K, scenario.right_temperature_K
    )
    nodes, transmissions, planes = _nodes(scenario)
    paths = [_paths_at(scenario, 0.5 * (a + b)) for a, b in pairwise(nodes)]
    flown = _flown(paths, scenario.channel.dimension)
    space = space_of(scenario, nodes, planes, _view_places(scenario))
    length = np.diff(nodes)
    cells = np.maximum(1, np.rint(length / nodes[-1] * scenario.simulation.cells)).astype(np.int64)
    edges = [np.linspace(a, b, n + 1)[1:] for (a, b), n in zip(pairwise(nodes), cells, strict=True)]
    constant = np.array([sum(1 / p.value for p in row if not _varies(p.value)) for row in flown])
    geometry = Geometry(
        length_nm=length,
        thickness=length * constant,
        first_cell=np.concatenate([[0], np.cumsum(cells)[:-1]]).astype(np.int64),
        cells=cells,
        transmission=np.array([1.0 if _varies(t) else float(t) for t in transmissions]),
    )
    tables = _distinct([*transmissions, *(p.value for row in flown for p in row)])
    modes = scenario.channel.resolved_modes
    mode_tables = [modes] if _varies(modes) else []
    bins = spectrum = relaxed = None
    share = np.ones(1)
    if needs_relaxation(scenario):
        relaxed = _relaxed(scenario, window, nodes, transmissions, flown, tables)
        functionals = _constant_functionals(float(modes), window)
    elif tables or mode_tables:
        edges_meV = axis(window, [*tables, *mode_tables], scenario.simulation.energy_bins)
        bins = Bins(edges_meV, window.breaks())
        functionals = _binned_functionals(scenario, window, bins)
        share = _share(bins, functionals, window, _spread(bins, transmissions, paths, length))
        spectrum = _spectrum(bins, share, transmissions, flown, tables)
    else:
        functionals = _constant_functionals(float(modes), window)
    return Problem(
        scenario=scenario,
        window=window,
        geometry=geometry,
        spectrum=spectrum,
        bins=bins,
        share=share,
        functionals=functionals,
        nodes_nm=nodes,
        cell_edges_nm=np.concatenate([[0.0], *edges]),
        segment_paths=tuple(tuple(row) for row in paths),
        is_scatterer=np.array([_varies(t) or t < 1.0 for t in transmissions]),
        is_section_edge=np.isin(nodes, _section_edges(scenario)),
        probe_node=np.searchsorted(nodes, [p.position_nm for p in scenario.probes]),
        transparent=not any(paths)
        and all(not _varies(t) and t == 1.0 for t in transmissions)
        and (space is None or not space.scatters),
        relaxed=relaxed,
        space=space,
    )


def needs_relaxation(scenario):
    """Whether energies or directions change by more than elastic scattering."""
    coupled = any(probe.coupling > 0.0 for probe in scenario.probes)
    return coupled or bool(scenario.relaxation.mechanisms)


def _relaxed(scenario, window, nodes, transmissions, paths, tables):
    mechanisms = mechanisms_of(scenario)
    axis_ = axis_of(scenario, window, mechanisms.phonon_meV)
    bath = scenario.bath_temperature_K
    probe_kelvin = np.full(nodes.size, bath)
    for probe in scenario.probes:
        if probe.temperature_K is not None:
            probe_kelvin[np.searchsorted(nodes, probe.position_nm)] = probe.temperature_K
    mu = window.mu_left_meV
    k = BOLTZMANN_MEV_PER_K
    setting = Setting(
        mu_left=mu,
        left_sign=-1.0 if mu < 0.0 else 1.0,
        left_kT=k * window.temperature_left_K,
        right_kT=k * window.temperature_right_K,
        bath_kT=k * bath,
        first_meV=axis_.first_meV,
        step_meV=axis_.step_meV,
        exact_energy=not tables and mechanisms.phonon_meV.size == 0,
        carriers=bool(mechanisms.rates[KEPT_CARRIERS] or mechanisms.rates[RANDOM_CARRIERS]),
        tangent=False,
    )
    return Relaxed(
        axis=axis_,
        setting=setting,
        mechanisms=mechanisms,
        probes=probes_of(scenario, nodes),
        tables=_exact_tables(transmissions, paths, tables) if tables else None,
        reference=reference(axis_, bath),
        probe_kelvin=probe_kelvin,
        equilibrium=len({bath, scenario.left_temperature_K, *_kelvin(scenario)}) == 1,
    )


def _kelvin(scenario):
    coupled = (p.temperature_K for p in scenario.probes if p.coupling > 0.0)
    return [scenario.right_temperature_K, *(t for t in coupled if t is not None)]


def _table_index(tables):
    """A function from a value to the number of its table, -1 for a plain number."""
    place = {(t.energy_meV, t.value): i for i, t in enumerate(tables)}
    return lambda value: place[(value.energy_meV, value.value)] if _varies(value) else -1


def _path_lists(paths, index):
    """Path tables of each segment: first entry of each, and all their numbers."""
    used = [[index(p.value) for p in row if _varies(p.value)] for row in paths]
    first = np.concatenate([[0], np.cumsum([len(u) for u in used])]).astype(np.int64)
    return first, np.array([i for row in used for i in row], np.int64)


def _exact_tables(transmissions, paths, tables):
    """Tables with all their entries, for carriers whose energy changes."""
    index = _table_index(tables)
    path_first, path_index = _path_lists(paths, index)
    return Tables(
        first=np.cumsum([0, *(len(t.energy_meV) for t in tables)]).astype(np.int64),
        energy_meV=np.concatenate([t.energy_meV for t in tables]),
        value=np.concatenate([t.value for t in tables]),
        node_table=np.array([index(t) for t in transmissions], np.int64),
        path_first=path_first,
        path_index=path_index,
    )


def _varies(value):
    return isinstance(value, EnergyTable)


def _section_edges(scenario):
    inside = []
    for section in scenario.scattering.sections:
        inside += [section.from_nm, section.to_nm]
    return [x for x in inside if 0.0 < x < scenario.channel.length_nm]


def _nodes(scenario):
    """Positions of all nodes, increasing; transmission, (angular, reflection) of each."""
    length = scenario.channel.length_nm
    contacts = scenario.contacts
    by_place = {p.position_nm: p for p in scenario.scattering.points}
    inner = [*_section_edges(scenario), *(p.position_nm for p in scenario.probes)]
    for place in [*inner, *_view_places(scenario)]:
        if 0.0 < place < length:
            by_place.setdefault(place, None)
    places = sorted(by_place)
    planes = [contacts.left, *(by_place[place] for place in places), contacts.right]
    return (
        np.array([0.0, *places, length]),
        [1.0 if plane is None else plane.transmission for plane in planes],
        [
            ("constant", "specular") if plane is None else (plane.angular, plane.reflection)
            for plane in planes
        ],
    )


def _view_places(scenario):
    """Where the angular distribution is looked at: the contacts, and the probes or the middle."""
    length = scenario.channel.length_nm
    if scenario.channel.dimension == 1:
        return []
    return [0.0, *([p.position_nm for p in scenario.probes] or [0.5 * length]), length]


def _paths_at(scenario, place_nm):
    """The backscattering paths in force at a place."""
    level = scenario.scattering
    for section in scenario.scattering.sections:
        if section.from_nm <= place_nm <= section.to_nm:
            level = section
    return backscatter_paths(level, scenario.channel.dimension)


def backscatter_paths(level, dimension=1):
    """Paths of one level (the whole channel, a section): a list of Path, empty = ballistic."""
    named = level.backscatter_path_nm
    free = BACKSCATTER[dimension]  # of a mean free path
    factor = 1.0
    if named is None:
        named, factor = level.mean_free_path_nm, free
    if named is None:
        return []
    if isinstance(named, tuple):
        return [
            Path(item.name, _scaled(item.mean_free_path_nm, free))
            if item.backscatter_path_nm is None
            else Path(item.name, item.backscatter_path_nm)
            for item in named
        ]
    return [Path("elastic", _scaled(named, factor))]


def _flown(paths, dimension):
    """The paths that flights of the kernel take: mean free paths where there are directions."""
    if dimension == 1:
        return paths
    return [
        [Path(p.name, _scaled(p.value, 1.0 / BACKSCATTER[dimension])) for p in row] for row in paths
    ]


def _scaled(value, factor):
    if _varies(value):
        return EnergyTable(
            energy_meV=value.energy_meV, value=tuple(factor * v for v in value.value)
        )
    return factor * value


def _distinct(values):
    """The different tables among the values, in order of first use."""
    seen = {}
    for value in values:
        if _varies(value):
            seen.setdefault((value.energy_meV, value.value), value)
    return list(seen.values())


def _spectrum(bins, share, transmissions, paths, tables):
    """The kernel's view of everything that depends on energy."""
    index = _table_index(tables)
    path_first, path_index = _path_lists(paths, index)
    values = np.empty((bins.count, max(len(tables), 1), 2))
    values[:] = [1.0, 0.0]
    for i, table in enumerate(tables):
        at_edges = at_energy(table, bins.edges)
        values[:, i, 0] = 0.5 * (at_edges[1:] + at_edges[:-1])
        values[:, i, 1] = np.diff(at_edges) / np.diff(bins.edges)
    return Spectrum(
        edges_meV=bins.edges,
        cumulative=np.concatenate([[0.0], np.cumsum(share)[:-1], [1.0]]),
        node_table=np.array([index(t) for t in transmissions], np.int64),
        path_first=path_first,
        path_index=path_index,
        values=values,
    )


def _constant_functionals(modes, window):
    """The integrals in closed form where neither transmission, path nor modes depend on energy."""
    k = BOLTZMANN_MEV_PER_K
    mu = window.mu_left_meV
    # int E (F_L - F_R) dE: Sommerfeld's two terms, exact for Fermi functions.
    heat = mu**2 / 2 + np.pi**2 / 6 * k**2 * (
        window.temperature_left_K**2 - window.temperature_right_K**2
    )
    second = np.pi**2 / 3 * (k * window.mean_temperature_K) ** 2
    one = np.ones(1)
    return Functionals(
        current=modes * mu * one,
        bias_slope=modes * one,
        heat=modes * heat * one,
        filling=one if window.linear else mu * one,
        number=mu * one,
        energy=heat * one,
        thermal=(modes * one, 0.0 * one, modes * second * one),
        mean_modes=modes,
    )


def _binned_functionals(scenario, window, bins):
    """The same integrals over the bins."""

    def modes(energy):
        return modes_at(scenario, energy)

    left = window.mu_left_meV, window.temperature_left_K
    current = bins.functional(lambda e: modes(e) * window.difference(e))
    slope = bins.slope_functional(*left, modes)
    constant = scenario.channel.resolved_modes
    if not _varies(constant):
        # The axis ends at REACH_KT: what lies beyond (some 1e-9) is known here, so it is put back.
        slope *= constant / slope.sum()
        if window.same_temperature and not window.linear:
            current *= constant * window.mu_left_meV / current.sum()
        mean_modes = constant
    elif window.linear:
        mean_modes = slope.sum()
    elif window.same_temperature:
        mean_modes = current.sum() / window.mu_left_meV
    else:  # the window of the bias has no sign of its own: the right contact's modes
        mean_modes = bins.slope_functional(0.0, window.temperature_right_K, modes).sum()
    filling = (slope if window.linear else current) / mean_modes
    return Functionals(
        current=current,
        bias_slope=slope,
        heat=bins.functional(lambda e: e * modes(e) * window.difference(e)),
        filling=filling,
        number=bins.functional(window.difference),
        energy=None if _varies(constant) else bins.functional(lambda e: e * window.difference(e)),
        thermal=tuple(
            bins.slope_functional(0.0, window.mean_temperature_K, modes, power=n) for n in range(3)
        ),
        mean_modes=float(mean_modes),
    )


def _share(bins, functionals, window, spread):
    """Share of histories per bin: what profiles, current, slope, heat and thermal block need.

    A sum over bins of drive x response has the least error when histories go as the size of the
    drive times the spread of one history's outcome (Neyman 1934, optimal allocation).
    """
    f = functionals
    main = f.bias_slope if window.linear else f.current
    numbers = [main, main, f.current, f.bias_slope, f.heat, f.thermal[2]]
    # Inside the channel outcomes spread whatever gets through: the profiles' need is the drive.
    return shares(bins, [main, *(drive * spread for drive in numbers)])


def _spread(bins, transmissions, paths, length_nm):
    """Guess of a history's standard deviation, sqrt(T (1 - T)), at the centre of each bin.

    T from the series law. It only decides where histories go: whatever it is, results are unbiased.
    """
    resistance = np.ones(bins.count)
    for transmission in transmissions:
        t = at_energy(transmission, bins.centres)
        resistance += (1.0 - t) / t
    for row, stretch in zip(paths, length_nm, strict=True):
        for path in row:
            resistance += stretch * path.rate_per_nm(bins.centres)
    return np.maximum(np.sqrt(resistance - 1.0) / resistance, 0.5 * LEAST_SPREAD)
