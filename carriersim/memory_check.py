"""The memory that a relaxing run would need: refused where no machine would hold it."""

import math
from collections.abc import Iterator
from types import SimpleNamespace

from carriersim.faults import Fault, KeyPath, found
from carriersim.reading import (
    MECHANISMS,
    SCATTERING,
    SIDES,
    given,
    length_of,
    mappings,
    number,
    relaxes,
)
from carriersim.schema import MAX_POINTS
from carriersim.yamlfile import Document

# Memory of a relaxing run in its longest form, 14 windows and as many for dI/dV. Measured at 402
# bins x 1250 cells x 64 batches, 2 threads: after 3 windows 0.4 GB with a bath, 0.7 GB with
# phonons; each window more adds 16 bytes for every bin and cell (the last three 128 besides, for
# the errors of occupations) and 64 for every cell and batch.
MOST_GB = 4.0
_BYTES_BIN_CELL, _BYTES_BATCH_CELL = 2000.0, 2000.0
_BYTES_PENDING = 8.0  # for every bin, cell and batch: tallies that wait to be added up
_MOST_AUTOMATIC = 400  # bins, unless a phonon asks for more
_COUNTABLE = 1e12  # bins; from here on energies have nothing to do with each other


def memory_faults(document: Document) -> Iterator[Fault]:
    """Relaxing runs hold tables of energy bins x cells: refuse what no memory would hold."""
    cells = number(document, ("simulation", "cells"), 200)
    batches = number(document, ("simulation", "batches"), 64)
    if not relaxes(document) or cells is None or batches is None or not 1 <= cells <= 100_000:
        return
    bins, phonon = energy_bins(document)
    if bins is None:
        return
    asked: KeyPath = ("simulation", "energy_bins")
    if not bins < _COUNTABLE:
        allowed = "contacts and mechanisms whose energies are of comparable size"
        message = f"no number of bins covers the energies of this scenario; allowed: {allowed}"
        yield document.message(phonon or ("contacts", "bias_mV"), message, allowed)
        return
    size = cells + cuts(document)  # every piece between two cuts is rounded to whole cells
    of_bin = _BYTES_BIN_CELL + _BYTES_PENDING * batches
    of_cell = bins * of_bin + batches * _BYTES_BATCH_CELL
    if size * of_cell <= MOST_GB * 1e9:
        return
    origin = "" if given(document, asked) else ", automatic"
    why = (
        f"simulation.cells ({size:.0f} with cuts at scatterers and probes) times "
        f"simulation.energy_bins ({bins:.6g}{origin}) need up to {1e-9 * size * of_cell:.3g} GB "
        f"of memory with relaxation and {batches:.0f} batches"
    )
    choices = {
        "cells with so many bins": MOST_GB * 1e9 / of_cell,
        "bins with so many cells": (MOST_GB * 1e9 / size - batches * _BYTES_BATCH_CELL) / of_bin,
    }
    alone = given(document, asked) and not given(document, ("simulation", "cells"))
    path = asked if alone else ("simulation", "cells")
    if phonon and bins > 2 * (number(document, asked) or _MOST_AUTOMATIC):
        path, why = phonon, f"found {found(document.get(phonon))}; no bin may be wider, and {why}"
        del choices["bins with so many cells"]
    allowed = " or ".join(f"{int(most)} {what}" for what, most in choices.items() if most >= 1)
    allowed = f"at most {allowed} ({MOST_GB:g} GB)" if allowed else "fewer simulation.batches"
    if path == phonon:
        allowed = f"a larger energy of the phonon, or {allowed}"
    yield document.message(path, f"{why}; allowed: {allowed}", allowed)


def cuts(document: Document) -> int:
    """Cells that cuts of the channel may add, at most."""
    count = 0.0
    for path in ((*SCATTERING, "points"), ("probes",)):
        count += sum(1 for _ in mappings(document, path))
    count += 2 * sum(1 for _ in mappings(document, (*SCATTERING, "sections")))
    for group in mappings(document, (*SCATTERING, "random")):
        if document.get((*group, "drawn")) is True:
            continue  # its scatterers are among the points
        low = number(document, (*group, "from_nm"), 0.0) or 0.0
        high = number(document, (*group, "to_nm"), length_of(document)) or 0.0
        density = number(document, (*group, "density_per_um"), 0.0) or 0.0
        count += max(density * (high - low) / 1000, 0.0)
        count += max(number(document, (*group, "count"), 0.0) or 0.0, 0.0)
    return int(min(count, MAX_POINTS + 1e5)) + 1 if count else 0


def energy_bins(document: Document) -> tuple[float | None, KeyPath | None]:
    """Energy bins that the run will take, and the key of the phonon that sets their width.

    None if the document's faults leave it open, inf if no number of bins would do.
    """
    common = number(document, ("contacts", "temperature_K"))
    left, right = (number(document, (*side, "temperature_K"), common) for side in SIDES)
    bath = number(document, ("relaxation", "bath_temperature_K"), right)
    bias = number(document, ("contacts", "bias_mV"))
    asked = document.get(("simulation", "energy_bins"))
    kinds: list[SimpleNamespace] = []
    phonons: list[tuple[KeyPath, float | None]] = []
    for base in mappings(document, MECHANISMS):
        kinds.append(SimpleNamespace(kind=document.get((*base, "kind"))))
        if kinds[-1].kind == "optical_phonon":
            path = (*base, "energy_meV")
            phonons.append((path, number(document, path)))
    kelvin = (left, right, bath)
    valid = bias is not None and all(value is not None and value >= 0 for value in kelvin)
    valid = valid and all(value is not None and value > 0 for _, value in phonons)
    count = number(document, ("simulation", "energy_bins"), 1)
    if not valid or count is None or count < 1:
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
