"""Safe reading of YAML: plain data, the line of every key, and clean messages.

Only what a scenario needs is read: mappings, lists, text, numbers, true/false and null. The events
of the parser are turned into data by a loop with limits on size, depth and number of values, so a
hostile file costs a fraction of a second.
"""

import os
import re
import stat
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import yaml

from carriersim.faults import Fault, KeyPath, ScenarioError, found, key_text

MAX_BYTES = 2_000_000
MAX_DEPTH = 20
MAX_VALUES = 120_000  # 10 000 scatterers with all their keys take 90 000

_LOADER = getattr(yaml, "CSafeLoader", yaml.SafeLoader)
_UNPRINTABLE = re.compile("[^\t\n\r\x20-\x7e\x85\xa0-\ud7ff\ue000-\ufffd\U00010000-\U0010ffff]")
_INTEGER = re.compile(r"[-+]?(0|[1-9][0-9]*)")
# Unlike YAML 1.1 this takes 1e3 for a number; a leading zero (octal there) makes text.
_FLOAT = re.compile(
    r"[-+]?((0|[1-9][0-9]*)\.[0-9]*|\.[0-9]+|(0|[1-9][0-9]*)(?=[eE]))([eE][-+]?[0-9]+)?"
)
_WORDS: dict[str, Any] = {"": None, "~": None}
for _word, _value in (("null", None), ("true", True), ("false", False)):
    _WORDS |= {_word: _value, _word.title(): _value, _word.upper(): _value}
for _word, _value in ((".inf", "inf"), ("+.inf", "inf"), ("-.inf", "-inf"), (".nan", "nan")):
    _last = _word[-3:]
    for _form in (_last, _last.title(), _last.upper(), "NaN" if _last == "nan" else _last):
        _WORDS[_word[:-3] + _form] = float(_value)


@dataclass
class Document:
    """Plain data with the place of every key, to look things up and to report faults.

    `lines` maps key paths to line numbers (from 1); empty where the data came from no file.
    """

    file: str
    data: Any
    lines: dict[KeyPath, int] = field(default_factory=dict)

    def get(self, path: KeyPath) -> Any:
        """Return the value at a key path, None where there is none."""
        value = self.data
        for part in path:
            if isinstance(part, int):
                inside = isinstance(value, list) and 0 <= part < len(value)
            else:
                inside = isinstance(value, dict) and part in value
            if not inside:
                return None
            value = value[part]
        return value

    def line(self, path: KeyPath) -> int | None:
        """Return the line of a key path, or of the nearest thing around it; None if unknown."""
        for length in range(len(path), -1, -1):
            if path[:length] in self.lines:
                return self.lines[path[:length]]
        return None

    def fault(self, path: KeyPath, allowed: str, why: str = "") -> Fault:
        """Report the value found at a key path."""
        value = self.get(path)
        parts = [f"found {found(value)}"]
        parts += [why] if why else []
        parts += [f"allowed: {allowed}"] if allowed else []
        return self.message(path, "; ".join(parts), allowed)

    def message(self, path: KeyPath, message: str, allowed: str = "") -> Fault:
        """Report something about a key path in words of its own."""
        key = key_text(path)
        return Fault(self.file, self.line(path), key, self.get(path), allowed, message)


def read_file(path: str | os.PathLike) -> tuple[Document, list[Fault]]:
    """Read a YAML file of at most 2 MB; see `read`."""
    name = file_name(path)
    try:
        status = os.stat(path)
        if stat.S_ISDIR(status.st_mode):
            raise _refusal(name, "is a directory, not a scenario file")
        if not stat.S_ISREG(status.st_mode):
            raise _refusal(name, "is not a regular file")
        if status.st_size > MAX_BYTES:
            raise _too_large(name, status.st_size)
        with open(path, "rb") as stream:
            raw = stream.read(MAX_BYTES + 1)
    except FileNotFoundError:
        raise _refusal(name, "there is no such file") from None
    except PermissionError:
        raise _refusal(name, "cannot be read: permission denied") from None
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or error
        if isinstance(error, ScenarioError):
            raise
        raise _refusal(name, f"cannot be read: {reason}") from None
    try:
        text = raw.decode("utf-8")
    except UnicodeDecodeError as error:
        line = raw.count(b"\n", 0, error.start) + 1
        raise _refusal(name, f"is not UTF-8 text (byte {raw[error.start]:#04x})", line) from None
    return read(text, name)


def file_name(path: str | os.PathLike) -> str:
    """Return the name of a file in a form that can always be printed."""
    return os.fsdecode(path).encode("utf-8", "backslashreplace").decode("utf-8")


def default_name(file: str) -> str:
    """Return the name that a scenario gets from its file: the stem, printable."""
    stem = "".join(c if c.isprintable() else "_" for c in Path(file).stem)
    return stem.strip() or "scenario"


def read(text: str, file: str) -> tuple[Document, list[Fault]]:
    """Turn YAML text into a document whose top level is a mapping.

    Returns the document and the faults that leave the rest usable (duplicate keys).

    Raises:
        ScenarioError: too large, not YAML, empty, several documents, top level not a mapping,
            anchors, aliases, tags, keys that are not text, nested too deeply, too many values.
    """
    size = len(text) if len(text) > MAX_BYTES else len(text.encode("utf-8", "surrogatepass"))
    if size > MAX_BYTES:
        raise _too_large(file, size)
    document = _build(text.removeprefix("\ufeff"), file)
    data = document.data
    if data is None:
        raise _refusal(file, "is empty: a scenario is a mapping of keys to values")
    if not isinstance(data, dict):
        raise _refusal(
            file,
            f"found {found(data)} at the top level; allowed: a mapping such as 'channel: ...'",
        )
    return Document(file, data, document.lines), document.faults


def read_value(text: str) -> Any:
    """Parse one YAML value, as in `--set KEY=VALUE`.

    Raises:
        ScenarioError: not a YAML value.
    """
    builder = _build(text, "value")
    if builder.faults:
        raise ScenarioError(builder.faults)
    return builder.data


def scalar(text: str) -> Any:
    """Return the value of an unquoted YAML scalar: None, bool, int, float or text.

    Integers beyond the range of a float become infinite, to be refused with the non-finite numbers.
    """
    if text in _WORDS:
        return _WORDS[text]
    if _INTEGER.fullmatch(text):
        return int(text) if len(text) < 300 else float(text)
    if _FLOAT.fullmatch(text):
        return float(text)
    return text


def _refusal(file: str, message: str, line: int | None = None) -> ScenarioError:
    return ScenarioError([Fault(file, line, "", None, "", message)])


def _too_large(file: str, size: int) -> ScenarioError:
    return _refusal(
        file, f"is too large: {size / 1e6:.1f} MB; allowed: at most {MAX_BYTES / 1e6:g} MB"
    )


class _Builder:
    """Builds plain data from parser events; holds the open collections as a stack."""

    def __init__(self, file: str):
        self.file = file
        self.data: Any = None
        self.lines: dict[KeyPath, int] = {}
        self.faults: list[Fault] = []
        self.fatal: list[Fault] = []
        self._documents = 0
        self._values = 0
        # Per open collection: (container, its path). A mapping's current key is in _keys.
        self._stack: list[tuple[Any, KeyPath]] = []
        self._keys: list[str | None] = []
        self._skipped: list[bool] = []

    def take(self, event: Any) -> None:
        line = event.start_mark.line + 1
        if isinstance(event, yaml.ScalarEvent):
            self._count(line)
            self._check_marks(event, line)
            plain = event.style is None or event.style == ""
            if self._awaits_key():
                self._key(event.value, line)
            else:
                self._place(scalar(event.value) if plain else event.value, line)
        elif isinstance(event, yaml.CollectionStartEvent):
            self._count(line)
            self._check_marks(event, line)
            if self._awaits_key():
                raise _refusal(self.file, "a key must be text, not a mapping or list", line)
            self._open({} if isinstance(event, yaml.MappingStartEvent) else [], line)
        elif isinstance(event, yaml.CollectionEndEvent):
            self._stack.pop()
            self._keys.pop()
            self._skipped.pop()
        elif isinstance(event, yaml.AliasEvent):
            self._fatal(f"the alias *{event.anchor} is refused: write the value out", line)
            if self._awaits_key():
                self._key(event.anchor, line)
            else:
                self._place(None, line)
        elif isinstance(event, yaml.DocumentStartEvent):
            self._documents += 1
            if self._documents > 1:
                raise _refusal(self.file, "holds more than one YAML document", line)

    def _count(self, line: int) -> None:
        self._values += 1
        if self._values > MAX_VALUES:
            raise _refusal(self.file, f"holds more than {MAX_VALUES} values", line)

    def _check_marks(self, event: Any, line: int) -> None:
        if event.anchor is not None:
            self._fatal(f"the anchor &{event.anchor} is refused: write values out", line)
        if event.tag not in (None, "!"):
            self._fatal(f"the tag {event.tag} is refused: write plain values", line)

    def _fatal(self, message: str, line: int) -> None:
        self.fatal.append(Fault(self.file, line, "", None, "", message))
        if len(self.fatal) >= 20:
            raise _refusal(self.file, "holds too many anchors, aliases and tags", line)

    def _awaits_key(self) -> bool:
        return bool(self._stack) and isinstance(self._stack[-1][0], dict) and self._keys[-1] is None

    def _key(self, key: str, line: int) -> None:
        container, path = self._stack[-1]
        self._keys[-1] = key
        self._skipped[-1] = key in container
        if key in container:
            first = self.lines[(*path, key)]
            message = f"duplicate key: it stands in line {first} already"
            place = key_text((*path, key))
            self.faults.append(Fault(self.file, line, place, container[key], "", message))
            if len(self.faults) >= 1000:
                raise _refusal(self.file, "holds too many duplicate keys", line)
        else:
            self.lines.setdefault((*path, key), line)
            container[key] = None

    def _place(self, value: Any, line: int) -> KeyPath:
        """Put a value into the open collection (the first of duplicate keys stays)."""
        if not self._stack:
            self.data = value
            self.lines[()] = line
            return ()
        container, path = self._stack[-1]
        if isinstance(container, list):
            path = (*path, len(container))
            container.append(value)
            self.lines.setdefault(path, line)
            return path
        key = self._keys[-1]
        self._keys[-1] = None
        if not self._skipped[-1]:
            container[key] = value
        return (*path, key)

    def _open(self, container: Any, line: int) -> None:
        if len(self._stack) >= MAX_DEPTH:
            raise _refusal(self.file, f"is nested more than {MAX_DEPTH} levels deep", line)
        path = self._place(container, line)
        self._stack.append((container, path))
        self._keys.append(None)
        self._skipped.append(False)


def _build(text: str, file: str) -> _Builder:
    """Feed all events of a text to a builder; what stops it is raised with all found before."""
    builder = _Builder(file)
    try:
        _feed(builder, text)
    except ScenarioError as error:
        raise ScenarioError([*builder.fatal, *builder.faults, *error.faults]) from None
    if builder.fatal:
        raise ScenarioError([*builder.fatal, *builder.faults])
    return builder


def _feed(builder: _Builder, text: str) -> None:
    if bad := _UNPRINTABLE.search(text):
        line = text.count("\n", 0, bad.start()) + 1
        raise _refusal(builder.file, f"holds the control character {bad.group()!r}", line)
    loader = _LOADER(text)
    try:
        while loader.check_event():
            builder.take(loader.get_event())
    except yaml.MarkedYAMLError as error:
        mark = error.problem_mark or error.context_mark
        lines = text.rstrip("\n").split("\n")
        line = None if mark is None else min(mark.line + 1, len(lines))
        reason = ", ".join(part for part in (error.context, error.problem) if part)
        if line is not None and lines[line - 1].lstrip(" ").startswith("\t"):
            reason += ": indent with spaces, not tabs"
        raise _refusal(builder.file, f"is not valid YAML: {reason}", line) from None
    except yaml.YAMLError as error:
        raise _refusal(builder.file, f"is not valid YAML: {error}") from None
    finally:
        loader.dispose()
