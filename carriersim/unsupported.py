"""What the scenario file knows and this version does not compute yet."""

from carriersim.faults import Fault, KeyPath
from carriersim.reading import MECHANISMS, all_tables, mappings, relaxes
from carriersim.yamlfile import Document


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
    entries = list(mappings(document, MECHANISMS))
    phonons = any(document.get((*entry, "kind")) == "optical_phonon" for entry in entries)
    decide = phonons or any(
        any(all_tables(document.get(path), path)) for path in (("scattering",), ("contacts",))
    )
    for entry in entries:
        kind, direction = (document.get((*entry, key)) for key in ("kind", "direction"))
        if kind not in ("bath", "carriers"):
            continue
        if direction == "kept" or (direction is None and kind == "carriers"):
            path = entry if direction is None else (*entry, "direction")
            why = "this version relaxes carriers that keep their direction in d = 1 only"
            faults.append(document.fault(path, "direction: randomised, or d = 1", why))
        elif kind == "carriers" and decide:
            why = "this version has carriers with phonons or tables of energy in d = 1 only"
            faults.append(document.fault((*entry, "kind"), "bath, or d = 1", why))
    if decide and relaxes(document):
        faults += _driven_by_temperatures(document)
    return faults


def _driven_by_temperatures(document: Document) -> list[Fault]:
    """The response to a bias about a state that unequal temperatures drive."""
    common = document.get(("contacts", "temperature_K"))
    own = [document.get(("contacts", side, "temperature_K")) for side in ("left", "right")]
    left, right = (common if value is None else value for value in own)
    if document.get(("contacts", "bias_mV")) != 0 or left == right:
        return []
    why = "this version has bias 0 between unequal temperatures with relaxation in d = 1 only"
    return [document.fault(("contacts", "bias_mV"), "a bias that is not 0, or d = 1", why)]
