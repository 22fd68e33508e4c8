"""Reading a raw document: numbers, mappings and the simple rules that checks share.

Whatever has not the right type is skipped; validation.py refuses it.
"""

import math
from collections.abc import Iterator
from typing import Any

from carriersim.faults import Fault, KeyPath
from carriersim.yamlfile import Document

SCATTERING: KeyPath = ("scattering",)
SIDES: tuple[KeyPath, ...] = (("contacts", "left"), ("contacts", "right"))
MECHANISMS: KeyPath = ("relaxation", "mechanisms")


def number(document: Document, path: KeyPath, default: float | None = None) -> float | None:
    """Return the finite number at a key path; the default where there is none, else None."""
    value = document.get(path)
    if value is None:
        return default
    if isinstance(value, bool) or not isinstance(value, int | float):
        return None
    return float(value) if math.isfinite(value) else None


def length_of(document: Document) -> float | None:
    length = number(document, ("channel", "length_nm"))
    return length if length is not None and length > 0 else None


def given(document: Document, path: KeyPath) -> bool:
    return document.get(path) is not None


def mappings(document: Document, path: KeyPath) -> Iterator[KeyPath]:
    entries = document.get(path)
    for index, entry in enumerate(entries if isinstance(entries, list) else ()):
        if isinstance(entry, dict):
            yield (*path, index)


def exclusive(document: Document, base: KeyPath, names: tuple[str, str]) -> Iterator[Fault]:
    if all(given(document, (*base, name)) for name in names):
        why = f"{names[0]} is given too"
        yield document.fault((*base, names[1]), f"one of {names[0]} and {names[1]}", why)


def exactly_one(document: Document, base: KeyPath, names: tuple[str, str]) -> Iterator[Fault]:
    yield from exclusive(document, base, names)
    if not any(given(document, (*base, name)) for name in names):
        allowed = f"exactly one of {names[0]} and {names[1]}"
        yield document.message(base, f"a key is missing; allowed: {allowed}", allowed)


def is_coupled(document: Document, probe: KeyPath) -> bool:
    coupling = number(document, (*probe, "coupling"), 0.0)
    return coupling is not None and coupling > 0


def relaxes(document: Document) -> bool:
    """Whether energies mix: a mechanism of relaxation or a coupled probe."""
    coupled = any(is_coupled(document, probe) for probe in mappings(document, ("probes",)))
    return coupled or any(mappings(document, MECHANISMS))


def all_tables(value: Any, path: KeyPath) -> Iterator[KeyPath]:
    """Key paths of the tables of energy anywhere in a value that stands at a path."""
    if isinstance(value, dict):
        if isinstance(value.get("energy_meV"), list) and isinstance(value.get("value"), list):
            yield path
        for key, inner in value.items():
            if isinstance(inner, dict | list):
                yield from all_tables(inner, (*path, key))
    elif isinstance(value, list):
        for index, inner in enumerate(value):
            if isinstance(inner, dict | list):
                yield from all_tables(inner, (*path, index))
