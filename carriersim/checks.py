"""Faults that span several keys of a scenario.

The checks read the raw document and skip whatever has not the right type, so that one fault does
not hide another.
"""

import math
from collections.abc import Iterator
from itertools import islice, pairwise
from types import SimpleNamespace
from typing import Any

from carriersim.faults import Fault, KeyPath, found, key_text
from carriersim.schema import MAX_POINTS
from carriersim.validation import MAX_FAULTS
from carriersim.yamlfile import Document

_PATH_KEYS = ("mean_free_path_nm", "backscatter_path_nm")
_SCATTERING: KeyPath = ("scattering",)
_SIDES: tuple[KeyPath, ...] = (("contacts", "left"), ("contacts", "right"))
_MECHANISMS: KeyPath = ("relaxation", "mechanisms")
_LATTICE_KINDS = ("bath", "optical_phonon")
_PARTS_OF_RELAXATION = ("bath", "carriers", "optical phonon", "optical phonons")

# Memory of a relaxing run in its longest form, 14 windows and as many for dI/dV. Measured at 402
# bins x 1250 cells x 64 batches, 2 threads: after 3 windows 0.4 GB with a bath, 0.7 GB with
# phonons; each window more adds 16 bytes for every bin and cell (the last three 128 besides, for
# the errors of occupations) and 64 for every cell and batch.
MOST_GB = 4.0
_BYTES_BIN_CELL, _BYTES_BATCH_CELL = 2000.0, 2000.0
_BYTES_PENDING = 8.0  # for every bin, cell and batch: tallies that wait to be added up
_MOST_AUTOMATIC = 400  # bins, unless a phonon asks for more
_COUNTABLE = 1e12  # bins; from here on energies have nothing to do with each other


def cross_faults(document: Document) -> list[Fault]:
    """Return all contradictions between the keys of a document."""
    checks = (_channel, _angles, _contacts, _paths, _sections, _random, _places, _tables)
    checks += (_mechanisms, _names, _elastic_modes, _simulation, _heat_share, _memory)
    return list(islice((fault for check in checks for fault in check(document)), MAX_FAULTS))


def _number(document: Document, path: KeyPath, default: float | None = None) -> float | None:
    """Return the finite number at a key path; the default where there is none, else None."""
    value = document.get(path)
    if value is None:
        return default
    if isinstance(value, bool) or not isinstance(value, int | float):
        return None
    return float(value) if math.isfinite(value) else None


def _length(document: Document) -> float | None:
    length = _number(document, ("channel", "length_nm"))
    return length if length is not None and length > 0 else None


def _given(document: Document, path: KeyPath) -> bool:
    return document.get(path) is not None


def _mappings(document: Document, path: KeyPath) -> Iterator[KeyPath]:
    entries = document.get(path)
    for index, entry in enumerate(entries if isinstance(entries, list) else ()):
        if isinstance(entry, dict):
            yield (*path, index)


def _exclusive(document: Document, base: KeyPath, names: tuple[str, str]) -> Iterator[Fault]:
    if all(_given(document, (*base, name)) for name in names):
        why = f"{names[0]} is given too"
        yield document.fault((*base, names[1]), f"one of {names[0]} and {names[1]}", why)


def _exactly_one(document: Document, base: KeyPath, names: tuple[str, str]) -> Iterator[Fault]:
    yield from _exclusive(document, base, names)
    if not any(_given(document, (*base, name)) for name in names):
        allowed = f"exactly one of {names[0]} and {names[1]}"
        yield document.message(base, f"a key is missing; allowed: {allowed}", allowed)


def _channel(document: Document) -> Iterator[Fault]:
    base: KeyPath = ("channel",)
    yield from _exclusive(document, base, ("modes", "fermi_wavenumber_per_nm"))
    dimension = _number(document, (*base, "dimension"), 1)
    width, height = (*base, "width_nm"), (*base, "height_nm")
    wavenumber = (*base, "fermi_wavenumber_per_nm")
    if dimension == 1:
        for path in (width, height):
            if _given(document, path):
                yield document.fault(path, "no such key in d = 1", "there are no walls in d = 1")
        if _given(document, wavenumber):
            why = "modes follow from it only in d = 2 and 3"
            yield document.fault(wavenumber, "channel.modes instead", why)
    elif dimension == 2:
        if _given(document, height):
            yield document.fault(height, "width_nm only", "in d = 2 there is no height")
        if _given(document, wavenumber) and not _given(document, width):
            yield document.fault(wavenumber, "together with width_nm", "the width is missing")
    elif dimension == 3:
        for path, other in ((width, height), (height, width)):
            if _given(document, path) and not _given(document, other):
                why = f"{other[-1]} is missing"
                yield document.fault(path, "in d = 3 both width_nm and height_nm, or neither", why)
        if _given(document, wavenumber) and not (
            _given(document, width) or _given(document, height)
        ):
            why = "the cross-section is missing"
            yield document.fault(wavenumber, "together with width_nm and height_nm", why)
    if dimension in (1, 2, 3):
        walls = _given(document, width) or _given(document, height)
        yield from _specularity(document, int(dimension), walls)


def _specularity(document: Document, dimension: int, walls: bool) -> Iterator[Fault]:
    base: KeyPath = ("channel", "specularity")
    for path in (base, (*base, "width"), (*base, "height")):
        value = _number(document, path, 1.0)
        if value is None or value == 1.0 or not 0 <= value <= 1:
            continue
        if not walls:
            where = "in d = 1" if dimension == 1 else "without width_nm"
            yield document.fault(path, "1, the default", f"there are no walls {where}")
        elif dimension == 2 and path[-1] == "height":
            yield document.fault(path, "1, the default", "in d = 2 there is no height")


def _angles(document: Document) -> Iterator[Fault]:
    """In one dimension there is no angle and nothing diffuse."""
    if _number(document, ("channel", "dimension"), 1) != 1:
        return
    owners = [*_SIDES, *_mappings(document, (*_SCATTERING, "points"))]
    owners += _mappings(document, (*_SCATTERING, "random"))
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
    if _given(document, ("contacts", "temperature_K")):
        return
    for side in _SIDES:
        path = (*side, "temperature_K")
        own = document.get(side)
        if not _given(document, path) and (own is None or isinstance(own, dict)):
            allowed = "a number >= 0 here, or contacts.temperature_K for both"
            message = f"the {side[1]} contact has no temperature; allowed: {allowed}"
            yield document.message(path, message, allowed)


def _paths(document: Document) -> Iterator[Fault]:
    sections = list(_mappings(document, (*_SCATTERING, "sections")))
    yield from _exclusive(document, _SCATTERING, _PATH_KEYS)
    for section in sections:
        yield from _exclusive(document, section, _PATH_KEYS)  # neither: a ballistic stretch
    for base in (_SCATTERING, *sections):
        for key in _PATH_KEYS:
            names: dict[str, KeyPath] = {}
            for entry in _mappings(document, (*base, key)):
                yield from _exactly_one(document, entry, _PATH_KEYS)
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
    length = _length(document)
    begin, end = (*base, "from_nm"), (*base, "to_nm")
    low = _number(document, begin, 0.0 if whole else None)
    high = _number(document, end, length if whole else None)
    inside = True
    for path in (begin, end):
        value = _number(document, path)
        if length is not None and value is not None and value > length:
            allowed = f"a number in 0..{found(length)} nm (channel.length_nm)"
            faults.append(document.fault(path, allowed, "outside the channel"))
            inside = False
    if low is None or high is None or not inside or low < 0:
        return None
    if low >= high:
        path = end if _given(document, end) else begin
        allowed = f"from_nm < to_nm (they are {found(low)} and {found(high)})"
        faults.append(document.fault(path, allowed, "the stretch is empty or reversed"))
        return None
    return low, high


def _sections(document: Document) -> list[Fault]:
    faults: list[Fault] = []
    stretches = []
    for section in _mappings(document, (*_SCATTERING, "sections")):
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
    points = document.get((*_SCATTERING, "points"))
    total = float(len(points)) if isinstance(points, list) else 0.0
    for group in _mappings(document, (*_SCATTERING, "random")):
        faults += _exactly_one(document, group, ("count", "density_per_um"))
        stretch = _interval(document, group, faults, whole=True)
        low = _number(document, (*group, "transmission", "low"))
        high = _number(document, (*group, "transmission", "high"))
        if low is not None and high is not None and low > high:
            why = f"low is above high ({found(high)})"
            faults.append(document.fault((*group, "transmission", "low"), "low <= high", why))
        count = _number(document, (*group, "count"), 0.0)
        density = _number(document, (*group, "density_per_um"), 0.0)
        if count is not None and count <= MAX_POINTS:
            total += max(count, 0.0)
        if density is not None and stretch is not None:
            total += max(density, 0.0) * (stretch[1] - stretch[0]) / 1000
    if total > MAX_POINTS and document.get((*_SCATTERING, "random")):
        allowed = f"at most {MAX_POINTS} scatterers, points and random together"
        message = f"found {total:.0f} scatterers; allowed: {allowed}"
        faults.append(document.message((*_SCATTERING, "random"), message, allowed))
    return faults


def _places(document: Document) -> Iterator[Fault]:
    length = _length(document)
    scatterers: dict[float, KeyPath] = {}
    for point in _mappings(document, (*_SCATTERING, "points")):
        path = (*point, "position_nm")
        place = _number(document, path)
        if place is None or place <= 0:
            continue
        yield from _outside(document, path, place, length)
        if place in scatterers:
            why = f"two scatterers at one place: {key_text(scatterers[place])} is there too"
            allowed = "a place of its own (or one scatterer with both effects)"
            yield document.fault(path, allowed, why)
        scatterers.setdefault(place, point)
    probes: dict[float, list[KeyPath]] = {}
    for probe in _mappings(document, ("probes",)):
        path = (*probe, "position_nm")
        place = _number(document, path)
        if place is None or place <= 0:
            continue
        yield from _outside(document, path, place, length)
        if place in scatterers:
            other = key_text(scatterers[place])
            why = f"the scatterer {other} is at this place, where the potential jumps"
            yield document.fault(path, "a place beside the scatterer", why)
        same = probes.setdefault(place, [])
        for other in same[:1]:
            if any(_coupled(document, one) for one in (*same, probe)):
                why = f"the probe {key_text(other)} is at this place, and one of them is coupled"
                yield document.fault(path, "a place of its own", why)
        same.append(probe)


def _outside(
    document: Document, path: KeyPath, place: float, length: float | None
) -> Iterator[Fault]:
    if length is not None and place >= length:
        allowed = f"between 0 and {found(length)} nm (channel.length_nm)"
        yield document.fault(path, allowed, "outside the channel")


def _coupled(document: Document, probe: KeyPath) -> bool:
    coupling = _number(document, (*probe, "coupling"), 0.0)
    return coupling is not None and coupling > 0


def _tables(document: Document) -> Iterator[Fault]:
    """Tables of energy wherever they stand: equal lengths, increasing energies, some modes."""
    for path in _all_tables(document.data, ()):
        energies, values = document.get((*path, "energy_meV")), document.get((*path, "value"))
        if len(energies) != len(values):
            allowed = "as many values as energies"
            why = f"there are {len(energies)} energies"
            yield document.fault((*path, "value"), allowed, why)
        numbers = [_number(document, (*path, "energy_meV", i)) for i in range(len(energies))]
        for i, (low, high) in enumerate(pairwise(numbers), start=1):
            if low is not None and high is not None and low >= high:
                why = f"the energies of a table must increase, and {found(low)} comes before"
                yield document.fault((*path, "energy_meV", i), "a larger number", why)
        if path == ("channel", "modes") and values and all(_is_zero(value) for value in values):
            why = "no mode is open at any energy"
            yield document.fault((*path, "value"), "at least one value > 0", why)


def _is_zero(value: Any) -> bool:
    return isinstance(value, int | float) and value == 0


def _all_tables(value: Any, path: KeyPath) -> Iterator[KeyPath]:
    if isinstance(value, dict):
        if isinstance(value.get("energy_meV"), list) and isinstance(value.get("value"), list):
            yield path
        for key, inner in value.items():
            if isinstance(inner, dict | list):
                yield from _all_tables(inner, (*path, key))
    elif isinstance(value, list):
        for index, inner in enumerate(value):
            if isinstance(inner, dict | list):
                yield from _all_tables(inner, (*path, index))


def _relaxes(document: Document) -> bool:
    coupled = any(_coupled(document, probe) for probe in _mappings(document, ("probes",)))
    return coupled or any(_mappings(document, _MECHANISMS))


def _mechanisms(document: Document) -> Iterator[Fault]:
    for base in _mappings(document, _MECHANISMS):
        kind = document.get((*base, "kind"))
        direction, energy = (*base, "direction"), (*base, "energy_meV")
        if kind == "bath" and not _given(document, direction):
            allowed = "kept or randomised"
            message = f"required for bath, but missing; allowed: {allowed}"
            yield document.message(direction, message, allowed)
        if kind == "optical_phonon":
            if _given(document, direction):
                why = "a phonon always makes the direction random"
                yield document.fault(direction, "no such key for optical_phonon", why)
            if not _given(document, energy):
                allowed = "a number > 0"
                message = f"required for optical_phonon, but missing; allowed: {allowed}"
                yield document.message(energy, message, allowed)
        elif kind in ("bath", "carriers") and _given(document, energy):
            why = f"{kind} has no energy of its own"
            yield document.fault(energy, "for optical_phonon only", why)


def _names(document: Document) -> Iterator[Fault]:
    """Paths may not be called like the parts of the breakdown that relaxation makes."""
    if not any(_mappings(document, _MECHANISMS)):
        return
    for base in (_SCATTERING, *_mappings(document, (*_SCATTERING, "sections"))):
        for key in _PATH_KEYS:
            for entry in _mappings(document, (*base, key)):
                path = (*entry, "name")
                if document.get(path) in _PARTS_OF_RELAXATION:
                    why = "with relaxation.mechanisms this is the name of a part of the resistance"
                    yield document.fault(path, "another name", why)


def _elastic_modes(document: Document) -> Iterator[Fault]:
    path: KeyPath = ("channel", "modes")
    if not isinstance(document.get(path), dict):
        return
    if any(_mappings(document, _MECHANISMS)):
        why = "modes against energy are for elastic runs, and there are relaxation.mechanisms"
        yield document.fault(path, "a number > 0", why)
    if any(_coupled(document, probe) for probe in _mappings(document, ("probes",))):
        why = "modes against energy are for elastic runs, and a probe is coupled"
        yield document.fault(path, "a number > 0", why)


def _simulation(document: Document) -> Iterator[Fault]:
    path: KeyPath = ("simulation", "histories")
    histories = _number(document, path)
    batches = _number(document, ("simulation", "batches"), 64)
    if histories is not None and batches is not None and 1 <= histories < batches:
        allowed = f"an integer >= {batches:g} (simulation.batches)"
        yield document.fault(path, allowed, "fewer than one for each batch")


def _heat_share(document: Document) -> Iterator[Fault]:
    """An error of the lattice's share of I V can be reached only where there is such a share."""
    path: KeyPath = ("simulation", "heat_share_error")
    if not _given(document, path):
        return
    kinds = [document.get((*base, "kind")) for base in _mappings(document, _MECHANISMS)]
    if not any(kind in _LATTICE_KINDS for kind in kinds):
        why = "no mechanism gives heat to the lattice"
        allowed = "with a bath or an optical_phonon in relaxation.mechanisms"
        yield document.fault(path, allowed, why)
    elif _number(document, ("contacts", "bias_mV")) == 0:
        yield document.fault(path, "with a bias other than 0", "without a bias there is no heat")


def _memory(document: Document) -> Iterator[Fault]:
    """Relaxing runs hold tables of energy bins x cells: refuse what no memory would hold."""
    cells = _number(document, ("simulation", "cells"), 200)
    batches = _number(document, ("simulation", "batches"), 64)
    if not _relaxes(document) or cells is None or batches is None or not 1 <= cells <= 100_000:
        return
    bins, phonon = _energy_bins(document)
    if bins is None:
        return
    asked: KeyPath = ("simulation", "energy_bins")
    if not bins < _COUNTABLE:
        allowed = "contacts and mechanisms whose energies are of comparable size"
        message = f"no number of bins covers the energies of this scenario; allowed: {allowed}"
        yield document.message(phonon or ("contacts", "bias_mV"), message, allowed)
        return
    size = cells + _cuts(document)  # every piece between two cuts is rounded to whole cells
    of_bin = _BYTES_BIN_CELL + _BYTES_PENDING * batches
    of_cell = bins * of_bin + batches * _BYTES_BATCH_CELL
    if size * of_cell <= MOST_GB * 1e9:
        return
    origin = "" if _given(document, asked) else ", automatic"
    why = (
        f"simulation.cells ({size:.0f} with cuts at scatterers and probes) times "
        f"simulation.energy_bins ({bins:.6g}{origin}) need up to {1e-9 * size * of_cell:.3g} GB "
        f"of memory with relaxation and {batches:.0f} batches"
    )
    choices = {
        "cells with so many bins": MOST_GB * 1e9 / of_cell,
        "bins with so many cells": (MOST_GB * 1e9 / size - batches * _BYTES_BATCH_CELL) / of_bin,
    }
    alone = _given(document, asked) and not _given(document, ("simulation", "cells"))
    path = asked if alone else ("simulation", "cells")
    if phonon and bins > 2 * (_number(document, asked) or _MOST_AUTOMATIC):
        path, why = phonon, f"found {found(document.get(phonon))}; no bin may be wider, and {why}"
        del choices["bins with so many cells"]
    allowed = " or ".join(f"{int(most)} {what}" for what, most in choices.items() if most >= 1)
    allowed = f"at most {allowed} ({MOST_GB:g} GB)" if allowed else "fewer simulation.batches"
    if path == phonon:
        allowed = f"a larger energy of the phonon, or {allowed}"
    yield document.message(path, f"{why}; allowed: {allowed}", allowed)


def _cuts(document: Document) -> int:
    """Cells that cuts of the channel may add, at most."""
    count = 0.0
    for path in ((*_SCATTERING, "points"), ("probes",)):
        count += sum(1 for _ in _mappings(document, path))
    count += 2 * sum(1 for _ in _mappings(document, (*_SCATTERING, "sections")))
    for group in _mappings(document, (*_SCATTERING, "random")):
        low = _number(document, (*group, "from_nm"), 0.0) or 0.0
        high = _number(document, (*group, "to_nm"), _length(document)) or 0.0
        density = _number(document, (*group, "density_per_um"), 0.0) or 0.0
        count += max(density * (high - low) / 1000, 0.0)
        count += max(_number(document, (*group, "count"), 0.0) or 0.0, 0.0)
    return int(min(count, MAX_POINTS + 1e5)) + 1 if count else 0


def _energy_bins(document: Document) -> tuple[float | None, KeyPath | None]:
    """Energy bins that the run will take, and the key of the phonon that sets their width.

    None if the document's faults leave it open, inf if no number of bins would do.
    """
    common = _number(document, ("contacts", "temperature_K"))
    left, right = (_number(document, (*side, "temperature_K"), common) for side in _SIDES)
    bath = _number(document, ("relaxation", "bath_temperature_K"), right)
    bias = _number(document, ("contacts", "bias_mV"))
    asked = document.get(("simulation", "energy_bins"))
    kinds: list[SimpleNamespace] = []
    phonons: list[tuple[KeyPath, float | None]] = []
    for base in _mappings(document, _MECHANISMS):
        kinds.append(SimpleNamespace(kind=document.get((*base, "kind"))))
        if kinds[-1].kind == "optical_phonon":
            path = (*base, "energy_meV")
            phonons.append((path, _number(document, path)))
    kelvin = (left, right, bath)
    valid = bias is not None and all(value is not None and value >= 0 for value in kelvin)
    valid = valid and all(value is not None and value > 0 for _, value in phonons)
    number = _number(document, ("simulation", "energy_bins"), 1)
    if not valid or number is None or number < 1:
        return None, None
    # Without compiled code, but with numpy: only where a scenario relaxes.
    import numpy as np

    from carriersim.engine.energies import Window
    from carriersim.engine.mechanisms import axis_of

    scenario = SimpleNamespace(
        bath_temperature_K=bath,
        relaxation=SimpleNamespace(mechanisms=kinds),
        simulation=SimpleNamespace(energy_bins=asked),
    )
    energies = np.array([value for _, value in phonons])
    narrow = phonons[0][0] if phonons else None
    try:
        with np.errstate(all="ignore"):
            bins = axis_of(scenario, Window(bias, left, right), energies).bins
    except (ArithmeticError, ValueError):  # numbers beyond what floats hold
        return math.inf, narrow
    return float(bins), narrow
