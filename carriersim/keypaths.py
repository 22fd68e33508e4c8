"""Changing a scenario document by key paths such as `scattering.points[0].transmission`."""

import re
from collections.abc import Mapping
from typing import Any

from pydantic import BaseModel

from carriersim.faults import Fault, KeyPath, found, key_text
from carriersim.validation import keys_at, unknown_key
from carriersim.yamlfile import Document

_NAME = r"[A-Za-z_][A-Za-z0-9_]*"
_INDEX = r"\[(?:0|[1-9][0-9]{0,8})\]"
_PATH = re.compile(rf"{_NAME}(?:{_INDEX})*(?:\.{_NAME}(?:{_INDEX})*)*")


def parse_key(text: str) -> KeyPath | None:
    """Parse a key path strictly; None if it is not one."""
    if not isinstance(text, str) or not _PATH.fullmatch(text):
        return None
    parts = re.findall(rf"{_NAME}|[0-9]+(?=\])", text)
    return tuple(int(part) if part.isdigit() else part for part in parts)


def plain(value: Any) -> Any:
    """Turn tuples, numpy numbers and arrays, and parts of a scenario into plain data."""
    if isinstance(value, BaseModel):
        return plain(value.model_dump(exclude_none=True))
    if isinstance(value, Mapping):
        return {str(key): plain(inner) for key, inner in value.items()}
    if isinstance(value, list | tuple):
        return [plain(inner) for inner in value]
    if value is None or isinstance(value, bool):
        return value
    if isinstance(value, int):
        # Beyond the range of floats: refused with the non-finite numbers.
        return int(value) if abs(value) < 10**300 else float("inf") * (1 if value > 0 else -1)
    for kind in (float, str):
        if isinstance(value, kind):
            return kind(value)
    return plain(value.tolist()) if hasattr(value, "tolist") else value


def change(document: Document, changes: Mapping[str, Any], model: type[BaseModel]) -> list[Fault]:
    """Set values by key path in a document, in place; None removes a key or a list's entry.

    Missing optional mappings are made. Returns a fault for each path that leads nowhere.
    """
    faults: list[Fault] = []
    shortened: list[KeyPath] = []
    for text, value in changes.items():
        path = parse_key(text)
        if path is None:
            message = f"not a key path; allowed: for example {_EXAMPLE}"
            faults.append(Fault(document.file, None, str(text), value, _EXAMPLE, message))
            continue
        owner, fault = _owner(document, path, model)
        if fault is not None:
            faults.append(fault)
            continue
        if value is None and isinstance(path[-1], str):
            owner.pop(path[-1], None)
        else:
            owner[path[-1]] = plain(value)
        if value is None and isinstance(path[-1], int):
            shortened.append(path[:-1])
        _forget_lines(document, path, keep=value is not None)
    for path in shortened:
        # Entries go last, so that the indices of all changes mean the list as it was.
        entries = document.get(path)
        if isinstance(entries, list):
            entries[:] = [entry for entry in entries if entry is not None]
            for index in range(len(entries) + 1):
                _forget_lines(document, (*path, index), keep=False)
    return faults


_EXAMPLE = "scattering.points[0].transmission"


def _owner(document: Document, path: KeyPath, model: type[BaseModel]) -> tuple[Any, Fault | None]:
    """Find the mapping or list that holds the last part of a key path."""
    node = document.data
    for depth, part in enumerate(path):
        here = path[:depth]
        if isinstance(part, int):
            if not isinstance(node, list) or part >= len(node):
                return None, _no_entry(document, here, path[: depth + 1], node)
        else:
            if not isinstance(node, dict):
                message = f"{key_text(here)} is no mapping: found {found(node)}"
                return None, _misled(document, path, message)
            if part not in keys_at(model, here):
                fault = unknown_key(document, model, path[: depth + 1])
                return None, _misled(document, path[: depth + 1], fault.message, fault.allowed)
        if depth == len(path) - 1:
            break
        if isinstance(part, str) and node.get(part) is None:
            if isinstance(path[depth + 1], int):
                node = []
                continue
            node[part] = {}
        node = node[part]
    return node, None


def _no_entry(document: Document, owner: KeyPath, path: KeyPath, node: Any) -> Fault:
    name = key_text(owner)
    if not isinstance(node, list):
        return _misled(document, path, f"{name} is no list: found {found(node)}")
    if not node:
        return _misled(document, path, f"no such entry; {name} is empty")
    allowed = f"{name}[0] to {name}[{len(node) - 1}]" if len(node) > 1 else f"{name}[0]"
    return _misled(document, path, f"no such entry; allowed: {allowed}", allowed)


def _misled(document: Document, path: KeyPath, message: str, allowed: str = "") -> Fault:
    return Fault(document.file, None, key_text(path), None, allowed, message)


def _forget_lines(document: Document, path: KeyPath, keep: bool) -> None:
    """A changed value stands in no line of the file; a removed one is where its mapping is."""
    if not document.lines:
        return
    size = len(path)
    for other in [other for other in document.lines if other[:size] == path]:
        del document.lines[other]
    if keep:
        document.lines[path] = None
