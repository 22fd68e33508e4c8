"""What the scenario file knows and this version does not compute yet."""

from carriersim.faults import Fault, KeyPath
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
    return faults
