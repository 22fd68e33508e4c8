"""What the scenario file knows and this version does not compute yet."""

from carriersim.faults import Fault, KeyPath
from carriersim.yamlfile import Document


def refuse_unsupported(document: Document) -> list[Fault]:
    """Refuse each key that asks for more than this version computes, in one sentence."""
    faults: list[Fault] = []

    def refuse(path: KeyPath, allowed: str, why: str) -> None:
        faults.append(document.fault(path, allowed, f"this version {why}"))

    if document.get(("channel", "dimension")) in (2, 3):
        refuse(("channel", "dimension"), "1", "computes d = 1 only")
    mechanisms = document.get(("relaxation", "mechanisms"))
    for index in range(len(mechanisms) if isinstance(mechanisms, list) else 0):
        path = ("relaxation", "mechanisms", index)
        refuse(path, "no mechanisms", "computes elastic channels only, without relaxation")
    probes = document.get(("probes",))
    for index in range(len(probes) if isinstance(probes, list) else 0):
        path = ("probes", index, "coupling")
        coupling = document.get(path)
        if isinstance(coupling, int | float) and 0 < coupling <= 1 and coupling is not True:
            refuse(path, "0", "computes uncoupled probes only")
    if document.get(("noise",)) is True:
        refuse(("noise",), "false", "does not compute noise")
    if document.get(("simulation", "fano_error")) is not None:
        refuse(("simulation", "fano_error"), "no such limit", "does not compute noise")
    if document.get(("simulation", "heat_share_error")) is not None:
        why = "does not compute the heat that goes to the lattice"
        refuse(("simulation", "heat_share_error"), "no such limit", why)
    return faults
