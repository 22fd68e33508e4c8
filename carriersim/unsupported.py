"""What the scenario file knows and this version does not compute yet."""

from carriersim.faults import Fault, KeyPath
from carriersim.yamlfile import Document

_MECHANISMS: KeyPath = ("relaxation", "mechanisms")


def refuse_unsupported(document: Document) -> list[Fault]:
    """Refuse each key that asks for more than this version computes, in one sentence."""
    faults: list[Fault] = []

    def refuse(path: KeyPath, allowed: str, why: str) -> None:
        faults.append(document.fault(path, allowed, f"this version {why}"))

    if document.get(("noise",)) is True:
        refuse(("noise",), "false", "does not compute noise")
    if document.get(("simulation", "fano_error")) is not None:
        refuse(("simulation", "fano_error"), "no such limit", "does not compute noise")
    if document.get(("channel", "dimension")) in (2, 3):
        faults += _with_directions(document)
    return faults


def _with_directions(document: Document) -> list[Fault]:
    """Relaxation that needs more of the directions than this version keeps."""
    faults: list[Fault] = []
    mechanisms = document.get(_MECHANISMS)
    entries = mechanisms if isinstance(mechanisms, list) else []
    kinds = [entry.get("kind") if isinstance(entry, dict) else None for entry in entries]
    decide = "optical_phonon" in kinds or _has_tables(document.get(("scattering",)))
    decide = decide or _has_tables(document.get(("contacts",)))
    for index, (entry, kind) in enumerate(zip(entries, kinds, strict=True)):
        if kind not in ("bath", "carriers"):
            continue
        direction = entry.get("direction")
        path: KeyPath = (*_MECHANISMS, index, "direction")
        if direction == "kept" or (direction is None and kind == "carriers"):
            if direction is None:
                path = (*_MECHANISMS, index)
            why = "this version relaxes carriers that keep their direction in d = 1 only"
            faults.append(document.fault(path, "direction: randomised, or d = 1", why))
        elif kind == "carriers" and decide:
            why = "this version has carriers with phonons or tables of energy in d = 1 only"
            faults.append(document.fault((*_MECHANISMS, index, "kind"), "bath, or d = 1", why))
    return [*faults, *_driven_by_temperatures(document, decide and bool(entries))]


def _driven_by_temperatures(document: Document, decide: bool) -> list[Fault]:
    """The response to a bias about a state that unequal temperatures drive."""
    left, right = (("contacts", side, "temperature_K") for side in ("left", "right"))
    common = document.get(("contacts", "temperature_K"))
    own = [document.get(path) for path in (left, right)]
    kelvin = [common if value is None else value for value in own]
    if not decide or document.get(("contacts", "bias_mV")) != 0 or kelvin[0] == kelvin[1]:
        return []
    why = "this version has bias 0 between unequal temperatures with relaxation in d = 1 only"
    return [document.fault(("contacts", "bias_mV"), "a bias that is not 0, or d = 1", why)]


def _has_tables(value: object) -> bool:
    if isinstance(value, dict):
        return "energy_meV" in value or any(_has_tables(inner) for inner in value.values())
    return isinstance(value, list) and any(_has_tables(inner) for inner in value)
