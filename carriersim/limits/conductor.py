"""A scenario as a row of resistances in series: the series law and the transmission T(E).

Resistances are in units of h/(g M e^2), the ballistic resistance.
"""

from collections.abc import Callable
from dataclasses import dataclass, field
from functools import cached_property, partial
from operator import attrgetter

import numpy as np

from carriersim.limits.formulas import point_resistance, stretch_resistance
from carriersim.quantities import EnergyTable


@dataclass(frozen=True)
class Law:
    """How a resistance depends on energy; without entries it is the constant 1.

    formula turns the value of a table, linear between its entries, into a resistance.
    """

    formula: Callable | None = None
    energy_meV: tuple[float, ...] = ()
    value: tuple[float, ...] = ()

    def __call__(self, energy_meV):
        if self.formula is None:
            return np.ones(np.shape(energy_meV))
        return self.formula(np.interp(energy_meV, self.energy_meV, self.value))


@dataclass(frozen=True)
class Stretch:
    """One scattering mechanism along a stretch: amount * law(E) is its resistance per nm."""

    from_nm: float
    to_nm: float
    mechanism: str | None
    law: int
    amount: float


@dataclass(frozen=True, eq=False)
class Conductor:
    """What the closed forms need of a scenario, read once.

    Each part of the resistance is an amount of one of the laws; a law that occurs many times is
    evaluated once. laws[0] is the constant.
    """

    scenario: object
    laws: tuple[Law, ...]
    place_nm: np.ndarray  # points by increasing place; first and last are the contacts' interfaces
    point_law: np.ndarray
    point_amount: np.ndarray
    stretches: tuple[Stretch, ...]
    with_relaxation: bool = False  # whether number_transport made it
    coupled: dict = field(default_factory=dict)  # point -> number of the coupled probe it is
    drives: dict = field(default_factory=dict)  # found so far, see energies.py

    @property
    def length_nm(self):
        return self.scenario.channel.length_nm

    @property
    def degeneracy(self):
        return self.scenario.channel.degeneracy

    @property
    def bias_mV(self):
        return float(self.scenario.contacts.bias_mV)

    @property
    def left_K(self):
        return self.scenario.left_temperature_K

    @property
    def right_K(self):
        return self.scenario.right_temperature_K

    @property
    def mean_K(self):
        return 0.5 * (self.left_K + self.right_K)

    @property
    def same_temperature(self):
        return self.left_K == self.right_K

    @property
    def modes_are_constant(self):
        return not isinstance(self.scenario.channel.resolved_modes, EnergyTable)

    @property
    def depends_on_energy(self):
        return len(self.laws) > 1 or not self.modes_are_constant

    @property
    def entries_meV(self):
        """Energies at which M(E) or T(E) has a kink."""
        entries = [law.energy_meV for law in self.laws]
        if not self.modes_are_constant:
            entries.append(self.scenario.channel.resolved_modes.energy_meV)
        return np.concatenate(entries)

    def modes(self, energy_meV):
        """M(E), shape of energy_meV."""
        modes = self.scenario.channel.resolved_modes
        if self.modes_are_constant:
            return np.full(np.shape(energy_meV), float(modes))
        return np.interp(energy_meV, modes.energy_meV, modes.value)

    def transmission(self, energy_meV):
        """T(E) of the whole channel with its interfaces, shape of energy_meV."""
        resistance = np.zeros(np.shape(energy_meV))
        for law, amount in zip(self.laws, self.amounts, strict=True):
            resistance += amount * law(energy_meV)
        return 1.0 / (1.0 + resistance)

    @cached_property
    def amounts(self):
        """Amount of each law in the whole channel with its interfaces."""
        amounts = self.amounts_up_to(self.length_nm)
        amounts[self.point_law[-1]] += self.point_amount[-1]
        return amounts

    def amounts_up_to(self, x_nm):
        """Amount of each law between the left contact and x, shape (laws, *x_nm.shape).

        x in [0, L], just inside the interfaces; a scatterer at x itself counts half.
        """
        amounts = np.zeros((len(self.laws), *np.shape(x_nm)))
        place_nm = np.concatenate([[-np.inf], self.place_nm[1:-1], [np.inf]])
        for law, own in enumerate(self._points_by_law):
            total = np.concatenate([[0.0], np.cumsum(self.point_amount[own])])
            before, until = (np.searchsorted(place_nm[own], x_nm, s) for s in ("left", "right"))
            amounts[law] = 0.5 * (total[before] + total[until])
        for stretch in self.stretches:
            covered = np.clip(x_nm, stretch.from_nm, stretch.to_nm) - stretch.from_nm
            amounts[stretch.law] += stretch.amount * covered
        return amounts

    @cached_property
    def _points_by_law(self):
        counts = np.bincount(self.point_law, minlength=len(self.laws))
        return np.split(np.argsort(self.point_law, kind="stable"), np.cumsum(counts)[:-1])


def read(scenario):
    """The Conductor of a scenario's elastic scattering; a Conductor is given back as it is."""
    if isinstance(scenario, Conductor):
        return scenario
    if scenario.scattering.undrawn:
        raise ValueError("closed forms need the random scatterers drawn, as explicit points")
    laws = {Law(): 0}
    contacts, length_nm = scenario.contacts, scenario.channel.length_nm
    points = [
        (0.0, contacts.left.transmission),
        *((p.position_nm, p.transmission) for p in _by_place(scenario.scattering.points)),
        (length_nm, contacts.right.transmission),
    ]
    law, amount = zip(*(_amount(laws, point_resistance, t) for _, t in points), strict=True)
    stretches = tuple(_stretches(scenario, laws))
    return Conductor(
        scenario=scenario,
        laws=tuple(laws),
        place_nm=np.array([place for place, _ in points]),
        point_law=np.array(law),
        point_amount=np.array(amount),
        stretches=stretches,
    )


def read_line(scenario):
    """The same for what holds along a line only; ValueError in two and three dimensions."""
    conductor = read(scenario)
    if conductor.scenario.channel.dimension != 1:
        raise ValueError("the series law gives potentials in one dimension only")
    return conductor


def transmission(scenario, energy_meV):
    """T(E) = 1/(1 + sum of len/lam(E) + sum of (1 - T_i(E))/T_i(E)), shape of energy_meV.

    Datta 1995 (series law), interface transmissions included. Tables are linear between their
    entries and constant outside; rates of named paths add.
    """
    return read(scenario).transmission(np.asarray(energy_meV, float))


def _amount(laws, formula, value):
    """(index of its law, amount) of a number or a table; a table not yet seen becomes a law."""
    if isinstance(value, EnergyTable):
        law = Law(formula, value.energy_meV, value.value)
        return laws.setdefault(law, len(laws)), 1.0
    return 0, float(formula(value))


_by_place = partial(sorted, key=attrgetter("position_nm"))
_per_nm = partial(stretch_resistance, 1.0)


def _stretches(scenario, laws):
    """The stretches that scatter: the channel cut at the section edges, mechanism by mechanism."""
    everywhere, reached = scenario.scattering, 0.0
    spans = []
    for section in sorted(everywhere.sections, key=attrgetter("from_nm")):
        spans += [(reached, section.from_nm, everywhere), (section.from_nm, section.to_nm, section)]
        reached = section.to_nm
    spans.append((reached, scenario.channel.length_nm, everywhere))
    for from_nm, to_nm, level in spans:
        if from_nm < to_nm:
            for name, path, factor in _paths(level):
                law, amount = _amount(laws, _per_nm, path)
                yield Stretch(from_nm, to_nm, name, law, amount / factor)


def _paths(level):
    """(name, path, factor) of the paths given for the channel or a section; lam = factor * path."""
    given, factor = level.backscatter_path_nm, 1.0
    if given is None:
        given, factor = level.mean_free_path_nm, 2.0
    if given is None:
        return []
    if isinstance(given, tuple):
        return [(item.name, *path[1:]) for item in given for path in _paths(item)]
    return [(None, given, factor)]
