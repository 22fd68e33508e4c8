"""What is wrong with a scenario, said so that a person can mend it."""

import difflib
import math
from collections.abc import Iterable
from dataclasses import dataclass
from typing import Any

KeyPath = tuple[str | int, ...]

_MAX_LINES = 100
_MAX_SHOWN = 60


@dataclass(frozen=True)
class Fault:
    """One thing that is wrong with a scenario.

    `line` counts from 1 and is None where there is no file; `key` is empty for a fault of the whole
    file; `value` is what was found; `allowed` says what may stand there (may be empty).
    """

    file: str
    line: int | None
    key: str
    value: Any
    allowed: str
    message: str

    def __str__(self) -> str:
        place = self.file if self.line is None else f"{self.file}, line {self.line}"
        return f"{place}: {self.key}: {self.message}" if self.key else f"{place}: {self.message}"


class ScenarioError(ValueError):
    """A scenario that cannot be used. `faults` holds everything that is wrong with it."""

    def __init__(self, faults: Iterable[Fault]):
        self.faults = tuple(faults)
        super().__init__(self.faults)

    def __str__(self) -> str:
        lines = [str(fault) for fault in self.faults[:_MAX_LINES]]
        if len(self.faults) > _MAX_LINES:
            lines.append(f"... and {len(self.faults) - _MAX_LINES} more faults")
        return "\n".join(lines)


def key_text(path: KeyPath) -> str:
    """Write a key path: ("points", 0, "transmission") -> "points[0].transmission"."""
    text = ""
    for part in path:
        if isinstance(part, int):
            text += f"[{part}]"
        else:
            text += f".{_cut(part)}" if text else _cut(part)
    return text


def found(value: Any) -> str:
    """Describe a value found in a scenario, shortly and as it would be written in YAML."""
    if value is None:
        return "nothing (the key has no value)"
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, str):
        return _found_text(value)
    if isinstance(value, float) and not math.isfinite(value):
        word = ".nan" if math.isnan(value) else ".inf" if value > 0 else "-.inf"
        return f"{word}, not a finite number"
    if isinstance(value, list | tuple):
        return f"a list of {len(value)} {'entry' if len(value) == 1 else 'entries'}"
    if isinstance(value, dict):
        keys = _cut(", ".join(map(str, value)))
        return f"a mapping with the keys {keys}" if value else "an empty mapping"
    return _cut(repr(value))


def _found_text(value: str) -> str:
    shown = f"{_cut(value)!r}"
    bare = value.strip()
    if bare.lower() in ("inf", "+inf", "-inf", "infinity", "nan"):
        return f"{shown}, not a finite number"
    if bare.lower() in ("yes", "no", "on", "off"):
        return f"{shown} (text: only true and false are booleans)"
    if not bare.isascii():
        return f"{shown} (text)"
    try:
        float(bare.replace(",", "."))
    except ValueError:
        return f"{shown} (text)"
    if "," in bare:
        return f"{shown} (text: the decimal mark is a point)"
    if "_" in bare:
        return f"{shown} (text: write numbers without _)"
    if bare.lstrip("+-").startswith("0") and bare.lstrip("+-").isdigit() and len(bare) > 1:
        return f"{shown} (text: write it without quotes and leading zeros)"
    return f"{shown} (text: write the number without quotes)"


def _cut(text: str) -> str:
    return text if len(text) <= _MAX_SHOWN else text[: _MAX_SHOWN - 3] + "..."


def nearest(word: str, known: Iterable[str]) -> str | None:
    """Return the known word most like `word`, or None if none is like it."""
    if len(word) > _MAX_SHOWN:
        return None
    by_lower = {name.lower(): name for name in known}
    close = difflib.get_close_matches(word.lower(), by_lower, n=1, cutoff=0.55)
    return by_lower[close[0]] if close else None
