"""Faults that span several keys of a scenario.

The checks read the raw document and skip whatever has not the right type, so that one fault does
not hide another.
"""

import math
from collections.abc import Iterator
from itertools import islice, pairwise
from typing import Any

from carriersim.faults import Fault, KeyPath, found, key_text
from carriersim.memory_check import memory_faults
from carriersim.reading import (
    MECHANISMS,
    SCATTERING,
    SIDES,
    all_tables,
    exactly_one,
    exclusive,
    given,
    is_coupled,
    length_of,
    mappings,
    number,
)
from carriersim.schema import MAX_POINTS, modes_of
from carriersim.validation import MAX_FAULTS
from carriersim.yamlfile import Document

_PATH_KEYS = ("mean_free_path_nm", "backscatter_path_nm")
_LATTICE_KINDS = ("bath", "optical_phonon")
_PARTS_OF_RELAXATION = ("bath", "carriers", "optical phonon", "optical phonons")
_PART_OF_WALLS = "walls"


def cross_faults(document: Document) -> list[Fault]:
    """Return all contradictions between the keys of a document."""
    checks = (_channel, _angles, _contacts, _paths, _sections, _random, _drawn, _places, _tables)
    checks += (_mechanisms, _names, _elastic_modes, _simulation, _heat_share, memory_faults)
    return list(islice((fault for check in checks for fault in check(document)), MAX_FAULTS))


def _channel(document: Document) -> Iterator[Fault]:
    base: KeyPath = ("channel",)
    yield from exclusive(document, base, ("modes", "fermi_wavenumber_per_nm"))
    dimension = number(document, (*base, "dimension"), 1)
    width, height = (*base, "width_nm"), (*base, "height_nm")
    wavenumber = (*base, "fermi_wavenumber_per_nm")
    if dimension == 1:
        for path in (width, height):
            if given(document, path):
                yield document.fault(path, "no such key in d = 1", "there are no walls in d = 1")
        if given(document, wavenumber):
            why = "modes follow from it only in d = 2 and 3"
            yield document.fault(wavenumber, "channel.modes instead", why)
    elif dimension == 2:
        if given(document, height):
            yield document.fault(height, "width_nm only", "in d = 2 there is no height")
        if given(document, wavenumber) and not given(document, width):
            yield document.fault(wavenumber, "together with width_nm", "the width is missing")
    elif dimension == 3:
        for path, other in ((width, height), (height, width)):
            if given(document, path) and not given(document, other):
                why = f"{other[-1]} is missing"
                yield document.fault(path, "in d = 3 both width_nm and height_nm, or neither", why)
        if given(document, wavenumber) and not (given(document, width) or given(document, height)):
            why = "the cross-section is missing"
            yield document.fault(wavenumber, "together with width_nm and height_nm", why)
    if dimension in (1, 2, 3):
        walls = given(document, width) or given(document, height)
        yield from _specularity(document, int(dimension), walls)
        yield from _modes_of_wavenumber(document, int(dimension))
        yield from _bulk(document, int(dimension))


def _modes_of_wavenumber(document: Document, dimension: int) -> Iterator[Fault]:
    """A wavenumber and a cross-section of sizes far apart may give no number that floats hold."""
    path: KeyPath = ("channel", "fermi_wavenumber_per_nm")
    sides = (("channel", "width_nm"), ("channel", "height_nm"))[: dimension - 1]
    factors = [number(document, key) for key in (path, *sides)]
    if not sides or any(factor is None or factor <= 0 for factor in factors):
        return
    modes = modes_of(*factors)
    if not 0 < modes < math.inf:
        why = f"with the sides of the channel it gives {modes:g} modes"
        yield document.fault(path, "what gives a finite number of modes > 0", why)


def _bulk(document: Document, dimension: int) -> Iterator[Fault]:
    path: KeyPath = ("channel", "bulk_resistivity_uohm_cm")
    if dimension == 3 or not given(document, path):
        return
    why = "in d = 1 there is no cross-section"
    if dimension == 2:
        why = "in d = 2 the resistivity is that of a sheet, in ohm"
    yield document.fault(path, "for d = 3 only", why)


def _specularity(document: Document, dimension: int, walls: bool) -> Iterator[Fault]:
    base: KeyPath = ("channel", "specularity")
    for path in (base, (*base, "width"), (*base, "height")):
        value = number(document, path, 1.0)
        if value is None or value == 1.0 or not 0 <= value <= 1:
            continue
        if not walls:
            where = "in d = 1" if dimension == 1 else "without width_nm"
            yield document.fault(path, "1, the default", f"there are no walls {where}")
        elif dimension == 2 and path[-1] == "height":
            yield document.fault(path, "1, the default", "in d = 2 there is no height")


def _angles(document: Document) -> Iterator[Fault]:
    """In one dimension there is no angle and nothing diffuse."""
    if number(document, ("channel", "dimension"), 1) != 1:
        return
    owners = [*SIDES, *mappings(document, (*SCATTERING, "points"))]
    owners += mappings(document, (*SCATTERING, "random"))
    for owner in owners:
        if document.get((*owner, "angular")) == "tunnel":
            why = "in d = 1 there are no angles, the transmission cannot depend on them"
            yield document.fault((*owner, "angular"), "constant", why)
        if document.get((*owner, "reflection")) == "diffuse":
            why = "in d = 1 there is one way back, reflection cannot be diffuse"
            yield document.fault((*owner, "reflection"), "specular", why)


def _contacts(document: Document) -> Iterator[Fault]:
    if not isinstance(document.get(("contacts",)), dict):
        return
    if given(document, ("contacts", "temperature_K")):
        return
    for side in SIDES:
        path = (*side, "temperature_K")
        own = document.get(side)
        if not given(document, path) and (own is None or isinstance(own, dict)):
            allowed = "a number >= 0 here, or contacts.temperature_K for both"
            message = f"the {side[1]} contact has no temperature; allowed: {allowed}"
            yield document.message(path, message, allowed)


def _paths(document: Document) -> Iterator[Fault]:
    sections = list(mappings(document, (*SCATTERING, "sections")))
    yield from exclusive(document, SCATTERING, _PATH_KEYS)
    for section in sections:
        yield from exclusive(document, section, _PATH_KEYS)  # neither: a ballistic stretch
    for base in (SCATTERING, *sections):
        for key in _PATH_KEYS:
            names: dict[str, KeyPath] = {}
            for entry in mappings(document, (*base, key)):
                yield from exactly_one(document, entry, _PATH_KEYS)
                name = document.get((*entry, "name"))
                if not isinstance(name, str):
                    continue
                if name in names:
                    why = f"{key_text(names[name])} has this name too"
                    yield document.fault((*entry, "name"), "a name of its own", why)
                names.setdefault(name, entry)


def _interval(
    document: Document, base: KeyPath, faults: list[Fault], whole: bool
) -> tuple[float, float] | None:
    """Check from_nm < to_nm within the channel; `whole` makes the channel the default."""
    length = length_of(document)
    begin, end = (*base, "from_nm"), (*base, "to_nm")
    low = number(document, begin, 0.0 if whole else None)
    high = number(document, end, length if whole else None)
    inside = True
    for path in (begin, end):
        value = number(document, path)
        if length is not None and value is not None and value > length:
            allowed = f"a number in 0..{found(length)} nm (channel.length_nm)"
            faults.append(document.fault(path, allowed, "outside the channel"))
            inside = False
    if low is None or high is None or not inside or low < 0:
        return None
    if low >= high:
        path = end if given(document, end) else begin
        allowed = f"from_nm < to_nm (they are {found(low)} and {found(high)})"
        faults.append(document.fault(path, allowed, "the stretch is empty or reversed"))
        return None
    return low, high


def _sections(document: Document) -> list[Fault]:
    faults: list[Fault] = []
    stretches = []
    for section in mappings(document, (*SCATTERING, "sections")):
        stretch = _interval(document, section, faults, whole=False)
        if stretch is not None:
            stretches.append((*stretch, section))
    reach, holder = -math.inf, None
    for low, high, section in sorted(stretches):
        if holder is not None and low < reach:
            other = key_text(holder)
            why = f"overlaps {other}, which ends at {found(reach)} nm"
            allowed = "sections that share no more than an end"
            faults.append(document.fault((*section, "from_nm"), allowed, why))
        if high > reach:
            reach, holder = high, section
    return faults


def _random(document: Document) -> list[Fault]:
    faults: list[Fault] = []
    points = document.get((*SCATTERING, "points"))
    points = points if isinstance(points, list) else []
    own = sum(1 for point in points if not isinstance(point, dict) or point.get("group") is None)
    # Those that stand there with those to be drawn, and as many as when all are drawn anew.
    total, anew = float(len(points)), float(own)
    for group in mappings(document, (*SCATTERING, "random")):
        faults += exactly_one(document, group, ("count", "density_per_um"))
        stretch = _interval(document, group, faults, whole=True)
        low = number(document, (*group, "transmission", "low"))
        high = number(document, (*group, "transmission", "high"))
        if low is not None and high is not None and low > high:
            why = f"low is above high ({found(high)})"
            faults.append(document.fault((*group, "transmission", "low"), "low <= high", why))
        expected = _expected(document, group, stretch)
        anew += expected
        total += 0.0 if document.get((*group, "drawn")) is True else expected
    most = max(total, anew)
    if most > MAX_POINTS and document.get((*SCATTERING, "random")):
        allowed = f"at most {MAX_POINTS} scatterers, points and random together"
        message = f"found {most:.0f} scatterers; allowed: {allowed}"
        faults.append(document.message((*SCATTERING, "random"), message, allowed))
    return faults


def _expected(document: Document, group: KeyPath, stretch: tuple[float, float] | None) -> float:
    """Mean number of scatterers in a random group; 0 where faults leave it open."""
    count = number(document, (*group, "count"), 0.0)
    density = number(document, (*group, "density_per_um"), 0.0)
    expected = 0.0
    if count is not None and count <= MAX_POINTS:
        expected += max(count, 0.0)
    if density is not None and stretch is not None:
        expected += max(density, 0.0) * (stretch[1] - stretch[0]) / 1000
    return expected


def _drawn(document: Document) -> Iterator[Fault]:
    """A point that says which random group it was drawn from must name a drawn one."""
    groups = document.get((*SCATTERING, "random"))
    groups = groups if isinstance(groups, list) else []
    for point in mappings(document, (*SCATTERING, "points")):
        path = (*point, "group")
        index = number(document, path)
        if index is None or index < 0 or index % 1:
            continue
        allowed = "no such key, or the number (from 0) of a drawn group in scattering.random"
        if index >= len(groups):
            yield document.fault(path, allowed, "there is no such group")
            continue
        group = groups[int(index)]
        if isinstance(group, dict) and group.get("drawn", False) in (None, False):
            why = f"scattering.random[{index:.0f}] is not drawn"
            yield document.fault(path, allowed, why)


def _places(document: Document) -> Iterator[Fault]:
    length = length_of(document)
    scatterers: dict[float, KeyPath] = {}
    for point in mappings(document, (*SCATTERING, "points")):
        path = (*point, "position_nm")
        place = number(document, path)
        if place is None or place <= 0:
            continue
        yield from _outside(document, path, place, length)
        if place in scatterers:
            why = f"two scatterers at one place: {key_text(scatterers[place])} is there too"
            allowed = "a place of its own (or one scatterer with both effects)"
            yield document.fault(path, allowed, why)
        scatterers.setdefault(place, point)
    probes: dict[float, list[KeyPath]] = {}
    for probe in mappings(document, ("probes",)):
        path = (*probe, "position_nm")
        place = number(document, path)
        if place is None or place <= 0:
            continue
        yield from _outside(document, path, place, length)
        if place in scatterers:
            other = key_text(scatterers[place])
            why = f"the scatterer {other} is at this place, where the potential jumps"
            yield document.fault(path, "a place beside the scatterer", why)
        same = probes.setdefault(place, [])
        for other in same[:1]:
            if any(is_coupled(document, one) for one in (*same, probe)):
                why = f"the probe {key_text(other)} is at this place, and one of them is coupled"
                yield document.fault(path, "a place of its own", why)
        same.append(probe)


def _outside(
    document: Document, path: KeyPath, place: float, length: float | None
) -> Iterator[Fault]:
    if length is not None and place >= length:
        allowed = f"between 0 and {found(length)} nm (channel.length_nm)"
        yield document.fault(path, allowed, "outside the channel")


def _tables(document: Document) -> Iterator[Fault]:
    """Tables of energy wherever they stand: equal lengths, increasing energies, some modes."""
    for path in all_tables(document.data, ()):
        energies, values = document.get((*path, "energy_meV")), document.get((*path, "value"))
        if len(energies) != len(values):
            allowed = "as many values as energies"
            why = f"there are {len(energies)} energies"
            yield document.fault((*path, "value"), allowed, why)
        numbers = [number(document, (*path, "energy_meV", i)) for i in range(len(energies))]
        for i, (low, high) in enumerate(pairwise(numbers), start=1):
            if low is not None and high is not None and low >= high:
                why = f"the energies of a table must increase, and {found(low)} comes before"
                yield document.fault((*path, "energy_meV", i), "a larger number", why)
        if path == ("channel", "modes") and values and all(_is_zero(value) for value in values):
            why = "no mode is open at any energy"
            yield document.fault((*path, "value"), "at least one value > 0", why)


def _is_zero(value: Any) -> bool:
    return isinstance(value, int | float) and value == 0


def _mechanisms(document: Document) -> Iterator[Fault]:
    for base in mappings(document, MECHANISMS):
        kind = document.get((*base, "kind"))
        direction, energy = (*base, "direction"), (*base, "energy_meV")
        if kind == "bath" and not given(document, direction):
            allowed = "kept or randomised"
            message = f"required for bath, but missing; allowed: {allowed}"
            yield document.message(direction, message, allowed)
        if kind == "optical_phonon":
            if given(document, direction):
                why = "a phonon always makes the direction random"
                yield document.fault(direction, "no such key for optical_phonon", why)
            if not given(document, energy):
                allowed = "a number > 0"
                message = f"required for optical_phonon, but missing; allowed: {allowed}"
                yield document.message(energy, message, allowed)
        elif kind in ("bath", "carriers") and given(document, energy):
            why = f"{kind} has no energy of its own"
            yield document.fault(energy, "for optical_phonon only", why)


def _names(document: Document) -> Iterator[Fault]:
    """Paths may not be called like the parts of the breakdown that relaxation and walls make."""
    taken = {}
    if any(mappings(document, MECHANISMS)):
        taken = dict.fromkeys(_PARTS_OF_RELAXATION, "with relaxation.mechanisms")
    if given(document, ("channel", "width_nm")):
        taken[_PART_OF_WALLS] = "with channel.width_nm"
    if not taken:
        return
    for base in (SCATTERING, *mappings(document, (*SCATTERING, "sections"))):
        for key in _PATH_KEYS:
            for entry in mappings(document, (*base, key)):
                path = (*entry, "name")
                name = document.get(path)
                if isinstance(name, str) and name in taken:
                    why = f"{taken[name]} this is the name of a part of the resistance"
                    yield document.fault(path, "another name", why)


def _elastic_modes(document: Document) -> Iterator[Fault]:
    path: KeyPath = ("channel", "modes")
    if not isinstance(document.get(path), dict):
        return
    if any(mappings(document, MECHANISMS)):
        why = "modes against energy are for elastic runs, and there are relaxation.mechanisms"
        yield document.fault(path, "a number > 0", why)
    if any(is_coupled(document, probe) for probe in mappings(document, ("probes",))):
        why = "modes against energy are for elastic runs, and a probe is coupled"
        yield document.fault(path, "a number > 0", why)


def _simulation(document: Document) -> Iterator[Fault]:
    path: KeyPath = ("simulation", "histories")
    histories = number(document, path)
    batches = number(document, ("simulation", "batches"), 64)
    if histories is not None and batches is not None and 1 <= histories < batches:
        allowed = f"an integer >= {batches:g} (simulation.batches)"
        yield document.fault(path, allowed, "fewer than one for each batch")


def _heat_share(document: Document) -> Iterator[Fault]:
    """An error of the lattice's share of I V can be reached only where there is such a share."""
    path: KeyPath = ("simulation", "heat_share_error")
    if not given(document, path):
        return
    kinds = [document.get((*base, "kind")) for base in mappings(document, MECHANISMS)]
    if not any(kind in _LATTICE_KINDS for kind in kinds):
        why = "no mechanism gives heat to the lattice"
        allowed = "with a bath or an optical_phonon in relaxation.mechanisms"
        yield document.fault(path, allowed, why)
    elif number(document, ("contacts", "bias_mV")) == 0:
        yield document.fault(path, "with a bias other than 0", "without a bias there is no heat")
