"""Writing plain data as YAML that people like to read and that reads back to the same values."""

import re
from typing import Any

from carriersim.yamlfile import scalar

_WIDTH = 100
_PLAIN = re.compile(r"[A-Za-z][A-Za-z0-9_.-]*( [A-Za-z0-9_.-]+)*")
_WORDS_ELSEWHERE = {"y", "n", "yes", "no", "on", "off", "true", "false", "null"}


def to_yaml(data: dict[str, Any]) -> str:
    """Write a mapping as YAML; numbers read back to the same bits.

    Sections are written in blocks, small inner mappings and lists of numbers in one line.
    """
    return "".join(f"{line}\n" for line in _mapping(data, 0))


def _mapping(data: dict[str, Any], indent: int) -> list[str]:
    lines: list[str] = []
    for key, value in data.items():
        lines += _entry(f"{' ' * indent}{key}:", value, indent)
    return lines


def _entry(head: str, value: Any, indent: int) -> list[str]:
    if isinstance(value, dict) and value and (indent == 0 or not _fits(head, value)):
        return [head, *_mapping(value, indent + 2)]
    if isinstance(value, list) and value:
        if any(isinstance(entry, dict) for entry in value):
            return [head, *(line for entry in value for line in _item(entry, indent + 2))]
        if not _fits(head, value):
            return _wrapped(head, value, indent + 2)
    return [f"{head} {_flow(value)}"]


def _item(value: dict[str, Any], indent: int) -> list[str]:
    head = f"{' ' * indent}-"
    # A point with two full-length numbers may pass the width: one line for each stays readable.
    if not any(isinstance(inner, dict | list) for inner in value.values()) or _fits(head, value):
        return [f"{head} {_flow(value)}"]
    lines = _mapping(value, indent + 2)
    return [f"{head} {lines[0].lstrip()}", *lines[1:]]


def _wrapped(head: str, values: list[Any], indent: int) -> list[str]:
    lines, line = [f"{head} ["], " " * indent
    for value in values:
        word = f"{_flow(value)}, "
        if len(line) + len(word) > _WIDTH and line.strip():
            lines.append(line.rstrip())
            line = " " * indent
        line += word
    return [*lines, f"{line.rstrip().removesuffix(',')}]"]


def _fits(head: str, value: Any) -> bool:
    return len(head) + 1 + len(_flow(value)) <= _WIDTH


def _flow(value: Any) -> str:
    if isinstance(value, dict):
        return "{" + ", ".join(f"{key}: {_flow(inner)}" for key, inner in value.items()) + "}"
    if isinstance(value, list):
        return "[" + ", ".join(map(_flow, value)) + "]"
    if value is None:
        return "null"
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, float):
        text = repr(value)
        # Other readers take 1e+22 for text.
        return text.replace("e", ".0e") if "e" in text and "." not in text else text
    return _text(value) if isinstance(value, str) else str(value)


def _text(value: str) -> str:
    plain = _PLAIN.fullmatch(value) and value.lower() not in _WORDS_ELSEWHERE
    if plain and isinstance(scalar(value), str):
        return value
    return '"' + "".join(map(_escaped, value)) + '"'


def _escaped(character: str) -> str:
    if character in '"\\':
        return "\\" + character
    if character.isprintable():
        return character
    code = ord(character)
    return (
        f"\\x{code:02x}" if code < 256 else f"\\u{code:04x}" if code < 65536 else f"\\U{code:08x}"
    )
